"""Whether a difference is within what both sides' uncertainties allow, and what would also have passed."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

from layerscan.comparison.quantities import noise_of
from layerscan.records import Agreement
from layerscan.uncertainty import combine

if TYPE_CHECKING:
    from collections.abc import Sequence

    from layerscan.comparison.quantities import Pair
    from layerscan.records import Peak, Prediction

COVERAGE = 1.959964
"""Half width of the 95 % interval of a normal law in standard uncertainties (JCGM 100:2008, table G.1)."""

U_WAVELENGTH_SCALE_NM = 0.5
"""Standard uncertainty of a spectrometer's wavelength scale (common practice, no source: array instruments state about
1 nm at k = 2). Taken for every observation, since spectrum files do not state it."""

WIDEST_RANGE_NM = 120.0
"""A wider range of passing peaks reaches from blue to yellow and says nothing about a colour (our convention)."""

WIDTH_RATIO = 2.0
"""Bands that differ in width by more than this factor are not the same band (our convention)."""

SCORE_WIDTH = 0.12
"""Relative distance at which a predicted and an observed peak stop looking like the same order (our convention)."""


@dataclass(frozen=True, kw_only=True)
class PeakMatch:
    """The dominant peak that both sides share, and whether the observed one could be of another order."""

    predicted: Peak
    observed: Peak
    order_uncertain: bool

    @property
    def difference_nm(self) -> float:
        """Predicted minus observed."""
        return self.predicted.wavelength_nm - self.observed.wavelength_nm

    @property
    def u_nm(self) -> float | None:
        """Standard uncertainty of the difference; None where the prediction states none."""
        if not self.predicted.u_wavelength_nm:
            return None
        return combine(self.predicted.u_wavelength_nm, self.observed.u_wavelength_nm)


@dataclass(frozen=True, kw_only=True)
class Verdict:
    """An agreement with the reasons for a "cannot tell", in words."""

    agreement: Agreement
    doubts: tuple[str, ...] = ()


def observed_peaks(pair: Pair) -> tuple[Peak, ...]:
    """Peaks of the observed curve at half height, with u from noise, sampling and wavelength scale.

    Notes
    -----
    Noise that smoothing has left moves the midpoint by noise / slope on each flank; where the spectrum states its own
    u, that counts if it is larger. Sampling counts as a rectangular distribution of one step.
    """
    import numpy as np

    from layerscan.optics.peaks import find_peaks, smooth_spectrum

    curve, left = smooth_spectrum(pair.wavelength_nm, pair.bands(pair.observed))
    noise = max(left, pair.noise * left / own if (own := noise_of(pair.observed)) > 0 else 0.0)
    slope = np.gradient(curve, pair.wavelength_nm)
    found = []
    for peak in find_peaks(pair.wavelength_nm, pair.bands(pair.observed)):
        flanks = peak.wavelength_nm + np.array([-0.5, 0.5]) * peak.fwhm_nm
        steep = np.maximum(np.abs(np.interp(flanks, pair.wavelength_nm, slope)), 1e-12)
        shaken = 0.5 * noise * float(np.sqrt(np.sum(steep**-2.0)))
        u = combine(min(shaken, 0.5 * peak.fwhm_nm), pair.step_nm / math.sqrt(12), U_WAVELENGTH_SCALE_NM)
        found.append(_with_u(peak, u))
    return tuple(found)


def predicted_peaks(pair: Pair, prediction: Prediction) -> tuple[Peak, ...]:
    """The prediction's own peaks inside the common range; for transmittance, the dips with the u of those peaks."""
    low, high = float(pair.wavelength_nm[0]), float(pair.wavelength_nm[-1])
    own = tuple(peak for peak in prediction.peaks if low <= peak.wavelength_nm <= high)
    if not pair.through:
        return own
    from layerscan.optics.peaks import find_peaks

    dips = []
    for dip in find_peaks(pair.wavelength_nm, pair.bands(pair.predicted)):
        near = min(own, key=lambda peak: abs(peak.wavelength_nm - dip.wavelength_nm), default=None)
        if near is not None and abs(near.wavelength_nm - dip.wavelength_nm) <= 0.5 * near.fwhm_nm:
            dips.append(_with_u(dip, near.u_wavelength_nm, near.order))
    return tuple(dips)


def match_peaks(predicted: Sequence[Peak], observed: Sequence[Peak]) -> PeakMatch | None:
    """The pair of peaks that are both strong and near each other; None where a side has none.

    Notes
    -----
    The pair with the largest product of heights times exp(-(ln ratio of wavelengths / 0.12)^2 / 2). An observed peak
    says nothing about its order; where its distance is more than a quarter of the distance between neighbouring
    predicted peaks, another order may be the right one, and the match says so.
    """
    pairs = [(_score(p, o), p, o) for p in predicted for o in observed]
    if not pairs:
        return None
    _, best, seen = max(pairs, key=lambda item: item[0])
    spacing = min((abs(p.wavelength_nm - best.wavelength_nm) for p in predicted if p is not best), default=math.inf)
    uncertain = abs(best.wavelength_nm - seen.wavelength_nm) > 0.25 * spacing
    return PeakMatch(predicted=best, observed=seen, order_uncertain=uncertain)


