"""Whether a picture shows a layered structure at all, where, and whether it repeats."""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np

from layerscan.errors import InputError
from layerscan.measurement.orientation import OrientationMap, StreamGrid, Tiles, analyse_tiles, smooth_map, trace_grid
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
    swings : float
        Number of alternations between dark and bright that are at least a third of the third largest.
    alone : float
        Median contrast of the tiles: the line over what the same frequency holds in other directions.
    harmonics : float
        Energy of the second and third harmonic over that of the fundamental.
    spacing_cv : float
        Coefficient of variation of the spacing between alternations.
    """

    peak: float = 0.0
    persistence: float = 0.0
    share: float = 0.0
    swings: float = 0.0
    alone: float = 0.0
    harmonics: float = 0.0
    spacing_cv: float = math.inf
    chirp: float = 0.0
    straightness_px: float = math.inf
    area: float = 0.0


@dataclass(frozen=True, kw_only=True, eq=False)
class LayerDetection:
    """Answer of ``detect_layers``. Angles are in pixel space, places in pixels of the array given.

    ``valid`` is a coarse map of the layered area: cell (i, j) covers the square of ``valid_step_px`` pixels that starts at
    ``(i, j) * valid_step_px``. ``orientation_map_deg`` holds the local direction of the normal at ``map_row_px`` x
    ``map_column_px``, ``coherence`` (0 to 1) how sure it is.
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
    """A candidate straightened: intensity (depth, lateral) on its level, and the blocks of columns."""

    grid: StreamGrid
    intensity: FloatArray
    inside: BoolArray
    profiles: FloatArray  # (depth, blocks), aligned, high-passed, NaN where a block does not reach
    shifts: FloatArray  # (blocks,)
    block: int
    period: float


_CONTRAST = 6.0


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
    candidates = _candidates(levels, progress)
    best: tuple[float, _Candidate, _Straight, Evidence] | None = None
    for candidate in candidates:
        straight = _straighten(candidate)
        if straight is None:
            continue
        evidence = _judge(candidate, straight)
        statistic = _statistic(evidence)
        if best is None or statistic > best[0]:
            best = (statistic, candidate, straight, evidence)
        if statistic > 3:
            break
    if progress is not None:
        progress("layers looked for", 1.0)
    if best is None:
        return _nothing("no line")
    return _answer(best, image.shape)


def _nothing(reason: str) -> LayerDetection:
    return LayerDetection(
        layered=False, periodic=False, statistic=None, p_value=None, region=None, flags=("no_layers_found",), reason=reason
    )


def _candidates(levels: tuple[Level, ...], progress: Progress | None) -> list[_Candidate]:
    from scipy.ndimage import label

    found: list[_Candidate] = []
    for index, level in enumerate(levels):
        if progress is not None:
            progress("looking for layers", index / len(levels))
        hop = 32 if level.intensity.size < 2**22 else 64
        tiles = analyse_tiles(level, hop=hop)
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
            cell = tiles.hop[0] * tiles.hop[1] * level.factor**2
            off = abs(math.log(frequency / 0.1))
            area = float(member.sum() * cell)
            found.append(
                _Candidate(
                    level=level, tiles=tiles, member=member, frequency=frequency, area=area,
                    score=area * float(np.median(weight)) * math.exp(-0.5 * off),
                )
            )  # fmt: skip
    found.sort(key=lambda c: -c.score)
    return found[:3]


