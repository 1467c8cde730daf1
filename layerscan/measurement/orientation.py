"""Direction of the layer normal: local, from the spectra of small tiles; global, by least squares on the picture."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache
from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from layerscan.measurement.pyramid import Level
    from layerscan.records import BoolArray, FloatArray, IntArray

TILE_PX = 64  # side of a tile on its level; the Hann window leaves about half of it
HIGHEST = 0.3


@dataclass(frozen=True, kw_only=True, eq=False)
class Tiles:
    """What the spectra of overlapping tiles say. Arrays are (tile rows, tile columns); places are level pixels."""

    row: FloatArray
    column: FloatArray
    angle_deg: FloatArray  # direction of the normal, 0 <= angle < 180
    frequency: FloatArray  # cycles per level pixel
    contrast: FloatArray  # energy of the strongest line over what the same frequency holds in other directions
    coherence: FloatArray  # 0 to 1, anisotropy of the energy in the band
    second: FloatArray  # energy of the strongest line in another direction, over that of the strongest
    amplitude: FloatArray  # of the strongest line, in the picture's grey levels (about half of peak to mean)
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

    def steps(self) -> FloatArray:
        """First row, row step, first column, column step."""
        row = float(self.row[1] - self.row[0]) if len(self.row) > 1 else 1.0
        column = float(self.column[1] - self.column[0]) if len(self.column) > 1 else 1.0
        return np.array([float(self.row[0]), row, float(self.column[0]), column])


@lru_cache(maxsize=8)
def _tile_grid(rows: int, columns: int, lowest: float) -> dict[str, NDArray[Any]]:
    """Window, frequencies and the half plane of the band for one tile shape."""
    window = np.outer(np.hanning(rows + 2)[1:-1], np.hanning(columns + 2)[1:-1])
    kept = int(HIGHEST * columns) + 2  # columns of the half plane that the band and its neighbours need
    ky = np.fft.fftfreq(rows)[:, None] + np.zeros((1, kept))
    kx = np.arange(kept)[None, :] / columns + np.zeros((rows, 1))
    k = np.hypot(kx, ky)
    half = (kx > 0) | (ky > 0)
    cycles = np.hypot(ky * rows, kx * columns)  # in the tile, along the wave's own direction
    band = np.flatnonzero(half & (cycles >= lowest) & (k <= HIGHEST))
    return {
        "window": window.astype(np.float32),
        "band": band,
        "kx": kx.ravel()[band],
        "ky": ky.ravel()[band],
    }


def analyse_tiles(level: Level, *, hop: int | None = None, tile: int = TILE_PX, lowest: float = 3.2) -> Tiles:
    """Find the strongest line of each tile's power spectrum, its direction, and how alone it stands.

    Parameters
    ----------
    level : Level
    hop : int, optional
        Distance between tiles in level pixels; half a tile unless the picture is large.
    tile : int
        Side of a tile, cut down to the picture where that is smaller.
    lowest : float
        Fewest periods that a tile must hold.

    Returns
    -------
    Tiles

    Notes
    -----
    The spectrum is weighted by |k| before the strongest line is chosen, since the background of real pictures is red.
    ``contrast`` compares the 3 x 3 bins of the line with the mean of the ring of the same |k| (within a third) more
    than 35 degrees away: random texture, foams and spinodal patterns fill the ring, lattices put further lines on it.
    The direction is the principal axis of the energy near the line (Bigun and Granlund 1987, restricted to a band).
    It cannot see layers fewer than ``lowest`` to a tile: those are found on a coarser level.
    """
    from scipy import fft

    image = level.intensity
    size = (min(tile, image.shape[0]), min(tile, image.shape[1]))
    rows, columns = _starts(image.shape[0], size[0], hop), _starts(image.shape[1], size[1], hop)
    grid = _tile_grid(*size, lowest)
    view = np.lib.stride_tricks.sliding_window_view(image, size)
    shape = (len(rows), len(columns))
    lines = np.zeros((*shape, 6))
    window = grid["window"]
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
        spectrum = fft.rfft2(block)[..., : int(HIGHEST * size[1]) + 2]
        power = spectrum.real**2 + spectrum.imag**2
        result = _strongest_line(power.reshape(-1, *power.shape[2:]), grid)
        result[seen.ravel() < 0.6, 2] = 0.0
        lines[first : first + chunk] = result.reshape(*block.shape[:2], 6)
    step = (
        float(rows[1] - rows[0]) if len(rows) > 1 else float(size[0]),
        float(columns[1] - columns[0]) if len(columns) > 1 else float(size[1]),
    )
    return Tiles(
        row=np.asarray(rows) + (size[0] - 1) / 2,
        column=np.asarray(columns) + (size[1] - 1) / 2,
        angle_deg=np.degrees(lines[..., 0]) % 180,
        frequency=lines[..., 1],
        contrast=lines[..., 2],
        coherence=lines[..., 3],
        second=lines[..., 4],
        amplitude=np.sqrt(lines[..., 5]) / grid["window"].sum(),
        hop=step,
    )


def _starts(length: int, tile: int, hop: int | None) -> IntArray:
    """First pixel of each tile, evenly spaced from edge to edge."""
    count = 1 + math.ceil((length - tile) / (hop or tile // 2))
    return np.rint(np.linspace(0, length - tile, count)).astype(np.int64)


def _strongest_line(power: NDArray[np.float32], grid: dict[str, NDArray[Any]]) -> FloatArray:
    """Angle [rad], frequency, contrast, coherence, second line over first, energy of spectra (tiles, rows, columns)."""
    from layerscan.measurement.orientation_kernels import scan_lines

    near = power.copy()  # 3 x 3 sums; what lies left of the half plane is its mirror image
    near[:, 1:-1] += power[:, :-2] + power[:, 2:]
    near[:, 0] += power[:, 1] + power[:, -1]
    near[:, -1] += power[:, -2] + power[:, 0]
    tall = near.copy()
    near[:, :, 1:] += tall[:, :, :-1]
    near[:, :, :-1] += tall[:, :, 1:]
    near[:, 0, 0] += tall[:, 0, 1]
    near[:, 1:, 0] += tall[:, :0:-1, 1]
    out = np.empty((len(power), 6))
    flat = (len(power), -1)
    scan_lines(power.reshape(flat), near.reshape(flat), grid["band"], grid["ky"], grid["kx"], out)
    return out


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
    """Curvilinear grid of level pixels: axis 0 along the normal in steps of one, axis 1 along the layers in ``stride``.

    ``origin`` is the index of the seed.
    """

    row: FloatArray
    column: FloatArray
    stride: int
    origin: tuple[int, int]


def trace_grid(
    field: OrientationMap, shape: tuple[int, int], *, seed: tuple[float, float], stride: int = 4
) -> StreamGrid:
    """Follow the normal from a seed, then the layers from every point of that line, to the edges of the frame.

    Parameters
    ----------
    field : OrientationMap
    shape : (rows, columns) of the level
    seed : (row, column)
    stride : int
        Step along the layers in level pixels.
    """
    count = math.ceil(math.hypot(*shape) / stride)
    spine_r, spine_c, middle = _both_ways(
        field, shape, np.array([seed[0]]), np.array([seed[1]]), 1.0, count * stride, True
    )
    keep = _within(spine_r[0], spine_c[0], shape)
    low, high = _run_around(keep, middle)
    line_r, line_c = spine_r[0, low : high + 1], spine_c[0, low : high + 1]
    r, c, centre = _both_ways(field, shape, line_r, line_c, float(stride), count, False)
    used = np.flatnonzero(_within(r, c, shape).any(axis=0))
    first, last = (int(used[0]), int(used[-1])) if len(used) else (centre, centre)
    return StreamGrid(
        row=r[:, first : last + 1],
        column=c[:, first : last + 1],
        stride=stride,
        origin=(middle - low, centre - first),
    )


def _within(row: FloatArray, column: FloatArray, shape: tuple[int, int]) -> BoolArray:
    ok: BoolArray = (row >= 0) & (row <= shape[0] - 1) & (column >= 0) & (column <= shape[1] - 1)
    return ok


def _run_around(keep: BoolArray, middle: int) -> tuple[int, int]:
    """Longest run of True that holds ``middle``."""
    low = high = middle
    while low > 0 and keep[low - 1]:
        low -= 1
    while high < len(keep) - 1 and keep[high + 1]:
        high += 1
    return low, high


def _both_ways(
    field: OrientationMap,
    shape: tuple[int, int],
    row: FloatArray,
    column: FloatArray,
    step: float,
    count: int,
    across: bool,
) -> tuple[FloatArray, FloatArray, int]:
    """Paths (points, steps) through the given points both ways, and the index of the start.

    Across the layers the path sets off along the orientation (depth grows); along them every path sets off the same way
    as its neighbour, the first one a quarter turn from the orientation.
    """
    from layerscan.measurement.orientation_kernels import _normal, follow

    grid = field.steps()
    set_off = np.array([_normal(field.cos2, field.sin2, grid, r, c) for r, c in zip(row, column, strict=True)])
    if set_off[0, 0] < 0 or (set_off[0, 0] == 0 and set_off[0, 1] < 0):
        set_off[0] *= -1
    for i in range(1, len(set_off)):
        if set_off[i] @ set_off[i - 1] < 0:
            set_off[i] *= -1
    if not across:  # a quarter turn from the normal: (row, column) -> (column, -row)
        set_off = np.column_stack([set_off[:, 1], -set_off[:, 0]])
    limits = np.array([32.0, shape[0] - 1.0, shape[1] - 1.0])
    paths = []
    for sign in (-1.0, 1.0):
        r, c = np.empty((len(row), count + 1)), np.empty((len(row), count + 1))
        first = np.ascontiguousarray(sign * set_off)
        away_r, away_c = first[:, 0].copy(), first[:, 1].copy()
        follow(field.cos2, field.sin2, grid, row, column, away_r, away_c, step, across, limits, r, c)
        paths.append((r, c))
    (back_r, back_c), (on_r, on_c) = paths
    return np.hstack([back_r[:, :0:-1], on_r]), np.hstack([back_c[:, :0:-1], on_c]), count


@dataclass(frozen=True, kw_only=True)
class Rotation:
    """Result of ``refine_orientation``: direction of the normal, its standard uncertainty, and the noise of a pixel."""

    angle_deg: float
    u_deg: float
    noise: float
    converged: bool
    wave_px: float  # rms depth by which the layers leave the straight line
    u_wave_px: float  # what noise alone would give
    origin: FloatArray  # row and column of the middle, and minus half the depth of the profile
    step_px: float
    profile: FloatArray  # mean intensity against depth, in steps of ``step_px``
    count: FloatArray  # pixels in each bin of the profile


def refine_orientation(
    image: NDArray[np.float32],
    use: BoolArray,
    *,
    angle_deg: float,
    step_px: float = 0.5,
    blur_px: float = 0.7,
    rounds: int = 5,
) -> Rotation:
    """Fit one direction to flat layers by least squares on all pixels, with a free profile across the layers.

    Parameters
    ----------
    image : (rows, columns) float32 array
    use : (rows, columns) bool array
        Pixels that take part.
    angle_deg : float
        Start, from the +column axis towards the +row axis; within about a third of period / lateral extent [rad].
    step_px : float
        Bin of the profile.
    blur_px : float
        Smoothing of the profile's slope against noise, well below the period.
    rounds : int
        Gauss-Newton steps at most.

    Returns
    -------
    Rotation
        Converged when the last step was below the uncertainty; it ends early at half of that.

    Notes
    -----
    With f the profile of the depth d and s the lateral place, a small turn changes d by s: Gauss-Newton on
    sum (I - f(d + s dtheta))^2. Every harmonic and every disorder of the stack is in f, so for white noise the result
    is at the Cramer-Rao bound sigma^2 / sum (f' s)^2 with f known, but for what f costs. It cannot see waviness: for
    wavy layers the answer is the straight line that fits best.
    """
    from layerscan.measurement.orientation_kernels import lateral_shifts, rotation_normal_equations

    rows, columns = np.nonzero(use.any(axis=1))[0], np.nonzero(use.any(axis=0))[0]
    middle = (0.5 * (rows[0] + rows[-1]), 0.5 * (columns[0] + columns[-1]))
    reach = math.hypot(rows[-1] - rows[0], columns[-1] - columns[0]) / 2 + 2
    origin = np.array([middle[0], middle[1], -reach])
    count = math.ceil(2 * reach / step_px) + 2
    theta = math.radians(angle_deg)
    u, noise, converged = math.inf, math.inf, False
    for _ in range(rounds):
        profile, slope, number = _profile_across(image, use, theta, origin, step_px, blur_px, count)
        a, b, e, n = rotation_normal_equations(
            image, use, math.cos(theta), math.sin(theta), origin, step_px, profile, slope
        )
        if a <= 0 or n < 10:
            break
        change = b / a
        noise = math.sqrt(e / n)
        u = noise / math.sqrt(a)
        theta += max(-0.05, min(0.05, change))
        converged = abs(change) < u
        if abs(change) < 0.5 * u:  # the step after this one would be far smaller still
            break
    profile, slope, number = _profile_across(image, use, theta, origin, step_px, blur_px, count)
    lateral = np.array([-reach, max(2 * reach / 24, 2.0)])
    weight, moment = np.zeros(25), np.zeros(25)
    lateral_shifts(
        image, use, math.cos(theta), math.sin(theta), origin, step_px, profile, slope, lateral, weight, moment
    )
    seen = weight > 0.2 * weight.max()
    shift, share = moment[seen] / np.maximum(weight[seen], 1e-30), weight[seen] / max(float(weight[seen].sum()), 1e-30)
    wave = math.sqrt(float(np.sum(share * (shift - np.sum(share * shift)) ** 2))) if seen.any() else math.inf
    u_wave = noise * math.sqrt(float(np.sum(share / np.maximum(weight[seen], 1e-30)))) if seen.any() else math.inf
    return Rotation(
        angle_deg=math.degrees(theta) % 180, u_deg=math.degrees(u), noise=noise, converged=converged, wave_px=wave,
        u_wave_px=u_wave, origin=origin, step_px=step_px, profile=profile, count=number,
    )  # fmt: skip


def _profile_across(
    image: NDArray[np.float32],
    use: BoolArray,
    theta: float,
    origin: FloatArray,
    step_px: float,
    blur_px: float,
    count: int,
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Mean intensity against depth for a direction, a little smoothed, its slope, and the pixels in each bin."""
    from scipy.ndimage import gaussian_filter1d

    from layerscan.measurement.orientation_kernels import bin_profile

    total, number = np.zeros(count), np.zeros(count)
    bin_profile(image, use, math.cos(theta), math.sin(theta), origin, step_px, total, number)
    known = number > 0
    profile = np.interp(np.arange(count), np.flatnonzero(known), total[known] / number[known])
    slope = gaussian_filter1d(profile, blur_px / step_px, order=1) / step_px
    return gaussian_filter1d(profile, 0.5 * blur_px / step_px), slope, number
