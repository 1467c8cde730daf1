"""Observed against predicted peak: a straight line with errors in both axes, held against the 1:1 line."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

from layerscan.errors import MeasurementError
from layerscan.report.summary import LineFit
from layerscan.study.statistics import say_p

if TYPE_CHECKING:
    from layerscan.records import FloatArray


@dataclass(frozen=True, kw_only=True)
class StraightLine:
    """y = intercept + slope x with the covariance of both, as the stated uncertainties give it."""

    slope: float
    intercept: float
    u_slope: float
    u_intercept: float
    covariance: float
    chi_square: float
    degrees_of_freedom: int
    pivot: float


def fit_line(x: Sequence[float], y: Sequence[float], *, u_x: Sequence[float], u_y: Sequence[float]) -> StraightLine:
    """Fit a straight line to points with uncorrelated standard uncertainties in both axes.

    Parameters
    ----------
    x, y, u_x, u_y : (N,) sequences of float
        At least three points. u_x and u_y may not both be zero for one point.

    Returns
    -------
    StraightLine
        ``pivot`` is the x at which slope and height are uncorrelated.

    Raises
    ------
    MeasurementError
        Fewer than three points, no spread along x, an uncertainty of zero in both axes, or no convergence.

    References
    ----------
    D. York, N. M. Evensen, M. Lopez Martinez & J. De Basabe Delgado, Am. J. Phys. 72 (2004) 367, section III
    (unified equations; here without correlation between the two errors of a point).
    """
    import numpy as np

    px, py, ux, uy = (np.asarray(values, dtype=float) for values in (x, y, u_x, u_y))
    if px.size < 3:
        raise MeasurementError(f"A line with errors needs three points; {px.size} came. Add specimens.")
    if np.ptp(px) == 0:
        raise MeasurementError("All points have the same predicted peak: no line can be told. Add other specimens.")
    if np.any(ux**2 + uy**2 <= 0):
        raise MeasurementError("A point states no uncertainty in either axis. Give one.")
    slope = float(np.polyfit(px - px.mean(), py - py.mean(), 1)[0])
    for _ in range(500):
        weight = 1 / (uy**2 + slope**2 * ux**2)
        mean_x, mean_y = float(weight @ px / weight.sum()), float(weight @ py / weight.sum())
        dx, dy = px - mean_x, py - mean_y
        beta = weight * (dx * uy**2 + slope * dy * ux**2)
        step = float((weight * beta) @ dy / ((weight * beta) @ dx))
        done = abs(step - slope) <= 1e-13 * max(abs(step), 1e-12)
        slope = step
        if done:
            break
    else:
        raise MeasurementError("The line did not settle within 500 steps: the points hardly lie along a line.")
    return _with_errors(px, py, ux, uy, slope)


def _with_errors(x: FloatArray, y: FloatArray, u_x: FloatArray, u_y: FloatArray, slope: float) -> StraightLine:
    weight = 1 / (u_y**2 + slope**2 * u_x**2)
    mean_x, mean_y = float(weight @ x / weight.sum()), float(weight @ y / weight.sum())
    intercept = mean_y - slope * mean_x
    dx, dy = x - mean_x, y - mean_y
    adjusted = mean_x + weight * (dx * u_y**2 + slope * dy * u_x**2)  # abscissae of the points moved onto the line
    pivot = float(weight @ adjusted / weight.sum())
    u_slope = 1 / math.sqrt(float(weight @ (adjusted - pivot) ** 2))
    u_intercept = math.sqrt(1 / float(weight.sum()) + (pivot * u_slope) ** 2)
    return StraightLine(
        slope=slope,
        intercept=intercept,
        u_slope=u_slope,
        u_intercept=u_intercept,
        covariance=-pivot * u_slope**2,
        chi_square=float(weight @ (y - intercept - slope * x) ** 2),
        degrees_of_freedom=x.size - 2,
        pivot=pivot,
    )


def compare_with_identity(
    predicted: Sequence[float],
    observed: Sequence[float],
    *,
    u_predicted: Sequence[float | None],
    u_observed: Sequence[float | None],
    level: float = 0.95,
) -> LineFit:
    """Hold observed against predicted peaks: the fitted line, and whether the 1:1 line would do.

    Parameters
    ----------
    predicted, observed : (specimens,) sequences of float
        Peak wavelengths in nm, one pair a specimen.
    u_predicted, u_observed : (specimens,) sequences of float or None
        Standard uncertainties in nm. Where one is None on an axis, all points of that axis get the same one, from the
        scatter about the line shared equally between the axes (Deming's line with ratio 1).

    Returns
    -------
    LineFit
        With None for numbers that fewer than three specimens cannot give.

    Notes
    -----
    Points that scatter more than their uncertainties allow (chi-square above its degrees of freedom) have the
    uncertainties of slope and intercept multiplied by the square root of that ratio (Birge), and intervals then use
    Student's t. A common factor in all predictions (calibration of one microscope) tilts or shifts the line as a
    whole and is in no point's scatter: the test of 1:1 says whether line and identity differ, not why.

    References
    ----------
    York et al. (2004), as for ``fit_line``. R. T. Birge, Phys. Rev. 40 (1932) 207. W. E. Deming, Statistical
    Adjustment of Data (1943).
    """
    n = len(predicted)
    if n < 3:
        return _no_line(n, f"{n} specimens have a predicted and an observed peak: a line needs three.")
    known = all(u for u in u_predicted) and all(u for u in u_observed)
    u_x = [float(u or 1.0) for u in u_predicted] if known else [1.0] * n
    u_y = [float(u or 1.0) for u in u_observed] if known else [1.0] * n
    try:
        line = fit_line(predicted, observed, u_x=u_x, u_y=u_y)
    except MeasurementError as error:
        return _no_line(n, str(error))
    return _describe(line, n, known=known, level=level)


def _describe(line: StraightLine, n: int, *, known: bool, level: float) -> LineFit:
    from scipy.special import chdtrc, fdtrc, stdtrit

    nu = line.degrees_of_freedom
    ratio = line.chi_square / nu
    scattered = not known or ratio > 1
    widen = math.sqrt(ratio) if scattered else 1.0
    k = float(stdtrit(nu if scattered else 1e9, 0.5 + level / 2))
    u_slope, u_intercept = line.u_slope * widen, line.u_intercept * widen
    u_offset = widen * math.sqrt(max(line.u_intercept**2 - (line.pivot * line.u_slope) ** 2, 0.0))
    offset = line.intercept + (line.slope - 1) * line.pivot
    # slope and height at the pivot are uncorrelated: their squared deviations from 1:1 add up
    if u_slope > 0 and u_offset > 0:
        wald = ((line.slope - 1) / u_slope) ** 2 + (offset / u_offset) ** 2
        p_one = float(fdtrc(2, nu, wald / 2)) if scattered else float(chdtrc(2, wald))
    else:
        p_one = 1.0 if line.slope == 1 and offset == 0 else 0.0
    verdict = "is compatible with" if p_one >= 1 - level else "differs from"
    sentence = (
        f"Over {n} specimens the line observed = {line.intercept:.3g} nm + {line.slope:.4g} x predicted {verdict} the "
        f"1:1 line (p = {say_p(p_one)}); at {line.pivot:.0f} nm observed minus predicted is {offset:+.2g} nm "
        f"(u = {u_offset:.2g} nm)."
    )
    if known and float(chdtrc(nu, line.chi_square)) < 0.05:
        sentence += (
            f" The points scatter more than their uncertainties allow (chi-square {line.chi_square:.3g} on {nu} "
            "degrees of freedom): something else differs between specimens, and u was widened for it."
        )
    if not known:
        sentence += " Uncertainties are not stated for every point: the scatter was shared equally between the axes."
    return LineFit(
        n=n,
        slope=line.slope,
        u_slope=u_slope,
        intercept_nm=line.intercept,
        u_intercept_nm=u_intercept,
        covariance=line.covariance * widen**2,
        slope_interval=(line.slope - k * u_slope, line.slope + k * u_slope),
        intercept_interval=(line.intercept - k * u_intercept, line.intercept + k * u_intercept),
        pivot_nm=line.pivot,
        offset_nm=offset,
        u_offset_nm=u_offset,
        chi_square=line.chi_square if known else None,
        degrees_of_freedom=nu,
        p_value=float(chdtrc(nu, line.chi_square)) if known else None,
        p_one_to_one=p_one,
        method="line with errors in both axes (York et al. 2004)" if known else "Deming's line, equal errors",
        sentence=sentence,
    )


def _no_line(n: int, sentence: str) -> LineFit:
    return LineFit(
        n=n,
        slope=None,
        u_slope=None,
        intercept_nm=None,
        u_intercept_nm=None,
        covariance=None,
        slope_interval=None,
        intercept_interval=None,
        pivot_nm=None,
        offset_nm=None,
        u_offset_nm=None,
        chi_square=None,
        degrees_of_freedom=None,
        p_value=None,
        p_one_to_one=None,
        method="none",
        sentence=sentence,
    )
