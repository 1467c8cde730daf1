from __future__ import annotations

import errno
import pickle

import numpy as np
import pytest
import tifffile

from layerscan.errors import InputError
from layerscan.readers.images import from_array
from layerscan.records import Boundary, Detection, ImageSource, Measurement, PixelSize, Trace
from layerscan.study.plan import read_plan
from layerscan.study.tasks import list_tasks
from layerscan.study.work import OVERLAY_POINTS, Step, draw_thumbnail, run_unit

PLAN = """
[measure]
pixel_size = "5 nm"
[predict]
dark = "n=1.5"
bright = "n=1"
[[images]]
file = "a.tif"
specimen = "1"
"""


def make_unit(folder, image):
    if isinstance(image, bytes):
        (folder / "a.tif").write_bytes(image)
    else:
        tifffile.imwrite(folder / "a.tif", image)
    (folder / "STUDY.toml").write_text(PLAN)
    (unit,) = list_tasks(read_plan(folder), None, folder).units
    return pickle.loads(pickle.dumps(unit))  # as it reaches a worker


def test_an_image_without_layers_is_done_and_nothing_is_predicted_from_it(tmp_path):
    # INTERFACE: the document is written with layered false; a constant image is such a case
    result = run_unit(make_unit(tmp_path, np.full((64, 64), 7, np.uint8)))
    measured, predicted = result.results
    assert (measured.state, measured.document["layered"], measured.layers) == ("done", False, ())
    assert (predicted.state, predicted.by_chance) == ("skipped", False)
    assert "no layered structure was found" in predicted.reason
    assert result.versions["layerscan"]


def test_an_unreadable_image_fails_for_good_and_the_rest_is_skipped(tmp_path):
    # errors raised on purpose would come again: they are not tried again
    measured, predicted = run_unit(make_unit(tmp_path, b"II*\0 this is no image")).results
    assert (measured.state, measured.failure, measured.by_chance) == ("failed", "unusable", False)
    assert "a.tif" in measured.reason
    assert (predicted.state, predicted.reason.startswith("measure: ")) == ("skipped", True)


def test_a_file_that_changes_meanwhile_is_a_failure_by_chance(tmp_path):
    # the hash was taken before the run: another run would measure the new file
    unit = make_unit(tmp_path, np.full((64, 64), 7, np.uint8))
    tifffile.imwrite(tmp_path / "a.tif", np.full((64, 64), 8, np.uint8))
    measured, predicted = run_unit(unit).results
    assert (measured.state, measured.by_chance, predicted.by_chance) == ("failed", True, True)
    assert "changed while the study was running" in measured.reason


@pytest.mark.parametrize("wrapped", [False, True])
def test_a_full_disk_is_recognised_through_what_wraps_it(tmp_path, monkeypatch, wrapped):
    # documents raise InputError from OSError(ENOSPC): it must not count as a bad image
    def full(*args, **kwargs):
        error = OSError(errno.ENOSPC, "No space left on device")
        if wrapped:
            raise InputError("cannot be written") from error
        raise error

    monkeypatch.setattr("layerscan.documents.write_measurement", full)
    assert run_unit(make_unit(tmp_path, np.full((64, 64), 7, np.uint8))).disk_full


def test_a_step_can_be_sent_to_a_worker():
    # pickled with every field, slots or not
    step = Step(key="k", kind="spectrum", path="p", colours=(("D65", 2),))
    assert pickle.loads(pickle.dumps(step)) == step


def test_thumbnails_are_small_and_their_lines_lie_where_the_boundaries_do():
    # a boundary along row 500 of 1000 (its pixels' centres) lies at (500 + 0.5) / 4 of a thumbnail of blocks of 4
    rng = np.random.default_rng(1)
    image = from_array(rng.integers(0, 255, (1000, 1200)).astype(float), pixel_size_nm=2.0)
    station = np.arange(1200)
    trace = Trace(
        station=station,
        row_px=np.full(1200, 500.0),
        column_px=station.astype(float),
        depth_nm=np.zeros(1200),
        u_depth_nm=np.ones(1200),
    )
    boundaries = tuple(
        Boundary(index=i, depth_nm=0.0, u_nm=1.0, trace=trace, flags=flags, edited=edited)
        for i, (flags, edited) in enumerate([((), False), (("termination",), False), ((), True)])
    )
    found = Measurement(
        version="1",
        settings={},
        flags=(),
        image=ImageSource(
            path=None,
            sha256=None,
            page=0,
            shape=(1000, 1200),
            pixel_size=PixelSize(row_nm=2.0, column_nm=2.0, u_relative=None, source="given"),
        ),
        structure="lamellae",
        layered=True,
        periodic=False,
        detection=Detection(layered=True, periodic=False, statistic=None, p_value=None, region=(0, 0, 400, 800)),
        boundaries=boundaries,
    )
    picture, extras = draw_thumbnail(image, found)
    assert len(picture) < 40_000  # noise compresses worst
    assert (extras["width_px"], extras["height_px"], extras["image_px_per_px"]) == (300, 250, 4.0)
    assert extras["pixel_size_nm"] == 8.0
    assert [kind for kind, _ in extras["lines"]] == ["boundary", "doubtful", "edited"]
    rows = {row for _, points in extras["lines"] for row, _ in points}
    assert rows == {round(500.5 / 4, 1)}
    assert sum(len(points) for _, points in extras["lines"]) <= OVERLAY_POINTS
    assert ["used", 0.0, 0.0, 100.0, 200.0, "measured here"] in extras["areas"]
