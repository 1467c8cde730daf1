"""Period of one evenly spaced profile by maximum likelihood over a fundamental and its harmonics."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

import numpy as np

from layerscan.errors import MeasurementError
from layerscan.records import Period

if TYPE_CHECKING:
    from layerscan.records import FloatArray

MOST_HARMONICS = 8
LEAST_PERIODS = 3


def estimate_period(intensity: Any, *, step_nm: float) -> Period:
    """Estimate the period of an evenly spaced line profile.

    Parameters
    ----------
    intensity : (N,) float array
        Intensity against depth.
    step_nm : float
        Distance between samples [nm].

    Returns
    -------
    Period
        ``period_nm`` and its standard uncertainty ``u_period_nm`` for a strictly periodic profile in white noise;
        ``statistic`` is the ratio of the fitted harmonics' energy to what noise would give; flags.

    Raises
    ------
    MeasurementError
        Fewer than three periods fit in the profile, it is constant, not finite, not one-dimensional or too short, or
        no period stands out of its noise.

    Notes
    -----
    Least squares of a constant, a slope and M harmonics at one fundamental; M is chosen by the Bayesian information
    criterion. For a strictly periodic profile its variance reaches the Cramer-Rao bound
    p^4 6 s^2/(pi^2 step^2 sum (m A_m)^2 N(N^2 - 1)) (p in samples times step). The uncertainty is that of the curvature
    of the likelihood and of the residuals. It cannot see disorder: where layers differ, the period of the harmonics is
    not the realised mean, which only the boundaries measure; disorder of neighbouring periods is flagged
    ``irregular`` when the residuals are far from white.

    References
    ----------
    B. G. Quinn and E. J. Hannan, The Estimation and Tracking of Frequency, Cambridge University Press 2001 (memory).

    Examples
    --------
    >>> import numpy as np
    >>> depth = np.arange(600)
    >>> found = estimate_period(np.cos(2 * np.pi * depth / 24.0), step_nm=2.5)
    >>> round(found.period_nm, 3)
    60.0
    """
    value = _checked(intensity, step_nm)
    n = len(value)
    x: FloatArray = np.arange(n, dtype=np.float64) - 0.5 * (n - 1)
    flat = value - np.polyval(np.polyfit(x, value, 1), x)
    frequency, harmonics, statistic = _start(flat)
    frequency, harmonics, rest, u_frequency = _refine_best(value, x, frequency, harmonics)
    if frequency * n < LEAST_PERIODS - 0.05:
        raise MeasurementError(
            f"Only {frequency * n:.1f} periods fit in the profile of {n} samples. At least three are needed: "
            "give a longer profile."
        )
    flags = []
    if 1 / frequency < 4:
        flags.append("near_nyquist")
    if _redness(rest) > 0.25:
        flags.append("irregular")
    period = 1 / frequency
    return Period(
        period_nm=period * step_nm,
        u_period_nm=max(u_frequency, 1e-12 * frequency) / frequency**2 * step_nm,
        method=f"maximum likelihood, {harmonics} harmonic{'s' if harmonics > 1 else ''}",
        statistic=statistic,
        flags=tuple(flags),
    )


def _checked(intensity: Any, step_nm: float) -> FloatArray:
    value = np.asarray(intensity)
    if value.ndim != 1:
        raise MeasurementError(f"The profile has {value.ndim} dimensions. Give one evenly spaced line of intensities.")
    if not np.issubdtype(value.dtype, np.number) or np.iscomplexobj(value):
        raise MeasurementError(f"The profile holds {value.dtype}, not real numbers. Give one line of intensities.")
    value = value.astype(np.float64)
    if not (isinstance(step_nm, int | float | np.number) and math.isfinite(step_nm) and step_nm > 0):
        raise MeasurementError(
            f"The step {step_nm!r} nm must be positive and finite. Give the distance between samples in nm."
        )
    if len(value) < 8:
        raise MeasurementError(
            f"The profile has {len(value)} samples; a period needs at least 8, and three periods in them."
        )
    if not np.isfinite(value).all():
        bad = int((~np.isfinite(value)).sum())
        raise MeasurementError(
            f"{bad} of {len(value)} samples of the profile are not finite. Fill or leave out the gap first."
        )
    if not np.ptp(value) > 1e-12 * max(float(np.abs(value).max()), 1e-300):
        raise MeasurementError("The profile is constant, so it has no period. Give a line that crosses the layers.")
    return value


def _start(flat: FloatArray) -> tuple[float, int, float]:
    """Coarse fundamental from harmonic sums of the padded periodogram: (frequency, harmonics, statistic)."""
    n = len(flat)
    size = 1
    while size < 8 * n:
        size *= 2
    power = np.abs(np.fft.rfft(flat, size)) ** 2
    total = float((flat**2).sum())
    low = max(math.floor((LEAST_PERIODS - 1.0) / n * size), 1)
    high = len(power) - 1
    candidates = np.arange(low, int(0.5 * size / 1) + 1)
    candidates = candidates[candidates <= high]
    score = np.full(len(candidates), -np.inf)
    count = np.ones(len(candidates), int)
    explained = np.zeros(len(candidates))
    log_n = math.log(n)
    for m in range(1, MOST_HARMONICS + 1):
        inside = candidates * m <= high
        if m > 1 and not inside.any():
            break
        explained[inside] += power[candidates[inside] * m] * 2 / n
        rest = np.maximum(total - explained, 1e-9 * total)
        value = -n * np.log(rest / total) - (2 * m) * log_n
        better = inside & (value > score)
        score[better] = value[better]
        count[better] = m
    best = int(np.argmax(score))
    if score[best] < 2 * log_n + 6:
        raise MeasurementError(
            "No period stands out of the noise of the profile. Give a line that crosses at least three periods "
            "of the layers, wider if the picture is noisy."
        )
    return float(candidates[best] / size), int(count[best]), float(score[best])


def _design(x: FloatArray, frequency: float, harmonics: int) -> FloatArray:
    """Columns: one, slope, then cosine and sine of each harmonic (built by multiplying up the first)."""
    design = np.empty((len(x), 2 * harmonics + 2))
    design[:, 0], design[:, 1] = 1.0, x / len(x)
    first = np.exp(2j * math.pi * frequency * x)
    wave = first.copy()
    for m in range(1, harmonics + 1):
        design[:, 2 * m], design[:, 2 * m + 1] = wave.real, wave.imag
        wave = wave * first
    return design


def _refine_best(
    value: FloatArray, x: FloatArray, frequency: float, harmonics: int
) -> tuple[float, int, FloatArray, float]:
    """Refine the start and its multiples, which explain a profile as well with fewer harmonics; best by BIC."""
    tried = [
        _refine(value, x, frequency * k, harmonics) for k in range(1, harmonics + 1) if k == 1 or frequency * k < 0.4
    ]
    best = min(tried, key=lambda fit: fit[0])
    return best[1], best[2], best[3], best[4]


def _refine(
    value: FloatArray, x: FloatArray, frequency: float, harmonics: int
) -> tuple[float, float, int, FloatArray, float]:
    """Gauss-Newton on frequency and amplitudes for every number of harmonics near the start; best by BIC."""
    n = len(x)
    floor = 1e-20 * max(float(value @ value), 1e-300)
    best: tuple[float, float, int, FloatArray, float] | None = None
    most = min(MOST_HARMONICS, max(int(0.5 / frequency), 1), max((n - 4) // 2, 1))
    for m in range(1, most + 1):
        if m > harmonics + 2:
            break
        f, rest, u = _gauss_newton(value, x, frequency, m)
        score = n * math.log(max(float(rest @ rest), floor) / n) + (2 * m) * math.log(n)
        if best is None or score < best[0]:
            best = (score, f, m, rest, u)
    assert best is not None
    return best


def _gauss_newton(
    value: FloatArray, x: FloatArray, frequency: float, harmonics: int
) -> tuple[float, FloatArray, float]:
    n = len(x)
    f = frequency
    limit = 0.6 / n
    u = 0.0
    rest = value
    for _ in range(12):
        design = _design(x, f, harmonics)
        gram = design.T @ design
        coefficient = np.linalg.solve(gram, design.T @ value)
        rest = value - design @ coefficient
        slope = np.zeros(n)
        for m in range(1, harmonics + 1):
            a, b = coefficient[2 * m], coefficient[2 * m + 1]
            turn = 2 * math.pi * m
            slope += turn * x * (b * np.cos(turn * f * x) - a * np.sin(turn * f * x))
        projected = slope - design @ np.linalg.solve(gram, design.T @ slope)
        curvature = float(projected @ projected)
        if not curvature > 0:
            break
        step = float(projected @ rest) / curvature
        variance = float(rest @ rest) / max(n - 2 * harmonics - 3, 1)
        u = math.sqrt(variance / curvature)
        f += min(max(step, -limit), limit)
        if abs(step) < 1e-4 * u or abs(step) < 1e-14:
            break
    return f, rest, u


def _redness(rest: FloatArray) -> float:
    """Correlation of neighbouring residuals."""
    square = float(rest @ rest)
    return float(rest[1:] @ rest[:-1]) / square if square > 0 else 0.0
