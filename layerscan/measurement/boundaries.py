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

BLUR, BOX, GAMMA, RIM_BRIGHT, RIM_DARK, RIM_DECAY = range(6)
SHARED = 6
_ROOT2 = math.sqrt(2.0)
_NORM = 1.0 / math.sqrt(2.0 * math.pi)


@dataclass(frozen=True, kw_only=True, eq=False)
class EdgeFit:
    """Fitted edges: positions [samples], levels (edges + 1), shared parameters, covariance of the positions.

    ``scale`` is the factor by which the covariance was raised because the residuals exceed the stated noise or are
    correlated; ``active`` says which shared parameters were fitted.
    """

    position: FloatArray
    level: FloatArray
    shared: FloatArray
    active: BoolArray
    covariance: FloatArray
    residual_rms: float
    cost: float
    scale: float
    scatter: float


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
def _edge(u, s, box):  # type: ignore[no-untyped-def]
    """Blurred step: value and derivatives by u, s and box width."""
    if box < 0.02 * s:
        z = u / s
        density = _NORM * math.exp(-0.5 * z * z) / s
        return 0.5 * math.erfc(-z / _ROOT2), density, -z * density, -density * z / s * box / 12.0
    h = 0.5 * box
    a, b = (u + h) / s, (u - h) / s
    pa, pb = 0.5 * math.erfc(-a / _ROOT2), 0.5 * math.erfc(-b / _ROOT2)
    da, db = _NORM * math.exp(-0.5 * a * a), _NORM * math.exp(-0.5 * b * b)
    value = s / box * (a * pa + da - b * pb - db)
    return value, (pa - pb) / box, (da - db) / box, (0.5 * (pa + pb) - value) / box


