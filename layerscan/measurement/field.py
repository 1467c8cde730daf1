"""The straightened field: a curvilinear grid whose depth runs along the layer normal and whose stations follow layers.

Two steps. A ``Frame`` (straight, or circular arcs about a centre that may lie inside the picture) is fitted to the
local orientation map; then the columns are aligned by correlation with an evolving mean profile, so that the layers of
a wavy stack become straight. Coordinates are pixels of a square grid, called (row, column) as everywhere.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numba import njit

from layerscan.errors import MeasurementError

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from layerscan.records import FloatArray

    Image = NDArray[np.float32]


@dataclass(frozen=True, kw_only=True)
class Frame:
    """Coordinates along (station) and across (depth) straight or circular layers.

    The base curve passes through (row, column); there depth grows along (cos, sin)(angle_rad) = (+column, +row).
    ``curvature`` is that of the base curve [1/px]; its centre lies at depth 1/curvature.
    """

    row: float
    column: float
    angle_rad: float
    curvature: float

    def vector(self) -> FloatArray:
        """The four numbers in the order that the kernels take."""
        return np.array([self.row, self.column, self.angle_rad, self.curvature])

    def to_frame(self, row: FloatArray, column: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Depth and station of points of the picture."""
        cos, sin, k = math.cos(self.angle_rad), math.sin(self.angle_rad), self.curvature
        along_n = (column - self.column) * cos + (row - self.row) * sin
        along_t = (row - self.row) * cos - (column - self.column) * sin
        if k == 0:
            return along_n, along_t
        to_centre_n, to_centre_t = 1 / k - along_n, -along_t
        radius = np.hypot(to_centre_n, to_centre_t)
        sign = math.copysign(1.0, k)
        turn: FloatArray = np.arctan2(-sign * to_centre_t, sign * to_centre_n) / k
        return 1 / k - sign * radius, turn

    def extent(self, region: tuple[int, int, int, int]) -> tuple[float, float, float, float]:
        """Smallest and largest depth and station inside a region of the picture."""
        rows, columns = np.meshgrid(
            np.linspace(region[0], region[2] - 1, 65), np.linspace(region[1], region[3] - 1, 65), indexing="ij"
        )
        depth, station = self.to_frame(rows, columns)
        return float(depth.min()), float(depth.max()), float(station.min()), float(station.max())


@dataclass(frozen=True, kw_only=True, eq=False)
class StraightField:
    """Intensity on the curvilinear grid in pixels: depth is axis 0, station axis 1; NaN outside the picture.

    ``shift`` (nodes, stations) moves each sample along the depth axis of the frame; its nodes lie every ``node_step``
    samples from ``node_start``.
    """

    frame: Frame
    intensity: NDArray[np.float32]
    depth_start: float
    station_start: float
    station_step: float
    shift: FloatArray
    node_start: float
    node_step: float

    def frame_depth(self, depth: FloatArray, station: NDArray[np.int64]) -> FloatArray:
        """Depth in the frame of aligned depths [samples] at station numbers, the shift included."""
        at = np.clip((depth - self.node_start) / self.node_step, 0, max(len(self.shift) - 1, 0))
        low = np.minimum(at.astype(np.int64), max(len(self.shift) - 2, 0))
        high = np.minimum(low + 1, len(self.shift) - 1)
        part = at - low
        moved: FloatArray = self.shift[low, station] * (1 - part) + self.shift[high, station] * part
        return self.depth_start + moved + depth

    def to_picture(self, depth: FloatArray, station: NDArray[np.int64]) -> tuple[FloatArray, FloatArray]:
        """Row and column of aligned depths [samples] at station numbers (broadcast together)."""
        along = self.frame_depth(depth, station)
        place: FloatArray = self.station_start + self.station_step * station.astype(np.float64)
        return frame_to_picture(self.frame, along, place)


