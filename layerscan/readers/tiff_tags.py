"""Where TIFF files keep a pixel size: makers' private tags by their number, descriptions, resolution tags."""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from functools import partial
from typing import Any
from xml.etree import ElementTree

from layerscan.readers.calibration import ScaleStatement, fit_to_picture, length_nm, state_resolution
from layerscan.readers.source import MAX_TEXT, positive
from layerscan.records import Region

_RESOLUTION_UNIT_NM: Mapping[int, tuple[str, float | None]] = {
    2: ("inch", 2.54e7),
    3: ("cm", 1e7),
    4: ("mm", 1e6),
    5: ("um", 1e3),
}


@dataclass(kw_only=True)
class TagFindings:
    """What the tags of one page say about its scale; filled tag by tag."""

    scales: list[ScaleStatement] = field(default_factory=list)
    no_scale: list[str] = field(default_factory=list)
    doubts: list[str] = field(default_factory=list)
    banner: Region | None = None
    images: int | None = None  # how many pages a description speaks of
    metadata: dict[str, str] = field(default_factory=dict)


def read_scales(page: Any, first: Any, shape: tuple[int, int]) -> TagFindings:
    """Collect every statement about the pixel size, the most trusted first.

    Parameters
    ----------
    page, first : tifffile.TiffPage
        The page that is read, and the first page of the file: makers write their tags there for pages of equal shape.
    shape : (rows, columns)
        Of the page.

    Returns
    -------
    TagFindings
        A tag that cannot be understood becomes a doubt, never an error.
    """
    found = TagFindings()
    holders = [page] if page is first or first.shape != page.shape else [page, first]
    for code, read in _MAKERS.items():
        for holder in holders:
            tag = holder.tags.get(code)
            if tag is not None:
                _guard(found, f"tag {code}", partial(read, found, holder, shape))
                break
    description = next((d for d in (_description(holder) for holder in holders) if d), "")
    if description:
        found.metadata["description"] = description[:300]
        _guard(found, "the description", partial(_read_description, found, description, page, shape))
    if not _has_unit_in_description(description):
        _guard(found, "the resolution tag", partial(_read_resolution, found, page))
    for code, name in ((271, "make"), (272, "model"), (305, "software"), (306, "date")):
        tag = page.tags.get(code)
        if tag is not None and isinstance(tag.value, str) and tag.value.strip():
            found.metadata[name] = tag.value.strip()[:300]
    return found


def _guard(found: TagFindings, what: str, read: Callable[[], object]) -> None:
    try:
        read()
    except Exception as error:  # a damaged tag must not cost the picture
        found.doubts.append(f"{what[0].upper()}{what[1:]} could not be understood ({type(error).__name__}).")


def _add(found: TagFindings, row_nm: float | None, column_nm: float | None, source: str) -> None:
    """A positive pixel size becomes a statement; anything else a reason why there is none."""
    if row_nm and column_nm:
        found.scales.append(ScaleStatement(row_nm=row_nm, column_nm=column_nm, source=source))
    else:
        found.no_scale.append(f"its {source} states no positive pixel size")


# --- makers' tags ----------------------------------------------------------------------------------------------------


def _read_34118(found: TagFindings, page: Any, shape: tuple[int, int]) -> None:
    """Scanning microscopes: named entries (label, value, unit) and an unnamed list whose fourth entry is metres.

    The unnamed entry is exact but belongs to the display width of 1024 columns; the named 'Image Pixel Size' belongs
    to the stored picture but is rounded to four digits. Where the two agree up to the ratio of the widths, the exact
    one is taken with that ratio.
    """
    entries: Mapping[str, Any] = page.tags[34118].value
    stored = re.match(r"(\d+)\s*\*\s*(\d+)", str(_entry(entries, "dp_image_store", 1) or ""))
    stated_shape = (int(stored[2]), int(stored[1])) if stored else shape
    unnamed = entries.get("", ())
    exact = positive(unnamed[3]) if len(unnamed) > 3 else None
    exact_nm = exact * 1e9 if exact else None
    field_nm = _length_entry(entries, "ap_width")
    rounded_nm = (
        _length_entry(entries, "ap_image_pixel_size")
        or (field_nm / stated_shape[1] if field_nm else None)
        or _length_entry(entries, "ap_pixel_size")
    )
    size_nm = rounded_nm or exact_nm
    if rounded_nm and exact_nm:
        scaled = next(
            (exact_nm * f for f in (1.0, 1024 / stated_shape[1]) if abs(exact_nm * f / rounded_nm - 1) < 1e-3), None
        )
        size_nm = scaled or rounded_nm
        if scaled is None:
            found.doubts.append(
                f"Tag 34118 states {rounded_nm:.4g} nm for the picture, which does not follow from its "
                f"{exact_nm:.6g} nm for the display."
            )
    if not size_nm:
        found.no_scale.append("its tag 34118 states no positive pixel size")
        return
    statement = ScaleStatement(row_nm=size_nm, column_nm=size_nm, source="tag 34118")
    found.scales.append(fit_to_picture(statement, stated_shape=stated_shape, shape=shape))
    _note(found, "magnification", _entry(entries, "ap_mag", 1))
    _note(found, "stage tilt", _entry(entries, "ap_stage_at_t", 1), unit=" deg")
    _note(found, "tilt corrected", _entry(entries, "dp_tilt_correction", 1))
    _note(found, "voltage", _entry(entries, "ap_actualkv", 1), unit=" kV")


