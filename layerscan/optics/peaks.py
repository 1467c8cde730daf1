"""Reading reflectance bands: midpoint at half height, width, order."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from layerscan.errors import InputError
from layerscan.records import Peak

if TYPE_CHECKING:
    from numpy.typing import ArrayLike

    from layerscan.records import FloatArray

MINIMUM_HEIGHT = 0.005  # reflectance above the base below which nothing is called a peak
RELATIVE_HEIGHT = 0.25  # of the tallest peak, for spectra of which no structure is known
NOISE_RATIO = 8.0  # a peak stands out by this many standard deviations of the noise that is left
ORDER_REACH = 0.35  # how far a band may lie from its order, in orders
ORDER_OUTSIDE = 0.05  # how far the order's own place may lie outside the spectrum
ORDER_WINDOW = 0.4  # within which nothing may be taller


def find_peaks(
    wavelength_nm: ArrayLike,
    value: ArrayLike,
    *,
    order: ArrayLike | None = None,
    relative_height: float = RELATIVE_HEIGHT,
    smooth: bool = True,
) -> tuple[Peak, ...]:
    """Find the bands of a spectrum and read them at half height.

    Parameters
    ----------
    wavelength_nm : (wavelengths,) float array
        Increasing.
    value : (wavelengths,) float array
        Reflectance, calculated or measured.
    order : (wavelengths,) float array, optional
        Bragg order of a known structure at each wavelength, 2 x optical period / wavelength: then the best band near
        each whole number is read, one per order, and side lobes are not. Without it every band is read that is at
        least ``relative_height`` of the tallest, and ``Peak.order`` is None.
    relative_height : float
        See above.
    smooth : bool
        Smooth a noisy spectrum first, by as much as its noise asks for.

    Returns
    -------
    tuple of Peak
        From long to short wavelength; ``u_wavelength_nm`` is None.

    Raises
    ------
    InputError
        Arrays that do not fit, NaN, or wavelengths that do not increase.

    Notes
    -----
    A band's height is counted from its base: the higher of the two lowest values that lie between it and the next
    taller band on either side; a side on which the spectrum ends before it has turned up again does not count unless
    both do. Half height is half-way between base and top. Wavelength and width are those of the two crossings of half
    height nearest the top: the largest value of a flat band wanders, its flanks do not. A band of which a flank lies
    outside the spectrum is not read. The noise is taken from second differences; Gaussian smoothing grows until what
    is left is below 2 % of the tallest band, at most to a twentieth of the range.

    Examples
    --------
    >>> x = np.arange(400.0, 701.0)
    >>> peak = find_peaks(x, np.exp(-(((x - 550) / 30) ** 2)))[0]
    >>> round(peak.wavelength_nm, 3), round(peak.fwhm_nm, 1)
    (550.0, 50.0)
    """
    x, y = np.asarray(wavelength_nm, dtype=float), np.asarray(value, dtype=float)
    if x.ndim != 1 or x.shape != y.shape or x.size < 5:
        raise InputError(
            f"Peaks need two arrays of one length, five values or more; got shapes {x.shape} and {y.shape}."
        )
    if not (np.isfinite(x).all() and np.isfinite(y).all()):
        raise InputError("The spectrum holds values that are not finite. Leave those rows out.")
    if (np.diff(x) <= 0).any():
        raise InputError("The wavelengths of the spectrum do not increase. Sort them and leave out repeated ones.")
    noise = 0.0
    if smooth:
        y, noise = smooth_spectrum(x, y)
    threshold = max(MINIMUM_HEIGHT, NOISE_RATIO * noise)
    chosen: list[tuple[int | None, Band]]
    if order is None:
        bands = [band for band in read_bands(x, y) if band[3] >= threshold]
        tallest = max((band[3] for band in bands), default=0.0)
        chosen = [(None, band) for band in bands if band[3] >= relative_height * tallest]
    else:
        chosen = [(m, band) for m, band in _by_order(x, y, np.asarray(order, dtype=float)) if band[3] >= threshold]
    found = [
        Peak(order=m, wavelength_nm=band[0], u_wavelength_nm=None, reflectance=band[2], fwhm_nm=band[1])
        for m, band in chosen
    ]
    return tuple(sorted(found, key=lambda peak: -peak.wavelength_nm))


Band = tuple[float, float, float, float]
"""Midpoint at half height [nm], full width at half height [nm], largest value, height above the base."""


def read_bands(x: FloatArray, y: FloatArray) -> list[Band]:
    """Every local maximum whose two flanks lie in the spectrum, read at half height."""
    inner = (y[1:-1] > y[:-2]) & (y[1:-1] >= y[2:])
    tops = np.flatnonzero(inner) + 1
    bands = [_read_band(x, y, int(top)) for top in tops if y[top] > MINIMUM_HEIGHT]
    return [band for band in bands if band is not None]


def _read_band(x: FloatArray, y: FloatArray, top: int) -> Band | None:
    left, left_open = _base(y[top::-1])
    right, right_open = _base(y[top:])
    closed = [value for value, is_open in ((left, left_open), (right, right_open)) if not is_open]
    base = max(closed) if closed else min(left, right)
    height = float(y[top] - base)
    if height < MINIMUM_HEIGHT:
        return None
    half = base + height / 2
    before, after = _first_below(y[top::-1], half), _first_below(y[top:], half)
    if before is None or after is None:
        return None
    low, high = top - before, top + after
    x_low = x[low] + (half - y[low]) / (y[low + 1] - y[low]) * (x[low + 1] - x[low])
    x_high = x[high - 1] + (half - y[high - 1]) / (y[high] - y[high - 1]) * (x[high] - x[high - 1])
    return float(x_low + x_high) / 2, float(x_high - x_low), float(y[top]), height


def _base(y: FloatArray) -> tuple[float, bool]:
    """Lowest value from a top (first element) to the next taller value, and whether the spectrum ends at it."""
    taller = np.flatnonzero(y > y[0])
    end = int(taller[0]) if taller.size else y.size
    lowest = int(np.argmin(y[:end]))
    return float(y[lowest]), bool(lowest == y.size - 1)


def _first_below(y: FloatArray, level: float) -> int | None:
    below = np.flatnonzero(y < level)
    return int(below[0]) if below.size else None


def _by_order(x: FloatArray, y: FloatArray, order: FloatArray) -> list[tuple[int, Band]]:
    """The tallest band near each whole order, if nothing near that order is taller.

    Between two orders only side lobes are left, which rise towards their own order: a lobe that is taken for an order
    has something taller beside it. An order whose own place lies outside the spectrum is not read, since only its
    lobes may be in it.
    """
    chosen = []
    lowest, highest = order.min() - ORDER_OUTSIDE, order.max() + ORDER_OUTSIDE
    for m in range(max(int(np.ceil(lowest)), 1), int(np.floor(highest)) + 1):
        near = np.flatnonzero(abs(order - m) <= ORDER_WINDOW)
        top = int(near[np.argmax(y[near])])
        if not 0 < top < y.size - 1 or y[top] <= y[top - 1] or y[top] < y[top + 1]:
            continue
        band = _read_band(x, y, top)
        if band is not None and abs(float(np.interp(band[0], x, order)) - m) <= ORDER_REACH:
            chosen.append((m, band))
    return chosen


def smooth_spectrum(x: FloatArray, y: FloatArray) -> tuple[FloatArray, float]:
    """Spectrum smoothed by as much as its noise asks for, and the noise that is left (standard deviation)."""
    if y.size < 16:
        return y, 0.0
    second = y[2:] - 2 * y[1:-1] + y[:-2]
    sigma = float(np.median(abs(second - np.median(second)))) / 0.6745 / np.sqrt(6)
    # curvature of a smooth band also shows in second differences; differences two apart tell them from noise
    wide = y[4:] - 2 * y[2:-2] + y[:-4]
    wider = float(np.median(abs(wide - np.median(wide)))) / 0.6745 / np.sqrt(6)
    if wider > 2 * sigma:  # curvature grows fourfold, noise does not
        sigma = max((4 * sigma - wider) / 3, 0.0)
    span = float(np.ptp(y))
    if span == 0 or sigma <= 0.002 * span:
        return y, sigma
    from scipy.ndimage import gaussian_filter1d

    width = 1.0
    while sigma / np.sqrt(2 * np.sqrt(np.pi) * width) > 0.02 * span / 4 and width < y.size / 40:
        width *= 1.25
    smoothed: FloatArray = gaussian_filter1d(y, width, mode="nearest")
    return smoothed, sigma / float(np.sqrt(2 * np.sqrt(np.pi) * width))
