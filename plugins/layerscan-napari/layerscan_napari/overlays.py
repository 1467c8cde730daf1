"""Layers that the panel draws over an image: lines, marks of the live boundaries, traced boundaries by thickness.

All are placed in nm by the image's own pixel size, hold pixels of the page as data, and are named after their image.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from layerscan_napari import colours, images
from layerscan_napari.compute import rounded_line
from layerscan_napari.desk import LineEntry
from layerscan_napari.traces import Segments, boundary_marks

if TYPE_CHECKING:
    from layerscan.records import FloatArray, Measurement, Micrograph

OWNER = "layerscan-of"
LINES, MARKS, TRACES = "lines", "live boundaries", "traced boundaries"


def find_overlay(viewer: Any, image: Any, role: str) -> Any:
    """The overlay of an image in this role, or None."""
    wanted = (role, image.unique_id)
    return next((layer for layer in viewer.layers if layer.metadata.get(OWNER) == wanted), None)


def image_of(viewer: Any, overlay: Any) -> Any:
    """The image layer that an overlay belongs to, or None."""
    _, owner = overlay.metadata.get(OWNER, (None, None))
    return next((layer for layer in viewer.layers if layer.unique_id == owner), None)


def _common(image: Any, micrograph: Micrograph, role: str) -> dict[str, Any]:
    return {
        "name": f"{image.name} · {role}",
        "ndim": 2,
        "metadata": {OWNER: (role, image.unique_id)},
        **images.overlay_placement(image, micrograph),
    }


def lines_layer(viewer: Any, image: Any, micrograph: Micrograph, *, width_px: float) -> Any:
    """The layer on which lines are drawn over an image; made where missing."""
    layer = find_overlay(viewer, image, LINES)
    if layer is None:
        layer = viewer.add_shapes(
            edge_color=colours.ORANGE,
            face_color="transparent",
            edge_width=width_px,
            opacity=0.4,
            **_common(image, micrograph, LINES),
        )
    return layer


def marks_layer(viewer: Any, image: Any, micrograph: Micrograph) -> Any:
    """The layer that marks the boundaries found along the line; made where missing, below the selected layer."""
    layer = find_overlay(viewer, image, MARKS)
    if layer is None:
        layer = viewer.add_vectors(
            np.zeros((0, 2, 2)),
            edge_color=colours.SKY,
            vector_style="line",
            edge_width=max(1.0, 0.0025 * max(micrograph.shape)),
            **_common(image, micrograph, MARKS),
        )
    return layer


def place_anew(viewer: Any, image: Any, micrograph: Micrograph) -> None:
    """Give an image another micrograph (another pixel size) and place it and its overlays accordingly."""
    image.metadata = {**image.metadata, images.KEY: micrograph}
    layers = [image, *(layer for role in (LINES, MARKS, TRACES) if (layer := find_overlay(viewer, image, role)))]
    place = images.placement(micrograph)
    for layer in layers:
        layer.translate = tuple(
            float(t) * new / old for t, new, old in zip(layer.translate, place["scale"], layer.scale, strict=True)
        )
        layer.scale = place["scale"]
    for layer in layers:
        layer.units = place["units"]


def line_entries(lines: Any, width: str) -> tuple[LineEntry, ...]:
    """The lines of a layer as saved work holds them."""
    return tuple(
        LineEntry(line=rounded_line(points), width=width)
        for points, kind in zip(lines.data, lines.shape_type, strict=True)
        if kind == "line"
    )


def show_marks(layer: Any, measurement: Measurement | None, *, width_px: float) -> None:
    """Mark the boundaries of a line in the image.

    The marks lie on the line, so the extent of the scene stays as it is: napari's recalculation of it, and the
    thumbnail, would take longer than everything else in a refresh.
    """
    ticks = np.zeros((0, 2, 2)) if measurement is None else boundary_marks(measurement, width_px=width_px)
    if len(ticks) or len(layer.data):
        with layer.events.blocker_all():
            layer.data = ticks
        layer.refresh(thumbnail=False, highlight=False, extent=False)


def show_traces(viewer: Any, image: Any, micrograph: Micrograph, segments: Segments) -> Any:
    """Draw traced boundaries coloured by thickness.

    The layer is made empty and filled in place: removing a layer, and thumbnails of many vectors, would make the
    window stand still.
    """
    layer = find_overlay(viewer, image, TRACES)
    if layer is None:
        common = _common(image, micrograph, TRACES)
        layer = viewer.add_vectors(np.zeros((0, 2, 2)), vector_style="line", **common)
    width = _trace_width(segments, micrograph)
    with layer.events.blocker_all():
        if layer.edge_width != width:
            layer.edge_width = width
        layer.data = segments.vectors
        layer.features = {
            "boundary": segments.boundary,
            "layer": segments.layer,
            "thickness_nm": segments.thickness_nm,
        }
        if len(segments.vectors):
            layer.edge_color = thickness_colours(segments.thickness_nm)
    layer.refresh(thumbnail=False, highlight=False, extent=False)
    return layer


def thickness_colours(thickness_nm: FloatArray) -> FloatArray:
    """(values, 4) red, green, blue, opacity of thicknesses on the scale that the legend shows."""
    from napari.utils.colormaps import ensure_colormap

    low, high = thickness_limits(thickness_nm)
    place = np.clip((np.nan_to_num(thickness_nm, nan=low) - low) / (high - low), 0, 1)
    return np.asarray(ensure_colormap(colours.THICKNESS_COLOURMAP).map(place), dtype=float)


def _trace_width(segments: Segments, micrograph: Micrograph) -> float:
    """Width of a traced boundary in pixels: a quarter of a typical layer, so that layers stay visible between."""
    size = micrograph.pixel_size
    known = segments.thickness_nm[np.isfinite(segments.thickness_nm)]
    if size is None or known.size == 0:
        return 2.0
    return float(
        np.clip(0.25 * np.median(known) / max(size.row_nm, size.column_nm), 1.0, 0.006 * max(micrograph.shape))
    )


def thickness_limits(thickness_nm: FloatArray) -> tuple[float, float]:
    """Ends of the colour scale: the middle 96 % of the local thicknesses."""
    known = thickness_nm[np.isfinite(thickness_nm)]
    if known.size == 0:
        return 0.0, 1.0
    low, high = (float(v) for v in np.percentile(known, (2, 98)))
    return (low, high) if high > low else (low - 0.5, high + 0.5)
