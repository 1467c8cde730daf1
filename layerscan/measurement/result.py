"""From what was found in pixels to the measurement in nm: means, uncertainties, flags, budget."""

from __future__ import annotations

import math
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING

import numpy as np

from layerscan._version import __version__
from layerscan.geometry import GeometryFactor, correct_lengths
from layerscan.measurement import budget as budgets
from layerscan.measurement.statistics import (
    average_thickness,
    corrected_spread,
    describe_stack,
    longest_run,
    steady_span,
)
from layerscan.records import (
    Average,
    Boundary,
    BudgetRow,
    Detection,
    ImageSource,
    Layer,
    Measurement,
    Profile,
    Spacing,
    StackStatistics,
    Trace,
)

if TYPE_CHECKING:
    from layerscan.records import BoolArray, FloatArray, IntArray, Micrograph, Phase
    from layerscan.settings import MeasureSettings

NOT_RESOLVED = 3.0  # a layer thinner than this many blurs leans on its neighbours
FEW_PERIODS = 5
SHARP = 0.25  # px; an edge less blurred than this says in which pixel it lies, and no more


@dataclass(frozen=True, kw_only=True, eq=False)
class FoundLayers:
    """Layers in pixels of a square grid: what the field and the line have in common.

    ``depth`` (boundaries,) is the mean depth along the normal from the first boundary; ``covariance`` belongs to it.
    ``phase`` (boundaries + 1,) names all segments, those before the first and behind the last boundary included;
    ``ends`` is how much of these two the picture shows. ``station_depth`` (boundaries, stations) is the depth along the
    local normal at each station, NaN where not traced; ``row``, ``column`` say where that is in the page.
    """

    depth: FloatArray
    covariance: FloatArray
    phase: tuple[Phase, ...]
    ends: tuple[float, float]
    blur: float
    orientation_rad: float
    u_orientation_rad: float | None
    spacing: float | None
    u_spacing: float | None
    spacing_method: str
    profile_depth: FloatArray
    profile: FloatArray
    station_depth: FloatArray
    u_station: FloatArray
    row: FloatArray
    column: FloatArray
    station_step: float
    roughness: FloatArray  # (boundaries,) rms [px], NaN where it cannot be said
    correlation_length: FloatArray  # (boundaries,) [px]
    lateral_noise: FloatArray  # (boundaries,) sd of a smoothed trace about the truth
    replication: float | None = None
    terminations: IntArray = field(default_factory=lambda: np.zeros(0, np.int64))
    missing: int = 0
    u_direction: float = 0.0  # relative standard uncertainty of lengths along the local normal of bent layers
    edited: BoolArray | None = None
    flags: tuple[str, ...] = ()

    @property
    def seen(self) -> BoolArray:
        """Where each boundary was traced."""
        return np.isfinite(self.station_depth)


@dataclass(frozen=True, kw_only=True)
class Aligned:
    """Direction and spacing [px of the square grid] of a pattern that is aligned but not layered."""

    orientation_rad: float
    u_orientation_rad: float
    spacing: float
    u_spacing: float
    unit_nm: float


def image_source(micrograph: Micrograph) -> ImageSource:
    """What the measurement keeps of its image."""
    return ImageSource(
        path=None if micrograph.path is None else str(micrograph.path),
        sha256=micrograph.sha256,
        page=micrograph.page,
        shape=micrograph.shape,
        pixel_size=micrograph.pixel_size,
        excluded=micrograph.excluded,
        doubts=micrograph.doubts,
    )


def empty_measurement(
    micrograph: Micrograph, settings: MeasureSettings, detection: Detection, *, flags: tuple[str, ...] = ()
) -> Measurement:
    """The answer where no layered structure was found: the evidence, and no numbers."""
    return Measurement(
        version=__version__,
        settings=settings.model_dump(),
        flags=_unique((*general_flags(micrograph), "no_layers_found", *flags)),
        image=image_source(micrograph),
        structure="none",
        layered=False,
        periodic=False,
        detection=detection,
    )


def pattern_measurement(
    micrograph: Micrograph, settings: MeasureSettings, detection: Detection, aligned: Aligned, *, flags: tuple[str, ...]
) -> Measurement:
    """The answer where lamellae are aligned but too irregular to be told apart: direction and spacing, nothing else."""
    geometry = section_geometry(settings, aligned.orientation_rad)
    scale = aligned.unit_nm * geometry.factor
    relative = micrograph.pixel_size.u_relative if micrograph.pixel_size else None
    value = aligned.spacing * scale
    u = math.hypot(aligned.u_spacing * scale, value * (relative or 0.0), value * geometry.u_relative)
    return Measurement(
        version=__version__,
        settings=settings.model_dump(),
        flags=_unique((*general_flags(micrograph), "irregular", "not_periodic", *flags)),
        image=image_source(micrograph),
        structure="lamellae",
        layered=True,
        periodic=False,
        detection=detection,
        orientation_deg=math.degrees(aligned.orientation_rad) % 180,
        u_orientation_deg=math.degrees(aligned.u_orientation_rad),
        spacing=Spacing(value=value, u=u, method="power spectrum of aligned blocks"),
    )