def _note(found: TagFindings, name: str, value: Any, *, unit: str = "") -> None:
    if value is not None and str(value).strip():
        said = {True: "yes", False: "no"}[value] if isinstance(value, bool) else str(value).strip()
        found.metadata[name] = f"{said[:100]}{unit}"


def _entry(entries: Mapping[str, Any], key: str, index: int) -> Any:
    value = entries.get(key)
    return value[index] if isinstance(value, tuple) and len(value) > index else None


def _length_entry(entries: Mapping[str, Any], key: str) -> float | None:
    value, unit = positive(_entry(entries, key, 1)), length_nm(_entry(entries, key, 2))
    return value * unit if value and unit else None


def _read_34682(found: TagFindings, page: Any, shape: tuple[int, int]) -> None:
    """Scanning and dual-beam microscopes: sections of key = value; pixel width and height in metres."""
    code = 34682 if 34682 in page.tags else 34680
    sections: Mapping[str, Any] = page.tags[code].value
    beam = str(sections.get("Beam", {}).get("Scan", ""))
    width = height = None
    for name in (beam, "Scan", "EScan", "IScan"):
        section = sections.get(name, {})
        width, height = positive(section.get("PixelWidth")), positive(section.get("PixelHeight"))
        if width and height:
            break
    if not (width and height):
        found.no_scale.append(f"its tag {code} states no positive pixel size")
        return
    statement = ScaleStatement(row_nm=height * 1e9, column_nm=width * 1e9, source=f"tag {code}")
    image = sections.get("Image", {})
    columns, rows = positive(image.get("ResolutionX")), positive(image.get("ResolutionY"))
    bar = next((positive(s["DatabarHeight"]) for s in sections.values() if "DatabarHeight" in s), None)
    if columns and rows:
        stated = (int(rows), int(columns))
        found.scales.append(fit_to_picture(statement, stated_shape=stated, shape=shape))
        if bar and shape == (stated[0] + int(bar), stated[1]):
            found.banner = (stated[0], 0, shape[0], shape[1])
    else:
        found.scales.append(statement)
    stage = sections.get("Stage", {})
    tilt = next((stage[key] for key in ("StageT", "StageTa") if isinstance(stage.get(key), (int, float))), None)
    if tilt is not None:
        _note(found, "stage tilt", f"{math.degrees(tilt):.2f}", unit=" deg")
    _note(found, "tilt corrected", sections.get("EBeam", {}).get("TiltCorrectionIsOn"))
    _note(found, "voltage", sections.get("Beam", {}).get("HV"), unit=" V")


def _read_33560(found: TagFindings, page: Any, shape: tuple[int, int]) -> None:
    """Transmission cameras: a binary block with the pixel size in metres."""
    block = page.tags[33560].value
    if not isinstance(block, Mapping):
        found.no_scale.append("its tag 33560 could not be read")
        return
    column, row = positive(block.get("pixelsizex")), positive(block.get("pixelsizey"))
    _add(found, row and row * 1e9, column and column * 1e9, "tag 33560")
    magnification = positive(block.get("magnification"))
    if magnification:
        found.metadata["magnification"] = f"{magnification:g}"


def _read_65009(found: TagFindings, page: Any, shape: tuple[int, int]) -> None:
    """Exports with one private tag per axis: units in 65003 and 65004, pixel sizes in 65009 and 65010."""
    units = [length_nm(page.tags[code].value) if code in page.tags else None for code in (65003, 65004)]
    column, row = (positive(page.tags[code].value) if code in page.tags else None for code in (65009, 65010))
    if not (units[0] and units[1]):
        found.no_scale.append("its tags 65009 and 65010 have no unit of length, which is no calibration")
        return
    _add(found, row and row * units[1], column and column * units[0], "tags 65009 and 65010")


_MAKERS: Mapping[int, Callable[[TagFindings, Any, tuple[int, int]], None]] = {
    34118: _read_34118,
    34682: _read_34682,
    34680: _read_34682,
    33560: _read_33560,
    65009: _read_65009,
}


# --- descriptions ----------------------------------------------------------------------------------------------------


def _description(page: Any) -> str:
    tag = page.tags.get(270)
    value = "" if tag is None or tag.count > MAX_TEXT else tag.value
    return value if isinstance(value, str) else ""


def _has_unit_in_description(description: str) -> bool:
    """Whether the resolution tag counts pixels per unit of the description, not per inch or cm."""
    return bool(re.search(r"^unit=", description, re.MULTILINE))


