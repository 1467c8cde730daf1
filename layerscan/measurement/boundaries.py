"""Joint fit of all boundaries of a profile: error-function edges that share one blur, levels shrunk to their phase.

The profile is first brought to 0 (dark) and 1 (bright) by the slowly varying levels of the phases, so shading is out of
the way. Nuisance models (projection box, gamma, edge brightening) are shared by all edges and used only where the data
ask for them.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numba import njit

if TYPE_CHECKING:
    from layerscan.records import BoolArray, FloatArray

BLUR, BOX, GAMMA, RIM_BRIGHT, RIM_DARK, RIM_DECAY, SKEW, DARK_LEVEL, BRIGHT_LEVEL = range(9)
SHARED = 9
EDGE = 7  # the first parameters are of the edge, the last two the mean levels of the phases less 0 and 1
_ROOT2 = math.sqrt(2.0)
_NORM = 1.0 / math.sqrt(2.0 * math.pi)


@dataclass(frozen=True, kw_only=True, eq=False)
class EdgeFit:
    """Fitted edges: positions [samples], levels (edges + 1), shared parameters, covariance of the positions.

    ``position`` is averaged over the edge models; ``best_position`` belongs to the best one, as ``level`` and
    ``shared`` do.

    ``scale`` is the factor by which the covariance was raised because the residuals exceed the stated noise or are
    correlated; ``active`` says which shared parameters were fitted.
    """

    position: FloatArray
    best_position: FloatArray
    level: FloatArray
    shared: FloatArray
    active: BoolArray
    covariance: FloatArray
    residual_rms: float
    cost: float
    scale: float
    scatter: float


@dataclass(frozen=True, kw_only=True)
class Hints:
    """What the noise says about the recording: it grows with the slope of a gamma curve, or with counts of electrons.

    ``gamma`` and ``skew`` are the values that the ratio of the noise in both phases would mean, 0 where it says
    nothing; the log odds say how much each is believed beforehand against a linear recording. ``known`` is False where
    the noise could not be compared.
    """

    gamma: float = 0.0
    skew: float = 0.0
    log_odds_gamma: float = 0.0
    log_odds_skew: float = 0.0
    known: bool = False


def read_hints(log_ratio: float, *, dark: float, bright: float, full_scale: float | None) -> Hints:
    """Hints from the logarithm of the ratio of noise variances (bright over dark) and the phases' intensities.

    Notes
    -----
    Counts of electrons have a variance proportional to the intensity; the intensities of a transmission image follow
    exp(-mass-thickness), so the ratio is then also the skew of a projected edge. Noise that is even before a gamma
    curve v + g v (1 - v) is scaled by its slope, (1 + g) at dark and (1 - g) at bright.
    """
    if not math.isfinite(log_ratio):
        return Hints()
    if abs(log_ratio) < 0.04:
        return Hints(known=True)
    gamma = -math.tanh(log_ratio / 4)
    zeros = [math.log(bright / dark)] if dark > 0 else []
    if full_scale is not None and full_scale > bright > dark:
        zeros.append(-math.log((full_scale - dark) / (full_scale - bright)))
    counts = any(abs(z) > 0.1 and 0.75 < log_ratio / z < 1.25 for z in zeros)
    return Hints(
        gamma=gamma, skew=log_ratio, log_odds_gamma=-2.0 if counts else 4.0, log_odds_skew=6.0 if counts else -4.0,
        known=True,
    )


@njit(cache=True)  # type: ignore[untyped-decorator]
def _rim(v, s, decay):  # type: ignore[no-untyped-def]
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


@njit(cache=True)  # type: ignore[untyped-decorator]
def _edge(u, s, box, skew):  # type: ignore[no-untyped-def]
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


@njit(cache=True)  # type: ignore[untyped-decorator]
def _reach(shared, active):  # type: ignore[no-untyped-def]
    """Distance from an edge beyond which it is a plain step."""
    reach = 4.5 * shared[BLUR] + 0.5 * shared[BOX]
    if active[RIM_DECAY]:
        reach += 3.0 * shared[RIM_DECAY]
    return reach


@njit(cache=True)  # type: ignore[untyped-decorator]
def _band_width(position, reach):  # type: ignore[no-untyped-def]
    """Largest number of parameters that one sample couples."""
    widest, low = 0, 0
    for b in range(position.size):
        while position[b] - position[low] > 2 * reach:
            low += 1
        widest = max(widest, b - low + 1)
    return 2 * (widest + 1) + 1


@njit(cache=True)  # type: ignore[untyped-decorator]
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
            e, _, _, _, _ = _edge(depth[j] - position[b], shared[BLUR], shared[BOX], skew)
            value += step * e
            if active[RIM_DECAY]:
                side = 1.0 if step > 0 else -1.0
                v = side * (depth[j] - position[b])
                rim += shared[RIM_BRIGHT] * _rim(v, shared[BLUR], shared[RIM_DECAY])[0]
                rim += shared[RIM_DARK] * _rim(-v, shared[BLUR], shared[RIM_DECAY])[0]
            b += 1
        out[j] = value + shared[GAMMA] * value * (1 - value) + rim
    return out


@njit(cache=True)  # type: ignore[untyped-decorator]
def _accumulate(depth, value, weight, position, level, shared, active, target, precision, belief, place, band, border, corner, g, gs):  # type: ignore[no-untyped-def]  # noqa: E501
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
            e, du, ds, dbox, dskew = _edge(depth[j] - position[b1], s, box, side * shared[SKEW])
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
                r1, v1, s1, d1 = _rim(v, s, shared[RIM_DECAY])
                r2, v2, s2, d2 = _rim(-v, s, shared[RIM_DECAY])
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


@njit(cache=True)  # type: ignore[untyped-decorator]
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


@njit(cache=True)  # type: ignore[untyped-decorator]
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


@njit(cache=True)  # type: ignore[untyped-decorator]
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


@njit(cache=True)  # type: ignore[untyped-decorator]
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


@njit(cache=True)  # type: ignore[untyped-decorator]
def fit_edges(depth, value, weight, position, level, shared, active, target, precision, belief, place, rounds, tolerance, full):  # type: ignore[no-untyped-def]  # noqa: E501
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
    cost = _accumulate(depth, value, weight, position, level, shared, active, target, precision, belief, place, band, border, corner, g, gs)  # noqa: E501
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
        new_cost = _accumulate(depth, value, weight, new_position, new_level, new_shared, active, target, precision, belief, place, band, border, corner, g, gs)  # noqa: E501
        if new_cost <= cost * (1 + 1e-12):
            gain = cost - new_cost
            position, level, shared, cost = new_position, new_level, new_shared, new_cost
            damping = max(damping * 0.2, 1e-9)
            if gain < tolerance * cost / depth.size:
                break
        else:
            _accumulate(depth, value, weight, position, level, shared, active, target, precision, belief, place, band, border, corner, g, gs)  # noqa: E501
            damping = damping * 8 + 1e-6
            if damping > 1e6:
                break
    covariance = np.zeros((edges, edges))
    _accumulate(depth, value, weight, position, level, shared, active, target, precision, belief, place, band, border, corner, g, gs)
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


@njit(cache=True)  # type: ignore[untyped-decorator]
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


def fit_boundaries(
    profile: FloatArray,
    *,
    weight: FloatArray,
    position: FloatArray,
    bright_first: bool,
    other: tuple[bool, bool] = (False, False),
    blur: float = 1.0,
    nuisance: bool = True,
    level: FloatArray | None = None,
    scatter: float | None = None,
    full: bool = True,
    hints: Hints | None = None,
    place: FloatArray | None = None,
) -> EdgeFit:
    """Fit all boundaries of a profile whose phases alternate, dark near 0 and bright near 1.

    Parameters
    ----------
    profile : (N,) float array
        Intensity against depth in samples, brought to 0 and 1.
    weight : (N,) float array
        Inverse variance of each sample; 0 leaves it out.
    position : (edges,) float array
        Where the boundaries are to start [samples].
    bright_first : bool
        Whether the segment before the first boundary takes the place of a bright one.
    other : (bool, bool)
        Whether the first and last segment are another material, whose level is free.
    blur : float
        Standard deviation of the edge blur to start from [samples].
    nuisance : bool
        Try projection box, gamma and edge brightening, and average over them by their posterior odds (information
        criterion and what the noise hints at); what they differ by enters the covariance.
    level : (edges + 1,) float array, optional
        Levels of an earlier fit to start from.
    scatter : float, optional
        Standard deviation of the levels about their phase to start from.
    full : bool
        Work out the covariance.
    hints : Hints, optional
        What the noise says about gamma and about counting.
    place : (2, edges) float array, optional
        Expected position and its precision [1/samples^2, in units of the cost] of boundaries beyond the data.

    Returns
    -------
    EdgeFit

    Notes
    -----
    Sharing blur and levels keeps the uncertainty near the bound where free levels raise it 1.4 to 5 times; the levels'
    scatter about their phase is estimated from the fit itself (empirical Bayes). A layer thinner than about three
    times the blur leans on these shared values. The model cannot see a distortion that moves all edges alike.

    References
    ----------
    G. Schwarz, Ann. Statist. 6 (1978) 461, doi 10.1214/aos/1176344136 (information criterion).
    """
    count = len(profile)
    depth = np.arange(count, dtype=np.float64)
    segments = len(position) + 1
    target = np.where(np.arange(segments) % 2 == 0, float(bright_first), float(not bright_first))
    free = np.zeros(segments, bool)
    free[0], free[-1] = other
    shared = np.zeros(SHARED)
    shared[BLUR], shared[RIM_DECAY] = blur, 2.0
    active = plain_model()
    state = (position.astype(np.float64), target.copy() if level is None else level.astype(np.float64), shared)
    if level is not None:
        shared[EDGE:] = _phase_levels(state[1] - target, target, free)
    used = int((weight > 0).sum())
    belief = np.zeros((2, SHARED))
    belief[1, EDGE:] = 1e-3
    place = np.zeros((2, len(position))) if place is None else place
    scatter = 0.15 if scatter is None else scatter
    fit = None
    for _ in range(2):
        precision = np.where(free, 1e-6, 1 / scatter**2)
        fit = fit_edges(depth, profile, weight, *state, active, target, precision, belief, place, 8, 0.3, False)
        state = fit[:3]
        off = (state[1] - target - np.where(target < 0.5, state[2][DARK_LEVEL], state[2][BRIGHT_LEVEL]))[~free]
        previous, scatter = scatter, float(np.clip(1.2 * np.sqrt(np.mean(off**2)) if len(off) > 4 else 0.15, 0.01, 0.3))
        if abs(previous - scatter) < 0.2 * scatter:
            break
    precision = np.where(free, 1e-6, 1 / scatter**2)
    if nuisance and used > 40 and segments > 4:
        averaged = _average_models(depth, profile, weight, fit, target, precision, place, used, hints or Hints(), full)
        return _finish(depth, profile, weight, averaged, precision, used, scatter)
    fit = fit_edges(depth, profile, weight, *state, active, target, precision, belief, place, 15, 1e-3, full)
    return _finish(
        depth, profile, weight, (*fit[:5], active, np.zeros_like(fit[4]), fit[0]), precision, used, scatter
    )


def plain_model() -> BoolArray:
    """Which shared parameters a plain edge has: blur and the phases' levels."""
    active = np.zeros(SHARED, bool)
    active[[BLUR, DARK_LEVEL, BRIGHT_LEVEL]] = True
    return active


