"""What every image format hands over: a plan read from the header, checked before any pixel is decoded.

To add a format: write a module with one function ``plan(path, page) -> ImagePlan`` that reads the header within
``plain_errors`` and calls ``check_page``, ``check_size`` and ``check_type``; then add one row to ``images.FORMATS``.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from layerscan.errors import InputError, LayerscanError

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from layerscan.readers.calibration import ScaleStatement
    from layerscan.records import Region

MAX_PIXELS = 1 << 31
"""Largest page that is opened: about 2 gigapixels (common practice, no source)."""

MAX_PAGES = 100_000
MAX_TEXT = 1 << 20
"""Longest description that is read, in characters."""

FREE_BYTES = 1 << 28
"""Pixels up to 256 MiB may come from any file; beyond that the file must be large enough for them."""

MAX_EXPANSION = 1100
"""Largest ratio of decoded to stored bytes: just above what the deflate method reaches (1032 to 1, RFC 1951)."""

SPARSE_EXPANSION = 16
"""The same without compression: a mosaic may leave out tiles (common practice, no source)."""


@dataclass(frozen=True, kw_only=True)
class ImagePlan:
    """One page of an image file as its header describes it; ``decode`` gives grey pixels of exactly ``shape``."""

    shape: tuple[int, int]
    stored_type: str
    page_count: int
    file_format: str
    decode: Callable[[], NDArray[Any]]
    scales: tuple[ScaleStatement, ...] = ()
    no_scale: tuple[str, ...] = ()  # what looked like a pixel size and is none, in plain words
    doubts: tuple[str, ...] = ()
    banner: Region | None = None  # where the header itself says that a banner lies
    metadata: Mapping[str, str] = field(default_factory=dict)


@contextmanager
def plain_errors(path: Path, kind: str) -> Iterator[None]:
    """Turn whatever a decoding library raises on a damaged file into ``InputError`` in plain words."""
    try:
        yield
    except (LayerscanError, ImportError):
        raise
    except MemoryError:
        raise InputError(
            f"'{path.name}' asks for more memory than there is. Cut the region of interest out of it first."
        ) from None
    except FileNotFoundError:
        raise InputError(f"'{path.name}' is no longer there. Check the path.") from None
    except PermissionError:
        raise InputError(f"'{path.name}' may not be read. Check its permissions.") from None
    except Exception as error:  # libraries leak ZeroDivisionError, TypeError, IndexError, struct.error and more
        reason = " ".join(str(error).split())[:200] or type(error).__name__
        raise InputError(
            f"'{path.name}' cannot be read as {kind}; it may be damaged or cut short ({reason}). "
            "Export or copy it again from the instrument."
        ) from error


def check_page(path: Path, page: int, page_count: int) -> None:
    """Raise ``InputError`` where the page does not exist."""
    if page_count < 1:
        raise InputError(f"'{path.name}' has no page: it is damaged or cut short. Copy or export it again.")
    if not 0 <= page < page_count:
        have = "page 0 only" if page_count == 1 else f"pages 0 to {page_count - 1}"
        raise InputError(f"Page {page} of '{path.name}' does not exist: it has {have}. Give one of these.")


def check_size(
    path: Path, shape: tuple[int, int], *, bytes_per_pixel: int, stored_bytes: int, expansion: int = MAX_EXPANSION
) -> None:
    """Raise ``InputError`` where a header asks for more pixels than ``expansion`` times the stored bytes can give."""
    rows, columns = shape
    if rows < 1 or columns < 1:
        raise InputError(f"'{path.name}' has no pixels: its header says {rows} x {columns}. Export it again.")
    pixels = rows * columns
    if pixels > MAX_PIXELS:
        raise InputError(
            f"'{path.name}' has {pixels:.3g} pixels; at most {MAX_PIXELS:.3g} are read. Cut the region of interest out."
        )
    needed = pixels * bytes_per_pixel
    if needed > max(FREE_BYTES, expansion * stored_bytes):
        raise InputError(
            f"'{path.name}' claims {rows} x {columns} pixels ({needed:.3g} bytes), but only {stored_bytes} bytes are "
            "stored for them: its header is wrong or it is damaged. Export it again from the instrument."
        )


def check_type(path: Path, dtype: np.dtype[Any]) -> None:
    """Raise ``InputError`` where pixels are no plain numbers."""
    if dtype.kind == "c":
        raise InputError(
            f"'{path.name}' holds complex numbers ({dtype}), not intensities. Export amplitude or phase as an image."
        )
    if dtype.kind not in "biuf":
        raise InputError(f"'{path.name}' holds values of type {dtype}, not intensities. Export it as a grey image.")


def to_grey(pixels: NDArray[Any], *, doubts: list[str] | None = None) -> NDArray[Any]:
    """Grey from grey, grey + alpha, RGB or RGBA samples on the last axis.

    Parameters
    ----------
    pixels : (rows, columns) or (rows, columns, samples) array
        With 1, 2 (grey, alpha), 3 (RGB) or 4 (RGBA) samples.
    doubts : list of str, optional
        Receives a line where an alpha sample was ignored.

    Returns
    -------
    (rows, columns) array
        NaN where alpha is 0, unless alpha is 0 everywhere.

    Notes
    -----
    Relative luminance weights 0.2126, 0.7152, 0.0722 (ITU-R BT.709-6, item 3.2) on the stored values; a grey picture
    stored as RGB comes back exactly, since equal samples are copied.
    """
    if pixels.ndim == 2:
        return pixels
    samples = pixels.shape[2]
    alpha = pixels[..., -1] if samples in (2, 4) else None
    if samples >= 3:
        red, green, blue = (pixels[..., k] for k in range(3))
        if np.array_equal(red, green) and np.array_equal(green, blue):
            grey = red
        else:
            grey = 0.2126 * red.astype(np.float64) + 0.7152 * green + 0.0722 * blue
    else:
        grey = pixels[..., 0]
    if alpha is not None:
        empty = alpha == 0
        if empty.all():
            if doubts is not None:
                doubts.append("The alpha channel is empty and was ignored.")
        elif empty.any():
            grey = np.where(empty, np.nan, grey.astype(np.float64))
    return grey


def finish(path: Path, pixels: NDArray[Any], shape: tuple[int, int]) -> NDArray[np.float32]:
    """Float32 pixels of the planned shape; infinities become NaN.

    Raises
    ------
    InputError
        The decoded shape is not the planned one, the type is no number, or no pixel is finite.
    """
    check_type(path, pixels.dtype)
    if pixels.shape != shape:
        raise InputError(
            f"'{path.name}' decodes to shape {pixels.shape}, but its header says {shape}: it is damaged. "
            "Export it again."
        )
    with np.errstate(over="ignore", invalid="ignore"):
        grey = np.array(pixels, dtype=np.float32)
    if pixels.dtype.kind == "f":
        finite = np.isfinite(grey)
        if not finite.any():
            raise InputError(f"'{path.name}' holds no finite value: every pixel is NaN or infinite. Export it again.")
        grey[~finite] = np.nan
    return grey


def positive(value: object) -> float | None:
    """The value as a positive finite float, or None."""
    try:
        number = float(value)  # type: ignore[arg-type]
    except (TypeError, ValueError, OverflowError):
        return None
    return number if math.isfinite(number) and number > 0 else None
