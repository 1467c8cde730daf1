"""Where transfer calculations go wrong elsewhere, against a recursion with 50 digits."""

import numpy as np
import pytest
from reference.stack_mpmath import reflect

from layerscan.optics.transfer import reflectance_transmittance


def both(index, thickness, wavelength, aoi, **options):
    """R and T of one stack, arrays over (polarisation,), beside those of the 50-digit recursion."""
    n = np.array(index, dtype=complex)[:, None]
    r, t = reflectance_transmittance(
        n, [list(range(len(index)))], [list(thickness)], [wavelength], aoi_deg=(aoi,), **options
    )
    true = np.array([reflect(list(n[:, 0]), thickness, wavelength, aoi, p) for p in "sp"])
    return r[0, 0, :, 0], t[0, 0, :, 0], true[:, 0], true[:, 1]


CRITICAL = float(np.degrees(np.arcsin(1 / 1.5)))
RANDOM = np.random.default_rng(4)
CASES = {
    # cases of shared practice in stability tests: thick absorber, evanescent gap, critical angle, long stacks
    "10 mm absorber": ([1, 1.5 + 0.1j, 1.5], [1e7], 550.0, 0.0),
    "10 mm absorber, oblique": ([1, 1.5 + 0.1j, 1.5], [1e7], 550.0, 45.0),
    "absorber under a stack": ([1, *[1.56, 1.34] * 10, 1.5 + 0.1j, 1.5], [*[90, 105] * 10, 1e7], 550.0, 45.0),
    "100 um evanescent gap": ([1.5, 1.0, 1.5], [1e5], 550.0, 60.0),
    "300 nm evanescent gap": ([1.5, 1.0, 1.5], [300.0], 550.0, 60.0),
    "critical angle in a layer": ([1.5, 1.0, 1.5], [500.0], 550.0, CRITICAL),
    "just below it": ([1.5, 1.0, 1.5], [500.0], 550.0, CRITICAL * (1 - 1e-10)),
    "just above it": ([1.5, 1.0, 1.5], [500.0], 550.0, CRITICAL * (1 + 1e-10)),
    "critical angle with loss": ([1.5, 1.0 + 1e-12j, 1.5], [500.0], 550.0, CRITICAL),
    "near grazing": ([1, 1.5, 1.34], [300.0], 550.0, 89.9999),
    "zero thickness": ([1, 1.5, 1.7, 1.5], [0.0, 120.0], 550.0, 30.0),
    "equal indices": ([1.5, 1.5, 1.5, 1.5], [120.0, 250.0], 550.0, 70.0),
    "metal": ([1, 0.27 + 2.95j, 1.5], [40.0], 589.0, 55.0),
    "thin metal": ([1, 0.05 + 7j, 1.5], [0.01], 589.0, 55.0),
    "absorbing substrate": ([1, 1.5, 1.6 + 0.8j], [120.0], 550.0, float(np.degrees(1.0))),
    "1 mm of glass": ([1, 1.52, 1.33], [1e6], 550.1, 20.0),
    "10 cm of glass": ([1, 1.52, 1.33], [1e8], 550.1, 0.0),
    "weak absorption": ([1, *[1.56 + 1e-9j, 1.34] * 20, 1.5], [*[90, 105] * 20], 550.0, 30.0),
    "5000 layers off the band": ([1, *[1.56, 1.34] * 2500, 1.5], [*[90, 105] * 2500], 700.0, 10.0),
    "5000 layers in the band": ([1, *[1.56, 1.34] * 2500, 1.5], [*[90, 105] * 2500], 560.0, 10.0),
    "5000 strong layers in the band": ([1, *[2.6, 1.34] * 2500, 1.5], [*[54, 105] * 2500], 560.0, 10.0),
    "5000 random layers": ([1, *[1.56, 1.34] * 2500, 1.5], RANDOM.uniform(50, 150, 5000).tolist(), 560.0, 30.0),
}


@pytest.mark.parametrize("case", CASES, ids=str)
def test_hard_case_agrees_with_fifty_digits(case):
    # tests/reference/stack_mpmath.py, 50 digits
    r, t, true_r, true_t = both(*CASES[case])
    np.testing.assert_allclose(r, true_r, rtol=0, atol=2e-13)
    np.testing.assert_allclose(t, true_t, rtol=0, atol=2e-13)


def test_gain_agrees_with_fifty_digits():
    # tests/reference/stack_mpmath.py, 50 digits; gain has to be asked for
    r, t, true_r, true_t = both([1, 1.5 - 0.01j, 1.52], [700.0], 550.0, 25.0, allow_gain=True)
    np.testing.assert_allclose(r, true_r, rtol=1e-12)
    np.testing.assert_allclose(t, true_t, rtol=1e-12)
    assert (r + t > 1).all()


def test_grazing_incidence_reflects_everything():
    # limit of Fresnel's formulas at 90 degrees; also through a layer of the incident medium itself
    for index in ([1, 1.5, 1.34], [1.5, 1.5, 1.0], [1, 1.5 + 0.2j, 1.0]):
        r, t = reflectance_transmittance(np.array(index)[:, None], [[0, 1, 2]], [[300.0]], [550.0], aoi_deg=(90.0,))
        np.testing.assert_array_equal(r, 1.0)
        np.testing.assert_array_equal(t, 0.0)


def test_thick_absorber_limit():
    # (n - 1)^2 + k^2 over (n + 1)^2 + k^2 for a half-space
    r, t, _, _ = both([1, 1.5 + 0.1j, 1.5], [1e7], 550.0, 0.0)
    np.testing.assert_allclose(r, (0.5**2 + 0.1**2) / (2.5**2 + 0.1**2), atol=1e-15)
    np.testing.assert_array_equal(t, 0.0)


def test_a_million_layers_keep_energy():
    # R + T = 1 without loss; single layers far thinner than the wavelength make one film of mean index
    thickness = np.full((1, 1_000_000), 1e-3)
    sequence = np.array([[0, *[1, 2] * 500_000, 3]])
    n = np.array([1.0, 1.56, 1.34, 1.5])[:, None]
    r, t = reflectance_transmittance(n, sequence, thickness, [550.0], polarisations=("s",))
    mean = np.sqrt((1.56**2 + 1.34**2) / 2)  # Rytov, ordinary index, in the limit of zero period
    film, _ = reflectance_transmittance(
        np.array([1.0, mean, 1.5])[:, None], [[0, 1, 2]], [[1000.0]], [550.0], polarisations=("s",)
    )
    np.testing.assert_allclose(r, film, atol=1e-6)
    np.testing.assert_allclose(r + t, 1.0, atol=1e-11)
