"""What was measured in one image: where, how thick, how even, and what was left out."""

from __future__ import annotations

import math
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

from layerscan.figures import style
from layerscan.figures.style import Drawing, number_text

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from layerscan.records import Average, FloatArray, Layer, Measurement, Micrograph, Phase, Region

LitSide = Literal["start", "end"]
_TRACE_POINTS = 5000
_PHASES: tuple[Phase, ...] = ("dark", "middle", "bright")


def draw_measurement(measurement: Measurement, micrograph: Micrograph, *, lit_side: LitSide = "start") -> str:
    """Draw a measurement over its image, with its layers, profile, power spectrum and distributions.

    Parameters
    ----------
    measurement : Measurement
        With or without layers; without, the figure says so and shows what was looked at.
    micrograph : Micrograph
        The image that was measured; its pixels are loaded and shown reduced.
    lit_side : {"start", "end"}
        Which end of the stack faces the light.

    Returns
    -------
    str
        SVG text, equal bytes for equal input.
    """
    return style.render_svg(measurement_drawing(measurement, micrograph, lit_side=lit_side))


def measurement_drawing(
    measurement: Measurement, micrograph: Micrograph, *, lit_side: LitSide = "start", longest_px: int = 760
) -> Drawing:
    """The same figure before its format is chosen; ``longest_px`` bounds the picture inside."""
    intensity = _usable_pixels(micrograph)

    def compose(figure: Figure) -> None:
        if measurement.layers:
            _compose_layers(figure, measurement, intensity, lit_side, longest_px)
        else:
            _compose_no_layers(figure, measurement, intensity, longest_px)

    return Drawing(
        width_in=11.0,
        height_in=8.4 if measurement.layers else 5.2,
        title=f"Layers measured in {_image_name(measurement)}",
        description=describe_measurement(measurement, lit_side=lit_side),
        compose=compose,
    )


def describe_measurement(measurement: Measurement, *, lit_side: LitSide = "start") -> str:
    """What the figure shows, in words, for readers who cannot see it."""
    if not measurement.layered:
        return "The micrograph. No layered structure was found in it, so no layers, period or thickness are shown."
    if not measurement.layers:
        return f"The micrograph. {' '.join(_pattern_words(measurement))}"
    parts = [f"The micrograph with {len(measurement.boundaries)} layer boundaries drawn over it"]
    left_out = [item.reason for item in measurement.image.excluded]
    if left_out:
        parts[0] += f" and left out, hatched: {', '.join(left_out)}"
    for name, average in _averages(measurement):
        parts.append(f"{name}: {average_text(average)}")
    unresolved = sum("not_resolved" in layer.flags for layer in measurement.layers)
    if unresolved:
        parts.append(f"{unresolved} layers not resolved on their own are hatched")
    parts.append(f"the {lit_side} of the stack faces the light")
    return style.as_sentences([*parts, "below: profile, power spectrum and the distributions of thickness"])


def average_text(average: Average) -> str:
    """A mean with u, spread and number, as one phrase."""
    spread = "" if average.sd is None else f", spread {average.sd:.3g} nm"
    u = " (u not known)" if average.u is None else ""
    return f"{number_text(average.mean, average.u)} nm{u}{spread}, n = {average.n}"


def draw_overlay(
    axes: Axes, measurement: Measurement, intensity: FloatArray, *, lit_side: LitSide, longest_px: int
) -> None:
    """The micrograph in nm with scale bar, boundaries, direction and what was left out."""
    pixel = measurement.image.pixel_size
    row_nm, column_nm = (pixel.row_nm, pixel.column_nm) if pixel else (1.0, 1.0)
    picture, block = style.grey_picture(intensity, longest_px=longest_px)
    rows, columns = (min(n * block, size) for n, size in zip(picture.shape, intensity.shape, strict=True))
    extent = (-0.5 * column_nm, (columns - 0.5) * column_nm, (rows - 0.5) * row_nm, -0.5 * row_nm)
    axes.imshow(picture, cmap="gray", vmin=0, vmax=1, extent=extent, interpolation="none")
    narrow = columns * column_nm < 0.6 * rows * row_nm
    axes.locator_params(axis="x", nbins=2 if narrow else 5)
    axes.locator_params(axis="y", nbins=5)
    axes.set(xlabel="column (nm)" if pixel else "column (pixels)", ylabel="row (nm)" if pixel else "row (pixels)")
    _hatch_left_out(axes, measurement, intensity.shape, row_nm, column_nm)
    _draw_traces(axes, measurement, row_nm, column_nm)
    light_x = _draw_direction(axes, measurement, extent, row_nm, column_nm, lit_side)
    if pixel:
        _draw_scale_bar(axes, measurement, extent, row_nm, at_left=light_x > 0.5 * (extent[0] + extent[1]))
    axes.set(xlim=extent[:2], ylim=extent[2:])


