"""A measurement laid over its image: traced boundaries as line segments, the layer at a point, a layer in words.

Everything here is in pixels (row, column) of the full page; nothing here knows of windows.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from layerscan.records import Average, Boundary, FloatArray, IntArray, Layer, Measurement


MOST_SEGMENTS = 5000
"""What napari draws without the window standing still."""


@dataclass(frozen=True, kw_only=True, eq=False)
class Segments:
    """Line segments of the traced boundaries; arrays have one entry per segment.

    ``vectors`` is (segments, 2, 2): start (row, column) and step (row, column), in pixels. ``thickness_nm`` is the
    local thickness of the layer that begins at the boundary; at the last boundary, of the layer that ends there.
    """

    vectors: FloatArray
    boundary: IntArray
    layer: IntArray
    thickness_nm: FloatArray


def layer_offset(measurement: Measurement) -> int:
    """Number of layers before the first boundary: 1 where the stack begins with a layer that the frame cuts."""
    layers = measurement.layers
    if len(layers) < len(measurement.boundaries) or not layers:
        return 0
    return int(not layers[0].complete)


def traced_segments(measurement: Measurement, *, most: int = MOST_SEGMENTS) -> Segments:
    """Segments of every traced boundary, thinned to about ``most`` in all and at least 16 each."""
    vectors, boundary, layer, thickness = [], [], [], []
    traced = [b for b in measurement.boundaries if b.trace is not None and len(b.trace.station) > 1]
    most_per_boundary = max(16, most // max(len(traced), 1))
    offset = layer_offset(measurement)
    for place, item in enumerate(traced):
        trace = item.trace
        assert trace is not None
        chosen = np.unique(np.linspace(0, len(trace.station) - 1, most_per_boundary + 1).astype(int))
        points = np.column_stack([trace.row_px, trace.column_px])[chosen]
        gaps = np.diff(trace.station[chosen]) > 3 * np.median(np.diff(trace.station[chosen]))
        steps = np.diff(points, axis=0)[~gaps]
        vectors.append(np.stack([points[:-1][~gaps], steps], axis=1))
        last = place == len(traced) - 1
        neighbour = traced[place - 1] if last and place else traced[min(place + 1, len(traced) - 1)]
        local = _local_thickness(item, neighbour)[chosen][:-1][~gaps]
        number = item.index + offset - (1 if last and place else 0)
        mean = next((one.thickness_nm for one in measurement.layers if one.index == number), math.nan)
        thickness.append(np.where(np.isfinite(local) & (local > 0), local, mean))
        boundary.append(np.full(len(steps), item.index))
        layer.append(np.full(len(steps), number))
    if not vectors:
        empty = np.zeros(0)
        return Segments(
            vectors=np.zeros((0, 2, 2)), boundary=empty.astype(np.int64), layer=empty.astype(np.int64),
            thickness_nm=empty,
        )  # fmt: skip
    return Segments(
        vectors=np.concatenate(vectors),
        boundary=np.concatenate(boundary),
        layer=np.concatenate(layer),
        thickness_nm=np.concatenate(thickness),
    )


def _local_thickness(one: Boundary, other: Boundary) -> FloatArray:
    """Distance along the depth to another boundary, station by station; NaN where that one was not traced."""
    assert one.trace is not None
    assert other.trace is not None
    result = np.full(len(one.trace.station), np.nan)
    _, here, there = np.intersect1d(one.trace.station, other.trace.station, return_indices=True)
    result[here] = np.abs(other.trace.depth_nm[there] - one.trace.depth_nm[here])
    return result


def layer_at(measurement: Measurement, *, row_px: float, column_px: float) -> Layer | None:
    """The layer that holds a point of the image, or None outside the traced stack.

    The point is placed along the layers by the measured orientation, and counted against the traces there.
    """
    size = measurement.image.pixel_size
    if size is None or measurement.orientation_deg is None:
        return None
    angle = math.radians(measurement.orientation_deg)
    normal = np.array([math.sin(angle), math.cos(angle)])
    along = np.array([math.cos(angle), -math.sin(angle)])
    scale = np.array([size.row_nm, size.column_nm])
    point = np.array([row_px, column_px]) * scale
    before = []
    for boundary in measurement.boundaries:
        if boundary.trace is None or len(boundary.trace.station) == 0:
            continue
        points = np.column_stack([boundary.trace.row_px, boundary.trace.column_px]) * scale
        place = points @ along
        order = np.argsort(place)
        reach = 3 * np.median(np.diff(place[order])) if len(place) > 1 else 0.0
        if not place[order[0]] - reach <= point @ along <= place[order[-1]] + reach:
            continue
        depth = np.interp(point @ along, place[order], (points @ normal)[order])
        if depth <= point @ normal:
            before.append(boundary.index)
    if not before or len(before) == len(measurement.boundaries):
        return None
    number = max(before) + layer_offset(measurement)
    return next((layer for layer in measurement.layers if layer.index == number), None)


def boundary_marks(measurement: Measurement, *, width_px: float) -> FloatArray:
    """One tick for every boundary of a line, along the layers and reaching out of a band of this width.

    Returns
    -------
    (boundaries, 2, 2) float array
        Start and step of each tick, (row, column) in pixels.
    """
    size = measurement.image.pixel_size
    places = [
        (b.trace.row_px.mean(), b.trace.column_px.mean())
        for b in measurement.boundaries
        if b.trace is not None and len(b.trace.row_px)
    ]
    if size is None or measurement.orientation_deg is None or not places:
        return np.zeros((0, 2, 2))
    angle = math.radians(measurement.orientation_deg)
    along = np.array([math.cos(angle) / size.row_nm, -math.sin(angle) / size.column_nm])
    step = along / math.hypot(*along) * (1.6 * width_px)
    starts = np.array(places) - step / 2
    return np.stack([starts, np.broadcast_to(step, starts.shape)], axis=1)


# --- in words --------------------------------------------------------------------------------------------------------


def value_with_u(value: float | None, u: float | None, unit: str = "nm") -> str:
    """Value and standard uncertainty, both to the second digit of the uncertainty (JCGM 100:2008, 7.2.6).

    Examples
    --------
    >>> value_with_u(212.417, 1.26)
    '212.4 ± 1.3 nm'
    >>> value_with_u(212.417, None)
    '212.4 nm'
    """
    if value is None or not math.isfinite(value):
        return "–"
    if u is None or not math.isfinite(u) or u <= 0:
        return f"{value:.4g} {unit}".strip()
    digits = max(0, 1 - math.floor(math.log10(u)))
    return f"{value:.{digits}f} ± {u:.{digits}f} {unit}".strip()


def average_in_words(average: Average | None, unit: str = "nm") -> str:
    """Mean, u, spread and number of an average."""
    if average is None:
        return "–"
    spread = "" if average.sd is None else f", spread {average.sd:.3g} {unit}"
    return f"{value_with_u(average.mean, average.u, unit)}{spread}, n = {average.n}"


def layer_in_words(measurement: Measurement, layer: Layer) -> str:
    """What a click on a layer shows: thickness, uncertainty, lateral spread, roughness of both boundaries, doubts."""
    from layerscan.records import FLAGS

    first = layer.index - layer_offset(measurement)
    lines = [f"Layer {layer.index}, {layer.phase}: {value_with_u(layer.thickness_nm, layer.u_nm)}"]
    if layer.sd_lateral_nm is not None:
        lines.append(f"Spread along the layer: {layer.sd_lateral_nm:.3g} nm")
    rough = [b.roughness_nm for b in measurement.boundaries if b.index in (first, first + 1)]
    if any(r is not None for r in rough):
        shown = " and ".join("–" if r is None else f"{r:.3g} nm" for r in rough)
        lines.append(f"Roughness of its boundaries: {shown}")
    if not layer.complete:
        lines.append("Cut by the frame, so left out of the means.")
    lines += [FLAGS.get(flag, flag) for flag in layer.flags]
    return "\n".join(lines)
