"""Dominant spacing of a mean profile from its power spectrum."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from layerscan.records import FloatArray

_WINDOWS: dict[int, FloatArray] = {}


def _power(profile: FloatArray, pad: int) -> tuple[FloatArray, int]:
    """Power spectrum of the detrended, tapered profile and the length of the transform."""
    seen = np.isfinite(profile)
    value = profile if seen.all() else np.where(seen, profile, profile[seen].mean())
    n = len(value)
    x = np.arange(n) - 0.5 * (n - 1)
    value = value - value.mean() - x * float((x * value).sum() / (x * x).sum())
    size = 1 << max(math.ceil(math.log2(pad * n)), 3)
    return np.abs(np.fft.rfft(value * np.hanning(n), size)) ** 2, size


def strongest_spacing(profile: FloatArray, *, least_periods: float = 1.5) -> float | None:
    """Spacing [samples] whose fundamental and harmonics hold most of a profile's power, weighed against its red part.

    None where the profile holds fewer than ``least_periods`` of any spacing that can be told.

    Notes
    -----
    The spectrum is whitened by frequency (a red background falls at least as 1/f), then each candidate is scored by its
    own power, plus that of its second harmonic at a half.
    """
    n = len(profile)
    power, size = _power(profile, 4)
    low = max(math.ceil(least_periods / n * size), 1)
    high = int(size / 3.0)
    if high <= low + 1:
        return None
    index = np.arange(low, high)
    white = power * np.arange(len(power))
    second = np.where(2 * index < len(power), white[np.minimum(2 * index, len(power) - 1)], 0.0)
    score = white[index] + 0.25 * second
    best = int(index[np.argmax(score)])
    half = best // 2  # a subharmonic with a third of the power is the fundamental
    if half >= low:
        reach = max(int(0.06 * half), 1)
        near = power[half - reach : half + reach + 1]
        if near.max() > 0.5 * power[best]:
            best = half - reach + int(np.argmax(near))
    if not power[best] > 0:
        return None
    return size / best


def dominant_spacing(profile: FloatArray, *, near: float) -> tuple[float, float]:
    """Strongest line of a profile's power spectrum within a factor 1.6 of ``near``, and the spread of that line.

    Notes
    -----
    The spread is half the half width of the line at half its height, so that an irregular structure states a wide one;
    a strictly periodic profile is limited by its own length.
    """
    power, size = _power(profile, 16)
    low, high = max(int(size / near / 1.6), 1), min(int(size / near * 1.6) + 1, len(power) - 2)
    if high <= low:
        return near, 0.3 * near
    best = low + int(np.argmax(power[low : high + 1]))
    half = 0.5 * power[best]
    left, right = best, best
    while left > 0 and power[left] > half:
        left -= 1
    while right < len(power) - 1 and power[right] > half:
        right += 1
    frequency = best / size
    return 1 / frequency, 0.25 * (right - left) / size / frequency**2
