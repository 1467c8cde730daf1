"""From one mean profile to its layers: segmentation, then the joint fit, then tests of layers missed or invented."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from layerscan.measurement.boundaries import EdgeFit, Hints, fit_boundaries, plain_model, read_hints
from layerscan.measurement.edges import RIM_DECAY, SHARED, model_profile
from layerscan.measurement.segmentation import BRIGHT, DARK, OTHER, segment_profile

if TYPE_CHECKING:
    from layerscan.records import FloatArray, IntArray


@dataclass(frozen=True, kw_only=True, eq=False)
class Stack:
    """Boundaries of a profile [samples] and what lies between them.

    ``phase`` (boundaries + 1,) is DARK, BRIGHT or OTHER for each segment, the ones before the first and behind the last
    boundary included; ``dark`` and ``bright`` (N,) are the phases' slowly varying levels; ``beyond`` is where the next
    boundary before the first and behind the last was supposed, outside the profile, where the frame cuts the stack.
    """

    fit: EdgeFit
    phase: IntArray
    dark: FloatArray
    bright: FloatArray
    weight: FloatArray
    beyond: tuple[float | None, float | None] = (None, None)

    @property
    def position(self) -> FloatArray:
        """Boundary positions [samples]."""
        return self.fit.position

    @property
    def contrast(self) -> float:
        """Median difference of the phases' levels."""
        return float(np.median(self.bright - self.dark))


def edge_flags(stack: Stack) -> tuple[str, ...]:
    """What the chosen edge model says to the user."""
    return ("edge_shape_doubtful",) if bool(stack.fit.active[RIM_DECAY]) else ()


def fill_gaps(profile: FloatArray) -> FloatArray:
    """Linear interpolation over samples that are not finite."""
    seen = np.isfinite(profile)
    if seen.all():
        return profile.astype(np.float64)
    at = np.arange(len(profile))
    return np.interp(at, at[seen], profile[seen])


