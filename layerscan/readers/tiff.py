"""TIFF through tifffile: one page at a time, header first, no following of other files."""

from __future__ import annotations

import logging
import math
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from layerscan.errors import InputError
from layerscan.readers.source import (
    FREE_BYTES,
    MAX_EXPANSION,
    MAX_PAGES,
    SPARSE_EXPANSION,
    ImagePlan,
    check_page,
    check_size,
    check_type,
    plain_errors,
    to_grey,
)
from layerscan.readers.tiff_tags import read_scales

if TYPE_CHECKING:
    from numpy.typing import NDArray

_UNCOMPRESSED, _JPEG = 1, (6, 7)
_WHITE_IS_ZERO, _BLACK_IS_ZERO, _RGB, _PALETTE, _YCBCR = 0, 1, 2, 3, 6


def plan_tiff(path: Path, page: int) -> ImagePlan:
    """Read the header of one page.

    Raises
    ------
    InputError
        No such page, a header that asks for more than the file holds, or a layout that is no grey or colour picture.
    """
    with plain_errors(path, "TIFF"), _open(path) as tif:
        count = len(tif.pages)
        if count > MAX_PAGES:
            raise InputError(f"'{path.name}' lists {count} pages; at most {MAX_PAGES} are read. Split the file.")
        check_page(path, page, count)
        first, chosen = tif.pages[0], tif.pages[page]
        shape = _check_layout(path, chosen, tif.filehandle.size)
        found = read_scales(chosen, first, shape)
        doubts = [*found.doubts, *_page_doubts(chosen)]
        if found.images is not None and found.images > count:
            doubts.append(f"The description speaks of {found.images} images; the file lists {count}, which are read.")
        return ImagePlan(
            shape=shape,
            stored_type=str(chosen.dtype),
            page_count=count,
            file_format="TIFF",
            decode=lambda: _decode(path, page, shape),
            scales=tuple(found.scales),
            no_scale=tuple(found.no_scale),
            doubts=tuple(doubts),
            banner=found.banner,
            metadata=found.metadata,
        )


@contextmanager
def _open(path: Path) -> Iterator[Any]:
    """The file without any other that it names; what tifffile would log is said here in errors and doubts."""
    import tifffile

    logger = logging.getLogger("tifffile")
    level = logger.level
    logger.setLevel(logging.CRITICAL)
    try:
        with tifffile.TiffFile(path, _multifile=False) as tif:
            yield tif
    finally:
        logger.setLevel(level)


def _check_layout(path: Path, page: Any, file_bytes: int) -> tuple[int, int]:
    """Rows and columns of a page whose layout, type and size can be read."""
    axes = str(page.axes)
    if page.dtype is None:
        raise InputError(
            f"'{path.name}' has {page.bitspersample} bits per sample in a form that is not read. Save it with 8 or 16."
        )
    check_type(path, np.dtype(page.dtype))
    if axes not in ("YX", "YXS", "SYX"):
        raise InputError(f"'{path.name}' has a page with axes {axes}, not one picture. Save its planes as pages.")
    shape = (int(page.imagelength), int(page.imagewidth))
    samples = int(page.samplesperpixel)
    colour = int(page.photometric) in (_RGB, _YCBCR)
    if (samples > 1 and int(page.photometric) not in (_WHITE_IS_ZERO, _BLACK_IS_ZERO, _RGB, _YCBCR)) or samples > 64:
        raise InputError(
            f"'{path.name}' has {samples} samples per pixel of a kind that is neither grey nor RGB. Save it as grey."
        )
    if colour and samples not in (3, 4):
        raise InputError(f"'{path.name}' claims colour with {samples} samples per pixel. Save it as grey.")
    itemsize = np.dtype(page.dtype).itemsize
    counts, offsets = [int(c) for c in page.databytecounts], [int(o) for o in page.dataoffsets]
    stored = min(sum(counts), file_bytes)  # strips may share bytes, so their sum says little
    expansion = SPARSE_EXPANSION if int(page.compression) == _UNCOMPRESSED else MAX_EXPANSION
    check_size(path, shape, bytes_per_pixel=samples * itemsize, stored_bytes=stored, expansion=expansion)
    piece = math.prod(int(n) for n in page.chunks) * itemsize
    if piece > max(FREE_BYTES, expansion * stored):
        raise InputError(f"'{path.name}' has tiles of {piece:.3g} bytes, more than it can hold: its header is wrong.")
    beyond = sum(o + c > file_bytes for o, c in zip(offsets, counts, strict=False))
    if beyond:
        raise InputError(
            f"'{path.name}' is cut short: {beyond} of its {len(counts)} strips or tiles lie beyond the end "
            "of the file. Copy it again."
        )
    return shape


