"""Laws, closed forms and other people's values for reflectance and transmittance."""

import numpy as np
import pytest
import tmm
from hypothesis import given, settings
from hypothesis import strategies as st

from layerscan.errors import InputError, SettingsError
from layerscan.optics.transfer import absorbed_per_layer, reflectance_transmittance, reflected_amplitude


def one(index, thickness, wavelength=550.0, aoi=0.0, polarisation="s", **options):
    """R and T of a single stack at one wavelength."""
    r, t = reflectance_transmittance(
        np.array(index, dtype=complex)[:, None], [list(range(len(index)))], [list(thickness)], [wavelength],
        aoi_deg=(aoi,), polarisations=(polarisation,), **options,
    )  # fmt: skip
    return float(r[0, 0, 0, 0]), float(t[0, 0, 0, 0])


@pytest.mark.parametrize("n", [1.333, 1.5, 1.56, 1.83, 0.2734 + 2.948j])
def test_single_interface_at_normal_incidence(n):
    # Fresnel: |(n - 1)/(n + 1)|^2; 0.893951384561 for the metal (Born & Wolf section 1.5)
    r, _ = one([1, n], [])
    assert r == pytest.approx(abs((n - 1) / (n + 1)) ** 2, abs=1e-15)


def test_brewster_angle():
    # tan(theta_B) = n; there R_s = ((n^2 - 1)/(n^2 + 1))^2 and R_p = 0
    n = 1.5
    angle = float(np.degrees(np.arctan(n)))
    assert angle == pytest.approx(56.309932474, abs=1e-9)
    assert one([1, n], [], aoi=angle, polarisation="p")[0] < 1e-30
    assert one([1, n], [], aoi=angle)[0] == pytest.approx(((n * n - 1) / (n * n + 1)) ** 2, abs=1e-15)


@pytest.mark.parametrize("aoi", [41.9, 60.0, 85.0])
def test_total_reflection_beyond_the_critical_angle(aoi):
    # asin(1/1.5) = 41.8103 degrees
    for polarisation in "sp":
        r, t = one([1.5, 1.0], [], aoi=aoi, polarisation=polarisation)
        assert r == pytest.approx(1.0, abs=1e-15)
        assert t == 0.0


@pytest.mark.parametrize(
    ("index", "expected"),
    [((1, 1.38, 1.52), 0.0126007902146), ((1, 1.56, 1), 0.174323759759), ((1.33, 1.83, 1.33), 0.0953119936861)],
)
def test_quarter_wave_film(index, expected):
    # ((n0 ns - n1^2)/(n0 ns + n1^2))^2
    n0, n1, ns = index
    formula = ((n0 * ns - n1**2) / (n0 * ns + n1**2)) ** 2
    assert formula == pytest.approx(expected, rel=1e-11)
    assert one(index, [550 / 4 / n1])[0] == pytest.approx(formula, abs=1e-15)


def test_perfect_antireflection_film():
    # n1^2 = n0 ns gives zero
    assert one([1, np.sqrt(1.52), 1.52], [550 / 4 / np.sqrt(1.52)])[0] < 1e-31


def test_half_wave_film_is_absent():
    # ((n0 - ns)/(n0 + ns))^2
    assert one([1, 1.38, 1.52], [550 / 2 / 1.38])[0] == pytest.approx(((1 - 1.52) / (1 + 1.52)) ** 2, abs=1e-15)


def airy(n0, n1, ns, d, wavelength, aoi, polarisation):
    """Airy's sum for one film (Born & Wolf 7.6)."""
    a = n0 * np.sin(np.radians(aoi))
    c0, c1, cs = (np.sqrt(n * n - a * a + 0j) for n in (n0, n1, ns))
    if polarisation == "p":
        c0, c1, cs = (n * n / c for n, c in ((n0, c0), (n1, c1), (ns, cs)))
    r01, r12 = (c0 - c1) / (c0 + c1), (c1 - cs) / (c1 + cs)
    turn = np.exp(4j * np.pi * np.sqrt(n1 * n1 - a * a + 0j) * d / wavelength)
    return abs((r01 + r12 * turn) / (1 + r01 * r12 * turn)) ** 2


@pytest.mark.parametrize(
    "case",
    [(1, 1.56, 1, 200, 500, 0, "s"), (1, 1.56, 1.33, 180, 450, 45, "p"), (1, 1.7 + 0.05j, 1.52, 300, 600, 60, "s")],
)
def test_airy_film(case):
    # closed form above
    n0, n1, ns, d, wavelength, aoi, polarisation = case
    r, _ = one([n0, n1, ns], [d], wavelength, aoi, polarisation)
    assert r == pytest.approx(airy(*case), abs=1e-15)


