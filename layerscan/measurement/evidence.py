"""What tells a layered structure from other patterns, measured on a straightened candidate."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from layerscan.measurement.candidates import Candidate, StraightCandidate, aligned_profiles, high_pass
from layerscan.measurement.layered_area import refine_outwards
from layerscan.measurement.orientation import TILE_PX

if TYPE_CHECKING:
    from layerscan.measurement.orientation import OrientationMap, Tiles
    from layerscan.measurement.pyramid import Level
    from layerscan.records import BoolArray, FloatArray

LEAST_CONTRAST = 6.0  # of a tile's line over the ring, to be taken as a candidate


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


def judge_candidate(
    candidate: Candidate, straight: StraightCandidate, levels: tuple[Level, ...], all_tiles: tuple[Tiles, ...]
) -> Evidence:
    """Measure what tells layers from other patterns on the straightened candidate."""
    period = straight.period
    filled, seen = aligned_profiles(straight)
    number = seen.sum(axis=1)
    rows = np.flatnonzero(number >= max(2, 0.3 * number.max()))
    if len(rows) < 2.2 * period:
        return Evidence()
    span = slice(int(rows[0]), int(rows[-1]) + 1)
    filled, seen = filled[span], seen[span]
    mean = filled.sum(axis=1) / np.maximum(seen.sum(axis=1), 1)
    near, three, far = _lateral_covariance(filled, seen, period / straight.block)
    variance = float((filled**2).sum() / max(seen.sum(), 1))
    peak, frequency, harmonics = profile_peak(mean, 1 / period)
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
        length=float(seen.any(axis=0).sum())
        * straight.block
        / min(8 * period, 0.6 * min(candidate.level.intensity.shape)),
        area=candidate.area,
    )


def _rivals(
    candidate: Candidate, field_map: OrientationMap, levels: tuple[Level, ...], all_tiles: tuple[Tiles, ...]
) -> float:
    """Largest share, over the finer levels, of tiles with a strong line more than 25 degrees off the candidate's.

    Where a tile holds fewer than three periods of the candidate, its leakage looks like a second line beside it: there
    the second line does not count.
    """
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
        strong = (tiles.contrast > LEAST_CONTRAST) & (tiles.amplitude > 0.5 * amplitude)
        here = candidate.member[i, j]
        if here.any():
            periods = candidate.frequency * level.factor / candidate.level.factor * TILE_PX
            beside = tiles.second > (0.5 if periods >= 3 else math.inf)
            worst = max(worst, float((strong & (off | beside) & here).sum() / here.sum()))
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


def profile_peak(mean: FloatArray, guess: float) -> tuple[float, float, float]:
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

    def energy(centre: float) -> float:  # of a line, above what lies around it
        part = np.abs(frequency - centre) <= width
        if not part.any():
            return 0.0
        around = np.median(power[np.abs(frequency - centre) <= 0.3 * f])
        return float(max(power[part].sum() - around * part.sum(), 0.0))

    harmonics = (energy(2 * f) + energy(3 * f)) / max(energy(f), 1e-30)
    return float(hump[at] / floor), f, harmonics


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


def layer_statistic(evidence: Evidence) -> float:
    """How far the weakest of the criteria is passed: above 1 is layered."""
    return min(
        evidence.peak / 14,
        evidence.persistence / 0.55,
        evidence.share / 0.36,
        evidence.swings / 3.9,
        evidence.alone / 20,
        evidence.length,
        0.23 / max(evidence.second, 1e-6),
        0.3 / max(evidence.rivals, 1e-6),
        _regularity(evidence),
    )


# Statistic that a share of simulated pictures without layers exceeds: all nine kinds of sample_images/negatives.py,
# seeds 500 to 579, mains hum apart (refused by its own rule). It is made again by
# `benchmarks/measurement_bench.py --only null --seeds 500:580`.
NULL_SHARE = (0.5, 0.2, 0.1, 0.05, 0.02, 0.01, 0.005, 0.0015)
NULL_STATISTIC = (0.195, 0.317, 0.395, 0.478, 0.603, 0.710, 0.826, 0.983)
LEAST_P = 0.0015  # one in the 657 simulated pictures: nothing smaller can be claimed


def p_value_of(statistic: float) -> float:
    """Share of simulated pictures without layers that reach a statistic; never below what their number can tell."""
    from scipy.special import ndtr, ndtri

    if statistic <= NULL_STATISTIC[0]:
        return 1.0 - 0.5 * max(statistic, 0.0) / NULL_STATISTIC[0]
    score = np.interp(statistic, NULL_STATISTIC, -ndtri(np.array(NULL_SHARE)))
    beyond = max(statistic - NULL_STATISTIC[-1], 0.0) / (NULL_STATISTIC[-1] - NULL_STATISTIC[-3])
    return float(max(1 - ndtr(score + beyond), LEAST_P))


def alignment_statistic(evidence: Evidence) -> float:
    """Above 1: an aligned pattern with a spacing, such as rods or short lamellae that end, without being layered.

    What goes on unchanged along its lines without being regular is an edge, curtains or fringes; what ends inside the
    field puts part of its power into other directions (``rivals``, and an ``alone`` that is not large).
    """
    return min(
        evidence.peak / 9,
        0.6 / max(evidence.persistence, 1e-6),
        evidence.near_persistence / 0.4,
        evidence.near_share / 0.4,
        evidence.swings / 4.9,
        evidence.alone / 20,
        50 / max(evidence.alone, 1e-6),
        evidence.length,
        0.2 / max(evidence.second, 1e-6),
        evidence.rivals / 0.15,
        0.4 / max(evidence.rivals, 1e-6),
    )


def _regularity(evidence: Evidence) -> float:
    """Even spacing and heights, weighed with how far the line stands out; few alternations must be more even."""
    many = min(max((evidence.swings - 7) / 5, 0.0), 1.0)  # 0 for up to 7 alternations, 1 for 12 and more
    uneven = math.hypot(evidence.spacing_cv / 0.3, evidence.height_cv / (0.16 + 0.26 * many), evidence.chirp)
    return min(math.sqrt(evidence.peak / 23), 0.9 + 0.7 * many) / max(uneven, 1e-6)


def measure_purity(candidate: Candidate, straight: StraightCandidate, levels: tuple[Level, ...]) -> tuple[float, float]:
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
    read = replace(straight, flat=high_pass(mean, good, straight.period), member=straight.member & good)
    filled, seen = aligned_profiles(read)
    count = seen.sum(axis=1)
    rows = np.flatnonzero(count >= max(2, 0.3 * count.max()))
    if len(rows) < 2.2 * straight.period:
        return math.inf, math.inf
    profile = (filled.sum(axis=1) / np.maximum(count, 1))[rows[0] : rows[-1] + 1]
    _, frequency, harmonics = profile_peak(profile, 1 / straight.period)
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


PURE = 0.03  # harmonics of a sinusoid: knife chatter, mains hum; layers with sharp edges have 0.06 and more
STEADY = 0.2  # rad
CLEAR_LINE, LOCKED = 5000.0, 0.9  # hum as clear (own pictures) persists to 0.99, bent layers to 0.66-0.80


def is_hum(angle_deg: float, harmonics: float, period_px: float, levels: tuple[Level, ...]) -> bool:
    """Whether this is a weak sinusoid locked to the scan lines: straight, along the rows, and pure.

    Mains pick-up adds one sinusoid in time, which the raster lays out as rows or slightly slanted lines over a
    picture of something else. Where the sinusoid is most of the picture it is taken for what the specimen shows.
    """
    from scipy.ndimage import gaussian_filter, uniform_filter

    if harmonics > 0.2 * PURE or abs(angle_deg - 90) > 4:
        return False
    level = next((each for each in levels if each.intensity.size <= 2**21), levels[-1])
    period = period_px / level.factor
    image = level.intensity - uniform_filter(level.intensity, max(round(period), 3) | 1, mode="nearest")
    fit = refine_outwards(image, np.ones(image.shape, dtype=bool), angle_deg=angle_deg, period=period)
    if fit.wave_px > 0.08 * period + 2 * fit.u_wave_px:
        return False
    seen = fit.count > 0.3 * fit.count.max()
    depth = np.arange(len(fit.profile))[seen] * fit.step_px
    window = np.hanning(len(depth))
    trial = np.linspace(0.9, 1.1, 41) / period
    profile = (fit.profile[seen] - fit.profile[seen].mean()) * window
    amplitude = 2 * np.abs(np.exp(-2j * np.pi * trial[:, None] * depth) @ profile).max() / window.sum()
    texture = float(gaussian_filter(level.intensity, 0.5 * period).var())  # of something else, coarser than the lines
    share = 0.4
    if period < 8:  # lines this fine show no harmonics, layers or not: only what lies exactly along the rows is suspect
        share = 0.25 if abs(angle_deg - 90) < 1 else 0.0
    return float(amplitude**2 / 2) < max(share * float(level.intensity.var()), texture)
