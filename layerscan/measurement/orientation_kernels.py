"""Compiled inner loops of ``orientation`` and ``detection``."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np
from numba import njit

if TYPE_CHECKING:
    from numpy.typing import NDArray

    F8 = NDArray[np.float64]
    F4 = NDArray[np.float32]
    I8 = NDArray[np.int64]


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def scan_lines(power: F4, near: F4, band: I8, ky: F8, kx: F8, out: F8) -> None:
    """Strongest line of each spectrum: angle [rad], frequency, contrast, coherence, second line over first, energy.

    ``power`` and ``near`` (3 x 3 sums) are (tiles, bins); ``band`` picks the bins of the half plane;
    ``out`` is (tiles, 6).
    """
    count = len(band)
    k2 = ky * ky + kx * kx
    for t in range(power.shape[0]):
        at, top = 0, -1.0
        for b in range(count):
            value = near[t, band[b]] * math.sqrt(k2[b])
            if value > top:
                top, at = value, b
        a, q = math.atan2(ky[at], kx[at]), k2[at]
        ux, uy = math.cos(a), math.sin(a)
        ring, ring_count, second = 0.0, 0, 0.0
        total, cos_sum, sin_sum = 0.0, 0.0, 0.0
        for b in range(count):
            ratio = k2[b] / q
            if ratio < 0.36 or ratio > 2.79:
                continue
            along = (kx[b] * ux + ky[b] * uy) ** 2 / k2[b]  # squared cosine of the angle to the line
            if along < 0.671:  # more than 35 degrees away
                second = max(second, near[t, band[b]])
            if ratio > 0.5625 and ratio < 1.7956:
                p = power[t, band[b]]
                total += p
                cos_sum += p * (kx[b] * kx[b] - ky[b] * ky[b]) / k2[b]
                sin_sum += p * 2 * kx[b] * ky[b] / k2[b]
                if along < 0.671:
                    ring += p
                    ring_count += 1
        floor = ring / ring_count if ring_count else 0.0
        xx, xy, weight_sum, frequency = 0.0, 0.0, 0.0, 0.0
        for b in range(count):
            ratio = k2[b] / q
            if ratio < 0.36 or ratio > 2.79:
                continue
            if (kx[b] * ux + ky[b] * uy) ** 2 / k2[b] > 0.75:  # within 30 degrees
                weight = power[t, band[b]] - 2 * floor
                if weight > 0:
                    xx += weight * (kx[b] * kx[b] - ky[b] * ky[b])
                    xy += weight * 2 * kx[b] * ky[b]
                    weight_sum += weight
                    frequency += weight * math.sqrt(k2[b])
        first = near[t, band[at]]
        out[t, 0] = 0.5 * math.atan2(xy, xx) if weight_sum > 0 else a
        out[t, 1] = frequency / weight_sum if weight_sum > 0 else math.sqrt(q)
        out[t, 2] = first / max(9 * floor, 1e-30)
        out[t, 3] = math.hypot(cos_sum, sin_sum) / total if total > 0 else 0.0
        out[t, 4] = second / first if first > 0 else 1.0
        out[t, 5] = first


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def _normal(cos2: F8, sin2: F8, grid: F8, r: float, c: float) -> tuple[float, float]:
    """Unit normal (row, column) at a point; ``grid`` = first row, row step, first column, column step."""
    i = min(max((r - grid[0]) / grid[1], 0.0), cos2.shape[0] - 1.0)
    j = min(max((c - grid[2]) / grid[3], 0.0), cos2.shape[1] - 1.0)
    i0 = min(int(i), max(cos2.shape[0] - 2, 0))
    j0 = min(int(j), max(cos2.shape[1] - 2, 0))
    i1, j1 = min(i0 + 1, cos2.shape[0] - 1), min(j0 + 1, cos2.shape[1] - 1)
    u, v = i - i0, j - j0
    x = (1 - u) * ((1 - v) * cos2[i0, j0] + v * cos2[i0, j1]) + u * ((1 - v) * cos2[i1, j0] + v * cos2[i1, j1])
    y = (1 - u) * ((1 - v) * sin2[i0, j0] + v * sin2[i0, j1]) + u * ((1 - v) * sin2[i1, j0] + v * sin2[i1, j1])
    length = math.hypot(x, y)
    if length == 0.0:
        return 0.0, 1.0
    cosine = math.sqrt(max(0.5 * (1 + x / length), 0.0))
    sine = math.sqrt(max(0.5 * (1 - x / length), 0.0))
    return (sine if y >= 0 else -sine), cosine


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def follow(
    cos2: F8, sin2: F8, grid: F8, row: F8, column: F8, first_r: F8, first_c: F8, step: float, across: bool,
    limits: F8, path_r: F8, path_c: F8,
) -> None:  # fmt: skip
    """Integrate (second-order Runge-Kutta) from each point; fills ``path`` (points, steps + 1).

    ``across`` follows the normal, else the layers; ``first`` says which way to set off. A path that has left the frame
    (``limits`` = margin, last row, last column) by more than the margin, or has turned by more than 120 degrees,
    ends: what is left is set far outside.
    """
    for p in range(len(row)):
        r, c = row[p], column[p]
        last_r, last_c = first_r[p], first_c[p]
        path_r[p, 0], path_c[p, 0] = r, c
        for k in range(1, path_r.shape[1]):
            for half in range(2):
                at_r = r + 0.5 * step * last_r if half else r
                at_c = c + 0.5 * step * last_c if half else c
                n_r, n_c = _normal(cos2, sin2, grid, at_r, at_c)
                if not across:
                    n_r, n_c = n_c, -n_r
                if n_r * last_r + n_c * last_c < 0:
                    n_r, n_c = -n_r, -n_c
                last_r, last_c = n_r, n_c
            r += step * last_r
            c += step * last_c
            path_r[p, k], path_c[p, k] = r, c
            margin = limits[0]
            turned = last_r * first_r[p] + last_c * first_c[p] < -0.5
            if turned or r < -margin or c < -margin or r > limits[1] + margin or c > limits[2] + margin:
                path_r[p, k + 1 :] = -1e6
                path_c[p, k + 1 :] = -1e6
                break


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def block_means(
    image: F4, usable: F4, has_mask: bool, row: F8, column: F8, stride: int, block: int, mean: F8, number: F8
) -> None:
    """Bilinear samples of the picture on the grid refined ``stride`` times along the layers, averaged over blocks.

    ``row`` and ``column`` are (depth, coarse stations); fine stations lie between; ``mean`` and ``number`` are
    (depth, blocks).
    """
    rows, columns = image.shape
    fine = (row.shape[1] - 1) * stride + 1
    for d in range(row.shape[0]):
        for b in range(mean.shape[1]):
            total, count = 0.0, 0.0
            for s in range(b * block, min((b + 1) * block, fine)):
                j = s // stride
                part = (s - j * stride) / stride
                nxt = min(j + 1, row.shape[1] - 1)
                r = row[d, j] * (1 - part) + row[d, nxt] * part
                c = column[d, j] * (1 - part) + column[d, nxt] * part
                if r < 0 or c < 0 or r > rows - 1 or c > columns - 1:
                    continue
                i0, j0 = min(int(r), rows - 2), min(int(c), columns - 2)
                if has_mask and usable[int(r + 0.5), int(c + 0.5)] < 0.5:
                    continue
                u, v = r - i0, c - j0
                total += (1 - u) * ((1 - v) * image[i0, j0] + v * image[i0, j0 + 1]) + u * (
                    (1 - v) * image[i0 + 1, j0] + v * image[i0 + 1, j0 + 1]
                )
                count += 1.0
            number[d, b] = count
            mean[d, b] = total / count if count > 0 else 0.0


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def bin_profile(
    image: F4, use: NDArray[np.bool_], cos: float, sin: float, origin: F8, width: float, total: F8, number: F8
) -> None:
    """Add every used pixel to the bin of its depth; depth = (column - c0) cos + (row - r0) sin - d0."""
    for r in range(image.shape[0]):
        base = (r - origin[0]) * sin - origin[1] * cos - origin[2]
        for c in range(image.shape[1]):
            if use[r, c]:
                d = int((base + c * cos) / width)
                if 0 <= d < len(total):
                    total[d] += image[r, c]
                    number[d] += 1.0


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def rotation_normal_equations(
    image: F4, use: NDArray[np.bool_], cos: float, sin: float, origin: F8, width: float, profile: F8, slope: F8
) -> tuple[float, float, float, float]:
    """Sums over pixels of f'^2 s^2, f' s r, r^2 and 1; r is the misfit to the profile f, s the lateral place."""
    a, b, e, n = 0.0, 0.0, 0.0, 0.0
    for r in range(image.shape[0]):
        base = (r - origin[0]) * sin - origin[1] * cos - origin[2]
        side = (r - origin[0]) * cos + origin[1] * sin
        for c in range(image.shape[1]):
            if use[r, c]:
                d = (base + c * cos) / width - 0.5
                i = int(d)
                if d < 0 or i >= len(profile) - 1:
                    continue
                part = d - i
                miss = image[r, c] - (profile[i] * (1 - part) + profile[i + 1] * part)
                f = (slope[i] * (1 - part) + slope[i + 1] * part) * (side - c * sin)
                a += f * f
                b += f * miss
                e += miss * miss
                n += 1.0
    return a, b, e, n


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def lateral_shifts(
    image: F4, use: NDArray[np.bool_], cos: float, sin: float, origin: F8, width: float, profile: F8, slope: F8,
    lateral: F8, weight: F8, moment: F8,
) -> None:  # fmt: skip
    """Sums of f'^2 and f' r over pixels in bins of the lateral place (``lateral`` = first place, bin width)."""
    for r in range(image.shape[0]):
        base = (r - origin[0]) * sin - origin[1] * cos - origin[2]
        side = (r - origin[0]) * cos + origin[1] * sin
        for c in range(image.shape[1]):
            if use[r, c]:
                d = (base + c * cos) / width - 0.5
                i = int(d)
                b = int((side - c * sin - lateral[0]) / lateral[1])
                if d < 0 or i >= len(profile) - 1 or b < 0 or b >= len(weight):
                    continue
                part = d - i
                f = slope[i] * (1 - part) + slope[i + 1] * part
                weight[b] += f * f
                moment[b] += f * (image[r, c] - (profile[i] * (1 - part) + profile[i + 1] * part))
