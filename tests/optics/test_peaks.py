"""Reading bands: closed-form shapes, noise, ends of the range."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from layerscan.errors import InputError
from layerscan.optics.peaks import find_peaks
from layerscan.optics.transfer import reflectance_transmittance

WAVELENGTH = np.arange(380.0, 781.0)


def gaussian(center, width, height=1.0):
    return height * np.exp(-4 * np.log(2) * ((WAVELENGTH - center) / width) ** 2)


@given(center=st.floats(480, 680), width=st.floats(10, 80), height=st.floats(0.05, 1), base=st.floats(0, 0.5))
@settings(deadline=None, derandomize=True, max_examples=100)
def test_gaussian_band(center, width, height, base):
    # a Gaussian has its midpoint at its center and its width at half height above the base
    (peak,) = find_peaks(WAVELENGTH, base + gaussian(center, width, height))
    assert peak.wavelength_nm == pytest.approx(center, abs=0.05)
    assert peak.fwhm_nm == pytest.approx(width, abs=0.15)
    assert peak.reflectance == pytest.approx(base + height, abs=0.02 * height)


@given(factor=st.floats(0.01, 1.0), offset=st.floats(0, 0.5))
@settings(deadline=None, derandomize=True, max_examples=40)
def test_scale_and_offset_move_nothing(factor, offset):
    # half height is relative to the band's own base: y -> a y + b keeps wavelength and width
    y = gaussian(500, 30) + gaussian(620, 50, 0.7)
    before, after = find_peaks(WAVELENGTH, y), find_peaks(WAVELENGTH, factor * y + offset)
    assert [p.wavelength_nm for p in after] == pytest.approx([p.wavelength_nm for p in before], abs=1e-9)
    assert [p.fwhm_nm for p in after] == pytest.approx([p.fwhm_nm for p in before], abs=1e-9)


def test_mirrored_spectrum_has_mirrored_peaks():
    # turning the wavelength axis round must only turn the result round
    y = gaussian(480, 30) + gaussian(620, 50, 0.7)
    mirrored = find_peaks(WAVELENGTH, y[::-1])
    expected = [1160 - p.wavelength_nm for p in reversed(find_peaks(WAVELENGTH, y))]
    assert [p.wavelength_nm for p in mirrored] == pytest.approx(expected, abs=1e-9)


def test_flat_top_is_read_at_its_flanks():
    # the largest value of a rippled plateau wanders, the midpoint of its flanks does not
    y = np.where(abs(WAVELENGTH - 550) <= 40, 0.95 + 0.02 * np.sin(WAVELENGTH * 0.7), 0.02)
    (peak,) = find_peaks(WAVELENGTH, y)
    assert peak.wavelength_nm == pytest.approx(550, abs=0.1)
    assert peak.fwhm_nm == pytest.approx(81, abs=0.2)


@pytest.mark.parametrize("center", [382.0, 390.0, 770.0, 779.0, 800.0])
def test_band_cut_off_by_the_range_is_not_read(center):
    # half of such a band is missing: no number is better than a wrong one
    assert find_peaks(WAVELENGTH, gaussian(center, 60)) == ()


@pytest.mark.parametrize("y", [np.zeros(401), np.full(401, 0.3), np.linspace(0, 1, 401)])
def test_no_band_no_peak(y):
    # constants and slopes hold no band
    assert find_peaks(WAVELENGTH, y) == ()


@pytest.mark.parametrize("sigma", [0.002, 0.01, 0.03])
def test_noise_neither_makes_peaks_nor_moves_them(sigma):
    # seeded noise on one band: one peak, at its place within what the noise allows
    rng = np.random.default_rng(7)
    found = []
    for _ in range(40):
        peaks = find_peaks(WAVELENGTH, gaussian(530, 60, 0.6) + 0.05 + sigma * rng.standard_normal(401))
        assert len(peaks) == 1
        found.append(peaks[0].wavelength_nm)
    assert np.mean(found) == pytest.approx(530, abs=0.5)
    assert np.std(found) < 1.5 * max(sigma / 0.01, 0.5)


def test_pure_noise_has_no_peak():
    # seeded: at most one in twenty spectra of noise alone claims a band
    rng = np.random.default_rng(9)
    claimed = sum(bool(find_peaks(WAVELENGTH, 0.3 + 0.01 * rng.standard_normal(401))) for _ in range(100))
    assert claimed <= 5


def periodic(high, low, pairs, outside=1.33):
    layers = [1.56, 1.34] * pairs
    n = np.array([outside, 1.56, 1.34])[:, None] * np.ones(401)
    sequence = [[0, *[1, 2] * pairs, 0]]
    r, _ = reflectance_transmittance(n, sequence, [[high, low] * pairs], WAVELENGTH, polarisations=("s",))
    order = 2 * (1.56 * high + 1.34 * low) / WAVELENGTH
    assert len(layers) == 2 * pairs
    return r[0, 0, 0], order


@pytest.mark.parametrize("pairs", [8, 20, 60])
def test_side_lobes_are_no_orders(pairs):
    # one band of the first order in the visible: exactly one peak, near 2 x optical period
    y, order = periodic(95, 110, pairs)
    (peak,) = find_peaks(WAVELENGTH, y, order=order, smooth=False)
    assert peak.order == 1
    bragg = 2 * (1.56 * 95 + 1.34 * 110)
    assert peak.wavelength_nm == pytest.approx(bragg, abs=12)


def test_all_orders_of_a_thick_period():
    # 2 x optical period = 2 x (1.56 x 500 + 1.34 x 200) = 2096 nm: orders 3, 4 and 5 at 699, 524 and 419 nm
    y, order = periodic(500, 200, 25)
    peaks = find_peaks(WAVELENGTH, y, order=order, smooth=False)
    assert [p.order for p in peaks] == [3, 4, 5]
    for peak in peaks:
        assert peak.wavelength_nm == pytest.approx(2096 / peak.order, abs=4)


def test_missing_even_order_is_not_invented():
    # quarter-wave layers at 1100 nm have no second order at 550 nm
    y, order = periodic(1100 / 4 / 1.56, 1100 / 4 / 1.34, 30)
    assert find_peaks(WAVELENGTH, y, order=order, smooth=False) == ()


@pytest.mark.parametrize(
    ("x", "y", "message"),
    [
        ([1, 2, 3], [0, 1, 0], "five values or more"),
        ([1, 2, 3, 4, 5], [0, 1, np.nan, 1, 0], "not finite"),
        ([1, 2, 2, 4, 5], [0, 1, 2, 1, 0], "do not increase"),
    ],
)
def test_bad_spectrum_is_named(x, y, message):
    # the message says what came
    with pytest.raises(InputError, match=message):
        find_peaks(x, y)
