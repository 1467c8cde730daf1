"""What the sequence of layers is like: means, spread free of measurement noise, law, drift, correlation, disorder."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from layerscan.records import Average, PhaseStatistics, StackStatistics

if TYPE_CHECKING:
    from layerscan.records import BoolArray, FloatArray

LEAST_FOR_SPREAD = 3
LEAST_FOR_LAW = 8
LEAST_FOR_TRENDS = 6


def average_thickness(thickness: FloatArray, covariance: FloatArray, *, u_scale: float | None) -> Average | None:
    """Mean of layers realised in the image, its u, and their spread with measurement noise removed.

    Parameters
    ----------
    thickness : (n,) float array
        Thicknesses [nm].
    covariance : (n, n) float array
        Their covariance from the fit [nm^2], calibration left out.
    u_scale : float or None
        Relative standard uncertainty common to all lengths.

    Returns
    -------
    Average or None
        None where there is no layer; ``sd`` None for fewer than three.

    Notes
    -----
    The noise part of the sample variance is trace(C)/n minus the mean covariance; what is left cannot fall below 0.
    """
    n = len(thickness)
    if n == 0:
        return None
    mean = float(thickness.mean())
    u_fit = math.sqrt(max(float(covariance.sum()), 0.0)) / n
    u = u_fit if u_scale is None else math.hypot(u_fit, mean * u_scale)
    return Average(mean=mean, u=u, sd=corrected_spread(thickness, covariance), n=n)


def corrected_spread(thickness: FloatArray, covariance: FloatArray) -> float | None:
    """Sample standard deviation with measurement noise removed; None for fewer than three values."""
    n = len(thickness)
    if n < LEAST_FOR_SPREAD:
        return None
    noise = (float(np.trace(covariance)) - float(covariance.sum()) / n) / (n - 1)
    return math.sqrt(max(float(thickness.var(ddof=1)) - noise, 0.0))


def describe_phase(phase: str, thickness: FloatArray, covariance: FloatArray) -> PhaseStatistics:
    """Moments of one phase's thickness and the better of a normal and a lognormal law.

    Notes
    -----
    The law with the higher likelihood is named and tested by Shapiro and Wilk's test (on the logarithms for the
    lognormal law); a small p-value says that neither fits. With few layers the test has little power.

    References
    ----------
    S. S. Shapiro and M. B. Wilk, Biometrika 52 (1965) 591, doi 10.1093/biomet/52.3-4.591.
    """
    n = len(thickness)
    spread = corrected_spread(thickness, covariance)
    skewness, law, p_value = None, None, None
    if n >= LEAST_FOR_LAW and thickness.min() > 0 and thickness.std() > 0:
        from scipy.stats import shapiro

        off = thickness - thickness.mean()
        third = float((off**3).mean() / (off**2).mean() ** 1.5)
        skewness = third * math.sqrt(n * (n - 1)) / (n - 2)
        logs = np.log(thickness)
        normal = -n * math.log(thickness.std())
        lognormal = -n * math.log(logs.std()) - float(logs.sum())
        law = "lognormal" if lognormal > normal else "normal"
        p_value = float(shapiro(logs if law == "lognormal" else thickness).pvalue)
    return PhaseStatistics(
        phase=phase, n=n, mean_nm=float(thickness.mean()), sd_nm=spread, skewness=skewness, law=law, law_p_value=p_value
    )


def longest_run(phase: tuple[str, ...], seen: BoolArray, *, least_common: int) -> tuple[int, int, int] | None:
    """First boundary, last boundary and number of whole periods of the longest run; None where there is none.

    Parameters
    ----------
    phase : (boundaries - 1,) str
        What lies between adjacent boundaries.
    seen : (boundaries, stations) bool array
        Where each boundary was traced.
    least_common : int
        Stations at which both ends must be traced.

    Notes
    -----
    Between equally long runs the one whose ends share more stations is taken.
    """
    edges = len(phase) + 1
    common = seen.astype(np.float32) @ seen.T.astype(np.float32)
    best: tuple[int, float, int, int] | None = None
    start = 0
    while start < edges - 1:
        if phase[start] not in ("dark", "bright"):
            start += 1
            continue
        stop = start
        while (
            stop < edges - 1 and phase[stop] in ("dark", "bright") and (stop == start or phase[stop] != phase[stop - 1])
        ):
            stop += 1
        for first in range(start, stop - 1):
            for last in range(stop - (stop - first) % 2, first, -2):
                if best is not None and last - first < best[0]:
                    break
                if common[first, last] >= least_common:
                    candidate = (last - first, float(common[first, last]), first, last)
                    if best is None or candidate[:2] > best[:2]:
                        best = candidate
        start = max(stop, start + 1)
    return None if best is None else (best[2], best[3], best[0] // 2)


def count_missing(thickness: FloatArray, phase: tuple[str, ...]) -> int:
    """Layers so thick that one of the other phase between them must be missing: their own and most of a period more."""
    names = np.array(phase, dtype=object)
    typical = {name: float(np.median(thickness[names == name])) for name in ("dark", "bright") if (names == name).any()}
    if len(typical) < 2 or len(thickness) < LEAST_FOR_TRENDS:
        return 0
    period = sum(typical.values())
    return sum(
        bool(name in typical and t > typical[name] + 0.7 * period) for t, name in zip(thickness, phase, strict=True)
    )


def steady_span(depth: FloatArray, covariance: FloatArray, phase: tuple[str, ...]) -> tuple[float, float] | None:
    """Distance from the first to the last boundary realised in the image, using what all boundaries say about it.

    Parameters
    ----------
    depth : (n + 1,) float array
        Depth of each boundary of the run.
    covariance : (n + 1, n + 1) float array
        Their covariance from the fit.
    phase : (n,) str
        Phase of each layer of the run.

    Returns
    -------
    (correction, u) or None
        What to add to last - first, and the standard uncertainty of the sum; None where disorder far above the noise
        leaves nothing to gain.

    Notes
    -----
    Thicknesses are taken as drawn about their phase's mean with a standard deviation that is estimated from them
    (restricted maximum likelihood); the span is then the best linear unbiased prediction. In a perfect lattice it
    becomes the lattice fit, which reaches the bound of a periodic profile; in a disordered stack it stays last - first.

    References
    ----------
    G. K. Robinson, Statist. Sci. 6 (1991) 15, doi 10.1214/ss/1177011926.
    """
    thickness = np.diff(depth)
    n = len(thickness)
    noise = _difference(covariance)
    names = sorted(set(phase))
    design = np.array([[float(p == name) for name in names] for p in phase])
    if n < 2 * len(names) + 4:
        return None
    rest = thickness - design @ np.linalg.lstsq(design, thickness, rcond=None)[0]
    measured = float(np.trace(noise)) / n
    if not measured > 0 or float(rest @ rest) / n > 12 * measured or n > 800:
        return None
    best: tuple[float, float] | None = None
    eye = np.eye(n)
    for tau2 in (0.0, *(measured * np.geomspace(0.003, 12.0, 14 if n < 250 else 7))):
        try:
            factor = np.linalg.cholesky(noise + tau2 * eye + 1e-9 * measured * eye)
        except np.linalg.LinAlgError:
            continue
        x, y = np.linalg.solve(factor, design), np.linalg.solve(factor, thickness)
        gram = x.T @ x
        beta = np.linalg.solve(gram, x.T @ y)
        score = (
            2 * float(np.log(np.diag(factor)).sum())
            + float(np.linalg.slogdet(gram)[1])
            + float(((y - x @ beta) ** 2).sum())
        )
        if best is None or score < best[0]:
            best = (score, float(tau2))
    if best is None:
        return None
    tau2 = best[1]
    inverse = np.linalg.inv(noise + tau2 * eye + 1e-9 * measured * eye)
    xv = design.T @ inverse
    spread = np.linalg.inv(xv @ design)
    beta = spread @ (xv @ thickness)
    predicted = design @ beta + tau2 * inverse @ (thickness - design @ beta)
    one = np.ones(n)
    kept = (eye - tau2 * inverse) @ design
    variance = tau2 * n - tau2**2 * float(one @ inverse @ one) + float(one @ kept @ spread @ kept.T @ one)
    return float((predicted - thickness).sum()), math.sqrt(max(variance, 0.0))


def describe_stack(
    *,
    depth: FloatArray,
    phase: tuple[str, ...],
    covariance: FloatArray,
    replication: float | None,
    terminations: int,
    missing: int,
    limited_by: str | None,
    next_measurement: str | None,
) -> StackStatistics:
    """Distribution per phase, drift, neighbour correlation and kind of disorder of a stack of complete layers.

    Parameters
    ----------
    depth : (boundaries,) float array
        Mean depth of each boundary along the normal [nm].
    phase : (boundaries - 1,) str
        Phase of each layer between them.
    covariance : (boundaries, boundaries) float array
        Covariance of the depths [nm^2].
    replication, terminations, missing, limited_by, next_measurement
        Passed on to the record.

    Notes
    -----
    Cumulative disorder (each period drawn on its own) lets the boundary positions wander: the variance of the distance
    over k periods grows as k. Non-cumulative disorder (jitter about fixed places) keeps it constant and makes
    neighbouring periods anticorrelated at -1/2. The kinds are told apart by the likelihood of the second differences
    of the variance at lags 1 and up; near the boundary between them the answer is "undecided". The coherence length is
    the distance at which the phase of a cumulative stack has lost itself: period * (period/sd)^2 / (2 pi^2).

    References
    ----------
    R. Hosemann and S. N. Bagchi, Direct Analysis of Diffraction by Matter, North-Holland 1962 (memory): paracrystal.
    """
    thickness = np.diff(depth)
    spread = _difference(covariance)
    phases = tuple(
        describe_phase(name, thickness[index], spread[np.ix_(index, index)])
        for name in ("dark", "middle", "bright")
        if len(index := np.flatnonzero(np.array(phase) == name))
    )
    correlation, u_correlation = _neighbour_correlation(thickness, phase)
    periods, starts = _whole_periods(depth, phase)
    drift, u_drift, disorder, coherence = None, None, None, None
    if len(periods) >= LEAST_FOR_TRENDS:
        drift, u_drift = _drift(periods)
        disorder = _kind_of_disorder(periods)
        noise = float(np.mean(np.diag(covariance)[starts]) * 2)
        sd = math.sqrt(max(float(_detrended(periods).var(ddof=2)) - noise, 0.0))
        mean = float(periods.mean())
        if sd > 1e-4 * mean and disorder != "non-cumulative":
            coherence = mean * (mean / sd) ** 2 / (2 * math.pi**2)
    return StackStatistics(
        phases=phases,
        neighbour_correlation=correlation,
        u_neighbour_correlation=u_correlation,
        drift_relative_per_layer=drift,
        u_drift_relative_per_layer=u_drift,
        disorder=disorder,  # type: ignore[arg-type]
        coherence_length_nm=coherence,
        replication=replication,
        missing_layers=missing,
        terminations=terminations,
        limited_by=limited_by,
        next_measurement=next_measurement,
    )


def _difference(covariance: FloatArray) -> FloatArray:
    """Covariance of adjacent differences."""
    step = np.diff(covariance, axis=0)
    out: FloatArray = np.diff(step, axis=1)
    return out


def _whole_periods(depth: FloatArray, phase: tuple[str, ...]) -> tuple[FloatArray, list[int]]:
    """Adjacent whole periods from the first layer on, and the boundary where each starts."""
    starts = [
        i for i in range(0, len(phase) - 1, 2) if phase[i] in ("dark", "bright") and phase[i + 1] in ("dark", "bright")
    ]
    return np.array([depth[i + 2] - depth[i] for i in starts]), starts


def _neighbour_correlation(thickness: FloatArray, phase: tuple[str, ...]) -> tuple[float | None, float | None]:
    """Correlation between the residuals of adjacent layers, each phase's trend removed."""
    n = len(thickness)
    residual = np.full(n, np.nan)
    for name in ("dark", "bright"):
        index = np.flatnonzero(np.array(phase) == name)
        if len(index) < LEAST_FOR_TRENDS:
            return None, None
        value = thickness[index]
        off = _detrended(value)
        if not off.std() > 1e-6 * value.mean():
            return None, None
        residual[index] = off / off.std()
    pairs = residual[1:] * residual[:-1]
    pairs = pairs[np.isfinite(pairs)]
    r = float(np.clip(pairs.mean(), -1, 1))
    return r, (1 - r * r) / math.sqrt(max(len(pairs) - 2, 1))


