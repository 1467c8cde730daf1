"""What inspect says in plain words."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
import tifffile

from layerscan.readers.images import from_array, open_image
from layerscan.readers.inspection import inspect_image
from layerscan.records import FLAGS, Exclusion

RAMP = np.tile(np.arange(10, 74, dtype=np.uint8), (40, 1))


def test_unknown_pixel_size_says_how_to_give_one():
    # aim: an error or advice that says how to give one, never a default
    found = inspect_image(from_array(RAMP, pixel_size_nm=None))
    assert found.image.pixel_size is None
    assert found.field_of_view_nm is None
    assert any("--pixel-size '2.5 nm'" in line for line in found.advice)


def test_field_of_view_and_extremes():
    # rows x row size, columns x column size
    found = inspect_image(from_array(RAMP, pixel_size_nm=(2.0, 3.0)))
    assert found.field_of_view_nm == (80.0, 192.0)
    assert (found.minimum, found.maximum) == (10.0, 73.0)
    assert set(found.flags) == {"calibration_uncertainty_unknown", "anisotropic_pixels"}
    assert set(found.flags) <= set(FLAGS)


def test_known_uncertainty_needs_no_advice():
    # nothing to complain about
    found = inspect_image(from_array(RAMP, pixel_size_nm=2.0, u_relative=0.01))
    assert found.flags == ()
    assert found.advice == ()


def test_excluded_regions_do_not_count():
    # extremes and saturation are those of the specimen
    page = RAMP.copy()
    page[30:] = 255
    found = inspect_image(
        from_array(
            page,
            pixel_size_nm=2.0,
            u_relative=0.01,
            excluded=[Exclusion(region=(30, 0, 40, 64), reason="information banner")],
        )
    )
    assert found.maximum == 73.0
    assert found.saturated_fraction == 0.0
    assert found.flags == ("banner_excluded",)
    assert any("Rows 30 to 39" in line for line in found.advice)


@pytest.mark.parametrize(("dtype", "top"), [(np.uint8, 255), (np.uint16, 65535), (np.float32, 1000)])
def test_saturation(dtype, top):
    # by construction: a quarter of the pixels at the end of the range
    page = RAMP.astype(dtype)
    page[:10] = top
    found = inspect_image(from_array(page, pixel_size_nm=2.0, u_relative=0.01))
    assert found.saturated_fraction == 0.25
    assert found.flags == ("saturated",)


def test_holes_and_constant_image():
    # NaN is no value; a constant image cannot be measured
    page = RAMP.astype(np.float32)
    page[0, 0] = np.nan
    assert "holes_ignored" in inspect_image(from_array(page, pixel_size_nm=2.0)).flags
    constant = inspect_image(from_array(np.ones((40, 40)), pixel_size_nm=2.0))
    assert any("same value" in line for line in constant.advice)


def test_nothing_left():
    # everything excluded
    everything = Exclusion(region=(0, 0, 40, 64), reason="border")
    found = inspect_image(from_array(RAMP, pixel_size_nm=2.0, excluded=[everything]))
    assert (found.minimum, found.maximum, found.saturated_fraction) == (None, None, None)
    assert any("No usable pixel" in line for line in found.advice)


def test_pages_of_a_file(tmp_path):
    # the reader of one page is told of the others
    with tifffile.TiffWriter(tmp_path / "a.tif") as writer:
        for _ in range(3):
            writer.write(RAMP, contiguous=False)
    found = inspect_image(open_image(tmp_path / "a.tif", pixel_size_nm=2.0, page=1))
    assert (found.page_count, found.image.page) == (3, 1)
    assert any("3 pages and page 1" in line for line in found.advice)


@pytest.mark.parametrize(("tilt", "told"), [("52.6 deg", True), ("-37.0 deg", True), ("0.0 deg", False), ("x", False)])
def test_stage_tilt_of_the_header(tilt, told):
    # a tilt shortens lengths across its axis by its cosine; below 2 degrees by less than 0.1 %
    image = replace(from_array(RAMP, pixel_size_nm=2.0, u_relative=0.01), metadata={"stage tilt": tilt})
    assert any("stage tilt" in line for line in inspect_image(image).advice) == told
