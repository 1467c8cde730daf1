"""Where the layers lie, which way they run, and how far apart they are when they are too irregular to count."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from layerscan.measurement.candidates import Candidate, StraightCandidate, shifted
from layerscan.measurement.orientation import Rotation, refine_orientation

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from layerscan.measurement.pyramid import Level
    from layerscan.records import BoolArray


def map_layers(candidate: Candidate, straight: StraightCandidate, shape: tuple[int, int]) -> tuple[int, BoolArray]:
    """Where neighbouring blocks show the same alternations: cell size in page pixels and the map.

    The covariance of neighbouring blocks, averaged over two periods of depth, is the layers' variance, free of noise.
    Cells where it is at least a fifth of its median over the candidate are layered; so are small gaps between them.
    """
    from scipy.ndimage import binary_closing, binary_opening, uniform_filter

    level, grid = candidate.level, straight.grid
    flat, good = straight.flat, straight.good.astype(float)
    relative = np.diff(straight.shifts)
    after = np.column_stack([shifted(flat[:, b + 1], relative[b]) for b in range(len(relative))])
    known = np.column_stack([shifted(good[:, b + 1], relative[b]) for b in range(len(relative))]) * good[:, :-1]
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


def mean_direction(candidate: Candidate) -> tuple[float, float, float]:
    """Mean direction of the tiles as axes [deg], their spread [deg], and how many of them are independent."""
    tiles, member = candidate.tiles, candidate.member
    double = np.radians(2 * tiles.angle_deg[member])
    weight = np.log(tiles.contrast[member])
    vector = complex(np.sum(weight * np.exp(1j * double)) / weight.sum())
    spread = math.degrees(math.sqrt(max(-2 * math.log(max(abs(vector), 1e-12)), 0.0)) / 2)
    return math.degrees(np.angle(vector) / 2) % 180, spread, max(float(member.sum()) / 4, 1.0)


@dataclass(frozen=True, kw_only=True, eq=False)
class Direction:
    """Mean direction of the normal; ``flat`` says whether one straight direction describes the layers."""

    angle_deg: float
    u_deg: float
    varies: bool
    flat: bool


def global_direction(candidate: Candidate, levels: tuple[Level, ...], step: int, valid: BoolArray) -> Direction:
    """Mean direction of the tiles, or that of the layers as straight lines where that can be fitted."""
    mean, spread, independent = mean_direction(candidate)
    level = next((each for each in levels if each.intensity.size <= 2**21), levels[-1])
    places = [np.floor(level.to_page(np.arange(n, dtype=float)) / step).astype(int) for n in level.intensity.shape]
    use = valid[np.ix_(*(np.minimum(place, n - 1) for place, n in zip(places, valid.shape, strict=True)))]
    if level.valid is not None:
        use = use & (level.valid > 0.5)
    period = 1 / candidate.frequency * candidate.level.factor / level.factor
    tiles_say = Direction(angle_deg=mean, u_deg=spread / math.sqrt(independent), varies=spread > 2, flat=False)
    if spread > 5 or use.sum() < 4 * period**2:
        return tiles_say
    fine = refine_outwards(level.intensity, use, angle_deg=mean, period=period)
    offset = math.radians(abs((fine.angle_deg - mean + 90) % 180 - 90))
    if not fine.converged or offset * math.sqrt(float(use.sum())) > 0.5 * period:
        return tiles_say
    wave = math.sqrt(max(fine.wave_px**2 - fine.u_wave_px**2, 0.0))
    bend = math.degrees(3 * wave / math.sqrt(float(use.sum())))  # what waviness leaves undecided about a mean direction
    flat = fine.wave_px < max(2 * fine.u_wave_px, 0.1)
    return Direction(
        angle_deg=fine.angle_deg, u_deg=math.hypot(fine.u_deg, bend), varies=spread > 2 and not flat, flat=flat
    )  # fmt: skip


def refine_outwards(image: NDArray[np.float32], use: BoolArray, *, angle_deg: float, period: float) -> Rotation:
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


def pooled_spacing(straight: StraightCandidate) -> tuple[float, float]:
    """Dominant spacing [level px] from the mean power spectrum of all blocks, and its u from the width of the peak.

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