def _straighten(candidate: _Candidate) -> _Straight | None:
    """Sample the candidate's level along its layers, cut it into blocks of columns and align those."""
    from scipy.ndimage import map_coordinates

    level, tiles, member = candidate.level, candidate.tiles, candidate.member
    weight = np.where(member, np.log(np.maximum(tiles.contrast, 1.0)), 0.0)
    field_map = smooth_map(tiles, weight)
    rows, columns = np.nonzero(member)
    middle = np.average(rows, weights=weight[member]), np.average(columns, weights=weight[member])
    nearest = int(np.argmin((rows - middle[0]) ** 2 + (columns - middle[1]) ** 2))
    seed = float(tiles.row[rows[nearest]]), float(tiles.column[columns[nearest]])
    shape = level.intensity.shape
    grid = trace_grid(field_map, shape, seed=seed)
    near = _member_area(candidate, grid)
    inside = grid.inside & near
    if level.valid is not None:
        r = np.clip(np.rint(grid.row).astype(int), 0, shape[0] - 1)
        c = np.clip(np.rint(grid.column).astype(int), 0, shape[1] - 1)
        inside = inside & (level.valid[r, c] > 0.5)
    intensity = map_coordinates(level.intensity, [grid.row, grid.column], order=1, mode="nearest", output=np.float64)
    period = 1 / candidate.frequency
    block = max(round(2 * period), 6)
    return _align(grid, intensity, inside, block, period)


def _member_area(candidate: _Candidate, grid: StreamGrid) -> BoolArray:
    """Where grid points lie in a member tile (its middle half)."""
    tiles = candidate.tiles
    i = np.clip(np.rint((grid.row - tiles.row[0]) / tiles.hop[0]).astype(int), 0, len(tiles.row) - 1)
    j = np.clip(np.rint((grid.column - tiles.column[0]) / tiles.hop[1]).astype(int), 0, len(tiles.column) - 1)
    area: BoolArray = candidate.member[i, j]
    return area