def _read_description(found: TagFindings, text: str, page: Any, shape: tuple[int, int]) -> None:
    if text.lstrip().startswith("<"):
        if "<!DOCTYPE" in text or "<!ENTITY" in text:
            found.doubts.append("The description declares XML entities and was not read.")
            return
        root = ElementTree.fromstring(text.strip().rstrip("\0"))
        if root.tag.rpartition("}")[2] == "OME":
            _read_ome(found, root, shape)
        else:
            _read_magnification(found, root, page)
        return
    images = re.search(r"^images=(\d{1,9})\s*$", text, re.MULTILINE)
    found.images = int(images[1]) if images else None
    if _has_unit_in_description(text):
        _read_unit_line(found, text, page)


def _read_unit_line(found: TagFindings, text: str, page: Any) -> None:
    """A line ``unit=NAME``: the resolution tags count pixels per that unit; a z spacing is of no interest here."""
    unit = "".join(re.findall(r"^unit=(.*)$", text, re.MULTILINE)[:1]).strip()
    column, row = page.get_resolution(1, 1) if 282 in page.tags and 283 in page.tags else (None, None)
    if length_nm(unit) is None:
        found.no_scale.append(f"the unit in its description is '{unit}', no length")
        return
    if not (column and row):
        found.no_scale.append("its description names a unit, but there is no resolution tag to go with it")
        return
    stated = state_resolution(
        row, column, unit_nm=length_nm(unit), source="description unit with resolution tag", unit_name=unit
    )
    _take(found, stated)


def _read_ome(found: TagFindings, root: ElementTree.Element, shape: tuple[int, int]) -> None:
    """OME-XML: PhysicalSizeX and PhysicalSizeY of the first picture of this size; the unit is um where none is given.

    Source: OME data model, schema 2016-06, attribute PhysicalSizeXUnit (default um); an absent size is unknown.
    """
    pictures = [e for e in root.iter() if e.tag.rpartition("}")[2] == "Pixels"]
    same = [p for p in pictures if (p.get("SizeY"), p.get("SizeX")) == (str(shape[0]), str(shape[1]))]
    for picture in same or pictures[:1]:
        sizes = []
        for axis in "YX":
            value = positive(picture.get(f"PhysicalSize{axis}"))
            unit = length_nm(picture.get(f"PhysicalSize{axis}Unit", "µm"))
            sizes.append(value * unit if value and unit else None)
        if not (sizes[0] and sizes[1]):
            found.no_scale.append("its OME description states no physical size in a unit of length")
            return
        statement = ScaleStatement(row_nm=sizes[0], column_nm=sizes[1], source="OME description")
        if not same and picture.get("SizeX"):
            stated = (int(picture.get("SizeY", "0")), int(picture.get("SizeX", "0")))
            statement = fit_to_picture(statement, stated_shape=stated, shape=shape)
        found.scales.append(statement)
        return


def _read_magnification(found: TagFindings, root: ElementTree.Element, page: Any) -> None:
    """XML of some transmission microscopes: the magnification; pixels of the resolution tag are divided by it."""
    system = root.find("ImageFormingSystem")
    if system is None or system.findtext("SelectorUnitString", "").strip().upper() != "X":
        return
    magnification = positive(system.findtext("SelectorValue"))
    if magnification is None or 282 not in page.tags or 283 not in page.tags:
        found.no_scale.append("its description states no magnification to go with the resolution tag")
        return
    found.metadata["magnification"] = f"{magnification:g}"
    unit_nm = _resolution_unit(page)[1]
    column, row = page.get_resolution(1, 1)
    if unit_nm and row > 0 and column > 0:
        rounding = 0.5 / min(row, column)
        doubts = (
            (f"The resolution tag is rounded: it leaves the pixel size open to +-{100 * rounding:.1f} %.",)
            if float(row).is_integer() and rounding > 1e-3
            else ()
        )
        found.scales.append(
            ScaleStatement(
                row_nm=unit_nm / row / magnification,
                column_nm=unit_nm / column / magnification,
                source="magnification in the description with resolution tag",
                doubts=doubts,
            )
        )


# --- resolution tags -------------------------------------------------------------------------------------------------


def _read_resolution(found: TagFindings, page: Any) -> None:
    if 282 not in page.tags or 283 not in page.tags:
        return
    column, row = page.get_resolution(1, 1)
    name, unit_nm = _resolution_unit(page)
    if unit_nm is None:
        if (row, column) != (1.0, 1.0):
            found.no_scale.append(f"its resolution tag ({column:g} x {row:g}) has no unit, which is no calibration")
        return
    _take(found, state_resolution(row, column, unit_nm=unit_nm, source="resolution tag", unit_name=name))


def _resolution_unit(page: Any) -> tuple[str, float | None]:
    tag = page.tags.get(296)
    code = int(tag.value) if tag is not None else 2  # TIFF 6.0, ResolutionUnit: default 2 = inch
    return _RESOLUTION_UNIT_NM.get(code, ("none", None))


def _take(found: TagFindings, stated: ScaleStatement | str) -> None:
    if isinstance(stated, str):
        found.no_scale.append(stated)
    else:
        found.scales.append(stated)
