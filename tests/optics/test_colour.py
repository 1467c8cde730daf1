"""Colour against the CIE's definitions, published pairs and colour-science."""

import csv
import warnings
from pathlib import Path

import numpy as np
import pytest

from layerscan.errors import InputError, SettingsError
from layerscan.optics.colour import (
    colour_difference,
    colour_of_spectrum,
    dominant_wavelength,
    lab_of_xyz,
    srgb_of_lab,
    tristimulus_weights,
    white_point,
    xyz_of_lab,
)

REFERENCE = Path(__file__).resolve().parents[1] / "reference"
VISIBLE = np.arange(380.0, 781.0)


@pytest.fixture(scope="module")
def colour():
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        import colour
    return colour


def gaussian(wavelength):
    return 0.05 + 0.75 * np.exp(-(((wavelength - 512) / 8) ** 2) / 2)


def test_white_of_d65():
    # CIE 15:2018: x = 0.3127, y = 0.3290 for the 2 degree observer, 0.3138 and 0.3310 for 10 degrees
    for observer, xy in ((2, (0.3127, 0.3290)), (10, (0.3138, 0.3310))):
        white = white_point(observer_deg=observer)
        assert white[1] == pytest.approx(100.0, abs=1e-12)
        assert (white / white.sum())[:2] == pytest.approx(xy, abs=6e-5)


@pytest.mark.parametrize(
    ("illuminant", "observer", "expected"),
    [
        # ASTM E308 table 5 (from memory, to the third decimal)
        ("D65", 2, (95.047, 100, 108.883)),
        ("D65", 10, (94.811, 100, 107.304)),
        ("D50", 2, (96.422, 100, 82.521)),
        ("A", 2, (109.850, 100, 35.585)),
    ],
)
def test_white_points_of_the_standard(illuminant, observer, expected):
    # ASTM E308 table 5, see above
    assert white_point(illuminant=illuminant, observer_deg=observer) == pytest.approx(expected, abs=0.01)


@pytest.mark.parametrize("illuminant", ["D65", "D50", "A"])
@pytest.mark.parametrize("observer", [2, 10])
def test_perfect_diffuser_is_white(illuminant, observer):
    # one consistent white: L* = 100, a* = b* = 0, swatch white, no dominant wavelength
    result = colour_of_spectrum(VISIBLE, np.ones(401), illuminant=illuminant, observer_deg=observer)
    assert result.lab == pytest.approx((100, 0, 0), abs=1e-9)
    assert result.srgb == "#ffffff"
    assert result.in_gamut
    assert result.dominant_wavelength_nm is None


@pytest.mark.parametrize("illuminant", ["D65", "D50", "A"])
@pytest.mark.parametrize("observer", [2, 10])
def test_tristimulus_values_agree_with_colour_science(colour, illuminant, observer):
    # colour-science 0.4, sd_to_XYZ (ASTM E308, 1 nm), to 1e-3
    name = {2: "CIE 1931 2 Degree Standard Observer", 10: "CIE 1964 10 Degree Standard Observer"}[observer]
    rng = np.random.default_rng(2)
    for values in (gaussian(VISIBLE), np.ones(401), 0.5 + 0.4 * np.sin(VISIBLE / 30), rng.uniform(0, 1, 401)):
        spectrum = colour.SpectralDistribution(dict(zip(VISIBLE, values, strict=True)))
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            expected = colour.sd_to_XYZ(
                spectrum, colour.MSDS_CMFS[name], colour.SDS_ILLUMINANTS[illuminant], method="ASTM E308"
            )
        result = colour_of_spectrum(VISIBLE, values, illuminant=illuminant, observer_deg=observer)
        assert result.xyz == pytest.approx(tuple(expected), abs=1e-3)


def test_narrow_band_of_the_facts_table():
    # computed with colour-science at 1 nm for this project: XYZ 5.2312241 13.33392325 7.76623752, Lab 43.2621 -65.2476
    # 19.2388
    result = colour_of_spectrum(VISIBLE, gaussian(VISIBLE))
    assert result.xyz == pytest.approx((5.2312241, 13.33392325, 7.76623752), abs=1e-3)
    assert result.lab == pytest.approx((43.26213673, -65.2475703, 19.23879355), abs=0.01)


@pytest.mark.parametrize(("step", "limit"), [(1, 0.01), (5, 0.01), (10, 0.05)])
def test_sampling_does_not_change_the_colour(step, limit):
    # a 10 nm table of a 19 nm wide band is interpolated, not summed as it is (that gives 0.003 at 10 nm, 0.94 at 20)
    wavelength = np.arange(380.0, 781.0, step)
    fine = colour_of_spectrum(VISIBLE, gaussian(VISIBLE))
    coarse = colour_of_spectrum(wavelength, gaussian(wavelength))
    assert colour_difference(fine.lab, coarse.lab) < limit


def test_ciede2000_pairs():
    # G. Sharma, W. Wu, E. N. Dalal (2005), table 1, 34 pairs printed to four decimals; tests/reference
    with (REFERENCE / "ciede2000_sharma34.csv").open() as file:
        rows = np.array([[float(x) for x in row] for row in list(csv.reader(file))[1:]])
    assert len(rows) == 34
    one, two, expected = rows[:, :3], rows[:, 3:6], rows[:, 6]
    np.testing.assert_allclose(colour_difference(one, two), expected, atol=5.1e-5)
    np.testing.assert_allclose(colour_difference(two, one), expected, atol=5.1e-5)  # symmetric