def _align(grid: StreamGrid, intensity: FloatArray, inside: BoolArray, block: int, period: float) -> _Straight | None:
    """Block means along the layers, high-passed, each shifted in depth to match those before it."""
    from scipy.ndimage import uniform_filter1d

    count = inside.shape[1] // block
    depth = inside.shape[0]
    if count < 3 or depth < 2.2 * period:
        return None
    cut = slice(0, count * block)
    weights = inside[:, cut].reshape(depth, count, block)
    number = weights.sum(axis=2)
    mean = (intensity[:, cut].reshape(depth, count, block) * weights).sum(axis=2) / np.maximum(number, 1)
    good = number >= 0.5 * block
    width = max(round(1.6 * period), 3) | 1
    level = uniform_filter1d(np.where(good, mean, 0), width, axis=0, mode="constant")
    share = uniform_filter1d(good.astype(float), width, axis=0, mode="constant")
    flat = np.where(good, mean - level / np.maximum(share, 1e-6), 0.0)
    enough = good.sum(axis=0) >= 2.2 * period
    if enough.sum() < 3:
        return None
    good = good & enough
    flat[~good] = 0
    shifts = _track(flat, good, period, int(np.clip(grid.origin[1] // block, 0, count - 1)))
    profiles = np.full(flat.shape, np.nan)
    place = np.arange(depth, dtype=float)
    for b in np.flatnonzero(enough):
        profiles[:, b] = np.interp(place + shifts[b], place, flat[:, b])
        seen = np.interp(place + shifts[b], place, good[:, b].astype(float), left=0, right=0) > 0.99
        profiles[~seen, b] = np.nan
    return _Straight(
        grid=grid, intensity=intensity, inside=inside, profiles=profiles, shifts=shifts, block=block, period=period
    )


def _track(flat: FloatArray, good: BoolArray, period: float, start: int) -> FloatArray:
    """Depth shift of each block against a running template, from the seed outwards both ways."""
    depth, count = flat.shape
    shifts = np.zeros(count)
    reach = 0.25 * period
    trials = np.linspace(-reach, reach, 9)
    place = np.arange(depth, dtype=float)
    for way in (1, -1):
        template, weight = flat[:, start] * good[:, start], good[:, start].astype(float)
        last = 0.0
        b = start + way
        while 0 <= b < count:
            if good[:, b].sum() < 2.2 * period:
                b += way
                continue
            score = np.empty(len(trials))
            mean = template / np.maximum(weight, 1e-6)
            for t, trial in enumerate(trials):
                moved = np.interp(place + last + trial, place, flat[:, b], left=0, right=0)
                score[t] = float(moved @ mean)
            best = int(np.argmax(score))
            offset = float(trials[best])
            if 0 < best < len(trials) - 1:
                a, m, z = score[best - 1 : best + 2]
                offset += 0.5 * (a - z) / min(a - 2 * m + z, -1e-30) * (trials[1] - trials[0])
            last += offset
            shifts[b] = last
            moved = np.interp(place + last, place, flat[:, b], left=0, right=0)
            seen = np.interp(place + last, place, good[:, b].astype(float), left=0, right=0)
            template = 0.85 * template + moved * seen
            weight = 0.85 * weight + seen
            b += way
    return shifts


def _judge(candidate: _Candidate, straight: _Straight) -> Evidence:
    """Measure what tells layers from other patterns on the straightened candidate."""
    profiles, period = straight.profiles, straight.period
    seen = np.isfinite(profiles)
    filled = np.where(seen, profiles, 0.0)
    number = seen.sum(axis=1)
    rows = np.flatnonzero(number >= max(2, 0.3 * number.max()))
    if len(rows) < 2.2 * period:
        return Evidence()
    span = slice(int(rows[0]), int(rows[-1]) + 1)
    filled, seen = filled[span], seen[span]
    mean = filled.sum(axis=1) / np.maximum(seen.sum(axis=1), 1)
    near, far = _lateral_covariance(filled, seen)
    variance = float((filled**2).sum() / max(seen.sum(), 1))
    peak, frequency, harmonics = _profile_peak(mean, 1 / period)
    swings, cv, chirp = _alternations(mean, frequency)
    return Evidence(
        peak=peak,
        persistence=float(np.clip(far / near, 0, 1)) if near > 0 and far > 0 else 0.0,
        share=far / variance if variance > 0 else 0.0,
        swings=swings,
        alone=float(np.median(candidate.tiles.contrast[candidate.member])),
        harmonics=harmonics,
        spacing_cv=cv,
        chirp=chirp,
        area=candidate.area,
    )


def _lateral_covariance(filled: FloatArray, seen: BoolArray) -> tuple[float, float]:
    """Covariance of profiles of neighbouring blocks and of blocks at least half the extent apart."""
    blocks = np.flatnonzero(seen.any(axis=0))
    product = filled.T @ filled
    common = seen.T.astype(float) @ seen.astype(float)
    distance = np.abs(blocks[:, None] - blocks[None, :])
    extent = int(distance.max())
    near = np.zeros_like(product, dtype=bool)
    far = np.zeros_like(near)
    ix = np.ix_(blocks, blocks)
    near[ix] = distance == 1
    far[ix] = distance >= max(2, round(0.5 * extent))
    return (
        float(product[near].sum() / max(common[near].sum(), 1)),
        float(product[far].sum() / max(common[far].sum(), 1)),
    )


def _profile_peak(mean: FloatArray, guess: float) -> tuple[float, float, float]:
    """Whitened height of the strongest line near the guess, its frequency, and the energy of its harmonics."""
    n = len(mean)
    window = np.hanning(n + 2)[1:-1]
    size = 4 * n
    power = np.abs(np.fft.rfft((mean - mean.mean()) * window, size)) ** 2
    frequency = np.fft.rfftfreq(size)
    here = (frequency > guess / 1.6) & (frequency < guess * 1.6)
    at = int(np.flatnonzero(here)[np.argmax(power[here])])
    f = float(frequency[at])
    low = (frequency > f / 2.83) & (frequency < f / 1.5)
    high = (frequency > 1.5 * f) & (frequency < 2.83 * f)
    beside = [float(np.median(power[part])) for part in (low, high) if part.any()]
    floor = max([*beside, 1e-30])
    width = 2.0 / n

    def energy(centre: float) -> float:
        part = np.abs(frequency - centre) <= width
        return float(power[part].sum())

    fundamental = energy(f)
    return float(power[at] / floor), f, (energy(2 * f) + energy(3 * f)) / max(fundamental, 1e-30)


def _alternations(mean: FloatArray, frequency: float) -> tuple[float, float, float]:
    """Number of alternations of similar height, spread of their spacing, and its trend (log ratio end to end)."""
    from scipy.ndimage import gaussian_filter1d

    smooth = gaussian_filter1d(mean, max(0.08 / frequency, 0.5), mode="nearest")
    turn = np.flatnonzero(np.diff(np.sign(np.diff(smooth))) != 0) + 1
    if len(turn) < 3:
        return 0.0, math.inf, 0.0
    height = np.abs(np.diff(smooth[turn]))
    floor = 0.33 * float(np.sort(height)[-min(3, len(height))])
    # drop small wiggles pair by pair, the smallest first
    values, places = list(smooth[turn]), list(turn)
    while len(values) > 2:
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
    if swings < 3:
        return float(swings), math.inf, 0.0
    tops = np.array(places[0::2], dtype=float)
    bottoms = np.array(places[1::2], dtype=float)
    spacing = np.concatenate([np.diff(tops), np.diff(bottoms)])
    cv = float(spacing.std() / spacing.mean()) if len(spacing) > 1 else math.inf
    order = np.diff(np.array(places, dtype=float))
    chirp = float(np.polyfit(np.linspace(0, 1, len(order)), np.log(order), 1)[0]) if len(order) > 3 else 0.0
    return float(swings), cv, chirp


def _statistic(evidence: Evidence) -> float:
    """How far the weakest of the criteria is passed: above 1 is layered."""
    return min(
        evidence.peak / 12,
        evidence.persistence / 0.6,
        evidence.share / 0.3,
        evidence.swings / 5,
        evidence.alone / _CONTRAST,
    )


def _answer(best: tuple[float, _Candidate, _Straight, Evidence], shape: tuple[int, int]) -> LayerDetection:
    statistic, candidate, straight, evidence = best
    layered = statistic > 1
    if not layered:
        return LayerDetection(
            layered=False, periodic=False, statistic=statistic, p_value=None, region=None, flags=("no_layers_found",),
            evidence=evidence, reason="weak",
        )  # fmt: skip
    level, tiles = candidate.level, candidate.tiles
    factor = level.factor
    weight = np.where(candidate.member, np.log(np.maximum(tiles.contrast, 1.0)), 0.0)
    field_map = smooth_map(tiles, weight)
    angle = np.degrees(0.5 * np.arctan2(field_map.sin2, field_map.cos2)) % 180
    double = np.radians(2 * tiles.angle_deg[candidate.member])
    vector = complex(np.sum(weight[candidate.member] * np.exp(1j * double)))
    orientation = math.degrees(np.angle(vector) / 2) % 180
    step = int(round(min(tiles.hop))) * factor
    cells = (math.ceil(shape[0] / step), math.ceil(shape[1] / step))
    r = level.from_page((np.arange(cells[0]) + 0.5) * step)
    c = level.from_page((np.arange(cells[1]) + 0.5) * step)
    i = np.clip(np.rint((r - tiles.row[0]) / tiles.hop[0]).astype(int), 0, len(tiles.row) - 1)
    j = np.clip(np.rint((c - tiles.column[0]) / tiles.hop[1]).astype(int), 0, len(tiles.column) - 1)
    valid = candidate.member[np.ix_(i, j)]
    rr, cc = np.nonzero(valid)
    region = (
        int(rr.min() * step), int(cc.min() * step),
        int(min((rr.max() + 1) * step, shape[0])), int(min((cc.max() + 1) * step, shape[1])),
    )  # fmt: skip
    seed = straight.grid.origin
    return LayerDetection(
        layered=True,
        periodic=evidence.spacing_cv < 0.25,
        statistic=statistic,
        p_value=None,
        region=region,
        valid=valid,
        valid_step_px=step,
        orientation_deg=orientation,
        u_orientation_deg=None,
        orientation_map_deg=angle,
        coherence=tiles.coherence,
        map_row_px=level.to_page(tiles.row),
        map_column_px=level.to_page(tiles.column),
        period_px=factor / candidate.frequency,
        u_period_px=None,
        seed_px=(
            float(level.to_page(straight.grid.row[seed])), float(level.to_page(straight.grid.column[seed])),
        ),
        evidence=evidence,
    )  # fmt: skip