def general_flags(micrograph: Micrograph) -> tuple[str, ...]:
    """Flags that belong to the image whatever is found in it."""
    flags = []
    size = micrograph.pixel_size
    if size is not None:
        if size.u_relative is None:
            flags.append("calibration_uncertainty_unknown")
        if size.doubts:
            flags.append("pixel_size_doubtful")
        if abs(size.row_nm / size.column_nm - 1) > 1e-6:
            flags.append("anisotropic_pixels")
    if any("banner" in item.reason.lower() for item in micrograph.excluded):
        flags.append("banner_excluded")
    return tuple(flags)


def section_geometry(settings: MeasureSettings, orientation_rad: float) -> GeometryFactor:
    """Factor from image to specimen; the tilt axis is horizontal, so the normal's angle to it is the orientation."""
    angle = math.degrees(orientation_rad) % 180
    return correct_lengths(
        obliquity=settings.obliquity,
        stage_tilt=settings.stage_tilt,
        compression=settings.compression,
        shrinkage=settings.shrinkage,
        normal_to_tilt_axis_deg=min(angle, 180 - angle),
    )


def _blunt(found: FoundLayers) -> FoundLayers:
    """Boundaries known no better than the pixel they lie in: a rectangle one pixel wide (JCGM 100:2008, 4.3.7)."""
    pixel = 1 / 12
    return replace(
        found,
        covariance=found.covariance + pixel * np.eye(len(found.depth)),
        u_station=np.sqrt(found.u_station**2 + pixel),
    )


def build_measurement(
    micrograph: Micrograph,
    settings: MeasureSettings,
    detection: Detection,
    found: FoundLayers,
    *,
    unit_nm: float,
    flags: tuple[str, ...] = (),
) -> Measurement:
    """Turn found layers into the record, all lengths in nm of the specimen.

    Parameters
    ----------
    micrograph, settings, detection
        Where it comes from and what was asked for.
    found : FoundLayers
    unit_nm : float
        Side of the square pixels that ``found`` is given in [nm].
    flags : tuple of str
        Flags gathered on the way.

    Returns
    -------
    Measurement
    """
    assert micrograph.pixel_size is not None
    if found.blur < SHARP:
        found = _blunt(found)
        flags = (*flags, "sharper_than_pixels")
    geometry = section_geometry(settings, found.orientation_rad)
    scale = unit_nm * geometry.factor
    u_pixel = micrograph.pixel_size.u_relative
    known = [u for u in (u_pixel, geometry.u_relative if geometry.parts else None) if u is not None]
    u_scale = math.sqrt(sum(u * u for u in known)) if known else None
    u_mean = math.hypot(u_scale or 0.0, found.u_direction)
    boundaries = _boundaries(found, scale, u_scale)
    layers = _layers(found, scale, u_scale)
    thickness = np.diff(found.depth) * scale
    spread = np.diff(np.diff(found.covariance, axis=0), axis=1) * scale**2
    inner = found.phase[1:-1]
    averages: dict[str, Average | None] = {}
    rows: list[BudgetRow] = []
    period, period_rows = _period(found, scale, u_pixel, geometry)
    rows.extend(period_rows)
    for name in ("dark", "middle", "bright"):
        index = np.flatnonzero(np.array(inner, dtype=object) == name) if inner else np.zeros(0, int)
        average = average_thickness(thickness[index], spread[np.ix_(index, index)], u_scale=u_mean)
        averages[name] = average
        if average is not None:
            rows.extend(_phase_budget(f"{name}_nm", average, found, spread[np.ix_(index, index)], u_pixel, geometry))
    limited_by, advice = budgets.largest_component(period_rows)
    statistics: StackStatistics | None = None
    if len(inner) >= 2:
        statistics = describe_stack(
            depth=found.depth * scale, phase=inner, covariance=found.covariance * scale**2,
            replication=found.replication, terminations=(int(found.terminations.sum()) + 1) // 2, missing=found.missing,
            limited_by=limited_by, next_measurement=advice,
        )  # fmt: skip
    periodic = detection.periodic and period is not None and _is_periodic(period)
    cut = (found.phase[0] != "other", found.phase[-1] != "other")
    gathered = [*general_flags(micrograph), *detection.flags, *found.flags, *flags]
    if geometry.parts:
        gathered.append("geometry_corrected")
    if settings.obliquity is None:
        gathered.append("tilt_uncorrected")
    if any(cut):
        gathered.append("ends_cut_by_frame")
    if not periodic:
        gathered.append("not_periodic")
    if period is None or period.n < FEW_PERIODS:
        gathered.append("few_layers")
    if period is not None and period.sd is not None and period.sd > 0.25 * period.mean:
        gathered.append("irregular")
    for flag in ("near_nyquist", "not_resolved", "boundary_incomplete", "termination"):
        if any(flag in item.flags for item in layers) or any(flag in item.flags for item in boundaries):
            gathered.append(flag)
    spacing = None
    if found.spacing is not None:
        u = found.u_spacing
        spacing_nm = found.spacing * scale
        spacing = Spacing(
            value=spacing_nm,
            u=None if u is None else math.hypot(u * scale, spacing_nm * (u_scale or 0.0)),
            method=found.spacing_method,
        )
    return Measurement(
        version=__version__,
        settings=settings.model_dump(),
        flags=_unique(gathered),
        image=image_source(micrograph),
        structure="lamellae",
        layered=True,
        periodic=periodic,
        detection=detection,
        orientation_deg=math.degrees(found.orientation_rad) % 180,
        u_orientation_deg=None if found.u_orientation_rad is None else math.degrees(found.u_orientation_rad),
        spacing=spacing,
        period=period,
        dark=averages["dark"],
        middle=averages["middle"],
        bright=averages["bright"],
        layers=layers,
        boundaries=boundaries,
        budget=tuple(rows),
        statistics=statistics,
        profile=_profile(found, scale),
        start_cut_by_frame=cut[0],
        end_cut_by_frame=cut[1],
    )