def _phase_levels(off: FloatArray, target: FloatArray, free: BoolArray) -> FloatArray:
    """Median offset of each phase's levels from 0 and 1."""
    out = np.zeros(2)
    for k in (0, 1):
        chosen = (np.round(target) == k) & ~free
        if chosen.any():
            out[k] = np.median(off[chosen])
    return out


@dataclass(frozen=True, kw_only=True)
class _Model:
    """One hypothesis about the edges: start values, which shared parameters are free, log odds beforehand."""

    start: dict[int, float]
    free: tuple[int, ...] = ()
    log_odds: float = 0.0


def _models(blur: float, hints: Hints) -> list[_Model]:
    """Hypotheses beyond the plain edge."""
    box = {BOX: 1.7 * blur, BLUR: 0.87 * blur}
    rim = {RIM_BRIGHT: 0.15, RIM_DARK: 0.05, RIM_DECAY: 1.3 * blur}
    rims = (RIM_BRIGHT, RIM_DARK, RIM_DECAY)
    models = [_Model(start=box, free=(BOX,), log_odds=-1.0), _Model(start=rim, free=rims, log_odds=-2.0)]
    if not hints.known:
        models.append(_Model(start={GAMMA: 0.0}, free=(GAMMA,), log_odds=-2.0))
    if hints.gamma:
        odds = hints.log_odds_gamma
        models.append(_Model(start={GAMMA: hints.gamma}, log_odds=odds))
        models.append(_Model(start={**rim, GAMMA: hints.gamma}, free=rims, log_odds=odds - 2.0))
        models.append(_Model(start={**box, SKEW: hints.skew}, free=(BOX,), log_odds=hints.log_odds_skew - 1.0))
    return models


