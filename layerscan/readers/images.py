"""Open an image: which format it is, what its header says, its pixel size, its banner; pixels come when asked for."""

from __future__ import annotations

import hashlib
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from importlib import import_module
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from layerscan.errors import CalibrationError, InputError
from layerscan.readers.banner import find_banner
from layerscan.readers.calibration import settle_pixel_size, unknown_pixel_size
from layerscan.readers.source import ImagePlan, check_type, finish
from layerscan.records import Exclusion, Micrograph, PixelSize

if TYPE_CHECKING:
    from os import PathLike

    from numpy.typing import ArrayLike, NDArray

BANNER_PIXELS = 1 << 27
"""A page with more pixels than this is not decoded at opening, so no banner is looked for."""


@dataclass(frozen=True, kw_only=True)
class ImageFormat:
    """One row of the table of formats: how a file is recognised and which function plans its reading."""

    name: str
    starts: tuple[bytes, ...]
    suffixes: tuple[str, ...]
    plan: str  # module:function under layerscan.readers


FORMATS: tuple[ImageFormat, ...] = (
    ImageFormat(
        name="TIFF",
        starts=(b"II*\0", b"MM\0*", b"II+\0", b"MM\0+"),
        suffixes=(".tif", ".tiff", ".btf"),
        plan="tiff:plan_tiff",
    ),
    ImageFormat(name="PNG", starts=(b"\x89PNG\r\n\x1a\n",), suffixes=(".png",), plan="raster:plan_raster"),
    ImageFormat(name="JPEG", starts=(b"\xff\xd8\xff",), suffixes=(".jpg", ".jpeg"), plan="raster:plan_raster"),
    ImageFormat(name="BMP", starts=(b"BM",), suffixes=(".bmp",), plan="raster:plan_raster"),
    ImageFormat(name="NPY", starts=(b"\x93NUMPY",), suffixes=(".npy",), plan="arrays:plan_npy"),
    ImageFormat(
        name="MRC",
        starts=(),
        suffixes=(".mrc", ".mrcs", ".map", ".rec", ".st", ".ali", ".mrc.gz", ".map.gz"),
        plan="mrc:plan_mrc",
    ),
    ImageFormat(
        name="instrument file",
        starts=(),
        suffixes=(".dm3", ".dm4", ".ser", ".emi", ".emd", ".hdf5", ".h5", ".hspy"),
        plan="instruments:plan_instrument",
    ),
)
"""Formats by their first bytes, or by the end of their name where they have no first bytes of their own."""


def open_image(
    path: str | PathLike[str],
    *,
    pixel_size_nm: float | tuple[float, float] | None = None,
    pixel_size: str | None = None,
    page: int = 0,
    require_pixel_size: bool = True,
) -> Micrograph:
    """Open one page of an image file.

    Parameters
    ----------
    path : path-like
        TIFF, PNG, JPEG, BMP, MRC, NPY; with the extra ``instruments`` also .dm3, .dm4, .ser, .emi, .emd, .hdf5.
    pixel_size_nm : float or (row, column), optional
        Size of a pixel in nm; its uncertainty is then unknown.
    pixel_size : str, optional
        Size of a pixel as a quantity, ``"2.5 +- 0.02 nm"`` or ``"2 nm, 2.5 nm"`` (row, column). The user's word goes
        before the file's; a disagreement is told among the doubts.
    page : int
        Page, section or series of a file with several, from 0.
    require_pixel_size : bool
        Whether an image without a pixel size is an error.

    Returns
    -------
    Micrograph
        With its pixel size per axis, where that comes from and its doubts, the file's sha256, and the information
        banner, if there is one, among ``excluded``. ``load()`` decodes the pixels.

    Raises
    ------
    InputError
        The file is missing, empty, damaged, cut short, too large, or no image; the page does not exist; no pixel is
        finite.
    CalibrationError
        Nothing gives a pixel size and one is required.
    SettingsError
        The given pixel size is not positive, absurd, or its unit is unknown.
    MissingExtraError
        The format needs an optional package that is not installed.
    """
    path = Path(path)
    settle_pixel_size((), pixel_size_nm=pixel_size_nm, pixel_size=pixel_size)  # complain before reading
    check_file(path)
    page = _checked_page(page)
    plan = find_format(path)(path, page)
    size = settle_pixel_size(plan.scales, pixel_size_nm=pixel_size_nm, pixel_size=pixel_size)
    if size is None and require_pixel_size:
        raise unknown_pixel_size(path.name, plan.no_scale)
    doubts = list(plan.doubts)
    if size is None:
        doubts += [
            f"The pixel size is unknown: {reason}." for reason in plan.no_scale or ("the file has no scale tag",)
        ]

    def load() -> NDArray[np.float32]:
        return finish(path, plan.decode(), plan.shape)

    excluded: tuple[Exclusion, ...] = ()
    if plan.banner is not None:
        excluded = (Exclusion(region=plan.banner, reason="information banner (stated in the header)"),)
    if plan.shape[0] * plan.shape[1] <= BANNER_PIXELS:
        found = find_banner(load())  # decodes once, so that a damaged file is told here
        excluded = excluded or ((found,) if found else ())
    elif not excluded:
        doubts.append("The page is too large to look for an information banner; give the region to measure.")
    return Micrograph(
        load=load,
        shape=plan.shape,
        pixel_size=size,
        path=path,
        sha256=hash_file(path),
        page=page,
        page_count=plan.page_count,
        stored_type=plan.stored_type,
        file_format=plan.file_format,
        excluded=excluded,
        doubts=tuple(doubts),
        metadata=plan.metadata,
    )


