"""Traces: every boundary followed across the field, with its uncertainty at each station.

Per station all boundaries are fitted together by a matched filter (one Gauss-Newton step on the edge model, neighbours
coupled); the raw traces are then smoothed as a Gaussian process whose covariance along the stations and between
neighbouring boundaries is estimated from all of them. The noise of a raw trace is what the extrapolation of its
covariance to zero lag leaves over.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np
from numba import njit

from layerscan.measurement.edges import blurred_edge, blurred_rim

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from layerscan.records import BoolArray, FloatArray


@dataclass(frozen=True, kw_only=True)
class RoughnessModel:
    """Covariance of a boundary's deviations along it: variance * exp(-(lag/length)^(2 hurst)); lengths in stations."""

    variance: float
    length: float
    hurst: float
    noise_variance: float
    replication: float
    noise_neighbour: float = 0.0  # correlation of the noise of neighbouring stations

    def covariance(self, lag: FloatArray) -> FloatArray:
        """Covariance at lags in stations."""
        return self.variance * np.exp(-((np.abs(lag) / self.length) ** (2 * self.hurst)))


@dataclass(frozen=True, kw_only=True, eq=False)
class Traces:
    """Deviation of each boundary from its mean depth [samples], (boundaries, stations); NaN where not traced."""

    raw: FloatArray
    smooth: FloatArray
    apart: FloatArray  # smoothed without the station's own raw value, for averages along the traces
    u: FloatArray
    valid: BoolArray
    model: RoughnessModel


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def match_columns(  # type: ignore[no-untyped-def]
    field, centre, gain, position, level, shared, decay_active, moved, prior, limit, raw, information, misfit
):
    """One Gauss-Newton step of all boundaries at every station.

    ``field`` is intensity; ``centre`` and ``gain`` (depth, stations) bring it to 0 and 1. ``moved`` is where each
    boundary is taken to be relative to ``position``; ``raw`` is the estimate of the same, ``information`` its diagonal
    weight (of unit noise), ``misfit`` the mean square residual about each boundary.
    """
    count, stations = field.shape
    edges = position.size
    s, box, gamma, skew = shared[0], shared[1], shared[2], shared[6]
    reach = 4.0 * s + 0.5 * box
    matrix = np.zeros((edges, 3))
    right = np.zeros(edges)
    at = np.empty(edges)
    rise = np.empty(edges)
    bump = np.empty(edges)
    for j in range(stations):
        matrix[:] = 0.0
        right[:] = 0.0
        for b in range(edges):
            at[b] = position[b] + moved[b, j]
            misfit[b, j] = 0.0
            information[b, j] = 0.0
        for b in range(1, edges):
            if at[b] < at[b - 1] + 0.2:
                middle = 0.5 * (at[b] + at[b - 1])
                at[b - 1], at[b] = middle - 0.1, middle + 0.1
        first = 0
        start = max(math.ceil(at[0] - reach), 0)
        stop = min(int(at[edges - 1] + reach) + 1, count)
        number = np.zeros(edges)
        for d in range(start, stop):
            while first < edges and d - at[first] > reach:
                first += 1
            if first >= edges:
                break
            if at[first] - d > reach:
                continue
            if not gain[d, j] > 0:
                continue
            value = (field[d, j] - centre[d, j]) / gain[d, j]
            if value != value:
                continue
            total = level[first]
            rim = 0.0
            last = first
            b = first
            while b < edges and at[b] - d <= reach:
                step = level[b + 1] - level[b]
                e, du, _, _, _ = blurred_edge(d - at[b], s, box, skew if step > 0 else -skew)
                total += step * e
                rise[b] = -step * du
                bump[b] = 0.0
                if decay_active:
                    side = 1.0 if step > 0 else -1.0
                    v = side * (d - at[b])
                    bright, dark = blurred_rim(v, s, shared[5]), blurred_rim(-v, s, shared[5])
                    rim += shared[3] * bright[0] + shared[4] * dark[0]
                    bump[b] = -side * (shared[3] * bright[1] - shared[4] * dark[1])
                last = b
                b += 1
            slope = 1 + gamma * (1 - 2 * total)
            residual = value - (total + gamma * total * (1 - total) + rim)
            g0 = g1 = 0.0
            for b in range(first, last + 1):
                g = slope * rise[b] + bump[b]
                right[b] += g * residual
                matrix[b, 0] += g * g
                if b > first:
                    matrix[b, 1] += g * g1
                if b > first + 1:
                    matrix[b, 2] += g * g0
                g0, g1 = g1, g
                misfit[b, j] += residual * residual
                number[b] += 1
        for b in range(edges):
            information[b, j] = matrix[b, 0]
            misfit[b, j] = misfit[b, j] / number[b] if number[b] > 0.5 * reach else np.nan
            matrix[b, 0] += prior[b] + 1e-9
        # banded Cholesky with two neighbours
        for i in range(edges):
            if i > 1:
                matrix[i, 2] /= matrix[i - 2, 0]
            if i > 0:
                total = matrix[i, 1]
                if i > 1:
                    total -= matrix[i, 2] * matrix[i - 1, 1]
                matrix[i, 1] = total / matrix[i - 1, 0]
            total = matrix[i, 0]
            if i > 0:
                total -= matrix[i, 1] ** 2
            if i > 1:
                total -= matrix[i, 2] ** 2
            matrix[i, 0] = math.sqrt(max(total, 1e-12))
        for i in range(edges):
            total = right[i]
            if i > 0:
                total -= matrix[i, 1] * right[i - 1]
            if i > 1:
                total -= matrix[i, 2] * right[i - 2]
            right[i] = total / matrix[i, 0]
        for i in range(edges - 1, -1, -1):
            total = right[i]
            if i + 1 < edges:
                total -= matrix[i + 1, 1] * right[i + 1]
            if i + 2 < edges:
                total -= matrix[i + 2, 2] * right[i + 2]
            right[i] = total / matrix[i, 0]
            raw[i, j] = moved[i, j] + min(max(right[i], -limit), limit)


