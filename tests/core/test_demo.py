"""The demo on two of its samples: the known values come back, and the page and documents are there."""

import csv
import json

import pytest

from layerscan import demo, workflow
from layerscan.errors import InputError


@pytest.fixture(scope="module")
def ran(tmp_path_factory):
    """The demo's folder after a run on the first sample of each lot."""
    folder = tmp_path_factory.mktemp("demo")
    samples = {sample.lot: sample for sample in reversed(demo.list_samples(demo.find_samples()))}
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(demo, "list_samples", lambda _: tuple(samples.values()))
        page = workflow.run_demo(folder)
    return folder, page, tuple(samples.values())


def test_the_demo_leaves_documents_figures_and_a_page(ran):
    folder, page, samples = ran
    text = page.read_text(encoding="utf-8")
    for sample in samples:
        here = folder / sample.image.removesuffix(".tif")
        for part in ("measurement", "prediction", "comparison"):
            assert (here / part / f"{part}.json").is_file()
            assert (here / part / "figure.svg").is_file()
        assert sample.specimen in text
    assert "invented" in text
    assert "accredited" in text


def test_the_demo_finds_what_was_drawn(ran):
    # the drawing program's own truth, in the table beside the images
    folder, _, samples = ran
    with open(demo.find_samples() / "table.csv", newline="", encoding="utf-8") as stream:
        known = {row["image"]: row for row in csv.DictReader(stream)}
    for sample in samples:
        document = json.loads(
            (folder / sample.image.removesuffix(".tif") / "measurement" / "measurement.json").read_text()
        )
        truth = known[sample.image]
        assert document["period_nm"]["mean"] == pytest.approx(float(truth["known_period_nm"]), rel=2e-3)
        assert document["dark_nm"]["mean"] == pytest.approx(float(truth["known_dark_nm"]), abs=2.0)
        assert document["bright_nm"]["mean"] == pytest.approx(float(truth["known_bright_nm"]), rel=0.01)


def test_a_document_of_the_demo_can_be_run_again(ran):
    folder, _, samples = ran
    here = folder / samples[0].image.removesuffix(".tif")
    for part in ("measurement", "prediction", "comparison"):
        answer = workflow.verify(here / part / f"{part}.json")
        assert answer.equal, answer.changes[:5]


def test_says_where_the_demo_cannot_write(tmp_path):
    (tmp_path / "taken").write_text("")
    with pytest.raises(InputError, match="cannot be written"):
        workflow.run_demo(tmp_path / "taken")
