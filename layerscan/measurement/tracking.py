"""From a straightened field to followed layers: mean profile, boundaries, traces, and the profile along the traces."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np
from numba import njit

from layerscan.measurement.edges import RIM_DECAY
from layerscan.measurement.profile import Stack, find_stack
from layerscan.measurement.segmentation import BRIGHT
from layerscan.measurement.traces import (
    RoughnessModel,
    Traces,
    fit_roughness,
    mark_outliers,
    match_columns,
    matched_noise,
    pooled_covariance,
    smooth_traces,
)

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from layerscan.measurement.field import StraightField
    from layerscan.records import BoolArray, FloatArray

TURNS = 2  # of tracing and refitting
LEAST_COVERAGE = 0.35  # a boundary counts where at least this part of the longest one's length is in the picture
NEIGHBOURS = 4  # boundaries to either side whose common bending is the layers' direction
LEAST_USED = 0.12  # and depths are looked at that show this part, so that the last boundary has both its sides


@dataclass(frozen=True, kw_only=True, eq=False)
class FollowedStack:
    """Boundaries of a field and where they run.

    ``depth`` (boundaries, stations) is the depth in the frame [px], NaN where not traced; ``normal`` the same along the
    local normal from the straightened first boundary on; ``cosine`` takes a difference of frame depths to a distance
    along the local normal; ``first`` is the first depth sample that was used, ``profile`` the mean along the traces
    from there on.
    """

    stack: Stack
    traces: Traces
    depth: FloatArray
    normal: FloatArray
    cosine: FloatArray
    valid: BoolArray
    first: int
    profile: FloatArray
    variance: FloatArray
    terminations: NDArray[np.int64]


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def mean_profile(field, moved, position):  # type: ignore[no-untyped-def]
    """Mean over the stations along the traces, outliers beyond 4 sd left out: (mean, variance of one, number, noise).

    ``noise`` is the variance that neighbouring stations show against each other.
    ``moved`` (boundaries, stations) is followed at the boundaries and linear in between.
    """
    count, stations = field.shape
    edges = position.size
    straight = np.full((count, stations), np.nan, np.float32)
    for j in range(stations):
        b = 0
        for d in range(count):
            if edges == 0:
                shift = 0.0
            else:
                while b < edges and position[b] <= d:
                    b += 1
                if b == 0:
                    shift = moved[0, j]
                elif b == edges:
                    shift = moved[edges - 1, j]
                else:
                    part = (d - position[b - 1]) / max(position[b] - position[b - 1], 1e-6)
                    shift = moved[b - 1, j] + part * (moved[b, j] - moved[b - 1, j])
            at = d + shift
            low = math.floor(at)
            x = at - low
            if low < 0 or low > count - 1 or (low == count - 1 and x > 0):
                continue
            if x < 1e-9:
                straight[d, j] = field[low, j]
                continue
            if 1 <= low < count - 2:
                x2 = x * x
                value = (
                    x * (-0.5 + x - 0.5 * x2) * field[low - 1, j]
                    + (1 + x2 * (-2.5 + 1.5 * x)) * field[low, j]
                    + x * (0.5 + 2 * x - 1.5 * x2) * field[low + 1, j]
                    + 0.5 * x2 * (x - 1) * field[low + 2, j]
                )
                if value == value:
                    straight[d, j] = value
                    continue
            straight[d, j] = (1 - x) * field[low, j] + x * field[low + 1, j]
    mean = np.full(count, np.nan)
    variance = np.full(count, np.nan)
    noise = np.full(count, np.nan)
    number = np.zeros(count)
    for d in range(count):
        pairs, square = 0.0, 0.0
        for j in range(stations - 2):
            step = straight[d, j + 2] - straight[d, j]
            if step == step:
                pairs += 1
                square += step * step
        if pairs > 0:
            noise[d] = 0.5 * square / pairs
        least, most = -1e30, 1e30
        for _ in range(3):
            n, s1 = 0, 0.0
            for j in range(stations):
                value = straight[d, j]
                if value == value and least <= value <= most:
                    n += 1
                    s1 += value
            if n < 1:
                break
            m = s1 / n
            s2 = 0.0
            for j in range(stations):
                value = straight[d, j]
                if value == value and least <= value <= most:
                    s2 += (value - m) ** 2
            mean[d], number[d] = m, n
            variance[d] = s2 / max(n - 1, 1)
            sd = math.sqrt(variance[d])
            if n < 12 or sd == 0:
                break
            least, most = m - 4.0 * sd, m + 4.0 * sd
    return mean, variance, number, noise


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def local_gain(field, moved, position, profile, dark, bright, node_step, half, spread):  # type: ignore[no-untyped-def]
    """Offset and gain of each station against the mean profile in overlapping depth windows, smoothed along stations.

    Returns what brings the field to 0 (dark) and 1 (bright) at each sample: centre and gain (depth, stations).
    """
    count, stations = field.shape
    nodes = max(int(count / node_step), 1)
    start = 0.5 * (count - (nodes - 1) * node_step)
    sums = np.zeros((nodes, stations, 5))
    for z in range(nodes):
        low = max(int(start + z * node_step) - half, 0)
        high = min(int(start + z * node_step) + half + 1, count)
        for j in range(stations):
            n, sx, sy, sxx, sxy = 0.0, 0.0, 0.0, 0.0, 0.0
            b = 0
            for d in range(low, high):
                while b < position.size and position[b] + moved[b, j] <= d:
                    b += 1
                if position.size == 0:
                    at = float(d)
                elif b == 0:
                    at = d - moved[0, j]
                elif b == position.size:
                    at = d - moved[b - 1, j]
                else:
                    left = position[b - 1] + moved[b - 1, j]
                    part = (d - left) / max(position[b] + moved[b, j] - left, 1e-6)
                    at = position[b - 1] + part * (position[b] - position[b - 1])
                i = math.floor(at)
                if i < 0 or i >= count - 1:
                    continue
                x, y = profile[i] + (at - i) * (profile[i + 1] - profile[i]), field[d, j]
                if x == x and y == y:
                    n += 1
                    sx += x
                    sy += y
                    sxx += x * x
                    sxy += x * y
            sums[z, j, 0], sums[z, j, 1], sums[z, j, 2], sums[z, j, 3], sums[z, j, 4] = n, sx, sy, sxx, sxy
    slope = np.ones((nodes, stations))
    offset = np.zeros((nodes, stations))
    total = np.zeros(5)
    for z in range(nodes):
        total[:] = 0.0
        for j in range(min(spread, stations)):
            total += sums[z, j]
        for j in range(stations):
            if j + spread < stations:
                total += sums[z, j + spread]
            if j - spread - 1 >= 0:
                total -= sums[z, j - spread - 1]
            n = total[0]
            if n < 4:
                continue
            xx = total[3] - total[1] * total[1] / n
            xy = total[4] - total[1] * total[2] / n
            ridge = 0.05 * xx + 1e-12
            slope[z, j] = min(max((xy + ridge) / (xx + ridge), 0.3), 3.0)
            offset[z, j] = (total[2] - slope[z, j] * total[1]) / n
    centre = np.empty((count, stations), np.float32)
    gain = np.empty((count, stations), np.float32)
    for d in range(count):
        at = (d - start) / node_step
        z = min(max(int(at), 0), max(nodes - 2, 0))
        y = min(z + 1, nodes - 1)
        part = min(max(at - z, 0.0), 1.0)
        for j in range(stations):
            a = slope[z, j] * (1 - part) + slope[y, j] * part
            b = offset[z, j] * (1 - part) + offset[y, j] * part
            centre[d, j] = b + a * dark[d]
            gain[d, j] = a * (bright[d] - dark[d])
    return centre, gain


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def normalise(field, centre, gain):  # type: ignore[no-untyped-def]
    """The field brought to 0 (dark) and 1 (bright), NaN where it has no gain."""
    out = np.empty_like(field)
    for d in range(field.shape[0]):
        for j in range(field.shape[1]):
            out[d, j] = (field[d, j] - centre[d, j]) / gain[d, j] if gain[d, j] > 0 else np.nan
    return out


def usable_depth(straight: StraightField) -> tuple[int, int]:
    """First and last + 1 depth sample that enough of the length along the layers shows."""
    number = np.isfinite(straight.intensity).sum(axis=1)
    depth = straight.depth_start + np.arange(len(number))
    length = number * np.maximum(1 - straight.frame.curvature * depth, 0.0)
    enough = np.flatnonzero((length >= LEAST_USED * length.max()) & (number > 0))
    return int(enough[0]), int(enough[-1]) + 1


def follow_layers(
    straight: StraightField,
    *,
    period: float,
    layered: tuple[float, float] | None = None,
    full_scale: float | None = None,
    rounds: int = 3,
) -> FollowedStack | None:
    """Find the boundaries of a straightened field and follow each across it.

    Parameters
    ----------
    straight : StraightField
    period : float
        Dominant spacing [px].
    layered : (float, float), optional
        Depths [samples of the field] between which layers were detected.
    full_scale : float, optional
        Largest intensity that the file can hold; negative where the picture is clipped.
    rounds : int
        Rounds of matching and smoothing.

    Returns
    -------
    FollowedStack or None
        None where no two boundaries were found.
    """
    low, high = usable_depth(straight)
    field = np.ascontiguousarray(straight.intensity[low:high])
    stations = field.shape[1]
    flat = np.zeros((0, stations))
    mean, single, number, _ = mean_profile(field, flat, np.zeros(0))
    inside = None
    if layered is not None:
        inside = (max(int(layered[0]) - low, 0), min(math.ceil(layered[1]) - low, high - low))
        if inside[1] - inside[0] < 2 * period:
            inside = None
    stack = find_stack(mean, variance=_variance(single, number), period=period, layered=inside, nuisance=False)
    if stack is None:
        return None
    spread = max(int(period / straight.station_step / 2), 2)
    moved = np.zeros((len(stack.position), stations))
    traces = None
    for turn in range(TURNS):
        centre, gain = local_gain(
            field, moved, stack.position, mean, stack.dark, stack.bright, 2.0 * period, int(2 * period), spread
        )
        traces = _trace(field, centre, gain, stack, moved, rounds if turn == 0 else 2, period)
        if turn == TURNS - 1:
            break
        even = normalise(field, centre, gain)
        mean, single, number, noise = mean_profile(even, traces.apart, stack.position)
        contrast = stack.bright - stack.dark
        mean, single = stack.dark + contrast * mean, contrast**2 * single
        again = find_stack(
            mean, variance=_variance(single, number), period=period, layered=inside, blur=float(stack.fit.shared[0]),
            noise=noise, full_scale=full_scale,
        )  # fmt: skip
        if again is None:
            break
        moved = traces.smooth
        if len(again.position) != len(stack.position):
            moved = np.stack([np.interp(again.position, stack.position, column) for column in moved.T], axis=1)
        stack = again
    assert traces is not None
    even = normalise(field, centre, gain)
    window = max(int(1.5 * period / straight.station_step), 4)
    ended, gone = find_terminations(even, stack, traces, window)
    result = _followed(straight, stack, traces, low, mean, _variance(single, number), period, ended, gone)
    return _keep_covered(result, straight, number)


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def layer_values(even, position, moved, window):  # type: ignore[no-untyped-def]
    """Mean normalised intensity in the core of each layer at each station, over a window of stations; NaN if unseen."""
    count, stations = even.shape
    layers = position.size - 1
    total = np.zeros((layers, stations + 1))
    number = np.zeros((layers, stations + 1))
    for i in range(layers):
        for j in range(stations):
            top, bottom = position[i] + moved[i, j], position[i + 1] + moved[i + 1, j]
            centre = 0.5 * (top + bottom)
            half = 0.25 * (position[i + 1] - position[i])
            total[i, j + 1] = total[i, j]
            number[i, j + 1] = number[i, j]
            for d in range(max(math.ceil(centre - half), 0), min(int(centre + half) + 1, count)):
                if even[d, j] == even[d, j]:
                    total[i, j + 1] += even[d, j]
                    number[i, j + 1] += 1
    out = np.full((layers, stations), np.nan)
    for i in range(layers):
        for j in range(stations):
            low, high = max(j - window // 2, 0), min(j + window // 2 + 1, stations)
            n = number[i, high] - number[i, low]
            if n > 0:
                out[i, j] = (total[i, high] - total[i, low]) / n
    return out


def find_terminations(
    even: NDArray[np.float32], stack: Stack, traces: Traces, window: int
) -> tuple[NDArray[np.int64], BoolArray]:
    """Layers that end inside the field: terminations of each boundary, and stations where it does not exist.

    A layer is absent where its core, averaged over ``window`` stations, looks like its neighbours; an absence as long
    as the window that reaches the end of the layer's trace is a termination, any other a gap.
    """
    edges, stations = traces.valid.shape
    gone = np.zeros((edges, stations), bool)
    ended = np.zeros(edges, np.int64)
    values = layer_values(even, stack.fit.best_position, traces.smooth, window)
    for i in range(edges - 1):
        typical = float(np.nanmedian(values[i])) if np.isfinite(values[i]).any() else math.nan
        nominal = 1.0 if stack.phase[i + 1] == BRIGHT else 0.0
        level = nominal if not abs(typical - nominal) < 0.4 else typical
        seen = np.isfinite(values[i])
        absent = seen & (np.abs(values[i] - level) > 0.5 * max(abs(1 - nominal - level), 0.5))
        if not absent.any():
            continue
        starts = np.flatnonzero(np.diff(np.concatenate([[0], absent.astype(np.int8), [0]])) == 1)
        stops = np.flatnonzero(np.diff(np.concatenate([[0], absent.astype(np.int8), [0]])) == -1)
        shown = np.flatnonzero(seen)
        for start, stop in zip(starts, stops, strict=True):
            if stop - start < window:
                continue
            gone[i : i + 2, start:stop] = True
            at_end = start <= shown[0] or stop > shown[-1]
            if at_end and stop - start < 0.9 * len(shown):
                ended[i : i + 2] += 1
    return ended, gone


def _variance(single: FloatArray, number: FloatArray) -> FloatArray:
    """Variance of each mean; the single-station variance is smoothed because edges raise it for other reasons."""
    seen = np.isfinite(single) & (number > 1)
    if not seen.any():
        return np.where(number > 0, 1.0, 0.0)
    typical = float(np.median(single[seen])) or 1e-12
    return np.where(number > 0, np.clip(typical, 1e-12, None) / np.maximum(number, 1), 0.0)


def _trace(
    field: NDArray[np.float32],
    centre: NDArray[np.float32],
    gain: NDArray[np.float32],
    stack: Stack,
    moved: FloatArray,
    rounds: int,
    period: float,
) -> Traces:
    stations = moved.shape[1]
    raw, information, misfit = moved, moved, moved
    fit = stack.fit
    limit = max(1.5 * float(fit.shared[0]), 1.0)
    now = moved.copy()
    longest = int(min(max(stations // 4, 4), 64))
    first, position, levels = _with_beyond(stack)
    for _ in range(rounds):
        raw, information, misfit = _match(
            field, centre, gain, position, levels, fit.shared, bool(fit.active[RIM_DECAY]), now, first, limit
        )
        valid = mark_outliers(misfit, information)
        centred = np.where(valid, raw, np.nan)
        level = np.array([np.mean(r[v]) if v.any() else 0.0 for r, v in zip(raw, valid, strict=True)])
        own, cross = pooled_covariance(np.where(valid, centred - level[:, None], 0.0), valid, longest)
        model = fit_roughness(own, cross, least_noise=matched_noise(misfit, information, valid))
        smooth, u, apart = smooth_traces(raw, valid, model)
        widths = 0.5 * np.diff(fit.position, prepend=fit.position[0] - period, append=fit.position[-1] + period)
        bound = np.minimum(widths[:-1], widths[1:])[:, None]
        now = np.clip(smooth, -bound, bound)
    return Traces(raw=raw, smooth=now, apart=np.clip(apart, -bound, bound), u=u, valid=valid, model=model)


def _with_beyond(stack: Stack) -> tuple[int, FloatArray, FloatArray]:
    """Positions and levels with the boundaries supposed beyond the frame; the number is that of the first real one."""
    position, level = stack.fit.best_position, stack.fit.level
    before, behind = stack.beyond
    if before is not None:
        position = np.concatenate([[before], position])
        level = np.concatenate([[1.0 - round(level[0])], level])
    if behind is not None:
        position = np.concatenate([position, [behind]])
        level = np.concatenate([level, [1.0 - round(level[-1])]])
    return int(before is not None), position, level


def _match(
    field: NDArray[np.float32],
    centre: NDArray[np.float32],
    gain: NDArray[np.float32],
    position: FloatArray,
    level: FloatArray,
    shared: FloatArray,
    rim: bool,
    moved: FloatArray,
    first: int,
    limit: float,
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Match all columns; boundaries supposed beyond the frame move with their neighbours and are held."""
    edges = moved.shape[0]
    full = moved
    if first:
        full = np.concatenate([moved[:1], full])
    if len(position) > len(full):
        full = np.concatenate([full, moved[-1:]])
    prior = np.full(len(position), 1e-3)
    prior[:first] = 1e3
    prior[first + edges :] = 1e3
    raw, information, misfit = np.zeros_like(full), np.zeros_like(full), np.zeros_like(full)
    match_columns(field, centre, gain, position, level, shared, rim, full, prior, limit, raw, information, misfit)
    own = slice(first, first + edges)
    return raw[own].copy(), information[own].copy(), misfit[own].copy()


