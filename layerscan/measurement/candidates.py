"""Candidates for a layered pattern: groups of tiles, straightened along their own layers and aligned."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from layerscan.measurement.orientation import OrientationMap, StreamGrid, Tiles, smooth_map, trace_grid
from layerscan.measurement.pyramid import Level

if TYPE_CHECKING:
    from layerscan.records import BoolArray, FloatArray


@dataclass(frozen=True, kw_only=True, eq=False)
class Candidate:
    """A group of adjacent tiles whose spectra hold one strong line of similar frequency."""

    level: Level
    tiles: Tiles
    member: BoolArray
    frequency: float
    area: float  # page pixels
    score: float


@dataclass(frozen=True, kw_only=True, eq=False)
class StraightCandidate:
    """A candidate straightened along its own layers and averaged over blocks of columns; arrays are (depth, blocks)."""

    grid: StreamGrid
    field_map: OrientationMap
    flat: FloatArray  # block means, high-passed along the depth; 0 where not good
    good: BoolArray  # the frame shows it
    member: BoolArray  # and it lies in the candidate's tiles
    shifts: FloatArray  # (blocks,) depth shift that aligns each block
    block: int  # level pixels
    period: float  # level pixels


def straighten_candidate(candidate: Candidate) -> StraightCandidate | None:
    """Sample the candidate's level along its layers, average blocks of columns, and align those."""
    from layerscan.measurement.orientation_kernels import block_means

    level, tiles, member = candidate.level, candidate.tiles, candidate.member
    weight = np.where(member, np.log(np.maximum(tiles.contrast, 1.0)), 0.0)
    field_map = smooth_map(tiles, weight)
    rows, columns = np.nonzero(member)
    middle = np.average(rows, weights=weight[member]), np.average(columns, weights=weight[member])
    nearest = int(np.argmin((rows - middle[0]) ** 2 + (columns - middle[1]) ** 2))
    seed = float(tiles.row[rows[nearest]]), float(tiles.column[columns[nearest]])
    period = 1 / candidate.frequency
    grid = trace_grid(field_map, level.intensity.shape, seed=seed)
    stations = (grid.row.shape[1] - 1) * grid.stride
    block = max(round(min(max(2 * period, 16), stations / 8) / grid.stride), 1) * grid.stride
    depth, count = grid.row.shape[0], stations // block
    if count < 3 or depth < 2.2 * period:
        return None
    mean, number = np.zeros((depth, count)), np.zeros((depth, count))
    usable = level.valid if level.valid is not None else level.intensity[:1, :1]
    block_means(
        level.intensity, usable, level.valid is not None, grid.row, grid.column, grid.stride, block, mean, number
    )
    good = number >= 0.5 * block
    at = (np.arange(count) * block + block // 2) // grid.stride  # the middle of each block
    inside = good & _member_area(candidate, grid.row[:, at], grid.column[:, at])
    inside &= inside.sum(axis=0) >= 2.2 * period
    if inside.any(axis=0).sum() < 3:
        return None
    flat = high_pass(mean, good, period)
    start = min(grid.origin[1] * grid.stride // block, count - 1)
    shifts = _track(flat, inside, period, start)
    return StraightCandidate(
        grid=grid, field_map=field_map, flat=flat, good=good, member=inside, shifts=shifts, block=block, period=period
    )


def _member_area(candidate: Candidate, row: FloatArray, column: FloatArray) -> BoolArray:
    """Where places (level pixels) lie nearest to a member tile."""
    tiles = candidate.tiles
    i = np.clip(np.rint((row - tiles.row[0]) / tiles.hop[0]).astype(int), 0, len(tiles.row) - 1)
    j = np.clip(np.rint((column - tiles.column[0]) / tiles.hop[1]).astype(int), 0, len(tiles.column) - 1)
    area: BoolArray = candidate.member[i, j]
    return area


def high_pass(mean: FloatArray, good: BoolArray, period: float) -> FloatArray:
    """Take away the running mean over 1.6 periods; 0 where nothing was seen."""
    from scipy.ndimage import uniform_filter1d

    width = max(round(1.6 * period), 3) | 1
    level = uniform_filter1d(np.where(good, mean, 0.0), width, axis=0, mode="constant")
    share = uniform_filter1d(good.astype(float), width, axis=0, mode="constant")
    return np.where(good, mean - level / np.maximum(share, 1e-6), 0.0)


def shifted(column: FloatArray, shift: float) -> FloatArray:
    """The column read at depths larger by ``shift``; 0 outside."""
    place = np.arange(len(column), dtype=float)
    return np.interp(place + shift, place, column, left=0.0, right=0.0)


def _track(flat: FloatArray, good: BoolArray, period: float, start: int) -> FloatArray:
    """Depth shift of each block against a running template, from the seed outwards both ways."""
    count = flat.shape[1]
    usable = np.flatnonzero(good.any(axis=0))
    start = int(usable[np.argmin(np.abs(usable - start))])
    shifts = np.zeros(count)
    trials = np.linspace(-0.25 * period, 0.25 * period, 9)
    seen = good.astype(float)
    for way in (1, -1):
        template, weight = flat[:, start] * seen[:, start], seen[:, start].copy()
        last = 0.0
        for b in range(start + way, count if way > 0 else -1, way):
            if not good[:, b].any():
                shifts[b] = last
                continue
            mean = template / np.maximum(weight, 1e-6)
            column = flat[:, b] * seen[:, b]
            score = np.array([shifted(column, last + trial) @ mean for trial in trials])
            best = int(np.argmax(score))
            last += float(trials[best])
            if 0 < best < len(trials) - 1:
                before, here, after = score[best - 1 : best + 2]
                bend = min(before - 2 * here + after, -1e-30)
                last += 0.5 * float((before - after) / bend) * float(trials[1] - trials[0])
            shifts[b] = last
            template = 0.85 * template + shifted(column, last)
            weight = 0.85 * weight + shifted(seen[:, b], last)
    return _realign(flat * seen, seen, shifts, 0.5 * trials)


def _realign(flat: FloatArray, seen: FloatArray, shifts: FloatArray, trials: FloatArray) -> FloatArray:
    """Shift each block once more against the mean of all others, so that errors do not add up along the layers."""
    used = np.flatnonzero(seen.any(axis=0))
    moved = np.column_stack([shifted(flat[:, b], shifts[b]) for b in used])
    weight = np.column_stack([shifted(seen[:, b], shifts[b]) for b in used])
    total, number = moved.sum(axis=1), weight.sum(axis=1)
    out = shifts.copy()
    for i, b in enumerate(used):
        mean = (total - moved[:, i]) / np.maximum(number - weight[:, i], 1.0)
        score = np.array([shifted(flat[:, b], shifts[b] + trial) @ mean for trial in trials])
        best = int(np.argmax(score))
        out[b] += float(trials[best])
        if 0 < best < len(trials) - 1:
            before, here, after = score[best - 1 : best + 2]
            bend = min(before - 2 * here + after, -1e-30)
            out[b] += 0.5 * float((before - after) / bend) * float(trials[1] - trials[0])
    return out


def aligned_profiles(straight: StraightCandidate) -> tuple[FloatArray, BoolArray]:
    """Member cells with the shifts taken out: (depth, blocks) and where they are known."""
    filled = np.zeros_like(straight.flat)
    seen = np.zeros(straight.flat.shape, dtype=bool)
    for b in np.flatnonzero(straight.member.any(axis=0)):
        known = shifted(straight.member[:, b].astype(float), straight.shifts[b]) > 0.99
        filled[known, b] = shifted(straight.flat[:, b] * straight.member[:, b], straight.shifts[b])[known]
        seen[:, b] = known
    return filled, seen


def fundamental_period(straight: StraightCandidate) -> float | None:
    """Longer period [level px] at which the mean profile repeats clearly better than at the candidate's, if any.

    Layers much thinner than the gaps between them have harmonics as strong as the fundamental.
    """
    filled, seen = aligned_profiles(straight)
    number = seen.sum(axis=1)
    rows = np.flatnonzero(number >= max(2, 0.3 * number.max()))
    if len(rows) < 4 * straight.period:
        return None
    mean = (filled.sum(axis=1) / np.maximum(number, 1))[rows[0] : rows[-1] + 1]
    mean = mean - mean.mean()
    n = len(mean)
    spectrum = np.abs(np.fft.rfft(mean, 2 * n)) ** 2
    likeness = np.fft.irfft(spectrum, 2 * n)[: int(n / 2.2)] / (n - np.arange(int(n / 2.2)))
    peaks = np.flatnonzero((likeness[1:-1] >= likeness[:-2]) & (likeness[1:-1] > likeness[2:])) + 1
    peaks = peaks[peaks > 0.6 * straight.period]
    if len(peaks) == 0 or likeness[peaks].max() <= 0:
        return None
    lag = int(peaks[np.flatnonzero(likeness[peaks] >= 0.8 * likeness[peaks].max())[0]])
    beside = likeness[round(0.8 * straight.period) : round(1.2 * straight.period) + 1]
    if lag < 1.3 * straight.period or likeness[lag] < 0.3 * likeness[0] or beside.max() > 0.6 * likeness[lag]:
        return None
    before, here, after = likeness[lag - 1 : lag + 2]
    return lag + 0.5 * float((before - after) / min(before - 2 * here + after, -1e-30))