def pooled_covariance(raw: FloatArray, valid: BoolArray, longest: int) -> tuple[FloatArray, FloatArray]:
    """Covariance of the raw traces along the stations at lags 0 to ``longest``, and between neighbours at these."""
    size = 1
    while size < raw.shape[1] + longest + 1:
        size *= 2
    filled = np.where(valid, raw, 0.0)
    spectrum = np.fft.rfft(filled, size, axis=1)
    mask = np.fft.rfft(valid.astype(float), size, axis=1)
    own = np.fft.irfft((spectrum * spectrum.conj()).sum(axis=0), size)[: longest + 1]
    number = np.fft.irfft((mask * mask.conj()).sum(axis=0), size)[: longest + 1]
    if len(raw) > 1:
        cross = np.fft.irfft((spectrum[1:] * spectrum[:-1].conj()).real.sum(axis=0), size)[: longest + 1]
        cross_number = np.fft.irfft((mask[1:] * mask[:-1].conj()).real.sum(axis=0), size)[: longest + 1]
    else:
        cross, cross_number = np.zeros(longest + 1), np.ones(longest + 1)
    return own / np.maximum(number, 0.5), cross / np.maximum(cross_number, 0.5)


HURST_GRID = (0.4, 0.5, 0.6, 0.7, 0.8, 1.0)
FIRST_LAG = 2  # interpolation lets neighbouring stations share noise, stations further apart do not


def fit_covariance(own: FloatArray, first_lag: int = FIRST_LAG) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Extrapolate covariances to lag zero: fit a stretched exponential and a constant to lags from ``first_lag`` on.

    Parameters
    ----------
    own : (lags, traces) float array
        Covariance of each trace at lags 0, 1, ... stations.
    first_lag : int
        First lag that the noise of the traces does not reach.

    Returns
    -------
    variance, length, hurst : (traces,) float arrays
        Variance at lag zero without the noise, correlation length in stations, exponent.

    Notes
    -----
    The height-height correlation extrapolated to zero lag: noise that is independent from station to station does not
    enter. The constant takes up what the removed mean has taken away. Roughness far below the noise cannot be
    recovered: the variance then is a difference of nearly equal numbers.
    """
    lags = np.arange(len(own), dtype=float)
    use = lags[first_lag:]
    lengths = np.geomspace(1.0, max(0.5 * len(own), 2.0), 20)
    grid = np.array([(h, length) for h in HURST_GRID for length in lengths])
    shape = np.exp(-((use[None, :] / grid[:, 1:]) ** (2 * grid[:, :1])))
    weight = 1.0 / (1.0 + use / 6.0)
    data = own[first_lag:]
    total_w = weight.sum()
    mean_shape = shape @ weight / total_w
    mean_data = weight @ data / total_w
    off_shape = shape - mean_shape[:, None]
    off_data = data - mean_data
    norm = (off_shape**2) @ weight + 1e-12
    amplitude = np.maximum((off_shape * weight) @ off_data / norm[:, None], 0.0)
    constant = np.minimum(mean_data - amplitude * mean_shape[:, None], 0.0)
    amplitude = np.where(
        constant < 0, amplitude, np.maximum((shape * weight) @ data / ((shape**2) @ weight)[:, None], 0.0)
    )
    misfit = (
        weight @ data**2
        - 2 * amplitude * ((shape * weight) @ data)
        - 2 * constant * (weight @ data)
        + amplitude**2 * ((shape**2) @ weight)[:, None]
        + 2 * amplitude * constant * (shape @ weight)[:, None]
        + constant**2 * total_w
    )
    best = np.argmin(misfit, axis=0)
    index = np.arange(own.shape[1])
    variance = np.clip(amplitude[best, index] + constant[best, index], 0.0, np.maximum(own[0], 0.0))
    return variance, grid[best, 1], grid[best, 0]


def fit_roughness(
    own: FloatArray, cross: FloatArray, first_lag: int = FIRST_LAG, least_noise: float = 0.0
) -> RoughnessModel:
    """Roughness model of all traces from their pooled covariance and the cross-covariance of neighbours.

    ``least_noise`` is the variance that the picture's own noise gives a matched edge: where the extrapolation leaves
    less than that, the roughness is given the rest.
    """
    total = float(own[0])
    variance, length, hurst = (float(x[0]) for x in fit_covariance(own[:, None], first_lag))
    noise = max(total - variance, min(least_noise, total), 1e-4 * max(total, 1e-12))
    variance = min(variance, max(total - noise, 0.0))
    near = slice(first_lag, min(first_lag + 4, len(own)))
    denominator = float(own[near].sum())
    replication = float(np.clip(cross[near].sum() / denominator, 0.0, 0.98)) if denominator > 0.05 * total else 0.0
    model = RoughnessModel(
        variance=max(variance, 1e-12), length=length, hurst=hurst, noise_variance=noise, replication=replication
    )
    if len(own) < 3:
        return model
    neighbour = (float(own[1]) - _offset(own, model, first_lag, 1)) / noise
    return replace(model, noise_neighbour=float(np.clip(neighbour, 0.0, 0.4)))


def _offset(own: FloatArray, model: RoughnessModel, first_lag: int, lag: int) -> float:
    """Covariance of the roughness alone at a short lag: the model's, moved to where the measured ones continue it."""
    fitted = model.covariance(np.array([float(lag), float(first_lag)]))
    return float(fitted[0] + min(float(own[first_lag]) - fitted[1], 0.0))


