"""The spectrum and colour that a structure predicts, with the other assignment of materials beside it."""

from __future__ import annotations

from typing import TYPE_CHECKING

from layerscan.figures import style
from layerscan.figures.style import Drawing, number_text

if TYPE_CHECKING:
    from collections.abc import Sequence

    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from layerscan.records import Peak, Prediction, Spectrum


def draw_prediction(prediction: Prediction) -> str:
    """Draw a predicted reflectance with its 95 % band, its peaks and orders, its swatch and the swapped assignment.

    Returns
    -------
    str
        SVG text, equal bytes for equal input.
    """
    return style.render_svg(prediction_drawing(prediction))


def prediction_drawing(prediction: Prediction) -> Drawing:
    """The same figure before its format is chosen."""

    def compose(figure: Figure) -> None:
        grid = figure.add_gridspec(1, 2, width_ratios=(4.2, 1.0))
        axes, side = figure.add_subplot(grid[0]), figure.add_subplot(grid[1])
        swatches = [("predicted", prediction.colour, "-")]
        other = prediction.swapped
        if other is not None:
            swatches.append(("dark and bright\nswapped", other.colour, "--"))
            axes.plot(
                other.reflectance.wavelength_nm,
                other.reflectance.value,
                color=style.SWAPPED,
                linestyle="--",
                linewidth=1.2,
                label=f"swapped: dark {short_name(other.dark)}, bright {short_name(other.bright)}",
            )
        draw_spectrum(axes, prediction.reflectance, label="predicted", colour=style.PREDICTED, dash="-")
        finish_axes(axes, "reflectance (0 to 1)")
        label_peaks(axes, prediction.peaks)
        if not prediction.peaks:
            axes.text(0.98, 0.97, "no band of the stack can be read at half height in this range",
                      transform=axes.transAxes, ha="right", va="top", fontsize=8)  # fmt: skip
        style.draw_swatches(side, swatches)
        figure.suptitle(_headline(prediction), x=0.01, ha="left", fontsize=11)

    return Drawing(
        width_in=9.0,
        height_in=4.6,
        title="Predicted reflectance and colour",
        description=describe_prediction(prediction),
        compose=compose,
    )


def describe_prediction(prediction: Prediction) -> str:
    """What the figure shows, in words, for readers who cannot see it."""
    parts = [f"Reflectance predicted for {prediction.structure.layers} layers"]
    parts += [peak_text(peak) for peak in prediction.peaks] or ["no peak that can be read at half height"]
    parts.append(f"colour {style.colour_words(prediction.colour)}, {one_line(style.colour_text(prediction.colour))}")
    if prediction.reflectance.lower is not None:
        parts.append("a band holds 95 % of the draws")
    if prediction.swapped is not None:
        peaks = ", ".join(f"{peak.wavelength_nm:.0f} nm" for peak in prediction.swapped.peaks) or "none"
        parts.append(
            f"dashed: dark and bright swapped, peaks {peaks}, colour {style.colour_words(prediction.swapped.colour)}"
        )
    return style.as_sentences(parts)


def peak_text(peak: Peak) -> str:
    """One peak as a phrase: order, wavelength with u, height."""
    order = "" if peak.order is None else f" of order {peak.order}"
    where = number_text(peak.wavelength_nm, peak.u_wavelength_nm)
    return f"peak{order} at {where} nm, reflectance {peak.reflectance:.2f}, width {peak.fwhm_nm:.0f} nm"


def draw_spectrum(axes: Axes, spectrum: Spectrum, *, label: str, colour: str, dash: str) -> None:
    """A spectrum as a line, with its 95 % band (or value ± 2 u) where one is known."""
    wavelength, value = spectrum.wavelength_nm, spectrum.value
    band = None
    if spectrum.lower is not None and spectrum.upper is not None:
        band = (spectrum.lower, spectrum.upper, f"{label}: 95 % of the draws")
    elif spectrum.u is not None:
        band = (value - 2 * spectrum.u, value + 2 * spectrum.u, f"{label}: ± U (k = 2)")
    if band is not None:
        axes.fill_between(wavelength, band[0], band[1], color=colour, alpha=0.2, linewidth=0, label=band[2])
    axes.plot(wavelength, value, color=colour, linestyle=dash, linewidth=1.6, label=label)


def label_peaks(axes: Axes, peaks: Sequence[Peak], *, name: str = "order", dips: bool = False) -> None:
    """Write order and wavelength over each peak, and a bar for U (k = 2) of its position."""
    low, high = axes.get_xlim()
    top = axes.get_ylim()[1]
    for peak in peaks:
        if not low <= peak.wavelength_nm <= high:
            continue
        height = 1 - peak.reflectance if dips else peak.reflectance
        words = f"{peak.wavelength_nm:.0f} nm"
        if peak.order is not None:
            words = f"{name} {peak.order}\n{words}"
        middle = (peak.wavelength_nm - low) / (high - low)
        axes.annotate(
            words,
            (peak.wavelength_nm, min(height, top)),
            (0, -10 if dips else 7),
            textcoords="offset points",
            ha="left" if middle < 0.06 else "right" if middle > 0.94 else "center",
            va="top" if dips else "bottom",
            fontsize=8,
        )
        if peak.u_wavelength_nm:
            reach = 2 * peak.u_wavelength_nm
            axes.errorbar(
                peak.wavelength_nm, height, xerr=reach, color=style.BLACK, elinewidth=1.0, capsize=2.5, fmt="none"
            )


def finish_axes(axes: Axes, label: str, *, columns: int = 2) -> None:
    """Axis names, limits with room for labels, and the legend below the axes."""
    axes.set(xlabel="wavelength (nm)", ylabel=label)
    axes.margins(x=0)
    axes.set_ylim(0, max(axes.get_ylim()[1] * 1.16, 0.02))
    axes.legend(loc="upper left", bbox_to_anchor=(0.0, -0.15), ncols=columns, borderaxespad=0.0)


def short_name(text: str, *, longest: int = 24) -> str:
    """A material's name without its folder, cut where it is long."""
    name = one_line(text.replace("\\", "/").rsplit("/", 1)[-1])
    return name if len(name) <= longest else name[: longest - 1] + "…"


def one_line(text: str) -> str:
    """The text with line breaks as commas."""
    return ", ".join(part for part in style.plain_text(text).splitlines() if part)


def _headline(prediction: Prediction) -> str:
    structure = prediction.structure
    layers = f"{structure.layers} layers"
    if structure.layers != structure.layers_seen:
        layers += f" ({structure.layers_seen} seen)"
    inside = list(dict.fromkeys(structure.sequence[1:-1]))
    names = ", ".join(short_name(name) for name in inside[:4]) + (", …" if len(inside) > 4 else "")
    first, last = (short_name(structure.sequence[i]) for i in (0, -1))
    last = "absorber" if last.startswith("absorber") else last
    return f"Predicted: {layers} of {names}; light from {first}, behind them {last}"
