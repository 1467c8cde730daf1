from dataclasses import replace

import numpy as np
import pytest
from figures.made_records import bell, make_prediction
from hypothesis import given, settings
from hypothesis import strategies as st

from layerscan.comparison import agreement as agree
from layerscan.comparison.quantities import like_with_like
from layerscan.records import Peak, Spectrum
from layerscan.settings import CompareSettings


def peak(wavelength, *, u=5.0, order=1, height=0.6, fwhm=60.0):
    return Peak(order=order, wavelength_nm=wavelength, u_wavelength_nm=u, reflectance=height, fwhm_nm=fwhm)


def judge(predicted, observed, *, calibrated=True):
    return agree.judge_peaks(agree.match_peaks([predicted], [observed]), calibrated=calibrated)


def test_p_value_is_that_of_a_two_sided_normal_law():
    # JCGM 100:2008, table G.1: 1.959964 u leave 5 %, 2.575829 u leave 1 %
    for z, p_value in ((1.959964, 0.05), (2.575829, 0.01)):
        found = judge(peak(545.0, u=3.0), peak(545.0 - 5 * z, u=4.0)).agreement
        assert found.statistic == pytest.approx(z, abs=1e-6)
        assert found.p_value == pytest.approx(p_value, abs=1e-6)


@settings(deadline=None, derandomize=True, max_examples=60)
@given(st.floats(400, 700), st.floats(0.5, 8.0), st.floats(-25.0, 25.0))
def test_passing_range_is_where_the_conclusion_turns(place, u, shift):
    # by definition: an observed peak inside the range passes, outside it contradicts
    predicted, seen = peak(place, u=u), peak(place + shift, u=0.6)
    verdict = judge(predicted, seen)
    low, high = verdict.agreement.passing_peak_range_nm
    assert (verdict.agreement.conclusion != "contradicts") == (low <= seen.wavelength_nm <= high)
    assert high - low == pytest.approx(2 * 1.959964 * np.hypot(u, 0.6))


def test_three_u_contradict_and_one_u_explains():
    assert judge(peak(545.0), peak(560.5, u=0.5)).agreement.conclusion == "contradicts"
    assert judge(peak(545.0), peak(550.0, u=0.5)).agreement.conclusion == "explains"


def test_unknown_calibration_tells_nothing_but_how_much_would_do():
    # the honest answer is "cannot tell until one is given"
    verdict = judge(peak(550.0), peak(500.0), calibrated=False)
    assert verdict.agreement.conclusion == "cannot_tell"
    assert verdict.agreement.statistic is None
    assert verdict.agreement.p_value is None
    assert verdict.agreement.passing_peak_range_nm is None
    assert "10.0 %" in verdict.doubts[0]


@pytest.mark.parametrize("u", [None, 0.0])
def test_prediction_without_uncertainty_tells_nothing(u):
    verdict = judge(peak(550.0, u=u), peak(500.0))
    assert verdict.agreement.conclusion == "cannot_tell"
    assert "no uncertainty" in verdict.doubts[0]


def test_missing_peak_tells_nothing():
    verdict = agree.judge_peaks(agree.match_peaks([], [peak(500.0)]), calibrated=True)
    assert verdict.agreement.conclusion == "cannot_tell"
    assert "no peak" in verdict.doubts[0]


@pytest.mark.parametrize(("order", "u", "words"), [(1, 40.0, "120 nm"), (8, 17.0, "next order")])
def test_range_that_says_nothing_cannot_tell(order, u, words):
    # rule of the project: wider than 120 nm, or than the distance to the next order, lambda/(m + 1)
    verdict = judge(peak(545.0, u=u, order=order), peak(546.0))
    assert verdict.agreement.conclusion == "cannot_tell"
    assert words in verdict.doubts[0]


def test_wide_range_still_contradicts_what_lies_outside_it():
    assert judge(peak(545.0, u=40.0), peak(700.0)).agreement.conclusion == "contradicts"


@pytest.mark.parametrize("fwhm", [25.0, 130.0])
def test_band_of_another_width_is_not_explained(fwhm):
    verdict = judge(peak(545.0, fwhm=60.0), peak(545.0, fwhm=fwhm))
    assert verdict.agreement.conclusion == "cannot_tell"
    assert f"{fwhm:.0f} nm wide" in verdict.doubts[0]


def test_peaks_are_matched_by_height_and_nearness():
    predicted = [peak(534.0, order=3, height=0.8), peak(400.0, order=4, height=0.5)]
    match = agree.match_peaks(predicted, [peak(540.0, order=None, height=0.4), peak(405.0, order=None, height=0.3)])
    assert (match.predicted.order, match.observed.wavelength_nm) == (3, 540.0)
    assert not match.order_uncertain


def test_peak_between_two_orders_is_of_uncertain_order():
    predicted = [peak(534.0, order=3), peak(400.0, order=4)]
    assert agree.match_peaks(predicted, [peak(470.0, order=None)]).order_uncertain


