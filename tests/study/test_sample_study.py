from __future__ import annotations

import csv
from pathlib import Path

import pytest

from layerscan.study import session
from layerscan.study.notebook import open_study
from layerscan.study.plan import read_plan

SAMPLES = Path(__file__).parents[2] / "sample_images"


def known_periods() -> dict[str, float]:
    with open(SAMPLES / "table.csv", newline="") as stream:
        return {row["image"]: float(row["known_period_nm"]) for row in csv.DictReader(stream)}


def test_the_sample_study_is_complete(tmp_path):
    # issue: "Sample study: the two invented lots of sample_images/, several specimens each, run by one README line"
    plan = read_plan(SAMPLES)
    assert {image.group for image in plan.images} == {"nacre", "film"}
    assert {image.name for image in plan.images} == set(known_periods())
    assert plan.problems == ()
    specimens = {(image.group, image.specimen) for image in plan.images}
    assert {(spectrum.group, spectrum.specimen) for spectrum in plan.spectra} == specimens
    found = session.check_study(SAMPLES, out=tmp_path)
    assert (found.to_measure, found.to_predict, found.to_compare, found.to_read) == (6, 6, 6, 6)
    assert list(tmp_path.iterdir()) == []


@pytest.mark.slow
def test_the_sample_study_finds_what_its_images_were_drawn_with(tmp_path):
    # sample_images/table.csv: the true mean period of each image; u covers it at k = 3
    outcome = session.run_study(SAMPLES, out=tmp_path, workers=2)
    assert (outcome.done, outcome.failures, outcome.exit_code) == (6, (), 0)
    study = open_study(tmp_path)
    known = known_periods()
    for row in study.images.to_dict("records"):
        assert row["period_nm"] == pytest.approx(known[row["path"]], abs=3 * row["u_period_nm"])
    drift = study.summarise().drift[0]
    assert drift.group == "film"
    assert drift.slope == pytest.approx((200.09 - 167.69) / 1.0, rel=0.05)
    decisions = {name: decision for _, name, decision in outcome.decisions}
    assert decisions["period"] == "pass"