@pytest.mark.parametrize(
    ("high", "low", "n0", "ns", "pairs"),
    [(1.83, 1.33, 1.33, 1.33, 5), (1.83, 1.33, 1.33, 1.33, 10), (2.3, 1.35, 1.0, 1.52, 4)],
)
def test_quarter_wave_stack(high, low, n0, ns, pairs):
    # H(LH)^N: R = ((n0 - Y)/(n0 + Y))^2, Y = (nH/nL)^2N nH^2/ns (Born & Wolf 1.6.5)
    y = (high / low) ** (2 * pairs) * high**2 / ns
    layers = [high, *[low, high] * pairs]
    r, t = one([n0, *layers, ns], [550 / 4 / n for n in layers])
    assert r == pytest.approx(((n0 - y) / (n0 + y)) ** 2, abs=1e-14)
    assert r + t == pytest.approx(1.0, abs=1e-14)


@pytest.mark.parametrize(("high", "low"), [(1.83, 1.33), (1.56, 1.34), (1.68, 1.55)])
def test_band_edges_of_a_periodic_stack(high, low):
    # Yeh, Optical Waves in Layered Media: full relative width of the band (4/pi) asin((nH - nL)/(nH + nL)) in 1/lambda;
    # inside it the reflectance of many periods is 1, outside it is not
    half = (2 / np.pi) * np.arcsin((high - low) / (high + low))
    center = 550.0
    layers = [high, low] * 600
    for share, inside in ((0.98, True), (1.02, False)):
        wavelength = center / (1 + half * share)
        r, _ = one([low, *layers, low], [center / 4 / n for n in layers], wavelength)
        assert (r > 0.9999) == inside


def test_chebyshev_form_of_a_periodic_stack():
    # |r|^2 = |C|^2 / (|C|^2 + (sin K/sin NK)^2) needs equal half-spaces; checked through the matrix power instead:
    # unit-cell matrix to the N-th power by Chebyshev polynomials (Yeh, section 6.2), air to 1.5, 12 periods
    n, d, wavelength, periods = (1.56, 1.34), (95.0, 110.0), 560.0, 12
    cell = np.eye(2, dtype=complex)
    for nj, dj in zip(n, d, strict=True):
        delta = 2 * np.pi * nj * dj / wavelength
        cell = cell @ np.array([[np.cos(delta), -1j * np.sin(delta) / nj], [-1j * nj * np.sin(delta), np.cos(delta)]])
    k = np.arccos((cell[0, 0] + cell[1, 1]) / 2 + 0j)
    u = [np.sin(m * k) / np.sin(k) for m in (periods, periods - 1)]
    m = cell * u[0] - np.eye(2) * u[1]
    b, c = m @ np.array([1, 1.5])
    closed = abs((b - c) / (b + c)) ** 2
    assert closed == pytest.approx(0.734551095429, abs=1e-11)
    assert one([1, *n * periods, 1.5], d * periods, wavelength)[0] == pytest.approx(closed, abs=1e-13)


def random_stack(rng, *, loss, layers=None):
    count = int(rng.integers(0, 40)) if layers is None else layers
    n = rng.uniform(1.0, 3.0, count + 2).astype(complex)
    if loss:
        n[1:] += 1j * rng.uniform(0, 0.8, count + 1) * rng.integers(0, 2, count + 1)
    return n, rng.uniform(0, 500, count), rng.uniform(300, 1100), rng.uniform(0, 89)


@given(seed=st.integers(0, 2**32 - 1), loss=st.booleans())
@settings(deadline=None, derandomize=True, max_examples=150)
def test_random_stacks_agree_with_tmm(seed, loss):
    # tmm 0.2.0 (S. J. Byrnes), coh_tmm
    n, d, wavelength, aoi = random_stack(np.random.default_rng(seed), loss=loss)
    for polarisation in "sp":
        reference = tmm.coh_tmm(polarisation, n, [np.inf, *d, np.inf], np.radians(aoi), wavelength)
        r, t = one(n, d, wavelength, aoi, polarisation)
        assert r == pytest.approx(reference["R"], abs=1e-12)
        assert t == pytest.approx(reference["T"], abs=1e-12)


@given(seed=st.integers(0, 2**32 - 1))
@settings(deadline=None, derandomize=True, max_examples=150)
def test_lossless_stacks_keep_energy(seed):
    # R + T = 1, also with evanescent layers
    n, d, wavelength, aoi = random_stack(np.random.default_rng(seed), loss=False)
    for polarisation in "sp":
        r, t = one(n, d, wavelength, aoi, polarisation)
        assert abs(r + t - 1) < 1e-13


