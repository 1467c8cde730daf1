"""Files that nobody here made: pixel sizes, pages, banners and spectra against the table beside them."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest

from layerscan.errors import CalibrationError, InputError
from layerscan.readers.images import open_image
from layerscan.readers.inspection import inspect_image
from layerscan.readers.spectra import open_spectrum, relative_to

REAL = Path(__file__).resolve().parents[2].parent / "shared" / "real"

pytestmark = pytest.mark.skipif(not REAL.is_dir(), reason="the folder of real files is not here")

# Source of the pixel sizes: RosettaSciIO 0.15.0 on these files, and the files' own tags; nm, (row, column)
PIXEL_SIZES = {
    "readers/sem_tag34118_1k.tif": 2614.514,
    "readers/sem_tag34682_8bit.tif": 3372.4,
    "readers/sem_tag34682_16bit.tif": 3372.4,
    "readers/tem_tag65027_dummy.tif": 1.8207885,
    "readers/tem_private_tags.tif": 168.675,
    "readers/description_unit_um.tif": 168.675,
    "readers/sem_multipage.tif": 12.326225,
    "readers/extended_header.mrc": 5.679131,
    "readers/noise_stack.mrc": 0.2,
    "sem-lamellar/alloy_lamellae_10kx.tif": 11.165,
    "sem-lamellar/colloid_rows_and_band.tif": 55.825,
}
INSTRUMENT_PIXEL_SIZES = {
    "readers/micrometre_unit.dm3": 168.675,
    "readers/anisotropic_pixels.dm3": (0.2, 1.0),
    "readers/anisotropic_pixels.dm4": (0.2, 1.0),
    "readers/decimal_point.dm3": 5.506073,
    "readers/decimal_comma.dm3": 5.506073,
    "readers/stem.dm3": 0.248538,
    "readers/preview.ser": 0.384352,
    "readers/series.ser": 6.281834,
    "readers/no_layers_1.ser": 3.270361,
    "readers/blank_frame.emd": 3.138837,
    "stem-lattice/perovskite_haadf.ser": 0.0100127,
}


def expect(image, nm):
    row_nm, column_nm = nm if isinstance(nm, tuple) else (nm, nm)
    assert image.pixel_size.row_nm == pytest.approx(row_nm, rel=2e-6)
    assert image.pixel_size.column_nm == pytest.approx(column_nm, rel=2e-6)
    assert image.pixel_size.u_relative is None
    assert image.load().shape == image.shape


@pytest.mark.parametrize("name", PIXEL_SIZES)
def test_pixel_size(name):
    # INDEX.md beside the files
    expect(open_image(REAL / name), PIXEL_SIZES[name])


@pytest.mark.parametrize("name", INSTRUMENT_PIXEL_SIZES)
def test_pixel_size_of_instrument_files(name):
    # INDEX.md beside the files; decimal comma and point must agree, and each axis has its own unit
    pytest.importorskip("rsciio", reason="RosettaSciIO is not installed")
    expect(open_image(REAL / name), INSTRUMENT_PIXEL_SIZES[name])


def test_series_with_and_without_a_pixel_size():
    # tag 33560: 23.928 pm in the second series, none in the first (72 per inch is no calibration)
    path = REAL / "readers" / "tem_tag33560.tif"
    assert open_image(path, page=1).pixel_size.column_nm == pytest.approx(0.023928, rel=1e-4)
    with pytest.raises(CalibrationError, match=r"72 per inch .* no calibration"):
        open_image(path)


def test_pages():
    # INDEX.md: 2 pages; a stack of 5; the stack of noise has 3 sections
    for page in range(2):
        assert open_image(REAL / "readers" / "sem_multipage.tif", page=page).page_count == 2
    assert open_image(REAL / "readers" / "noise_stack.mrc", page=2).page_count == 3
    with pytest.raises(InputError, match="pages 0 to 2"):
        open_image(REAL / "readers" / "noise_stack.mrc", page=3)


def test_stack_of_five():
    # INDEX.md: preview.ser is a stack of 5
    pytest.importorskip("rsciio", reason="RosettaSciIO is not installed")
    frames = [open_image(REAL / "readers" / "preview.ser", page=page) for page in (0, 4)]
    assert [frame.page_count for frame in frames] == [5, 5]
    assert not np.array_equal(frames[0].load(), frames[1].load())
    with pytest.raises(InputError, match="pages 0 to 4"):
        open_image(REAL / "readers" / "preview.ser", page=5)


def test_scale_without_unit_is_no_calibration():
    # INDEX.md: axis scale stored without a unit
    pytest.importorskip("rsciio", reason="RosettaSciIO is not installed")
    with pytest.raises(CalibrationError, match="has no unit"):
        open_image(REAL / "stem-lattice" / "perovskite_dark_field.hdf5")
    given = open_image(REAL / "stem-lattice" / "perovskite_dark_field.hdf5", pixel_size_nm=0.0093263)
    assert given.shape == (400, 380)


def test_missing_map_identifier_is_doubted():
    # noise_stack.mrc needs the permissive way
    assert any("identifier 'MAP '" in doubt for doubt in open_image(REAL / "readers" / "noise_stack.mrc").doubts)


def test_banners():
    # INDEX.md: banner of the alloy from about row 691; the colloid and the coatings have none
    alloy = open_image(REAL / "sem-lamellar" / "alloy_lamellae_10kx.tif")
    assert len(alloy.excluded) == 1
    row0, column0, row1, column1 = alloy.excluded[0].region
    assert (column0, row1, column1) == (0, 768, 1024)
    assert abs(row0 - 691) <= 2
    assert open_image(REAL / "sem-lamellar" / "colloid_rows_and_band.tif").excluded == ()
    stated = open_image(REAL / "readers" / "sem_tag34682_8bit.tif").excluded
    assert stated[0].region == (442, 0, 471, 512)  # 442 rows of picture and a bar of 29 by the tag
    for name in "abc":
        assert open_image(REAL / "sem-coating" / f"coating_{name}.tif", pixel_size_nm=1.0).excluded == ()


def test_coatings_have_no_scale():
    # INDEX.md: none, pixels only
    with pytest.raises(CalibrationError, match=r"'coating_a.tif' is unknown: the file has no scale tag"):
        open_image(REAL / "sem-coating" / "coating_a.tif")


def test_maker_tag_on_a_resized_picture(tmp_path):
    # rosettasciio 0.15 trusted it: the field of view in the tag, 1024 columns, is now covered by 512
    import tifffile

    source = REAL / "sem-lamellar" / "alloy_lamellae_10kx.tif"
    with tifffile.TiffFile(source) as tif:
        page = tif.pages[0]
        tag = page.tags[34118]
        tif.filehandle.seek(tag.valueoffset)
        raw = tif.filehandle.read(tag.count)
        half = page.asarray()[::2, ::2].copy()
    path = tmp_path / "half.tif"
    tifffile.imwrite(path, half, extratags=[(34118, 1, len(raw), raw, True)], metadata=None)
    size = open_image(path).pixel_size
    assert size.column_nm == pytest.approx(2 * 11.165)
    assert any("512" in doubt and "resized" in doubt for doubt in size.doubts)


def test_inspection_of_the_alloy():
    # field of view by the tag: 'Width' 11.43 um
    found = inspect_image(open_image(REAL / "sem-lamellar" / "alloy_lamellae_10kx.tif"))
    assert found.field_of_view_nm[1] == pytest.approx(11_430, rel=1e-3)
    assert {"banner_excluded", "calibration_uncertainty_unknown"} <= set(found.flags)


# Source: the exports themselves, opened in a text editor: rows, first and last wavelength, a value, kind
EXPORTS = {
    "export_a.txt": (3648, 178.65, 888.37, -0.16227, 887.86, "reflectance"),
    "export_b.txt": (2389, 187.92, 2116.5, 0.18995, 187.92, "reflectance"),
    "export_c.txt": (401, 300.0, 700.0, 0.9633834, 700.0, "reflectance"),
    "export_d.ttt": (401, 300.0, 700.0, 0.314912, 700.0, "transmittance"),
    "export_e.jaz": (2048, 190.8535, 886.439331, 0.13679238, 886.439331, "reflectance"),
}


@pytest.mark.parametrize("name", EXPORTS)
def test_instrument_exports(name):
    # five spectrometers' own exports, in percent
    rows, first, last, value, at, kind = EXPORTS[name]
    found = open_spectrum(REAL / "spectra" / name)
    assert found.value.size == rows
    assert (found.wavelength_nm[0], found.wavelength_nm[-1]) == (first, last)
    assert found.value[found.wavelength_nm == at][0] == pytest.approx(value, rel=1e-9)
    assert found.kind == kind


def test_columns_of_an_angle_series():
    # INDEX.md: peak 520.3 nm at 15 deg, 429.4 nm at 70 deg
    path = REAL / "spectra" / "wing_patch_15_to_70deg.csv"
    for column, peak in ((1, 520.3), ("Acrecca-12", 429.4)):
        found = open_spectrum(path, column=column)
        smooth = np.where(found.wavelength_nm > 400, np.convolve(found.value, np.ones(15) / 15, mode="same"), 0)
        assert abs(found.wavelength_nm[np.argmax(smooth)] - peak) < 6  # smoothed over 15 nm; an asymmetric band


def test_reflectance_against_a_mirror():
    # reflectance of the mirror is a spectrum of its own; three repeats at gap 0 agree after correction
    mirror = open_spectrum(REAL / "reflectance" / "mirror_reference.csv")
    assert mirror.value.size == 1111
    repeats = []
    for number in range(3):
        measured = open_spectrum(REAL / "reflectance" / f"gap_0nm_{number}.csv")
        assert measured.value.size == 864
        corrected = relative_to(measured, mirror)
        inside = (corrected.wavelength_nm >= 450) & (corrected.wavelength_nm <= 800)
        repeats.append(corrected.value[inside])
    assert np.std(repeats, axis=0).mean() < 0.005


def test_mirror_correction_against_a_plane_film():
    # INDEX.md, arXiv 2602.06316: air / diamond film of 286 nm / glass n = 1.53 at normal incidence, Airy formula
    # (Born and Wolf, Principles of Optics, 7th ed., 1.6.4); stated there: RMS 0.007 to 0.011 over 450 to 800 nm
    tables = json.loads((REAL / "reflectance" / "index_tables.json").read_text())
    film = next(table for table in tables if table["material"] == "PCD")
    mirror = open_spectrum(REAL / "reflectance" / "mirror_reference.csv")
    for number in range(3):
        measured = relative_to(open_spectrum(REAL / "reflectance" / f"gap_0nm_{number}.csv"), mirror)
        inside = (measured.wavelength_nm >= 450) & (measured.wavelength_nm <= 800)
        wavelength_nm = measured.wavelength_nm[inside]
        n, k = (np.interp(wavelength_nm, film["wavelength"], film[key]) for key in ("real", "complex"))
        index = n + 1j * k
        front, back = (1 - index) / (1 + index), (index - 1.53) / (index + 1.53)
        turn = np.exp(4j * np.pi * index * 286 / wavelength_nm)
        expected = np.abs((front + back * turn) / (1 + front * back * turn)) ** 2
        assert np.sqrt(np.mean((expected - measured.value[inside]) ** 2)) <= 0.012
