"""Find the information banner that microscopes print along an edge of the picture."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from layerscan.records import Exclusion

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from layerscan.records import BoolArray, Region

MAX_FRACTION = 0.3
"""A banner takes at most this part of the rows (common practice, no source)."""

MIN_ROWS = 8
_FRAME_ROWS = 6  # rows of frame or left-over picture that may lie between a banner and the edge of the page
_TOLERANCE = 0.03  # of the grey range: how constant the background is (JPEG alters it a little)
_FILLED = 0.97  # of the columns: what a blank row of a banner shows of its background
_PAPER = 0.25  # of the columns: least background in a row with text
_PICTURE = 0.5  # of the columns: most background in the row before
_LETTERS = 5  # separate marks that make a text
_ON_A_LINE = 4  # letters that end on the same row, and thrice what chance gives; half of all must lie on such lines
_FRAME_LINES = 3


def find_banner(intensity: NDArray[np.float32]) -> Exclusion | None:
    """Find a full-width strip of constant background with text at the bottom or top.

    Parameters
    ----------
    intensity : (rows, columns) float32 array
        Grey values of the page; NaN counts as no background.

    Returns
    -------
    Exclusion or None
        The strip up to the edge of the page, frame lines included.

    Notes
    -----
    All of these must hold, so that a horizontal layer, resin or substrate is not taken for a banner:
    the strip begins with a row of one grey value while less than half of the row before it has that value (frame
    lines apart), every row keeps at least a quarter of its pixels at that value, and within it lie at least five small
    separate marks that begin and end within the strip, half of them standing on shared lines (letters).
    Cannot see: text printed into the picture itself, a banner without text, a banner beside the picture.
    """
    rows, columns = intensity.shape
    if rows < 4 * MIN_ROWS or columns < 64:
        return None
    for top in (False, True):
        page = intensity[::-1] if top else intensity  # a banner at the top is one at the bottom of the turned page
        start = _find_start(page)
        if start is not None:
            region: Region = (0, 0, rows - start, columns) if top else (start, 0, rows, columns)
            return Exclusion(region=region, reason="information banner")
    return None


def _find_start(page: NDArray[np.float32]) -> int | None:
    """First row of a banner at the bottom of ``page``, or None."""
    rows = page.shape[0]
    reach = int(rows * MAX_FRACTION)
    strip = page[rows - reach :].astype(np.float64)
    low, high = float(np.nanmin(page)), float(np.nanmax(page))
    if not high > low:
        return None
    near = _TOLERANCE * (high - low)
    for end in range(reach, reach - _FRAME_ROWS - 1, -1):
        paper = _most_common(strip[max(end - MIN_ROWS, 0) : end])
        same = np.abs(strip - paper) <= near
        share = same.mean(axis=1)
        for begin in _edges(share[:end]):
            frame = _frame_rows(strip, begin, near)
            if begin > frame and _holds_text(~same[begin:end]):
                return int(rows - reach + begin - frame)
    return None


def _edges(share: NDArray[np.float64]) -> list[int]:
    """Rows where the paper begins at once and stays till the end, the first first."""
    thin = np.flatnonzero(share < _PAPER)
    lowest = int(thin[-1]) + 1 if thin.size else 0
    begins = np.flatnonzero((share[1:] >= _FILLED) & (share[:-1] < _PICTURE)) + 1
    return [int(row) for row in begins if lowest <= row <= share.size - MIN_ROWS]


def _most_common(values: NDArray[np.float64]) -> float:
    flat = values[np.isfinite(values)]
    if flat.size == 0:
        return float("nan")
    levels, counts = np.unique(flat, return_counts=True)
    return float(levels[counts.argmax()])


def _is_constant(row: NDArray[np.float64], near: float) -> bool:
    return bool((np.abs(row - _most_common(row)) <= near).mean() >= _FILLED)


def _frame_rows(strip: NDArray[np.float64], begin: int, near: float) -> int:
    """Up to three rows of one other constant value directly before the banner: its frame line."""
    count = 0
    while count < _FRAME_LINES and begin - count - 1 >= 0 and _is_constant(strip[begin - count - 1], near):
        count += 1
    return 0 if count == _FRAME_LINES and _is_constant(strip[max(begin - count - 1, 0)], near) else count


def _holds_text(marks: BoolArray) -> bool:
    """Whether separate marks lie within the strip as letters do: many, small, clear of its edges, on shared lines."""
    from scipy.ndimage import find_objects, label

    labels, _ = label(marks, structure=np.ones((3, 3)))
    height, width = marks.shape
    baselines = []
    for rows, columns in find_objects(labels):
        inside = rows.start > 0 and rows.stop < height
        tall, wide = rows.stop - rows.start, columns.stop - columns.start
        if inside and 4 <= tall <= 0.9 * height and wide <= 0.1 * width:
            baselines.append(rows.stop)
    if len(baselines) < _LETTERS:
        return False
    counts = np.bincount(baselines)[baselines]
    by_chance = len(baselines) / height
    return bool((counts >= max(_ON_A_LINE, 3 * by_chance)).mean() >= 0.5)