def _is_periodic(period: Average) -> bool:
    return period.sd is None or period.sd < 0.35 * period.mean


def _unique(flags: tuple[str, ...] | list[str]) -> tuple[str, ...]:
    return tuple(dict.fromkeys(flags))


def _boundaries(found: FoundLayers, scale: float, u_scale: float | None) -> tuple[Boundary, ...]:
    out = []
    edges, stations = found.station_depth.shape
    seen = found.seen
    traced = seen.sum(axis=1).tolist()
    shown = np.isfinite(found.row).sum(axis=1).tolist()
    depth = (found.depth * scale).tolist()
    u_fit = (np.sqrt(np.maximum(np.diag(found.covariance), 0.0)) * scale).tolist()
    local, u_local = found.station_depth * scale, found.u_station * scale
    rough, length = (found.roughness * scale).tolist(), (found.correlation_length * scale).tolist()
    ended = found.terminations.tolist() if len(found.terminations) else [0] * edges
    edited = [False] * edges if found.edited is None else found.edited.tolist()
    every = np.arange(stations)
    for b in range(edges):
        where = every if traced[b] == stations else np.flatnonzero(seen[b])
        pick = slice(None) if traced[b] == stations else where
        flags = []
        if traced[b] < 0.8 * max(shown[b], 1):
            flags.append("boundary_incomplete")
        if ended[b]:
            flags.append("termination")
        if edited[b]:
            flags.append("edited_by_hand")
        out.append(
            Boundary(
                index=b,
                depth_nm=depth[b],
                u_nm=u_fit[b] if u_scale is None else math.hypot(u_fit[b], depth[b] * u_scale),
                roughness_nm=rough[b] if math.isfinite(rough[b]) else None,
                correlation_length_nm=length[b] if math.isfinite(length[b]) else None,
                trace=Trace(
                    station=where,
                    row_px=found.row[b, pick],
                    column_px=found.column[b, pick],
                    depth_nm=local[b, pick],
                    u_depth_nm=u_local[b, pick],
                ),
                terminations=int(ended[b]),
                edited=edited[b],
                flags=tuple(flags),
            )
        )
    return tuple(out)


def _layers(found: FoundLayers, scale: float, u_scale: float | None) -> tuple[Layer, ...]:
    out: list[Layer] = []
    width = np.diff(found.depth)
    variance = np.diag(found.covariance)
    variance = variance[1:] + variance[:-1] - 2 * np.diag(found.covariance, 1)
    u_fit = (np.sqrt(np.maximum(variance, 0.0)) * scale).tolist()
    lateral = _lateral_spread(found, scale)
    if found.phase[0] != "other":
        out.append(Layer(index=0, phase=found.phase[0], thickness_nm=found.ends[0] * scale, complete=False))
    for i, thickness in enumerate(width.tolist()):
        flags = []
        if thickness < NOT_RESOLVED * found.blur:
            flags.append("not_resolved")
        if thickness < 4:
            flags.append("near_nyquist")
        out.append(
            Layer(
                index=len(out),
                phase=found.phase[i + 1],
                thickness_nm=thickness * scale,
                u_nm=u_fit[i] if u_scale is None else math.hypot(u_fit[i], thickness * scale * u_scale),
                sd_lateral_nm=lateral[i],
                complete=True,
                flags=tuple(flags),
            )
        )
    if found.phase[-1] != "other":
        out.append(Layer(index=len(out), phase=found.phase[-1], thickness_nm=found.ends[1] * scale, complete=False))
    return tuple(out)


