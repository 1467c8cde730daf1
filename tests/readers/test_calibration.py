"""Pixel sizes: what the user says, what the file states, and what is no calibration."""

from __future__ import annotations

import numpy as np
import pytest
import tifffile
from hypothesis import given, settings
from hypothesis import strategies as st
from PIL import Image

from layerscan.errors import CalibrationError, InputError, SettingsError
from layerscan.readers.calibration import (
    ScaleStatement,
    fit_to_picture,
    length_nm,
    recalibrate,
    settle_pixel_size,
    state_resolution,
)
from layerscan.readers.images import from_array, open_image

PICTURE = np.arange(48 * 64, dtype=np.uint16).reshape(48, 64)


def statement(row_nm, column_nm=None, source="tag"):
    return ScaleStatement(row_nm=row_nm, column_nm=row_nm if column_nm is None else column_nm, source=source)


def test_no_statement_gives_no_pixel_size():
    # ome-model#177: absent is unknown, not 1
    assert settle_pixel_size(()) is None


def test_error_names_file_and_remedy(tmp_path):
    # STYLE of the project's errors: which thing, what came, what to do next
    path = tmp_path / "shell_03.tif"
    tifffile.imwrite(path, PICTURE)
    with pytest.raises(
        CalibrationError, match=r"'shell_03.tif' is unknown: the file has no scale tag. Give pixel_size"
    ):
        open_image(path)


