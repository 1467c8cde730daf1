from __future__ import annotations

import numpy as np
import pytest
from measurement.made_profiles import boundary_bound, step_profile

from layerscan.measurement import edges
from layerscan.measurement.boundaries import Hints, fit_boundaries, read_hints
from layerscan.measurement.profile import find_stack
from layerscan.measurement.segmentation import BRIGHT, DARK, OTHER


@pytest.mark.parametrize("arguments", [(0.7, 1.1, 2.3, 0.4), (-1.2, 1.0, 4.0, -0.3), (0.1, 0.8, 1.0, 0.0)])
def test_slopes_of_the_edge_are_those_of_finite_differences(arguments: tuple[float, ...]) -> None:
    # law: a derivative is the limit of differences (central, step 1e-5)
    step = 1e-5
    slopes = edges.blurred_edge(*arguments)[1:]
    for k in range(4):
        up = [a + step * (i == k) for i, a in enumerate(arguments)]
        down = [a - step * (i == k) for i, a in enumerate(arguments)]
        expected = (edges.blurred_edge(*up)[0] - edges.blurred_edge(*down)[0]) / (2 * step)
        assert slopes[k] == pytest.approx(expected, abs=1e-8)


@pytest.mark.parametrize("arguments", [(0.7, 1.1, 1.5), (-2.0, 1.0, 0.8), (9.0, 1.3, 2.0), (-9.0, 1.0, 0.7)])
def test_slopes_of_the_rim_are_those_of_finite_differences(arguments: tuple[float, ...]) -> None:
    # law: as above, for the one-sided exponential blurred by a Gaussian
    step = 1e-5
    slopes = edges.blurred_rim(*arguments)[1:]
    for k in range(3):
        up = [a + step * (i == k) for i, a in enumerate(arguments)]
        down = [a - step * (i == k) for i, a in enumerate(arguments)]
        expected = (edges.blurred_rim(*up)[0] - edges.blurred_rim(*down)[0]) / (2 * step)
        assert slopes[k] == pytest.approx(expected, abs=1e-7)


def test_an_edge_with_a_box_is_the_convolution_of_both() -> None:
    # closed form: blur(box) = mean of shifted error functions over the box, by quadrature
    from scipy.integrate import quad
    from scipy.special import ndtr

    for u in (-2.0, 0.3, 1.7):
        value = edges.blurred_edge(u, 0.9, 3.0, 0.0)[0]
        assert value == pytest.approx(quad(lambda x, u=u: ndtr((u - x) / 0.9) / 3.0, -1.5, 1.5)[0], abs=1e-10)


def test_positions_of_a_noise_free_profile_are_exact() -> None:
    # law: the model that made the profile is found again
    at = np.array([20.3, 31.1, 44.7, 52.2, 66.9, 75.4, 90.1])
    profile = step_profile(110, at, blur=1.4)
    fit = fit_boundaries(profile, weight=np.full(110, 1e4), position=at + 0.4, bright_first=False, nuisance=False)
    assert fit.position == pytest.approx(at, abs=1e-4)
    assert fit.shared[edges.BLUR] == pytest.approx(1.4, abs=1e-3)


@pytest.mark.parametrize(("width", "most"), [(8.0, 1.15), (4.0, 3.2)])
def test_error_of_a_boundary_stays_near_its_bound(width: float, most: float) -> None:
    # Cramer-Rao bound of a lone boundary with known levels (facts of the trade); 60 profiles of 20 boundaries. At 2.5
    # blurs the common level of the thin layers is not known: it moves all of them together, which u must say; what is
    # left within a profile stays at the bound
    blur, noise = 1.6, 0.05
    errors, stated = [], []
    for seed in range(60):
        shift = np.random.default_rng(seed).uniform(-0.5, 0.5)
        starts = 20 + shift + 30 * np.arange(10)
        at = np.sort(np.concatenate([starts, starts + width]))
        profile = step_profile(340, at, blur=blur, noise=noise, seed=seed)
        fit = fit_boundaries(
            profile, weight=np.full(340, noise**-2), position=at + 0.3, bright_first=False, blur=1.3, nuisance=False
        )
        errors.append(fit.position - at)
        stated.append(np.sqrt(np.diag(fit.covariance)))
    error = np.array(errors)
    bound = boundary_bound(blur=blur, noise=noise)
    within = error - np.where(
        np.arange(20) % 2 == 0, error[:, ::2].mean(1, keepdims=True), error[:, 1::2].mean(1, keepdims=True)
    )
    assert np.sqrt(np.mean(within**2) / 0.9) < 1.15 * bound
    assert np.sqrt(np.mean(error**2)) < most * bound
    assert 0.85 < np.sqrt(np.mean((error / np.array(stated)) ** 2)) < 1.2