def _compose_layers(
    figure: Figure, measurement: Measurement, intensity: FloatArray, lit_side: LitSide, longest_px: int
) -> None:
    present = {layer.phase for layer in measurement.layers}
    phases: list[Phase] = [phase for phase in _PHASES if phase in present] or ["other"]
    columns = 2 + len(phases)
    grid = figure.add_gridspec(2, 1, height_ratios=(1.35, 1.0), hspace=0.03)
    top = grid[0].subgridspec(1, 2, width_ratios=(1.0, 1.05))
    bottom = grid[1].subgridspec(1, columns, width_ratios=(1.7, 1.1, *[1.0] * len(phases)))
    overlay, thickness = figure.add_subplot(top[0]), figure.add_subplot(top[1])
    overlay.set_title("Boundaries; hatched: left out")
    draw_overlay(overlay, measurement, intensity, lit_side=lit_side, longest_px=longest_px)
    _draw_thickness(thickness, measurement, lit_side)
    _draw_profile(figure.add_subplot(bottom[0]), measurement)
    _draw_power(figure.add_subplot(bottom[1]), measurement)
    for place, phase in enumerate(phases):
        _draw_distribution(figure.add_subplot(bottom[2 + place]), measurement, phase)
    figure.suptitle(_headline(measurement), x=0.01, ha="left", fontsize=11)


def _compose_no_layers(figure: Figure, measurement: Measurement, intensity: FloatArray, longest_px: int) -> None:
    grid = figure.add_gridspec(1, 2, width_ratios=(1.1, 1.0))
    overlay = figure.add_subplot(grid[0])
    overlay.set_title("Image; hatched: left out")
    draw_overlay(overlay, measurement, intensity, lit_side="start", longest_px=longest_px)
    side = figure.add_subplot(grid[1])
    side.set_axis_off()
    found = measurement.detection
    lines = ["No layered structure was found.", "No layer, period or thickness is stated.", ""]
    if measurement.layered:
        lines = [*_pattern_words(measurement), ""]
    if found.statistic is not None:
        lines.append(f"Test statistic {found.statistic:.3g}")
    if found.p_value is not None:
        lines.append(f"p = {found.p_value:.2g} that a picture without layers shows as much")
    side.text(0.02, 0.9, "\n".join(lines), va="top", fontsize=10, linespacing=1.6, transform=side.transAxes)
    figure.suptitle(_image_name(measurement), x=0.01, ha="left", fontsize=11)


def _pattern_words(measurement: Measurement) -> list[str]:
    """What is known of lamellae that cannot be told apart."""
    lines = ["Aligned lamellae, too irregular to be told apart.", "No layer, period or thickness is stated."]
    if measurement.spacing is not None and measurement.spacing.u is not None:
        lines.append(f"Main spacing {measurement.spacing.value:.0f} \u00b1 {measurement.spacing.u:.0f} nm.")
    if measurement.orientation_deg is not None and measurement.u_orientation_deg is not None:
        lines.append(
            f"Layer normal {measurement.orientation_deg:.1f} \u00b1 {measurement.u_orientation_deg:.1f} degrees."
        )
    return lines


def _headline(measurement: Measurement) -> str:
    text = _image_name(measurement)
    if measurement.period is not None:
        without = "calibration_uncertainty_unknown" in measurement.flags
        end = " (u without calibration: its uncertainty is not known)" if without else ""
        return f"{text}: lamellar period {average_text(measurement.period)}{end}"
    if measurement.spacing is not None:
        return f"{text}: dominant spacing {number_text(measurement.spacing.value, measurement.spacing.u)} nm; no period"
    return f"{text}: layers, no repeating period"


def _image_name(measurement: Measurement) -> str:
    path = measurement.image.path
    name = style.plain_text(Path(path).name if path else "array").replace("\n", " ")
    return name if len(name) <= 60 else name[:28] + "…" + name[-28:]


def _averages(measurement: Measurement) -> list[tuple[str, Average]]:
    named = (
        ("lamellar period", measurement.period),
        ("dark layers", measurement.dark),
        ("middle layers", measurement.middle),
        ("bright layers", measurement.bright),
    )
    return [(name, average) for name, average in named if average is not None]


