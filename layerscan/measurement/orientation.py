"""Direction of the layer normal: local, from the spectra of small tiles; global, by least squares on the picture."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from layerscan.measurement.pyramid import Level
    from layerscan.records import BoolArray, FloatArray, IntArray

TILE_PX = 64  # side of a tile on its level; the Hann window leaves about half of it
LOWEST = 3.2 / TILE_PX  # cycles per pixel: at least three periods in a tile
HIGHEST = 0.34


@dataclass(frozen=True, kw_only=True, eq=False)
class Tiles:
    """What the spectra of overlapping tiles say. Arrays are (tile rows, tile columns); places are level pixels."""

    row: FloatArray
    column: FloatArray
    angle_deg: FloatArray  # direction of the normal, 0 <= angle < 180
    frequency: FloatArray  # cycles per level pixel
    contrast: FloatArray  # energy of the strongest line over what the same frequency holds in other directions
    coherence: FloatArray  # 0 to 1, anisotropy of the energy in the band
    hop: tuple[float, float]


@dataclass(frozen=True, kw_only=True, eq=False)
class OrientationMap:
    """Direction of the normal on a coarse grid, as a double-angle vector; bilinear in between.

    ``cos2`` and ``sin2`` are (rows, columns); grid point (i, j) lies at ``row[i]``, ``column[j]``.
    """

    row: FloatArray
    column: FloatArray
    cos2: FloatArray
    sin2: FloatArray

    def at(self, row: FloatArray, column: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Unit normal (row part, column part) at points; its sign is arbitrary."""
        i = np.clip((row - self.row[0]) / self._step(self.row), 0, len(self.row) - 1)
        j = np.clip((column - self.column[0]) / self._step(self.column), 0, len(self.column) - 1)
        i0 = np.minimum(i.astype(np.int64), max(len(self.row) - 2, 0))
        j0 = np.minimum(j.astype(np.int64), max(len(self.column) - 2, 0))
        i1, j1 = np.minimum(i0 + 1, len(self.row) - 1), np.minimum(j0 + 1, len(self.column) - 1)
        u, v = i - i0, j - j0
        w00, w01, w10, w11 = (1 - u) * (1 - v), (1 - u) * v, u * (1 - v), u * v
        c = w00 * self.cos2[i0, j0] + w01 * self.cos2[i0, j1] + w10 * self.cos2[i1, j0] + w11 * self.cos2[i1, j1]
        s = w00 * self.sin2[i0, j0] + w01 * self.sin2[i0, j1] + w10 * self.sin2[i1, j0] + w11 * self.sin2[i1, j1]
        half = 0.5 * np.arctan2(s, c)
        return np.sin(half), np.cos(half)

    @staticmethod
    def _step(grid: FloatArray) -> float:
        return float(grid[1] - grid[0]) if len(grid) > 1 else 1.0


@lru_cache(maxsize=8)
def _tile_grid(rows: int, columns: int) -> dict[str, NDArray[np.float64]]:
    """Window, frequencies and the half plane of the band for one tile shape."""
    window = np.outer(np.hanning(rows + 2)[1:-1], np.hanning(columns + 2)[1:-1])
    ky = np.fft.fftfreq(rows)[:, None] + np.zeros((1, columns))
    kx = np.fft.fftfreq(columns)[None, :] + np.zeros((rows, 1))
    k = np.hypot(kx, ky)
    half = (kx > 0) | ((kx == 0) & (ky > 0))
    lowest = 3.2 / min(rows, columns)
    band = np.flatnonzero(half & (k >= lowest) & (k <= HIGHEST))
    angle = np.arctan2(ky, kx).ravel()[band]
    return {
        "window": window,
        "band": band,
        "k": k.ravel()[band],
        "angle": angle,
        "kx": kx.ravel()[band],
        "ky": ky.ravel()[band],
        "ratio": k.ravel()[band][None, :] / k.ravel()[band][:, None],
        "cos2d": np.cos(2 * (angle[None, :] - angle[:, None])),
    }