def find_stack(
    profile: FloatArray,
    *,
    variance: FloatArray,
    period: float,
    layered: tuple[int, int] | None = None,
    nuisance: bool = True,
    blur: float | None = None,
    noise: FloatArray | None = None,
    full_scale: float | None = None,
) -> Stack | None:
    """Find the layers of a mean profile.

    Parameters
    ----------
    profile : (N,) float array
        Mean intensity against depth in samples; NaN where nothing was recorded.
    variance : (N,) float array
        Variance of each sample's mean; its scale is checked against the residuals.
    period : float
        Dominant spacing [samples].
    layered : (int, int), optional
        Samples between which layers were detected.
    nuisance : bool
        Try the nuisance models.
    blur : float, optional
        Edge blur to start from [samples].
    noise : (N,) float array, optional
        Variance of the noise of single columns at each depth: where it differs between the phases it tells of gamma or
        of counted electrons.
    full_scale : float, optional
        Largest intensity that the file can hold; negative where the picture is clipped, so that noise says nothing.

    Returns
    -------
    Stack or None
        None where no two boundaries were found.
    """
    count = len(profile)
    filled = fill_gaps(profile)
    if layered is None:
        layered = (0, count)
    factor = max(1, int(period // 24))
    edges, phase, dark, bright = _segment(filled, period, layered, factor, variance)
    edges, phase = _drop_transitions(filled, edges, phase)
    if len(edges) < 4:
        return None
    contrast = bright - dark
    value = (filled - dark) / contrast
    weight = np.where(np.isfinite(profile) & (variance > 0), contrast**2 / np.maximum(variance, 1e-30), 0.0)
    position = edges[1:-1]
    at = np.arange(count)
    other = (bool(phase[0] == OTHER), bool(phase[-1] == OTHER))
    first_bright = bool((phase[1] == DARK) if other[0] else (phase[0] == BRIGHT))
    margin = 0.6 * period
    weight[(at < position[0] - margin) | (at > position[-1] + margin)] = 0.0
    start_blur = _start_blur(value, weight, position, first_bright, period) if blur is None else blur
    fit = fit_boundaries(
        value, weight=weight, position=position, bright_first=first_bright, other=other, blur=start_blur,
        nuisance=False, full=False,
    )  # fmt: skip
    for _ in range(6):
        changed = _revise(value, weight, fit, first_bright, other)
        if changed is None:
            break
        fit = fit_boundaries(
            value, weight=weight, position=changed, bright_first=first_bright, other=other,
            blur=float(fit.shared[0]), nuisance=False, full=False,
        )  # fmt: skip
    if len(fit.position) < 2:
        return None
    weight = _trusted(value, weight, fit, other)
    low, high = _fitted_levels(fit, first_bright, other, period, count)
    rise = high - low
    value, weight = (value - low) / rise, weight * rise**2
    dark, bright = dark + contrast * low, dark + contrast * high
    centre = np.clip(np.rint(_centres(fit.position, count)).astype(int), 0, count - 1)
    level = (fit.level - low[centre]) / rise[centre]
    hints = None if noise is None else _noise_hints(noise, fit.position, first_bright, dark, bright, full_scale)
    beyond = _beyond(fit, other, count)
    position, level, place, keep = _with_beyond(fit, level, beyond, period)
    fit = fit_boundaries(
        value, weight=weight, position=position, bright_first=first_bright ^ (beyond[0] is not None), other=other,
        blur=float(fit.shared[0]), level=level, scatter=fit.scatter, nuisance=nuisance, hints=hints, place=place,
    )  # fmt: skip
    fit = replace(
        fit, position=fit.position[keep], best_position=fit.best_position[keep],
        covariance=fit.covariance[keep, keep], level=fit.level[keep.start : keep.stop + 1],
    )  # fmt: skip
    segments = len(fit.position) + 1
    alternating = np.where(np.arange(segments) % 2 == 0, int(first_bright), int(not first_bright))
    if other[0]:
        alternating[0] = OTHER
    if other[1]:
        alternating[-1] = OTHER
    _name_long_ends(alternating, fit.position, count)
    return Stack(fit=fit, phase=alternating, dark=dark, bright=bright, weight=weight, beyond=beyond)


def _name_long_ends(phase: IntArray, position: FloatArray, count: int) -> None:
    """Name an end OTHER, in place, where it is far longer than every layer of its phase: resin of the same grey."""
    width = np.diff(position)
    for side, shown in ((0, position[0] + 0.5), (-1, count - 0.5 - position[-1])):
        own = width[phase[1:-1] == phase[side]]
        if phase[side] != OTHER and len(own) >= 3 and shown > 1.6 * own.max() and shown > 1.8 * np.median(own):
            phase[side] = OTHER


def _segment(
    filled: FloatArray, period: float, layered: tuple[int, int], factor: int, variance: FloatArray
) -> tuple[FloatArray, IntArray, FloatArray, FloatArray]:
    count = len(filled)
    if factor > 1:
        blocks = count // factor
        coarse = filled[: blocks * factor].reshape(blocks, factor).mean(axis=1)
    else:
        blocks, coarse = count, filled
    low = min(max(layered[0] // factor, 0), max(blocks - 4, 0))
    high = max(min(-(-layered[1] // factor), blocks), low + 4)
    noise = math.sqrt(float(np.median(variance[variance > 0])) / factor) if (variance > 0).any() else 0.0
    found = segment_profile(coarse, period=period / factor, layered=(low, min(high, blocks)), noise=noise)
    edges = found.edge * factor - 0.5
    edges[0], edges[-1] = -0.5, count - 0.5
    if factor == 1:
        return edges, found.phase, found.level[0], found.level[1]
    centres = (np.arange(blocks) + 0.5) * factor - 0.5
    at = np.arange(count)
    return edges, found.phase, np.interp(at, centres, found.level[0]), np.interp(at, centres, found.level[1])


def _drop_transitions(filled: FloatArray, edges: FloatArray, phase: IntArray) -> tuple[FloatArray, IntArray]:
    """Take out an end layer that is but the blurred step between its neighbour and another material beyond."""
    for last in (False, True):
        if len(phase) < 6 or phase[-1 if last else 0] != OTHER:
            continue
        i = len(phase) - 2 if last else 1  # the end layer; its neighbour inside, the other material outside
        inside, outside = (i - 1, i + 1) if last else (i + 1, i - 1)
        width = np.diff(edges)
        typical = float(np.median(width[phase == phase[i]]))
        if width[i] >= 0.4 * typical:
            continue
        level = [
            float(np.median(filled[max(math.ceil(edges[k]), 0) : int(edges[k + 1]) + 1])) for k in (inside, i, outside)
        ]
        if min(level[0], level[2]) < level[1] < max(level[0], level[2]):
            middle = 0.5 * (edges[i] + edges[i + 1])
            edges = np.delete(edges, i if last else i + 1)
            edges[i if last else 1] = middle
            phase = np.delete(phase, i)
    return edges, phase


def _start_blur(
    value: FloatArray, weight: FloatArray, position: FloatArray, bright_first: bool, period: float
) -> float:
    """Blur, from a geometric grid, whose plain model lies nearest the profile."""
    segments = len(position) + 1
    level = np.where(np.arange(segments) % 2 == 0, float(bright_first), float(not bright_first))
    depth = np.arange(len(value), dtype=np.float64)
    active = plain_model()
    inside = (depth > position[0]) & (depth < position[-1]) & (weight > 0)
    best = (math.inf, 1.0)
    for blur in np.geomspace(0.6, max(0.2 * period, 1.0), 6):
        shared = np.zeros(SHARED)
        shared[0] = blur
        off = (value - model_profile(depth, position, level, shared, active))[inside]
        cost = float(np.mean(np.minimum(off**2, 0.25))) if len(off) else 0.0
        best = min(best, (cost, float(blur)))
    return best[1]


def _noise_hints(
    noise: FloatArray,
    position: FloatArray,
    bright_first: bool,
    dark: FloatArray,
    bright: FloatArray,
    full_scale: float | None,
) -> Hints:
    """Compare the noise inside the layers of both phases, away from their edges; a clipped phase says nothing."""
    if full_scale is not None and full_scale < 0:
        return Hints()
    at = np.arange(len(noise))
    index = np.searchsorted(position, at)
    gap = np.minimum(
        np.abs(at - position[np.clip(index, 0, len(position) - 1)]), np.abs(at - position[np.clip(index - 1, 0, None)])
    )
    inside = (index > 0) & (index < len(position)) & np.isfinite(noise)
    medians = []
    for is_bright in (False, True):
        own = inside & ((index % 2 == 0) == (bright_first == is_bright))
        if own.sum() < 8:
            return Hints()
        deep = own & (gap >= np.quantile(gap[own], 0.6))
        medians.append(float(np.median(noise[deep])))
    if not min(medians) > 0:
        return Hints()
    return read_hints(
        math.log(medians[1] / medians[0]), dark=float(np.median(dark)), bright=float(np.median(bright)),
        full_scale=full_scale,
    )  # fmt: skip


def _beyond(fit: EdgeFit, other: tuple[bool, bool], count: int) -> tuple[float | None, float | None]:
    """Where the next boundary outside the profile is expected at an end that the frame cuts; None at other ends."""
    position = fit.position
    width = np.diff(position)
    out: list[float | None] = [None, None]
    if len(width) < 4:
        return None, None
    if not other[0]:
        out[0] = min(float(position[0] - np.median(width[1::2])), -0.5)
    if not other[1]:
        out[1] = max(float(position[-1] + np.median(width[-2::-2])), count - 0.5)
    return out[0], out[1]


def _with_beyond(
    fit: EdgeFit, level: FloatArray, beyond: tuple[float | None, float | None], period: float
) -> tuple[FloatArray, FloatArray, FloatArray, slice]:
    """Positions and levels with the supposed boundaries put in, what is known of them, the slice of the real ones."""
    position = fit.position
    place = np.zeros((2, len(position)))
    first = 0
    for side, where in enumerate(beyond):
        if where is None:
            continue
        known = np.array([[where], [1 / (0.15 * period) ** 2]])
        if side == 0:
            position, place = np.concatenate([[where], position]), np.hstack([known, place])
            level = np.concatenate([[1 - round(level[0])], level])
            first = 1
        else:
            position, place = np.concatenate([position, [where]]), np.hstack([place, known])
            level = np.concatenate([level, [1 - round(level[-1])]])
    return position, level, place, slice(first, first + len(fit.position))


def _centres(position: FloatArray, count: int) -> FloatArray:
    """Middle of every segment of the profile."""
    limits = np.concatenate([[0.0], position, [count - 1.0]])
    out: FloatArray = 0.5 * (limits[1:] + limits[:-1])
    return out


def _fitted_levels(
    fit: EdgeFit, bright_first: bool, other: tuple[bool, bool], period: float, count: int
) -> tuple[FloatArray, FloatArray]:
    """Levels of both phases along the profile from the fitted layers: a local line over 2.5 periods."""
    segments = len(fit.position) + 1
    nominal = np.where(np.arange(segments) % 2 == 0, bright_first, not bright_first)
    centre = _centres(fit.position, count)
    usable = np.ones(segments, bool)
    usable[0], usable[-1] = not other[0], not other[1]
    at = np.arange(0, count + period, max(period, 1.0))
    out = []
    for bright in (False, True):
        own = usable & (nominal == bright)
        if not own.any():
            out.append(np.full(count, float(bright)))
            continue
        level = fit.level[own]
        level = np.clip(level, *(np.median(level) + np.array([-0.3, 0.3])))
        x = (centre[own][None, :] - at[:, None]) / (2.5 * period)
        kernel = np.exp(-0.5 * x**2)
        base = float(np.median(level))
        n, s1, s2 = kernel.sum(axis=1) + 0.05, (kernel * x).sum(axis=1), (kernel * x**2).sum(axis=1)
        s2 = s2 + 0.1 * n
        v0, v1 = kernel @ level + 0.05 * base, (kernel * x) @ level
        out.append(np.interp(np.arange(count), at, (s2 * v0 - s1 * v1) / (n * s2 - s1**2)))
    return out[0], np.maximum(out[1], out[0] + 0.2)


def _trusted(value: FloatArray, weight: FloatArray, fit: EdgeFit, other: tuple[bool, bool]) -> FloatArray:
    """Weights with samples far off the model lowered, and another material's left out beyond the reach of its edge."""
    at = np.arange(len(value))
    reach = 5.0 * float(fit.shared[0]) + 2.0
    weight = weight.copy()
    if other[0]:
        weight[at < fit.position[0] - reach] = 0.0
    if other[1]:
        weight[at > fit.position[-1] + reach] = 0.0
    used = weight > 0
    off = np.abs(value - model_profile(at.astype(np.float64), fit.position, fit.level, fit.shared, fit.active))
    typical = 1.4826 * float(np.median(off[used])) if used.any() else 0.0
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(used & (off > 4 * typical), weight * (4 * typical / off), weight)


def _revise(
    value: FloatArray, weight: FloatArray, fit: EdgeFit, bright_first: bool, other: tuple[bool, bool]
) -> FloatArray | None:
    """Positions with a pair of boundaries taken out or put in, or None where the layers stand."""
    position, blur = fit.position, float(fit.shared[0])
    segments = len(position) + 1
    nominal = np.where(np.arange(segments) % 2 == 0, float(bright_first), float(not bright_first))
    depth = np.arange(len(value), dtype=np.float64)
    off = np.where(weight > 0, value - model_profile(depth, position, fit.level, fit.shared, fit.active), 0.0)
    half = max(round(blur), 1)
    inside = (weight > 0) & (depth > position[0]) & (depth < position[-1])
    noise = 1.4826 * float(np.median(np.abs(off[inside]))) if inside.any() else 0.0
    if segments > 4:
        width = np.diff(position)
        level = fit.level
        own = np.minimum(
            np.abs(level[1:-1] - level[:-2]), np.abs(level[1:-1] - level[2:])
        )  # smaller step of each layer
        filled = _fill(width / blur)
        doubt = own * filled < np.maximum(0.12, 3.5 * noise / np.sqrt(np.maximum(width, 1.0)))
        if doubt.any():
            worst = int(np.argmin(np.where(doubt, own * filled, np.inf)))
            return np.delete(position, [worst, worst + 1])
    smooth = np.convolve(off, np.full(2 * half + 1, 1 / (2 * half + 1)), mode="same")
    index = np.searchsorted(position, depth)
    sign = np.where(nominal[index] > 0.5, -1.0, 1.0)
    gap = np.minimum(
        np.abs(depth - position[np.clip(index, 0, len(position) - 1)]),
        np.abs(depth - position[np.clip(index - 1, 0, None)]),
    )
    allowed = (weight > 0) & (gap > 1.2 * blur) & (index > 0) & (index < len(position))
    score = np.where(allowed, smooth * sign, 0.0)
    at = int(np.argmax(score))
    if score[at] > max(0.2, 6 * noise / math.sqrt(2 * half + 1)):
        reach = max(1.0 * blur, 0.8)
        return np.sort(np.concatenate([position, [at - reach, at + reach]]))
    return None


def _fill(width: FloatArray) -> FloatArray:
    """How much of its contrast a layer of so many blurs shows at its middle: erf(width / (2 sqrt 2)), to 0.02."""
    x = 0.25 * width * math.sqrt(2.0)
    out: FloatArray = np.tanh(x * (1.1284 + 0.1009 * x * x))
    return out