def _usable_pixels(micrograph: Micrograph) -> FloatArray:
    import numpy as np

    intensity: Any = np.asarray(micrograph.load())
    if micrograph.mask is not None:
        intensity = np.where(micrograph.mask, intensity, np.float32(np.nan))
    result: FloatArray = intensity
    return result


# --- the parts of the overlay ---------------------------------------------------------------------------------------


def _hatch_left_out(
    axes: Axes, measurement: Measurement, shape: tuple[int, ...], row_nm: float, column_nm: float
) -> None:
    from matplotlib.patches import Rectangle

    regions = [item.region for item in measurement.image.excluded]
    line = measurement.settings.get("line")
    if measurement.detection.region is not None and measurement.layered and line is None:
        regions += _outside(measurement.detection.region, shape[0], shape[1], measurement)
    for row0, column0, row1, column1 in regions:
        axes.add_patch(
            Rectangle(
                ((column0 - 0.5) * column_nm, (row0 - 0.5) * row_nm),
                (column1 - column0) * column_nm,
                (row1 - row0) * row_nm,
                facecolor=(1, 1, 1, 0.45),
                edgecolor=style.BLACK,
                hatch=style.HATCH_LEFT_OUT,
                linewidth=0.0,
            )
        )


def _outside(region: Region, rows: int, columns: int, measurement: Measurement) -> list[Region]:
    """The frame around the analysed region, without what a banner at the bottom already covers."""
    row0, column0, row1, column1 = region
    bottom = _usable_bottom(measurement, rows, columns)
    above, below = (0, 0, row0, columns), (row1, 0, bottom, columns)
    left, right = (row0, 0, row1, column0), (row0, column1, row1, columns)
    return [part for part in (above, below, left, right) if part[2] > part[0] and part[3] > part[1]]


def _usable_bottom(measurement: Measurement, rows: int, columns: int) -> int:
    starts = [
        item.region[0]
        for item in measurement.image.excluded
        if item.region[2] >= rows and item.region[3] - item.region[1] >= 0.9 * columns
    ]
    return min([rows, *starts])