def _beliefs(blur: float, unit: float) -> FloatArray:
    """Mean and precision of what is known beforehand of the shared parameters, in units of the cost.

    Common practice, no source: edge brightening is a fraction of the contrast and about as wide as the blur; gamma
    stays near 1; a projection box is of the order of the blur.
    """
    mean = np.array([0.0, 0.0, 0.0, 0.0, 0.0, 1.3 * blur, 0.0, 0.0, 0.0])
    sd = np.array([math.inf, 4.0 * blur, 0.2, 0.4, 0.25, 0.4 * blur, 0.5, 3.0, 3.0])
    return np.stack([mean, unit / sd**2])


def _average_models(depth, profile, weight, fit, target, precision, place, used, hints, full):  # type: ignore[no-untyped-def]
    """Fit the hypotheses and average over them by their posterior odds (Laplace's approximation of the evidence).

    Returns (position, level, shared, cost, covariance, active, covariance between models, position of the best).
    """
    plain = plain_model()
    blur = float(fit[2][BLUR])
    unit = fit[3] / used
    belief = _beliefs(blur, unit)
    fit = fit_edges(depth, profile, weight, *fit[:3], plain, target, precision, belief, place, 6, 0.02, False)
    candidates = [(0.0, fit, plain)]
    for model in _models(blur, hints):
        active = plain.copy()
        active[list(model.free)] = True
        shared = fit[2].copy()
        for name, value in model.start.items():
            shared[name] = value
        trial = fit_edges(depth, profile, weight, fit[0], fit[1], shared, active, target, precision, belief, place, 2, 0.3, False)  # noqa: E501
        if not trial[5] or (model.log_odds <= 0 and trial[3] > fit[3] - unit):
            continue  # two steps gain less than the model costs
        trial = fit_edges(depth, profile, weight, *trial[:3], active, target, precision, belief, place, 10, 0.05, False)
        if trial[5]:
            candidates.append((model.log_odds, trial, active))
    least = min(trial[3] for _, trial, _ in candidates)
    scores = np.array(
        [
            odds - 0.5 * used * math.log(trial[3] / least) - _occam(trial[6], active, belief, least / used)
            for odds, trial, active in candidates
        ]
    )
    odds = np.exp(scores - scores.max())
    odds = np.where(odds > 0.03, odds, 0.0)
    odds /= odds.sum()
    best = int(np.argmax(odds))
    kept = []
    for i in np.flatnonzero(odds):
        _, trial, active = candidates[i]
        rounds, tolerance = (15, 1e-3) if i == best else (3, 0.05)
        kept.append(fit_edges(depth, profile, weight, *trial[:3], active, target, precision, belief, place, rounds, tolerance, full))  # noqa: E501
    share = odds[odds > 0]
    chosen = kept[int(np.argmax(share))]
    position = sum(p * trial[0] for p, trial in zip(share, kept, strict=True))
    covariance = sum(p * trial[4] for p, trial in zip(share, kept, strict=True))
    between = np.zeros_like(covariance)
    for p, trial in zip(share, kept, strict=True):
        off = trial[0] - position
        between += p * np.outer(off, off)
    return position, chosen[1], chosen[2], chosen[3], covariance, candidates[best][2], between, chosen[0]


