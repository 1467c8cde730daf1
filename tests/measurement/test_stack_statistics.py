from __future__ import annotations

import math

import numpy as np
import pytest

from layerscan.geometry import correct_lengths
from layerscan.measurement.budget import budget_rows, common_parts, largest_component
from layerscan.measurement.statistics import (
    average_thickness,
    count_missing,
    describe_phase,
    describe_stack,
    longest_run,
    steady_span,
)
from layerscan.measurement.traces import RoughnessModel, fit_covariance, pooled_covariance, smooth_traces


def _depths(rng: np.random.Generator, *, periods: int, sd: float, noise: float) -> np.ndarray:
    thickness = 10 + sd * rng.standard_normal(2 * periods)
    return np.concatenate([[0], np.cumsum(thickness)]) + noise * rng.standard_normal(2 * periods + 1)


def test_spread_between_layers_is_free_of_measurement_noise() -> None:
    # law: var(observed) = var(layers) + noise; 400 layers know an SD to 4 %
    rng = np.random.default_rng(1)
    truth = 20 + 1.5 * rng.standard_normal(400)
    covariance = np.eye(400) * 1.0**2
    found = average_thickness(truth + rng.standard_normal(400), covariance, u_scale=None)
    assert found.sd == pytest.approx(1.5, rel=0.12)
    assert found.u == pytest.approx(1 / math.sqrt(400), rel=1e-9)
    assert found.n == 400


def test_two_layers_have_no_spread() -> None:
    # no number where there is none to be had
    assert average_thickness(np.array([1.0, 2.0]), np.zeros((2, 2)), u_scale=None).sd is None
    assert average_thickness(np.zeros(0), np.zeros((0, 0)), u_scale=None) is None


def test_the_law_of_a_skewed_sample_is_lognormal() -> None:
    # closed form: skewness of a lognormal law with sigma 0.5 is 1.75
    rng = np.random.default_rng(2)
    skewed = describe_phase("dark", np.exp(3 + 0.5 * rng.standard_normal(300)), np.zeros((300, 300)))
    assert skewed.law == "lognormal"
    assert skewed.skewness == pytest.approx(1.75, abs=0.6)
    assert skewed.law_p_value > 0.01
    even = describe_phase("dark", rng.uniform(5, 6, 300), np.zeros((300, 300)))
    assert even.law_p_value < 0.01


def test_the_longest_run_is_of_whole_periods_traced_at_both_ends() -> None:
    # definition of INTERFACE.md
    phase = ("dark", "bright", "dark", "bright", "dark")
    seen = np.ones((6, 10), bool)
    assert longest_run(phase, seen, least_common=3) in ((0, 4, 2), (1, 5, 2))
    seen[0, 2:] = False
    assert longest_run(phase, seen, least_common=3) == (1, 5, 2)
    seen[5, 2:] = False
    assert longest_run(phase, seen, least_common=3) in ((1, 3, 1), (2, 4, 1))
    assert longest_run(("dark",), np.ones((2, 4), bool), least_common=1) is None


def test_independent_periods_are_cumulative_and_jitter_is_not() -> None:
    # paracrystal: independent periods wander; jitter about fixed places anticorrelates neighbouring periods at -1/2
    rng = np.random.default_rng(3)
    phase = ("dark", "bright") * 60
    quiet = 1e-6 * np.eye(121)
    common = {
        "covariance": quiet,
        "replication": None,
        "terminations": 0,
        "missing": 0,
        "limited_by": None,
        "next_measurement": None,
    }
    wander = describe_stack(depth=_depths(rng, periods=60, sd=0.5, noise=0.0), phase=phase, **common)
    assert wander.disorder == "cumulative"
    assert wander.coherence_length_nm == pytest.approx(20 * 20**2 / 0.5 / (2 * math.pi**2), rel=0.6)
    jitter = describe_stack(depth=10.0 * np.arange(121) + 0.4 * rng.standard_normal(121), phase=phase, **common)
    assert jitter.disorder == "non-cumulative"
    assert jitter.neighbour_correlation < -0.2


def test_a_drift_is_found_with_its_uncertainty() -> None:
    # law: least squares of a known slope
    rng = np.random.default_rng(4)
    periods = 20 * (1 + 0.004 * np.arange(50)) + 0.1 * rng.standard_normal(50)
    depth = np.concatenate([[0], np.cumsum(np.repeat(periods / 2, 2))])
    found = describe_stack(
        depth=depth, phase=("dark", "bright") * 50, covariance=1e-6 * np.eye(101), replication=None, terminations=0,
        missing=0, limited_by=None, next_measurement=None,
    )  # fmt: skip
    expected = 0.08 / periods.mean()
    assert abs(found.drift_relative_per_layer - expected) < 4 * found.u_drift_relative_per_layer