@pytest.mark.parametrize("dpi", [72, 96, 300, 600])
@pytest.mark.parametrize("suffix", ["png", "tif", "jpg", "bmp"])
def test_screen_and_print_resolutions_are_no_calibration(tmp_path, dpi, suffix):
    # 72 per inch would be 353 um per pixel; common practice, no source
    path = tmp_path / f"a.{suffix}"
    Image.fromarray((PICTURE // 16).astype(np.uint8)).save(path, dpi=(dpi, dpi))
    with pytest.raises(CalibrationError, match=r"screen or a print .* no calibration"):
        open_image(path)
    image = open_image(path, require_pixel_size=False)
    assert image.pixel_size is None
    assert any("no calibration" in doubt for doubt in image.doubts)


def test_resolution_without_unit_is_no_calibration(tmp_path):
    # TIFF 6.0, ResolutionUnit = 1: no absolute unit, only an aspect ratio
    path = tmp_path / "a.tif"
    tifffile.imwrite(path, PICTURE, resolution=(4e6, 4e6), resolutionunit=1)
    with pytest.raises(CalibrationError, match="has no unit, which is no calibration"):
        open_image(path)


@pytest.mark.parametrize(("unit", "per_unit"), [(2, 2.54e7 / 2.5), (3, 1e7 / 2.5)])
def test_resolution_tag_in_inch_and_cm(tmp_path, unit, per_unit):
    # TIFF 6.0: XResolution pixels per ResolutionUnit; 1 inch = 25.4 mm exactly; ome/bioformats#3676
    path = tmp_path / "a.tif"
    tifffile.imwrite(path, PICTURE, resolution=(per_unit, per_unit), resolutionunit=unit)
    size = open_image(path).pixel_size
    assert size.row_nm == pytest.approx(2.5, rel=1e-6)
    assert size.column_nm == pytest.approx(2.5, rel=1e-6)
    assert size.u_relative is None
    assert size.source == "resolution tag"


def test_resolution_x_belongs_to_columns(tmp_path):
    # TIFF 6.0: XResolution is along ImageWidth; ome/bioformats#4366 exchanged them
    path = tmp_path / "a.tif"
    tifffile.imwrite(path, PICTURE, resolution=(1e7 / 4, 1e7 / 2), resolutionunit=3)
    size = open_image(path).pixel_size
    assert size.column_nm == pytest.approx(4)
    assert size.row_nm == pytest.approx(2)
    assert any("different pixel sizes" in doubt for doubt in size.doubts)


@pytest.mark.parametrize(
    ("unit", "nm"),
    [("micron", 1e3), ("um", 1e3), ("\\u00B5m", 1e3), ("nm", 1.0), ("mm", 1e6), ("inch", 2.54e7)],
)
def test_description_unit(tmp_path, unit, nm):
    # description-style unit: the resolution counts pixels per that unit
    path = tmp_path / "a.tif"
    per_unit = nm / 5.0
    tifffile.imwrite(path, PICTURE, description=f"unit={unit}\n", resolution=(per_unit, per_unit), metadata=None)
    size = open_image(path).pixel_size
    assert size.row_nm == pytest.approx(5.0, rel=1e-6)
    assert "description" in size.source


def test_description_unit_pixel_is_no_length(tmp_path):
    # an uncalibrated picture in that style says unit=pixel
    path = tmp_path / "a.tif"
    tifffile.imwrite(path, PICTURE, description="unit=pixel\n", resolution=(1, 1), metadata=None)
    with pytest.raises(CalibrationError, match="'pixel', no length"):
        open_image(path)


@pytest.mark.parametrize(("unit", "nm"), [("nm", 3.0), ("µm", 3000.0), ("Å", 0.3), ("pm", 0.003), (None, 3000.0)])
def test_ome_physical_size(tmp_path, unit, nm):
    # OME data model 2016-06: PhysicalSizeXUnit defaults to um; ome/bioformats#4404 took Angstrom for um
    path = tmp_path / "a.ome.tif"
    metadata = {"axes": "YX", "PhysicalSizeX": 3.0, "PhysicalSizeY": 3.0}
    if unit:
        metadata |= {"PhysicalSizeXUnit": unit, "PhysicalSizeYUnit": unit}
    tifffile.imwrite(path, PICTURE, ome=True, metadata=metadata)
    size = open_image(path).pixel_size
    assert size.row_nm == pytest.approx(nm)
    assert size.source == "OME description"


def test_ome_without_size_is_unknown(tmp_path):
    # ome-model#177: absent is not 1
    path = tmp_path / "a.ome.tif"
    tifffile.imwrite(path, PICTURE, ome=True, metadata={"axes": "YX"})
    with pytest.raises(CalibrationError, match="states no physical size"):
        open_image(path)


def test_conflicting_statements_are_told(tmp_path):
    # a stale resolution beside a description: the more specific statement is used, the other told
    path = tmp_path / "a.ome.tif"
    metadata = {"axes": "YX", "PhysicalSizeX": 3.0, "PhysicalSizeY": 3.0}
    metadata |= {"PhysicalSizeXUnit": "nm", "PhysicalSizeYUnit": "nm"}
    tifffile.imwrite(path, PICTURE, ome=True, metadata=metadata, resolution=(1e7 / 6, 1e7 / 6), resolutionunit=3)
    size = open_image(path).pixel_size
    assert size.row_nm == pytest.approx(3.0)
    assert any("OME description states 3 nm, but resolution tag states 6 nm" in doubt for doubt in size.doubts)


def test_png_resolution_is_per_metre(tmp_path):
    # PNG specification (ISO/IEC 15948), 11.3.5.3 pHYs: pixels per metre as whole numbers
    path = tmp_path / "a.png"
    Image.fromarray(PICTURE.astype(np.uint16)).save(path, dpi=(2.54e7 / 50, 2.54e7 / 50))
    assert open_image(path).pixel_size.row_nm == pytest.approx(50, rel=1e-4)


def test_jpeg_density_carries_its_doubt(tmp_path):
    # JFIF 1.02: Xdensity and Ydensity are 16 bit; 1.5 nm was read back as 25045 per inch
    path = tmp_path / "a.jpg"
    Image.fromarray((PICTURE // 16).astype(np.uint8)).save(path, dpi=(25045, 25045))
    size = open_image(path).pixel_size
    assert size.column_nm == pytest.approx(2.54e7 / 25045)
    assert any("16 bits" in doubt for doubt in size.doubts)


def test_user_wins_and_disagreement_is_told(tmp_path):
    # imageio#731, hyperspy#2056: a factor between the file's pixel size and the true one
    path = tmp_path / "a.tif"
    tifffile.imwrite(path, PICTURE, resolution=(1e7 / 2.5, 1e7 / 2.5), resolutionunit=3)
    size = open_image(path, pixel_size="5 +- 0.1 nm").pixel_size
    assert (size.row_nm, size.column_nm, size.u_relative) == (5.0, 5.0, pytest.approx(0.02))
    assert size.stated == "5 +- 0.1 nm"
    assert any("You gave 5 nm, but resolution tag states 2.5 nm; yours was used" in doubt for doubt in size.doubts)
    assert not open_image(path, pixel_size_nm=2.5).pixel_size.doubts


def test_user_gives_each_axis(tmp_path):
    # hyperspy#3341: x in nm, y in um
    path = tmp_path / "a.tif"
    tifffile.imwrite(path, PICTURE)
    size = open_image(path, pixel_size="2 nm, 0.003 um").pixel_size
    assert (size.row_nm, size.column_nm) == (2.0, pytest.approx(3.0))
    assert open_image(path, pixel_size_nm=(2.0, 3.0)).pixel_size.column_nm == 3.0


@pytest.mark.parametrize(
    ("given", "match"),
    [
        ("0 nm", "must be positive"),
        ("-2 nm", "must be positive"),
        ("nan nm", "not finite"),
        ("inf nm", "not finite"),
        ("3 m", "Check the unit"),
        ("1e-9 nm", "Check the unit"),
        ("2.5 furlong", "unit 'furlong'"),
        ("2.5", "no unit"),
        ("two nm", "no quantity"),
        ("1 nm, 2 nm, 3 nm", "3 parts"),
    ],
)
def test_impossible_pixel_size_text(tmp_path, given, match):
    # bad input: zero, negative, NaN, absurd, unknown unit
    path = tmp_path / "a.tif"
    tifffile.imwrite(path, PICTURE)
    with pytest.raises(SettingsError, match=match):
        open_image(path, pixel_size=given)


@pytest.mark.parametrize("given", [0.0, -2.5, float("nan"), float("inf"), 1e12, (2.5, 0.0), (1.0, 2.0, 3.0), "wide"])
def test_impossible_pixel_size_number(tmp_path, given):
    # bad input
    path = tmp_path / "a.tif"
    tifffile.imwrite(path, PICTURE)
    with pytest.raises(SettingsError, match="Pixel size"):
        open_image(path, pixel_size_nm=given)


def test_given_twice_is_refused(tmp_path):
    # two answers to one question
    path = tmp_path / "a.tif"
    tifffile.imwrite(path, PICTURE)
    with pytest.raises(SettingsError, match="given twice"):
        open_image(path, pixel_size_nm=2.5, pixel_size="2.5 nm")


@pytest.mark.parametrize("resolution", [(0, 0), (0, 5_000_000)])
def test_zero_resolution_is_no_calibration(tmp_path, resolution):
    # a rational of zero must neither divide nor become a default
    path = tmp_path / "a.tif"
    tifffile.imwrite(path, PICTURE, resolution=resolution, resolutionunit=3)
    with pytest.raises(CalibrationError, match="is unknown"):
        open_image(path)


def test_resized_picture_with_a_stated_shape():
    # rosettasciio 0.15 trusted a maker's tag on a half-size picture
    half = fit_to_picture(statement(10.0), stated_shape=(768, 1024), shape=(384, 512))
    assert half.row_nm == half.column_nm == pytest.approx(20.0)
    assert "resized" in half.doubts[0]
    cropped = fit_to_picture(statement(10.0), stated_shape=(768, 1024), shape=(700, 512))
    assert cropped.column_nm == 10.0
    assert "cropped" in cropped.doubts[0]
    banner_cut_off = fit_to_picture(statement(10.0), stated_shape=(768, 1024), shape=(691, 1024))
    assert banner_cut_off == statement(10.0)


def test_impossible_statement_is_ignored_and_told():
    # a kilometre per pixel
    size = settle_pixel_size([statement(1e12, source="tag 1"), statement(2.0, source="tag 2")])
    assert (size.row_nm, size.source) == (2.0, "tag 2")
    assert any("no electron micrograph has" in doubt for doubt in size.doubts)


@settings(deadline=None, derandomize=True)
@given(st.floats(1e-3, 9e3), st.sampled_from([("inch", 2.54e7), ("cm", 1e7), ("um", 1e3), ("nm", 1.0)]))
def test_resolution_is_the_inverse_of_the_pixel_size(nm, unit):
    # definition: pixels per unit = unit / pixel
    name, unit_nm = unit
    stated = state_resolution(unit_nm / nm, unit_nm / nm, unit_nm=unit_nm, source="tag", unit_name=name)
    assert stated.row_nm == pytest.approx(nm, rel=1e-9)


@pytest.mark.parametrize(
    ("unit", "nm"),
    [
        ("A", 0.1),
        ("Å", 0.1),
        ("Angstrom", 0.1),
        ("µm", 1e3),
        ("μm", 1e3),
        ("Micrometer", 1e3),
        ("px", None),
        ("", None),
    ],
)
def test_spelling_of_units(unit, nm):
    # rosettasciio#91 (Angstrom); SI brochure, 9th edition, table 7 (prefixes)
    assert length_nm(unit) == nm


def test_recalibrate_keeps_the_former_as_a_doubt():
    # real case: a lattice image whose own calibration is 3 % high
    image = from_array(np.zeros((4, 4)), pixel_size_nm=2.0)
    again = recalibrate(image, pixel_size="1.9 +- 0.01 nm")
    assert again.pixel_size.row_nm == 1.9
    assert again.pixel_size.u_relative == pytest.approx(0.01 / 1.9)
    assert any("2 nm" in doubt for doubt in again.pixel_size.doubts)
    assert image.pixel_size.row_nm == 2.0


@pytest.mark.parametrize("u", [-0.1, float("nan")])
def test_from_array_refuses_impossible_uncertainty(u):
    # u is a standard deviation
    with pytest.raises(CalibrationError, match="u_relative"):
        from_array(np.zeros((4, 4)), pixel_size_nm=2.0, u_relative=u)


@pytest.mark.parametrize(
    ("array", "match"),
    [
        (np.zeros(5), r"shape \(5,\)"),
        (np.zeros((0, 4)), r"shape \(0, 4\)"),
        (np.full((4, 4), np.nan), "no finite value"),
        (np.zeros((4, 4), complex), "complex"),
        (np.full((4, 4), "a"), "not intensities"),
    ],
)
def test_from_array_refuses(array, match):
    # bad input
    with pytest.raises(InputError, match=match):
        from_array(array, pixel_size_nm=2.0)


def test_description_without_unit_leaves_the_resolution_tag(tmp_path):
    # a description of that style without a unit line: the resolution tag keeps its own unit
    path = tmp_path / "a.tif"
    description = "images=5\n"
    tifffile.imwrite(path, PICTURE, description=description, resolution=(4e6, 4e6), resolutionunit=3, metadata=None)
    image = open_image(path)
    assert image.pixel_size.row_nm == pytest.approx(2.5)
    assert any("speaks of 5 images; the file lists 1" in doubt for doubt in image.doubts)


def test_fine_resolution_tag_of_a_scanner_is_doubted(tmp_path):
    # 9600 per inch is a film scanner's resolution and 2.6 um per pixel; common practice, no source
    path = tmp_path / "a.tif"
    tifffile.imwrite(path, PICTURE, resolution=(9600, 9600), resolutionunit=2)
    assert any("scanner" in doubt for doubt in open_image(path).pixel_size.doubts)
    tifffile.imwrite(path, PICTURE, resolution=(4e6, 4e6), resolutionunit=3)
    assert not open_image(path).pixel_size.doubts


@settings(deadline=None, derandomize=True)
@given(st.floats(1e-3, 1e5), st.floats(1e-3, 1e5), st.none() | st.floats(1e-4, 0.2))
def test_stated_text_gives_the_same_pixel_size_again(row_nm, column_nm, u_relative):
    # a saved measurement is run again from the user's words
    size = from_array(np.zeros((2, 2)), pixel_size_nm=(row_nm, column_nm), u_relative=u_relative).pixel_size
    again = settle_pixel_size((), pixel_size=size.stated)
    assert (again.row_nm, again.column_nm) == (row_nm, column_nm)
    assert again.u_relative == (None if u_relative is None else pytest.approx(u_relative, rel=1e-12))