def test_layers_are_found_with_resin_and_substrate_left_out() -> None:
    # the third levels at both ends are no layers
    at = np.array([60.0, 70, 80, 90, 100, 110, 120, 130, 140, 150, 160])
    levels = np.array([0.45, 0, 1, 0, 1, 0, 1, 0, 1, 0, 1, 1.6])
    profile = step_profile(220, at, blur=1.2, levels=levels, noise=0.03, seed=1)
    stack = find_stack(
        profile, variance=np.full(220, 0.03**2), period=20.0, layered=(60, 160), noise=np.full(220, 9e-4)
    )
    assert stack is not None
    u = np.sqrt(np.diag(stack.fit.covariance))
    assert np.abs(stack.position - at).max() < 0.5
    assert np.abs((stack.position - at) / u).max() < 4
    assert [stack.phase[0], stack.phase[-1]] == [OTHER, OTHER]
    assert set(stack.phase[1:-1].tolist()) == {DARK, BRIGHT}


def test_noise_at_a_third_of_the_contrast_costs_no_layer() -> None:
    # right count where thresholds give none (facts of the trade: 92-100 % of profiles); 20 profiles of 24 boundaries
    right = 0
    for seed in range(20):
        at = 12 + 11.0 * np.arange(24) + np.random.default_rng(seed).uniform(-1, 1, 24)
        profile = step_profile(270, at, blur=1.2, noise=0.3, seed=100 + seed)
        stack = find_stack(profile, variance=np.full(270, 0.09), period=22.0)
        right += stack is not None and len(stack.position) == 24 and np.abs(stack.position - at).max() < 4
    assert right >= 18


def test_noise_that_counts_electrons_means_a_skewed_edge_and_even_noise_means_a_linear_recording() -> None:
    # Poisson: variance proportional to intensity, so the ratio of variances is that of the intensities
    counted = read_hints(np.log(0.7 / 0.45), dark=0.45, bright=0.7, full_scale=None)
    assert counted.log_odds_skew > counted.log_odds_gamma
    assert counted.skew == pytest.approx(np.log(0.7 / 0.45))
    even = read_hints(0.01, dark=0.45, bright=0.7, full_scale=None)
    assert (even.gamma, even.skew, even.known) == (0.0, 0.0, True)
    # gamma 1.2 on even noise: slope of the curve scales the noise, g = -tanh(ratio/4) to first order
    curve = read_hints(0.15, dark=0.45, bright=0.7, full_scale=None)
    assert curve.gamma == pytest.approx(-np.tanh(0.15 / 4))
    assert read_hints(float("nan"), dark=0.1, bright=0.5, full_scale=None) == Hints()


def test_a_gamma_that_the_noise_reveals_displaces_no_boundary() -> None:
    # gamma shifts boundaries with alternating sign (facts of the trade: 0.15-0.23 px); a stated one does not
    at = 15 + 12.0 * np.arange(20)
    linear = step_profile(260, at, blur=1.6)
    g = 0.25
    profile = linear + g * linear * (1 - linear) + 0.01 * np.random.default_rng(2).standard_normal(260)
    alternating = np.where(np.arange(20) % 2 == 0, 1, -1)
    shifts = []
    for hints in (Hints(known=True), Hints(gamma=g, log_odds_gamma=4.0, log_odds_skew=-4.0, known=True)):
        fit = fit_boundaries(
            profile, weight=np.full(260, 1e4), position=at + 0.2, bright_first=False, blur=1.5, hints=hints
        )
        shifts.append(abs(float(np.mean(alternating * (fit.position - at)))))
    assert shifts[1] < 0.03 < 0.08 < shifts[0] + 0.08
    assert shifts[1] < 0.5 * shifts[0] + 0.02


def test_a_blurred_step_to_a_brighter_material_is_no_thin_layer() -> None:
    # dark layer, then a substrate brighter than the bright phase: the step passes the bright level without a layer
    at = np.array([60.0, 80, 100, 120, 140, 160, 180, 200])
    levels = np.array([1.0, 0, 1, 0, 1, 0, 1, 0, 1.5])
    profile = step_profile(320, at, blur=2.0, levels=levels, noise=0.02, seed=3)
    stack = find_stack(profile, variance=np.full(320, 4e-4), period=40.0, layered=(60, 210), noise=np.full(320, 4e-4))
    assert stack is not None
    assert len(stack.position) == 8
    assert stack.phase[-1] == OTHER
    assert stack.phase[-2] == DARK


def test_resin_of_the_grey_of_a_phase_is_no_layer() -> None:
    # the end is far longer than any layer of its phase, so the frame does not cut a layer there
    at = 90 + 10.0 * np.arange(13)
    profile = step_profile(260, at, blur=1.2, noise=0.02, seed=4)
    stack = find_stack(profile, variance=np.full(260, 4e-4), period=20.0)
    assert stack is not None
    assert stack.position == pytest.approx(at, abs=0.3)
    assert stack.phase[0] == OTHER
    assert stack.phase[-1] == OTHER
