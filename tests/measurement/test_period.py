from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from layerscan.errors import MeasurementError
from layerscan.measurement.period import estimate_period


def _bound(*, period: float, noise: float, amplitudes: tuple[float, ...], count: int) -> float:
    total = sum(((m + 1) * a) ** 2 for m, a in enumerate(amplitudes))
    return period**2 * math.sqrt(6 * noise**2 / (math.pi**2 * total * count * (count**2 - 1)))


def _draw(
    rng: np.random.Generator, *, period: float, noise: float, amplitudes: tuple[float, ...], count: int
) -> np.ndarray:
    x = np.arange(count) + rng.uniform(0, period)
    wave = sum(a * np.cos(2 * np.pi * (m + 1) * x / period) for m, a in enumerate(amplitudes))
    return wave + noise * rng.standard_normal(count)


@given(period=st.floats(6.0, 60.0), phase=st.floats(0, 6.28), offset=st.floats(-1e3, 1e3), slope=st.floats(-0.05, 0.05))
@settings(deadline=None, derandomize=True, max_examples=25)
def test_noise_free_wave_is_recovered_whatever_its_offset_and_slope(
    period: float, phase: float, offset: float, slope: float
) -> None:
    # law: least squares of the very model that made the profile has no error but rounding
    x = np.arange(400)
    found = estimate_period(np.cos(2 * np.pi * x / period + phase) + offset + slope * x, step_nm=1.0)
    assert found.period_nm == pytest.approx(period, rel=1e-6)


def test_doubling_the_step_doubles_the_period_and_its_uncertainty() -> None:
    # change that must matter exactly: units
    profile = _draw(np.random.default_rng(3), period=23.0, noise=0.3, amplitudes=(1.0, 0.3), count=500)
    once, twice = estimate_period(profile, step_nm=1.5), estimate_period(profile, step_nm=3.0)
    assert twice.period_nm == pytest.approx(2 * once.period_nm, rel=1e-12)
    assert twice.u_period_nm == pytest.approx(2 * once.u_period_nm, rel=1e-9)


def test_reversing_inverting_and_scaling_the_profile_change_nothing() -> None:
    # change that must not matter
    profile = _draw(np.random.default_rng(4), period=17.0, noise=0.2, amplitudes=(1.0, 0.2), count=400)
    base = estimate_period(profile, step_nm=1.0).period_nm
    for changed in (profile[::-1].copy(), -profile, 250.0 * profile + 40.0):
        assert estimate_period(changed, step_nm=1.0).period_nm == pytest.approx(base, rel=1e-6)


def test_the_fundamental_is_found_and_not_its_harmonic() -> None:
    # a square wave has odd harmonics only, a narrow one has all: both repeat at the fundamental
    x = np.arange(600)
    for duty in (0.5, 0.2):
        wave = ((x / 27.3) % 1 < duty).astype(float)
        assert estimate_period(wave, step_nm=1.0).period_nm == pytest.approx(27.3, rel=2e-3)


@pytest.mark.parametrize(
    ("period", "noise", "amplitudes", "count"),
    [(22.3, 0.5, (1.0, 0.3, 0.2), 512), (17.7, 1.0, (1.0,), 200), (19.1, 0.3, (1.0,), 70)],
)
def test_error_reaches_the_cramer_rao_bound_and_the_stated_uncertainty_is_true(
    period: float, noise: float, amplitudes: tuple[float, ...], count: int
) -> None:
    # bound of a periodic profile: facts of the trade (measurement.md); 150 draws know an rms to 6 %
    rng = np.random.default_rng(7)
    found = [
        estimate_period(_draw(rng, period=period, noise=noise, amplitudes=amplitudes, count=count), step_nm=1.0)
        for _ in range(150)
    ]
    error = np.array([f.period_nm - period for f in found])
    rms = float(np.sqrt(np.mean(error**2)))
    bound = _bound(period=period, noise=noise, amplitudes=amplitudes, count=count)
    assert rms < 1.1 * bound * (1 + 2 / math.sqrt(2 * 150))
    pull = float(np.sqrt(np.mean((error / [f.u_period_nm for f in found]) ** 2)))
    assert 0.85 < pull < 1.2


@pytest.mark.slow
def test_bound_is_reached_over_many_draws() -> None:
    # the same over 2000 draws, which know an rms to 1.6 %
    rng = np.random.default_rng(8)
    error = [
        estimate_period(_draw(rng, period=22.3, noise=0.5, amplitudes=(1.0, 0.3), count=300), step_nm=1.0).period_nm
        - 22.3
        for _ in range(2000)
    ]
    bound = _bound(period=22.3, noise=0.5, amplitudes=(1.0, 0.3), count=300)
    assert np.sqrt(np.mean(np.square(error))) < 1.1 * bound


def test_noise_alone_has_no_period() -> None:
    # honest refusal: no alarm in 100 draws bounds the rate at 3 % (95 %)
    rng = np.random.default_rng(9)
    for _ in range(100):
        with pytest.raises(MeasurementError, match="stands out"):
            estimate_period(rng.standard_normal(300), step_nm=1.0)


@pytest.mark.parametrize(
    ("profile", "message"),
    [
        (np.sin(np.arange(40) / 3), "2.1 periods"),
        (np.full(60, 3.0), "constant"),
        (np.array([1.0, np.nan] * 20), "20 of 40 samples"),
        (np.arange(100.0), "stands out"),
        (np.ones((5, 20)), "2 dimensions"),
        (np.arange(5.0), "5 samples"),
        (np.array(["a"] * 20), "not real numbers"),
    ],
)
def test_profiles_without_an_honest_period_are_refused(profile: np.ndarray, message: str) -> None:
    # bad input
    with pytest.raises(MeasurementError, match=message):
        estimate_period(profile, step_nm=1.0)


@pytest.mark.parametrize("step", [0.0, -1.0, math.nan, math.inf])
def test_a_step_that_is_no_length_is_refused(step: float) -> None:
    # bad input
    with pytest.raises(MeasurementError, match="step"):
        estimate_period(np.sin(np.arange(200) / 3), step_nm=step)