def judge_peaks(match: PeakMatch | None, *, calibrated: bool) -> Verdict:
    """Test the difference of the matched peaks against its uncertainty at 95 %.

    Parameters
    ----------
    match : PeakMatch or None
        None: a side has no peak.
    calibrated : bool
        Whether the pixel size has a stated uncertainty. Without one nothing can be concluded.

    Notes
    -----
    z = difference / u with u from the draws (thickness, calibration, index) and the observation; p from the normal law.
    "Explains" needs p >= 0.05, a certain order, a range of passing peaks that says something (narrower than the
    distance to the next order and than 120 nm) and bands whose widths differ by less than a factor of two.
    "Contradicts" needs p < 0.05.
    What it cannot see: a right peak for a wrong reason.
    """
    if match is None:
        return _cannot_tell("no peak can be read at half height on both sides")
    if not calibrated:
        needed = abs(match.difference_nm) / match.observed.wavelength_nm
        return _cannot_tell(
            "the pixel size has no stated uncertainty (an error of "
            f"{100 * needed:.1f} % in it would account for the whole difference)"
        )
    u = match.u_nm
    if u is None:
        return _cannot_tell("the prediction carries no uncertainty: give the layers u_nm, and draws above 0")
    z = abs(match.difference_nm) / u
    p_value = math.erfc(z / math.sqrt(2))
    centre = match.predicted.wavelength_nm
    span = (centre - COVERAGE * u, centre + COVERAGE * u)
    if z > COVERAGE:
        return _verdict(z, p_value, "contradicts", span)
    doubts = _doubts(match, span)
    return _verdict(z, p_value, "cannot_tell" if doubts else "explains", span, doubts)


def judge_colour(delta_e00: float, radius: float | None, *, calibrated: bool) -> Verdict:
    """Test a colour difference against the radius that holds 95 % of the predicted colours.

    Notes
    -----
    The statistic is difference / radius. p takes the scatter of the colours as the same in all three directions
    (chi-square with 3 degrees of freedom), an approximation. A radius above 20 covers neighbouring colour names and
    says nothing (our convention).
    """
    from scipy.special import gammaincc

    if not calibrated:
        return _cannot_tell("the pixel size has no stated uncertainty")
    if not radius:
        return _cannot_tell("the predicted colour carries no uncertainty: give the layers u_nm, and draws above 0")
    ratio = delta_e00 / radius
    p_value = float(gammaincc(1.5, 0.5 * 7.814728 * ratio * ratio))
    if ratio > 1:
        return _verdict(ratio, p_value, "contradicts", None)
    if radius > 20:
        doubt = f"colours as far as {radius:.0f} apart would have passed, which says nothing"
        return _verdict(ratio, p_value, "cannot_tell", None, (doubt,))
    return _verdict(ratio, p_value, "explains", None)


def _cannot_tell(doubt: str) -> Verdict:
    return _verdict(None, None, "cannot_tell", None, (doubt,))


def _verdict(
    statistic: float | None,
    p_value: float | None,
    conclusion: Literal["explains", "contradicts", "cannot_tell"],
    span: tuple[float, float] | None,
    doubts: tuple[str, ...] = (),
) -> Verdict:
    agreement = Agreement(statistic=statistic, p_value=p_value, conclusion=conclusion, passing_peak_range_nm=span)
    return Verdict(agreement=agreement, doubts=doubts)


def _doubts(match: PeakMatch, span: tuple[float, float]) -> tuple[str, ...]:
    doubts = []
    peak, seen = match.predicted, match.observed
    if match.order_uncertain:
        doubts.append("the observed peak could as well be of another order")
    width = span[1] - span[0]
    spacing = peak.wavelength_nm / (peak.order + 1) if peak.order else math.inf
    if width > min(spacing, WIDEST_RANGE_NM):
        limit = "the distance to the next order" if spacing < WIDEST_RANGE_NM else f"{WIDEST_RANGE_NM:.0f} nm"
        doubts.append(f"peaks over {width:.0f} nm would have passed, more than {limit}, which says nothing")
    if not 1 / WIDTH_RATIO <= seen.fwhm_nm / peak.fwhm_nm <= WIDTH_RATIO:
        doubts.append(
            f"the peaks agree, but the observed band is {seen.fwhm_nm:.0f} nm wide and the predicted one "
            f"{peak.fwhm_nm:.0f} nm"
        )
    return tuple(doubts)


def _score(predicted: Peak, observed: Peak) -> float:
    apart = math.log(predicted.wavelength_nm / observed.wavelength_nm) / SCORE_WIDTH
    # far pairs must still be ordered, so a floor that falls slowly instead of the exponential's zero
    return predicted.reflectance * observed.reflectance * max(math.exp(-0.5 * apart * apart), 1e-4 / (1 + apart**2))


def _with_u(peak: Peak, u: float | None, order: int | None = None) -> Peak:
    from dataclasses import replace

    return replace(peak, u_wavelength_nm=u, order=order)