def smooth_traces(
    raw: FloatArray, valid: BoolArray, model: RoughnessModel
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Posterior mean and standard deviation of the deviations under the roughness model, gaps filled by iteration.

    The third array is the mean that each station has without its own raw value: a profile averaged along it does not
    sharpen its own noise.

    The covariance is a product (along the stations times between boundaries), so the joint estimate separates into
    independent filters after turning to the eigenvectors of the coupling between boundaries.
    """
    edges, stations = raw.shape
    level = np.array([row[ok].mean() if ok.any() else 0.0 for row, ok in zip(raw, valid, strict=True)])
    pad = int(min(stations, max(8, 4 * model.length)))
    size = 1
    while size < stations + 2 * pad:
        size *= 2
    lag = np.minimum(np.arange(size), size - np.arange(size)).astype(float)
    power = np.maximum(np.fft.rfft(model.covariance(lag)).real, 1e-9 * model.variance * size + 1e-18)
    index = np.arange(edges)
    coupling, vectors = np.linalg.eigh(model.replication ** np.abs(index[:, None] - index[None, :]))
    coupling = np.maximum(coupling, 1e-6)[:, None]
    turn = np.cos(2 * np.pi * np.arange(len(power)) / size)
    noise = model.noise_variance * np.maximum(1 + 2 * model.noise_neighbour * turn, 0.05)
    gain = coupling * power / (coupling * power + noise)
    estimate = np.where(valid, raw - level[:, None], 0.0)
    fraction = valid.mean()
    smooth = np.zeros_like(estimate)
    for _ in range(1 if fraction > 0.999 else 6):
        data = np.where(valid, raw - level[:, None], smooth)
        turned = vectors.T @ data
        padded = np.pad(turned, ((0, 0), (pad, pad)), mode="reflect" if pad < stations else "edge")
        filtered = np.fft.irfft(np.fft.rfft(padded, size, axis=1) * gain, size, axis=1)[:, pad : pad + stations]
        smooth = vectors @ filtered
    weights = np.full(power.shape, 2.0)
    weights[0] = weights[-1] = 1.0
    variance = (weights * gain * noise).sum(axis=1) / size
    u = np.sqrt(vectors**2 @ variance)
    spread = np.where(valid, u[:, None], math.sqrt(model.variance + model.noise_variance))
    own = (vectors**2 @ ((weights * gain).sum(axis=1) / size))[:, None]
    apart = np.where(valid, smooth - own * (raw - level[:, None] - smooth) / np.maximum(1 - own, 0.05), smooth)
    return smooth + level[:, None], spread, apart + level[:, None]


def matched_noise(misfit: FloatArray, information: FloatArray, valid: BoolArray) -> float:
    """Variance of a matched edge from the residuals about it and the bound: mean square residual over information.

    Lowered somewhat, since interpolated samples share noise that the residuals show only in part.
    """
    use = valid & np.isfinite(misfit) & (information > 0)
    return 0.85 * float(np.median(misfit[use] / information[use])) if use.any() else 0.0


def mark_outliers(misfit: FloatArray, information: FloatArray) -> NDArray[np.bool_]:
    """Stations where a boundary can be trusted: full information and a residual like that of the others."""
    with np.errstate(invalid="ignore"):
        seen = np.isfinite(misfit) & (information > 0)
        if not seen.any():
            return seen
        full = np.array([np.median(row[ok]) if ok.any() else 0.0 for row, ok in zip(information, seen, strict=True)])
        seen &= information > 0.6 * full[:, None]
        typical = np.array([np.median(row[ok]) if ok.any() else 0.0 for row, ok in zip(misfit, seen, strict=True)])
        spread = np.median(np.abs(misfit - typical[:, None])[seen]) * 1.4826 if seen.any() else 0.0
        trusted: NDArray[np.bool_] = seen & (misfit < np.maximum(typical[:, None] + 6 * spread, 3 * typical[:, None]))
        return trusted
