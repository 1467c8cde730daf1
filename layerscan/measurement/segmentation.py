"""Segmentation of a mean profile into dark and bright layers by a hidden semi-Markov model.

Durations are lognormal with a small uniform tail; levels follow slow shading; what lies before the first and behind the
last layer (resin, substrate) may have a level of its own. Levels, noise and durations are re-estimated from the best
sequence (Viterbi training).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numba import njit

if TYPE_CHECKING:
    from layerscan.records import FloatArray, IntArray

DARK, BRIGHT, OTHER = 0, 1, 2


@dataclass(frozen=True, kw_only=True, eq=False)
class Segments:
    """Segments of a profile in order: ``edge`` (n + 1,) sample positions, ``phase`` (n,) DARK, BRIGHT or OTHER.

    ``level`` (2, samples) are the phases' levels along the profile; ``noise`` the standard deviation about them.
    """

    edge: FloatArray
    phase: IntArray
    level: FloatArray
    noise: float


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def _duration_tables(log_mean, log_sd, longest, tail):  # type: ignore[no-untyped-def]
    """Log probability of each duration, and log survival of a duration cut off by the frame: both (2, longest + 1)."""
    density = np.full((2, longest + 1), -1e9)
    survival = np.full((2, longest + 1), -1e9)
    for k in range(2):
        weight = np.zeros(longest + 1)
        total = 0.0
        for d in range(1, longest + 1):
            z = (math.log(d) - log_mean[k]) / log_sd[k]
            weight[d] = math.exp(-0.5 * z * z) / d
            total += weight[d]
        beyond = 1.0
        for d in range(1, longest + 1):
            p = (1 - tail) * weight[d] / total + tail / longest
            survival[k, d] = math.log(max(beyond, 1e-12))
            density[k, d] = math.log(p)
            beyond -= p
    return density, survival


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def _viterbi(profile, level, noise, scatter, density, survival, start_level, end_level, end_cost):  # type: ignore[no-untyped-def]
    """Best sequence: returns (edges, phases). Start and end level NaN: the stack reaches that end of the profile."""
    count = profile.size
    longest = density.shape[1] - 1
    sum1 = np.zeros((2, count + 1))
    sum2 = np.zeros((2, count + 1))
    before = np.zeros(count + 1)
    behind = np.zeros(count + 1)
    for j in range(count):
        for k in range(2):
            e = (profile[j] - level[k, j]) / noise[j]
            sum1[k, j + 1] = sum1[k, j] + e
            sum2[k, j + 1] = sum2[k, j] + e * e
        e = (profile[j] - start_level) / noise[j]
        before[j + 1] = before[j] - 0.5 * min(e * e, 16.0)
        e = (profile[j] - end_level) / noise[j]
        behind[j + 1] = behind[j] - 0.5 * min(e * e, 16.0)
    occam = np.zeros(longest + 1)
    shrink = np.zeros(longest + 1)
    for d in range(1, longest + 1):
        occam[d] = -0.5 * math.log(1 + d * scatter * scatter)
        shrink[d] = 1.0 / (scatter * scatter + 1.0 / d)
    best = np.full((2, count + 1), -1e18)
    back = np.zeros((2, count + 1), np.int64)  # start of the segment; negative: the first one
    has_start, has_end = start_level == start_level, end_level == end_level
    for j in range(1, count + 1):
        for k in range(2):
            top, where = -1e18, 0
            for d in range(1, min(longest, j) + 1):
                i = j - d
                s1 = sum1[k, j] - sum1[k, i]
                mean = s1 / d
                within = sum2[k, j] - sum2[k, i] - s1 * mean
                fit = -0.5 * (within + min(mean * mean * shrink[d], 20.0)) + occam[d]
                if i > 0:
                    value = best[1 - k, i] + fit + density[k, d]
                    if value > top:
                        top, where = value, i
                    if has_start:
                        value = before[i] - end_cost + fit + density[k, d]
                        if value > top:
                            top, where = value, -i
                else:
                    value = fit + survival[k, d]
                    if value > top:
                        top, where = value, 0
            best[k, j] = top
            back[k, j] = where
    # the last segment: cut off by the frame, or the substrate
    top, last, last_phase, tail_start = -1e18, count, 0, count
    for k in range(2):
        for d in range(1, min(longest, count) + 1):
            i = count - d
            if i == 0:
                continue
            s1 = sum1[k, count] - sum1[k, i]
            s2 = sum2[k, count] - sum2[k, i]
            mean = s1 / d
            fit = -0.5 * (s2 - s1 * mean + min(mean * mean * shrink[d], 20.0)) + occam[d]
            value = best[1 - k, i] + fit + survival[k, d]
            if value > top:
                top, last, last_phase, tail_start = value, i, k, count
        if has_end:
            for i in range(1, count):
                value = best[k, i] + behind[count] - behind[i] - end_cost
                if value > top:
                    top, last, last_phase, tail_start = value, i, k, i
    edges = np.empty(count + 2, np.int64)
    phases = np.empty(count + 2, np.int64)
    n = 0
    edges[0] = count
    if tail_start < count:  # the substrate
        phases[0] = 2
        n = 1
        edges[1] = tail_start
        j, k = tail_start, last_phase
    else:
        phases[0] = last_phase
        n = 1
        edges[1] = last
        j, k = last, 1 - last_phase
    while j > 0:
        i = back[k, j]
        phases[n] = k
        n += 1
        if i < 0:
            edges[n] = -i
            phases[n] = 2
            n += 1
            edges[n] = 0
            break
        edges[n] = i
        j, k = i, 1 - k
    return edges[: n + 1][::-1].copy(), phases[:n][::-1].copy()


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def _smooth_levels(profile, edge, phase, length, low, high, level):  # type: ignore[no-untyped-def]
    """Levels of both phases along the profile: kernel mean over segment means, the contrast kept in bounds."""
    n = phase.size
    mean = np.empty(n)
    centre = np.empty(n)
    for i in range(n):
        width = edge[i + 1] - edge[i]
        cut = width // 4
        total, number = 0.0, 0
        for j in range(edge[i] + cut, max(edge[i + 1] - cut, edge[i] + cut + 1)):
            total += profile[j]
            number += 1
        mean[i] = total / number
        centre[i] = 0.5 * (edge[i] + edge[i + 1])
    for k in range(2):
        base, weight0 = 0.0, 0.0
        for i in range(n):
            if phase[i] == k:
                base += mean[i]
                weight0 += 1
        if weight0 == 0:
            continue
        base /= weight0
        count = level.shape[1]
        step = max(int(length / 5), 1)  # worked out at nodes, linear in between
        previous, at = 0.0, 0
        begin = 0
        while True:
            while begin < n and centre[begin] < at - 3 * length:
                begin += 1
            total, norm = 0.3 * base, 0.3
            for i in range(begin, n):
                if centre[i] > at + 3 * length:
                    break
                if phase[i] == k:
                    z = (at - centre[i]) / length
                    part = math.exp(-0.5 * z * z)
                    total += part * mean[i]
                    norm += part
            value = total / norm
            if at == 0:
                level[k, 0] = value
            else:
                for j in range(at - step + 1, min(at + 1, count)):
                    level[k, j] = previous + (value - previous) * (j - at + step) / step
            if at >= count - 1:
                break
            previous = value
            at += step
    for j in range(level.shape[1]):
        gap = level[1, j] - level[0, j]
        if gap < low:
            middle = 0.5 * (level[0, j] + level[1, j])
            level[0, j] = middle - 0.5 * low
            level[1, j] = middle + 0.5 * low


@dataclass(frozen=True, kw_only=True)
class _Start:
    """Where training starts: quantiles that stand for the levels, and the dark layers' part of the period."""

    low: float
    high: float
    dark: float


