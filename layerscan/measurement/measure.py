"""Micrograph to measurement: the whole chain for a field; ``settings.line`` goes to ``line.py``."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from layerscan.errors import CalibrationError, InputError
from layerscan.measurement.result import (
    Aligned,
    FoundLayers,
    build_measurement,
    empty_measurement,
    pattern_measurement,
)
from layerscan.records import Detection

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from layerscan.measurement.detection import LayerDetection
    from layerscan.measurement.field import StraightField
    from layerscan.measurement.tracking import FollowedStack
    from layerscan.records import BoolArray, FloatArray, Measurement, Micrograph, Phase, Progress, Region
    from layerscan.settings import MeasureSettings

PHASE_NAMES: tuple[Phase, ...] = ("dark", "bright", "other")
SATURATED_SHARE = 0.01
WAVES = 3  # bending with fewer waves across the field is waviness, with more it is roughness
DIRECTION_DOUBT = 0.35  # of what bending takes off lengths; common practice, no source: fits made sections


def measure_micrograph(
    micrograph: Micrograph, settings: MeasureSettings, *, progress: Progress | None = None
) -> Measurement:
    """Measure the layers of one micrograph.

    Parameters
    ----------
    micrograph : Micrograph
    settings : MeasureSettings
        ``line`` measures along a line; ``region`` restricts the field; ``edits`` corrects boundaries by hand.
    progress : callable, optional
        See ``records.Progress``; what it raises passes through.

    Returns
    -------
    Measurement
        ``layered`` False, with the evidence and without numbers, where no layered structure was found.

    Raises
    ------
    CalibrationError
        The micrograph has no pixel size.
    InputError
        No pixel is usable, or the region or line lies outside the image.
    MeasurementError
        The layered part is too small to be measured.

    Notes
    -----
    Detection gives local orientation and spacing; the field is straightened along the layers; a hidden semi-Markov
    model segments the mean profile; all boundaries are fitted jointly and then followed along the layers.
    """
    if micrograph.pixel_size is None:
        name = micrograph.path.name if micrograph.path else "the array"
        raise CalibrationError(
            f"Pixel size of '{name}' is unknown. Give pixel_size ('VALUE [+- U] UNIT') or pixel_size_nm."
        )
    _say(progress, "reading pixels", 0.0)
    if settings.line is not None:
        from layerscan.measurement.line import measure_line_of

        return measure_line_of(micrograph, settings, progress=progress)
    picture = prepare_picture(micrograph, settings.region)
    return _measure_field(micrograph, settings, picture, progress)


SMALL_FIELD_PX = 32  # the detector compares places along the layers, for which it needs some


@dataclass(frozen=True, kw_only=True, eq=False)
class Picture:
    """Pixels on a square grid: page row = row0 + row * row_scale, likewise for columns; NaN where not usable."""

    intensity: NDArray[np.float32]
    row0: int
    column0: int
    row_scale: float
    column_scale: float
    unit_nm: float
    flags: tuple[str, ...]

    def to_page(self, row: FloatArray, column: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Places in the full page."""
        return self.row0 + row * self.row_scale, self.column0 + column * self.column_scale

    def region_to_page(self, region: Region) -> Region:
        """A region of this grid as whole pixels of the page."""
        rows, columns = self.to_page(np.array([region[0], region[2]]), np.array([region[1], region[3]]))
        return int(rows[0]), int(columns[0]), math.ceil(rows[1]), math.ceil(columns[1])


