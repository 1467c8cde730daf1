"""How the specimen is lit and looked at: cone of illumination, polarisation, bandwidth of the instrument."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from itertools import pairwise
from typing import TYPE_CHECKING, Literal

import numpy as np

from layerscan.errors import SettingsError
from layerscan.optics.transfer import reflectance_transmittance

if TYPE_CHECKING:
    from layerscan.records import ComplexArray, FloatArray, IntArray

Polarisation = Literal["s", "p", "unpolarised", "left", "right"]
CONE_TOLERANCE = 5e-4  # of reflectance, between the rule used and one of twice as many directions
CONE_NODES = (4, 8, 16, 32, 64, 128)
FINE_NODES = 80  # points per dimension from which the rule of an oblique cone is made
VALUES_AT_ONCE = 1_000_000  # of reflectance over stacks, directions, polarisations and wavelengths
SLIT_STEPS = 6  # points of calculation per bandwidth


@dataclass(frozen=True, kw_only=True, eq=False)
class Cone:
    """Directions of a cone of light: angles of incidence and their weights, which sum to 1."""

    aoi_deg: FloatArray
    weight: FloatArray
    about_normal: bool = False  # its axis is the layer normal and it has a width


def make_cone(*, aoi_deg: float, aperture: float, incident_index: float, nodes: int = 16) -> Cone:
    """Directions and weights of a uniformly filled cone.

    Parameters
    ----------
    aoi_deg : float
        Angle of the axis of the cone to the layer normal.
    aperture : float
        Effective numerical aperture of the illumination in the incident medium: n sin(half angle). The engraved
        aperture of an objective is no measure of it; the condenser or the back aperture that is really filled is.
    incident_index : float
        Refractive index of the incident medium.
    nodes : int
        Directions.

    Returns
    -------
    Cone
        One direction where the aperture is 0.

    Raises
    ------
    SettingsError
        The aperture exceeds the index of the incident medium.

    Notes
    -----
    A uniformly bright source fills the cone with weight sin(b) cos(b) in the angle b to its axis. With v = cos b that
    is v dv, in which reflectance is smooth up to grazing incidence, so Gauss-Legendre nodes in v converge fast; the
    hemispherical limit is Walsh's diffuse Fresnel reflectance. Reflectance depends on the angle of incidence alone, so
    a cone about an oblique axis is reduced to a Gauss rule in the cosine of that angle; rays beyond 90 degrees do not
    reach the surface and are left out.

    References
    ----------
    .. [1] J. W. T. Walsh, Illum. Eng. Res. Tech. Paper 2 (1926); S. Q. Duntley, J. Opt. Soc. Am. 32, 61 (1942):
       diffuse reflectance of a smooth surface.
    """
    if aperture <= 0:
        return Cone(aoi_deg=np.array([aoi_deg]), weight=np.array([1.0]))
    if aperture > incident_index:
        raise SettingsError(
            f"An aperture of {aperture:g} is more than the index {incident_index:.4g} of the incident medium allows. "
            "Give the effective NA of the illumination in that medium, or the immersion medium as incident."
        )
    lowest = float(np.sqrt(max(1 - (aperture / incident_index) ** 2, 0.0)))
    x, w = np.polynomial.legendre.leggauss(nodes)
    v = lowest + (1 - lowest) * (x + 1) / 2
    weight = w * v
    if aoi_deg == 0:
        directions = np.degrees(np.arccos(np.minimum(v, 1.0)))
        return Cone(aoi_deg=directions, weight=weight / weight.sum(), about_normal=True)
    cosine, fine = _fine_cone(np.radians(aoi_deg), lowest)
    value, weight = _gauss_rule(cosine, fine, nodes)
    return Cone(aoi_deg=np.degrees(np.arccos(np.clip(value, 0.0, 1.0))), weight=weight)


def _fine_cone(axis: float, lowest: float) -> tuple[FloatArray, FloatArray]:
    """Cosines of the angle of incidence and weights of many rays of a cone about an oblique axis.

    Rings of equal angle to the axis; of a ring that is cut by the surface only the part in front of it counts. Rings
    are cut beyond 90 degrees less the tilt of the axis, where the range is divided.
    """
    x, w = np.polynomial.legendre.leggauss(FINE_NODES)
    edges = [lowest, np.sin(axis), 1.0] if lowest < np.sin(axis) < 1.0 else [lowest, 1.0]
    values, weights = [], []
    for low, high in pairwise(edges):
        v = low + (high - low) * (x[:, None] + 1) / 2
        sine = np.sqrt(np.maximum(1 - v * v, 0.0))
        first = np.arccos(np.clip(np.cos(axis) * v / np.maximum(np.sin(axis) * sine, 1e-300), -1.0, 1.0))
        azimuth = first + (np.pi - first) * (x + 1) / 2
        values.append((np.cos(axis) * v - np.sin(axis) * sine * np.cos(azimuth)).ravel())
        weights.append(((high - low) * w[:, None] * v * (np.pi - first) * w).ravel())
    return np.concatenate(values), np.concatenate(weights)


def _gauss_rule(value: FloatArray, weight: FloatArray, nodes: int) -> tuple[FloatArray, FloatArray]:
    """Nodes and weights that integrate polynomials up to degree 2 nodes - 1 as the given points do.

    Lanczos' recurrence with reorthogonalisation, then the eigenvalues of the Jacobi matrix (Golub and Welsch, Math.
    Comp. 23, 221, 1969).
    """
    basis = np.zeros((nodes, value.size))
    basis[0] = np.sqrt(weight / weight.sum())
    diagonal, beside = np.zeros(nodes), np.zeros(nodes - 1)
    for k in range(nodes):
        next_one = value * basis[k]
        diagonal[k] = basis[k] @ next_one
        for _ in range(2):
            next_one = next_one - basis[: k + 1].T @ (basis[: k + 1] @ next_one)
        if k < nodes - 1:
            beside[k] = np.sqrt(next_one @ next_one)
            basis[k + 1] = next_one / beside[k]
    points, vectors = np.linalg.eigh(np.diag(diagonal) + np.diag(beside, 1) + np.diag(beside, -1))
    return points, vectors[0] ** 2


def observe_stacks(
    index: ComplexArray,
    sequence: IntArray,
    thickness_nm: FloatArray,
    wavelength_nm: FloatArray,
    *,
    cone: Cone,
    polarisation: Polarisation = "unpolarised",
    tick: Callable[[float], None] | None = None,
) -> tuple[FloatArray, FloatArray]:
    """Reflectance and transmittance of stacks in a cone of light, (stacks, wavelengths) each.

    Notes
    -----
    Unpolarised light is the mean of s and p. So is circular light, left or right: isotropic layers turn neither into
    the other's favour. In a cone about the layer normal linear light is s for some rays and p for others, half of
    each, so that there s and p give the mean too. In a cone about an oblique axis s and p are those of each ray's own
    plane of incidence, which holds for cones much narrower than the tilt of their axis.
    """
    names = polarisations_needed(cone, polarisation)
    shape = (sequence.shape[0], wavelength_nm.size)
    reflectance, transmittance = np.zeros(shape), np.zeros(shape)
    together = max(VALUES_AT_ONCE // (shape[0] * shape[1] * len(names)), 1)
    for start in range(0, cone.aoi_deg.size, together):
        some = slice(start, start + together)
        r, t = reflectance_transmittance(
            index, sequence, thickness_nm, wavelength_nm, aoi_deg=cone.aoi_deg[some].tolist(), polarisations=names
        )
        reflectance += np.einsum("a,sapw->sw", cone.weight[some] / len(names), r)
        transmittance += np.einsum("a,sapw->sw", cone.weight[some] / len(names), t)
        if tick is not None:
            tick(min(start + together, cone.weight.size) / cone.weight.size)
    return reflectance, transmittance


def polarisations_needed(cone: Cone, polarisation: Polarisation) -> tuple[str, ...]:
    """Which linear polarisations make up the light."""
    if cone.aoi_deg.size == 1 and cone.aoi_deg[0] == 0:
        return ("s",)
    if polarisation in ("s", "p") and not cone.about_normal:
        return (polarisation,)
    return ("s", "p")


def converged_cone(
    index: ComplexArray,
    sequence: IntArray,
    thickness_nm: FloatArray,
    wavelength_nm: FloatArray,
    *,
    aoi_deg: float,
    aperture: float,
    incident_index: float,
    polarisation: Polarisation = "unpolarised",
    tolerance: float = CONE_TOLERANCE,
) -> tuple[Cone, float]:
    """Smallest cone rule that this stack needs, and the error of its quadrature.

    Parameters
    ----------
    index, sequence, thickness_nm, wavelength_nm
        One stack, as in ``observe_stacks``.
    aoi_deg, aperture, incident_index
        As in ``make_cone``.
    polarisation : str
    tolerance : float
        Largest error of reflectance, at any wavelength, that is accepted; not reached with the finest rule, the error
        returned says so.

    Returns
    -------
    cone : Cone
    error : float
        Largest difference of reflectance between this rule and that of twice as many directions.
    """
    coarse = make_cone(aoi_deg=aoi_deg, aperture=aperture, incident_index=incident_index, nodes=CONE_NODES[0])
    if aperture <= 0:
        return coarse, 0.0
    error = np.inf
    before, _ = observe_stacks(index, sequence, thickness_nm, wavelength_nm, cone=coarse, polarisation=polarisation)
    for nodes in CONE_NODES[1:]:
        fine = make_cone(aoi_deg=aoi_deg, aperture=aperture, incident_index=incident_index, nodes=nodes)
        now, _ = observe_stacks(index, sequence, thickness_nm, wavelength_nm, cone=fine, polarisation=polarisation)
        error = float(abs(now - before).max())
        if error <= tolerance:
            break
        before, coarse = now, fine
    return coarse, error


def slit_grid(wavelength_nm: FloatArray, *, bandwidth_nm: float) -> FloatArray:
    """Wavelengths at which to calculate so that a slit of this bandwidth has what it needs at both ends too."""
    if bandwidth_nm <= 0:
        return wavelength_nm
    step = float(np.diff(wavelength_nm).min()) if wavelength_nm.size > 1 else bandwidth_nm
    parts = max(int(np.ceil(step * SLIT_STEPS / bandwidth_nm)), 1)
    fine = step / parts
    margin = int(np.ceil(bandwidth_nm / fine))
    count = round((wavelength_nm[-1] - wavelength_nm[0]) / fine)
    grid: FloatArray = wavelength_nm[0] + fine * np.arange(-margin, count + margin + 1)
    return grid[grid > 0]


def slit_weights(
    grid_nm: FloatArray,
    wavelength_nm: FloatArray,
    *,
    bandwidth_nm: float,
    shape: Literal["triangular", "gaussian"] = "triangular",
) -> FloatArray:
    """Weights, (wavelengths, grid), of an instrument's slit function; each row sums to 1.

    Notes
    -----
    The slit function of a monochromator with equal slits is a triangle of full width at half maximum
    ``bandwidth_nm``; a Gaussian of that width is the usual stand-in for an array spectrometer.
    """
    offset = (grid_nm[None, :] - wavelength_nm[:, None]) / bandwidth_nm
    if shape == "triangular":
        weights = np.maximum(1 - abs(offset), 0.0)
    else:
        weights = np.where(abs(offset) <= 1.0, np.exp(-4 * np.log(2) * offset**2), 0.0)
    result: FloatArray = weights / weights.sum(axis=1, keepdims=True)
    return result


def absorbance(transmittance: FloatArray) -> FloatArray:
    """Decadic absorbance -lg T, as spectrometers state it (reflection losses included); inf where T is 0."""
    with np.errstate(divide="ignore"):
        result: FloatArray = -np.log10(transmittance)
    return result
