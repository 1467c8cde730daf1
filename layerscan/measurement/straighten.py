"""From an orientation map to a straightened field: frame, alignment of columns, final sampling."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from layerscan.errors import MeasurementError
from layerscan.measurement.field import (
    Frame,
    StraightField,
    aligned_mean,
    fit_frame,
    hold_unseen,
    refine_shift,
    sample_field,
    settle_shift,
    track_columns,
)

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from layerscan.records import FloatArray, Region

MOST_STATIONS = 1500
MEMORY = 12  # columns that the evolving profile remembers


@dataclass(frozen=True, kw_only=True, eq=False)
class OrientationMap:
    """Local direction of the layer normal [rad, modulo pi] with its weight and place; 1-D arrays."""

    angle_rad: FloatArray
    weight: FloatArray
    row: FloatArray
    column: FloatArray


def straighten(
    image: NDArray[np.float32], *, orientation: OrientationMap, period: float, region: Region
) -> StraightField:
    """Straighten the layers of a region.

    Parameters
    ----------
    image : (rows, columns) float32 array
        Square pixels; NaN where a pixel must not be used.
    orientation : OrientationMap
        Local normals.
    period : float
        Dominant spacing [px].
    region : (row0, column0, row1, column1)
        The part to straighten.

    Returns
    -------
    StraightField

    Raises
    ------
    MeasurementError
        The region is narrower than the layers need to be followed.
    """
    size = float(max(region[2] - region[0], region[3] - region[1]))
    frame = fit_frame(
        angle_rad=orientation.angle_rad,
        weight=orientation.weight,
        row=orientation.row,
        column=orientation.column,
        size=size,
    )
    low, high, left, right = _extent(frame, region, period)
    if high - low < 4 or right - left < 1:
        raise MeasurementError("The region is too small to follow layers in it. Choose a larger region.")
    coarse = max(1, int(period // 20))  # depth samples joined for the alignment
    width = max(1, int(min(period / 5, (right - left) / 24)))
    step = float(coarse)
    count = int((high - low) / step) + 1
    columns = max(int((right - left) / width), 1)
    start = left + 0.5 * ((right - left) - (columns - 1) * width)
    flat = np.zeros((1, columns))
    field = sample_field(image, frame.vector(), low, step, count, start, float(width), width, flat, 0.0, 1.0)
    shift, node_start, node_step = _align(field, period / step)
    # final stations: as wide as the total number allows
    fine = max(1, math.ceil((right - left) / MOST_STATIONS))
    stations = max(int((right - left) / fine), 1)
    station_start = left + 0.5 * ((right - left) - (stations - 1) * fine)
    at = (station_start + fine * np.arange(stations) - start) / width
    moved = np.stack([np.interp(at, np.arange(columns), line) for line in shift]) * step
    count = int(high - low) + 1
    final = sample_field(
        image,
        frame.vector(),
        low,
        1.0,
        count,
        station_start,
        float(fine),
        fine,
        moved,
        node_start * step,
        node_step * step,
    )
    return StraightField(
        frame=frame,
        intensity=final,
        depth_start=low,
        station_start=station_start,
        station_step=float(fine),
        shift=moved,
        node_start=node_start * step,
        node_step=node_step * step,
    )


def _extent(frame: Frame, region: Region, period: float) -> tuple[float, float, float, float]:
    """Whole numbers of depth and station that hold the region, the neighbourhood of a centre of curvature left out."""
    low, high, left, right = frame.extent(region)
    k = frame.curvature
    if k > 0:
        high = min(high, 1 / k - 0.25 * period)
    elif k < 0:
        low = max(low, 1 / k + 0.25 * period)
    return math.floor(low), math.ceil(high), math.floor(left), math.ceil(right)


def _align(field: NDArray[np.float32], period: float) -> tuple[FloatArray, float, float]:
    """Shift at nodes along the depth for every column, and where the nodes lie; all in samples of ``field``."""
    _count, _columns = field.shape
    seen = np.isfinite(field)
    if not seen.any():
        raise MeasurementError("The region holds no usable pixel. Choose another region.")
    depth_seen = np.flatnonzero(seen.sum(axis=1) >= 0.1 * seen.sum(axis=1).max())
    node_step = float(max(2.0 * period, (depth_seen[-1] - depth_seen[0]) / 40, 4.0))
    nodes = max(int((depth_seen[-1] - depth_seen[0]) / node_step), 1)
    node_start = 0.5 * (depth_seen[0] + depth_seen[-1]) - 0.5 * (nodes - 1) * node_step
    half = int(1.6 * period) + 1
    reach = max(2, int(0.15 * period))
    covered = seen.sum(axis=0)
    full = np.flatnonzero(covered >= 0.9 * covered.max())
    first = int(full[np.argmin(np.abs(full - np.mean(full)))])
    shift, _ = track_columns(field, first, nodes, node_step, node_start, half, reach, MEMORY)
    template = aligned_mean(field, shift, node_start, node_step)
    shift = settle_shift(field, template, shift, node_start, node_step, half, int(0.7 * period) + 1, 0.15)
    shift = hold_unseen(field, shift, node_start, node_step, half)
    for width in (4.0, 2.5):
        template = aligned_mean(field, shift, node_start, node_step)
        shift = refine_shift(field, template, shift, node_start, node_step, half, reach, width)
        shift = hold_unseen(field, shift, node_start, node_step, half)
    shift -= np.average(shift, axis=1, weights=np.maximum(covered, 1e-9))[:, None]
    return shift, node_start, node_step
