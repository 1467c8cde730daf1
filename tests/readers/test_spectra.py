"""Spectra as instruments write them: separators, decimals, units, columns, order, gaps."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from layerscan.errors import InputError, SettingsError
from layerscan.readers.spectra import open_spectrum, relative_to
from layerscan.records import Spectrum

WAVELENGTH = np.arange(400.0, 701.0, 10.0)
VALUE = 0.2 + 0.15 * np.sin(WAVELENGTH / 40)


def write(tmp_path, text, name="s.csv"):
    path = tmp_path / name
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return path


def lines(wavelength, value, *, separator=",", decimal=".", form="{:.4f}"):
    rows = (form.format(w) + separator + form.format(v) for w, v in zip(wavelength, value, strict=True))
    text = "\n".join(rows) + "\n"
    return text if decimal == "." else text.replace(".", decimal)


@pytest.mark.parametrize("separator", ["\t", ";", ",", " ", "   ", "; ", ", ", " ;\t"])
@pytest.mark.parametrize("decimal", [".", ","])
@pytest.mark.parametrize("form", ["{:.4f}", "{:.6e}", "{:.5E}"])
@pytest.mark.parametrize("end", ["\n", "\r\n", "\r"])
def test_separators_and_decimals(tmp_path, separator, decimal, form, end):
    # aim: comma or point, tabs, semicolons, exponents; line ends of three systems
    text = lines(WAVELENGTH, VALUE, separator=separator, decimal=decimal, form=form).replace("\n", end)
    if decimal == "," and separator.strip() == ",":  # nothing tells the two kinds of comma apart
        with pytest.raises(InputError, match=r"s\.csv"):
            open_spectrum(write(tmp_path, text))
        return
    found = open_spectrum(write(tmp_path, text))
    np.testing.assert_allclose(found.wavelength_nm, WAVELENGTH, rtol=1e-5)
    np.testing.assert_allclose(found.value, VALUE, atol=6e-5)


@pytest.mark.parametrize(
    ("header", "factor", "kind"),
    [
        ("wavelength (nm),reflectance (%)", 100, "reflectance"),
        ("Wavelength [nm],R [%]", 100, "reflectance"),
        ("nm,%R", 100, "reflectance"),
        ("nm,%T", 100, "transmittance"),
        ("Wavelength,Transmittance percent", 100, "transmittance"),
        ("wavelength_nm,reflectance", 1, "reflectance"),
        ("wavelength nm,Absorbance", 1, "absorbance"),
        ("# wavelength_nm, reflectance", 1, "reflectance"),
        ("Wellenlänge (nm),Reflexion (%)", 100, "reflectance"),
    ],
)
def test_header_says_quantity_and_unit(tmp_path, header, factor, kind):
    # aim: percent or fraction; reflectance, transmittance or absorbance
    found = open_spectrum(write(tmp_path, header + "\n" + lines(WAVELENGTH, VALUE * factor)))
    assert found.kind == kind
    np.testing.assert_allclose(found.value, VALUE, atol=6e-5)
    assert not found.doubts


def test_percent_from_values_is_a_doubt(tmp_path):
    # no surface sends back more than twice the light: values above 2 are percent
    found = open_spectrum(write(tmp_path, lines(WAVELENGTH, VALUE * 100)))
    np.testing.assert_allclose(found.value, VALUE, atol=6e-5)
    assert any("taken as percent" in doubt for doubt in found.doubts)
    assert any("taken as reflectance" in doubt for doubt in found.doubts)


@pytest.mark.parametrize("header", ["wavelength (um)\treflectance\n", "wavelength (µm)\treflectance\n", ""])
def test_micrometres(tmp_path, header):
    # aim: nm or um
    found = open_spectrum(write(tmp_path, header + lines(WAVELENGTH / 1e3, VALUE, separator="\t", form="{:.6f}")))
    np.testing.assert_allclose(found.wavelength_nm, WAVELENGTH)
    assert bool(header) != any("taken as um" in doubt for doubt in found.doubts)


def test_wave_numbers(tmp_path):
    # definition: wave number in 1/cm = 1e7 / wavelength in nm; 500 nm is 20000 per cm
    text = "wavenumber (cm-1);reflectance\n" + lines(1e7 / WAVELENGTH, VALUE, separator=";", form="{:.6f}")
    found = open_spectrum(write(tmp_path, text))
    np.testing.assert_allclose(found.wavelength_nm, WAVELENGTH, rtol=1e-8)
    np.testing.assert_allclose(found.value, VALUE, atol=1e-6)


def test_order_and_duplicates(tmp_path):
    # aim: unsorted, duplicated
    rng = np.random.default_rng(3)
    order = rng.permutation(WAVELENGTH.size)
    wavelength = np.concatenate([WAVELENGTH[order], WAVELENGTH[:2]])
    value = np.concatenate([VALUE[order], VALUE[:2] + 0.1])
    found = open_spectrum(write(tmp_path, lines(wavelength, value)))
    np.testing.assert_allclose(found.wavelength_nm, WAVELENGTH)
    np.testing.assert_allclose(found.value[:2], VALUE[:2] + 0.05, atol=1e-4)
    np.testing.assert_allclose(found.value[2:], VALUE[2:], atol=1e-4)
    assert any("2 wavelengths occur more than once" in doubt for doubt in found.doubts)


def test_descending_is_turned(tmp_path):
    # many instruments scan from long to short
    found = open_spectrum(write(tmp_path, lines(WAVELENGTH[::-1], VALUE[::-1])))
    np.testing.assert_allclose(found.value, VALUE, atol=6e-5)
    assert not any("more than once" in doubt for doubt in found.doubts)


@pytest.mark.parametrize("title", ["u", "SD", "std", "u_reflectance", "uncertainty", "st. dev."])
def test_uncertainty_column(tmp_path, title):
    # the column belongs to the value column and has its unit
    rows = "\n".join(f"{w:.1f},{100 * v:.4f},{1.5:.2f}" for w, v in zip(WAVELENGTH, VALUE, strict=True))
    found = open_spectrum(write(tmp_path, f"wavelength (nm),reflectance (%),{title}\n{rows}\n"))
    np.testing.assert_allclose(found.u, 0.015)
    np.testing.assert_allclose(found.value, VALUE, atol=1e-5)


def columns_file(tmp_path):
    rows = "\n".join(
        f"{w:.1f};{v * 1e4:.1f};{100 * v:.4f};{50 * v:.4f}" for w, v in zip(WAVELENGTH, VALUE, strict=True)
    )
    return write(tmp_path, f"Wave;Sample;Reflectance;Transmittance\n[nm];[counts];[%];[%]\n\n{rows}\n")


def test_columns_by_name_number_and_quantity(tmp_path):
    # two header rows, names and units
    path = columns_file(tmp_path)
    for column in ("Reflectance [%]", "reflectance", 2, "2", None):
        found = open_spectrum(path, column=column)
        np.testing.assert_allclose(found.value, VALUE, atol=1e-5)
        assert found.kind == "reflectance"
        assert any("3 columns" in doubt for doubt in found.doubts) == (column is None)
    found = open_spectrum(path, quantity="transmittance")
    np.testing.assert_allclose(found.value, VALUE / 2, atol=1e-5)
    assert found.kind == "transmittance"


@pytest.mark.parametrize("column", [0, 4, -1, "purple", "", "9"])
def test_unknown_column(tmp_path, column):
    # the message lists what there is
    with pytest.raises(SettingsError, match=r"no value column .* Its columns are 0: 'Wave \[nm\]'"):
        open_spectrum(columns_file(tmp_path), column=column)


def test_counts_are_refused(tmp_path):
    # counts are no ratio to a reference
    with pytest.raises(InputError, match=r"'Sample \[counts\]' of 's.csv' holds counts"):
        open_spectrum(columns_file(tmp_path), column="Sample")


def test_quantity_against_the_file(tmp_path):
    # the user's word wins and the disagreement is told
    path = write(tmp_path, "nm,reflectance\n" + lines(WAVELENGTH, VALUE))
    found = open_spectrum(path, quantity="transmittance")
    assert found.kind == "transmittance"
    assert any("the file says reflectance" in doubt for doubt in found.doubts)
    with pytest.raises(SettingsError, match="'emission' is not known"):
        open_spectrum(path, quantity="emission")


def test_gaps_are_left_out(tmp_path):
    # NaN and empty cells
    rows = [f"{w:.1f},{v:.4f}" for w, v in zip(WAVELENGTH, VALUE, strict=True)]
    rows[3], rows[5] = "430.0,", "450.0,NaN"
    found = open_spectrum(write(tmp_path, "\n".join(rows)))
    assert found.value.size == WAVELENGTH.size - 2
    assert any("2 rows without a finite value" in doubt for doubt in found.doubts)


@pytest.mark.parametrize(
    ("text", "match"),
    [
        ("400,0.1\n500,0.2\n600,0.3\n", "has 3 usable rows; a spectrum needs at least 5"),
        ("a,b\nc,d\n", "no table of numbers .* begins with 'a,b'"),
        ("the quick\nbrown fox\n", "no table of numbers"),
        ("400\n500\n600\n700\n800\n", "no table of numbers"),
        ("\n\n\n", "no table of numbers"),
        ("".join(f"{w},nan\n" for w in range(400, 500)), "no finite value"),
        ("400,0.1\n" * 9, "1 different wavelengths"),
        ("".join(f"{w},0,{w - 370}\n" for w in range(400, 500)), "commas may separate columns or decimals"),
        ("".join(f"{w},0.5\n" for w in range(-50, 50)), "which is no range in nm"),
        ("".join(f"{w}e9,0.5\n" for w in range(1, 50)), "which is no range in nm"),
        ("nm,counts\n" + "".join(f"{w},{w * 10}\n" for w in range(400, 500)), "holds counts"),
        ("nm,u\n" + "".join(f"{w},0.1\n" for w in range(400, 500)), "no column of values"),
        (b"\x89PNG\r\n\x1a\n" + bytes(range(256)), "no table of numbers"),
    ],
)
def test_bad_spectra(tmp_path, text, match):
    # bad input: three rows, duplicated, non-numeric
    with pytest.raises(InputError, match=match):
        open_spectrum(write(tmp_path, text))


def test_missing_empty_and_folder(tmp_path):
    # bad input
    with pytest.raises(InputError, match="There is no file"):
        open_spectrum(tmp_path / "none.csv")
    with pytest.raises(InputError, match="is empty"):
        open_spectrum(write(tmp_path, ""))
    with pytest.raises(InputError, match="is a folder"):
        open_spectrum(tmp_path)


@pytest.mark.parametrize("encoding", ["utf-8-sig", "utf-16", "latin-1"])
def test_encodings(tmp_path, encoding):
    # instruments write µ and ± in the encoding of their system
    text = "Wellenlänge (µm)\tReflectance ±\n" + lines(WAVELENGTH / 1e3, VALUE, separator="\t", form="{:.6f}")
    found = open_spectrum(write(tmp_path, text.encode(encoding)))
    np.testing.assert_allclose(found.wavelength_nm, WAVELENGTH)


def test_header_with_numbers_is_not_data(tmp_path):
    # the largest block of rows counts, not the first
    header = "Integration time;6.00\nAveraging;79\nDate;2025\n"
    found = open_spectrum(write(tmp_path, header + lines(WAVELENGTH, VALUE, separator=";") + "\nEnd;1\n"))
    np.testing.assert_allclose(found.wavelength_nm, WAVELENGTH)


def test_above_one_is_flagged(tmp_path):
    # a specular specimen against a diffuser can exceed 1
    text = "nm,reflectance (%)\n" + lines(WAVELENGTH, np.full(WAVELENGTH.size, 140.0))
    assert open_spectrum(write(tmp_path, text)).flags == ("specular_reference_suspected",)


def spectrum(value, *, u=None, wavelength=WAVELENGTH, kind="reflectance"):
    return Spectrum(wavelength_nm=wavelength, value=value, kind=kind, u=u, source="made")


def test_relative_to_a_mirror():
    # R = R_measured * R_mirror; product rule for u (JCGM 100:2008, 5.1.6)
    measured = spectrum(VALUE, u=np.full(VALUE.size, 0.01))
    mirror = spectrum(np.full(VALUE.size, 0.9), u=np.full(VALUE.size, 0.02))
    found = relative_to(measured, mirror)
    np.testing.assert_allclose(found.value, VALUE * 0.9)
    np.testing.assert_allclose(found.u, np.hypot(0.9 * 0.01, VALUE * 0.02))
    assert relative_to(spectrum(VALUE), mirror).u is None


def test_perfect_mirror_changes_nothing():
    # a change that must not matter
    found = relative_to(spectrum(VALUE), spectrum(np.ones(VALUE.size)))
    np.testing.assert_array_equal(found.value, VALUE)


def test_mirror_must_cover_the_range():
    # never extrapolated
    mirror = spectrum(np.full(11, 0.9), wavelength=WAVELENGTH[:11])
    found = relative_to(spectrum(VALUE), mirror)
    np.testing.assert_array_equal(found.wavelength_nm, WAVELENGTH[:11])
    assert any("outside the reference" in doubt for doubt in found.doubts)
    far = spectrum(np.full(11, 0.9), wavelength=WAVELENGTH[:11] + 1000)
    with pytest.raises(InputError, match="share 0 wavelengths"):
        relative_to(spectrum(VALUE), far)
    with pytest.raises(InputError, match="not absorbance"):
        relative_to(spectrum(VALUE, kind="absorbance"), mirror)


@settings(deadline=None, derandomize=True, max_examples=150)
@given(st.binary(max_size=400) | st.text(alphabet="0123456789.,;\t \n-+eEnm%R", max_size=400).map(str.encode))
def test_any_bytes_give_a_spectrum_or_a_clear_error(tmp_path_factory, raw):
    # no other exception may escape
    path = tmp_path_factory.mktemp("s") / "s.txt"
    path.write_bytes(raw)
    try:
        found = open_spectrum(path)
    except InputError:
        return
    assert found.value.size >= 5
    assert np.isfinite(found.value).all()
    assert (np.diff(found.wavelength_nm) > 0).all()


def test_percent_and_um_in_passing_do_not_scale(tmp_path):
    # a header may name humidity in percent and a slit in um: the numbers decide, and that is said
    header = "humidity 45 %\nslit 25 um\n"
    found = open_spectrum(write(tmp_path, header + lines(WAVELENGTH, VALUE, separator="\t")))
    np.testing.assert_allclose(found.wavelength_nm, WAVELENGTH)
    np.testing.assert_allclose(found.value, VALUE, atol=6e-5)
    assert any("mentions percent" in doubt for doubt in found.doubts)


def test_wavelength_unit_that_the_numbers_contradict(tmp_path):
    # nothing is visible at 400 um
    found = open_spectrum(write(tmp_path, "wavelength (um),reflectance\n" + lines(WAVELENGTH, VALUE)))
    np.testing.assert_allclose(found.wavelength_nm, WAVELENGTH)
    assert any("says um" in doubt for doubt in found.doubts)


def test_small_percentages_are_trusted_to_their_name(tmp_path):
    # 0.2 to 0.35 percent: the column's name decides, not the size
    found = open_spectrum(write(tmp_path, "nm,reflectance (%)\n" + lines(WAVELENGTH, VALUE)))
    np.testing.assert_allclose(found.value, VALUE / 100, atol=1e-6)


def test_narrow_band_in_percent(tmp_path):
    # a dark surface with a narrow band of 30 %: most values are below 2, the band is not
    value = 0.5 + 30 * np.exp(-(((WAVELENGTH - 550) / 10) ** 2))
    found = open_spectrum(write(tmp_path, lines(WAVELENGTH, value)))
    np.testing.assert_allclose(found.value, value / 100, atol=1e-6)
