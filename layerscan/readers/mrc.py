"""MRC maps (MRC2014): the header is checked against the file's size, then one section is read."""

from __future__ import annotations

import gzip
import math
from pathlib import Path
from typing import TYPE_CHECKING, Any, BinaryIO, cast

import numpy as np

from layerscan.errors import InputError
from layerscan.readers.calibration import ScaleStatement
from layerscan.readers.source import ImagePlan, check_page, check_size, plain_errors

if TYPE_CHECKING:
    from numpy.typing import NDArray

_HEADER_BYTES = 1024
_MAX_SKIP = 1 << 31  # bytes of a compressed map that are unpacked to reach a section


def plan_mrc(path: Path, page: int) -> ImagePlan:
    """Read the header of a map; a page is one section.

    Raises
    ------
    InputError
        A header that contradicts the file's size, a mode that holds no plain intensities, no such section.

    Notes
    -----
    Layout of header and modes by mrcfile; format: Cheng et al. (2015), J. Struct. Biol. 192, 146,
    doi:10.1016/j.jsb.2015.04.002.
    A missing 'MAP ' identifier is accepted with a doubt where the sizes fit. Rows stay in the order of the file.
    """
    with plain_errors(path, "MRC"), _open(path) as file:
        header, doubts = _read_header(path, file)
        dtype = _sample_type(path, header)
        columns, rows, sections = (int(header[name]) for name in ("nx", "ny", "nz"))
        extension = int(header["nsymbt"])
        if min(columns, rows, sections) < 1 or extension < 0:
            raise InputError(f"'{path.name}' is no readable MRC: its header says {sections} x {rows} x {columns}.")
        check_page(path, page, sections)
        packed = _is_packed(path)
        stored = path.stat().st_size
        check_size(path, (rows, columns), bytes_per_pixel=dtype.itemsize, stored_bytes=stored)
        section_bytes = rows * columns * dtype.itemsize
        start = _HEADER_BYTES + extension + page * section_bytes
        if packed and start + section_bytes > _MAX_SKIP:
            raise InputError(f"Page {page} of '{path.name}' lies too deep in a compressed file. Unpack it first.")
        if not packed and _HEADER_BYTES + extension + sections * section_bytes > stored:
            raise InputError(
                f"'{path.name}' is cut short or no MRC: its header needs "
                f"{_HEADER_BYTES + extension + sections * section_bytes} bytes, the file has {stored}. Copy it again."
            )
        scales, no_scale, more = _voxel_size(header)
        if dtype == np.int8:
            more.append("Mode 0 was read as signed bytes (MRC2014); files of older programs mean unsigned ones.")
        return ImagePlan(
            shape=(rows, columns),
            stored_type=str(dtype.newbyteorder("=")),
            page_count=sections,
            file_format="MRC",
            decode=lambda: _decode(path, start, (rows, columns), dtype),
            scales=tuple(scales),
            no_scale=tuple(no_scale),
            doubts=(*doubts, *more),
        )


def _is_packed(path: Path) -> bool:
    with path.open("rb") as file:
        return file.read(2) == b"\x1f\x8b"


def _open(path: Path) -> BinaryIO:
    return cast("BinaryIO", gzip.open(path, "rb") if _is_packed(path) else path.open("rb"))


def _read_header(path: Path, file: BinaryIO) -> tuple[Any, list[str]]:
    from mrcfile.dtypes import HEADER_DTYPE

    raw = file.read(_HEADER_BYTES)
    if len(raw) < _HEADER_BYTES:
        raise InputError(f"'{path.name}' is cut short: an MRC header has {_HEADER_BYTES} bytes, this file {len(raw)}.")
    doubts = []
    little = np.frombuffer(raw, dtype=HEADER_DTYPE.newbyteorder("<"))[0]
    big = np.frombuffer(raw, dtype=HEADER_DTYPE.newbyteorder(">"))[0]
    stamp = raw[212]
    header = big if stamp == 0x11 else little
    if stamp not in (0x11, 0x44):
        header = little if 0 <= int(little["mode"]) <= 127 else big
        doubts.append("The byte order is not stated in the header; it was inferred from the mode.")
    if raw[208:211] != b"MAP":
        doubts.append("The header lacks the identifier 'MAP '; the file was read as MRC since its sizes fit.")
    return header, doubts


def _sample_type(path: Path, header: Any) -> np.dtype[Any]:
    from mrcfile.utils import dtype_from_mode

    mode = int(header["mode"])
    try:
        dtype = np.dtype(dtype_from_mode(mode))
    except ValueError:
        raise InputError(f"'{path.name}' has MRC mode {mode}, which is not read. Save it as mode 1, 2 or 6.") from None
    if dtype.kind == "c":
        raise InputError(
            f"'{path.name}' holds complex numbers (MRC mode {mode}), not intensities. Export amplitude as an image."
        )
    order = header.dtype["nx"].byteorder
    result: np.dtype[Any] = dtype.newbyteorder(order if order in "<>" else "=")
    return result


def _voxel_size(header: Any) -> tuple[list[ScaleStatement], list[str], list[str]]:
    """Cell edge (Angstrom) over sampling along each axis; 0 means unknown (MRC2014, words 8 to 13)."""
    sizes = []
    for edge, sampling in (("y", "my"), ("x", "mx")):
        cell, intervals = float(header["cella"][edge]), int(header[sampling])
        sizes.append(cell / intervals / 10 if intervals > 0 and math.isfinite(cell) else 0.0)
    if min(sizes) <= 0:
        return [], ["the voxel size in its header is 0, which means unknown"], []
    doubts = []
    if sizes == [0.1, 0.1]:
        doubts.append("The voxel size is exactly 1 Angstrom, which programs also write when they know none.")
    scale = ScaleStatement(row_nm=sizes[0], column_nm=sizes[1], source="MRC voxel size", doubts=tuple(doubts))
    return [scale], [], []


def _decode(path: Path, start: int, shape: tuple[int, int], dtype: np.dtype[Any]) -> NDArray[Any]:
    with plain_errors(path, "MRC"), _open(path) as file:
        file.seek(start)
        wanted = shape[0] * shape[1] * dtype.itemsize
        raw = file.read(wanted)
        if len(raw) != wanted:
            raise InputError(f"'{path.name}' is cut short: a section needs {wanted} bytes, {len(raw)} are left.")
        return np.frombuffer(raw, dtype=dtype).reshape(shape)