def test_the_span_of_a_lattice_uses_all_boundaries_and_that_of_a_disordered_stack_its_ends() -> None:
    # bound of a line through n + 1 points against that of its two ends: sqrt(6 n/((n+1)(n+2)) ... ) < sqrt(2)
    rng = np.random.default_rng(5)
    noise = 0.2
    covariance = noise**2 * np.eye(41)
    phase = ("dark", "bright") * 20
    errors, stated, ends = [], [], []
    for _ in range(200):
        depth = _depths(rng, periods=20, sd=0.0, noise=noise)
        correction, u = steady_span(depth, covariance, phase)
        errors.append(depth[-1] - depth[0] + correction - 400)
        ends.append(depth[-1] - depth[0] - 400)
        stated.append(u)
    assert np.std(errors) < 0.6 * np.std(ends)
    assert 0.8 < np.sqrt(np.mean((np.array(errors) / stated) ** 2)) < 1.35
    assert steady_span(_depths(rng, periods=20, sd=3.0, noise=noise), covariance, phase) is None


def test_a_budget_adds_up_and_names_what_limits() -> None:
    # GUM: shares of the variance add to one; an unstated pixel size limits more than anything known
    geometry = correct_lengths(compression="10 +- 3 %")
    known = budget_rows("period_nm", 200.0, common_parts(200.0, u_pixel_size=0.01, geometry=geometry))
    assert sum(row.share for row in known) == pytest.approx(1)
    assert largest_component(known)[0] == "compression"
    unknown = budget_rows("period_nm", 200.0, common_parts(200.0, u_pixel_size=None, geometry=geometry))
    name, advice = largest_component(unknown)
    assert "not stated" in name
    assert "grating" in advice
    assert largest_component(()) == (None, None)


def _rough(
    rng: np.random.Generator, *, traces: int, stations: int, length: float, noise: float
) -> tuple[np.ndarray, np.ndarray]:
    decay = math.exp(-1 / length)  # first-order autoregression: covariance exp(-lag/length), variance 1
    truth = rng.standard_normal((traces, stations))
    for j in range(1, stations):
        truth[:, j] = decay * truth[:, j - 1] + math.sqrt(1 - decay**2) * truth[:, j]
    return truth, truth + noise * rng.standard_normal(truth.shape)


@pytest.mark.parametrize("noise", [0.3, 1.0, 2.0])
def test_roughness_extrapolated_to_zero_lag_leaves_noise_out(noise: float) -> None:
    # height-height correlation at lags above zero knows nothing of independent noise; truth 1
    truth, raw = _rough(np.random.default_rng(6), traces=40, stations=600, length=15.0, noise=noise)
    valid = np.ones(raw.shape, bool)
    own, _ = pooled_covariance(raw - raw.mean(axis=1, keepdims=True), valid, 60)
    variance, _, _ = fit_covariance(own[:, None])
    assert math.sqrt(variance[0]) == pytest.approx(truth.std(), rel=0.08)


def test_smoothed_traces_are_nearer_the_truth_and_say_how_near() -> None:
    # posterior standard deviation of the Gaussian process against the error that was made, a gap included
    truth, raw = _rough(np.random.default_rng(7), traces=12, stations=500, length=20.0, noise=1.0)
    valid = np.ones(raw.shape, bool)
    valid[3, 200:230] = False
    model = RoughnessModel(variance=1.0, length=20.0, hurst=0.5, noise_variance=1.0, replication=0.0)
    smooth, u, _ = smooth_traces(raw, valid, model)
    error = (smooth - truth)[valid]
    assert np.sqrt(np.mean(error**2)) < 0.55
    assert np.sqrt(np.mean((error / u[valid]) ** 2)) == pytest.approx(1, abs=0.12)


def test_values_left_out_do_not_steer_their_own_average() -> None:
    # law: moving one raw value moves the smoothed value there, and not the one smoothed without it
    _, raw = _rough(np.random.default_rng(8), traces=3, stations=300, length=20.0, noise=1.0)
    valid = np.ones(raw.shape, bool)
    model = RoughnessModel(variance=1.0, length=20.0, hurst=0.5, noise_variance=1.0, replication=0.0)
    moved = raw.copy()
    moved[1, 150] += 1.0
    first, second = smooth_traces(raw, valid, model), smooth_traces(moved, valid, model)
    assert second[0][1, 150] - first[0][1, 150] > 0.05
    assert abs(second[2][1, 150] - first[2][1, 150]) < 0.01


def test_a_merged_layer_counts_as_one_missing() -> None:
    # a dark layer left out: its bright neighbours merge into one as thick as two and the gap
    thickness = np.array([8.0, 12, 8, 12, 8, 32, 8, 12, 8, 12])
    phase = ("dark", "bright") * 5
    assert count_missing(thickness, phase) == 1
    assert count_missing(np.where(thickness == 32, 13, thickness), phase) == 0
