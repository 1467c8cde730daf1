"""Figures of a study: specimens, predicted against observed, drift, spectra; for the page, and as files on request."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

from layerscan.figures import style
from layerscan.figures.export import write_drawing
from layerscan.figures.prediction import finish_axes
from layerscan.figures.style import Drawing, number_text

if TYPE_CHECKING:
    from collections.abc import Sequence

    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from layerscan.report.summary import DriftRow, Estimate, LightPair, LineFit, PeakPair, StudySummary

GROUP_LOOKS = (
    (style.BLUE, "o"),
    (style.ORANGE, "s"),
    (style.GREEN, "^"),
    (style.PURPLE, "D"),
    (style.VERMILION, "v"),
    (style.SKY, "P"),
    (style.GREY, "X"),
)


def study_drawings(summary: StudySummary) -> dict[str, Drawing]:
    """Every figure of a study by a short name that can be that of a file."""
    drawings = {"specimens": specimens_drawing(summary), "one_to_one": one_to_one_drawing(summary.peaks, summary.line)}
    drawings |= {f"drift_{n}": drift_drawing(row) for n, row in enumerate(summary.drift, 1)}
    drawings |= {f"spectrum_{n}": light_drawing(pair) for n, pair in enumerate(summary.light, 1)}
    return {name: drawing for name, drawing in drawings.items() if drawing is not None}


def write_study_figures(
    folder: str | Path, summary: StudySummary, *, suffixes: Sequence[str] = (".pdf", ".tif")
) -> tuple[Path, ...]:
    """Write the figures of a study as files for a manuscript: PDF, and TIFF at 600 dots per inch.

    Parameters
    ----------
    folder : path
        Made where it does not exist.
    summary : StudySummary
    suffixes : sequence of str
        Among .svg, .pdf, .tif.

    Returns
    -------
    tuple of Path
        The files, in the order of the page.

    Raises
    ------
    SettingsError
        Another suffix.
    """
    folder = Path(folder)
    folder.mkdir(parents=True, exist_ok=True)
    return tuple(
        write_drawing(drawing, folder / f"{name}{suffix}")
        for name, drawing in study_drawings(summary).items()
        for suffix in suffixes
    )


def specimens_drawing(summary: StudySummary) -> Drawing | None:
    """Means of the specimens with U (k = 2), by group, and the group's mean with its interval as a band."""
    quantity = summary.quantity
    rows = [
        (row.group, row.specimen, estimate)
        for row in summary.specimens
        for estimate in row.estimates
        if estimate.quantity == quantity
    ]
    if not rows:
        return None
    groups = list(dict.fromkeys(group for group, _, _ in rows))
    means = {group: next((e for e in estimates if e.quantity == quantity), None) for group, estimates in summary.groups}
    few = len(rows) <= 40

    def compose(figure: Figure) -> None:
        axes = figure.add_subplot()
        x = 0.0
        centres = []
        for place, group in enumerate(groups):
            colour, marker = GROUP_LOOKS[place % len(GROUP_LOOKS)]
            members = [(name, estimate) for g, name, estimate in rows if g == group]
            start = x
            for name, estimate in members:
                axes.errorbar(
                    x, estimate.mean, yerr=2 * estimate.u if estimate.u else None, fmt=marker, color=colour, capsize=2
                )
                if few:
                    axes.annotate(
                        _short(name), (x, 0), (0, 4), xycoords=("data", "axes fraction"), textcoords="offset points",
                        rotation=90, fontsize=7, ha="center", va="bottom", color=style.GREY,
                    )  # fmt: skip
                x += 1
            _group_band(axes, means.get(group), start - 0.4, x - 0.6, colour)
            centres.append(((start + x - 1) / 2, group))
            x += 1
        axes.set_xticks([centre for centre, _ in centres], [_short(group, 20) for _, group in centres])
        axes.set_ylabel(f"{axis_words(quantity)}")
        axes.margins(y=0.25 if few else 0.08)

    words = "; ".join(
        f"{group}: {number_text(mean.mean, mean.u)}" for group in groups if (mean := means.get(group)) is not None
    )
    return Drawing(
        width_in=8.5,
        height_in=4.2,
        title=f"{axis_words(quantity)} of each specimen",
        description=f"Specimen means with U (k = 2) by group; bands: group mean with its interval. {words}",
        compose=compose,
    )


def one_to_one_drawing(pairs: Sequence[PeakPair], line: LineFit | None) -> Drawing | None:
    """Observed against predicted peaks with both u, the 1:1 line and the fitted line."""
    if not pairs:
        return None
    groups = list(dict.fromkeys(pair.group for pair in pairs))

    def compose(figure: Figure) -> None:
        axes = figure.add_subplot()
        for place, group in enumerate(groups):
            colour, marker = GROUP_LOOKS[place % len(GROUP_LOOKS)]
            own = [pair for pair in pairs if pair.group == group]
            axes.errorbar(
                [pair.predicted_nm for pair in own],
                [pair.observed_nm for pair in own],
                xerr=[2 * (pair.u_predicted_nm or 0.0) for pair in own],
                yerr=[2 * (pair.u_observed_nm or 0.0) for pair in own],
                fmt=marker,
                color=colour,
                elinewidth=0.9,
                label=_short(group, 24),
            )
        low = min(min(pair.predicted_nm, pair.observed_nm) for pair in pairs)
        high = max(max(pair.predicted_nm, pair.observed_nm) for pair in pairs)
        margin = max(0.12 * (high - low), 8.0)
        ends = (low - margin, high + margin)
        axes.plot(ends, ends, color=style.BLACK, linewidth=1.0, label="1:1")
        if line is not None and line.slope is not None and line.intercept_nm is not None:
            fitted = [line.intercept_nm + line.slope * x for x in ends]
            axes.plot(ends, fitted, color=style.GREY, linestyle="--", linewidth=1.2, label="fitted, errors in both")
        axes.set(
            xlim=ends, ylim=ends, xlabel="predicted peak (nm), ± U (k = 2)", ylabel="observed peak (nm), ± U (k = 2)"
        )
        axes.set_aspect("equal")
        axes.legend(loc="upper left", bbox_to_anchor=(1.02, 1.0))

    return Drawing(
        width_in=6.6,
        height_in=4.8,
        title="Observed against predicted peak",
        description=f"{len(pairs)} specimens with their uncertainties. " + (line.sentence if line else ""),
        compose=compose,
    )