def test_peak_of_uncertain_order_explains_nothing():
    predicted = [peak(500.0, order=3, u=25.0), peak(390.0, order=4, u=20.0)]
    verdict = agree.judge_peaks(agree.match_peaks(predicted, [peak(465.0, order=None)]), calibrated=True)
    assert verdict.agreement.conclusion == "cannot_tell"
    assert "another order" in verdict.doubts[0]


def test_far_peaks_are_still_compared():
    match = agree.match_peaks([peak(400.0)], [peak(760.0, order=None)])
    assert match.difference_nm == -360.0


@pytest.mark.parametrize("kind", ["reflectance", "transmittance"])
def test_observed_peak_is_read_with_the_uncertainty_that_noise_gives(kind):
    # simulation: the scatter of the midpoint over noisy copies against the stated part from noise
    prediction = make_prediction()
    wavelength = np.arange(380.0, 781.0)
    rng = np.random.default_rng(5)
    places, stated = [], []
    for _ in range(120):
        value = bell(wavelength, 550.0) + rng.normal(0, 0.03, wavelength.size)
        value = 1 - value if kind == "transmittance" else value
        seen = Spectrum(wavelength_nm=wavelength, value=value, kind=kind)
        found = agree.observed_peaks(like_with_like(prediction, seen, CompareSettings()))
        best = max(found, key=lambda p: p.reflectance)
        places.append(best.wavelength_nm)
        stated.append(np.sqrt(best.u_wavelength_nm**2 - agree.U_WAVELENGTH_SCALE_NM**2 - 1 / 12))
    assert np.mean(places) == pytest.approx(550.0, abs=0.5)
    assert 0.6 < np.median(stated) / np.std(places) < 1.9


def test_dips_of_transmittance_carry_the_uncertainty_of_their_peaks():
    # without loss T = 1 - R: same midpoint, same u
    prediction = make_prediction(centre=545.0, u_nm=6.0)
    seen = Spectrum(
        wavelength_nm=prediction.transmittance.wavelength_nm, value=prediction.transmittance.value, kind="transmittance"
    )
    (dip,) = agree.predicted_peaks(like_with_like(prediction, seen, CompareSettings()), prediction)
    assert dip.wavelength_nm == pytest.approx(545.0, abs=0.01)
    assert (dip.u_wavelength_nm, dip.order) == (6.0, 1)


def false_contradictions(pairs, seed):
    """Share of pairs that contradict although the truth is what was predicted, both within their stated u."""
    rng = np.random.default_rng(seed)
    wavelength = np.arange(380.0, 781.0)
    count = 0
    for _ in range(pairs):
        truth, u = rng.uniform(480, 650), rng.uniform(3, 12)
        prediction = make_prediction(centre=truth + rng.normal(0, u), u_nm=u)
        place = truth + rng.normal(0, agree.U_WAVELENGTH_SCALE_NM)
        value = bell(wavelength, place) + rng.normal(0, 0.01, wavelength.size)
        seen = Spectrum(wavelength_nm=wavelength, value=value, kind="reflectance")
        pair = like_with_like(prediction, seen, CompareSettings())
        match = agree.match_peaks(agree.predicted_peaks(pair, prediction), agree.observed_peaks(pair))
        count += agree.judge_peaks(match, calibrated=True).agreement.conclusion == "contradicts"
    return count


def test_false_contradictions_come_as_often_as_stated():
    # coverage: 5 % of 400, binomial 99.8 % bounds 8 to 34 (scipy.stats.binom.ppf([.001, .999], 400, .05))
    assert 8 <= false_contradictions(400, 11) <= 34


@pytest.mark.slow
def test_false_contradictions_come_as_often_as_stated_long():
    # coverage: 5 % of 6000, binomial 99.8 % bounds 249 to 353
    assert 249 <= false_contradictions(6000, 12) <= 353


def test_colour_inside_the_radius_passes_and_outside_does_not():
    # chi-square with 3 degrees of freedom leaves 5 % at the radius that holds 95 %
    edge = agree.judge_colour(6.0, 6.0, calibrated=True).agreement
    assert edge.conclusion == "explains"
    assert edge.p_value == pytest.approx(0.05, abs=1e-6)
    assert agree.judge_colour(6.1, 6.0, calibrated=True).agreement.conclusion == "contradicts"
    assert agree.judge_colour(6.0, 25.0, calibrated=True).agreement.conclusion == "cannot_tell"
    assert agree.judge_colour(6.0, None, calibrated=True).agreement.conclusion == "cannot_tell"
    assert agree.judge_colour(6.0, 6.0, calibrated=False).agreement.conclusion == "cannot_tell"


def test_u_of_the_observation_widens_the_range():
    narrow = judge(peak(545.0), peak(545.0, u=0.5)).agreement.passing_peak_range_nm
    wide = judge(peak(545.0), replace(peak(545.0), u_wavelength_nm=8.0)).agreement.passing_peak_range_nm
    assert wide[1] - wide[0] > narrow[1] - narrow[0]