def prepare_picture(micrograph: Micrograph, region: Region | None) -> Picture:
    """Load the pixels of a region, leave out what is no specimen, and bring them to square pixels.

    Raises
    ------
    InputError
        The region lies outside the image or no pixel of it is usable.
    """
    assert micrograph.pixel_size is not None
    rows, columns = micrograph.shape
    r0, c0, r1, c1 = region or (0, 0, rows, columns)
    if r0 >= rows or c0 >= columns or r1 > rows or c1 > columns:
        raise InputError(
            f"Region {r0},{c0},{r1},{c1} lies outside the image of {rows} rows and {columns} columns. "
            "Give ROW0,COL0,ROW1,COL1 within it."
        )
    pixels = micrograph.load()
    if pixels.shape != (rows, columns):
        raise InputError(f"The image gave {pixels.shape} pixels where {(rows, columns)} were expected. Open it again.")
    image = np.array(pixels[r0:r1, c0:c1], dtype=np.float32, order="C")
    flags = []
    holes = ~np.isfinite(image)
    if holes.any():
        image[holes] = np.nan
        flags.append("holes_ignored")
    if micrograph.mask is not None:
        image[~micrograph.mask[r0:r1, c0:c1]] = np.nan
    for item in micrograph.excluded:
        a, b, c, d = item.region
        image[max(a - r0, 0) : max(c - r0, 0), max(b - c0, 0) : max(d - c0, 0)] = np.nan
    usable = np.isfinite(image)
    if not usable.any():
        where = "the region" if region else "the image"
        raise InputError(
            f"No pixel of {where} is usable: all are not finite or excluded. Choose another image or region."
        )
    if _is_saturated(image, micrograph.stored_type):
        flags.append("saturated")
    size = micrograph.pixel_size
    unit = min(size.row_nm, size.column_nm)
    row_factor, column_factor = size.row_nm / unit, size.column_nm / unit
    image = _stretch(image, row_factor, 0)
    image = _stretch(image, column_factor, 1)
    return Picture(
        intensity=np.ascontiguousarray(image), row0=r0, column0=c0, row_scale=1 / row_factor,
        column_scale=1 / column_factor, unit_nm=unit, flags=tuple(flags),
    )  # fmt: skip


def _is_saturated(image: NDArray[np.float32], stored_type: str) -> bool:
    """Whether more than a hundredth of the usable pixels sit at either end of what the file can hold."""
    if not stored_type.startswith(("uint8", "uint16", "int16")):
        return False
    low, high = np.nanmin(image), np.nanmax(image)
    at_ends = np.count_nonzero(image == low), np.count_nonzero(image == high)
    return bool(max(at_ends) > SATURATED_SHARE * image.size and sum(at_ends) < image.size)


def _stretch(image: NDArray[np.float32], factor: float, axis: int) -> NDArray[np.float32]:
    """Linear interpolation along one axis onto ``factor`` times as many pixels, NaN kept."""
    if abs(factor - 1) < 1e-6:
        return image
    length = image.shape[axis]
    at = np.arange(int((length - 1) * factor) + 1) / factor
    low = np.minimum(at.astype(np.int64), max(length - 2, 0))
    part = (at - low).astype(np.float32)
    part = part[:, None] if axis == 0 else part[None, :]
    first, second = np.take(image, low, axis=axis), np.take(image, np.minimum(low + 1, length - 1), axis=axis)
    out: NDArray[np.float32] = np.where(part == 0, first, first + part * (second - first))
    return out


def _measure_field(
    micrograph: Micrograph, settings: MeasureSettings, picture: Picture, progress: Progress | None
) -> Measurement:
    _say(progress, "preparing the kernels (the first run compiles them)", 0.02)
    from layerscan.measurement.detection import detect_layers
    from layerscan.measurement.straighten import straighten
    from layerscan.measurement.tracking import follow_layers

    image = picture.intensity
    _say(progress, "looking for layers", 0.05)
    seen = detect_layers(image, progress=None)
    detection = _detection(seen, picture)
    if not seen.layered or seen.period_px is None:
        flags = (*picture.flags, *seen.flags)
        if min(image.shape) < SMALL_FIELD_PX:
            flags = (*flags, "field_too_small")
        aligned = _aligned(seen, picture)
        if aligned is None:
            return empty_measurement(micrograph, settings, detection, flags=flags)
        evidence = replace(detection, layered=True, p_value=None)  # its p-value is that of layers told apart
        return pattern_measurement(micrograph, settings, evidence, aligned, flags=flags)
    _say(progress, "straightening the field", 0.3)
    period = seen.period_px
    region = _grown_region(seen, image.shape, 1.5 * period)
    straight = straighten(image, orientation=_orientation_map(seen), period=period, region=region)
    _say(progress, "finding boundaries", 0.5)
    followed = follow_layers(
        straight, period=period, layered=_layered_depths(seen, straight), full_scale=full_scale(micrograph, image)
    )
    if followed is None:
        return empty_measurement(micrograph, settings, detection, flags=picture.flags)
    _say(progress, "uncertainty and statistics", 0.9)
    found = describe_field(picture, straight, followed, seen)
    if settings.edits:
        from layerscan.measurement.editing import apply_edits

        found = apply_edits(found, settings, unit_nm=picture.unit_nm)
    result = build_measurement(micrograph, settings, detection, found, unit_nm=picture.unit_nm, flags=picture.flags)
    _say(progress, "measured", 1.0)
    return result


