"""Tiled pyramid TIFF, level by level: only the tiles in view are decoded."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np

_MOST_LEVELS = 16


class TiledLevel:
    """One level of a pyramid as napari takes it: a shape, a type, and pixels when a region is asked for.

    The file is opened for each region and closed again, so nothing is left open when a layer is removed.
    """

    def __init__(
        self, path: Path, *, page: int | tuple[int, int], shape: tuple[int, int], dtype: np.dtype[Any]
    ) -> None:
        self.path = path
        self.shape = shape
        self.dtype = dtype
        self.ndim = 2
        self._page = page

    @property
    def size(self) -> int:
        """Number of pixels."""
        return self.shape[0] * self.shape[1]

    def __len__(self) -> int:
        return self.shape[0]

    def __array__(self, dtype: Any = None, copy: bool | None = None) -> np.ndarray:
        whole = self[:, :]
        return whole if dtype is None else whole.astype(dtype)

    def __getitem__(self, key: Any) -> np.ndarray:
        rows, columns = (*(key if isinstance(key, tuple) else (key,)), slice(None))[:2]
        row, column = _span(rows, self.shape[0]), _span(columns, self.shape[1])
        region = self._read(row[0], row[1], column[0], column[1])
        inner_row = 0 if isinstance(rows, int | np.integer) else slice(None, None, row[2])
        inner_column = 0 if isinstance(columns, int | np.integer) else slice(None, None, column[2])
        return region[inner_row, inner_column]

    def _read(self, row0: int, row1: int, column0: int, column1: int) -> np.ndarray:
        """Decode the tiles that meet a region."""
        import tifffile

        region = np.zeros((max(row1 - row0, 0), max(column1 - column0, 0)), self.dtype)
        if region.size == 0:
            return region
        with tifffile.TiffFile(self.path, _multifile=False) as file:
            page = _find_page(file, self._page)
            height, width = page.tilelength, page.tilewidth
            across = -(-page.imagewidth // width)
            wanted = [
                r * across + c
                for r in range(row0 // height, -(-row1 // height))
                for c in range(column0 // width, -(-column1 // width))
            ]
            stored = [(i, page.dataoffsets[i], page.databytecounts[i]) for i in wanted if page.databytecounts[i]]
            segments = file.filehandle.read_segments(
                [s[1] for s in stored], [s[2] for s in stored], indices=[s[0] for s in stored]
            )
            for data, index in segments:
                tile, place, extent = page.decode(data, index, jpegtables=page.jpegtables)
                if tile is None:
                    continue
                top, left = place[-3], place[-2]
                tile = tile[0, : extent[1], : extent[2], 0]
                r0, r1 = max(top, row0), min(top + tile.shape[0], row1)
                c0, c1 = max(left, column0), min(left + tile.shape[1], column1)
                if r0 < r1 and c0 < c1:
                    region[r0 - row0 : r1 - row0, c0 - column0 : c1 - column0] = tile[
                        r0 - top : r1 - top, c0 - left : c1 - left
                    ]
        return region


def _span(key: Any, length: int) -> tuple[int, int, int]:
    if isinstance(key, slice):
        start, stop, step = key.indices(length)
        if step < 1:
            raise IndexError("A pyramid level is read forwards only.")
        return start, stop, step
    index = int(key)
    if not -length <= index < length:
        raise IndexError(f"Index {index} is outside a level of length {length}.")
    index %= length
    return index, index + 1, 1


def _find_page(file: Any, place: int | tuple[int, int]) -> Any:
    """A page by its number, or by (page, sub-page) where levels are stored below the first page."""
    if isinstance(place, int):
        return file.pages[place]
    return file.pages[place[0]].pages[place[1]]


def open_levels(path: Path, *, shape: tuple[int, int]) -> list[TiledLevel] | None:
    """Levels of a tiled grey pyramid, from full size down; None where the file is no such pyramid.

    Levels are the first page and the smaller tiled pages that follow it, or that are stored below it (SubIFDs). The
    headers of at most 16 pages are read, and no pixels.
    """
    import tifffile

    try:
        with tifffile.TiffFile(path, _multifile=False) as file:
            first = file.pages.first
            if not (first.is_tiled and _is_grey(first)) or tuple(first.shape) != tuple(shape):
                return None
            places: list[int | tuple[int, int]] = [0]
            pages = [first]
            below = first.pages if first.subifds else None
            count = len(first.subifds or ()) if below is not None else min(_MOST_LEVELS, len(file.pages)) - 1
            for number in range(min(count, _MOST_LEVELS)):
                place = (0, number) if below is not None else number + 1
                page = _find_page(file, place)
                if not _is_next_level(page, pages[-1]):
                    break
                places.append(place)
                pages.append(page)
            if len(pages) < 2:
                return None
            return [
                TiledLevel(path, page=place, shape=tuple(page.shape), dtype=page.dtype)
                for place, page in zip(places, pages, strict=True)
            ]
    except (tifffile.TiffFileError, OSError, ValueError, TypeError, IndexError, ZeroDivisionError, AttributeError):
        return None  # the core's reader says what is wrong with the file


def _is_grey(page: Any) -> bool:
    return bool(len(page.shape) == 2 and page.samplesperpixel == 1 and page.dtype is not None)


def _is_next_level(page: Any, above: Any) -> bool:
    """Whether a page is the same picture at half to a sixteenth of the size, within a pixel of rounding."""
    if not (page.is_tiled and _is_grey(page)) or page.dtype != above.dtype:
        return False
    ratios = [a / b for a, b in zip(above.shape, page.shape, strict=True)]
    return all(1.5 < r <= 17 for r in ratios) and abs(ratios[0] / ratios[1] - 1) < 0.1


def contrast_limits(level: TiledLevel) -> tuple[float, float]:
    """Grey range to show, from the smallest level."""
    pixels = np.asarray(level)
    low, high = (float(v) for v in np.nanpercentile(pixels, (0.1, 99.9)))
    return (low, high) if high > low else (low, low + 1.0)