def _page_doubts(page: Any) -> list[str]:
    doubts = []
    tag = page.tags.get(274)
    if tag is not None and int(tag.value) != 1:
        doubts.append(f"Orientation tag {int(tag.value)} was ignored: rows and columns are as stored.")
    if int(page.samplesperpixel) > 1 and int(page.photometric) in (_WHITE_IS_ZERO, _BLACK_IS_ZERO) and not _alpha(page):
        doubts.append(f"The page has {page.samplesperpixel} channels; the first was read.")
    empty = sum(c == 0 for c in page.databytecounts)
    if empty:
        doubts.append(f"{empty} of {len(page.databytecounts)} strips or tiles hold no data; they were left out.")
    return doubts


def _alpha(page: Any) -> bool:
    return any(int(kind) in (1, 2) for kind in page.extrasamples)


def _decode(path: Path, page_index: int, shape: tuple[int, int]) -> NDArray[Any]:
    with plain_errors(path, "TIFF"), _open(path) as tif:
        page = tif.pages[page_index]
        pixels = np.asarray(page.asarray(maxworkers=1))
        if pixels.shape != tuple(page.shape) or pixels.dtype != page.dtype:
            raise InputError(f"'{path.name}' does not decode to what its header says: it is damaged. Export it again.")
        grey = _grey(page, pixels)
        return _without_empty_pieces(page, grey) if any(c == 0 for c in page.databytecounts) else grey


def _grey(page: Any, pixels: NDArray[Any]) -> NDArray[Any]:
    photometric = int(page.photometric)
    if page.axes == "SYX":
        pixels = np.moveaxis(pixels, 0, -1)
    if photometric == _YCBCR and int(page.compression) not in _JPEG:
        return pixels[..., 0]  # luminance as stored; only JPEG is decoded to RGB
    if photometric in (_RGB, _YCBCR):
        return to_grey(pixels if _alpha(page) else pixels[..., :3])
    if photometric == _PALETTE:
        return _apply_palette(pixels, page.colormap)
    if pixels.ndim == 3:
        pixels = to_grey(pixels[..., [0, -1]]) if _alpha(page) else pixels[..., 0]
    if photometric == _WHITE_IS_ZERO:
        top = 2 ** int(page.bitspersample) - 1 if pixels.dtype.kind in "bu" else 0
        return top - pixels.astype(np.float64)
    return pixels


def _apply_palette(index: NDArray[Any], colormap: NDArray[Any] | None) -> NDArray[Any]:
    """Grey of palette colours; a palette that is a plain grey ramp leaves the stored numbers as they are."""
    if colormap is None or index.max(initial=0) >= colormap.shape[1]:
        return index
    steps = np.diff(colormap.astype(np.int64), axis=1)
    if (colormap == colormap[:1]).all() and steps.size and steps.min() == steps.max() and steps.min() > 0:
        return index
    return to_grey(np.moveaxis(colormap[:, index], 0, -1))


def _without_empty_pieces(page: Any, grey: NDArray[Any]) -> NDArray[Any]:
    """NaN where a strip or tile holds no data: nothing was recorded there."""
    out = grey.astype(np.float64)
    if int(page.planarconfig) != 1:
        return out
    height = int(page.tilelength or page.rowsperstrip or grey.shape[0])
    width = int(page.tilewidth or grey.shape[1])
    across = -(-grey.shape[1] // width)
    for number, count in enumerate(page.databytecounts):
        if count == 0:
            row, column = (number // across) * height, (number % across) * width
            out[row : row + height, column : column + width] = np.nan
    return out