def test_lab_and_back():
    # inverse functions, dark colours below the linear limit included
    rng = np.random.default_rng(1)
    xyz = rng.uniform(0, 100, (200, 3)) * rng.choice([1e-3, 1.0], (200, 1))
    white = white_point()
    np.testing.assert_allclose(xyz_of_lab(lab_of_xyz(xyz, white), white), xyz, rtol=1e-12, atol=1e-12)


@pytest.mark.parametrize(
    ("lab", "srgb"),
    [
        # Lab of the sRGB primaries under D65 (Lindbloom's calculator, sRGB, D65; value from memory)
        ((53.24, 80.09, 67.20), "#ff0000"),
        ((87.73, -86.18, 83.18), "#00ff00"),
        ((32.30, 79.19, -107.86), "#0000ff"),
        ((53.585, 0, 0), "#808080"),
        ((0, 0, 0), "#000000"),
    ],
)
def test_srgb_of_known_colours(lab, srgb):
    # IEC 61966-2-1
    assert srgb_of_lab(lab) == (srgb, True)


def test_colour_outside_srgb_says_so_and_keeps_lightness():
    # a spectral green lies outside; the swatch has the same lightness
    result = colour_of_spectrum(VISIBLE, gaussian(VISIBLE))
    assert not result.in_gamut
    assert "out_of_gamut" in result.flags
    red, green, blue = (int(result.srgb[i : i + 2], 16) / 255 for i in (1, 3, 5))
    linear = [((v + 0.055) / 1.055) ** 2.4 if v > 0.04045 else v / 12.92 for v in (red, green, blue)]
    luminance = 100 * float(np.dot((0.2126, 0.7152, 0.0722), linear))
    assert luminance == pytest.approx(result.xyz[1], rel=0.02)


@pytest.mark.parametrize("center", [450.0, 480.0, 520.0, 570.0, 600.0])
def test_dominant_wavelength_of_a_narrow_band(center):
    # a line has itself as dominant wavelength and purity 1
    result = colour_of_spectrum(VISIBLE, np.exp(-(((VISIBLE - center) / 1.0) ** 2)))
    assert result.dominant_wavelength_nm == pytest.approx(center, abs=0.3)
    assert result.excitation_purity == pytest.approx(1.0, abs=0.01)


def test_purple_has_the_complementary_wavelength():
    # without its green the white is purple: the line through white meets the locus at the green left out
    result = colour_of_spectrum(VISIBLE, 1 - np.exp(-(((VISIBLE - 530) / 2.0) ** 2)))
    assert result.dominant_wavelength_nm == pytest.approx(-530, abs=1.0)
    assert 0 < result.excitation_purity < 1


def test_dominant_wavelength_agrees_with_colour_science(colour):
    # colour-science 0.4, dominant_wavelength and excitation_purity, which step in whole nm
    white = white_point()
    white = white / white.sum()
    rng = np.random.default_rng(6)
    for _ in range(20):
        xy = tuple(white[:2] + rng.uniform(-0.06, 0.06, 2))
        wavelength, purity = dominant_wavelength(xy)
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            expected = float(colour.dominant_wavelength(xy, white[:2])[0])
            expected_purity = float(colour.excitation_purity(xy, white[:2]))
        assert wavelength == pytest.approx(expected, abs=1.0)
        assert purity == pytest.approx(expected_purity, abs=0.01)


def test_mixing_with_white_lowers_purity_and_keeps_the_dominant_wavelength():
    # CIE 15:2018, section 7.3: both lie on one line through the white
    strong = colour_of_spectrum(VISIBLE, gaussian(VISIBLE))
    weak = colour_of_spectrum(VISIBLE, 0.5 * gaussian(VISIBLE) + 0.5)
    assert weak.dominant_wavelength_nm == pytest.approx(strong.dominant_wavelength_nm, abs=1e-6)
    assert weak.excitation_purity < strong.excitation_purity


@pytest.mark.parametrize(("low", "high", "truncated"), [(380, 780, False), (400, 700, True), (450, 780, True)])
def test_truncated_spectrum_is_flagged(low, high, truncated):
    # what lies outside carries less than 0.1 % of X, Y or Z, or the colour is flagged
    wavelength = np.arange(low, high + 1.0)
    assert ("spectrum_truncated" in colour_of_spectrum(wavelength, np.ones(wavelength.size)).flags) == truncated


def test_weights_are_linear():
    # XYZ of a sum is the sum of XYZ
    rng = np.random.default_rng(0)
    spectra = rng.uniform(0, 1, (5, 401))
    sums = spectra @ tristimulus_weights(VISIBLE)
    for values, expected in zip(spectra, sums, strict=True):
        assert colour_of_spectrum(VISIBLE, values).xyz == pytest.approx(tuple(expected), abs=1e-10)


@pytest.mark.parametrize(
    ("wavelength", "value", "options", "error", "message"),
    [
        ([500, 600], [1.0], {}, InputError, "two arrays of one length"),
        ([500, 600], [1.0, np.nan], {}, InputError, "not finite"),
        ([600, 500], [1.0, 1.0], {}, InputError, "do not increase"),
        ([900, 1000], [1.0, 1.0], {}, InputError, "900 to 1000 nm, nothing of the visible range"),
        ([380, 780], [1.0, 1.0], {"illuminant": "F2"}, SettingsError, "Illuminant 'F2' is not known"),
        ([380, 780], [1.0, 1.0], {"observer_deg": 4}, SettingsError, "Observer 4 degrees is not known"),
    ],
)
def test_bad_spectrum_is_named(wavelength, value, options, error, message):
    # the message says what came
    with pytest.raises(error, match=message):
        colour_of_spectrum(wavelength, value, **options)
