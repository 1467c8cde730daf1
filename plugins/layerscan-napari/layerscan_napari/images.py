"""Micrographs and napari image layers: one copy of the pixels, lengths in nm whatever the layer says.

No Qt and no viewer here; a layer is anything with ``data``, ``scale``, ``units``, ``metadata`` and ``name``.
"""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from pathlib import Path

    from layerscan.records import Micrograph

KEY = "layerscan"
"""Key of the micrograph in a layer's metadata."""

AXIS_LABELS = ("row", "column")


def open_micrograph(path: Path | str, *, pixel_size: str | None = None, page: int = 0) -> Micrograph:
    """Open one page of a file by the core's reader; a file without a pixel size opens in pixels."""
    import layerscan

    return layerscan.open_image(path, pixel_size=pixel_size, page=page, require_pixel_size=False)


def keep_pixels(micrograph: Micrograph) -> tuple[Any, Micrograph]:
    """Read the pixels once; returns them and the micrograph that hands out the same array."""
    pixels = micrograph.load()
    return pixels, replace(micrograph, load=lambda: pixels)


def keep_when_read(micrograph: Micrograph) -> Micrograph:
    """The same micrograph, whose pixels are read at the first call and then kept (for pyramids)."""
    from functools import cache

    return replace(micrograph, load=cache(micrograph.load))


def layer_options(micrograph: Micrograph, *, name: str) -> dict[str, Any]:
    """Keyword arguments of the image layer: scale, units and axis labels, in nm or in pixels."""
    return {"name": name, "metadata": {KEY: micrograph}, **placement(micrograph)}


def placement(micrograph: Micrograph) -> dict[str, Any]:
    """Scale, units and axis labels of every layer that belongs to a micrograph; its data are then in pixels."""
    size = micrograph.pixel_size
    if size is None:
        return {"scale": (1.0, 1.0), "units": ("pixel", "pixel"), "axis_labels": AXIS_LABELS}
    return {"scale": (size.row_nm, size.column_nm), "units": ("nm", "nm"), "axis_labels": AXIS_LABELS}


def can_measure(layer: Any) -> bool:
    """Whether an image layer is one grey picture."""
    if layer.metadata.get(KEY) is not None:
        return True
    return not (getattr(layer, "rgb", False) or getattr(layer, "multiscale", False)) and layer.ndim == 2


def micrograph_of_layer(layer: Any) -> Micrograph | None:
    """The micrograph behind an image layer: ours, or made from a plain two-dimensional layer; None for others.

    A layer of another plugin counts as calibrated only where its units are lengths; its scale is taken to nm.
    """
    held = layer.metadata.get(KEY)
    if held is not None:
        return held  # type: ignore[no-any-return]
    return _from_plain_layer(layer) if can_measure(layer) else None


def with_pixel_size(micrograph: Micrograph, stated: str | None) -> Micrograph:
    """The same image with the user's pixel size (None: the file's own again); its pixels are not read again.

    Raises
    ------
    SettingsError
        The text is no pixel size.
    """
    if micrograph.path is not None:
        fresh = open_micrograph(micrograph.path, pixel_size=stated, page=micrograph.page)
        return replace(fresh, load=micrograph.load)
    if stated is None:
        return replace(micrograph, pixel_size=None)
    from layerscan.readers.images import from_array
    from layerscan.uncertainty import parse_pixel_size

    row, column = parse_pixel_size(stated)
    known = [q.u / q.value for q in (row, column) if q.u is not None]
    name = micrograph.metadata.get("name", "array")
    fresh = from_array(
        micrograph.load(),
        pixel_size_nm=(row.value, column.value),
        u_relative=max(known) if known else None,
        name=name,
    )
    size = fresh.pixel_size
    assert size is not None
    return replace(fresh, pixel_size=replace(size, stated=stated, source="stated by the user"))


def _from_plain_layer(layer: Any) -> Micrograph:
    import numpy as np
    from layerscan.readers.images import from_array

    return from_array(np.asarray(layer.data), pixel_size_nm=_scale_nm(layer), name=layer.name)


def overlay_placement(layer: Any, micrograph: Micrograph) -> dict[str, Any]:
    """Placement of a layer drawn over an image layer: always in nm, so that the mouse and the pixels agree.

    napari shows layers of mixed units in the smallest one, and gives the mouse's position in it.
    """
    place = placement(micrograph)
    factors = [s / t for s, t in zip(place["scale"], layer.scale, strict=True)]
    return {**place, "translate": tuple(float(t) * f for t, f in zip(layer.translate, factors, strict=True))}


def _scale_nm(layer: Any) -> tuple[float, float] | None:
    from layerscan.uncertainty import LENGTH_NM

    factors = []
    for scale, unit in zip(layer.scale, layer.units, strict=True):
        try:
            factor = LENGTH_NM.get(f"{unit:~}") or float((1 * unit).to("nm").magnitude)
        except Exception:  # pint: pixels and seconds are no lengths
            return None
        factors.append(float(scale) * factor)
    return factors[0], factors[1]