def full_scale(micrograph: Micrograph, image: NDArray[np.float32]) -> float | None:
    """Largest intensity that the file can hold, where its type says so; -1 where a part of the picture is clipped."""
    highest, lowest = float(np.nanmax(image)), float(np.nanmin(image))
    step = max(image.size // 200_000, 1)
    part = image.ravel()[::step]
    if max((part == highest).mean(), (part == lowest).mean()) > 1e-3 and highest > lowest:
        return -1.0
    tops = {"uint8": 255.0, "uint16": 65535.0}
    top = tops.get(micrograph.stored_type, 1.0)
    return top if 0.2 * top < highest <= top else None


def _say(progress: Progress | None, what: str, fraction: float) -> None:
    if progress is not None:
        progress(what, fraction)


def _detection(seen: LayerDetection, picture: Picture) -> Detection:
    return Detection(
        layered=seen.layered,
        periodic=seen.periodic,
        statistic=seen.statistic,
        p_value=seen.p_value,
        region=None if seen.region is None else picture.region_to_page(seen.region),
        flags=seen.flags,
    )


def _aligned(seen: LayerDetection, picture: Picture) -> Aligned | None:
    if not seen.aligned or seen.orientation_deg is None or seen.period_px is None:
        return None
    return Aligned(
        orientation_rad=math.radians(seen.orientation_deg),
        u_orientation_rad=math.radians(seen.u_orientation_deg or 0.0),
        spacing=seen.period_px,
        u_spacing=seen.u_period_px or 0.3 * seen.period_px,
        unit_nm=picture.unit_nm,
    )


def _orientation_map(seen: LayerDetection):  # type: ignore[no-untyped-def]
    from layerscan.measurement.straighten import OrientationMap

    assert seen.orientation_map_deg is not None
    assert seen.coherence is not None
    assert seen.map_row_px is not None
    assert seen.map_column_px is not None
    rows, columns = np.meshgrid(seen.map_row_px, seen.map_column_px, indexing="ij")
    weight = seen.coherence.astype(np.float64)
    if seen.valid is not None:
        i = np.clip((rows / seen.valid_step_px).astype(int), 0, seen.valid.shape[0] - 1)
        j = np.clip((columns / seen.valid_step_px).astype(int), 0, seen.valid.shape[1] - 1)
        inside = seen.valid[i, j]
        if inside.any():
            weight = np.where(inside, weight, 0.0)
    keep = (weight > 0) & np.isfinite(seen.orientation_map_deg)
    return OrientationMap(
        angle_rad=np.radians(seen.orientation_map_deg[keep]),
        weight=weight[keep],
        row=rows[keep].astype(np.float64),
        column=columns[keep].astype(np.float64),
    )


def _grown_region(seen: LayerDetection, shape: tuple[int, ...], margin: float) -> Region:
    assert seen.region is not None
    r0, c0, r1, c1 = seen.region
    grow = int(margin)
    return max(r0 - grow, 0), max(c0 - grow, 0), min(r1 + grow, shape[0]), min(c1 + grow, shape[1])


def _layered_depths(seen: LayerDetection, straight: StraightField) -> tuple[float, float] | None:
    """Depth samples between which the valid cells lie."""
    if seen.valid is None or not seen.valid.any():
        return None
    i, j = np.nonzero(seen.valid)
    step = float(seen.valid_step_px)
    depth, _ = straight.frame.to_frame((i.astype(np.float64) + 0.5) * step, (j.astype(np.float64) + 0.5) * step)
    half = 0.5 * seen.valid_step_px
    return float(depth.min()) - half - straight.depth_start, float(depth.max()) + half - straight.depth_start


def describe_field(
    picture: Picture, straight: StraightField, followed: FollowedStack, seen: LayerDetection
) -> FoundLayers:
    """Bring a followed stack into the form that line and field share."""
    from layerscan.measurement.profile import edge_flags

    stack, traces = followed.stack, followed.traces
    edges, stations = followed.depth.shape
    number = np.broadcast_to(np.arange(stations), followed.depth.shape)
    along: FloatArray = straight.station_start + straight.station_step * number.astype(np.float64)
    from layerscan.measurement.field import frame_to_picture
    from layerscan.measurement.statistics import count_missing

    row, column = frame_to_picture(straight.frame, followed.depth, along)
    inside = _inside(picture.intensity, row, column)
    np.where(inside, followed.depth, np.nan)
    row, column = picture.to_page(row, column)
    cosine = followed.cosine
    local = np.where(inside, followed.normal, np.nan)
    mean = np.zeros(edges)
    for b in range(1, edges):
        step = local[b] - local[b - 1]
        good = np.isfinite(step)
        if good.any():
            mean[b] = mean[b - 1] + float(step[good].mean())
        else:
            mean[b] = mean[b - 1] + float(stack.position[b] - stack.position[b - 1]) * float(np.mean(cosine[b]))
    shift = float(np.nanmean(local[0])) if np.isfinite(local[0]).any() else 0.0
    phases = tuple(PHASE_NAMES[k] for k in stack.phase)
    roughness, length = _roughness(followed, straight)
    count = len(followed.profile)
    orientation, u_orientation = _mean_orientation(straight, followed)
    spacing, u_spacing = _spacing(followed, seen)
    return FoundLayers(
        depth=mean,
        covariance=_covariance(followed) * float(np.mean(cosine)) ** 2,
        u_direction=DIRECTION_DOUBT * (1 - float(np.mean(cosine))),
        phase=phases,
        ends=(float(stack.position[0]), float(count - 1 - stack.position[-1])),
        blur=float(math.hypot(stack.fit.shared[0], stack.fit.shared[1] / math.sqrt(12))),
        orientation_rad=orientation,
        u_orientation_rad=u_orientation,
        spacing=spacing,
        u_spacing=u_spacing,
        spacing_method="power spectrum of the straightened mean profile",
        profile_depth=np.arange(count, dtype=np.float64) - float(stack.position[0]),
        profile=followed.profile,
        station_depth=local - shift,
        u_station=traces.u,
        row=row,
        column=column,
        station_step=straight.station_step,
        roughness=roughness,
        correlation_length=length,
        lateral_noise=np.array([float(np.median(u)) for u in traces.u]),
        replication=traces.model.replication if edges > 2 else None,
        terminations=followed.terminations,
        missing=count_missing(np.diff(mean), phases[1:-1]),
        flags=_field_flags(straight) + edge_flags(stack),
    )


def _inside(image: NDArray[np.float32], row: FloatArray, column: FloatArray) -> BoolArray:
    rows, columns = image.shape
    with np.errstate(invalid="ignore"):
        out: BoolArray = (row >= -0.5) & (row <= rows - 0.5) & (column >= -0.5) & (column <= columns - 0.5)
    return out


def _covariance(followed: FollowedStack) -> FloatArray:
    """Covariance of the mean depths: that of the joint fit, and by how much the matched columns disagree with it."""
    raw, valid = followed.traces.raw, followed.traces.valid
    off = np.where(valid, raw, 0.0).sum(axis=1) / np.maximum(valid.sum(axis=1), 1)
    out: FloatArray = followed.stack.fit.covariance + np.diag(off**2)
    return out


def _field_flags(straight: StraightField) -> tuple[str, ...]:
    turn = abs(straight.frame.curvature) * straight.station_step * straight.intensity.shape[1]
    return ("orientation_varies",) if turn > math.radians(10) else ()


def _roughness(followed: FollowedStack, straight: StraightField) -> tuple[FloatArray, FloatArray]:
    """Rms and correlation length of each boundary [px], from its covariance extrapolated to zero lag.

    What bends with fewer than ``WAVES`` waves across the field is waviness; the rest of the alignment is roughness that
    neighbouring boundaries share, and is added to each boundary's own.
    """
    from scipy.fft import dct, idct

    from layerscan.measurement.traces import fit_covariance, pooled_covariance

    valid = followed.valid
    edges, stations = valid.shape
    if stations < 32:
        return np.full(edges, np.nan), np.full(edges, np.nan)
    number = np.broadcast_to(np.arange(stations), valid.shape)
    place = np.broadcast_to(followed.first + followed.stack.position[:, None], valid.shape)
    bend = dct(straight.frame_depth(place, number), axis=1)
    bend[:, : 2 * WAVES + 1] = 0.0
    raw = followed.traces.raw + idct(bend, axis=1)
    longest = int(min(max(stations // 4, 4), 64))
    level = np.where(valid, raw, 0.0).sum(axis=1) / np.maximum(valid.sum(axis=1), 1)
    off = np.where(valid, raw - level[:, None], 0.0)
    own = np.stack([pooled_covariance(off[b : b + 1], valid[b : b + 1], longest)[0] for b in range(edges)], axis=1)
    variance, length, _ = fit_covariance(own)
    enough = valid.sum(axis=1) >= 32
    rms = np.where(enough, np.sqrt(variance), np.nan)
    return rms, np.where(enough & (variance > 0.1 * own[0]), length * straight.station_step, np.nan)


def _mean_orientation(straight: StraightField, followed: FollowedStack) -> tuple[float, float | None]:
    """Mean of the local normals' directions over all traced boundaries [rad], and its u from the boundaries' scatter.

    The mean of a boundary's local slopes is the slope of its chord, read off a cubic through the boundary: a straight
    line fitted to a wavy boundary would weigh its middle more than its ends.
    """
    frame = straight.frame
    edges, stations = followed.depth.shape
    place = straight.station_start + straight.station_step * np.arange(stations)
    curves = []
    for b in range(edges):
        good = np.isfinite(followed.depth[b])
        if good.sum() >= 4:
            s, t = place[good], followed.depth[b, good]
            x = (s - s.mean()) * (1 - frame.curvature * float(t.mean()))
            half = max(float(np.abs(x).max()), 1e-12)
            u = x / half
            line, *_ = np.linalg.lstsq(np.vander(u, 2, increasing=True), t, rcond=None)
            cubic, *_ = np.linalg.lstsq(np.vander(u, 4, increasing=True), t, rcond=None)
            chord = cubic @ (np.vander(u[[-1]], 4, increasing=True) - np.vander(u[[0]], 4, increasing=True))[0]
            curves.append((line[1] / half, chord / (x[-1] - x[0]), cubic[2], cubic[3], s))
    if not curves:
        return frame.angle_rad % math.pi, None
    straight_slope, chord_slope, second, third = (np.array([c[i] for c in curves]) for i in range(4))
    slopes = chord_slope if _is_curved(second) or _is_curved(third) else straight_slope
    double = sum(
        complex(np.exp(2j * (frame.angle_rad - frame.curvature * c[4] - math.atan(slope))).sum())
        for c, slope in zip(curves, slopes, strict=True)
    )
    u_slope = float(np.std(slopes, ddof=1)) / math.sqrt(len(slopes)) if len(slopes) > 2 else None
    if u_slope is not None:  # a tenth of the rms slope of bending layers may stay in the mean (fits made sections)
        u_slope = math.hypot(u_slope, 0.1 * math.sqrt(2 * max(1 - float(np.mean(followed.cosine)), 0.0)))
    return (0.5 * float(np.angle(double))) % math.pi, u_slope


def _is_curved(coefficient: FloatArray) -> bool:
    """Whether a coefficient beyond the straight line differs from zero over the boundaries, at five standard errors."""
    if len(coefficient) < 3:
        return False
    scatter = 1.4826 * float(np.median(np.abs(coefficient - np.median(coefficient)))) / math.sqrt(len(coefficient))
    return abs(float(np.median(coefficient))) > 5 * scatter


def _spacing(followed: FollowedStack, seen: LayerDetection) -> tuple[float | None, float | None]:
    """Dominant spacing [px] from the strongest line of the profile's spectrum near the detected one, and its spread."""
    if seen.period_px is None:
        return None, None
    from layerscan.measurement.spectrum import dominant_spacing

    return dominant_spacing(followed.profile, near=seen.period_px)
