"""A parameter series: spectra against the varied quantity, and the row of colours they make."""

from __future__ import annotations

from itertools import pairwise
from typing import TYPE_CHECKING

from layerscan.errors import InputError
from layerscan.figures import style
from layerscan.figures.style import Drawing

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from layerscan.records import Prediction, Series


def draw_series(prediction: Prediction) -> str:
    """Draw the parameter series of a prediction.

    Returns
    -------
    str
        SVG text, equal bytes for equal input. The description names the colour of each step.

    Raises
    ------
    InputError
        The prediction holds no series.
    """
    return style.render_svg(series_drawing(prediction))


def series_drawing(prediction: Prediction) -> Drawing:
    """The same figure before its format is chosen."""
    series = prediction.series
    if series is None or not series.points:
        raise InputError("The prediction holds no series. Predict with vary=NAME=START:STOP:STEP.")

    def compose(figure: Figure) -> None:
        grid = figure.add_gridspec(2, 2, width_ratios=(40.0, 1.0), height_ratios=(5.0, 1.0))
        axes = figure.add_subplot(grid[0, 0])
        _draw_map(figure, axes, figure.add_subplot(grid[0, 1]), series)
        _draw_row(figure.add_subplot(grid[1, 0]), series)
        figure.suptitle(f"Predicted reflectance against {axis_name(series)}", x=0.01, ha="left", fontsize=11)

    return Drawing(
        width_in=9.0,
        height_in=5.4,
        title=f"Predicted reflectance and colour against {axis_name(series)}",
        description=describe_series(series),
        compose=compose,
    )


def describe_series(series: Series) -> str:
    """Each step in words: the value, the main peak and the colour."""
    unit = f" {series.unit}" if series.unit not in ("", "1") else ""
    parts = []
    for point in series.points[:: max(1, -(-len(series.points) // 40))]:
        main = max(point.peaks, key=lambda peak: peak.reflectance, default=None)
        peak = "no peak" if main is None else f"peak {main.wavelength_nm:.0f} nm"
        parts.append(f"{point.value:g}{unit}: {peak}, {style.colour_words(point.colour)} {point.colour.srgb}")
    return f"Series of {series.name}. " + "; ".join(parts) + "."


def axis_name(series: Series) -> str:
    """Name and unit of the varied quantity."""
    return f"{series.name} ({series.unit})" if series.unit not in ("", "1") else series.name


def _edges(series: Series) -> list[float]:
    """Cell borders half-way between the steps."""
    values = [point.value for point in series.points]
    if len(values) == 1:
        return [values[0] - 0.5, values[0] + 0.5]
    between = [(a + b) / 2 for a, b in pairwise(values)]
    return [2 * values[0] - between[0], *between, 2 * values[-1] - between[-1]]


def _draw_map(figure: Figure, axes: Axes, bar: Axes, series: Series) -> None:
    import numpy as np

    wavelength = series.points[0].reflectance.wavelength_nm
    step = float(wavelength[1] - wavelength[0]) if len(wavelength) > 1 else 1.0
    table = np.column_stack([point.reflectance.value for point in series.points])
    rows = np.concatenate([wavelength - step / 2, wavelength[-1:] + step / 2])
    mesh = axes.pcolormesh(
        _edges(series), rows, table, cmap="cividis", vmin=0, vmax=max(float(np.nanmax(table)), 1e-3), rasterized=True
    )
    for place, point in enumerate(series.points):
        for peak in point.peaks:
            label = "peaks (half-height midpoint)" if place == 0 and peak is point.peaks[0] else None
            axes.plot(
                point.value,
                peak.wavelength_nm,
                "o",
                markersize=3.5,
                color="white",
                markeredgecolor="black",
                markeredgewidth=0.7,
                label=label,
            )
    axes.set(ylabel="wavelength (nm)", ylim=(float(wavelength[0]), float(wavelength[-1])))
    axes.tick_params(labelbottom=False)
    if axes.get_legend_handles_labels()[0]:
        axes.legend(loc="lower right", bbox_to_anchor=(1.0, 1.0), borderaxespad=0.2)
    figure.colorbar(mesh, cax=bar, label="reflectance (0 to 1)")


def _draw_row(axes: Axes, series: Series) -> None:
    from matplotlib.patches import Rectangle

    edges = _edges(series)
    for point, left, right in zip(series.points, edges[:-1], edges[1:], strict=True):
        axes.add_patch(Rectangle((left, 0), right - left, 1, facecolor=point.colour.srgb, edgecolor="white", lw=0.4))
    axes.set(xlim=(edges[0], edges[-1]), ylim=(0, 1), xlabel=axis_name(series), yticks=[])
    axes.set_ylabel("colour", rotation=0, ha="right", va="center")