def _detrended(value: FloatArray) -> FloatArray:
    x = np.arange(len(value)) - 0.5 * (len(value) - 1)
    slope = float((x * value).sum() / (x * x).sum())
    out: FloatArray = value - value.mean() - slope * x
    return out


def _drift(periods: FloatArray) -> tuple[float, float]:
    """Slope of the period against its number, relative to the mean, with its standard uncertainty."""
    n = len(periods)
    x = np.arange(n) - 0.5 * (n - 1)
    slope = float((x * periods).sum() / (x * x).sum())
    rest = periods - periods.mean() - slope * x
    u = math.sqrt(float((rest**2).sum()) / max(n - 2, 1) / float((x * x).sum()))
    mean = float(periods.mean())
    return slope / mean, u / mean


def _kind_of_disorder(periods: FloatArray) -> str:
    """Tell independent periods from jitter about fixed places by the correlation of adjacent periods (0 or -1/2)."""
    off = _detrended(periods)
    variance = float((off * off).mean())
    if not variance > 0:
        return "undecided"
    r = float((off[1:] * off[:-1]).mean()) / variance
    u = 1 / math.sqrt(len(periods))
    if r > -0.25 + 0.6 * u:
        return "cumulative"
    return "non-cumulative" if r < -0.25 - 0.6 * u else "undecided"
