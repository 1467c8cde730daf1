"""Observed over predicted: what would have passed, both colours, and the conclusion."""

from __future__ import annotations

import textwrap
from typing import TYPE_CHECKING

from layerscan.figures import style
from layerscan.figures.prediction import draw_spectrum, finish_axes, label_peaks, one_line
from layerscan.figures.style import Drawing

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from layerscan.records import Comparison, Prediction, Spectrum

CONCLUSIONS = {
    "explains": "The imaged structure explains the observation",
    "contradicts": "The imaged structure does not explain the observation",
    "cannot_tell": "These data cannot tell whether the imaged structure explains the observation",
}


def draw_comparison(comparison: Comparison, prediction: Prediction, observed: Spectrum | None) -> str:
    """Draw an observed spectrum over the predicted one; where only a colour was observed, the two colours.

    Returns
    -------
    str
        SVG text, equal bytes for equal input.
    """
    return style.render_svg(comparison_drawing(comparison, prediction, observed))


def comparison_drawing(comparison: Comparison, prediction: Prediction, observed: Spectrum | None) -> Drawing:
    """The same figure before its format is chosen. An absorbance is drawn as the transmittance that it means."""
    lines = textwrap.wrap(one_line(comparison.sentence), 118)

    def compose(figure: Figure) -> None:
        grid = figure.add_gridspec(2, 2, width_ratios=(4.2, 1.0), height_ratios=(20.0, 0.55 + 0.95 * len(lines)))
        axes, side = figure.add_subplot(grid[0, 0]), figure.add_subplot(grid[0, 1])
        words = figure.add_subplot(grid[1, :])
        _draw_spectra(axes, comparison, prediction, observed)
        swatches = [("predicted", comparison.predicted_colour or prediction.colour, "-")]
        if comparison.observed_colour is not None:
            swatches.append(("observed", comparison.observed_colour, "--"))
        style.draw_swatches(side, swatches)
        if comparison.delta_e00 is not None:
            side.text(0.0, -0.02, f"CIEDE2000 {comparison.delta_e00:.1f}", fontsize=8, va="top")
        words.set_axis_off()
        words.text(0.0, 1.0, "\n".join(lines), va="top", fontsize=9, linespacing=1.35, transform=words.transAxes)
        figure.suptitle(CONCLUSIONS[comparison.agreement.conclusion], x=0.01, ha="left", fontsize=11, weight="bold")

    return Drawing(
        width_in=9.0,
        height_in=4.9 + 0.17 * len(lines),
        title="Observed and predicted spectrum",
        description=describe_comparison(comparison),
        compose=compose,
    )


def describe_comparison(comparison: Comparison) -> str:
    """What the figure shows, in words, for readers who cannot see it."""
    parts = [comparison.sentence.rstrip(".")]
    span = comparison.agreement.passing_peak_range_nm
    if span is not None:
        parts.append(f"observed peaks from {span[0]:.0f} to {span[1]:.0f} nm would have passed, drawn as a band")
    if comparison.observed_colour is not None:
        parts.append(f"observed colour {style.colour_words(comparison.observed_colour)}")
    return style.as_sentences(parts)


def _draw_spectra(axes: Axes, comparison: Comparison, prediction: Prediction, observed: Spectrum | None) -> None:
    through = observed is not None and observed.kind != "reflectance"
    predicted = prediction.transmittance if through else prediction.reflectance
    span = comparison.agreement.passing_peak_range_nm
    if span is not None:
        axes.axvspan(
            *span,
            facecolor=style.YELLOW,
            alpha=0.35,
            hatch="..",
            edgecolor=style.GREY,
            linewidth=0,
            label="observed peaks here would have passed",
        )
    draw_spectrum(axes, predicted, label="predicted", colour=style.PREDICTED, dash="-")
    limits = (float(predicted.wavelength_nm[0]), float(predicted.wavelength_nm[-1]))
    if observed is not None:
        value = 10.0**-observed.value if observed.kind == "absorbance" else observed.value
        scale = comparison.scale or 1.0
        label = "observed" if scale == 1.0 else f"observed, times {scale:.3g}"
        shown = (observed.wavelength_nm >= limits[0]) & (observed.wavelength_nm <= limits[1])
        axes.plot(
            observed.wavelength_nm[shown],
            value[shown] * scale,
            color=style.OBSERVED,
            linestyle="--",
            linewidth=1.4,
            label=label,
        )
        if observed.u is not None and observed.kind != "absorbance":
            low, high = ((value + k * observed.u)[shown] * scale for k in (-2, 2))
            axes.fill_between(observed.wavelength_nm[shown], low, high, color=style.OBSERVED, alpha=0.2, linewidth=0)
        inside = [p.wavelength_nm for p in comparison.observed_peaks if limits[0] <= p.wavelength_nm <= limits[1]]
        for place, wavelength in enumerate(inside):
            axes.axvline(
                wavelength,
                color=style.OBSERVED,
                linestyle=":",
                linewidth=1.0,
                label=None if place else "observed peak (half-height midpoint)",
            )
    finish_axes(axes, f"{'transmittance' if through else 'reflectance'} (0 to 1)")
    axes.set_xlim(*limits)
    label_peaks(axes, prediction.peaks, dips=through)