def drift_drawing(row: DriftRow) -> Drawing | None:
    """Means against position with U (k = 2), and the fitted line with the interval of its slope as a band."""
    if len(row.points) < 2:
        return None

    def compose(figure: Figure) -> None:
        import numpy as np

        axes = figure.add_subplot()
        x = np.array([point[0] for point in row.points])
        y = np.array([point[1] for point in row.points])
        axes.errorbar(x, y, yerr=[2 * (point[2] or 0.0) for point in row.points], fmt="o", color=style.BLUE, capsize=2)
        if row.slope is not None:
            ends = np.array([x.min(), x.max()])
            axes.plot(ends, y.mean() + row.slope * (ends - x.mean()), color=style.BLACK, linestyle="--", label="fitted")
            if row.low is not None and row.high is not None:
                reach = ends - x.mean()
                axes.fill_between(ends, y.mean() + row.low * reach, y.mean() + row.high * reach, color=style.GREY,
                                  alpha=0.2, linewidth=0, label="95 % interval of the slope")  # fmt: skip
            axes.legend(loc="upper left", bbox_to_anchor=(0.0, -0.17), ncols=2)
        axes.set(xlabel=f"{row.along} ({row.position_unit})", ylabel=axis_words(row.quantity))

    return Drawing(
        width_in=7.0,
        height_in=3.8,
        title=f"{axis_words(row.quantity)} along {row.along}, {row.group}",
        description=row.sentence or "Means against position.",
        compose=compose,
    )


def light_drawing(pair: LightPair) -> Drawing:
    """Observed over predicted spectrum of one specimen, with the 95 % band and the orders."""

    def compose(figure: Figure) -> None:
        import numpy as np

        axes = figure.add_subplot()
        wavelength = np.array(pair.wavelength_nm)
        if pair.lower is not None and pair.upper is not None:
            axes.fill_between(wavelength, pair.lower, pair.upper, color=style.PREDICTED, alpha=0.2, linewidth=0,
                              label="predicted: 95 % of the draws")  # fmt: skip
        axes.plot(wavelength, pair.predicted, color=style.PREDICTED, linewidth=1.6, label="predicted")
        if pair.observed is not None and pair.observed_wavelength_nm is not None:
            seen = np.array(pair.observed_wavelength_nm)
            value = np.array(pair.observed)
            inside = (seen >= wavelength[0]) & (seen <= wavelength[-1])
            axes.plot(
                seen[inside], value[inside], color=style.OBSERVED, linestyle="--", linewidth=1.3, label="observed"
            )
            if pair.observed_u is not None:
                u = np.array(pair.observed_u)
                axes.fill_between(seen[inside], (value - 2 * u)[inside], (value + 2 * u)[inside], color=style.OBSERVED,
                                  alpha=0.2, linewidth=0)  # fmt: skip
        finish_axes(axes, f"{pair.kind} (0 to 1)" if pair.kind != "absorbance" else "absorbance")
        _label_orders(axes, pair, wavelength)

    return Drawing(
        width_in=7.2,
        height_in=4.0,
        title=f"Observed and predicted {pair.kind}: {pair.specimen}",
        description=pair.sentence or f"Predicted {pair.kind} of {pair.specimen}.",
        compose=compose,
    )


def _label_orders(axes: Axes, pair: LightPair, wavelength: object) -> None:
    import numpy as np

    x = np.asarray(wavelength)
    for order, place in pair.orders:
        if x[0] <= place <= x[-1]:
            height = float(np.interp(place, x, pair.predicted))
            words = f"{place:.0f} nm" if order is None else f"order {order}\n{place:.0f} nm"
            down = pair.kind == "transmittance"
            axes.annotate(words, (place, height), (0, -6 if down else 6), textcoords="offset points", ha="center",
                          va="top" if down else "bottom", fontsize=8)  # fmt: skip


def axis_words(quantity: str) -> str:
    """A quantity's field name as the label of an axis.

    Examples
    --------
    >>> axis_words("period_nm"), axis_words("cv_percent")
    ('period (nm)', 'CV (%)')
    """
    if quantity == "cv_percent":
        return "CV (%)"
    for suffix, unit in (("_nm", "nm"), ("_percent", "%"), ("_deg", "deg")):
        if quantity.endswith(suffix):
            return f"{quantity.removesuffix(suffix).replace('_', ' ')} ({unit})"
    return quantity.replace("_", " ")


def _group_band(axes: Axes, mean: Estimate | None, left: float, right: float, colour: str) -> None:
    if mean is None:
        return
    axes.plot([left, right], [mean.mean, mean.mean], color=colour, linewidth=1.2)
    if mean.low is not None and mean.high is not None:
        axes.fill_between([left, right], mean.low, mean.high, color=colour, alpha=0.18, linewidth=0)


def _short(text: str, longest: int = 16) -> str:
    clean = style.plain_text(text).replace("\n", " ")
    return clean if len(clean) <= longest else clean[: longest - 1] + "…"
