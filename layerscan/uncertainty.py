"""Quantities with uncertainty: reading what a user types, combining, expanding and drawing (GUM, JCGM 100 and 101)."""

from __future__ import annotations

import math
import re
from typing import TYPE_CHECKING

from layerscan.errors import SettingsError
from layerscan.records import Quantity

if TYPE_CHECKING:
    import numpy as np

    from layerscan.records import FloatArray

LENGTH_NM = {
    "pm": 1e-3,
    "angstrom": 0.1,
    "Å": 0.1,
    "A": 0.1,
    "nm": 1.0,
    "um": 1e3,
    "µm": 1e3,
    "μm": 1e3,
    "micron": 1e3,
    "mm": 1e6,
    "cm": 1e7,
    "m": 1e9,
}
ANGLE_DEG = {"deg": 1.0, "°": 1.0, "rad": 180.0 / math.pi, "mrad": 0.18 / math.pi}
RATIO = {"": 1.0, "1": 1.0, "%": 0.01}
UNITS = {"length": ("nm", LENGTH_NM), "angle": ("deg", ANGLE_DEG), "ratio": ("1", RATIO)}

_NUMBER = r"[-+]?(?:\d+\.?\d*|\.\d+)(?:[eE][-+]?\d+)?|[-+]?(?:nan|inf)"
_PLAIN = re.compile(rf"^\s*({_NUMBER})\s*(?:(?:\+-|±|\+/-)\s*({_NUMBER})\s*)?(.*?)\s*$", re.IGNORECASE)
_LIMITS = re.compile(rf"^\s*({_NUMBER})\s*\[\s*([^\]]+)\]\s*(.*?)\s*$", re.IGNORECASE)
_RANGE = re.compile(r"^\s*\[\s*([^\]]+)\]\s*(.*?)\s*$")


def parse_quantity(text: str, *, dimension: str, name: str = "quantity") -> Quantity:
    """Read a quantity as a user types it.

    Parameters
    ----------
    text : str
        ``VALUE UNIT``, ``VALUE +- U UNIT`` (U standard, k = 1), ``VALUE [LOW, HIGH] UNIT`` (rectangular) or
        ``VALUE [LOW, MODE, HIGH] UNIT`` (triangular).
    dimension : {"length", "angle", "ratio"}
        What the unit must be; lengths come back in nm, angles in degrees, ratios as a plain number ("12 %" is 0.12).
    name : str
        What the quantity is, for the error message.

    Returns
    -------
    Quantity
        With ``u`` None where nothing states an uncertainty. The u of rectangular and triangular limits is their
        standard deviation (JCGM 100:2008, 4.3.7 and 4.3.9; triangular with free mode: JCGM 101:2008, 6.4).

    Raises
    ------
    SettingsError
        The text is no quantity, its unit is missing or of another kind, or its limits are out of order.

    Examples
    --------
    >>> parse_quantity("2.5 +- 0.05 nm", dimension="length").u
    0.05
    >>> parse_quantity("1.2 um", dimension="length").value
    1200.0
    """
    unit_out, table = UNITS[dimension]
    form = f"Give VALUE [+- U] UNIT with a unit of {', '.join(repr(u) for u in table if u)}."
    limits = _LIMITS.match(text)
    plain = None if limits else _PLAIN.match(text)
    if limits:
        value_text, limit_text, unit = limits.groups()
        try:
            bounds = [float(part) for part in limit_text.split(",")]
        except ValueError:
            raise SettingsError(f"{name} '{text}' has limits that are not numbers. {form}") from None
        u_text = None
    elif plain:
        value_text, u_text, unit = plain.groups()
        bounds = []
    else:
        raise SettingsError(f"{name} '{text}' is no quantity. {form}")
    if unit not in table:
        what = f"the unit '{unit}'" if unit else "no unit"
        raise SettingsError(f"{name} '{text}' has {what}. {form}")
    scale = table[unit]
    value = float(value_text) * scale
    if not math.isfinite(value):
        raise SettingsError(f"{name} '{text}' is not finite. {form}")
    if not bounds:
        u = None if u_text is None else float(u_text) * scale
        if u is not None and not (math.isfinite(u) and u >= 0):
            raise SettingsError(f"{name} '{text}' has a standard uncertainty that is negative or not finite. {form}")
        return Quantity(value=value, unit=unit_out, u=u)
    low, high = bounds[0] * scale, bounds[-1] * scale
    mode = bounds[1] * scale if len(bounds) == 3 else value
    if len(bounds) not in (2, 3) or not low <= mode <= high or not low <= value <= high:
        raise SettingsError(
            f"{name} '{text}' has limits that do not enclose it in order. Give [LOW, HIGH] or [LOW, MODE, HIGH]."
        )
    if len(bounds) == 2:
        # the interval is symmetric about the value only if the user made it so; its SD is that of the rectangle
        return Quantity(
            value=value,
            unit=unit_out,
            u=(high - low) / math.sqrt(12),
            distribution="rectangular",
            low=low,
            high=high,
        )
    variance = (low**2 + mode**2 + high**2 - low * mode - low * high - mode * high) / 18
    return Quantity(value=value, unit=unit_out, u=math.sqrt(variance), distribution="triangular", low=low, high=high)