def from_array(
    intensity: ArrayLike,
    *,
    pixel_size_nm: float | tuple[float, float] | None,
    u_relative: float | None = None,
    excluded: Sequence[Exclusion] = (),
    name: str = "array",
) -> Micrograph:
    """A micrograph from an array that is already in memory.

    Parameters
    ----------
    intensity : (rows, columns) array
        Grey values; NaN, or a mask, where nothing was recorded. A float32 array without infinities is not copied.
    pixel_size_nm : float, (row, column) or None
        Size of a pixel in nm, or None if unknown.
    u_relative : float, optional
        Relative standard uncertainty of the pixel size.
    excluded : sequence of Exclusion
        Regions that are no specimen.
    name : str
        What to call the array in messages.

    Returns
    -------
    Micrograph
        Its sha256 is that of the float32 values in row order.

    Raises
    ------
    InputError
        Not two-dimensional, empty, complex or not numbers, or no finite value.
    CalibrationError
        ``u_relative`` is negative or not finite.
    SettingsError
        The pixel size is not positive or absurd.

    Examples
    --------
    >>> from_array([[0.0, 1.0], [1.0, 0.0]], pixel_size_nm=2.5).shape
    (2, 2)
    """
    try:
        masked = isinstance(intensity, np.ma.MaskedArray)
        array = intensity.astype(np.float32).filled(np.nan) if masked else np.asarray(intensity)  # type: ignore[union-attr]
    except (TypeError, ValueError) as error:
        raise InputError(f"'{name}' is no array of numbers ({error}). Give a grey picture (rows, columns).") from None
    check_type(Path(name), array.dtype)
    if array.ndim != 2 or array.size == 0:
        raise InputError(f"'{name}' has shape {array.shape}. Give a grey picture of shape (rows, columns).")
    shape = (int(array.shape[0]), int(array.shape[1]))
    if array.dtype == np.float32 and np.isfinite(array).any() and not np.isinf(array).any():
        pixels = array
    else:
        pixels = finish(Path(name), array, shape)
    size = settle_pixel_size((), pixel_size_nm=pixel_size_nm)
    if u_relative is not None:
        if not (np.isfinite(u_relative) and u_relative >= 0):
            raise CalibrationError(f"u_relative of '{name}' is {u_relative}. Give a relative uncertainty such as 0.01.")
        if size is not None:
            size = replace(size, u_relative=float(u_relative), stated=_state_with_u(size, float(u_relative)))
    return Micrograph(
        load=lambda: pixels,
        shape=shape,
        pixel_size=size,
        sha256=hashlib.sha256(np.ascontiguousarray(pixels).tobytes()).hexdigest(),
        stored_type=str(array.dtype),
        excluded=tuple(excluded),
        metadata={"name": name},
    )


def find_format(path: Path) -> Callable[[Path, int], ImagePlan]:
    """The function that plans the reading of a file, chosen by its first bytes, then by the end of its name.

    Raises
    ------
    InputError
        Neither is known.
    """
    with path.open("rb") as file:
        head = file.read(1024)
    name = path.name.lower()
    chosen = next((f for f in FORMATS if any(head.startswith(s) for s in f.starts)), None)
    if chosen is None:
        chosen = next((f for f in FORMATS if not f.starts and name.endswith(f.suffixes)), None)
    if chosen is None and head[208:211] == b"MAP":
        chosen = next(f for f in FORMATS if f.name == "MRC")
    if chosen is None:
        claimed = next((f.name for f in FORMATS if name.endswith(f.suffixes)), None)
        known = ", ".join(f.name for f in FORMATS if f.starts) + ", MRC and instrument files (.dm3, .ser, .emd, ...)"
        if claimed:
            raise InputError(f"'{path.name}' is no {claimed} file: it begins otherwise. Export it again.")
        raise InputError(f"'{path.name}' is no image that is read here. Give one of {known}.")
    module, function = chosen.plan.split(":")
    plan: Callable[[Path, int], ImagePlan] = getattr(import_module(f"layerscan.readers.{module}"), function)
    return plan


def check_file(path: Path) -> None:
    """Raise ``InputError`` where there is no readable file with something in it."""
    try:
        if path.is_dir():
            raise InputError(f"'{path}' is a folder. Give one file.")
        if not path.is_file():
            raise InputError(f"There is no file '{path}'. Check the path.")
        if path.stat().st_size == 0:
            raise InputError(f"'{path.name}' is empty (0 bytes). Copy or export it again.")
        with path.open("rb") as file:
            file.read(1)
    except (OSError, ValueError) as error:
        if isinstance(error, InputError):
            raise
        raise InputError(f"'{path}' cannot be opened ({error}). Check the path and its permissions.") from None


def hash_file(path: Path) -> str:
    """SHA-256 of a file as 64 hexadecimal digits."""
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()


def _state_with_u(size: PixelSize, u_relative: float) -> str:
    row, column = (f"{value!r} +- {value * u_relative!r} nm" for value in (size.row_nm, size.column_nm))
    return row if row == column else f"{row}, {column}"


def _checked_page(page: int) -> int:
    if isinstance(page, bool) or not isinstance(page, (int, np.integer)):
        raise InputError(f"Page {page!r} is no whole number. Give a page from 0.")
    return int(page)
