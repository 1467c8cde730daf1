"""Cone, polarisation and slit against closed forms and limits."""

import numpy as np
import pytest

from layerscan.errors import SettingsError
from layerscan.optics.conditions import (
    absorbance,
    converged_cone,
    make_cone,
    observe_stacks,
    slit_grid,
    slit_weights,
)
from layerscan.optics.transfer import reflectance_transmittance

WAVELENGTH = np.linspace(400.0, 700.0, 61)


def stack(*index, thickness=()):
    n = np.array(index, dtype=complex)[:, None] * np.ones(WAVELENGTH.size)
    return n, np.array([range(len(index))]), np.array([thickness], dtype=float)


def walsh(n):
    """Diffuse Fresnel reflectance of a smooth surface of index n (Walsh 1926; Duntley 1942; formula from memory)."""
    a = 0.5 + (n - 1) * (3 * n + 1) / (6 * (n + 1) ** 2)
    b = n**2 * (n**2 - 1) ** 2 / (n**2 + 1) ** 3 * np.log((n - 1) / (n + 1))
    c = -2 * n**3 * (n**2 + 2 * n - 1) / ((n**2 + 1) * (n**4 - 1))
    d = 8 * n**4 * (n**4 + 1) / ((n**2 + 1) * (n**4 - 1) ** 2) * np.log(n)
    return a + b + c + d


@pytest.mark.parametrize(("n", "expected"), [(1.33, 0.0659308493), (1.5, 0.0917779593), (1.56, 0.1005100360)])
def test_full_cone_is_the_diffuse_reflectance(n, expected):
    # Walsh's closed form; the numbers come from a 200-point quadrature of another library
    assert walsh(n) == pytest.approx(expected, abs=2e-8)
    cone = make_cone(aoi_deg=0.0, aperture=1.0, incident_index=1.0, nodes=16)
    r, t = observe_stacks(*stack(1.0, n), WAVELENGTH, cone=cone)
    np.testing.assert_allclose(r, walsh(n), atol=2e-5)
    np.testing.assert_allclose(r + t, 1.0, atol=1e-13)


def test_stated_quadrature_error_holds_in_the_hemispherical_limit():
    # the error stated for the rule used must bound its distance from Walsh's closed form
    cone, error = converged_cone(*stack(1.0, 1.5), WAVELENGTH, aoi_deg=0.0, aperture=1.0, incident_index=1.0)
    r, _ = observe_stacks(*stack(1.0, 1.5), WAVELENGTH, cone=cone)
    assert abs(r - walsh(1.5)).max() <= 1.5 * error
    assert error <= 5e-4


@pytest.mark.parametrize(("aoi", "aperture"), [(0.0, 0.5), (0.0, 0.9), (30.0, 0.4), (50.0, 0.6), (70.0, 0.9)])
def test_stated_quadrature_error_of_a_multilayer(aoi, aperture):
    # against a rule of many more directions
    layers = [1.0, *[1.56, 1.34] * 12, 1.34]
    arguments = *stack(*layers, thickness=[95.0, 110.0] * 12), WAVELENGTH
    cone, error = converged_cone(*arguments, aoi_deg=aoi, aperture=aperture, incident_index=1.0)
    r, _ = observe_stacks(*arguments, cone=cone)
    exact, _ = observe_stacks(*arguments, cone=make_cone(aoi_deg=aoi, aperture=aperture, incident_index=1.0, nodes=100))
    assert abs(r - exact).max() <= 1.5 * error + 1e-9
    assert error <= 5e-4


@pytest.mark.parametrize(("aoi", "aperture"), [(40.0, 0.5), (70.0, 0.9), (45.0, 0.9), (80.0, 0.5)])
def test_oblique_cone_equals_direct_integration(aoi, aperture):
    # brute force over the cone with Fresnel's formulas, 2000 x 2000 directions by the midpoint rule; rays that would
    # come from behind the surface are left out
    b = (np.arange(2000) + 0.5) / 2000 * np.arcsin(aperture)
    phi = (np.arange(2000) + 0.5) / 2000 * np.pi
    axis = np.radians(aoi)
    cosine = np.cos(axis) * np.cos(b)[:, None] - np.sin(axis) * np.sin(b)[:, None] * np.cos(phi)
    weight = np.broadcast_to((np.sin(b) * np.cos(b))[:, None], cosine.shape)
    c = cosine[cosine > 0]
    k = np.sqrt(1.5**2 - 1 + c * c)
    fresnel = (((c - k) / (c + k)) ** 2 + ((1.5**2 * c - k) / (1.5**2 * c + k)) ** 2) / 2
    brute = np.average(fresnel, weights=weight[cosine > 0])
    cone = make_cone(aoi_deg=aoi, aperture=aperture, incident_index=1.0, nodes=16)
    mine, _ = observe_stacks(*stack(1.0, 1.5), WAVELENGTH, cone=cone)
    assert mine[0, 0] == pytest.approx(brute, abs=2e-5)