def _occam(inverse: FloatArray, active: BoolArray, belief: FloatArray, unit: float) -> float:
    """Half the logarithm of how much the data narrow the free nuisance parameters down."""
    free = [m for m in np.flatnonzero(active) if BLUR < m < EDGE]
    if not free:
        return 0.0
    sign, log_det = np.linalg.slogdet(inverse[np.ix_(free, free)] * unit)
    prior = float(np.sum(np.log(unit / belief[1, free])))
    return 0.5 * max(prior - float(log_det), 0.0) if sign > 0 else 0.0


def _finish(depth, profile, weight, fit, precision, used, scatter):  # type: ignore[no-untyped-def]
    position, level, shared, cost, covariance, active, between, own_position = fit
    residual = profile - model_profile(depth, own_position, level, shared, active)
    free_parameters = len(position) + int(active.sum()) + int((precision < 1e-3).sum()) + 2
    chi2 = float((weight * residual**2).sum()) / max(used - free_parameters, 1)
    blur = shared[BLUR]
    factor = correlation_factor(residual, weight, int(min(max(3 * blur, 2), 20)))
    scale = max(chi2, 0.0) * max(factor, 1.0)
    rms = math.sqrt(float((weight * residual**2).sum() / max(float(weight.sum()), 1e-300)))
    return EdgeFit(
        position=position,
        best_position=own_position,
        level=level,
        shared=shared,
        active=active,
        covariance=covariance * scale + between,
        residual_rms=rms,
        cost=float(cost),
        scale=scale,
        scatter=scatter,
    )