def frame_to_picture(frame: Frame, depth: FloatArray, station: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Row and column of points given by depth and station."""
    cos, sin, k = math.cos(frame.angle_rad), math.sin(frame.angle_rad), frame.curvature
    turn = k * station
    along_t = station * np.sinc(turn / math.pi) - depth * np.sin(turn)
    along_n = station * np.sinc(turn / (2 * math.pi)) * np.sin(turn / 2) + depth * np.cos(turn)
    return frame.row + along_n * sin + along_t * cos, frame.column + along_n * cos - along_t * sin


# --- the frame ------------------------------------------------------------------------------------------------------


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def _misfit(angle, weight, row, column, normal, k):  # type: ignore[no-untyped-def]
    """Weighted mean of sin^2 between the map and the frame's normals; row, column relative to the base point."""
    cos, sin = math.cos(normal), math.sin(normal)
    total = 0.0
    norm = 0.0
    for i in range(angle.size):
        v_column = cos - k * column[i]
        v_row = sin - k * row[i]
        square = v_column * v_column + v_row * v_row
        cross = math.cos(angle[i]) * v_row - math.sin(angle[i]) * v_column
        norm += weight[i]
        if square > 1e-12:
            total += weight[i] * cross * cross / square
        else:
            total += 0.5 * weight[i]
    return total / norm


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def _search_frame(angle, weight, row, column, k_max):  # type: ignore[no-untyped-def]
    """Best straight and best circular frame: (misfit, normal, curvature) of each, grid search and refinement."""
    best = np.empty((2, 3))
    for kind in range(2):
        steps = 0 if kind == 0 else 24
        low = 1e9
        normal, k = 0.0, 0.0
        for i in range(-steps, steps + 1):
            trial_k = 0.0 if steps == 0 else k_max * (i / steps) * abs(i / steps)
            for j in range(24):
                trial = math.pi * j / 24
                value = _misfit(angle, weight, row, column, trial, trial_k)
                if value < low:
                    low, normal, k = value, trial, trial_k
        step_normal, step_k = math.pi / 48, k_max / 24
        while step_normal > 1e-6:
            moved = False
            for direction in range(4 if kind else 2):
                trial = normal + step_normal * (1 - 2 * (direction % 2)) * (direction < 2)
                trial_k = k + step_k * (1 - 2 * (direction % 2)) * (direction >= 2)
                value = _misfit(angle, weight, row, column, trial, trial_k)
                if value < low:
                    low, normal, k, moved = value, trial, trial_k, True
            if not moved:
                step_normal *= 0.5
                step_k *= 0.5
        best[kind, 0], best[kind, 1], best[kind, 2] = low, normal, k
    return best


def fit_frame(*, angle_rad: FloatArray, weight: FloatArray, row: FloatArray, column: FloatArray, size: float) -> Frame:
    """Fit straight or circular layers to a map of local normals.

    Parameters
    ----------
    angle_rad, weight, row, column : (N,) float arrays
        Direction of the local normal (modulo pi), its weight, and where it was taken [px].
    size : float
        Larger side of the picture [px]; curvatures up to 8/size are tried, so the centre may lie inside.

    Returns
    -------
    Frame
        Circular only where that lowers the weighted misfit clearly and turns the normal by more than half a degree.

    Notes
    -----
    Minimises the weighted mean of sin^2 of the angle between map and model; the model's normal at X is
    N - k (X - P), which is free of the singularity at k = 0.
    """
    if not len(angle_rad) or not np.isfinite(weight).all() or weight.sum() <= 0:
        raise MeasurementError("No local orientation could be found in the image. Choose a region that shows layers.")
    p_row, p_column = float(np.average(row, weights=weight)), float(np.average(column, weights=weight))
    p_row, p_column = float(round(p_row)), float(round(p_column))
    straight, circular = _search_frame(
        angle_rad.astype(np.float64), weight.astype(np.float64), row - p_row, column - p_column, 8.0 / size
    )
    turn = abs(circular[2]) * size
    chosen = circular if turn > 0.01 and circular[0] < 0.8 * straight[0] - 1e-7 else straight
    normal = chosen[1] % (2 * math.pi)
    k = float(chosen[2])
    if normal >= math.pi:
        normal, k = normal - math.pi, -k
    return Frame(row=p_row, column=p_column, angle_rad=normal, curvature=k)


# --- sampling -------------------------------------------------------------------------------------------------------


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def interpolate(image, row, column):  # type: ignore[no-untyped-def]
    """Cubic convolution (Keys 1981, a = -1/2), bilinear at the frame and beside holes, NaN outside the picture."""
    rows, columns = image.shape
    if not (-0.001 <= row <= rows - 0.999 and -0.001 <= column <= columns - 0.999):
        return np.nan
    r, c = math.floor(row + 1e-9), math.floor(column + 1e-9)
    if r < 0:
        r = 0
    if c < 0:
        c = 0
    y, x = row - r, column - c
    if abs(y) < 1e-6 and abs(x) < 1e-6:
        return float(image[r, c])
    if 1 <= r < rows - 2 and 1 <= c < columns - 2:
        y2, x2 = y * y, x * x
        wx0 = x * (-0.5 + x - 0.5 * x2)
        wx1 = 1 + x2 * (-2.5 + 1.5 * x)
        wx2 = x * (0.5 + 2 * x - 1.5 * x2)
        wx3 = 0.5 * x2 * (x - 1)
        total = 0.0
        for i in range(4):
            if i == 0:
                wy = y * (-0.5 + y - 0.5 * y2)
            elif i == 1:
                wy = 1 + y2 * (-2.5 + 1.5 * y)
            elif i == 2:
                wy = y * (0.5 + 2 * y - 1.5 * y2)
            else:
                wy = 0.5 * y2 * (y - 1)
            line = r - 1 + i
            total += wy * (
                wx0 * image[line, c - 1] + wx1 * image[line, c] + wx2 * image[line, c + 1] + wx3 * image[line, c + 2]
            )
        if total == total:
            return total
    r1 = r + 1 if r + 1 < rows else r
    c1 = c + 1 if c + 1 < columns else c
    return (1 - y) * ((1 - x) * image[r, c] + x * image[r, c1]) + y * ((1 - x) * image[r1, c] + x * image[r1, c1])


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def sample_field(  # type: ignore[no-untyped-def]
    image, frame, depth_start, step, count, station_start, station_step, inner, shift, node_start, node_step
):
    """Sample the picture on the grid; each station is the mean of ``inner`` lines spread over its width."""
    stations = shift.shape[1]
    nodes = shift.shape[0]
    out = np.empty((count, stations), np.float32)
    total = np.empty(count)
    number = np.empty(count)
    column = np.empty(nodes)
    row0, column0, normal, k = frame[0], frame[1], frame[2], frame[3]
    n_column, n_row = math.cos(normal), math.sin(normal)
    for j in range(stations):
        total[:] = 0.0
        number[:] = 0.0
        for i in range(inner):
            offset = (i + 0.5) / inner - 0.5
            s = station_start + station_step * (j + offset)
            other = j + 1 if offset > 0 else j - 1
            other = min(max(other, 0), stations - 1)
            for z in range(nodes):
                column[z] = shift[z, j] + abs(offset) * (shift[z, other] - shift[z, j])
            turn = k * s
            c, q = math.cos(turn), math.sin(turn)
            base_t = s if abs(turn) < 1e-9 else q / k
            base_n = 0.5 * k * s * s if abs(turn) < 1e-4 else (1 - c) / k
            for d in range(count):
                at = (d - node_start) / node_step
                if at <= 0 or nodes == 1:
                    moved = column[0]
                elif at >= nodes - 1:
                    moved = column[nodes - 1]
                else:
                    z = int(at)
                    moved = column[z] + (at - z) * (column[z + 1] - column[z])
                depth = depth_start + step * d + moved
                if k * depth > 0.98:
                    continue
                along_n = base_n + depth * c
                along_t = base_t - depth * q
                value = interpolate(
                    image, row0 + along_n * n_row + along_t * n_column, column0 + along_n * n_column - along_t * n_row
                )
                if value == value:
                    total[d] += value
                    number[d] += 1
        for d in range(count):
            out[d, j] = total[d] / number[d] if number[d] > 0 else np.nan
    return out


# --- alignment ------------------------------------------------------------------------------------------------------


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def _best_shift(template, field, j, centre, half, start, reach, score):  # type: ignore[no-untyped-def]
    """Shift of column j against the template in a window: normalised correlation, parabola through its peak."""
    count = template.size
    base = math.floor(start + 0.5)
    low, high = max(centre - half, 0), min(centre + half + 1, count)
    best, where = -2.0, 0
    for q in range(-reach, reach + 1):
        n, st, sf, stt, sff, stf = 0, 0.0, 0.0, 0.0, 0.0, 0.0
        for d in range(low, high):
            e = d + base + q
            if e < 0 or e >= count:
                continue
            t, f = template[d], field[e, j]
            if t == t and f == f:
                n += 1
                st += t
                sf += f
                stt += t * t
                sff += f * f
                stf += t * f
        value = -1.0
        if n >= max(6, (high - low) // 3):
            a, b = stt - st * st / n, sff - sf * sf / n
            if a > 0 and b > 0:
                value = (stf - st * sf / n) / math.sqrt(a * b)
        score[q + reach] = value
        if value > best:
            best, where = value, q
    moved = float(where)
    if -reach < where < reach:
        left, mid, right = score[where + reach - 1], score[where + reach], score[where + reach + 1]
        bend = left - 2 * mid + right
        if left > -1 and right > -1 and bend < 0:
            moved += 0.5 * (left - right) / bend
    return base + moved, best


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def track_columns(field, first, nodes, node_step, node_start, half, reach, memory):  # type: ignore[no-untyped-def]
    """Follow the layers from the first column outwards: shift (nodes, columns) against an evolving mean profile."""
    count, columns = field.shape
    shift = np.zeros((nodes, columns))
    quality = np.zeros((nodes, columns))
    score = np.empty(2 * reach + 1)
    found = np.empty(nodes)
    sure = np.empty(nodes)
    for side in range(2):
        template = field[:, first].astype(np.float64)
        now = np.zeros(nodes)
        speed = np.zeros(nodes)
        j = first
        seen = 1
        while True:
            j += 1 if side == 0 else -1
            if j < 0 or j >= columns:
                break
            for z in range(nodes):
                expected = now[z] + speed[z]
                centre = int(node_start + z * node_step)
                at, value = _best_shift(template, field, j, centre, half, expected, reach, score)
                found[z] = at - expected
                sure[z] = max(value, 0.0) ** 2 if value > 0.1 else 0.0
                quality[z, j] = value
            for z in range(nodes):
                if quality[z, j] <= -1.0:
                    continue
                weight, total = 1e-3, 0.0
                for y in range(max(z - 1, 0), min(z + 2, nodes)):
                    part = sure[y] * (1.0 if y == z else 0.5)
                    weight += part
                    total += part * found[y]
                step = total / weight
                trust = weight / (weight + 0.15)
                step = min(max(step, -1.5), 1.5) * trust
                now[z] += speed[z] + 0.5 * step
                speed[z] = 0.98 * speed[z] + 0.12 * step
            for z in range(nodes):  # a node outside the picture goes with the nearest one inside
                if quality[z, j] > -1.0:
                    continue
                for away in range(1, nodes):
                    low, high = z - away, z + away
                    near = low if low >= 0 and quality[low, j] > -1.0 else high
                    if 0 <= near < nodes and quality[near, j] > -1.0:
                        now[z], speed[z] = now[near], speed[near]
                        break
            shift[:, j] = now
            seen += 1
            rate = 1.0 / min(seen, memory)
            for d in range(count):
                at = (d - node_start) / node_step
                z = min(max(int(at), 0), max(nodes - 2, 0))
                part = min(max(at - z, 0.0), 1.0)
                y = min(z + 1, nodes - 1)
                e = d + now[z] * (1 - part) + now[y] * part
                low = math.floor(e)
                if 0 <= low < count - 1:
                    value = field[low, j] * (1 - (e - low)) + field[low + 1, j] * (e - low)
                    if value == value:
                        template[d] = (
                            template[d] + rate * (value - template[d]) if template[d] == template[d] else value
                        )
    return shift, quality


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def hold_unseen(field, shift, node_start, node_step, half):  # type: ignore[no-untyped-def]
    """Shift in which nodes whose window lies mostly outside the picture go with the nearest one inside."""
    count, columns = field.shape
    nodes = shift.shape[0]
    out = shift.copy()
    seen = np.zeros(nodes, np.bool_)
    for j in range(columns):
        for z in range(nodes):
            centre = int(node_start + z * node_step + shift[z, j])
            low, high = max(centre - half, 0), min(centre + half + 1, count)
            n = 0
            for d in range(low, high):
                if field[d, j] == field[d, j]:
                    n += 1
            seen[z] = n >= max(6, (2 * half + 1) // 2)
        for z in range(nodes):
            if seen[z]:
                continue
            for away in range(1, nodes):
                low, high = z - away, z + away
                near = low if low >= 0 and seen[low] else high
                if 0 <= near < nodes and seen[near]:
                    out[z, j] = shift[near, j]
                    break
    return out


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def aligned_mean(field, shift, node_start, node_step):  # type: ignore[no-untyped-def]
    """Mean profile of a field after its shift (linear interpolation), NaN where no column reaches."""
    count, columns = field.shape
    nodes = shift.shape[0]
    total = np.zeros(count)
    number = np.zeros(count)
    for d in range(count):
        at = (d - node_start) / node_step
        z = min(max(int(at), 0), max(nodes - 2, 0))
        part = min(max(at - z, 0.0), 1.0)
        y = min(z + 1, nodes - 1)
        for j in range(columns):
            e = d + shift[z, j] * (1 - part) + shift[y, j] * part
            low = math.floor(e)
            if 0 <= low < count - 1:
                value = field[low, j] * (1 - (e - low)) + field[low + 1, j] * (e - low)
                if value == value:
                    total[d] += value
                    number[d] += 1
    for d in range(count):
        total[d] = total[d] / number[d] if number[d] > 0 else np.nan
    return total


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def refine_shift(field, template, shift, node_start, node_step, half, reach, width):  # type: ignore[no-untyped-def]
    """Correlate every column with the whole mean profile again and smooth the corrections along the stations."""
    _count, columns = field.shape
    nodes = shift.shape[0]
    raw = np.zeros((nodes, columns))
    weight = np.zeros((nodes, columns))
    smooth = np.empty((nodes, columns))
    score = np.empty(2 * reach + 1)
    for z in range(nodes):
        centre = int(node_start + z * node_step)
        for j in range(columns):
            at, value = _best_shift(template, field, j, centre, half, shift[z, j], reach, score)
            raw[z, j] = at - shift[z, j]
            weight[z, j] = value * value if value > 0.1 and abs(raw[z, j]) < reach else 0.0
    reach_j = math.ceil(2.5 * width)
    for z in range(nodes):
        for j in range(columns):
            n, s1, s2, v0, v1 = 1e-9, 0.0, 0.0, 0.0, 0.0
            for i in range(max(j - reach_j, 0), min(j + reach_j + 1, columns)):
                kernel = math.exp(-0.5 * ((i - j) / width) ** 2)
                x = (i - j) / width
                for y in range(max(z - 1, 0), min(z + 2, nodes)):
                    part = kernel * weight[y, i] * (1.0 if y == z else 0.5)
                    value = raw[y, i] + shift[z, i]
                    n += part
                    s1 += part * x
                    s2 += part * x * x
                    v0 += part * value
                    v1 += part * value * x
            s2 += 0.05 * n
            determinant = n * s2 - s1 * s1
            smooth[z, j] = (s2 * v0 - s1 * v1) / determinant if n > 0.1 else shift[z, j]
    return smooth


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def settle_shift(field, template, shift, node_start, node_step, half, reach, price):  # type: ignore[no-untyped-def]
    """Best path of corrections along the columns for each node (dynamic programming), to undo slips by a period.

    The gain of a correction is its correlation with the mean profile, shared with the neighbouring nodes; a change of
    the correction from column to column costs ``price`` for each sample.
    """
    _count, columns = field.shape
    nodes = shift.shape[0]
    width = 2 * reach + 1
    gain = np.zeros((nodes, columns, width))
    score = np.empty(width)
    for z in range(nodes):
        centre = int(node_start + z * node_step)
        for j in range(columns):
            _best_shift(template, field, j, centre, half, shift[z, j], reach, score)
            for q in range(width):
                gain[z, j, q] = max(score[q], -0.2)
    out = shift.copy()
    best = np.empty(width)
    new = np.empty(width)
    back = np.empty((columns, width), np.int64)
    for z in range(nodes):
        best[:] = 0.0
        for j in range(columns):
            for q in range(width):  # distance transform of the best so far
                new[q] = best[q]
                back[j, q] = q
            for q in range(1, width):
                if new[q - 1] - price > new[q]:
                    new[q] = new[q - 1] - price
                    back[j, q] = back[j, q - 1]
            for q in range(width - 2, -1, -1):
                if new[q + 1] - price > new[q]:
                    new[q] = new[q + 1] - price
                    back[j, q] = back[j, q + 1]
            for q in range(width):
                total = gain[z, j, q]
                if z > 0:
                    total += 0.5 * gain[z - 1, j, q]
                if z < nodes - 1:
                    total += 0.5 * gain[z + 1, j, q]
                best[q] = new[q] + total
        q = int(np.argmax(best))
        for j in range(columns - 1, -1, -1):
            out[z, j] = shift[z, j] + q - reach
            q = back[j, q]
    return out