def _lateral_spread(found: FoundLayers, scale: float) -> list[float | None]:
    """Spread of each layer's thickness along it: that of the smoothed traces and what their smoothing has left out."""
    if found.station_depth.shape[1] < 8:
        return [None] * (len(found.depth) - 1)
    local = np.diff(found.station_depth, axis=0)
    good = np.isfinite(local)
    number = good.sum(axis=1)
    filled = np.where(good, local, 0.0)
    mean = filled.sum(axis=1) / np.maximum(number, 1)
    variance = (np.where(good, local - mean[:, None], 0.0) ** 2).sum(axis=1) / np.maximum(number, 1)
    hidden = found.lateral_noise[1:] ** 2 + found.lateral_noise[:-1] ** 2
    spread = np.sqrt(variance + hidden) * scale
    return [float(s) if n >= 8 else None for s, n in zip(spread, number, strict=True)]


def _period(
    found: FoundLayers, scale: float, u_pixel: float | None, geometry: GeometryFactor
) -> tuple[Average | None, tuple[BudgetRow, ...]]:
    """Realised mean period over the longest run of whole periods, with its budget."""
    seen = found.seen
    least = max(1, int(0.1 * seen.shape[1]))
    run = longest_run(found.phase[1:-1], seen, least_common=least)
    if run is None:
        return None, ()
    first, last, n = run
    both = seen[first] & seen[last]
    span = float(np.mean((found.station_depth[last] - found.station_depth[first])[both]))
    mean = span / n * scale
    c = found.covariance
    u_fit = math.sqrt(max(float(c[first, first] + c[last, last] - 2 * c[first, last]), 0.0)) / n * scale
    run_slice = slice(first, last + 1)
    steady = steady_span(found.depth[run_slice], c[run_slice, run_slice], found.phase[first + 1 : last + 1])
    if steady is not None and found.edited is None:
        mean += steady[0] / n * scale
        u_fit = steady[1] / n * scale
    single = [(i, i + 2) for i in range(first, last - 1, 2)]
    periods = np.array([found.depth[b] - found.depth[a] for a, b in single]) * scale
    transform = np.zeros((len(single), len(found.depth)))
    for row, (a, b) in enumerate(single):
        transform[row, a], transform[row, b] = -1, 1
    sd = corrected_spread(periods, transform @ c @ transform.T * scale**2)
    parts = budgets.common_parts(mean, u_pixel_size=u_pixel, geometry=geometry)
    parts.append(budgets.Part(component=budgets.FIT, kind="A", distribution="normal", u_nm=u_fit))
    parts.append(_direction(mean, found))
    rows = budgets.budget_rows("period_nm", mean, parts)
    return Average(mean=mean, u=budgets.combined(parts), sd=sd, n=n), rows


def _direction(value_nm: float, found: FoundLayers) -> budgets.Part:
    return budgets.Part(component=budgets.DIRECTION, kind="B", distribution="normal", u_nm=value_nm * found.u_direction)


def _phase_budget(
    quantity: str,
    average: Average,
    found: FoundLayers,
    covariance: FloatArray,
    u_pixel: float | None,
    geometry: GeometryFactor,
) -> tuple[BudgetRow, ...]:
    u_fit = math.sqrt(max(float(covariance.sum()), 0.0)) / average.n
    parts = budgets.common_parts(average.mean, u_pixel_size=u_pixel, geometry=geometry)
    parts.append(budgets.Part(component=budgets.FIT, kind="A", distribution="normal", u_nm=u_fit))
    parts.append(_direction(average.mean, found))
    return budgets.budget_rows(quantity, average.mean, parts)


def _profile(found: FoundLayers, scale: float) -> Profile:
    depth = found.profile_depth * scale
    value = found.profile
    seen = np.isfinite(value)
    flat = np.where(seen, value, np.mean(value[seen]) if seen.any() else 0.0)
    n = len(flat)
    x = np.arange(n) - 0.5 * (n - 1)
    flat = flat - flat.mean() - x * float((x * flat).sum() / max(float((x * x).sum()), 1e-12))
    size = 1
    while size < 2 * n:
        size *= 2
    power = np.abs(np.fft.rfft(flat * np.hanning(n), size)) ** 2
    step = float(depth[1] - depth[0]) if n > 1 else scale
    return Profile(
        depth_nm=depth,
        intensity=value.astype(np.float64),
        frequency_per_nm=np.fft.rfftfreq(size, step).astype(np.float64),
        power=power / max(float(power.max()), 1e-300),
    )
