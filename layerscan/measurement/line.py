"""A line instead of a field: the same estimators on a band of given width, fast enough to answer while it is dragged.

The band is sampled inside the picture only. Its columns are sheared so that layers which cross it at an angle are not
blurred, and lengths are given along the layer normal wherever the band is wide enough to show its direction.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numba import njit

from layerscan.errors import InputError, MeasurementError
from layerscan.measurement.field import Frame, sample_field
from layerscan.measurement.profile import edge_flags, find_stack
from layerscan.measurement.result import FoundLayers, build_measurement, empty_measurement
from layerscan.measurement.spectrum import dominant_spacing, strongest_spacing
from layerscan.records import Detection

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from layerscan.measurement.measure import Picture
    from layerscan.records import FloatArray, Measurement, Micrograph, Phase, Progress, Region
    from layerscan.settings import MeasureSettings

LEAST_SAMPLES = 12
LEAST_Z = 6.0  # of the correlation between the two halves of the band
LEAST_BOUNDARIES = 3
MOST_SLOPE = 1.2
_TOO_SHORT = (
    "Only {} samples of the line lie in the image; at least {} are needed. Move the line into the image "
    "or make it longer."
)


@dataclass(frozen=True, kw_only=True, eq=False)
class Band:
    """A sampled band: ``intensity`` (depth, column) at steps of one pixel, NaN outside the picture.

    Depth 0 lies at ``start``; depth grows along ``angle_rad`` (from +column towards +row).
    """

    intensity: NDArray[np.float32]
    start: tuple[float, float]
    angle_rad: float


def sample_band(
    image: NDArray[np.float32], *, start: tuple[float, float], stop: tuple[float, float], width_px: float
) -> Band:
    """Sample a band along a line on square pixels.

    Parameters
    ----------
    image : (rows, columns) float32 array
        NaN where a pixel must not be used.
    start, stop : (row, column)
        Ends of the line [px]; either may lie outside the picture.
    width_px : float
        Width of the band; one column per pixel.

    Returns
    -------
    Band
        Samples outside the picture are NaN: no zeros are pulled in.
    """
    length = math.hypot(stop[0] - start[0], stop[1] - start[1])
    angle = math.atan2(stop[0] - start[0], stop[1] - start[1])
    columns = max(round(width_px), 1)
    count = math.floor(length + 1e-9) + 1
    frame = Frame(row=start[0], column=start[1], angle_rad=angle, curvature=0.0)
    shift = np.zeros((1, columns))
    field = sample_field(
        np.ascontiguousarray(image, dtype=np.float32), frame.vector(), 0.0, 1.0, count, -0.5 * (columns - 1), 1.0, 1,
        shift, 0.0, 1.0,
    )  # fmt: skip
    return Band(intensity=field, start=start, angle_rad=angle)


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def sheared_mean(field, slope, group):  # type: ignore[no-untyped-def]
    """Mean profile with column j moved by slope times its distance from the middle; columns joined by ``group`` first.

    Returns (mean, variance of one sample about it, number).
    """
    count, columns = field.shape
    total = np.zeros(count)
    square = np.zeros(count)
    number = np.zeros(count)
    groups = (columns + group - 1) // group
    for g in range(groups):
        j0, j1 = g * group, min((g + 1) * group, columns)
        middle = 0.5 * (j0 + j1 - 1) - 0.5 * (columns - 1)
        shift = slope * middle
        whole = math.floor(shift + 1e-9)
        x = shift - whole
        if x < 1e-6:
            x = 0.0
        x2 = x * x
        w0 = x * (-0.5 + x - 0.5 * x2)
        w1 = 1 + x2 * (-2.5 + 1.5 * x)
        w2 = x * (0.5 + 2 * x - 1.5 * x2)
        w3 = 0.5 * x2 * (x - 1)
        for d in range(count):
            at = d + whole
            if at < 0 or at >= count:
                continue
            for j in range(j0, j1):
                if x == 0.0:
                    value = float(field[at, j])
                elif 1 <= at < count - 2:
                    value = w0 * field[at - 1, j] + w1 * field[at, j] + w2 * field[at + 1, j] + w3 * field[at + 2, j]
                elif at + 1 < count:
                    value = (1 - x) * field[at, j] + x * field[at + 1, j]
                else:
                    continue
                if value == value:
                    total[d] += value
                    square[d] += value * value
                    number[d] += 1
    mean = np.empty(count)
    variance = np.empty(count)
    for d in range(count):
        n = number[d]
        mean[d] = total[d] / n if n > 0 else np.nan
        variance[d] = max(square[d] - total[d] * total[d] / n, 0.0) / (n - 1) if n > 1 else np.nan
    return mean, variance, number


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def _shared(field, slope, margin, stride):  # type: ignore[no-untyped-def]
    """Variance of the sheared mean profile ``margin`` samples away from the ends: what the columns have in common."""
    count, columns = field.shape
    total = 0.0
    s1 = 0.0
    n = 0
    for d in range(margin, count - margin, stride):
        value = 0.0
        number = 0
        for j in range(columns):
            at = d + slope * (j - 0.5 * (columns - 1))
            low = math.floor(at)
            if low < 1 or low + 2 >= count:
                continue
            x = at - low
            x2 = x * x
            v = (
                x * (-0.5 + x - 0.5 * x2) * field[low - 1, j]
                + (1 + x2 * (-2.5 + 1.5 * x)) * field[low, j]
                + x * (0.5 + 2 * x - 1.5 * x2) * field[low + 1, j]
                + 0.5 * x2 * (x - 1) * field[low + 2, j]
            )
            if v == v:
                value += v
                number += 1
        if 2 * number > columns:
            value /= number
            total += value * value
            s1 += value
            n += 1
    if n < 4:
        return -1.0
    return total / n - (s1 / n) ** 2


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def find_slope(field, most):  # type: ignore[no-untyped-def]
    """Slope of the layers across the band (depth per column) in which the columns agree best."""
    count, columns = field.shape
    half = 0.5 * (columns - 1)
    most = min(most, 0.25 * count / max(half, 0.5))
    step = min(2.0 / columns, 0.35)
    steps = int(most / step)
    margin = math.ceil(most * half)
    stride = max(count // 400, 1)
    best, slope = _shared(field, 0.0, margin, stride), 0.0
    for i in range(1, steps + 1):
        for sign in (-1.0, 1.0):
            value = _shared(field, sign * i * step, margin, stride)
            if value > best + 1e-9 * abs(best):
                best, slope = value, sign * i * step
    width = 0.5 * step
    margin = math.ceil((abs(slope) + 2 * step) * half)
    stride = max(count // 1000, 1)
    best = _shared(field, slope, margin, stride)
    for _ in range(16):
        left, right = _shared(field, slope - width, margin, stride), _shared(field, slope + width, margin, stride)
        bend = left - 2 * best + right
        if left > best and left >= right:
            best, slope = left, slope - width
        elif right > best:
            best, slope = right, slope + width
        elif bend < 0 and width < 0.4 * step:
            moved = 0.5 * width * (left - right) / bend
            value = _shared(field, slope + moved, margin, stride)
            if value > best:
                best, slope = value, slope + moved
            width *= 0.25
            if width < 5e-4:
                break
        else:
            width *= 0.5
    return slope, best


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def column_shifts(field, slope, mean):  # type: ignore[no-untyped-def]
    """How far each column lies from the mean profile [samples], by its derivative; NaN where nothing is seen."""
    count, columns = field.shape
    out = np.full(columns, np.nan)
    for j in range(columns):
        shift = slope * (j - 0.5 * (columns - 1))
        whole = math.floor(shift)
        x = shift - whole
        x2 = x * x
        w0 = x * (-0.5 + x - 0.5 * x2)
        w1 = 1 + x2 * (-2.5 + 1.5 * x)
        w2 = x * (0.5 + 2 * x - 1.5 * x2)
        w3 = 0.5 * x2 * (x - 1)
        above = 0.0
        below = 0.0
        for d in range(1, count - 1):
            at = d + whole
            if at < 1 or at + 2 >= count:
                continue
            rise = 0.5 * (mean[d + 1] - mean[d - 1])
            value = w0 * field[at - 1, j] + w1 * field[at, j] + w2 * field[at + 1, j] + w3 * field[at + 2, j] - mean[d]
            if value == value and rise == rise:
                above += value * rise
                below += rise * rise
        if below > 0:
            out[j] = above / below
    return out


def refine_slope(field: NDArray[np.float32], slope: float) -> tuple[float, float]:
    """Slope of the layers across a band by least squares over its columns, and its standard uncertainty.

    ``find_slope`` compares how alike the columns are, which interpolation between samples disturbs; here each column is
    placed against the mean profile, and a straight line through the places corrects the slope.
    """
    columns = field.shape[1]
    across = np.arange(columns) - 0.5 * (columns - 1)
    u = 0.0
    for _ in range(3):
        mean, _, _ = sheared_mean(field, slope, 1)
        shift = column_shifts(field, slope, mean)
        good = np.isfinite(shift)
        if good.sum() < 4:
            return slope, u
        x = across[good] - across[good].mean()
        y = shift[good] - shift[good].mean()
        square = float((x * x).sum())
        change = float((x * y).sum()) / square
        u = math.sqrt(float(((y - change * x) ** 2).sum()) / (len(x) - 2) / square)
        slope -= change
        if abs(change) < 0.1 * u:
            break
    return slope, u


def measure_line_of(
    micrograph: Micrograph, settings: MeasureSettings, *, progress: Progress | None = None
) -> Measurement:
    """Measure along ``settings.line``: the same record as for a field.

    Parameters
    ----------
    micrograph : Micrograph
    settings : MeasureSettings
        ``line`` ROW0, COL0, ROW1, COL1 in pixels of the page and ``width`` (10 px where it is not given).
    progress : callable, optional

    Returns
    -------
    Measurement
        ``layered`` False where nothing along the line stands out of its noise.

    Raises
    ------
    InputError
        The line lies outside the image.
    MeasurementError
        Too little of the line lies in the image.
    """
    from layerscan.measurement.measure import prepare_picture
    from layerscan.settings import parse_width

    assert settings.line is not None
    assert micrograph.pixel_size is not None
    size = micrograph.pixel_size
    unit = min(size.row_nm, size.column_nm)
    value, of = parse_width(settings.width) if settings.width else (10.0, "px")
    width = value if of == "px" else value / unit
    box = _bounding_box(settings, micrograph.shape, width)
    picture = prepare_picture(micrograph, box)
    start, stop = _ends_on_grid(settings.line, picture)
    measured = measure_line(picture, start=start, stop=stop, width_px=width)
    found, z, region = measured
    detection = Detection(
        layered=found is not None,
        periodic=found is not None,
        statistic=z,
        p_value=None if z is None else 0.5 * math.erfc(z / math.sqrt(2)),
        region=picture.region_to_page(region),
    )
    if found is None:
        return empty_measurement(micrograph, settings, detection, flags=picture.flags)
    if settings.edits:
        from layerscan.measurement.editing import apply_edits

        found = apply_edits(found, settings, unit_nm=picture.unit_nm)
    if progress is not None:
        progress("measured", 1.0)
    flags = (*picture.flags, "line_cut_by_frame") if _is_cut(settings, micrograph.shape) else picture.flags
    return build_measurement(micrograph, settings, detection, found, unit_nm=picture.unit_nm, flags=flags)


def _is_cut(settings: MeasureSettings, shape: tuple[int, int]) -> bool:
    """Whether an end of the line lies outside the image or the region."""
    assert settings.line is not None
    r0, c0, r1, c1 = settings.line
    low_row, low_column, high_row, high_column = settings.region or (0, 0, *shape)
    rows_in = low_row - 0.5 <= min(r0, r1) and max(r0, r1) <= high_row - 0.5
    columns_in = low_column - 0.5 <= min(c0, c1) and max(c0, c1) <= high_column - 0.5
    return not (rows_in and columns_in)


def _bounding_box(settings: MeasureSettings, shape: tuple[int, int], width: float) -> Region:
    """Part of the page that the band needs.

    Raises
    ------
    InputError
        None of the line lies in the image (or in the region that was asked for).
    """
    assert settings.line is not None
    r0, c0, r1, c1 = settings.line
    rows, columns = shape
    low_row, low_column, high_row, high_column = settings.region or (0, 0, rows, columns)
    high_row, high_column = min(high_row, rows), min(high_column, columns)
    # coarser axis of anisotropic pixels: the width is counted on the finer one, so this margin is ample
    margin = 0.5 * width + 3
    if not _crosses((r0, c0), (r1, c1), (low_row, low_column, high_row - 1, high_column - 1)):
        raise InputError(
            f"The line {r0:g},{c0:g},{r1:g},{c1:g} lies outside the image of {rows} rows and {columns} columns. "
            "Give R0,C0,R1,C1 with a part of the line inside it."
        )
    return (
        max(math.floor(min(r0, r1) - margin), low_row),
        max(math.floor(min(c0, c1) - margin), low_column),
        min(math.ceil(max(r0, r1) + margin) + 1, high_row),
        min(math.ceil(max(c0, c1) + margin) + 1, high_column),
    )


def _crosses(a: tuple[float, float], b: tuple[float, float], box: tuple[float, float, float, float]) -> bool:
    """Whether a segment has a part of some length inside a box (Liang and Barsky's clipping)."""
    low, high = 0.0, 1.0
    for p, d, lower, upper in ((a[0], b[0] - a[0], box[0], box[2]), (a[1], b[1] - a[1], box[1], box[3])):
        if d == 0:
            if not lower <= p <= upper:
                return False
            continue
        t0, t1 = sorted(((lower - p) / d, (upper - p) / d))
        low, high = max(low, t0), min(high, t1)
    return high > low


def _ends_on_grid(
    line: tuple[float, float, float, float], picture: Picture
) -> tuple[tuple[float, float], tuple[float, float]]:
    """Ends of the line on the picture's grid, in the order in which depth grows along 0 <= angle < 180 degrees."""
    ends = [
        ((r - picture.row0) / picture.row_scale, (c - picture.column0) / picture.column_scale)
        for r, c in ((line[0], line[1]), (line[2], line[3]))
    ]
    rise, run = ends[1][0] - ends[0][0], ends[1][1] - ends[0][1]
    if rise < 0 or (rise == 0 and run < 0):
        ends.reverse()
    return ends[0], ends[1]


def measure_line(
    picture: Picture, *, start: tuple[float, float], stop: tuple[float, float], width_px: float
) -> tuple[FoundLayers | None, float | None, Region]:
    """Find the layers along a line.

    Parameters
    ----------
    picture : Picture
        Pixels on a square grid.
    start, stop : (row, column)
        Ends of the line on that grid; depth grows from ``start``.
    width_px : float
        Width of the band.

    Returns
    -------
    found : FoundLayers or None
        None where nothing stands out of the noise.
    z : float
        How far the layers stand out, in standard deviations.
    region : Region
        Part of the grid that holds the band.

    Raises
    ------
    MeasurementError
        Fewer than twelve samples of the line lie in the image.
    """
    band = sample_band(picture.intensity, start=start, stop=stop, width_px=width_px)
    shown = np.flatnonzero(np.isfinite(band.intensity).any(axis=1))
    if len(shown) < LEAST_SAMPLES:
        raise MeasurementError(_TOO_SHORT.format(len(shown), LEAST_SAMPLES))
    trimmed = int(shown[0])
    field = np.ascontiguousarray(band.intensity[trimmed : int(shown[-1]) + 1])
    columns = field.shape[1]
    if columns > 1:
        field = _level_columns(field)
    group = max(1, columns // 6)
    joined = _join(field, group)
    slope, u_slope = 0.0, None
    sure = columns >= 4 and joined.shape[1] >= 2
    if sure:
        slope, u_slope = refine_slope(field, find_slope(joined, MOST_SLOPE * group)[0] / group)
    mean, single, number = sheared_mean(field, slope, 1)
    enough = np.flatnonzero(number >= 0.5 * columns)
    if len(enough) < LEAST_SAMPLES:
        raise MeasurementError(_TOO_SHORT.format(len(enough), LEAST_SAMPLES))
    low, high = int(enough[0]), int(enough[-1]) + 1
    mean = np.where(number[low:high] >= 0.5 * columns, mean[low:high], np.nan)
    variance = _variance_of_mean(mean, single[low:high], number[low:high], columns)
    region = _band_region(picture, start, stop, width_px)
    period = strongest_spacing(mean)
    z = _stands_out(field[low:high], slope, mean)
    if period is None or z < LEAST_Z:
        return None, z, region
    noise = np.where(np.isfinite(mean), single[low:high], np.nan) if columns >= 6 else None
    stack = find_stack(mean, variance=variance, period=period, noise=noise)
    if stack is None or len(stack.position) < LEAST_BOUNDARIES:
        return None, z, region
    cosine = 1 / math.sqrt(1 + slope * slope)
    position = trimmed + low + stack.position
    row = start[0] + position * math.sin(band.angle_rad)
    column = start[1] + position * math.cos(band.angle_rad)
    row, column = picture.to_page(row, column)
    depth = (stack.position - stack.position[0]) * cosine
    u = np.sqrt(np.maximum(np.diag(stack.fit.covariance), 0.0)) * cosine
    phases: tuple[Phase, ...] = tuple(("dark", "bright", "other")[k] for k in stack.phase)  # type: ignore[misc]
    nothing = np.full(len(depth), np.nan)
    spacing, u_spacing = dominant_spacing(mean, near=period)
    orientation = band.angle_rad - math.atan(slope)
    found = FoundLayers(
        depth=depth, covariance=stack.fit.covariance * cosine**2, phase=phases,
        ends=(float(stack.position[0]) * cosine, float(high - low - 1 - stack.position[-1]) * cosine),
        blur=float(math.hypot(stack.fit.shared[0], stack.fit.shared[1] / math.sqrt(12))) * cosine,
        orientation_rad=orientation % math.pi,
        u_orientation_rad=None if u_slope is None else u_slope * cosine**2,
        u_direction=0.0 if u_slope is None else (abs(slope) + 0.5 * u_slope) * u_slope * cosine**2,
        spacing=spacing * cosine, u_spacing=u_spacing * cosine,
        spacing_method="power spectrum of the line profile",
        profile_depth=(np.arange(high - low, dtype=np.float64) - float(stack.position[0])) * cosine, profile=mean,
        station_depth=depth[:, None], u_station=u[:, None], row=row[:, None], column=column[:, None],
        station_step=1.0, roughness=nothing, correlation_length=nothing, lateral_noise=u,
        flags=(() if sure else ("line_taken_as_normal",)) + edge_flags(stack),
    )  # fmt: skip
    return found, z, region


def _level_columns(field: NDArray[np.float32]) -> NDArray[np.float32]:
    """Columns brought to one mean: what differs across the band must not look like layers where a column ends."""
    seen = np.isfinite(field)
    number = np.maximum(seen.sum(axis=0), 1)
    mean = np.where(seen, field, 0.0).sum(axis=0, dtype=np.float64) / number
    total = float((mean * number).sum() / number.sum())
    return np.ascontiguousarray(field - (mean - total)[None, :], dtype=np.float32)


def _join(field: NDArray[np.float32], group: int) -> NDArray[np.float32]:
    """Mean of every ``group`` columns, NaN where one of them has none."""
    if group == 1:
        return field
    whole = field.shape[1] // group
    joined = field[:, : whole * group].reshape(field.shape[0], whole, group).mean(axis=2)
    return np.ascontiguousarray(joined, dtype=np.float32)


def _variance_of_mean(mean: FloatArray, single: FloatArray, number: FloatArray, columns: int) -> FloatArray:
    """Variance of each sample of the mean; for a line of one column, that of what white noise leaves in it."""
    if columns >= 4:
        typical = float(np.nanmedian(single)) if np.isfinite(single).any() else 0.0
    else:
        second = np.diff(mean[np.isfinite(mean)], n=2)
        typical = (1.4826 * float(np.median(np.abs(second)))) ** 2 / 6 * columns if len(second) else 0.0
    typical = max(typical, 1e-12 * max(float(np.nanvar(mean)), 1e-300))
    return np.where(np.isfinite(mean), typical / np.maximum(number, 1), 0.0)


def _stands_out(field: NDArray[np.float32], slope: float, mean: FloatArray) -> float:
    """How far the layers stand out of the noise, in standard deviations.

    Fisher's z of the correlation between both sides of the band, whose pixels are not shared; for a band too narrow to
    be halved, the strongest line of the spectrum against what white noise would show.
    """
    columns = field.shape[1]
    if columns < 4:
        return _peak_excess(mean)
    half, gap = columns // 2, 1 if columns >= 8 else 0
    left, right = np.ascontiguousarray(field[:, : half - gap]), np.ascontiguousarray(field[:, -(half - gap) :])
    first, _, number = sheared_mean(left, slope, 1)
    second, _, other = sheared_mean(right, slope, 1)
    apart = round(slope * (columns - (half - gap)))  # each half is sheared about its own middle
    first = np.where(number == number.max(), first, np.nan)
    second = np.where(other == other.max(), second, np.nan)
    if apart > 0:
        first, second = first[:-apart], second[apart:]
    elif apart < 0:
        first, second = first[-apart:], second[:apart]
    good = np.isfinite(first) & np.isfinite(second)
    n = int(good.sum())
    if n < LEAST_SAMPLES:
        return 0.0
    a, b = first[good] - first[good].mean(), second[good] - second[good].mean()
    norm = math.sqrt(float(a @ a) * float(b @ b))
    if not norm > 0:
        return 0.0
    r = min(max(float(a @ b) / norm, -0.999999), 0.999999)
    return math.atanh(r) * math.sqrt(max(n / 4 - 3, 1))


def _peak_excess(mean: FloatArray) -> float:
    """Strongest line of the spectrum against the largest that white noise would show, as standard deviations."""
    value = mean[np.isfinite(mean)]
    n = len(value)
    power = np.abs(np.fft.rfft((value - value.mean()) * np.hanning(n)))[2 : n // 3] ** 2
    if len(power) < 4 or not np.median(power) > 0:
        return 0.0
    ratio = float(power.max()) * math.log(2) / float(np.median(power))
    return math.sqrt(2 * max(ratio - math.log(len(power)), 0.0))


def _band_region(picture: Picture, start: tuple[float, float], stop: tuple[float, float], width: float) -> Region:
    """Region of the picture that holds the band."""
    rows, columns = picture.intensity.shape
    half = 0.5 * width
    low_r, high_r = sorted((start[0], stop[0]))
    low_c, high_c = sorted((start[1], stop[1]))
    return (
        min(max(math.floor(low_r - half), 0), rows - 1), min(max(math.floor(low_c - half), 0), columns - 1),
        min(max(math.ceil(high_r + half) + 1, 1), rows), min(max(math.ceil(high_c + half) + 1, 1), columns),
    )  # fmt: skip
