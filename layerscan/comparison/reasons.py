"""What would explain a difference: single changes, the value each needs, and which of them look alike."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING

from layerscan.comparison.agreement import COVERAGE
from layerscan.comparison.model import StackModel, rebuild_stack
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
WORK_LIMIT = 2e7  # layers x wavelengths x directions of one calculation; some two hundred are made
GRID_POINTS = 16
JUMP = 0.08  # a band that moves further than this (relative) from one step to the next has been lost
REACHED_NM = 0.5  # a solution whose peak is further than this from the target is none: the peak jumps there
LENGTH_SOURCES = (
    "shrinkage or swelling, compression by the knife (20-35 % with a 45 degree knife, nearly none with an oscillating "
    "one: Studer and Gnaegi, J. Microsc. 197 (2000) 94), an oblique cut, a wrong pixel size (better than 5 % when "
    "calibrated: ASTM E766); 10 % taken as usual"
)


@dataclass(frozen=True, kw_only=True, eq=False)
class Change:
    """One thing that could be otherwise.

    ``apply(value)`` gives the changed stack; ``start`` is the value now, ``limits`` how far it may go. ``prior_sd`` is
    how far it usually is off (None: no preference). A change that cannot be partial has ``choices`` instead of limits.
    """

    name: str
    unit: str
    apply: Callable[[float], StackModel]
    start: float
    limits: tuple[float, float] | None = None
    choices: tuple[float, ...] = ()
    prior_sd: float | None = None
    prior: str = ""

    @property
    def parameter(self) -> str:
        """Name with unit, as documents and tables show it."""
        return f"{self.name} ({self.unit})" if self.unit else self.name


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
    flags: tuple[str, ...] = ()
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
    alike = _look_alike(found, pair)
    reasons = tuple(
        Reason(
            parameters=(item.change.parameter,),
            values=(item.value,),
            u=(item.u,),
            prior=(item.change.prior,),
            evidence=item.evidence,
            indistinguishable_from=names,
        )
        for item, names in zip(found, alike, strict=True)
    )
    return Found(reasons=reasons)


def possible_changes(
    model: StackModel, at_nm: float, *, u_index: Mapping[str, float | None] | None = None
) -> tuple[Change, ...]:
    """The changes that are tried, each with how far it usually is off and the source of that.

    ``u_index`` holds the standard uncertainty that the source of a material states.
    """
    changes = [
        Change(
            name="scale of all thicknesses",
            unit="",
            apply=model.scaled,
            start=1.0,
            limits=(0.6, 1.6),
            prior_sd=0.10,
            prior=LENGTH_SOURCES,
        )
    ]
    main = model.main_materials()
    for row in main:
        changes.append(_index_change(model, row, at_nm, (u_index or {}).get(model.names[row])))
    if all(model.index_at(row, at_nm) > 1.1 for row in main):
        changes.append(
            Change(
                name="index of all layers",
                unit="",
                apply=model.with_index_factor,
                start=1.0,
                limits=(0.8, 1.25),
                prior_sd=0.015,
                prior="both off alike, such as by water taken up; 1.5 % taken as usual (common practice, no source)",
            )
        )
    if len(main) == 2:
        changes.append(
            Change(
                name=f"{model.names[main[0]]} and {model.names[main[1]]} swapped",
                unit="",
                apply=lambda _: model.swapped(main[0], main[1]),
                start=0.0,
                choices=(1.0,),
                prior="which material is dark was assumed; stain and detector decide it",
            )
        )
    changes += [
        Change(
            name="lit from the other end",
            unit="",
            apply=lambda _: model.turned(),
            start=0.0,
            choices=(1.0,),
            prior="matters where layers absorb or change with depth",
        ),
        Change(
            name="angle of incidence",
            unit="deg",
            apply=lambda value: _with(model, aoi_deg=value),
            start=model.aoi_deg,
            limits=(0.0, 75.0),
            prior_sd=10.0,
            prior="a tilted specimen or surface; 10 degrees taken as usual (common practice, no source)",
        ),
        _aperture_change(model),
        Change(
            name="layers in the specimen",
            unit="times those seen",
            apply=lambda value: model.repeated(round(value)),
            start=1.0,
            choices=(2.0, 4.0, 10.0) if len(model.thickness_nm) >= 2 and 10 * model.work <= WORK_LIMIT else (),
            prior="the frame shows a part of the stack",
        ),
        Change(
            name="index of the incident medium",
            unit=f"at {at_nm:.0f} nm",
            apply=lambda value: model.with_index(model.sequence[0], value, at_nm=at_nm),
            start=model.index_at(model.sequence[0], at_nm),
            choices=(1.0, 1.333, 1.515) if model.sequence[0] not in model.sequence[1:] else (),
            prior="air, water or immersion oil in front of the specimen",
        ),
    ]
    return tuple(changes)


def _index_change(model: StackModel, row: int, at_nm: float, stated: float | None) -> Change:
    name, n = model.names[row], model.index_at(row, at_nm)
    fills_gaps = n < 1.4
    prior = "0.02 taken as usual error of an index (common practice, no source)"
    if stated:
        prior = f"the source of the index states u = {stated:g}"
    elif fills_gaps:
        prior = "what fills the gaps was assumed: air 1.00, water 1.33, resin about 1.5"
    return Change(
        name=f"index in the gaps ({name} assumed)" if fills_gaps else f"index of {name}",
        unit=f"at {at_nm:.0f} nm",
        apply=lambda value: model.with_index(row, value, at_nm=at_nm),
        start=n,
        limits=(1.0, 1.65) if fills_gaps else (max(1.0, n - 0.35), n + 0.35),
        prior_sd=stated or (0.2 if fills_gaps else 0.02),
        prior=prior,
    )


def _aperture_change(model: StackModel) -> Change:
    incident = float(model.index[model.sequence[0]].real.min())
    return Change(
        name="aperture of the illumination",
        unit="NA",
        apply=lambda value: _with(model, aperture=value),
        start=model.aperture,
        limits=(0.0, 0.95 * incident),
        prior_sd=0.3,
        prior="the NA that the light fills is seldom the engraved one; 0.3 taken as usual (common practice, no source)",
    )


def _with(model: StackModel, **fields: float) -> StackModel:
    from dataclasses import replace

    return replace(model, **fields)  # type: ignore[arg-type]


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
