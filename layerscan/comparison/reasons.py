"""What would explain a difference: single changes, the value each needs, and which of them look alike."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

from layerscan.comparison.agreement import COVERAGE
from layerscan.comparison.changes import Change, possible_changes
from layerscan.comparison.model import WORK_LIMIT, StackModel, rebuild_stack
from layerscan.errors import InputError
from layerscan.records import Reason

if TYPE_CHECKING:
    from collections.abc import Sequence

    from layerscan.comparison.agreement import PeakMatch
    from layerscan.comparison.quantities import Pair
    from layerscan.records import FloatArray, Prediction, Progress

ALIKE_RMS = 0.02
"""Two spectra closer than this (RMS reflectance) look alike: a plain calculation met the measured reflectance of a film
of known thickness to 0.007-0.011 at best and 0.02-0.05 in general (data of arXiv:2602.06316)."""

UNKNOWN_TOLERANCE_NM = 2.0  # how near a peak must come where nothing states an uncertainty
GRID_POINTS = 16
JUMP = 0.08  # a band that moves further than this (relative) from one step to the next has been lost
REACHED_NM = 0.5  # a solution whose peak is further than this from the target is none: the peak jumps there


@dataclass(frozen=True, kw_only=True, eq=False)
class Explanation:
    """A change at the value that brings the peak where it was observed, with the spectrum it then gives."""

    change: Change
    value: float
    u: float | None
    evidence: float | None
    curve: FloatArray


@dataclass(frozen=True, kw_only=True)
class Found:
    """What was found: reasons, likeliest first, and what kept others from being sought."""

    reasons: tuple[Reason, ...] = ()
    note: str = ""


def find_reasons(
    prediction: Prediction, pair: Pair, match: PeakMatch | None, *, progress: Progress | None = None
) -> Found:
    """Find the single changes that would bring the predicted peak where it was observed.

    Parameters
    ----------
    prediction : Prediction
        Its stack is calculated again, flat and without draws; shifts are taken relative to that calculation.
    pair, match
        Both sides on one grid, and the peak they share. Without a shared peak there is nothing to explain.

    Returns
    -------
    Found
        ``evidence`` of a reason is the fall in misfit, less (value - now)^2 / usual error^2 where a usual error is
        taken; None where the difference has no uncertainty. ``indistinguishable_from`` names the reasons whose spectra
        over the common range differ by less than 0.02 (or the observed noise) RMS.

    Notes
    -----
    Misfit = (peak difference / u)^2 + m (RMS / 0.02)^2, with the RMS after a fit of one factor (spot, reference and
    scattering decide heights too), m = 2 range / band width as the number of independent stretches of a spectrum, and
    the noise instead of 0.02 where it is larger: a chi-square in spirit, good for ranking.
    One change at a time; two together can always do more. The peak is followed from its present place in small steps,
    so that it keeps its order. A change that cannot be partial is listed only where its evidence is positive.
    """
    if match is None:
        return Found(note="without a shared peak no reasons were sought")
    try:
        model = rebuild_stack(prediction)
    except InputError as error:
        return Found(note=f"no reasons were sought: {error}")
    if model.work > WORK_LIMIT:
        return Found(note=f"no reasons were sought: with {len(model.thickness_nm)} layers that would take too long")
    follow = _Follower(through=pair.through, order=match.predicted.order)
    now = follow.peak(model, match.predicted.wavelength_nm)
    if now is None:
        return Found(note="no reasons were sought: the peak of the flat stack could not be followed")
    target = now - match.difference_nm
    misfit = _Misfit(pair=pair, u_nm=match.u_nm, width_nm=match.observed.fwhm_nm)
    before = misfit.of(misfit.curve(model, follow), match.difference_nm)
    found: list[Explanation] = []
    stated = {str(material.get("name")): material.get("u_index") for material in prediction.materials}
    changes = possible_changes(model, match.observed.wavelength_nm, u_index=stated)
    for place, change in enumerate(changes):
        if progress is not None:
            progress(f"seeking reasons: {change.name}", place / len(changes))
        explanation = _explain(change, follow, now, target, misfit, before)
        if explanation is not None:
            found.append(explanation)
    found.sort(key=lambda item: (-(item.evidence or 0.0), misfit.rms(item.curve)))
    return Found(reasons=tuple(map(_reason, found, _look_alike(found, pair))))


def _reason(item: Explanation, alike: tuple[str, ...]) -> Reason:
    return Reason(
        parameters=(item.change.parameter,),
        values=(item.value,),
        u=(item.u,),
        prior=(item.change.prior,),
        evidence=item.evidence,
        indistinguishable_from=alike,
    )


# --- following the peak ---------------------------------------------------------------------------------------------


@dataclass(frozen=True, kw_only=True)
class _Follower:
    """Reads one band: that of a known order, or else the one nearest to where it was a step ago."""

    through: bool
    order: int | None

    def peak(self, model: StackModel, near_nm: float) -> float | None:
        from layerscan.optics.peaks import find_peaks

        numbers = None if self.order is None else model.order_numbers()
        curve = model.curve(through=self.through)
        peaks = find_peaks(model.wavelength_nm, curve, order=numbers, relative_height=0.1, smooth=False)
        if numbers is not None:
            return next((peak.wavelength_nm for peak in peaks if peak.order == self.order), None)
        place = min((p.wavelength_nm for p in peaks), key=lambda value: abs(value - near_nm), default=None)
        return place if place is not None and abs(place - near_nm) < JUMP * near_nm else None


def _explain(
    change: Change, follow: _Follower, now: float, target: float, misfit: _Misfit, before: float | None
) -> Explanation | None:
    u = misfit.u_nm
    if change.limits is not None:
        solved = _solve(change, follow, now, target)
        if solved is None:
            return None
        value, slope = solved
        u_value = u / abs(slope) if u is not None and slope else None
        penalty = 0.0 if change.prior_sd is None else ((value - change.start) / change.prior_sd) ** 2
        curve = misfit.curve(change.apply(value), follow)
        after = misfit.of(curve, 0.0)
        evidence = None if before is None or after is None else before - after - penalty
        return Explanation(change=change, value=value, u=u_value, evidence=evidence, curve=curve)
    best: Explanation | None = None
    for choice in change.choices:
        other = _try_choice(change, choice, follow, target, misfit, before)
        if other is not None and (best is None or (other.evidence or 0.0) > (best.evidence or 0.0)):
            best = other
    return best


def _try_choice(
    change: Change, choice: float, follow: _Follower, target: float, misfit: _Misfit, before: float | None
) -> Explanation | None:
    """A change that cannot be partial, where it brings the peak within what would pass and fits better than now."""
    if abs(choice - change.start) < 1e-3:
        return None
    model = change.apply(choice)
    place = follow.peak(model, target)
    u = misfit.u_nm
    if place is None or abs(place - target) > (COVERAGE * u if u is not None else UNKNOWN_TOLERANCE_NM):
        return None
    curve = misfit.curve(model, follow)
    after = misfit.of(curve, place - target)
    evidence = None if before is None or after is None else before - after
    if evidence is not None and evidence <= 1e-6:
        return None
    return Explanation(change=change, value=choice, u=None, evidence=evidence, curve=curve)


@dataclass(frozen=True, kw_only=True, eq=False)
class _Misfit:
    """How badly a calculated spectrum fits the observed one."""

    pair: Pair
    u_nm: float | None
    width_nm: float

    def curve(self, model: StackModel, follow: _Follower) -> FloatArray:
        """The model's bands on the common wavelengths."""
        import numpy as np

        return np.interp(self.pair.wavelength_nm, model.wavelength_nm, model.curve(through=follow.through))

    def rms(self, curve: FloatArray) -> float:
        """RMS difference from the observed bands after a fit of one factor: spot and reference decide heights too."""
        import numpy as np

        seen = self.pair.bands(self.pair.observed)
        factor = float(curve @ seen) / max(float(seen @ seen), 1e-12)
        return float(np.sqrt(np.mean((curve - factor * seen) ** 2)))

    def of(self, curve: FloatArray, difference_nm: float) -> float | None:
        """The misfit of a curve whose peak is off by ``difference_nm``; None without an uncertainty."""
        if self.u_nm is None:
            return None
        wavelength = self.pair.wavelength_nm
        stretches = max(2 * float(wavelength[-1] - wavelength[0]) / self.width_nm, 1.0)
        shape = self.rms(curve) / max(ALIKE_RMS, self.pair.noise)
        return (difference_nm / self.u_nm) ** 2 + stretches * shape**2