@given(seed=st.integers(0, 2**32 - 1))
@settings(deadline=None, derandomize=True, max_examples=100)
def test_transmittance_is_reciprocal_with_loss(seed):
    # T is the same from either side between lossless half-spaces, whatever the layers absorb
    n, d, wavelength, aoi = random_stack(np.random.default_rng(seed), loss=True)
    n[-1] = n[-1].real
    there = np.radians(aoi)
    sine = n[0].real * np.sin(there) / n[-1].real
    if sine >= 1:
        return
    back = float(np.degrees(np.arcsin(sine)))
    for polarisation in "sp":
        forward = one(n, d, wavelength, aoi, polarisation)[1]
        assert one(n[::-1], d[::-1], wavelength, back, polarisation)[1] == pytest.approx(forward, abs=1e-12)


@given(seed=st.integers(0, 2**32 - 1))
@settings(deadline=None, derandomize=True, max_examples=60)
def test_absorbed_fractions_agree_with_tmm_and_sum_to_one(seed):
    # tmm 0.2.0, absorp_in_each_layer; energy balance
    n, d, wavelength, aoi = random_stack(np.random.default_rng(seed), loss=True)
    arguments = n[:, None], [list(range(n.size))], [list(d)], [wavelength]
    r, t = reflectance_transmittance(*arguments, aoi_deg=(aoi,))
    absorbed = absorbed_per_layer(*arguments, aoi_deg=(aoi,))
    np.testing.assert_allclose(r + t + absorbed.sum(axis=3), 1.0, atol=1e-12)
    for p, polarisation in enumerate("sp"):
        reference = tmm.absorp_in_each_layer(
            tmm.coh_tmm(polarisation, n, [np.inf, *d, np.inf], np.radians(aoi), wavelength)
        )
        np.testing.assert_allclose(absorbed[0, 0, p, :, 0], reference[1:-1], atol=1e-12)


def test_order_of_axes_and_grouping():
    # every element equals the same stack calculated alone: two incident media, angles, polarisations, wavelengths
    rng = np.random.default_rng(3)
    wavelength = np.array([700.0, 400.0, 512.3])  # unsorted is fine
    index = rng.uniform(1.3, 2.2, (4, 3)) + 0j
    index[2] += 0.1j
    sequence = np.array([[0, 1, 2, 3], [1, 2, 0, 3], [0, 2, 1, 2]])
    thickness = rng.uniform(50, 300, (3, 2))
    angles = (0.0, 33.0, 71.0)
    r, t = reflectance_transmittance(index, sequence, thickness, wavelength, aoi_deg=angles, polarisations=("p", "s"))
    assert r.shape == (3, 3, 2, 3)
    for s in range(3):
        for a, angle in enumerate(angles):
            for p, polarisation in enumerate("ps"):
                for w in range(3):
                    alone = one(index[sequence[s], w], thickness[s], wavelength[w], angle, polarisation)
                    assert (r[s, a, p, w], t[s, a, p, w]) == pytest.approx(alone, abs=1e-14)