def parse_pixel_size(text: str) -> tuple[Quantity, Quantity]:
    """Read a pixel size: one length, or ``"ROW UNIT, COLUMN UNIT"``; returns (row, column) in nm.

    Raises
    ------
    SettingsError
        It is no length, or not positive, or so small or large that no electron microscope image has it
        (below 1e-4 nm or above 1e6 nm).
    """
    parts = re.split(r",(?![^\[]*\])", text)
    if len(parts) not in (1, 2):
        raise SettingsError(f"Pixel size '{text}' has {len(parts)} parts. Give one length, or 'ROW UNIT, COLUMN UNIT'.")
    sizes = [parse_quantity(part, dimension="length", name="Pixel size") for part in parts]
    for size in sizes:
        check_pixel_size(size.value, given=text)
    return sizes[0], sizes[-1]


def check_pixel_size(value_nm: float, *, given: str) -> None:
    """Raise ``SettingsError`` where a pixel size is not positive, not finite or absurd."""
    if not math.isfinite(value_nm) or value_nm <= 0:
        raise SettingsError(f"Pixel size '{given}' must be positive and finite. Give a length such as '2.5 nm'.")
    if not 1e-4 <= value_nm <= 1e6:
        raise SettingsError(
            f"Pixel size '{given}' is {value_nm:.3g} nm: outside 0.0001 nm to 1 mm, no micrograph has it. "
            "Check the unit."
        )


def combine(*contributions: float | None) -> float | None:
    """Root sum of squares of uncorrelated standard uncertainties (JCGM 100:2008, eq. 10); None is left out.

    Returns None only where every contribution is None.
    """
    known = [c for c in contributions if c is not None]
    return math.sqrt(sum(c * c for c in known)) if known else None


def expand(u: float, *, degrees_of_freedom: float | None = None, probability: float = 0.95) -> float:
    """Expanded uncertainty U for a coverage probability, with Student's t (JCGM 100:2008, annex G)."""
    from scipy.special import stdtrit

    return float(u * stdtrit(degrees_of_freedom if degrees_of_freedom else 1e12, 0.5 + probability / 2))


def effective_degrees_of_freedom(u: list[float], degrees_of_freedom: list[float | None]) -> float | None:
    """Welch-Satterthwaite formula (JCGM 100:2008, eq. G.2b); None means infinite."""
    total = sum(x * x for x in u)
    lower = sum(x**4 / nu for x, nu in zip(u, degrees_of_freedom, strict=True) if nu)
    return None if lower == 0 else total * total / lower


def resample(quantity: Quantity, *, draws: int, rng: np.random.Generator) -> FloatArray:
    """Draw from the distribution that a quantity states (JCGM 101:2008, 6.4).

    Returns
    -------
    (draws,) float array
        Constant where no uncertainty is stated.
    """
    import numpy as np

    if not quantity.u:
        return np.full(draws, quantity.value)
    if quantity.low is not None and quantity.high is not None:
        if quantity.distribution == "rectangular":
            return rng.uniform(quantity.low, quantity.high, draws)
        if quantity.distribution == "triangular":
            return rng.triangular(quantity.low, _triangular_mode(quantity), quantity.high, draws)
    if quantity.degrees_of_freedom:
        return quantity.value + quantity.u * rng.standard_t(quantity.degrees_of_freedom, draws)
    return rng.normal(quantity.value, quantity.u, draws)


def _triangular_mode(quantity: Quantity) -> float:
    """Recover the mode from limits and variance: the root that lies nearest the value."""
    low, high, u = quantity.low or 0.0, quantity.high or 0.0, quantity.u or 0.0
    b = -(low + high)
    c = low * low + high * high - low * high - 18 * u * u
    root = math.sqrt(max(b * b - 4 * c, 0.0))
    candidates = [(-b + root) / 2, (-b - root) / 2]
    return min(max(min(candidates, key=lambda m: abs(m - quantity.value)), low), high)