@njit(cache=True)  # type: ignore[untyped-decorator]
def _reach(shared, active):  # type: ignore[no-untyped-def]
    """Distance from an edge beyond which it is a plain step."""
    reach = 5.0 * shared[BLUR] + 0.5 * shared[BOX]
    if active[RIM_DECAY]:
        reach += 6.0 * shared[RIM_DECAY]
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
            e, _, _, _ = _edge(depth[j] - position[b], shared[BLUR], shared[BOX])
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
def _accumulate(depth, value, weight, position, level, shared, active, target, precision, band, border, corner, g, gs):  # type: ignore[no-untyped-def]  # noqa: E501
    """Normal equations at the present parameters; returns the cost. Order: level 0, edge 0, level 1, edge 1, ..."""
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
            e, du, ds, dbox = _edge(depth[j] - position[b1], s, box)
            e_value[i], e_u[i] = e, du
            total += step * e
            by_shared[BLUR] += step * ds
            by_shared[BOX] += step * dbox
            b1 += 1
        n = b1 - b0
        slope = 1 + gamma * (1 - 2 * total)
        by_shared[BLUR] *= slope
        by_shared[BOX] *= slope
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
            for m in range(SHARED):
                if active[m]:
                    border[first + p, m] += a * by_shared[m]
        for m in range(SHARED):
            if active[m]:
                gs[m] += w * by_shared[m] * residual
                for k in range(SHARED):
                    corner[m, k] += w * by_shared[m] * by_shared[k]
    for i in range(edges + 1):
        off = target[i] - level[i]
        band[2 * i, 0] += precision[i]
        g[2 * i] += precision[i] * off
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
def fit_edges(depth, value, weight, position, level, shared, active, target, precision, rounds, tolerance, full):  # type: ignore[no-untyped-def]  # noqa: E501
    """Levenberg-Marquardt on all parameters; returns (position, level, shared, cost, covariance of positions, ok).

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
    cost = _accumulate(depth, value, weight, position, level, shared, active, target, precision, band, border, corner, g, gs)  # noqa: E501
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
        if active[GAMMA]:
            new_shared[GAMMA] = min(max(shared[GAMMA] + step_shared[GAMMA], -0.9), 0.9)
        if active[RIM_DECAY]:
            new_shared[RIM_BRIGHT] = min(max(shared[RIM_BRIGHT] + step_shared[RIM_BRIGHT], -2.0), 2.0)
            new_shared[RIM_DARK] = min(max(shared[RIM_DARK] + step_shared[RIM_DARK], -2.0), 2.0)
            new_shared[RIM_DECAY] = min(
                max(shared[RIM_DECAY] + step_shared[RIM_DECAY], 0.6 * shared[RIM_DECAY], 0.3), 1.6 * shared[RIM_DECAY]
            )
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
        new_cost = _accumulate(depth, value, weight, new_position, new_level, new_shared, active, target, precision, band, border, corner, g, gs)  # noqa: E501
        if new_cost <= cost * (1 + 1e-12):
            gain = cost - new_cost
            position, level, shared, cost = new_position, new_level, new_shared, new_cost
            damping = max(damping * 0.2, 1e-9)
            if gain < tolerance * cost / depth.size:
                break
        else:
            _accumulate(depth, value, weight, position, level, shared, active, target, precision, band, border, corner, g, gs)  # noqa: E501
            damping = damping * 8 + 1e-6
            if damping > 1e6:
                break
    covariance = np.zeros((edges, edges))
    if not full:
        return position, level, shared, cost, covariance, True
    _accumulate(depth, value, weight, position, level, shared, active, target, precision, band, border, corner, g, gs)
    for i in range(size):
        band[i, 0] += 1e-9 * (band[i, 0] + 1e-9)
    ok, solved, inverse = _bordered(band, border, corner, active)
    if ok:
        column = np.empty(size)
        for b in range(edges):
            column[:] = 0.0
            column[2 * b + 1] = 1.0
            _solve_from(band, column, 2 * b + 1)
            for a in range(edges):
                covariance[a, b] = column[2 * a + 1]
        shared_part = np.ascontiguousarray(solved[1::2])
        covariance += shared_part @ inverse @ np.ascontiguousarray(shared_part.T)
    return position, level, shared, cost, covariance, ok


@njit(cache=True)  # type: ignore[untyped-decorator]
def score_gains(depth, value, weight, position, level, shared, active, target, precision, models):  # type: ignore[no-untyped-def]
    """What freeing further shared parameters would lower the cost by, to first order (score test), for each model.

    ``models`` (n, 6) bool; parameters that have no slope at zero must have been given a start value in ``shared``
    through their model's own row of ``shared`` (n, 6).
    """
    edges = position.size
    size = 2 * edges + 1
    out = np.zeros(models.shape[0])
    for row in range(models.shape[0]):
        trial = active | models[row]
        width = min(_band_width(position, 1.5 * _reach(shared[row], trial)), size)
        band = np.empty((size, width))
        border = np.empty((size, SHARED))
        corner = np.empty((SHARED, SHARED))
        g = np.empty(size)
        gs = np.empty(SHARED)
        _accumulate(depth, value, weight, position, level, shared[row], trial, target, precision, band, border, corner, g, gs)  # noqa: E501
        for i in range(size):
            band[i, 0] += 1e-9 * (band[i, 0] + 1e-9)
        ok, _, inverse = _bordered(band, border, corner, trial)
        if not ok:
            continue
        step = g.copy()
        _solve(band, step)
        right = np.zeros(SHARED)
        for m in range(SHARED):
            if trial[m]:
                right[m] = gs[m] - np.sum(border[:, m] * step)
        out[row] = np.sum(g * step) + np.sum(right * (inverse @ right))
    return out


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
    start: FloatArray | None = None,
    level: FloatArray | None = None,
    scatter: float | None = None,
    full: bool = True,
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
        Try projection box, gamma and edge brightening, and keep what lowers the Bayesian information criterion.
    start : (6,) float array, optional
        Shared parameters of an earlier fit to start from.
    level : (edges + 1,) float array, optional
        Levels of an earlier fit to start from.
    scatter : float, optional
        Standard deviation of the levels about their phase to start from.
    full : bool
        Work out the covariance.

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
    shared = np.array([blur, 0.0, 0.0, 0.0, 0.0, 2.0]) if start is None else start.copy()
    active = np.zeros(SHARED, bool)
    active[BLUR] = True
    if start is not None:
        active |= np.array([True, start[BOX] > 0, start[GAMMA] != 0] + [start[RIM_BRIGHT] != 0] * 3)
    state = (position.astype(np.float64), target.copy() if level is None else level.astype(np.float64), shared)
    used = int((weight > 0).sum())
    scatter = 0.15 if scatter is None else scatter
    fit = None
    for _ in range(2):
        precision = np.where(free, 1e-6, 1 / scatter**2)
        fit = fit_edges(depth, profile, weight, *state, active, target, precision, 8, 0.3, False)
        state = fit[:3]
        target = target + np.where(free, 0.0, _phase_shift(state[1], target, free))
        off = (state[1] - target)[~free]
        previous, scatter = scatter, float(np.clip(1.2 * np.sqrt(np.mean(off**2)) if len(off) > 4 else 0.15, 0.01, 0.3))
        if abs(previous - scatter) < 0.2 * scatter:
            break
    precision = np.where(free, 1e-6, 1 / scatter**2)
    if nuisance and used > 40 and segments > 4:
        state, active = _select(depth, profile, weight, fit, active, target, precision, used)
    fit = fit_edges(depth, profile, weight, *state, active, target, precision, 15, 1e-3, full)
    return _finish(depth, profile, weight, fit, active, precision, used, scatter)


def _phase_shift(level: FloatArray, target: FloatArray, free: BoolArray) -> FloatArray:
    out = np.zeros_like(level)
    for k in (0, 1):
        chosen = (np.round(target) == k) & ~free
        if chosen.any():
            out[np.round(target) == k] = np.median(level[chosen] - target[chosen])
    return out


_MODELS: tuple[tuple[int, ...], ...] = ((GAMMA,), (BOX,), (RIM_BRIGHT, RIM_DARK, RIM_DECAY))


def _select(depth, profile, weight, fit, active, target, precision, used):  # type: ignore[no-untyped-def]
    """Add shared parameters one model at a time while the information criterion falls.

    A score test says first which model could gain enough, so that most profiles need no further fit.
    """
    state, cost = fit[:3], fit[3]
    for _ in range(len(_MODELS)):
        open_models = [names for names in _MODELS if not active[names[0]]]
        if not open_models:
            break
        masks = np.zeros((len(open_models), SHARED), bool)
        starts = np.tile(state[2], (len(open_models), 1))
        for row, names in enumerate(open_models):
            masks[row, list(names)] = True
            if BOX in names:
                starts[row, BOX] = 1.5 * state[2][BLUR]
                starts[row, BLUR] = 0.9 * state[2][BLUR]
            if RIM_DECAY in names:
                starts[row, RIM_DECAY] = 2 * state[2][BLUR]
                masks[row, RIM_DECAY] = False
        unit = cost / used
        slope = masks & (np.array([BOX not in names for names in open_models])[:, None])
        gains = score_gains(depth, profile, weight, state[0], state[1], starts, active, target, precision, slope)
        kept = None
        for row in np.argsort(-gains):
            names = open_models[row]
            price = (len(names) * math.log(used) + 4.0) * unit
            if BOX not in names and gains[row] < 0.7 * price:
                continue
            trial_active = active.copy()
            trial_active[list(names)] = True
            trial = fit_edges(
                depth, profile, weight, state[0], state[1], starts[row], trial_active, target, precision, 15, 0.05, False
            )
            score = used * math.log(max(trial[3], 1e-300) / max(cost, 1e-300)) + len(names) * math.log(used) + 4.0
            if score < 0 and (kept is None or score < kept[0]):
                kept = (score, trial, trial_active)
        if kept is None:
            break
        state, cost, active = kept[1][:3], kept[1][3], kept[2]
    return state, active


def _finish(depth, profile, weight, fit, active, precision, used, scatter):  # type: ignore[no-untyped-def]
    position, level, shared, cost, covariance, _ = fit
    residual = profile - model_profile(depth, position, level, shared, active)
    free_parameters = len(position) + int(active.sum()) + int((precision < 1e-3).sum()) + 2
    chi2 = float((weight * residual**2).sum()) / max(used - free_parameters, 1)
    blur = shared[BLUR]
    factor = correlation_factor(residual, weight, int(min(max(3 * blur, 2), 20)))
    scale = max(chi2, 0.0) * max(factor, 1.0)
    rms = math.sqrt(float((weight * residual**2).sum() / max(float(weight.sum()), 1e-300)))
    return EdgeFit(
        position=position,
        level=level,
        shared=shared,
        active=active,
        covariance=covariance * scale,
        residual_rms=rms,
        cost=float(cost),
        scale=scale,
        scatter=scatter,
    )
