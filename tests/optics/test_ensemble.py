"""Disorder: the draws are like what was measured, and the physics of random piles."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from layerscan.optics.conditions import make_cone
from layerscan.optics.ensemble import (
    describe_thickness,
    draw_errors,
    draw_layers,
    fill_stations,
    repeat_of,
    split_by_width,
)
from layerscan.optics.lateral import lateral_reflectance
from layerscan.optics.transfer import reflectance_transmittance

MEAN, SD = np.array([95.0, 110.0]), np.array([6.0, 9.0])


def measured(rng, *, layers=4000, correlation=0.0, drift=0.0, noise=0.0):
    """An alternating sequence whose neighbours correlate, drawn here without the code under test."""
    kind = np.arange(layers) % 2
    z = rng.standard_normal(layers)
    for j in range(1, layers):
        z[j] = correlation * z[j - 1] + np.sqrt(1 - correlation**2) * z[j]
    trend = 1 + drift * (np.arange(layers) - (layers - 1) / 2)
    thickness = (MEAN[kind] + SD[kind] * z) * trend + noise * rng.standard_normal(layers)
    return thickness, kind, np.full(layers, noise)


def lag_one(values):
    """Correlation of neighbours of standardised values, (draws, layers)."""
    return float(np.mean(values[:, 1:] * values[:, :-1]) / np.mean(values**2))


@pytest.mark.parametrize("correlation", [-0.4, 0.0, 0.6])
def test_neighbours_correlate_in_draws_as_measured(correlation):
    # the measured lag-one correlation is that of the draws, and that of the sequence which was measured
    rng = np.random.default_rng(1)
    model = describe_thickness(*measured(rng, correlation=correlation))
    assert model.correlation == pytest.approx(correlation, abs=0.05)
    kind, drawn = draw_layers(model, layers=60, draws=2000, rng=rng)
    z = (drawn - model.mean_nm[kind]) / model.sd_nm[kind]
    assert lag_one(z) == pytest.approx(model.correlation, abs=0.01)


def test_draws_have_the_measured_means_and_spreads():
    # per kind, within sampling error
    rng = np.random.default_rng(2)
    model = describe_thickness(*measured(rng, correlation=0.3))
    kind, drawn = draw_layers(model, layers=40, draws=4000, rng=rng)
    for k in (0, 1):
        assert drawn[:, kind == k].mean() == pytest.approx(MEAN[k], rel=0.01)
        assert drawn[:, kind == k].std() == pytest.approx(SD[k], rel=0.05)


def test_measurement_noise_is_not_drawn_again():
    # sd of the draws is that of the layers, noise removed
    rng = np.random.default_rng(3)
    model = describe_thickness(*measured(rng, noise=8.0))
    np.testing.assert_allclose(model.sd_nm, SD, rtol=0.1)


def test_shared_boundaries_do_not_look_like_anticorrelated_layers():
    # errors of boundaries make neighbours anticorrelate; the layers themselves are independent here
    rng = np.random.default_rng(4)
    thickness, kind, _ = measured(rng)
    error = np.diff(5.0 * rng.standard_normal(thickness.size + 1))
    u = np.full(thickness.size, 5.0 * np.sqrt(2))
    assert describe_thickness(thickness + error, kind, u).correlation < -0.2
    assert describe_thickness(thickness + error, kind, u, from_boundaries=True).correlation == pytest.approx(
        0, abs=0.06
    )


def test_drift_is_found_and_carried_on():
    # relative slope per layer; without drift none is claimed
    rng = np.random.default_rng(5)
    model = describe_thickness(*measured(rng, layers=200, drift=1e-3))
    assert model.drift_per_layer == pytest.approx(1e-3, rel=0.2)
    kind, drawn = draw_layers(model, layers=100, draws=500, rng=rng, first=200, conditional=True)
    expected = model.mean_nm[kind] * (1 + model.drift_per_layer * (200 + np.arange(100) - 99.5))
    np.testing.assert_allclose(drawn.mean(axis=0), expected, rtol=0.02)
    assert describe_thickness(*measured(rng, layers=200)).drift_per_layer == 0.0


def test_further_layers_continue_pattern_and_residual():
    # the first further layer leans on the last one seen by the correlation
    rng = np.random.default_rng(6)
    thickness, kind, u = measured(rng, layers=201, correlation=0.7)
    thickness[-1] = MEAN[0] + 2.5 * SD[0]
    model = describe_thickness(thickness, kind, u)
    further, drawn = draw_layers(model, layers=4, draws=4000, rng=rng, first=201, conditional=True)
    assert further.tolist() == [1, 0, 1, 0]
    lean = (drawn[:, 0].mean() - model.mean_nm[1]) / model.sd_nm[1]
    assert lean == pytest.approx(model.correlation * model.last_residual, abs=0.1)


def test_wide_spread_stays_positive():
    # lognormal above a relative spread of 0.25: mean and spread are kept, nothing is negative
    rng = np.random.default_rng(7)
    thickness = 100 * np.exp(0.5 * rng.standard_normal(4000))
    model = describe_thickness(thickness, np.zeros(4000, dtype=int), np.zeros(4000))
    _, drawn = draw_layers(model, layers=50, draws=500, rng=rng)
    assert drawn.min() > 0
    assert drawn.mean() == pytest.approx(thickness.mean(), rel=0.03)
    assert drawn.std() == pytest.approx(thickness.std(), rel=0.1)


@pytest.mark.parametrize(
    ("kind", "expected"),
    [([0, 1, 0, 1, 0], [0, 1]), ([0, 1, 2, 0, 1], [0, 1, 2]), ([0, 0, 0], [0]), ([0, 1, 1, 0], [0, 1, 1]), ([0], [0])],
)
def test_repeat_of_a_sequence(kind, expected):
    # shortest pattern that the sequence follows
    assert repeat_of(np.array(kind)).tolist() == expected


def test_same_seed_same_draws():
    # seeded and reproducible
    model = describe_thickness(*measured(np.random.default_rng(8), layers=50))
    one = draw_layers(model, layers=9, draws=5, rng=np.random.default_rng(3))[1]
    two = draw_layers(model, layers=9, draws=5, rng=np.random.default_rng(3))[1]
    np.testing.assert_array_equal(one, two)


def test_errors_of_boundaries_keep_the_whole():
    # JCGM 100, 5.2: t_j = b_(j+1) - b_j, so neighbours anticorrelate by half and the sum has two boundaries' variance
    u = np.full(40, 2.0)
    rng = np.random.default_rng(9)
    shared = draw_errors(u, draws=40_000, rng=rng, from_boundaries=True)
    alone = draw_errors(u, draws=40_000, rng=rng, from_boundaries=False)
    for error in (shared, alone):
        np.testing.assert_allclose(error.std(axis=0), 2.0, rtol=0.03)
    assert np.corrcoef(shared[:, 10], shared[:, 11])[0, 1] == pytest.approx(-0.5, abs=0.02)
    assert shared.sum(axis=1).std() == pytest.approx(2.0, rel=0.03)
    assert alone.sum(axis=1).std() == pytest.approx(2.0 * np.sqrt(40), rel=0.03)


def pile(rng, draws, plates, n=1.5, plate=130.0, wavelength=500.0):
    """ln T of a pile of plates with air gaps random over many wavelengths."""
    thickness = np.empty((draws, 2 * plates - 1))
    thickness[:, 0::2] = plate
    thickness[:, 1::2] = rng.uniform(0, 1, (draws, plates - 1)) * wavelength * 20
    sequence = np.repeat([[0, *([1, 0] * plates)[: 2 * plates - 1], 0]], draws, axis=0)
    _, t = reflectance_transmittance([[1.0], [n]], sequence, thickness, [wavelength], polarisations=("s",))
    return np.log(t[:, 0, 0, 0])


@pytest.mark.parametrize("plates", [5, 30])
def test_random_pile_of_plates(plates):
    # M. V. Berry, S. Klein, Eur. J. Phys. 18, 222 (1997): mean ln T = N ln tau with tau of one plate; -2.0449 for 30
    delta = 2 * np.pi * 1.5 * 130 / 500
    tau = 1 / (1 + ((1.5**2 - 1) / (2 * 1.5)) ** 2 * np.sin(delta) ** 2)
    if plates == 30:
        assert plates * np.log(tau) == pytest.approx(-2.0449, abs=1e-4)
    logs = pile(np.random.default_rng(10), 20_000, plates)
    error = logs.std() / np.sqrt(logs.size)
    assert logs.mean() == pytest.approx(plates * np.log(tau), abs=4 * error)
    assert error < 0.02


def test_incoherent_pile_is_the_phase_average_of_two_interfaces():
    # average of the coherent slab over one whole fringe: 2 rho/(1 + rho) = 0.076923 for n = 1.5
    thickness = np.linspace(0, 550 / 2 / 1.5, 721)[:-1, None]
    sequence = np.repeat([[0, 1, 0]], 720, axis=0)
    r, _ = reflectance_transmittance([[1.0], [1.5]], sequence, thickness, [550.0], polarisations=("s",))
    rho = 0.2**2
    assert 2 * rho / (1 + rho) == pytest.approx(0.076923076923, abs=1e-12)
    assert r.mean() == pytest.approx(2 * rho / (1 + rho), abs=1e-12)


WAVELENGTH = np.arange(400.0, 701.0, 5)
INDEX = np.array([1.0, 1.56, 1.34])[:, None] * np.ones(WAVELENGTH.size)
ORDER = np.array([0, *[1, 2] * 12, 0])
NORMAL = make_cone(aoi_deg=0.0, aperture=0.0, incident_index=1.0)


def curves(stations):
    r, _ = reflectance_transmittance(INDEX, np.repeat(ORDER[None], len(stations), 0), stations, WAVELENGTH)
    return r[:, 0].mean(axis=1)


def test_wide_variation_adds_in_intensity():
    # two halves of the field, each far wider than wavelength/NA: the mean of their two reflectances, exactly
    halves = np.repeat(np.array([[90.0, 105.0] * 12, [100.0, 118.0] * 12]), 50, axis=0)
    mean, windows = lateral_reflectance(
        INDEX, ORDER, halves, WAVELENGTH, station_step_nm=200.0, aperture=0.5, cone=NORMAL
    )
    assert windows > 5
    np.testing.assert_allclose(mean, curves(halves[[0, -1]]).mean(axis=0), atol=1e-12)


def test_narrow_variation_adds_in_amplitude():
    # the same two structures alternating within wavelength/NA: less than either way of averaging reflectance, since
    # part of the light is scattered (Jensen: |mean r|^2 <= mean |r|^2)
    fine = np.tile(np.array([[90.0, 105.0] * 12, [100.0, 118.0] * 12]), (50, 1))
    mean, windows = lateral_reflectance(INDEX, ORDER, fine, WAVELENGTH, station_step_nm=1.0, aperture=0.5, cone=NORMAL)
    assert windows == 1
    both = curves(fine[:2]).mean(axis=0)
    assert (mean <= both + 1e-12).all()
    assert (both - mean).max() > 0.05


def test_equal_stations_change_nothing():
    # without lateral variation the mean is the stack itself
    same = np.repeat(np.array([[90.0, 105.0] * 12]), 30, axis=0)
    for step in (1.0, 1000.0):
        mean, _ = lateral_reflectance(INDEX, ORDER, same, WAVELENGTH, station_step_nm=step, aperture=0.2, cone=NORMAL)
        np.testing.assert_allclose(mean, curves(same[:1])[0], atol=1e-12)


@given(seed=st.integers(0, 10_000))
@settings(deadline=None, derandomize=True, max_examples=50)
def test_gaps_in_traces_are_bridged(seed):
    # each layer keeps the mean that was measured for it; nothing stays empty
    rng = np.random.default_rng(seed)
    stations = rng.uniform(80, 120, (30, 4))
    stations[rng.uniform(size=(30, 4)) < 0.4] = np.nan
    stations[:, 2] = np.nan
    filled = fill_stations(stations, np.array([100.0, 101.0, 102.0, 103.0]))
    assert np.isfinite(filled).all()
    for j in (0, 1, 3):
        known = np.isfinite(stations[:, j])
        if known.any():
            assert filled[known, j].mean() == pytest.approx(100.0 + j, abs=1e-9)
    np.testing.assert_array_equal(filled[:, 2], 102.0)


@pytest.mark.parametrize(("stations", "window", "count"), [(100, 10, 10), (100, 1000, 1), (100, 0.2, 100), (1, 5, 1)])
def test_windows_cover_every_station_once(stations, window, count):
    # a partition of the field
    windows = split_by_width(np.zeros((stations, 3)), window_stations=window)
    assert len(windows) == count
    assert [i for w in windows for i in range(w.start, w.stop)] == list(range(stations))


def test_rough_boundaries_specular_and_incoherent():
    # facts table: 12 bilayers 1.56/1.34, boundaries of 20 nm rms: specular 0.76, incoherent 0.80
    wavelength = np.arange(480.0, 581.0, 2)
    index = np.array([1.0, 1.56, 1.34])[:, None] * np.ones(wavelength.size)
    boundary = 20 * np.random.default_rng(1).standard_normal((400, 25))
    stations = np.maximum(np.array([85.3, 99.3] * 12) + np.diff(boundary, axis=1), 0)
    options = {"aperture": 0.1, "cone": NORMAL}
    specular, _ = lateral_reflectance(index, ORDER, stations, wavelength, station_step_nm=1.0, **options)
    incoherent, _ = lateral_reflectance(index, ORDER, stations, wavelength, station_step_nm=1e6, **options)
    assert specular.max() == pytest.approx(0.76, abs=0.015)
    assert incoherent.max() == pytest.approx(0.80, abs=0.01)