def _draw_traces(axes: Axes, measurement: Measurement, row_nm: float, column_nm: float) -> None:
    traced = [boundary for boundary in measurement.boundaries if boundary.trace is not None]
    if not traced:
        return
    line = measurement.settings.get("line")
    if line is not None:
        _draw_line(axes, measurement, line, row_nm, column_nm)
        return
    points = max(2, min(120, _TRACE_POINTS // len(traced)))
    width = 1.0 if len(traced) < 60 else 0.6
    for boundary in traced:
        trace = boundary.trace
        assert trace is not None
        step = max(1, math.ceil(len(trace.row_px) / points))
        axes.plot(
            trace.column_px[::step] * column_nm,
            trace.row_px[::step] * row_nm,
            color=style.PURPLE if boundary.edited else style.YELLOW,
            linestyle="--" if "boundary_incomplete" in boundary.flags else "-",
            linewidth=width,
        )


def _draw_line(
    axes: Axes, measurement: Measurement, line: tuple[float, float, float, float], row_nm: float, column_nm: float
) -> None:
    """The line that was measured along, with a tick across it at each boundary."""
    start, end = (line[1] * column_nm, line[0] * row_nm), (line[3] * column_nm, line[2] * row_nm)
    for colour, width in ((style.BLACK, 2.6), (style.YELLOW, 1.2)):
        axes.plot([start[0], end[0]], [start[1], end[1]], color=colour, linewidth=width)
    length = math.hypot(end[0] - start[0], end[1] - start[1])
    half = 0.02 * length
    across = (-(end[1] - start[1]) / length * half, (end[0] - start[0]) / length * half)
    for boundary in measurement.boundaries:
        trace = boundary.trace
        if trace is not None and len(trace.row_px):
            x, y = float(trace.column_px[0]) * column_nm, float(trace.row_px[0]) * row_nm
            ends = ([x - across[0], x + across[0]], [y - across[1], y + across[1]])
            axes.plot(*ends, color=style.PURPLE if boundary.edited else style.YELLOW, linewidth=1.2)


_BOX = {"facecolor": "white", "edgecolor": "none", "alpha": 0.85, "pad": 1.5}


def _draw_direction(
    axes: Axes,
    measurement: Measurement,
    extent: tuple[float, float, float, float],
    row_nm: float,
    column_nm: float,
    lit_side: LitSide,
) -> float:
    """An arrow along the depth in a corner, and a mark where the light comes in, whose column [nm] is returned."""
    if measurement.orientation_deg is None:
        return extent[0]
    angle = math.radians(measurement.orientation_deg)
    right, down = math.cos(angle), math.sin(angle)
    size = 0.13 * min(extent[1] - extent[0], extent[2] - extent[3])
    light_x = light_y = math.inf
    ends = [b.trace for b in measurement.boundaries if b.trace is not None and len(b.trace.row_px)]
    if ends:
        trace = ends[0] if lit_side == "start" else ends[-1]
        step = (0.7 if lit_side == "start" else -0.7) * size
        middle = len(trace.row_px) // 2
        light_x = _within(float(trace.column_px[middle]) * column_nm - step * right, extent[0], extent[1])
        light_y = _within(float(trace.row_px[middle]) * row_nm - step * down, extent[3], extent[2])
        _arrow(axes, (light_x, light_y), (light_x + step * right, light_y + step * down), style.VERMILION)
        axes.text(
            light_x + 0.6 * size * down, light_y - 0.6 * size * right, "light", ha="center", va="center", fontsize=8,
            color=style.DARK_VERMILION, bbox=_BOX,
        )  # fmt: skip
    at_right = light_x < extent[0] + 3 * size and light_y < extent[3] + 3 * size
    x, y = extent[1] - size if at_right else extent[0] + size, extent[3] + size
    tail, head = (x - 0.5 * size * right, y - 0.5 * size * down), (x + 0.5 * size * right, y + 0.5 * size * down)
    _arrow(axes, tail, head, style.BLACK)
    side: Literal["left", "right"] = "right" if at_right else "left"
    edge = x + 0.8 * size if at_right else x - 0.8 * size
    axes.text(edge, y + 0.85 * size, "depth", ha=side, va="center", fontsize=8, bbox=_BOX)
    return light_x if ends else extent[0]


def _arrow(axes: Axes, tail: tuple[float, float], head: tuple[float, float], colour: str) -> None:
    for shade, width in (("white", 4.5), (colour, 2.0)):
        axes.annotate("", head, tail, arrowprops={"arrowstyle": "-|>", "color": shade, "lw": width})


def _within(value: float, low: float, high: float) -> float:
    margin = 0.02 * (high - low)
    return min(max(value, low + margin), high - margin)


def _draw_scale_bar(
    axes: Axes, measurement: Measurement, extent: tuple[float, float, float, float], row_nm: float, *, at_left: bool
) -> None:
    rows, columns = measurement.image.shape
    width, height = extent[1] - extent[0], extent[2] - extent[3]
    bar = style.nice_length(width)
    bottom = min(extent[2], _usable_bottom(measurement, rows, columns) * row_nm)
    left = extent[0] + 0.04 * width if at_left else extent[1] - 0.04 * width - bar
    low = bottom - 0.04 * height
    for colour, thick in (("white", 7.0), (style.BLACK, 3.0)):
        axes.plot([left, left + bar], [low, low], color=colour, linewidth=thick, solid_capstyle="butt")
    axes.annotate(
        style.length_text(bar), (left if at_left else left + bar, low), (0, 6), textcoords="offset points",
        ha="left" if at_left else "right", va="bottom", fontsize=8, bbox=_BOX,
    )  # fmt: skip


# --- the other panels -----------------------------------------------------------------------------------------------


def _draw_thickness(axes: Axes, measurement: Measurement, lit_side: LitSide) -> None:
    """Thickness against layer number: u as bars, unresolved layers hatched, cut-off layers hollow."""
    from matplotlib.ticker import MaxNLocator

    axes.set_title("Layer thickness, bars: u (k = 1)")
    axes.set(xlabel="layer number along the depth", ylabel="thickness (nm)")
    layers = measurement.layers
    if not layers:
        axes.text(0.5, 0.5, "no single layers could be told apart", transform=axes.transAxes, ha="center")
        return
    size = 4.5 if len(layers) < 60 else 2.5
    for phase in (*_PHASES, "other"):
        members = [layer for layer in layers if layer.phase == phase]
        if members:
            _draw_phase(axes, members, phase, size, _average_of(measurement, phase))
    for layer in layers:
        if "not_resolved" in layer.flags:
            half = max(layer.u_nm or 0.0, 0.02 * layer.thickness_nm)
            axes.bar(
                layer.index,
                2 * half,
                0.8,
                layer.thickness_nm - half,
                facecolor="none",
                edgecolor=style.GREY,
                hatch=style.HATCH_UNRESOLVED,
                linewidth=0.5,
            )
    _thickness_legend(axes, layers)
    first, last = layers[0].index, layers[-1].index
    axes.set_xlim(first - 1.2, last + 1.2)
    top = max(layer.thickness_nm + (layer.u_nm or 0.0) for layer in layers)
    axes.set_ylim(0, top * 1.12)
    axes.xaxis.set_major_locator(MaxNLocator(integer=True))
    from_start = lit_side == "start"
    tail, head, edge = (0.07, 0.15, 0.01) if from_start else (0.93, 0.85, 0.99)
    axes.annotate(
        "",
        (head, 0.035),
        (tail, 0.035),
        xycoords="axes fraction",
        textcoords="axes fraction",
        arrowprops={"arrowstyle": "-|>", "color": style.VERMILION, "lw": 2.0},
    )
    axes.text(
        edge,
        0.035,
        "light",
        transform=axes.transAxes,
        va="center",
        ha="left" if from_start else "right",
        color=style.DARK_VERMILION,
        fontsize=8.5,
    )


def _draw_phase(axes: Axes, members: list[Layer], phase: Phase, size: float, average: Average | None) -> None:
    colour, marker, dash = style.PHASE_LOOK[phase]
    for complete in (True, False):
        chosen = [layer for layer in members if layer.complete is complete]
        if not chosen:
            continue
        label = phase if average is None else f"{phase}: {average_text(average)}"
        axes.errorbar(
            [layer.index for layer in chosen],
            [layer.thickness_nm for layer in chosen],
            yerr=[layer.u_nm or 0.0 for layer in chosen],
            fmt=marker,
            markersize=size,
            color=colour,
            markeredgecolor=colour,
            elinewidth=1.0,
            capsize=0,
            markerfacecolor=colour if complete else "white",
            label=label if complete else None,
        )
    if average is not None:
        axes.axhline(average.mean, color=colour, linestyle=dash, linewidth=1.0)
        if average.u:
            axes.axhspan(average.mean - 2 * average.u, average.mean + 2 * average.u, color=colour, alpha=0.15, lw=0)


def _thickness_legend(axes: Axes, layers: tuple[Layer, ...]) -> None:
    from matplotlib.lines import Line2D
    from matplotlib.patches import Patch

    handles, labels = axes.get_legend_handles_labels()
    if any(not layer.complete for layer in layers):
        handles.append(Line2D([], [], marker="o", color=style.GREY, markerfacecolor="white", linestyle="none"))
        labels.append("hollow: cut off by the frame")
    if any("not_resolved" in layer.flags for layer in layers):
        handles.append(Patch(facecolor="none", edgecolor=style.GREY, hatch=style.HATCH_UNRESOLVED))
        labels.append("not resolved on its own")
    handles.append(Patch(facecolor=style.GREY, alpha=0.2))
    labels.append("mean ± U (k = 2)")
    axes.legend(
        handles, labels, loc="upper left", bbox_to_anchor=(0.0, -0.13), ncols=2, borderaxespad=0.0, columnspacing=1.0
    )


def _average_of(measurement: Measurement, phase: Phase) -> Average | None:
    return {"dark": measurement.dark, "middle": measurement.middle, "bright": measurement.bright}.get(phase)


def _draw_profile(axes: Axes, measurement: Measurement) -> None:
    import numpy as np

    axes.set_title("Profile across the layers")
    axes.set(xlabel="depth (nm)", ylabel="mean grey")
    profile = measurement.profile
    if profile is None:
        axes.text(0.5, 0.5, "no profile", transform=axes.transAxes, ha="center")
        return
    step = max(1, len(profile.depth_nm) // 2000)
    axes.plot(profile.depth_nm[::step], profile.intensity[::step], color=style.BLACK, linewidth=0.9)
    finite = profile.intensity[np.isfinite(profile.intensity)]
    for layer, start, stop in _layer_spans(measurement):
        if layer.phase == "dark":
            axes.axvspan(start, stop, color=style.BLUE, alpha=0.13, lw=0)
    if finite.size:
        low, high = float(finite.min()), float(finite.max())
        room = 0.06 * (high - low or 1.0)
        axes.set_ylim(low - room, high + room)
    axes.set_xlim(float(profile.depth_nm[0]), float(profile.depth_nm[-1]))
    axes.locator_params(nbins=5)


def _layer_spans(measurement: Measurement) -> list[tuple[Layer, float, float]]:
    """Each complete layer with the depths of its two boundaries."""
    depths = [boundary.depth_nm for boundary in measurement.boundaries]
    inner = [layer for layer in measurement.layers if layer.complete]
    return [(layer, a, b) for layer, a, b in zip(inner, depths, depths[1:], strict=False)]


def _draw_power(axes: Axes, measurement: Measurement) -> None:
    import numpy as np

    axes.set_title("Power spectrum")
    axes.set(xlabel="layers' frequency (1/µm)", ylabel="power (relative)")
    profile = measurement.profile
    if profile is None or len(profile.power) < 3:
        axes.text(0.5, 0.5, "no power spectrum", transform=axes.transAxes, ha="center")
        return
    frequency, power = profile.frequency_per_nm * 1000, np.asarray(profile.power, dtype=np.float64)
    keep = (frequency > 0) & np.isfinite(power)
    spacing = measurement.spacing
    if spacing is not None:
        keep &= frequency <= 5500.0 / spacing.value
    if not keep.any() or power[keep].max() <= 0:
        axes.text(0.5, 0.5, "no power", transform=axes.transAxes, ha="center")
        return
    relative = np.maximum(power[keep] / power[keep].max(), 1e-5)
    axes.semilogy(frequency[keep], relative, color=style.BLACK, linewidth=0.9)
    axes.set_ylim(1e-5, 4)
    axes.yaxis.set_major_formatter(lambda value, _: f"{value:g}")
    axes.set_xlim(0, float(frequency[keep].max()))
    if spacing is not None:
        axes.axvline(1000.0 / spacing.value, color=style.VERMILION, linestyle="--", linewidth=1.1)
        words = f"{number_text(spacing.value, spacing.u)} nm"
        axes.annotate(
            words,
            (1000.0 / spacing.value, 1.6),
            (4, 0),
            textcoords="offset points",
            color=style.DARK_VERMILION,
            fontsize=8,
        )


def _draw_distribution(axes: Axes, measurement: Measurement, phase: Phase) -> None:
    """Histogram of the complete layers of one phase, with their mean ± U; single layers as ticks below."""
    import numpy as np
    from matplotlib.ticker import MaxNLocator

    colour = style.PHASE_LOOK[phase][0]
    values = np.array([layer.thickness_nm for layer in measurement.layers if layer.phase == phase and layer.complete])
    axes.set_title(f"{phase.capitalize()} layers")
    axes.set(xlabel="thickness (nm)", ylabel="layers")
    if values.size == 0:
        axes.text(0.5, 0.5, "no complete layer", transform=axes.transAxes, ha="center")
        return
    span = max(float(np.ptp(values)), 0.02 * float(values.mean()))
    bins = int(np.clip(round(2 * values.size ** (1 / 3)), 1, 30))  # Rice's rule (common practice, no source)
    edges = np.linspace(values.min() - 0.02 * span, values.min() + 1.02 * span, bins + 1)
    bounds = [float(edge) for edge in edges]
    counts, _, _ = axes.hist(values, bins=bounds, color=colour, alpha=0.55, edgecolor=colour, linewidth=0.8)
    top = float(np.max(counts))
    axes.plot(values, np.full(values.size, -0.05 * top), "|", color=style.BLACK, markersize=6, markeredgewidth=0.7)
    axes.set_ylim(-0.11 * top, top * 1.3)
    axes.yaxis.set_major_locator(MaxNLocator(nbins=5, integer=True))
    axes.locator_params(axis="x", nbins=4)
    average = _average_of(measurement, phase)
    if average is None:
        return
    axes.axvline(average.mean, color=style.BLACK, linewidth=1.0)
    if average.u:
        axes.axvspan(average.mean - 2 * average.u, average.mean + 2 * average.u, color=style.GREY, alpha=0.25, lw=0)
    statistics = measurement.statistics
    law = next((s for s in statistics.phases if s.phase == phase), None) if statistics else None
    words = f"n = {average.n}" + ("" if average.sd is None else f", sd {average.sd:.3g} nm")
    if law is not None and law.law is not None:
        words += f"\nlaw: {law.law}"
    axes.text(0.98, 0.99, words, transform=axes.transAxes, ha="right", va="top", fontsize=8, bbox=_BOX)