def _followed(
    straight: StraightField,
    stack: Stack,
    traces: Traces,
    low: int,
    mean: FloatArray,
    variance: FloatArray,
    period: float,
    ended: NDArray[np.int64],
    gone: BoolArray,
) -> FollowedStack:
    stations = np.arange(traces.raw.shape[1])
    valid = traces.valid & ~gone
    valid = np.where((valid.sum(axis=1) < 4)[:, None], traces.valid, valid)
    deviation = traces.smooth
    aligned = low + stack.position[:, None] + deviation
    depth = straight.frame_depth(aligned, np.broadcast_to(stations, aligned.shape))
    base = straight.frame_depth(
        low + stack.position[:, None] + np.zeros_like(deviation), np.broadcast_to(stations, aligned.shape)
    )
    # what neighbouring boundaries share belongs to the direction of the layers, the rest is roughness
    reach = max(int(0.6 * period / straight.station_step), 1)
    stretch = np.maximum(1 - straight.frame.curvature * base, 0.05)
    own = _slope(deviation, straight.station_step, reach)
    shared = _neighbour_mean(own, NEIGHBOURS)
    slope = (_slope(base, straight.station_step, reach) + shared) / stretch
    square = slope**2 - _rough_slope(own, shared, traces.model.replication) / stretch**2
    cosine = 1 / np.sqrt(1 + np.maximum(square, -0.5))
    steps = np.diff(base, axis=0) * 0.5 * (cosine[1:] + cosine[:-1])
    normal = np.concatenate([np.zeros_like(base[:1]), np.cumsum(steps, axis=0)]) + (depth - base) * cosine
    return FollowedStack(
        stack=stack, traces=traces, depth=np.where(valid, depth, np.nan), normal=np.where(valid, normal, np.nan),
        cosine=cosine, valid=valid, first=low, profile=mean, variance=variance, terminations=ended,
    )  # fmt: skip