_STARTS = (
    _Start(low=0.15, high=0.85, dark=0.5),
    _Start(low=0.02, high=0.6, dark=0.12),  # thin dark layers between thick bright ones
    _Start(low=0.4, high=0.98, dark=0.88),
)
_FAIR_RESIDUAL = 0.25  # the same where both phases are of similar thickness
_GOOD_RESIDUAL = 0.12  # residual over contrast below which the first start needs no rival


def _first_levels(profile: FloatArray, period: float, start: _Start) -> FloatArray:
    """Levels to start from: low and high quantiles in a sliding window of four periods."""
    count = len(profile)
    width = int(min(max(4 * period, 8), count))
    step = max(int(period), 1)
    begins = np.arange(0, max(count - width, 0) + 1, step)
    centres = begins + 0.5 * width
    windows = np.stack([profile[s : s + width] for s in begins])
    low, high = np.quantile(windows, (start.low, start.high), axis=1)
    at = np.arange(count)
    return np.stack([np.interp(at, centres, low), np.interp(at, centres, high)])


def segment_profile(
    profile: FloatArray,
    *,
    period: float,
    layered: tuple[int, int],
    noise: float = 0.0,
    rounds: int = 4,
) -> Segments:
    """Segment a profile without gaps into dark and bright layers, with another material at either end if there is one.

    Parameters
    ----------
    profile : (N,) float array
        Mean intensity against depth, finite everywhere.
    period : float
        Dominant spacing in samples.
    layered : (int, int)
        Samples between which layers were detected; what lies beyond may be resin or substrate.
    noise : float
        Standard deviation of the noise of the profile, a lower bound of the model's.
    rounds : int
        Rounds of re-estimation.

    Returns
    -------
    Segments

    References
    ----------
    S.-Z. Yu, Hidden semi-Markov models, Artificial Intelligence 174 (2010) 215, doi 10.1016/j.artint.2009.11.011.
    """
    best: tuple[float, Segments] | None = None
    for start in _STARTS:
        cost, residual, found = _train(profile, period, layered, noise, rounds, start)
        if best is None or cost < best[0]:
            best = cost, found
        if start is _STARTS[0] and (residual < _GOOD_RESIDUAL or (residual < _FAIR_RESIDUAL and _is_even(found))):
            break
    assert best is not None
    return best[1]


