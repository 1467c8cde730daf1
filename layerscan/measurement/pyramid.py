"""A pyramid of ever coarser copies of a picture, so that large scales cost little."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from layerscan.records import BoolArray

    Float32Array = NDArray[np.float32]


@dataclass(frozen=True, kw_only=True, eq=False)
class Level:
    """One level: the picture averaged over ``factor`` x ``factor`` pixels, holes filled with the local mean.

    ``valid`` is the share of usable pixels in each (0 to 1), None where every pixel is usable. Pixel (r, c) of the
    level is centred at ``r * factor + (factor - 1) / 2`` of the page.
    """

    intensity: Float32Array
    valid: Float32Array | None
    factor: int

    def to_page(self, place: NDArray[np.float64]) -> NDArray[np.float64]:
        """Page pixel of a place on this level, along either axis."""
        return place * self.factor + (self.factor - 1) / 2

    def from_page(self, place: NDArray[np.float64]) -> NDArray[np.float64]:
        """Place on this level of a page pixel, along either axis."""
        return (place - (self.factor - 1) / 2) / self.factor


def fill_holes(intensity: Float32Array, mask: BoolArray | None) -> tuple[Float32Array, Float32Array | None]:
    """Replace unusable pixels by the mean of usable ones near by, so that no false edge appears at a hole.

    Parameters
    ----------
    intensity : (rows, columns) float array
        May hold NaN and infinities.
    mask : (rows, columns) bool array, optional
        True where a pixel may be used.

    Returns
    -------
    filled : (rows, columns) float32 array
    valid : (rows, columns) float32 array or None
        1 where a pixel is usable, 0 elsewhere; None where all are.
    """
    usable = np.isfinite(intensity)
    if mask is not None:
        usable &= mask
    image = np.asarray(intensity, dtype=np.float32)
    if usable.all():
        return image, None
    weight = usable.astype(np.float32)
    total = np.where(usable, image, np.float32(0))
    filled = total.copy()
    sums, weights = total, weight
    missing = ~usable
    factor = 1
    while missing.any() and min(sums.shape) > 1:
        sums, weights, factor = _halve_sum(sums), _halve_sum(weights), factor * 2
        rows, columns = np.nonzero(missing)
        r = np.minimum(rows // factor, sums.shape[0] - 1)
        c = np.minimum(columns // factor, sums.shape[1] - 1)
        known = weights[r, c] > 0
        filled[rows[known], columns[known]] = sums[r[known], c[known]] / weights[r[known], c[known]]
        missing[rows[known], columns[known]] = False
    if missing.any():
        filled[missing] = total.sum() / max(float(weight.sum()), 1.0)
    return filled, weight


def _halve_sum(image: Float32Array) -> Float32Array:
    rows, columns = image.shape
    if rows % 2 or columns % 2:
        image = np.pad(image, ((0, rows % 2), (0, columns % 2)))
    out: Float32Array = image[0::2, 0::2] + image[1::2, 0::2] + image[0::2, 1::2] + image[1::2, 1::2]
    return out


def _halve(image: Float32Array) -> Float32Array:
    rows, columns = image.shape[0] // 2 * 2, image.shape[1] // 2 * 2
    image = image[:rows, :columns]
    out: Float32Array = image[0::2, 0::2] + image[1::2, 0::2]
    out += image[0::2, 1::2]
    out += image[1::2, 1::2]
    out *= np.float32(0.25)
    return out


def build_pyramid(
    intensity: NDArray[np.floating], *, mask: BoolArray | None = None, smallest_px: int = 24
) -> tuple[Level, ...]:
    """Average a picture over 1, 2, 4 ... pixels until its shorter side would fall below ``smallest_px``.

    Parameters
    ----------
    intensity : (rows, columns) float array
        NaN where nothing was recorded.
    mask : (rows, columns) bool array, optional
        True where a pixel may be used.
    smallest_px : int
        Shortest side that a level may have, in pixels of that level.

    Returns
    -------
    tuple of Level
        Finest first; at least one.

    Notes
    -----
    Averaging over a block is a box filter: a pattern with a period of four pixels keeps 90 % of its amplitude at the
    next level, one of two pixels vanishes. An odd last row or column is left out of the next level.
    """
    filled, valid = fill_holes(np.asarray(intensity), mask)
    levels = [Level(intensity=filled, valid=valid, factor=1)]
    while min(levels[-1].intensity.shape) // 2 >= smallest_px:
        last = levels[-1]
        halved = None if last.valid is None else _halve(last.valid)
        levels.append(Level(intensity=_halve(last.intensity), valid=halved, factor=last.factor * 2))
    return tuple(levels)
