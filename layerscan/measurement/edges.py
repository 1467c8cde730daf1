"""Numerical core of the joint edge fit: edge shapes, the model profile, banded normal equations, the damped steps."""

from __future__ import annotations

import math

import numpy as np
from numba import njit

BLUR, BOX, GAMMA, RIM_BRIGHT, RIM_DARK, RIM_DECAY, SKEW, DARK_LEVEL, BRIGHT_LEVEL = range(9)
SHARED = 9
EDGE = 7  # the first parameters are of the edge, the last two the mean levels of the phases less 0 and 1
_ROOT2 = math.sqrt(2.0)
_NORM = 1.0 / math.sqrt(2.0 * math.pi)


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def blurred_rim(v, s, decay):  # type: ignore[no-untyped-def]
    """One-sided exponential (v > 0) blurred by a Gaussian: value and derivatives by v, s and decay."""
    gauss = math.exp(-0.5 * (v / s) ** 2)
    q = (s / decay - v / s) / _ROOT2
    if q > 6.0:
        value = 0.5 * gauss * (1 - 0.5 / (q * q)) / (q * math.sqrt(math.pi))
    else:
        value = 0.5 * math.exp(0.5 * (s / decay) ** 2 - v / decay) * math.erfc(q)
    by_v = -value / decay + gauss * _NORM / s
    by_s = value * s / (decay * decay) - gauss * _NORM * (1 / decay + v / (s * s))
    by_decay = value * (v - s * s / decay) / (decay * decay) + gauss * _NORM * s / (decay * decay)
    return value, by_v, by_s, by_decay


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def blurred_edge(u, s, box, skew):  # type: ignore[no-untyped-def]
    """Blurred step: value and derivatives by u, s, box width and skew.

    The box may be skewed: its density is (1 + skew x/box)/box, which is what the projection of mass-thickness leaves
    of it to first order (skew = the logarithm of the ratio of intensities).
    """
    if box < 0.02 * s:
        z = u / s
        density = _NORM * math.exp(-0.5 * z * z) / s
        return 0.5 * math.erfc(-z / _ROOT2), density, -z * density, -density * z / s * box / 12.0, 0.0
    h = 0.5 * box
    a, b = (u + h) / s, (u - h) / s
    pa, pb = 0.5 * math.erfc(-a / _ROOT2), 0.5 * math.erfc(-b / _ROOT2)
    da, db = _NORM * math.exp(-0.5 * a * a), _NORM * math.exp(-0.5 * b * b)
    rise = a * pa + da - b * pb - db
    value = s / box * rise
    by_u, by_s, by_box = (pa - pb) / box, (da - db) / box, (0.5 * (pa + pb) - value) / box
    square = box * box
    bend = 0.5 * ((a * a - 1) * pa + a * da - (b * b - 1) * pb - b * db)
    extra = s / square * (u * rise - s * bend)
    if skew != 0.0:
        value += skew * extra
        by_u += skew * (u * (pa - pb) + s * (da - db)) / square
        by_s += skew * (u * (da - db) + s * (pa - pb - a * da + b * db)) / square
        by_box += skew * (-2 * extra / box + 0.25 * (pb - pa) / box)
    return value, by_u, by_s, by_box, extra


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def _reach(shared, active):  # type: ignore[no-untyped-def]
    """Distance from an edge beyond which it is a plain step."""
    reach = 4.5 * shared[BLUR] + 0.5 * shared[BOX]
    if active[RIM_DECAY]:
        reach += 3.0 * shared[RIM_DECAY]
    return reach


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def _band_width(position, reach):  # type: ignore[no-untyped-def]
    """Largest number of parameters that one sample couples."""
    widest, low = 0, 0
    for b in range(position.size):
        while position[b] - position[low] > 2 * reach:
            low += 1
        widest = max(widest, b - low + 1)
    return 2 * (widest + 1) + 1


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def model_profile(depth, position, level, shared, active):  # type: ignore[no-untyped-def]
    """Model intensity (dark 0, bright 1) at the given depths [samples], which must increase."""
    out = np.empty(depth.size)
    edges = position.size
    reach = _reach(shared, active)
    b0 = 0
    for j in range(depth.size):
        while b0 < edges and depth[j] - position[b0] > reach:
            b0 += 1
        value = level[b0]
        rim = 0.0
        b = b0
        while b < edges and position[b] - depth[j] <= reach:
            step = level[b + 1] - level[b]
            skew = shared[SKEW] if step > 0 else -shared[SKEW]
            e, _, _, _, _ = blurred_edge(depth[j] - position[b], shared[BLUR], shared[BOX], skew)
            value += step * e
            if active[RIM_DECAY]:
                side = 1.0 if step > 0 else -1.0
                v = side * (depth[j] - position[b])
                rim += shared[RIM_BRIGHT] * blurred_rim(v, shared[BLUR], shared[RIM_DECAY])[0]
                rim += shared[RIM_DARK] * blurred_rim(-v, shared[BLUR], shared[RIM_DECAY])[0]
            b += 1
        out[j] = value + shared[GAMMA] * value * (1 - value) + rim
    return out


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def _accumulate(  # type: ignore[no-untyped-def]
    depth, value, weight, position, level, shared, active, target, precision, belief, place, band, border, corner, g, gs
):
    """Normal equations at the present parameters; returns the cost. Order: level 0, edge 0, level 1, edge 1, ...

    ``belief`` (2, 9) is the mean and the precision of what is known beforehand of each shared parameter, ``place``
    (2, edges) of each position (precision 0: nothing).
    """
    band[:] = 0.0
    border[:] = 0.0
    corner[:] = 0.0
    g[:] = 0.0
    gs[:] = 0.0
    edges = position.size
    reach = _reach(shared, active)
    widest = band.shape[1]
    row = np.zeros(widest + 4)
    by_shared = np.zeros(SHARED)
    e_value = np.zeros(widest)
    e_u = np.zeros(widest)
    s, box, gamma = shared[BLUR], shared[BOX], shared[GAMMA]
    cost = 0.0
    b0 = 0
    for j in range(depth.size):
        if weight[j] <= 0:
            continue
        while b0 < edges and depth[j] - position[b0] > reach:
            b0 += 1
        b1 = b0
        total = level[b0]
        by_shared[:] = 0.0
        rim = 0.0
        while b1 < edges and position[b1] - depth[j] <= reach:
            i = b1 - b0
            if 2 * i + 2 >= widest:
                break
            step = level[b1 + 1] - level[b1]
            side = 1.0 if step > 0 else -1.0
            e, du, ds, dbox, dskew = blurred_edge(depth[j] - position[b1], s, box, side * shared[SKEW])
            e_value[i], e_u[i] = e, du
            total += step * e
            by_shared[BLUR] += step * ds
            by_shared[BOX] += step * dbox
            by_shared[SKEW] += step * side * dskew
            b1 += 1
        n = b1 - b0
        slope = 1 + gamma * (1 - 2 * total)
        by_shared[BLUR] *= slope
        by_shared[BOX] *= slope
        by_shared[SKEW] *= slope
        by_shared[GAMMA] = total * (1 - total)
        for i in range(n + 1):
            left = e_value[i - 1] if i > 0 else 1.0
            right = e_value[i] if i < n else 0.0
            row[2 * i] = slope * (left - right)
            if i < n:
                row[2 * i + 1] = -slope * (level[b0 + i + 1] - level[b0 + i]) * e_u[i]
        if active[RIM_DECAY]:
            for i in range(n):
                side = 1.0 if level[b0 + i + 1] > level[b0 + i] else -1.0
                v = side * (depth[j] - position[b0 + i])
                r1, v1, s1, d1 = blurred_rim(v, s, shared[RIM_DECAY])
                r2, v2, s2, d2 = blurred_rim(-v, s, shared[RIM_DECAY])
                bright, dark = shared[RIM_BRIGHT], shared[RIM_DARK]
                rim += bright * r1 + dark * r2
                by_shared[RIM_BRIGHT] += r1
                by_shared[RIM_DARK] += r2
                by_shared[BLUR] += bright * s1 + dark * s2
                by_shared[RIM_DECAY] += bright * d1 + dark * d2
                row[2 * i + 1] -= side * (bright * v1 - dark * v2)
        residual = value[j] - (total + gamma * total * (1 - total) + rim)
        w = weight[j]
        cost += w * residual * residual
        first = 2 * b0
        for p in range(2 * n + 1):
            a = w * row[p]
            g[first + p] += a * residual
            for q in range(p + 1):
                band[first + p, p - q] += a * row[q]
            for m in range(EDGE):
                if active[m]:
                    border[first + p, m] += a * by_shared[m]
        for m in range(EDGE):
            if active[m]:
                gs[m] += w * by_shared[m] * residual
                for k in range(m + 1):
                    if active[k]:
                        corner[m, k] += w * by_shared[m] * by_shared[k]
    for m in range(SHARED):
        for k in range(m):
            corner[k, m] = corner[m, k]
        if active[m]:
            off = belief[0, m] - shared[m]
            corner[m, m] += belief[1, m]
            gs[m] += belief[1, m] * off
            cost += belief[1, m] * off * off
    for b in range(edges):
        if place[1, b] > 0:
            off = place[0, b] - position[b]
            band[2 * b + 1, 0] += place[1, b]
            g[2 * b + 1] += place[1, b] * off
            cost += place[1, b] * off * off
    for i in range(edges + 1):
        m = DARK_LEVEL if target[i] < 0.5 else BRIGHT_LEVEL
        off = target[i] + shared[m] - level[i]
        band[2 * i, 0] += precision[i]
        g[2 * i] += precision[i] * off
        border[2 * i, m] -= precision[i]
        corner[m, m] += precision[i]
        gs[m] -= precision[i] * off
        cost += precision[i] * off * off
    return cost


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def _cholesky(band):  # type: ignore[no-untyped-def]
    """Banded Cholesky in place; band[i, k] holds the element (i, i - k). False where it is not positive."""
    n, width = band.shape
    for i in range(n):
        for j in range(max(0, i - width + 1), i + 1):
            total = band[i, i - j]
            for m in range(max(0, i - width + 1, j - width + 1), j):
                total -= band[i, i - m] * band[j, j - m]
            if i == j:
                if not total > 0:
                    return False
                band[i, 0] = math.sqrt(total)
            else:
                band[i, i - j] = total / band[j, 0]
    return True


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def _solve(band, x):  # type: ignore[no-untyped-def]
    """Solve with the banded Cholesky factor, in place."""
    n, width = band.shape
    for i in range(n):
        total = x[i]
        for j in range(max(0, i - width + 1), i):
            total -= band[i, i - j] * x[j]
        x[i] = total / band[i, 0]
    for i in range(n - 1, -1, -1):
        total = x[i]
        for j in range(i + 1, min(n, i + width)):
            total -= band[j, j - i] * x[j]
        x[i] = total / band[i, 0]


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def _solve_from(band, x, first):  # type: ignore[no-untyped-def]
    """Solve with the banded Cholesky factor, in place, where x is zero before ``first``."""
    n, width = band.shape
    for i in range(first, n):
        total = x[i]
        for j in range(max(first, i - width + 1), i):
            total -= band[i, i - j] * x[j]
        x[i] = total / band[i, 0]
    for i in range(n - 1, -1, -1):
        total = x[i]
        for j in range(i + 1, min(n, i + width)):
            total -= band[j, j - i] * x[j]
        x[i] = total / band[i, 0]


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def _bordered(band, border, corner, active):  # type: ignore[no-untyped-def]
    """Factor the arrow matrix: (ok, border solved, inverse of the Schur complement)."""
    solved = np.zeros(border.shape)
    inverse = np.zeros((SHARED, SHARED))
    if not _cholesky(band):
        return False, solved, inverse
    used = np.flatnonzero(active)
    for m in used:
        column = border[:, m].copy()
        _solve(band, column)
        solved[:, m] = column
    k = used.size
    schur = np.empty((k, k))
    for a in range(k):
        for b in range(k):
            schur[a, b] = corner[used[a], used[b]] - np.sum(border[:, used[a]] * solved[:, used[b]])
    for a in range(k):
        schur[a, a] *= 1 + 1e-9
        if not schur[a, a] > 0:
            return False, solved, inverse
    small = np.linalg.pinv(schur)
    for a in range(k):
        for b in range(k):
            inverse[used[a], used[b]] = small[a, b]
    return True, solved, inverse


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def fit_edges(  # type: ignore[no-untyped-def]
    depth, value, weight, position, level, shared, active, target, precision, belief, place, rounds, tolerance, full
):
    """Levenberg-Marquardt on all parameters; returns (position, level, shared, cost, covariance of positions, ok,
    covariance of the shared parameters).

    It stops when a step gains less than ``tolerance`` of the mean cost of a sample. The covariance is worked out where
    ``full``.
    """
    edges = position.size
    size = 2 * edges + 1
    position, level, shared = position.copy(), level.copy(), shared.copy()
    width = min(_band_width(position, 1.5 * _reach(shared, active)), size)
    band = np.empty((size, width))
    border = np.empty((size, SHARED))
    corner = np.empty((SHARED, SHARED))
    g = np.empty(size)
    gs = np.empty(SHARED)
    cost = _accumulate(
        depth,
        value,
        weight,
        position,
        level,
        shared,
        active,
        target,
        precision,
        belief,
        place,
        band,
        border,
        corner,
        g,
        gs,
    )
    damping = 1e-3
    for _ in range(rounds):
        trial_band = band.copy()
        trial_corner = corner.copy()
        for i in range(size):
            trial_band[i, 0] += damping * (band[i, 0] + 1e-9)
        for m in range(SHARED):
            trial_corner[m, m] *= 1 + damping
        ok, solved, inverse = _bordered(trial_band, border, trial_corner, active)
        if not ok:
            damping = damping * 10 + 1e-6
            if damping > 1e6:
                break
            continue
        step = g.copy()
        _solve(trial_band, step)
        schur_right = np.zeros(SHARED)
        for m in range(SHARED):
            if active[m]:
                schur_right[m] = gs[m] - np.sum(border[:, m] * step)
        step_shared = inverse @ schur_right
        for m in range(SHARED):
            if active[m]:
                step -= solved[:, m] * step_shared[m]
        new_shared = shared.copy()
        new_shared[BLUR] = min(max(shared[BLUR] + step_shared[BLUR], 0.6 * shared[BLUR], 0.2), 1.5 * shared[BLUR])
        if active[BOX]:
            new_shared[BOX] = max(shared[BOX] + min(max(step_shared[BOX], -shared[BLUR]), shared[BLUR]), 0.03)
        if active[SKEW]:
            new_shared[SKEW] = min(max(shared[SKEW] + step_shared[SKEW], -1.5), 1.5)
        if active[GAMMA]:
            new_shared[GAMMA] = min(max(shared[GAMMA] + step_shared[GAMMA], -0.9), 0.9)
        if active[RIM_DECAY]:
            new_shared[RIM_BRIGHT] = min(max(shared[RIM_BRIGHT] + step_shared[RIM_BRIGHT], -2.0), 2.0)
            new_shared[RIM_DARK] = min(max(shared[RIM_DARK] + step_shared[RIM_DARK], -2.0), 2.0)
            new_shared[RIM_DECAY] = min(
                max(shared[RIM_DECAY] + step_shared[RIM_DECAY], 0.6 * shared[RIM_DECAY], 0.3), 1.6 * shared[RIM_DECAY]
            )
        for m in range(EDGE, SHARED):
            if active[m]:
                new_shared[m] = shared[m] + min(max(step_shared[m], -0.3), 0.3)
        new_position = position.copy()
        new_level = level.copy()
        limit = max(0.5 * shared[BLUR], 0.3)
        for b in range(edges):
            move = min(max(step[2 * b + 1], -limit), limit)
            new_position[b] = position[b] + move
        for b in range(1, edges):
            if new_position[b] < new_position[b - 1] + 0.3:
                middle = 0.5 * (new_position[b] + new_position[b - 1])
                new_position[b - 1] = middle - 0.15
                new_position[b] = middle + 0.15
        for i in range(edges + 1):
            new_level[i] = level[i] + step[2 * i]
        new_cost = _accumulate(
            depth,
            value,
            weight,
            new_position,
            new_level,
            new_shared,
            active,
            target,
            precision,
            belief,
            place,
            band,
            border,
            corner,
            g,
            gs,
        )
        if new_cost <= cost * (1 + 1e-12):
            gain = cost - new_cost
            position, level, shared, cost = new_position, new_level, new_shared, new_cost
            damping = max(damping * 0.2, 1e-9)
            if gain < tolerance * cost / depth.size:
                break
        else:
            _accumulate(
                depth,
                value,
                weight,
                position,
                level,
                shared,
                active,
                target,
                precision,
                belief,
                place,
                band,
                border,
                corner,
                g,
                gs,
            )
            damping = damping * 8 + 1e-6
            if damping > 1e6:
                break
    covariance = np.zeros((edges, edges))
    _accumulate(
        depth,
        value,
        weight,
        position,
        level,
        shared,
        active,
        target,
        precision,
        belief,
        place,
        band,
        border,
        corner,
        g,
        gs,
    )
    for i in range(size):
        band[i, 0] += 1e-9 * (band[i, 0] + 1e-9)
    ok, solved, inverse = _bordered(band, border, corner, active)
    if ok and full:
        column = np.empty(size)
        for b in range(edges):
            column[:] = 0.0
            column[2 * b + 1] = 1.0
            _solve_from(band, column, 2 * b + 1)
            for a in range(edges):
                covariance[a, b] = column[2 * a + 1]
        shared_part = np.ascontiguousarray(solved[1::2])
        covariance += shared_part @ inverse @ np.ascontiguousarray(shared_part.T)
    return position, level, shared, cost, covariance, ok, inverse


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def correlation_factor(residual, weight, longest):  # type: ignore[no-untyped-def]
    """Factor on the variance of smooth estimates because residuals are correlated: 1 + 2 sum of the first lags."""
    total = 0.0
    number = 0
    for j in range(residual.size):
        if weight[j] > 0:
            total += weight[j] * residual[j] * residual[j]
            number += 1
    if number < 8 or total <= 0:
        return 1.0
    total /= number
    factor = 1.0
    for lag in range(1, longest + 1):
        part, n = 0.0, 0
        for j in range(residual.size - lag):
            if weight[j] > 0 and weight[j + lag] > 0:
                part += math.sqrt(weight[j] * weight[j + lag]) * residual[j] * residual[j + lag]
                n += 1
        if n < 8:
            break
        rho = part / n / total
        if rho < 1.0 / math.sqrt(n):
            break
        factor += 2 * rho * (1 - lag / (longest + 1))
    return factor