def _is_even(found: Segments) -> bool:
    """Whether both phases are of similar thickness, so that a start from the middle cannot have missed one."""
    width = np.diff(found.edge)
    medians = [float(np.median(width[found.phase == k])) for k in (DARK, BRIGHT) if (found.phase == k).any()]
    return len(medians) == 2 and max(medians) < 2.2 * min(medians)


def _train(
    profile: FloatArray, period: float, layered: tuple[int, int], noise: float, rounds: int, start: _Start
) -> tuple[float, float, Segments]:
    """Viterbi training from one start: (description length, residual over contrast, segments)."""
    count = len(profile)
    inner = slice(*layered)
    level = np.empty((2, count))
    level[:, inner] = _first_levels(profile[inner], period, start)
    level[:, : layered[0]] = level[:, layered[0] : layered[0] + 1]
    level[:, layered[1] :] = level[:, layered[1] - 1 : layered[1]]
    contrast = float(np.median(level[1] - level[0]))
    spread = np.full(count, max(0.2 * contrast, noise, 1e-12))
    log_mean = np.log(np.maximum([start.dark * period, (1 - start.dark) * period], 1.0))
    log_sd = np.full(2, 0.5)
    longest = int(min(max(3.0 * period, 6), count))
    ends = [_end_level(profile[: layered[0]], period), _end_level(profile[layered[1] :][::-1], period)]
    edge, phase = np.array([0, count]), np.array([OTHER])
    residual = np.zeros(0)
    outside = np.zeros(0)
    previous: FloatArray | None = None
    for _ in range(rounds):
        density, survival = _duration_tables(log_mean, log_sd, longest, 0.02)
        edge, phase = _viterbi(profile, level, spread, 1.0, density, survival, ends[0], ends[1], 6.0)
        if previous is not None and len(previous) == len(edge) and np.array_equal(previous, edge):
            break
        previous = edge
        inside = phase != OTHER
        if inside.sum() < 2:
            break
        _smooth_levels(profile, edge, phase, 3.0 * period, 0.25 * contrast, 4.0 * contrast, level)
        for k in range(2):
            widths = np.diff(edge)[1:-1][phase[1:-1] == k]
            if len(widths) >= 3:
                logs = np.log(widths)
                log_mean[k] = (logs.sum() + log_mean[k]) / (len(logs) + 1)
                log_sd[k] = min(max(math.sqrt((logs.var() * len(logs) + 0.09) / (len(logs) + 1)), 0.15), 0.7)
        for side, which in ((0, 0), (-1, 1)):
            if phase[side] == OTHER:
                part = profile[edge[0] : edge[1]] if side == 0 else profile[edge[-2] : edge[-1]]
                ends[which] = float(np.median(part))
        labels = np.repeat(phase, np.diff(edge))
        fitted = np.where(labels == DARK, level[0], level[1])
        residual = (profile - fitted)[labels != OTHER]
        outside = _outside_residual(profile, edge, phase)
        rms = 1.4826 * float(np.median(np.abs(residual)))
        spread[:] = max(min(max(rms, 0.1 * contrast), 0.5 * contrast), noise)
    found = Segments(edge=edge.astype(np.float64), phase=phase, level=level, noise=float(spread[0]))
    if len(residual) < 2:
        return math.inf, math.inf, found
    variance = float(np.mean(residual**2)) + noise**2 + 1e-30
    # all samples count, those of other materials too: else layers would be given away to them
    every = (float((residual**2).sum()) + float((outside**2).sum())) / count + noise**2 + 1e-30
    length = 0.5 * count * math.log(every) + 1.0 * len(phase) * math.log(count)
    return length, math.sqrt(variance) / max(float(np.median(level[1] - level[0])), 1e-12), found


def _outside_residual(profile: FloatArray, edge: IntArray, phase: IntArray) -> FloatArray:
    """Residual of the other materials at both ends about a line through each."""
    parts = []
    for side in (0, -1):
        if phase[side] != OTHER or (side == -1 and len(phase) == 1):
            continue
        part = profile[edge[0] : edge[1]] if side == 0 else profile[edge[-2] : edge[-1]]
        if len(part) > 2:
            x = np.arange(len(part)) - 0.5 * (len(part) - 1)
            part = part - part.mean() - x * float((x * part).sum() / (x * x).sum())
            parts.append(part)
    return np.concatenate(parts) if parts else np.zeros(0)


def _end_level(part: FloatArray, period: float) -> float:
    """Level of the material beyond the layers; NaN where too little of it is in the picture."""
    return float(np.median(part)) if len(part) >= max(0.25 * period, 2) else math.nan
