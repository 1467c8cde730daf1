"""How a section distorts what it shows: obliquity, stage tilt, compression along the knife, shrinkage.

Every correction is one factor on lengths along the layer normal, drawn by Monte Carlo (JCGM 101:2008), because the
obliquity term is of second order and one-sided near zero.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

from layerscan.errors import SettingsError
from layerscan.uncertainty import parse_quantity, resample

if TYPE_CHECKING:
    from layerscan.records import Quantity

_DRAWS = 20_000
_SEED = 20_240_101


@dataclass(frozen=True, kw_only=True)
class GeometryFactor:
    """Factor from length in the image to length in the specimen, with the parts that make it up.

    ``parts`` holds (component, factor, u of the factor relative to it, distribution, stated without uncertainty).
    """

    factor: float
    u_relative: float
    parts: tuple[tuple[str, float, float, str, bool], ...]


def correct_lengths(
    *,
    obliquity: str | None = None,
    stage_tilt: str | None = None,
    compression: str | None = None,
    shrinkage: str | None = None,
    normal_to_cut_deg: float = 0.0,
    normal_to_tilt_axis_deg: float = 90.0,
) -> GeometryFactor:
    """Factor that takes a length along the layer normal in the image to the specimen.

    Parameters
    ----------
    obliquity : str, optional
        Angle tau between the layer normal and the image plane: true = apparent * cos(tau).
    stage_tilt : str, optional
        Stage tilt T of a surface that was level before tilting; its lengths across the tilt axis are foreshortened
        by cos(T). For a face cut perpendicular to that surface (a trench wall) the factor is sin(T): write
        ``"wall 52 deg"``. The tilt axis is taken along the columns' direction (horizontal).
    compression : str, optional
        Relative compression c along the cutting direction, which is taken along the layer normal unless
        ``normal_to_cut_deg`` says otherwise.
    shrinkage : str, optional
        Relative shrinkage s of the specimen in preparation: true = apparent / (1 - s).
    normal_to_cut_deg : float
        Angle between layer normal and cutting direction, in degrees.
    normal_to_tilt_axis_deg : float
        Angle between layer normal and tilt axis, in degrees.

    Returns
    -------
    GeometryFactor
        1 with u 0 where nothing is stated.

    Raises
    ------
    SettingsError
        An angle outside 0 to below 90 degrees, a compression or shrinkage outside 0 to below 1.

    Notes
    -----
    p = N q cos(tau) / ((1 - c)(1 - s)); compression at an angle psi to the normal: a linear map A of the section takes
    the wave vector to A^-T k, so p_image = p / sqrt(cos^2 psi / (1 - c)^2 + sin^2 psi).
    A tilt that the microscope has already corrected must not be stated again: nothing in an image shows it.
    """
    import numpy as np

    rng = np.random.default_rng(_SEED)
    total = np.ones(_DRAWS)
    nominal_total = 1.0
    parts: list[tuple[str, float, float, str, bool]] = []

    def angle(text: str, name: str) -> Quantity:
        q = parse_quantity(text, dimension="angle", name=name)
        if not 0 <= q.value < 90:
            raise SettingsError(f"{name} '{text}' is outside 0 to below 90 degrees.")
        return q

    def ratio(text: str, name: str) -> Quantity:
        q = parse_quantity(text, dimension="ratio", name=name)
        if not 0 <= q.value < 0.95:
            raise SettingsError(f"{name} '{text}' is outside 0 to below 95 %.")
        return q

    def add(component: str, q: Quantity, function: object) -> None:
        nonlocal total, nominal_total
        draws = function(resample(q, draws=_DRAWS, rng=rng))  # type: ignore[operator]
        factor = float(function(np.asarray(q.value)))  # type: ignore[operator]
        mean = float(draws.mean())
        parts.append((component, factor, float(draws.std() / mean) if mean else 0.0, q.distribution, q.u is None))
        total = total * draws
        nominal_total *= factor

    def stretch(compressed: np.ndarray, psi_deg: float) -> np.ndarray:
        psi = math.radians(psi_deg)
        result: np.ndarray = np.sqrt((np.cos(psi) / compressed) ** 2 + np.sin(psi) ** 2)
        return result

    if obliquity is not None:
        add("obliquity", angle(obliquity, "Obliquity"), lambda t: np.cos(np.radians(t)))
    if stage_tilt is not None:
        wall = stage_tilt.strip().lower().startswith("wall")
        q = angle(stage_tilt.strip()[4:] if wall else stage_tilt, "Stage tilt")
        if wall and q.value == 0:
            raise SettingsError("Stage tilt 'wall 0 deg' shows no wall at all. Give the tilt of the stage.")
        shape = np.sin if wall else np.cos
        add("stage tilt", q, lambda t: stretch(np.abs(shape(np.radians(t))), 90.0 - normal_to_tilt_axis_deg))
    if compression is not None:
        add("compression", ratio(compression, "Compression"), lambda c: stretch(1 - c, normal_to_cut_deg))
    if shrinkage is not None:
        add("shrinkage", ratio(shrinkage, "Shrinkage"), lambda s: 1 / (1 - s))
    if not parts:
        return GeometryFactor(factor=1.0, u_relative=0.0, parts=())
    mean = float(total.mean())
    return GeometryFactor(factor=mean, u_relative=float(total.std() / mean), parts=tuple(parts))