def _rough_slope(own: FloatArray, shared: FloatArray, replication: float) -> float:
    """Mean square slope that roughness leaves in the mean over neighbouring boundaries."""
    rows = min(2 * NEIGHBOURS + 1, len(own))
    index = np.arange(rows)
    left = float(np.mean(replication ** np.abs(index[:, None] - index[None, :])))
    if left > 0.9:
        return 0.0
    return float(np.mean((own - shared) ** 2)) / (1 - left) * left


def _neighbour_mean(value: FloatArray, reach: int) -> FloatArray:
    """Mean over ``reach`` rows to either side (fewer at the ends)."""
    total = np.concatenate([np.zeros_like(value[:1]), np.cumsum(value, axis=0)])
    at = np.arange(len(value))
    low, high = np.maximum(at - reach, 0), np.minimum(at + reach + 1, len(value))
    out: FloatArray = (total[high] - total[low]) / (high - low)[:, None]
    return out


def _keep_covered(found: FollowedStack, straight: StraightField, number: FloatArray) -> FollowedStack | None:
    """Leave out boundaries in the corners of the frame, of which little is in the picture."""
    stack, position = found.stack, found.stack.position
    at = np.clip(np.rint(position).astype(int), 0, len(number) - 1)
    depth = straight.depth_start + found.first + position
    length = number[at] * np.maximum(1 - straight.frame.curvature * depth, 0.0)
    enough = np.flatnonzero(length >= LEAST_COVERAGE * length.max())
    keep = slice(int(enough[0]), int(enough[-1]) + 1)
    if keep.stop - keep.start < 2:
        return None
    if keep.start == 0 and keep.stop == len(position):
        return found
    fit = stack.fit
    levels = slice(keep.start, keep.stop + 1)
    fit = replace(
        fit, position=position[keep], best_position=fit.best_position[keep], level=fit.level[levels],
        covariance=fit.covariance[keep, keep],
    )  # fmt: skip
    traces = found.traces
    traces = replace(
        traces, raw=traces.raw[keep], smooth=traces.smooth[keep], apart=traces.apart[keep], u=traces.u[keep],
        valid=traces.valid[keep],
    )  # fmt: skip
    return replace(
        found, stack=replace(stack, fit=fit, phase=stack.phase[levels]), traces=traces, depth=found.depth[keep],
        normal=found.normal[keep], cosine=found.cosine[keep], valid=found.valid[keep],
        terminations=found.terminations[keep],
    )  # fmt: skip


def _slope(depth: FloatArray, step: float, reach: int) -> FloatArray:
    """Slope along the stations over ``reach`` stations to either side (fewer at the ends)."""
    stations = depth.shape[1]
    at = np.arange(stations)
    left, right = np.maximum(at - reach, 0), np.minimum(at + reach, stations - 1)
    out: FloatArray = (depth[:, right] - depth[:, left]) / (np.maximum(right - left, 1) * step)
    return out


__all__ = ["FollowedStack", "RoughnessModel", "follow_layers", "mean_profile", "usable_depth"]