def _solve(change: Change, follow: _Follower, now: float, target: float) -> tuple[float, float] | None:
    """Value at which the peak reaches the target, and the slope there; None where it does not within the limits."""
    assert change.limits is not None
    for end in sorted(change.limits, key=lambda value: abs(value - change.start)):
        step = (end - change.start) / GRID_POINTS
        if abs(step) < 1e-9:
            continue
        value, place = change.start, now
        for number in range(1, GRID_POINTS + 1):
            further = change.start + number * step
            there = follow.peak(change.apply(further), place)
            if there is None:
                break
            if (place - target) * (there - target) <= 0 and place != there:
                return _refine(change, follow, (value, place), (further, there), target)
            value, place = further, there
    return None


def _refine(
    change: Change, follow: _Follower, low: tuple[float, float], high: tuple[float, float], target: float
) -> tuple[float, float] | None:
    """Regula falsi with halving between values whose peaks enclose the target; None where the peak jumps over it."""
    (a, peak_a), (b, peak_b) = low, high
    slope = (peak_b - peak_a) / (b - a)
    for turn in range(14):
        value = a + (target - peak_a) / (peak_b - peak_a) * (b - a) if turn % 3 != 2 else 0.5 * (a + b)
        place = follow.peak(change.apply(value), target)
        if place is None:
            return None
        if abs(place - target) < 0.02:
            return value, slope
        if (peak_a - target) * (place - target) <= 0:
            b, peak_b = value, place
        else:
            a, peak_a = value, place
    return (value, slope) if place is not None and abs(place - target) < REACHED_NM else None


def _look_alike(found: Sequence[Explanation], pair: Pair) -> list[tuple[str, ...]]:
    """For each explanation the names of the others whose spectra the data could not tell from its own."""
    import numpy as np

    limit = max(ALIKE_RMS, pair.noise)
    curves = [item.curve for item in found]
    if pair.scale is not None:
        seen = pair.bands(pair.observed)
        curves = [curve * float(seen @ curve) / max(float(curve @ curve), 1e-12) for curve in curves]
    names = []
    for i, one in enumerate(curves):
        close = [math.sqrt(float(np.mean((one - other) ** 2))) <= limit for other in curves]
        names.append(tuple(found[j].change.parameter for j, near in enumerate(close) if near and j != i))
    return names
