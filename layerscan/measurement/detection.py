"""Whether a picture shows a layered structure at all, where, and whether it repeats."""

from __future__ import annotations

import math
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING

import numpy as np

from layerscan.errors import InputError
from layerscan.measurement.orientation import (
    OrientationMap,
    Rotation,
    StreamGrid,
    Tiles,
    analyse_tiles,
    refine_orientation,
    smooth_map,
    trace_grid,
)
from layerscan.measurement.pyramid import Level, build_pyramid

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from layerscan.records import BoolArray, FloatArray, Progress, Region


@dataclass(frozen=True, kw_only=True)
class Evidence:
    """What was measured on one candidate pattern; every entry is larger for a clearer layered structure.

    Attributes
    ----------
    peak : float
        Strongest line of the mean profile's spectrum over the larger of the medians of both neighbouring octaves.
    persistence : float
        How much of the profile is the same far away along the layers (1: all of it).
    share : float
        Part of the picture's variation at this scale that the mean profile explains.
    near_persistence, near_share : float
        The same three periods away, and next to each other.
    swings : float
        Number of alternations between dark and bright that are at least a third of what the larger ones reach.
    alone : float
        Median contrast of the tiles: the line over what the same frequency holds in other directions.
    second : float
        Strongest line in another direction over the strongest line; seven tiles in ten have less (smaller is clearer).
    rivals : float
        Share of the tiles, on the level where it is largest, that hold a strong line in a clearly different direction.
    harmonics : float
        Energy of the second and third harmonic over that of the fundamental.
    spacing_cv : float
        Robust coefficient of variation of the spacing between alternations.
    """

    peak: float = 0.0
    persistence: float = 0.0
    share: float = 0.0
    near_persistence: float = 0.0
    near_share: float = 0.0
    swings: float = 0.0
    alone: float = 0.0
    second: float = 1.0
    rivals: float = 1.0
    harmonics: float = 0.0
    spacing_cv: float = math.inf
    height_cv: float = math.inf
    chirp: float = 0.0
    length: float = 0.0
    area: float = 0.0


