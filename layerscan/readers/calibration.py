"""The one place for pixel sizes: what the user says, what the file states, and why either deserves doubt.

There is no default. A file states a pixel size by makers' tags, a description, voxel sizes or a resolution tag;
none of these states an uncertainty, so ``u_relative`` comes from the user only.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

from layerscan.errors import CalibrationError, SettingsError
from layerscan.records import Micrograph, PixelSize
from layerscan.uncertainty import LENGTH_NM, check_pixel_size, parse_pixel_size

PRINT_PIXEL_NM = 10_000.0
"""A resolution tag with pixels this coarse (2540 per inch or fewer) speaks of screen or paper, not of the specimen.

Common practice, no source: 72, 96, 300 or 600 per inch are written by programs that know of no specimen.
"""

SCANNER_PIXEL_NM = 2_000.0
"""A resolution tag with pixels this coarse (12700 per inch or fewer) may be that of a scanner; common practice too."""

COARSE_PIXEL_NM = 20_000.0
FINE_PIXEL_NM = 0.001
AGREEMENT = 0.01
"""Two statements differ where they are more than 1 % apart (tags are often rounded to three digits)."""

JPEG_FIELD_MAX = 65535


@dataclass(frozen=True, kw_only=True)
class ScaleStatement:
    """A pixel size as one place in a file states it, in nm along rows and columns."""

    row_nm: float
    column_nm: float
    source: str
    doubts: tuple[str, ...] = ()


def length_nm(unit: object) -> float | None:
    """Length of a unit in nm as instruments spell it, or None where it is no length.

    Examples
    --------
    >>> length_nm("micron"), length_nm("inch"), length_nm("pixel")
    (1000.0, 25400000.0, None)
    """
    text = str(unit).strip().replace("\\u00B5", "µ").replace("\\u00b5", "µ").strip('"').rstrip(".")
    further = {
        "microns": 1e3, "micrometer": 1e3, "micrometre": 1e3, "micrometers": 1e3, "micrometres": 1e3,
        "nanometer": 1.0, "nanometre": 1.0, "nanometers": 1.0, "nanometres": 1.0, "ångström": 0.1, "ångstrom": 0.1,
        "angstroms": 0.1, "å": 0.1, "picometer": 1e-3, "millimeter": 1e6, "millimetre": 1e6, "meter": 1e9,
        "metre": 1e9, "centimeter": 1e7, "inch": 2.54e7, "in": 2.54e7, "fm": 1e-6,
    }  # fmt: skip
    return LENGTH_NM.get(text) or further.get(text.lower()) or LENGTH_NM.get(text.lower())


def state_resolution(
    row_per_unit: float | None, column_per_unit: float | None, *, unit_nm: float | None, source: str, unit_name: str
) -> ScaleStatement | str:
    """A resolution (pixels per unit along rows and columns) as a statement, or the reason why it is none."""
    row, column = row_per_unit or 0.0, column_per_unit or 0.0
    if not (math.isfinite(row) and math.isfinite(column) and row > 0 and column > 0):
        return f"its {source} is not a positive number"
    if unit_nm is None:
        return f"its {source} ({column:g} x {row:g}) has no unit, which is no calibration"
    row_nm, column_nm = unit_nm / row, unit_nm / column
    if max(row_nm, column_nm) >= PRINT_PIXEL_NM:
        return (
            f"its {source} of {column:g} per {unit_name} is that of a screen or a print ({column_nm / 1e3:.0f} um per "
            "pixel), which is no calibration"
        )
    doubts: tuple[str, ...] = ()
    if max(row_nm, column_nm) >= SCANNER_PIXEL_NM and unit_nm >= LENGTH_NM["cm"]:
        doubts = (f"The {source} of {column:g} per {unit_name} may be that of a scanner, not of the specimen.",)
    return ScaleStatement(row_nm=row_nm, column_nm=column_nm, source=source, doubts=doubts)


def fit_to_picture(
    statement: ScaleStatement, *, stated_shape: tuple[int, int], shape: tuple[int, int]
) -> ScaleStatement:
    """A maker's pixel size for a picture that may have been resized or cropped since.

    Where rows and columns have shrunk (or grown) by the same ratio, the field of view is taken to be unchanged and
    the pixel size follows; where they have not, the picture is taken to be cropped. Either is a doubt.
    """
    if stated_shape == shape or stated_shape[1] == shape[1]:
        return statement  # same width: rows may differ by a banner that was added or cut off
    ratio_row, ratio_column = stated_shape[0] / shape[0], stated_shape[1] / shape[1]
    was = f"{stated_shape[0]} x {stated_shape[1]} pixels and this one has {shape[0]} x {shape[1]}"
    slack = 1.5 * (1 / shape[0] + 1 / shape[1])
    if abs(ratio_row / ratio_column - 1) <= slack:
        doubt = (
            f"{statement.source} speaks of a picture of {was}: taken as resized with the same field of view, so the "
            f"stated {statement.column_nm:.6g} nm was multiplied by {ratio_column:.4g}. If it was cropped instead, "
            "give the pixel size."
        )
        return replace(
            statement,
            row_nm=statement.row_nm * ratio_column,
            column_nm=statement.column_nm * ratio_column,
            doubts=(*statement.doubts, doubt),
        )
    doubt = (
        f"{statement.source} speaks of a picture of {was}: taken as cropped at the same pixel size. "
        "If it was resized, give the pixel size."
    )
    return replace(statement, doubts=(*statement.doubts, doubt))


def settle_pixel_size(
    scales: Sequence[ScaleStatement],
    *,
    pixel_size_nm: float | tuple[float, float] | None = None,
    pixel_size: str | None = None,
) -> PixelSize | None:
    """Choose the pixel size: the user's word first, then the file's statements in their order; never a default.

    Parameters
    ----------
    scales : sequence of ScaleStatement
        What the file states, the most trusted first.
    pixel_size_nm : float or (row, column), optional
        Given by the user in nm; its uncertainty is unknown.
    pixel_size : str, optional
        Given by the user as a quantity, such as ``"2.5 +- 0.02 nm"`` or ``"2 nm, 2.5 nm"``.

    Returns
    -------
    PixelSize or None
        None where nothing states one.

    Raises
    ------
    SettingsError
        The user's pixel size is not positive, not finite, absurd, or its unit is unknown, or it was given twice.
    """
    usable = [s for s in scales if _plausible(s)]
    impossible = [s for s in scales if not _plausible(s)]
    given = _user_pixel_size(pixel_size_nm=pixel_size_nm, pixel_size=pixel_size)
    doubts: list[str] = [
        f"{s.source} states {s.column_nm:.3g} nm, which no electron micrograph has; it was ignored." for s in impossible
    ]
    if given is not None:
        for statement in usable:
            if not _agree(statement, given.row_nm, given.column_nm):
                doubts.append(
                    f"You gave {_say(given.row_nm, given.column_nm)}, but {statement.source} states "
                    f"{_say(statement.row_nm, statement.column_nm)}; yours was used."
                )
        return replace(given, doubts=(*given.doubts, *doubts))
    if not usable:
        return None
    chosen = usable[0]
    doubts = [*chosen.doubts, *doubts]
    for other in usable[1:]:
        if not _agree(other, chosen.row_nm, chosen.column_nm):
            doubts.append(
                f"{chosen.source} states {_say(chosen.row_nm, chosen.column_nm)}, but {other.source} states "
                f"{_say(other.row_nm, other.column_nm)}; the former was used."
            )
    if not 0.999 <= chosen.row_nm / chosen.column_nm <= 1.001:
        doubts.append(
            f"Rows ({chosen.row_nm:.6g} nm) and columns ({chosen.column_nm:.6g} nm) have different pixel sizes."
        )
    if chosen.column_nm > COARSE_PIXEL_NM:
        doubts.append(f"A pixel of {chosen.column_nm / 1e3:.3g} um is unusually large for an electron micrograph.")
    if chosen.column_nm < FINE_PIXEL_NM:
        doubts.append(f"A pixel of {chosen.column_nm * 1e3:.3g} pm is unusually small for an electron micrograph.")
    return PixelSize(
        row_nm=chosen.row_nm, column_nm=chosen.column_nm, u_relative=None, source=chosen.source, doubts=tuple(doubts)
    )


def unknown_pixel_size(name: str, no_scale: Sequence[str]) -> CalibrationError:
    """The error for an image without a pixel size: what was found instead, and how to give one."""
    found = "; ".join(no_scale) if no_scale else "the file has no scale tag"
    return CalibrationError(f"Pixel size of '{name}' is unknown: {found}. Give pixel_size ('2.5 nm').")


def recalibrate(micrograph: Micrograph, *, pixel_size: str) -> Micrograph:
    """The same image with another pixel size, given as a quantity; the former one is named among the doubts.

    Raises
    ------
    SettingsError
        The text is no pixel size.

    Examples
    --------
    A lattice of known spacing (0.3905 nm) was measured 3 % too large, so the pixel size is 3 % too large:

    >>> import numpy as np
    >>> from layerscan.readers.images import from_array
    >>> image = from_array(np.zeros((4, 4)), pixel_size_nm=0.0103)
    >>> recalibrate(image, pixel_size="0.0100 +- 0.0001 nm").pixel_size.column_nm
    0.01
    """
    former = micrograph.pixel_size
    scales = (
        []
        if former is None
        else [ScaleStatement(row_nm=former.row_nm, column_nm=former.column_nm, source=former.source)]
    )
    return replace(micrograph, pixel_size=settle_pixel_size(scales, pixel_size=pixel_size))


def _user_pixel_size(*, pixel_size_nm: float | tuple[float, float] | None, pixel_size: str | None) -> PixelSize | None:
    if pixel_size_nm is not None and pixel_size is not None:
        raise SettingsError(f"Pixel size was given twice: {pixel_size_nm} nm and '{pixel_size}'. Give one of them.")
    if pixel_size is not None:
        row, column = parse_pixel_size(pixel_size)
        parts = [None if q.u is None else q.u / q.value for q in (row, column)]
        known = [p for p in parts if p is not None]
        doubts: tuple[str, ...] = ()
        if len(known) == 1:
            doubts = ("Only one of the two axes has an uncertainty; it was taken for both.",)
        return PixelSize(
            row_nm=row.value,
            column_nm=column.value,
            u_relative=max(known) if known else None,
            source="given by the user",
            stated=pixel_size,
            doubts=doubts,
        )
    if pixel_size_nm is None:
        return None
    pair = pixel_size_nm if isinstance(pixel_size_nm, (tuple, list)) else (pixel_size_nm, pixel_size_nm)
    if len(pair) != 2:
        raise SettingsError(f"Pixel size {pixel_size_nm} has {len(pair)} parts. Give one number, or (row, column).")
    try:
        row_nm, column_nm = (float(value) for value in pair)
    except (TypeError, ValueError):
        raise SettingsError(f"Pixel size {pixel_size_nm!r} is no number. Give nm such as 2.5, or '2.5 nm'.") from None
    for value in (row_nm, column_nm):
        check_pixel_size(value, given=f"{value:g} nm")
    stated = f"{row_nm!r} nm" if row_nm == column_nm else f"{row_nm!r} nm, {column_nm!r} nm"
    return PixelSize(row_nm=row_nm, column_nm=column_nm, u_relative=None, source="given by the user", stated=stated)


def _plausible(statement: ScaleStatement) -> bool:
    """Whether a stated size lies within what ``uncertainty.check_pixel_size`` allows a user to give."""
    try:
        for value in (statement.row_nm, statement.column_nm):
            check_pixel_size(value, given=str(value))
    except SettingsError:
        return False
    return True


def _agree(statement: ScaleStatement, row_nm: float, column_nm: float) -> bool:
    return abs(statement.row_nm / row_nm - 1) <= AGREEMENT and abs(statement.column_nm / column_nm - 1) <= AGREEMENT


def _say(row_nm: float, column_nm: float) -> str:
    if abs(row_nm / column_nm - 1) < 1e-6:
        return f"{column_nm:.6g} nm"
    return f"{row_nm:.6g} x {column_nm:.6g} nm (row x column)"
