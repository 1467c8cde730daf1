"""The uncertainty budget of the mean period and of the mean thickness of each phase (GUM, JCGM 100:2008)."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

from layerscan.records import BudgetRow

if TYPE_CHECKING:
    from collections.abc import Sequence

    from layerscan.geometry import GeometryFactor

CALIBRATION = "pixel size"
FIT = "boundary fit"
DIRECTION = "direction of the local normal"

ADVICE = {
    CALIBRATION: "Calibrate the magnification with a certified grating or lattice: half the uncertainty of the "
    "pixel size halves that of the period.",
    FIT: "Record four times the dose, or four times the length along the layers.",
    DIRECTION: "Measure a straighter part of the stack: choose a region in which the layers bend less.",
    "obliquity": "Cut or image a second section at a known angle to the first; that halves the doubt.",
    "stage tilt": "Measure the stage tilt on a flat reference surface.",
    "compression": "Measure the compression on round profiles in the same section, or cut with an oscillating knife.",
    "shrinkage": "Measure the shrinkage on the same specimen before and after preparation.",
}


@dataclass(frozen=True, kw_only=True)
class Part:
    """One contribution to the standard uncertainty of a quantity [nm]; u None where nothing states it."""

    component: str
    kind: str
    distribution: str
    u_nm: float | None
    sensitivity: float | None = 1.0
    degrees_of_freedom: float | None = None


def common_parts(value_nm: float, *, u_pixel_size: float | None, geometry: GeometryFactor) -> list[Part]:
    """Contributions that scale all lengths: pixel size and the section's geometry."""
    parts = [
        Part(
            component=CALIBRATION,
            kind="B",
            distribution="normal",
            u_nm=None if u_pixel_size is None else value_nm * u_pixel_size,
        )
    ]
    for component, _, u_relative, distribution, unstated in geometry.parts:
        parts.append(
            Part(
                component=component,
                kind="B",
                distribution=distribution,
                u_nm=None if unstated else value_nm * u_relative,
            )
        )
    return parts


def budget_rows(quantity: str, value_nm: float, parts: Sequence[Part]) -> tuple[BudgetRow, ...]:
    """Rows of one quantity with each part's share of the variance; unknown parts are listed with null."""
    total = sum((part.u_nm or 0.0) ** 2 for part in parts)
    return tuple(
        BudgetRow(
            quantity=quantity,
            component=part.component,
            kind="A" if part.kind == "A" else "B",
            distribution=part.distribution,
            relative=None if part.u_nm is None or not value_nm else part.u_nm / abs(value_nm),
            u_nm=part.u_nm,
            sensitivity=part.sensitivity,
            share=None if part.u_nm is None or total == 0 else part.u_nm**2 / total,
            degrees_of_freedom=part.degrees_of_freedom,
        )
        for part in parts
    )


def largest_component(rows: Sequence[BudgetRow]) -> tuple[str | None, str | None]:
    """The component that limits the answer and the measurement that would halve it.

    A pixel size whose uncertainty nothing states limits more than anything that is known.
    """
    if not rows:
        return None, None
    unknown = [row for row in rows if row.component == CALIBRATION and row.u_nm is None]
    if unknown:
        return f"{CALIBRATION} (its uncertainty is not stated)", ADVICE[CALIBRATION]
    known = [row for row in rows if row.u_nm is not None]
    if not known:
        return None, None
    worst = max(known, key=lambda row: row.u_nm or 0.0)
    return worst.component, ADVICE.get(worst.component)


def combined(parts: Sequence[Part]) -> float:
    """Root sum of squares of what is known [nm]."""
    return math.sqrt(sum((part.u_nm or 0.0) ** 2 for part in parts))