@dataclass(frozen=True, kw_only=True, eq=False)
class LayerDetection:
    """Answer of ``detect_layers``. Angles are in pixel space, places in pixels of the array given.

    ``valid`` is a coarse map of the layered area: cell (i, j) covers the square of ``valid_step_px`` pixels that starts at
    ``(i, j) * valid_step_px``. ``orientation_map_deg`` holds the local direction of the normal at ``map_row_px`` x
    ``map_column_px``, ``coherence`` (0 to 1) how sure it is. ``aligned`` without ``layered``: no layers, but the pattern
    has a direction and a spacing, which are given.
    """

    layered: bool
    periodic: bool
    statistic: float | None
    p_value: float | None
    region: Region | None
    valid: BoolArray | None = None
    valid_step_px: int = 1
    orientation_deg: float | None = None
    u_orientation_deg: float | None = None
    orientation_map_deg: FloatArray | None = None
    coherence: FloatArray | None = None
    map_row_px: FloatArray | None = None
    map_column_px: FloatArray | None = None
    period_px: float | None = None
    u_period_px: float | None = None
    seed_px: tuple[float, float] | None = None
    aligned: bool = False
    flags: tuple[str, ...] = ()
    evidence: Evidence = field(default_factory=Evidence)
    reason: str = ""

    def valid_mask(self, shape: tuple[int, int]) -> BoolArray:
        """The layered area as a mask of the full picture, (rows, columns)."""
        out = np.zeros(shape, dtype=bool)
        if self.valid is not None:
            i = np.minimum(np.arange(shape[0]) // self.valid_step_px, self.valid.shape[0] - 1)
            j = np.minimum(np.arange(shape[1]) // self.valid_step_px, self.valid.shape[1] - 1)
            out = self.valid[np.ix_(i, j)]
        return out


@dataclass(frozen=True, kw_only=True, eq=False)
class _Candidate:
    """A group of adjacent tiles whose spectra hold one strong line of similar frequency."""

    level: Level
    tiles: Tiles
    member: BoolArray
    frequency: float
    area: float  # page pixels
    score: float


@dataclass(frozen=True, kw_only=True, eq=False)
class _Straight:
    """A candidate straightened along its own layers and averaged over blocks of columns; arrays are (depth, blocks)."""

    grid: StreamGrid
    field_map: OrientationMap
    flat: FloatArray  # block means, high-passed along the depth; 0 where not good
    good: BoolArray  # the frame shows it
    member: BoolArray  # and it lies in the candidate's tiles
    shifts: FloatArray  # (blocks,) depth shift that aligns each block
    block: int  # level pixels
    period: float  # level pixels


@dataclass(frozen=True, kw_only=True, eq=False)
class _Judged:
    """A candidate with its evidence."""

    statistic: float
    candidate: _Candidate
    straight: _Straight
    evidence: Evidence


_CONTRAST = 6.0  # of a tile's line over the ring, to be taken as a candidate


def detect_layers(
    intensity: NDArray[np.floating], *, mask: BoolArray | None = None, progress: Progress | None = None
) -> LayerDetection:
    """Decide whether a picture shows a layered structure, where, and whether it repeats.

    Parameters
    ----------
    intensity : (rows, columns) float array
        NaN where nothing was recorded.
    mask : (rows, columns) bool array, optional
        True where a pixel may be used (banner and holes False).
    progress : callable, optional
        ``progress(what, fraction)``.

    Returns
    -------
    LayerDetection

    Raises
    ------
    InputError
        The array is not two-dimensional.

    Notes
    -----
    Tiles on a pyramid give candidates; each is straightened along its own layers and judged on the mean profile: a line
    that stands above both neighbouring octaves (red backgrounds and curtains have no deficit below it), that is the same
    far away along the layers (fibres end), that explains most of what varies at that scale (lattices, foams and cells
    vary in other directions too), with several alternations of similar height (an edge with Fresnel fringes has few).
    The p-value is read from the statistic's distribution in simulated pictures without layers, not from an exponential
    law, which is wrong on a red background.
    """
    image = np.asarray(intensity)
    if image.ndim != 2:
        raise InputError(f"The picture has {image.ndim} dimensions ({image.shape}); detection needs rows and columns.")
    finite = np.isfinite(image) if mask is None else np.isfinite(image) & mask
    if min(image.shape) < 16 or finite.sum() < 256:
        return _nothing("too small")
    usable = image[finite]
    if not float(usable.max()) > float(usable.min()):
        return _nothing("constant")
    levels = build_pyramid(image, mask=mask)
    tiles = _tiles_of_levels(levels, progress)
    candidates = _candidates(levels, tiles)
    judged: list[_Judged] = []
    for candidate in candidates:
        straight = _straighten(candidate)
        if straight is None:
            continue
        longer = _fundamental(straight)
        if longer is not None:
            candidate = replace(candidate, frequency=1 / longer)
            straight = _straighten(candidate) or straight
        evidence = _judge(candidate, straight, levels, tiles)
        judged.append(_Judged(statistic=_statistic(evidence), candidate=candidate, straight=straight, evidence=evidence))
        if judged[-1].statistic > 1:
            break
    if progress is not None:
        progress("layers looked for", 1.0)
    if not judged:
        return _nothing("no line")
    best = max(judged, key=lambda one: one.statistic)
    if best.statistic > 1:
        return _layered(best, levels)
    return _not_layered(best, judged)


def _nothing(reason: str) -> LayerDetection:
    return LayerDetection(
        layered=False, periodic=False, statistic=None, p_value=None, region=None, flags=("no_layers_found",), reason=reason
    )


def _tiles_of_levels(levels: tuple[Level, ...], progress: Progress | None) -> tuple[Tiles, ...]:
    out = []
    for index, level in enumerate(levels):
        if progress is not None:
            progress("looking for layers", 0.5 * index / len(levels))
        hop = 32 if level.intensity.size < 2**22 else 64
        out.append(analyse_tiles(level, hop=hop, lowest=3.2 if index < len(levels) - 1 else 2.4))
    return tuple(out)


def _candidates(levels: tuple[Level, ...], all_tiles: tuple[Tiles, ...]) -> list[_Candidate]:
    from scipy.ndimage import label

    found: list[_Candidate] = []
    for level, tiles in zip(levels, all_tiles, strict=True):
        strong = tiles.contrast > _CONTRAST
        groups, count = label(strong, structure=np.ones((3, 3)))
        for number in range(1, count + 1):
            member = groups == number
            if member.sum() < min(3, member.size):
                continue
            weight = np.log(tiles.contrast[member])
            order = np.argsort(tiles.frequency[member])
            total = np.cumsum(weight[order])
            frequency = float(tiles.frequency[member][order][np.searchsorted(total, total[-1] / 2)])
            area = float(member.mean() * level.intensity.size * level.factor**2)
            suits = math.exp(-0.5 * abs(math.log(frequency / 0.12)))
            score = area * float(np.median(weight) * np.median(tiles.amplitude[member])) * suits
            found.append(
                _Candidate(level=level, tiles=tiles, member=member, frequency=frequency, area=area, score=score)
            )
    found.sort(key=lambda c: -c.score)
    return found[:4]


def _straighten(candidate: _Candidate) -> _Straight | None:
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
    flat = _high_pass(mean, good, period)
    start = min(grid.origin[1] * grid.stride // block, count - 1)
    shifts = _track(flat, inside, period, start)
    return _Straight(
        grid=grid, field_map=field_map, flat=flat, good=good, member=inside, shifts=shifts, block=block, period=period
    )


def _member_area(candidate: _Candidate, row: FloatArray, column: FloatArray) -> BoolArray:
    """Where places (level pixels) lie nearest to a member tile."""
    tiles = candidate.tiles
    i = np.clip(np.rint((row - tiles.row[0]) / tiles.hop[0]).astype(int), 0, len(tiles.row) - 1)
    j = np.clip(np.rint((column - tiles.column[0]) / tiles.hop[1]).astype(int), 0, len(tiles.column) - 1)
    area: BoolArray = candidate.member[i, j]
    return area


def _high_pass(mean: FloatArray, good: BoolArray, period: float) -> FloatArray:
    """Take away the running mean over 1.6 periods; 0 where nothing was seen."""
    from scipy.ndimage import uniform_filter1d

    width = max(round(1.6 * period), 3) | 1
    level = uniform_filter1d(np.where(good, mean, 0.0), width, axis=0, mode="constant")
    share = uniform_filter1d(good.astype(float), width, axis=0, mode="constant")
    return np.where(good, mean - level / np.maximum(share, 1e-6), 0.0)


def _moved(column: FloatArray, shift: float) -> FloatArray:
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
            score = np.array([_moved(column, last + trial) @ mean for trial in trials])
            best = int(np.argmax(score))
            last += float(trials[best])
            if 0 < best < len(trials) - 1:
                before, here, after = score[best - 1 : best + 2]
                bend = min(before - 2 * here + after, -1e-30)
                last += 0.5 * float((before - after) / bend) * float(trials[1] - trials[0])
            shifts[b] = last
            template = 0.85 * template + _moved(column, last)
            weight = 0.85 * weight + _moved(seen[:, b], last)
    return _realign(flat * seen, seen, shifts, 0.5 * trials)


def _realign(flat: FloatArray, seen: FloatArray, shifts: FloatArray, trials: FloatArray) -> FloatArray:
    """Shift each block once more against the mean of all others, so that errors do not add up along the layers."""
    used = np.flatnonzero(seen.any(axis=0))
    moved = np.column_stack([_moved(flat[:, b], shifts[b]) for b in used])
    weight = np.column_stack([_moved(seen[:, b], shifts[b]) for b in used])
    total, number = moved.sum(axis=1), weight.sum(axis=1)
    out = shifts.copy()
    for i, b in enumerate(used):
        mean = (total - moved[:, i]) / np.maximum(number - weight[:, i], 1.0)
        score = np.array([_moved(flat[:, b], shifts[b] + trial) @ mean for trial in trials])
        best = int(np.argmax(score))
        out[b] += float(trials[best])
        if 0 < best < len(trials) - 1:
            before, here, after = score[best - 1 : best + 2]
            bend = min(before - 2 * here + after, -1e-30)
            out[b] += 0.5 * float((before - after) / bend) * float(trials[1] - trials[0])
    return out


def _aligned(straight: _Straight) -> tuple[FloatArray, BoolArray]:
    """Member cells with the shifts taken out: (depth, blocks) and where they are known."""
    filled = np.zeros_like(straight.flat)
    seen = np.zeros(straight.flat.shape, dtype=bool)
    for b in np.flatnonzero(straight.member.any(axis=0)):
        known = _moved(straight.member[:, b].astype(float), straight.shifts[b]) > 0.99
        filled[known, b] = _moved(straight.flat[:, b] * straight.member[:, b], straight.shifts[b])[known]
        seen[:, b] = known
    return filled, seen


def _fundamental(straight: _Straight) -> float | None:
    """Longer period [level px] at which the mean profile repeats clearly better than at the candidate's, if there is one.

    Layers much thinner than the gaps between them have harmonics as strong as the fundamental.
    """
    filled, seen = _aligned(straight)
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


def _judge(
    candidate: _Candidate, straight: _Straight, levels: tuple[Level, ...], all_tiles: tuple[Tiles, ...]
) -> Evidence:
    """Measure what tells layers from other patterns on the straightened candidate."""
    period = straight.period
    filled, seen = _aligned(straight)
    number = seen.sum(axis=1)
    rows = np.flatnonzero(number >= max(2, 0.3 * number.max()))
    if len(rows) < 2.2 * period:
        return Evidence()
    span = slice(int(rows[0]), int(rows[-1]) + 1)
    filled, seen = filled[span], seen[span]
    mean = filled.sum(axis=1) / np.maximum(seen.sum(axis=1), 1)
    near, three, far = _lateral_covariance(filled, seen, period / straight.block)
    variance = float((filled**2).sum() / max(seen.sum(), 1))
    peak, frequency, harmonics = _profile_peak(mean, 1 / period)
    swings, spread, uneven, chirp = _alternations(mean, frequency)
    tiles, member = candidate.tiles, candidate.member
    return Evidence(
        peak=peak,
        persistence=float(np.clip(far / near, 0, 1)) if near > 0 and far > 0 else 0.0,
        share=far / variance if variance > 0 else 0.0,
        near_persistence=float(np.clip(three / near, 0, 1)) if near > 0 and three > 0 else 0.0,
        near_share=near / variance if variance > 0 else 0.0,
        swings=swings,
        alone=float(np.median(tiles.contrast[member])),
        second=float(np.quantile(tiles.second[member], 0.7)),
        rivals=_rivals(candidate, straight.field_map, levels, all_tiles),
        harmonics=harmonics,
        spacing_cv=spread,
        height_cv=uneven,
        chirp=chirp,
        length=float(seen.any(axis=0).sum()) * straight.block / min(8 * period, 0.6 * min(candidate.level.intensity.shape)),
        area=candidate.area,
    )


def _rivals(
    candidate: _Candidate, field_map: OrientationMap, levels: tuple[Level, ...], all_tiles: tuple[Tiles, ...]
) -> float:
    """Largest share, over the finer levels, of tiles with a strong line more than 25 degrees off the candidate's direction."""
    own = candidate.tiles
    amplitude = float(np.median(own.amplitude[candidate.member]))
    worst = 0.0
    for level, tiles in zip(levels, all_tiles, strict=True):
        if level.factor > candidate.level.factor:
            break
        row, column = np.meshgrid(tiles.row, tiles.column, indexing="ij")
        row = candidate.level.from_page(level.to_page(row))
        column = candidate.level.from_page(level.to_page(column))
        i = np.clip(np.rint((row - own.row[0]) / own.hop[0]).astype(int), 0, len(own.row) - 1)
        j = np.clip(np.rint((column - own.column[0]) / own.hop[1]).astype(int), 0, len(own.column) - 1)
        local = np.arctan2(field_map.sin2[i, j], field_map.cos2[i, j])
        off = np.cos(np.radians(2 * tiles.angle_deg) - local) < math.cos(math.radians(50))
        strong = (tiles.contrast > _CONTRAST) & (tiles.amplitude > 0.5 * amplitude)
        here = candidate.member[i, j]
        if here.any():
            worst = max(worst, float((strong & (off | (tiles.second > 0.5)) & here).sum() / here.sum()))
    return worst


def _lateral_covariance(filled: FloatArray, seen: BoolArray, period: float) -> tuple[float, float, float]:
    """Covariance of profiles of neighbouring blocks, of blocks three periods apart, and of blocks far apart.

    ``period`` is in blocks; far is half the extent, or 16 periods where that is less.
    """
    blocks = np.flatnonzero(seen.any(axis=0))
    if len(blocks) < 3:
        return 0.0, 0.0, 0.0
    filled, weight = filled[:, blocks], seen[:, blocks].astype(float)
    product, common = filled.T @ filled, weight.T @ weight
    distance = np.abs(blocks[:, None] - blocks[None, :])
    half = round(0.5 * int(distance.max()))

    def mean(chosen: BoolArray) -> float:
        return float(product[chosen].sum() / max(common[chosen].sum(), 1))

    return (
        mean(distance == 1),
        mean(distance == max(2, min(round(3 * period), half))),
        mean(distance >= max(2, min(half, math.ceil(16 * period)))),
    )


def _profile_peak(mean: FloatArray, guess: float) -> tuple[float, float, float]:
    """Whitened height of the strongest line near the guess, its frequency, and the energy of its harmonics."""
    n = len(mean)
    window = np.hanning(n + 2)[1:-1]
    size = 4 * n
    power = np.abs(np.fft.rfft((mean - mean.mean()) * window, size)) ** 2
    frequency = np.fft.rfftfreq(size)
    wide = max(round(0.16 * guess * size), 1) | 1  # a disordered stack has a broad hump; noise is tamed by averaging
    hump = np.convolve(power, np.ones(wide) / wide, mode="same")
    here = np.flatnonzero((frequency > guess / 1.6) & (frequency < guess * 1.6))
    at = int(here[np.argmax(hump[here])])
    f = float(frequency[at])
    width = 2.0 / n  # half the width of the window's main lobe
    low = (frequency > f / 2.83) & (frequency < min(f / 1.5, f - width))
    high = (frequency > max(1.5 * f, f + width)) & (frequency < 2.83 * f)
    floor = max([*(float(np.median(power[part])) for part in (low, high) if part.any()), 1e-30])

    def energy(centre: float) -> float:
        return float(power[np.abs(frequency - centre) <= width].sum())

    return float(hump[at] / floor), f, (energy(2 * f) + energy(3 * f)) / max(energy(f), 1e-30)


def _alternations(mean: FloatArray, frequency: float) -> tuple[float, float, float, float]:
    """Number of alternations of similar height, robust spread of their spacing and height, and the spacing's trend."""
    from scipy.ndimage import gaussian_filter1d

    smooth = gaussian_filter1d(mean, max(0.08 / frequency, 0.5), mode="nearest")
    turn = np.flatnonzero(np.diff(np.sign(np.diff(smooth))) != 0) + 1
    if len(turn) < 3:
        return 0.0, math.inf, math.inf, 0.0
    height = np.abs(np.diff(smooth[turn]))
    rank = max(3, round(0.5 * frequency * len(mean)))  # a quarter of the alternations that fit
    floor = 0.33 * float(np.sort(height)[-min(rank, len(height))])
    values, places = list(smooth[turn]), list(turn)
    while len(values) > 2:  # small wiggles go, the smallest first
        steps = np.abs(np.diff(values))
        least = int(np.argmin(steps))
        if steps[least] >= floor:
            break
        if least in (0, len(steps) - 1):
            drop = 0 if least == 0 else len(values) - 1
            del values[drop], places[drop]
        else:
            del values[least : least + 2], places[least : least + 2]
    swings = len(values) - 1
    if swings < 4:
        return float(swings), math.inf, math.inf, 0.0
    place = np.array(places, dtype=float)
    spacing = place[2:] - place[:-2]
    middle = float(np.median(spacing))
    spread = float(np.median(np.abs(spacing - middle))) * 1.4826 / middle
    order = np.diff(place)
    chirp = float(np.polyfit(np.linspace(0, 1, len(order)), np.log(order), 1)[0])
    within = (turn[:-1] >= places[0]) & (turn[1:] <= places[-1])
    height = height[within]
    height = height[height > 0.1 * np.median(height)]
    uneven = float(height.std() / height.mean())
    return float(swings), spread, uneven, chirp


def _statistic(evidence: Evidence) -> float:
    """How far the weakest of the criteria is passed: above 1 is layered."""
    return min(
        evidence.peak / 14,
        evidence.persistence / 0.55,
        evidence.share / 0.3,
        evidence.swings / 3.9,
        evidence.alone / 20,
        evidence.length,
        0.23 / max(evidence.second, 1e-6),
        0.3 / max(evidence.rivals, 1e-6),
        _regularity(evidence),
    )


def _alignment(evidence: Evidence) -> float:
    """Above 1: an aligned pattern with a spacing, such as rods or short lamellae that end, whether layered or not."""
    return min(
        evidence.near_persistence / 0.4,
        evidence.near_share / 0.4,
        evidence.swings / 4.9,
        evidence.alone / 20,
        evidence.length,
        0.2 / max(evidence.second, 1e-6),
        0.4 / max(evidence.rivals, 1e-6),
    )


def _regularity(evidence: Evidence) -> float:
    """Even spacing and heights, weighed with how far the line stands out; few alternations must be more even."""
    uneven = math.hypot(evidence.spacing_cv / 0.3, evidence.height_cv / 0.42, evidence.chirp)
    most = 0.84 if evidence.swings < 8 else 1.6
    return min(math.sqrt(evidence.peak / 23), most) / max(uneven, 1e-6)


def _not_layered(best: _Judged, judged: list[_Judged]) -> LayerDetection:
    """No layers; where the pattern is aligned all the same, its direction and spacing are given."""
    aligned = [one for one in judged if _alignment(one.evidence) > 1]
    if not aligned:
        return LayerDetection(
            layered=False, periodic=False, statistic=best.statistic, p_value=None, region=None,
            flags=("no_layers_found",), evidence=best.evidence, reason="weak",
        )  # fmt: skip
    one = aligned[0]
    factor = one.candidate.level.factor
    orientation, spread, count = _mean_direction(one.candidate)
    spacing, u_spacing = _pooled_spacing(one.straight)
    return LayerDetection(
        layered=False,
        periodic=False,
        statistic=best.statistic,
        p_value=None,
        region=None,
        aligned=True,
        orientation_deg=orientation,
        u_orientation_deg=spread / math.sqrt(count),
        period_px=spacing * factor,
        u_period_px=u_spacing * factor,
        flags=("no_layers_found", "irregular"),
        evidence=one.evidence,
        reason="aligned, but not layered",
    )


def _pooled_spacing(straight: _Straight) -> tuple[float, float]:
    """Dominant spacing [level px] from the mean power spectrum of all blocks, and a standard uncertainty from its width.

    Blocks are pooled without their phases, since lamellae that end do not keep them.
    """
    used = straight.member.any(axis=0)
    columns = straight.flat[:, used] * straight.member[:, used]
    n = len(columns)
    power = (np.abs(np.fft.rfft(columns * np.hanning(n + 2)[1:-1, None], 8 * n, axis=0)) ** 2).mean(axis=1)
    frequency = np.fft.rfftfreq(8 * n)
    here = np.flatnonzero((frequency > 0.4 / straight.period) & (frequency < 2.0 / straight.period))
    top = int(here[np.argmax(power[here])])
    low = high = top
    while low > here[0] and power[low - 1] > 0.5 * power[top]:
        low -= 1
    while high < here[-1] and power[high + 1] > 0.5 * power[top]:
        high += 1
    f = float(np.average(frequency[low : high + 1], weights=power[low : high + 1]))
    half_width = 0.5 * float(frequency[high] - frequency[low]) + 0.5 / n
    independent = max(float(used.sum()) * straight.block / (3 * straight.period), 1.0)
    return 1 / f, half_width / f**2 / math.sqrt(independent)


def _layered(best: _Judged, levels: tuple[Level, ...]) -> LayerDetection:
    statistic, candidate, straight, evidence = best.statistic, best.candidate, best.straight, best.evidence
    shape = levels[0].intensity.shape
    level, tiles, member = candidate.level, candidate.tiles, candidate.member
    step, valid = _valid_map(candidate, straight, shape)
    rows, columns = np.nonzero(valid)
    region = (
        int(rows.min() * step), int(columns.min() * step),
        int(min((rows.max() + 1) * step, shape[0])), int(min((columns.max() + 1) * step, shape[1])),
    )  # fmt: skip
    field_map = straight.field_map
    angle = np.degrees(0.5 * np.arctan2(field_map.sin2, field_map.cos2)) % 180
    direction = _global_orientation(candidate, levels, step, valid)
    harmonics, wander = _purity(candidate, straight, levels)
    if _is_hum(direction.angle_deg, harmonics, level.factor / candidate.frequency, levels):
        return LayerDetection(
            layered=False, periodic=False, statistic=statistic, p_value=None, region=None,
            flags=("no_layers_found", "scan_lines"), evidence=evidence, reason="one sinusoid locked to the scan lines",
        )  # fmt: skip
    flags = ["orientation_varies"] if direction.varies else []
    if harmonics < _PURE and wander < _STEADY:
        flags.append("confirm_with_second_section")
    if direction.flat:
        angle = np.full_like(angle, direction.angle_deg)
    seed = straight.grid.origin
    return LayerDetection(
        layered=True,
        periodic=evidence.spacing_cv < 0.25,
        statistic=statistic,
        p_value=None,
        region=region,
        valid=valid,
        valid_step_px=step,
        orientation_deg=direction.angle_deg,
        u_orientation_deg=direction.u_deg,
        orientation_map_deg=angle,
        coherence=np.where(member, tiles.coherence, 0.0),
        map_row_px=level.to_page(tiles.row),
        map_column_px=level.to_page(tiles.column),
        period_px=level.factor / candidate.frequency,
        u_period_px=None,
        seed_px=(
            float(level.to_page(straight.grid.row[seed])), float(level.to_page(straight.grid.column[seed])),
        ),
        flags=tuple(flags),
        evidence=evidence,
    )  # fmt: skip


def _purity(candidate: _Candidate, straight: _Straight, levels: tuple[Level, ...]) -> tuple[float, float]:
    """How near the profile, read on a fine level, comes to one steady sinusoid.

    Returns the energy of the second and third harmonic over the fundamental's, and the rms phase [rad] by which the
    fundamental wanders about a steady (at most evenly chirped) one.
    """
    from layerscan.measurement.orientation_kernels import block_means

    coarse = candidate.level
    fine = next((each for each in levels if each.intensity.size <= 2**22), levels[-1])
    if fine.factor > coarse.factor:
        fine = coarse
    grid = straight.grid
    mean, number = np.zeros_like(straight.flat), np.zeros_like(straight.flat)
    usable = fine.valid if fine.valid is not None else fine.intensity[:1, :1]
    row, column = fine.from_page(coarse.to_page(grid.row)), fine.from_page(coarse.to_page(grid.column))
    block_means(fine.intensity, usable, fine.valid is not None, row, column, grid.stride, straight.block, mean, number)
    good = number >= 0.5 * straight.block
    read = replace(straight, flat=_high_pass(mean, good, straight.period), member=straight.member & good)
    filled, seen = _aligned(read)
    count = seen.sum(axis=1)
    rows = np.flatnonzero(count >= max(2, 0.3 * count.max()))
    if len(rows) < 2.2 * straight.period:
        return math.inf, math.inf
    profile = (filled.sum(axis=1) / np.maximum(count, 1))[rows[0] : rows[-1] + 1]
    _, frequency, harmonics = _profile_peak(profile, 1 / straight.period)
    return harmonics, _phase_wander(profile, frequency)


def _phase_wander(profile: FloatArray, frequency: float) -> float:
    """Rms phase [rad] of the fundamental about a parabola, from demodulation over two periods."""
    from scipy.ndimage import gaussian_filter1d

    place = np.arange(len(profile))
    mixed = (profile - profile.mean()) * np.exp(-2j * np.pi * frequency * place)
    width = 0.8 / frequency
    smooth = gaussian_filter1d(mixed.real, width) + 1j * gaussian_filter1d(mixed.imag, width)
    edge = min(int(width), len(profile) // 8)
    inner = slice(edge, len(profile) - edge)
    phase, weight = np.unwrap(np.angle(smooth[inner])), np.abs(smooth[inner])
    if len(phase) < 8:
        return math.inf
    fit = np.polyval(np.polyfit(place[inner], phase, 2, w=weight), place[inner])
    return float(np.sqrt(np.average((phase - fit) ** 2, weights=weight**2)))


_PURE = 0.03  # harmonics of a sinusoid: knife chatter, mains hum; layers with sharp edges have 0.06 and more
_STEADY = 0.2  # rad


def _is_hum(angle_deg: float, harmonics: float, period_px: float, levels: tuple[Level, ...]) -> bool:
    """Whether this is a weak sinusoid locked to the scan lines: straight, along the rows, and pure.

    Mains pick-up adds one sinusoid in time, which the raster lays out as rows or slightly slanted lines over a picture of
    something else. Where the sinusoid is most of the picture it is taken for what the specimen shows.
    """
    from scipy.ndimage import gaussian_filter, uniform_filter

    if harmonics > 0.2 * _PURE or abs(angle_deg - 90) > 4:
        return False
    level = next((each for each in levels if each.intensity.size <= 2**21), levels[-1])
    period = period_px / level.factor
    image = level.intensity - uniform_filter(level.intensity, max(round(period), 3) | 1, mode="nearest")
    fit = _refine_outwards(image, np.ones(image.shape, dtype=bool), angle_deg=angle_deg, period=period)
    if not fit.converged or fit.wave_px > 0.04 * period + 2 * fit.u_wave_px:
        return False
    seen = fit.count > 0.3 * fit.count.max()
    depth = np.arange(len(fit.profile))[seen] * fit.step_px
    window = np.hanning(len(depth))
    trial = np.linspace(0.9, 1.1, 41) / period
    profile = (fit.profile[seen] - fit.profile[seen].mean()) * window
    amplitude = 2 * np.abs(np.exp(-2j * np.pi * trial[:, None] * depth) @ profile).max() / window.sum()
    texture = float(gaussian_filter(level.intensity, 0.5 * period).var())  # of something else, coarser than the lines
    return float(amplitude**2 / 2) < max(0.4 * float(level.intensity.var()), texture)


def _valid_map(candidate: _Candidate, straight: _Straight, shape: tuple[int, int]) -> tuple[int, BoolArray]:
    """Where neighbouring blocks show the same alternations: cell size in page pixels and the map.

    The covariance of neighbouring blocks, averaged over two periods of depth, is the layers' own variance without noise.
    Cells where it is at least a fifth of its median over the candidate are layered; so are small gaps between them.
    """
    from scipy.ndimage import binary_closing, binary_opening, uniform_filter

    level, grid = candidate.level, straight.grid
    flat, good = straight.flat, straight.good.astype(float)
    relative = np.diff(straight.shifts)
    after = np.column_stack([_moved(flat[:, b + 1], relative[b]) for b in range(len(relative))])
    known = np.column_stack([_moved(good[:, b + 1], relative[b]) for b in range(len(relative))]) * good[:, :-1]
    width = max(round(1.5 * straight.period), 3)
    number = uniform_filter(known, (width, 2), mode="constant")
    covariance = uniform_filter(flat[:, :-1] * after * known, (width, 2), mode="constant") / np.maximum(number, 1e-3)
    reference = float(np.median(covariance[straight.member[:, :-1] & (known > 0.5)]))
    layered = (covariance > 0.2 * reference) & (number > 0.1)
    step = max(round(straight.period * level.factor), 8)
    cells = (math.ceil(shape[0] / step), math.ceil(shape[1] / step))
    yes, all_of = np.zeros(cells), np.zeros(cells)
    at = (np.arange(layered.shape[1]) + 1) * straight.block
    for offset in np.arange(-straight.block // 2, straight.block // 2 + 1, grid.stride):
        j = np.clip((at + offset) // grid.stride, 0, grid.row.shape[1] - 1)
        i_row = np.floor(level.to_page(grid.row[:, j]) / step).astype(int)
        i_column = np.floor(level.to_page(grid.column[:, j]) / step).astype(int)
        ok = (i_row >= 0) & (i_row < cells[0]) & (i_column >= 0) & (i_column < cells[1])
        np.add.at(yes, (i_row[ok], i_column[ok]), layered[ok])
        np.add.at(all_of, (i_row[ok], i_column[ok]), 1.0)
    valid = (yes > 0.5 * all_of) & (all_of > 0)
    if min(cells) > 3:
        padded = np.pad(valid, 2, mode="edge")
        valid = binary_opening(binary_closing(padded, np.ones((3, 3))), np.ones((2, 2)))[2:-2, 2:-2]
    from scipy.ndimage import label

    groups, count = label(valid, structure=np.ones((3, 3)))
    if count == 0:
        return step, np.ones(cells, dtype=bool)
    sizes = np.bincount(groups.ravel())[1:]
    return step, np.isin(groups, 1 + np.flatnonzero(sizes >= 0.1 * sizes.max()))


def _mean_direction(candidate: _Candidate) -> tuple[float, float, float]:
    """Mean direction of the tiles as axes [deg], their spread [deg], and how many of them are independent."""
    tiles, member = candidate.tiles, candidate.member
    double = np.radians(2 * tiles.angle_deg[member])
    weight = np.log(tiles.contrast[member])
    vector = complex(np.sum(weight * np.exp(1j * double)) / weight.sum())
    spread = math.degrees(math.sqrt(max(-2 * math.log(max(abs(vector), 1e-12)), 0.0)) / 2)
    return math.degrees(np.angle(vector) / 2) % 180, spread, max(float(member.sum()) / 4, 1.0)


@dataclass(frozen=True, kw_only=True, eq=False)
class _Direction:
    """Mean direction of the normal; ``flat`` says whether one straight direction describes the layers."""

    angle_deg: float
    u_deg: float
    varies: bool
    flat: bool


def _global_orientation(candidate: _Candidate, levels: tuple[Level, ...], step: int, valid: BoolArray) -> _Direction:
    """Mean direction of the tiles, or that of the layers as straight lines where they leave it by no more than noise."""
    mean, spread, independent = _mean_direction(candidate)
    level = next((each for each in levels if each.intensity.size <= 2**21), levels[-1])
    places = [np.floor(level.to_page(np.arange(n, dtype=float)) / step).astype(int) for n in level.intensity.shape]
    use = valid[np.ix_(*(np.minimum(place, n - 1) for place, n in zip(places, valid.shape, strict=True)))]
    if level.valid is not None:
        use = use & (level.valid > 0.5)
    period = 1 / candidate.frequency * candidate.level.factor / level.factor
    tiles_say = _Direction(angle_deg=mean, u_deg=spread / math.sqrt(independent), varies=spread > 2, flat=False)
    if spread > 8 or use.sum() < 4 * period**2:
        return tiles_say
    fine = _refine_outwards(level.intensity, use, angle_deg=mean, period=period)
    offset = math.radians(abs((fine.angle_deg - mean + 90) % 180 - 90))
    if not fine.converged or offset * math.sqrt(float(use.sum())) > 0.5 * period:
        return tiles_say
    wave = math.sqrt(max(fine.wave_px**2 - fine.u_wave_px**2, 0.0))
    bend = math.degrees(3 * wave / math.sqrt(float(use.sum())))  # what waviness leaves undecided about a mean direction
    flat = fine.wave_px < max(2 * fine.u_wave_px, 0.1)
    return _Direction(
        angle_deg=fine.angle_deg, u_deg=math.hypot(fine.u_deg, bend), varies=spread > 2 and not flat, flat=flat
    )  # fmt: skip


def _refine_outwards(image: NDArray[np.float32], use: BoolArray, *, angle_deg: float, period: float) -> Rotation:
    """Refine the direction in a window of 24 periods, then in ever larger ones: many periods make a narrow valley."""
    rows, columns = np.nonzero(use.any(axis=1))[0], np.nonzero(use.any(axis=0))[0]
    middle = (int(rows[0] + rows[-1]) // 2, int(columns[0] + columns[-1]) // 2)
    half = 12.0 * period
    blur = min(max(period / 14, 0.25), 0.7)
    while 2 * half < max(rows[-1] - rows[0], columns[-1] - columns[0]):
        r0, c0 = max(int(middle[0] - half), 0), max(int(middle[1] - half), 0)
        window = (slice(r0, int(middle[0] + half) + 1), slice(c0, int(middle[1] + half) + 1))
        if use[window].sum() > 50 * period:
            part = refine_orientation(image[window], use[window], angle_deg=angle_deg, blur_px=blur)
            if part.converged and abs((part.angle_deg - angle_deg + 90) % 180 - 90) < math.degrees(0.5 / 12):
                angle_deg = part.angle_deg
        half *= 2.5
    return refine_orientation(image, use, angle_deg=angle_deg, blur_px=blur)
