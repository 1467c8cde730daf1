"""PNG, JPEG and BMP through Pillow; the picture's size is checked before a pixel is decoded."""

from __future__ import annotations

import warnings
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from layerscan.errors import InputError
from layerscan.readers.calibration import JPEG_FIELD_MAX, ScaleStatement, state_resolution
from layerscan.readers.source import ImagePlan, check_page, check_size, plain_errors, to_grey

if TYPE_CHECKING:
    from numpy.typing import NDArray

_STORED: Mapping[str, tuple[str, int]] = {
    "1": ("uint1", 1),
    "L": ("uint8", 1),
    "P": ("uint8 palette", 1),
    "LA": ("uint8 grey + alpha", 2),
    "RGB": ("uint8 RGB", 3),
    "RGBA": ("uint8 RGBA", 4),
    "I;16": ("uint16", 2),
    "I;16B": ("uint16", 2),
    "I": ("int32", 2),
    "F": ("float32", 4),
}
"""Pillow's modes that are read: what they are called here, and bytes per stored pixel."""


def plan_raster(path: Path, page: int) -> ImagePlan:
    """Read the header of a PNG, JPEG or BMP file.

    Raises
    ------
    InputError
        Damaged, too large, more than one page asked for, or colours that are neither grey nor RGB.
    """
    with plain_errors(path, "PNG, JPEG or BMP"), _open(path) as image:
        check_page(path, page, 1)
        kind, mode = str(image.format), str(image.mode)
        if mode not in _STORED:
            raise InputError(f"'{path.name}' holds {mode} colours, neither grey nor RGB. Save it as grey.")
        shape = (int(image.height), int(image.width))
        check_size(path, shape, bytes_per_pixel=_STORED[mode][1], stored_bytes=path.stat().st_size)
        scales, no_scale = _read_scale(image, kind)
        doubts = []
        if kind == "JPEG":
            doubts.append("JPEG compression alters fine detail; measure the original file where there is one.")
        if kind == "PNG" and mode in ("RGB", "RGBA") and _png_depth(path) == 16:
            doubts.append("The 16 bit colours of this PNG were read with 8 bits.")
        return ImagePlan(
            shape=shape,
            stored_type=_STORED[mode][0],
            page_count=1,
            file_format=kind,
            decode=lambda: _decode(path),
            scales=tuple(scales),
            no_scale=tuple(no_scale),
            doubts=tuple(doubts),
        )


@contextmanager
def _open(path: Path) -> Iterator[Any]:
    from PIL import Image

    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # Pillow warns from half its limit on and raises above it
        try:
            image = Image.open(path, formats=["PNG", "JPEG", "BMP"])
        except Image.DecompressionBombError:
            raise InputError(
                f"'{path.name}' claims more pixels than are read from PNG, JPEG or BMP. Save it as TIFF."
            ) from None
        with image:
            yield image


def _read_scale(image: Any, kind: str) -> tuple[list[ScaleStatement], list[str]]:
    """The resolution: PNG pHYs and BMP count per metre, JPEG per inch or cm in 16 bits."""
    if kind == "PNG" and "aspect" in image.info:
        return [], ["its pHYs chunk has no unit, which is no calibration"]
    pair = image.info.get("dpi")
    if kind == "JPEG" and "jfif_density" in image.info:
        if image.info.get("jfif_unit") not in (1, 2):
            return [], []  # unit 0: an aspect ratio, not a resolution
        pair = image.info["jfif_density"]
    if not pair or 0 in pair:
        return [], []
    unit_nm, unit = 2.54e7, "inch"
    if kind == "JPEG" and image.info.get("jfif_unit") == 2:
        unit_nm, unit = 1e7, "cm"
    column, row = float(pair[0]), float(pair[1])
    source = {"PNG": "pHYs resolution", "JPEG": "JPEG density"}.get(kind, "resolution")
    stated = state_resolution(row, column, unit_nm=unit_nm, source=source, unit_name=unit)
    if isinstance(stated, str):
        return [], [stated]
    if kind == "JPEG":
        finest = unit_nm / JPEG_FIELD_MAX
        doubt = (
            f"A JPEG density has 16 bits: a pixel finer than {finest:.0f} nm comes back as a wrong value. "
            "Check it against the scale bar, or give the pixel size."
        )
        stated = ScaleStatement(row_nm=stated.row_nm, column_nm=stated.column_nm, source=source, doubts=(doubt,))
    return [stated], []


def _png_depth(path: Path) -> int:
    with path.open("rb") as file:
        return file.read(25)[24]


def _decode(path: Path) -> NDArray[Any]:
    with plain_errors(path, "PNG, JPEG or BMP"), _open(path) as image:
        if image.mode == "P":
            image = image.convert("RGBA" if "transparency" in image.info else "RGB")
        elif image.mode == "1":
            image = image.convert("L")
        return to_grey(np.asarray(image))