def test_narrow_cone_is_one_direction():
    # zero-aperture limit
    index, sequence, thickness = stack(1.0, 1.5, 1.3, thickness=[300.0])
    for aoi in (0.0, 35.0):
        cone = make_cone(aoi_deg=aoi, aperture=1e-4, incident_index=1.0, nodes=8)
        r, _ = observe_stacks(index, sequence, thickness, WAVELENGTH, cone=cone)
        single, _ = reflectance_transmittance(index, sequence, thickness, WAVELENGTH, aoi_deg=(aoi,))
        np.testing.assert_allclose(r[0], single[0, 0].mean(axis=0), atol=1e-6)


def test_immersion_narrows_the_cone():
    # NA = n sin(half angle): the same NA in water is a narrower cone than in air
    air = make_cone(aoi_deg=0.0, aperture=0.8, incident_index=1.0)
    water = make_cone(aoi_deg=0.0, aperture=0.8, incident_index=1.33)
    assert air.aoi_deg.max() < np.degrees(np.arcsin(0.8))
    assert water.aoi_deg.max() < np.degrees(np.arcsin(0.8 / 1.33)) < air.aoi_deg.max()


@pytest.mark.parametrize("cone", [(0.0, 0.0), (0.0, 0.7), (30.0, 0.0), (30.0, 0.5)])
def test_weights_sum_to_one(cone):
    # a cone is an average
    made = make_cone(aoi_deg=cone[0], aperture=cone[1], incident_index=1.0)
    assert made.weight.sum() == pytest.approx(1.0, abs=1e-12)
    assert (made.weight > 0).all()
    assert ((made.aoi_deg >= 0) & (made.aoi_deg <= 90)).all()


def test_aperture_beyond_the_immersion_medium_is_refused():
    # sin(half angle) cannot exceed 1
    with pytest.raises(SettingsError, match=r"aperture of 1.2 is more than the index 1 "):
        make_cone(aoi_deg=0.0, aperture=1.2, incident_index=1.0)


def test_unpolarised_and_circular_light_are_the_mean_of_s_and_p():
    # isotropic media: mean of the two linear polarisations
    index, sequence, thickness = stack(1.0, 1.5, 1.3, thickness=[300.0])
    cone = make_cone(aoi_deg=60.0, aperture=0.0, incident_index=1.0)
    curves = {
        name: observe_stacks(index, sequence, thickness, WAVELENGTH, cone=cone, polarisation=name)[0]
        for name in ("s", "p", "unpolarised", "left", "right")
    }
    mean = (curves["s"] + curves["p"]) / 2
    assert abs(curves["s"] - curves["p"]).max() > 0.01
    for name in ("unpolarised", "left", "right"):
        np.testing.assert_allclose(curves[name], mean, atol=1e-15)


def test_linear_light_in_a_cone_about_the_normal_is_half_s_and_half_p():
    # by symmetry about the axis
    index, sequence, thickness = stack(1.0, 1.5, 1.3, thickness=[300.0])
    cone = make_cone(aoi_deg=0.0, aperture=0.9, incident_index=1.0)
    curves = [
        observe_stacks(index, sequence, thickness, WAVELENGTH, cone=cone, polarisation=name)[0]
        for name in ("s", "p", "unpolarised")
    ]
    np.testing.assert_allclose(curves[0], curves[2], atol=1e-15)
    np.testing.assert_allclose(curves[1], curves[2], atol=1e-15)


@pytest.mark.parametrize("shape", ["triangular", "gaussian"])
@pytest.mark.parametrize(("step", "bandwidth"), [(1.0, 5.0), (1.0, 2.5), (5.0, 2.0), (10.0, 40.0)])
def test_slit_keeps_straight_lines_to_the_ends(shape, step, bandwidth):
    # a symmetric slit changes neither a constant nor a slope, at the ends of the range neither
    wavelength = np.arange(400.0, 701.0, step)
    grid = slit_grid(wavelength, bandwidth_nm=bandwidth)
    weights = slit_weights(grid, wavelength, bandwidth_nm=bandwidth, shape=shape)
    np.testing.assert_allclose(weights.sum(axis=1), 1.0, atol=1e-12)
    np.testing.assert_allclose(weights @ grid, wavelength, atol=1e-9)
    assert np.diff(grid).max() <= bandwidth / 5.9


def test_triangular_slit_has_its_width():
    # full width at half maximum of the response to a line
    grid = np.arange(480.0, 520.0, 0.1)
    weights = slit_weights(grid, np.array([500.0]), bandwidth_nm=8.0)[0]
    above = grid[weights >= weights.max() / 2]
    assert above[-1] - above[0] == pytest.approx(8.0, abs=0.2)


def test_slit_broadens_a_line_in_quadrature():
    # variances of convolved profiles add: triangle of FWHM b has variance b^2/6
    grid = np.arange(400.0, 600.01, 0.25)
    line = np.exp(-(((grid - 500) / 4) ** 2) / 2)
    weights = slit_weights(grid, grid, bandwidth_nm=10.0)
    seen = weights @ line
    variance = np.average((grid - 500) ** 2, weights=seen)
    assert variance == pytest.approx(4**2 + 10**2 / 6, rel=0.002)


def test_no_bandwidth_no_change():
    # zero-width limit
    np.testing.assert_array_equal(slit_grid(WAVELENGTH, bandwidth_nm=0.0), WAVELENGTH)


def test_absorbance():
    # A = -lg T
    np.testing.assert_allclose(absorbance(np.array([1.0, 0.1, 0.01, 0.0])), [0, 1, 2, np.inf])