def analyse_tiles(level: Level, *, hop: int | None = None, tile: int = TILE_PX) -> Tiles:
    """Find the strongest line of each tile's power spectrum, its direction, and how alone it stands.

    Parameters
    ----------
    level : Level
    hop : int, optional
        Distance between tiles in level pixels; half a tile unless the picture is large.
    tile : int
        Side of a tile, cut down to the picture where that is smaller.

    Returns
    -------
    Tiles

    Notes
    -----
    The spectrum is weighted by k^2 before the strongest line is chosen, since the background of real pictures is red.
    ``contrast`` compares the 3 x 3 bins of the line with the mean of the ring of the same |k| (within a third) more than
    35 degrees away: random texture, foams and spinodal patterns fill the ring, lattices put further lines on it.
    The direction is the principal axis of the energy near the line (Bigun and Granlund 1987, restricted to a band).
    It cannot see layers fewer than three to a tile: those are found on a coarser level.
    """
    from scipy import fft

    image = level.intensity
    size = (min(tile, image.shape[0]), min(tile, image.shape[1]))
    rows, columns = _starts(image.shape[0], size[0], hop), _starts(image.shape[1], size[1], hop)
    grid = _tile_grid(*size)
    view = np.lib.stride_tricks.sliding_window_view(image, size)
    shape = (len(rows), len(columns))
    angle, frequency, contrast, coherence = (np.zeros(shape) for _ in range(4))
    window = grid["window"].astype(np.float32)
    chunk = max(1, 1024 // len(columns))
    for first in range(0, len(rows), chunk):
        some = rows[first : first + chunk]
        block = view[np.ix_(some, columns)].astype(np.float32)
        block -= block.mean(axis=(2, 3), keepdims=True)
        if level.valid is not None:
            seen = np.lib.stride_tricks.sliding_window_view(level.valid, size)[np.ix_(some, columns)].mean(axis=(2, 3))
        else:
            seen = np.ones(block.shape[:2])
        block *= window
        power = np.abs(fft.fft2(block)) ** 2
        result = _strongest_line(power.reshape(-1, *size), grid)
        for target, value in zip((angle, frequency, contrast, coherence), result, strict=True):
            target[first : first + chunk] = value.reshape(block.shape[:2])
        contrast[first : first + chunk][seen < 0.6] = 0.0
    step = (
        float(rows[1] - rows[0]) if len(rows) > 1 else float(size[0]),
        float(columns[1] - columns[0]) if len(columns) > 1 else float(size[1]),
    )
    return Tiles(
        row=np.asarray(rows) + (size[0] - 1) / 2,
        column=np.asarray(columns) + (size[1] - 1) / 2,
        angle_deg=np.degrees(angle) % 180,
        frequency=frequency,
        contrast=contrast,
        coherence=coherence,
        hop=step,
    )


def _starts(length: int, tile: int, hop: int | None) -> IntArray:
    """First pixel of each tile, evenly spaced from edge to edge."""
    count = 1 + math.ceil((length - tile) / (hop or tile // 2))
    return np.rint(np.linspace(0, length - tile, count)).astype(np.int64)


def _strongest_line(
    power: NDArray[np.float32], grid: dict[str, NDArray[np.float64]]
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Angle [rad], frequency, contrast and coherence for a stack of power spectra (tiles, rows, columns)."""
    count, rows, columns = power.shape
    near = power + np.roll(power, 1, 1) + np.roll(power, -1, 1)
    near = near + np.roll(near, 1, 2) + np.roll(near, -1, 2)
    band = grid["band"].astype(np.int64)
    k = grid["k"]
    energy = near.reshape(count, -1)[:, band]
    single = power.reshape(count, -1)[:, band]
    peak = np.argmax(energy * (k**2).astype(np.float32), axis=1)
    angle, frequency, contrast, coherence = (np.zeros(count) for _ in range(4))
    for i, at in enumerate(peak):
        ratio, cosine = grid["ratio"][at], grid["cos2d"][at]
        ring = (ratio > 0.75) & (ratio < 1.34) & (cosine < 0.342)
        here = (ratio > 0.6) & (ratio < 1.67) & (cosine > 0.5)
        floor = float(single[i, ring].mean()) if ring.any() else 0.0
        weight = np.maximum(single[i, here] - 2 * floor, 0)
        kx, ky = grid["kx"][here], grid["ky"][here]
        if not weight.any():
            angle[i], frequency[i] = grid["angle"][at], k[at]
        else:
            angle[i] = 0.5 * math.atan2(float((weight * 2 * kx * ky).sum()), float((weight * (kx * kx - ky * ky)).sum()))
            frequency[i] = float((weight * k[here]).sum() / weight.sum())
        contrast[i] = energy[i, at] / max(9 * floor, 1e-30)
        across = single[i, (ratio > 0.75) & (ratio < 1.34)]
        double = grid["angle"][(ratio > 0.75) & (ratio < 1.34)] * 2
        total = float(across.sum())
        coherence[i] = abs(complex(np.sum(across * np.exp(1j * double)))) / total if total > 0 else 0.0
    return angle, frequency, contrast, coherence


def smooth_map(tiles: Tiles, weight: FloatArray) -> OrientationMap:
    """Orientation map from the tiles with their weights: smoothed a little, gaps filled from their neighbours.

    Parameters
    ----------
    tiles : Tiles
    weight : (tile rows, tile columns) float array
        0 where a tile says nothing.
    """
    from scipy.ndimage import gaussian_filter

    double = np.radians(2 * tiles.angle_deg)
    c, s, w = weight * np.cos(double), weight * np.sin(double), weight.astype(float)
    top = float(w.max(initial=0.0)) or 1.0
    cos2, sin2 = np.zeros_like(c), np.zeros_like(s)
    missing = np.ones(c.shape, dtype=bool)
    for sigma in (0.6, 1.5, 4.0, 12.0, 40.0):
        total = gaussian_filter(w, sigma, mode="constant")
        good = missing & (total > 0.02 * top * min(1.0, 1 / sigma**2))
        cos2[good] = (gaussian_filter(c, sigma, mode="constant") / np.maximum(total, 1e-30))[good]
        sin2[good] = (gaussian_filter(s, sigma, mode="constant") / np.maximum(total, 1e-30))[good]
        missing &= ~good
        if not missing.any():
            break
    if missing.any():
        cos2[missing], sin2[missing] = c.sum(), s.sum()
    return OrientationMap(row=tiles.row, column=tiles.column, cos2=cos2, sin2=sin2)


@dataclass(frozen=True, kw_only=True, eq=False)
class StreamGrid:
    """Curvilinear grid: axis 0 along the normal, axis 1 along the layers; places are level pixels.

    ``inside`` is True where the point lies in the frame.
    """

    row: FloatArray
    column: FloatArray
    inside: BoolArray
    origin: tuple[int, int]  # index of the seed


def trace_grid(
    field: OrientationMap, shape: tuple[int, int], *, seed: tuple[float, float], stride: int = 4, step: float = 1.0
) -> StreamGrid:
    """Follow the normal from a seed, then the layers from every point of that line, to the edges of the frame.

    Parameters
    ----------
    field : OrientationMap
    shape : (rows, columns) of the level
    seed : (row, column)
    stride : int
        Grid steps between the points that are integrated (second-order Runge-Kutta); those between are interpolated.
    step : float
        Distance between grid points in level pixels, both ways.
    """
    reach = math.hypot(*shape)
    count = math.ceil(reach / (stride * step))
    depth_r, depth_c, middle = _follow(field, shape, np.array([seed[0]]), np.array([seed[1]]), stride * step, count, True)
    keep = _within(depth_r[:, 0], depth_c[:, 0], shape, 2 * stride * step)
    low, high = _run_around(keep, middle)
    line = np.arange((low - middle) * stride, (high - middle) * stride + 1)
    r0 = np.interp(line / stride, np.arange(low, high + 1) - middle, depth_r[low : high + 1, 0])
    c0 = np.interp(line / stride, np.arange(low, high + 1) - middle, depth_c[low : high + 1, 0])
    r, c, centre = _follow(field, shape, r0, c0, stride * step, count, False)
    seen = _within(r, c, shape, 0.0)
    used = np.flatnonzero(seen.any(axis=1))
    if len(used) == 0:
        used = np.array([centre])
    r, c = r[used[0] : used[-1] + 1], c[used[0] : used[-1] + 1]
    fine = np.arange((len(r) - 1) * stride + 1) / stride
    base = np.minimum(fine.astype(np.int64), max(len(r) - 2, 0))
    part = (fine - base)[:, None]
    after = np.minimum(base + 1, len(r) - 1)
    row = (r[base] * (1 - part) + r[after] * part).T
    column = (c[base] * (1 - part) + c[after] * part).T
    origin = (int(-line[0]), int((centre - used[0]) * stride))
    return StreamGrid(row=row, column=column, inside=_within(row, column, shape, 0.0), origin=origin)


def _within(row: FloatArray, column: FloatArray, shape: tuple[int, int], margin: float) -> BoolArray:
    ok: BoolArray = (
        (row >= -margin) & (row <= shape[0] - 1 + margin) & (column >= -margin) & (column <= shape[1] - 1 + margin)
    )
    return ok


def _run_around(keep: BoolArray, middle: int) -> tuple[int, int]:
    """Longest run of True that holds ``middle``."""
    low = high = middle
    while low > 0 and keep[low - 1]:
        low -= 1
    while high < len(keep) - 1 and keep[high + 1]:
        high += 1
    return low, high


def _follow(
    field: OrientationMap,
    shape: tuple[int, int],
    row: FloatArray,
    column: FloatArray,
    step: float,
    count: int,
    along_normal: bool,
) -> tuple[FloatArray, FloatArray, int]:
    """Integrate both ways from the given points; returns rows and columns (steps, points) and the index of the start."""
    ways_r, ways_c = [], []
    for sign in (-1.0, 1.0):
        r, c = row.copy(), column.copy()
        n_r, n_c = field.at(r, c)
        last_r, last_c = (n_r, n_c) if along_normal else (n_c, -n_r)
        if not along_normal:  # neighbouring points go the same way
            flip = np.sign(last_r * last_r[0] + last_c * last_c[0])
            flip[flip == 0] = 1
            last_r, last_c = last_r * flip, last_c * flip
        elif n_r[0] < 0 or (n_r[0] == 0 and n_c[0] < 0):  # depth grows along the orientation
            last_r, last_c = -last_r, -last_c
        last_r, last_c = sign * last_r, sign * last_c
        path_r, path_c = [r], [c]
        for _ in range(count):
            d_r, d_c = _direction(field, r, c, last_r, last_c, along_normal)
            d_r, d_c = _direction(field, r + 0.5 * step * d_r, c + 0.5 * step * d_c, d_r, d_c, along_normal)
            r, c = r + step * d_r, c + step * d_c
            last_r, last_c = d_r, d_c
            path_r.append(r)
            path_c.append(c)
            if not _within(r, c, shape, 4 * step).any():
                break
        ways_r.append(np.array(path_r))
        ways_c.append(np.array(path_c))
    back_r, back_c = ways_r[0][:0:-1], ways_c[0][:0:-1]
    return np.concatenate([back_r, ways_r[1]]), np.concatenate([back_c, ways_c[1]]), len(back_r)


def _direction(
    field: OrientationMap, r: FloatArray, c: FloatArray, last_r: FloatArray, last_c: FloatArray, along_normal: bool
) -> tuple[FloatArray, FloatArray]:
    n_r, n_c = field.at(r, c)
    d_r, d_c = (n_r, n_c) if along_normal else (n_c, -n_r)
    flip = np.where(d_r * last_r + d_c * last_c < 0, -1.0, 1.0)
    return d_r * flip, d_c * flip