@pytest.mark.parametrize("count", [1, 7, 144, 145, 300])
def test_any_number_of_wavelengths(count):
    # a wavelength's result does not depend on the others beside it
    wavelength = np.linspace(400, 700, count)
    index = np.array([1, 1.56, 1.34, 1.5 + 0.2j])[:, None] * np.ones(count)
    arguments = [[0, *[1, 2] * 5, 3]], [[100.0, 120.0] * 5]
    r, t = reflectance_transmittance(index, *arguments, wavelength, aoi_deg=(20.0,))
    for i in (0, count // 2, count - 1):
        alone = reflectance_transmittance(index[:, i : i + 1], *arguments, wavelength[i : i + 1], aoi_deg=(20.0,))
        np.testing.assert_allclose(r[..., i], alone[0][..., 0], atol=1e-15)
        np.testing.assert_allclose(t[..., i], alone[1][..., 0], atol=1e-15)


def test_threads_change_nothing():
    # sharing the work must not matter
    rng = np.random.default_rng(5)
    index = np.array([1, 1.56, 1.34 + 0.01j, 1.5])[:, None] * np.ones(200)
    arguments = index, np.repeat([[0, *[1, 2] * 10, 3]], 50, axis=0), rng.uniform(50, 150, (50, 20))
    wavelength = np.linspace(400, 700, 200)
    one_thread = reflectance_transmittance(*arguments, wavelength, aoi_deg=(0.0, 40.0), threads=1)
    two_threads = reflectance_transmittance(*arguments, wavelength, aoi_deg=(0.0, 40.0), threads=2)
    np.testing.assert_array_equal(one_thread[0], two_threads[0])
    np.testing.assert_array_equal(one_thread[1], two_threads[1])


def test_scaling_lengths_and_wavelength_together():
    # Maxwell's equations have no length of their own
    r, t = one([1, 1.56 + 0.01j, 1.5], [137.0], 480.0, 40.0, "p")
    assert one([1, 1.56 + 0.01j, 1.5], [1370.0], 4800.0, 40.0, "p") == pytest.approx((r, t), abs=1e-15)


def test_amplitude_squares_to_reflectance_and_has_fresnels_sign():
    # r_s = (n0 - n1)/(n0 + n1) at normal incidence; |r|^2 = R
    rng = np.random.default_rng(8)
    n, d, wavelength, aoi = random_stack(rng, loss=True, layers=9)
    arguments = n[:, None], [list(range(11))], [list(d)], [wavelength]
    r, _ = reflectance_transmittance(*arguments, aoi_deg=(aoi,))
    amplitude = reflected_amplitude(*arguments, aoi_deg=(aoi,))
    np.testing.assert_allclose(abs(amplitude) ** 2, r, atol=1e-14)
    for p, polarisation in enumerate("s"):
        reference = tmm.coh_tmm(polarisation, n, [np.inf, *d, np.inf], np.radians(aoi), wavelength)["r"]
        assert amplitude[0, 0, p, 0] == pytest.approx(reference, abs=1e-12)
    bare = reflected_amplitude([[1.0], [1.5]], [[0, 1]], np.empty((1, 0)), [550.0], polarisations=("s",))
    assert bare[0, 0, 0, 0] == pytest.approx(-0.2, abs=1e-15)


GOOD = {
    "index": [[1.0], [1.5], [1.3]],
    "sequence": [[0, 1, 2]],
    "thickness_nm": [[100.0]],
    "wavelength_nm": [550.0],
}


@pytest.mark.parametrize(
    ("change", "error", "message"),
    [
        ({"index": [[1.0], [1.5 - 0.1j], [1.3]]}, InputError, r"k = -0.1 < 0.*allow_gain"),
        ({"index": [[1.0 + 0.1j], [1.5], [1.3]]}, InputError, r"incident medium \(material 0\) absorbs"),
        ({"index": [[1.0], [np.nan], [1.3]]}, InputError, "index holds values that are not finite"),
        ({"index": [[1.0], [-1.5], [1.3]]}, InputError, "n < 0"),
        ({"index": [[1.0, 1.0], [1.5, 1.5], [1.3, 1.3]]}, InputError, r"index has shape \(3, 2\)"),
        ({"thickness_nm": [[-1.0]]}, InputError, "thickness_nm holds values that are negative"),
        ({"thickness_nm": [[np.nan]]}, InputError, "thickness_nm holds values that are negative or not finite"),
        ({"thickness_nm": [[100.0, 5.0]]}, InputError, r"thickness_nm has shape \(1, 2\)"),
        ({"sequence": [[]]}, InputError, r"sequence has shape \(1, 0\)"),
        ({"sequence": np.empty((0, 3), dtype=int)}, InputError, r"sequence has shape \(0, 3\)"),
        ({"sequence": [[0, 1, 3]]}, InputError, "sequence names material 3; index has materials 0 to 2"),
        ({"sequence": [[0, -1, 2]]}, InputError, "sequence names material -1"),
        ({"sequence": [[0.0, 1.0, 2.0]]}, InputError, "whole material numbers"),
        ({"wavelength_nm": []}, InputError, r"wavelength_nm has shape \(0,\)"),
        ({"wavelength_nm": [0.0]}, InputError, "not finite and positive"),
        ({"aoi_deg": (90.5,)}, SettingsError, "90.5 degrees lies outside 0 to 90"),
        ({"aoi_deg": (-1.0,)}, SettingsError, "-1 degrees lies outside"),
        ({"aoi_deg": (np.nan,)}, SettingsError, "nan degrees lies outside"),
        ({"aoi_deg": ()}, SettingsError, "give one or more numbers"),
        ({"polarisations": ("x",)}, SettingsError, "Polarisation 'x' is not known"),
        ({"polarisations": ()}, SettingsError, "No polarisation was given"),
        ({"threads": 0}, SettingsError, "threads is 0"),
    ],
)
def test_bad_input_is_named(change, error, message):
    # the message says which value came
    with pytest.raises(error, match=message):
        reflectance_transmittance(**{**GOOD, **change})


def test_result_too_large_for_memory_is_refused():
    # 4 GB is the most for one call; nothing is allocated before the check
    sequence = np.broadcast_to(np.array([0, 1]), (700_000, 2))
    with pytest.raises(InputError, match="GB of results"):
        reflectance_transmittance(np.ones((2, 1000)), sequence, np.empty((700_000, 0)), np.linspace(400, 700, 1000))
