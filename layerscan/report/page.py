"""One page about a few images: for each, the answer first, then figures, tables, what limits it, and the cautions."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from markupsafe import Markup

from layerscan._version import __version__
from layerscan.figures.measurement import describe_measurement
from layerscan.figures.prediction import describe_prediction
from layerscan.report import words
from layerscan.report.cautions import CAUTIONS
from layerscan.report.svg import inline_svg

if TYPE_CHECKING:
    from layerscan.records import Average, Comparison, Measurement, Prediction


@dataclass(frozen=True, kw_only=True)
class Chain:
    """One image from the micrograph to the conclusion.

    ``predictions`` holds (name, prediction, figure as SVG) and ``comparisons`` (name, comparison, figure as SVG).
    """

    name: str
    intro: str = ""
    measurement: Measurement
    measurement_svg: str
    predictions: tuple[tuple[str, Prediction, str], ...] = ()
    comparisons: tuple[tuple[str, Comparison, str], ...] = ()


def write_page(path: str | Path, chains: Sequence[Chain], *, title: str, intro: str = "") -> Path:
    """Write one self-contained HTML page: nothing is fetched, nothing runs, every value is escaped.

    Parameters
    ----------
    path : path
        The file; written under a temporary name and renamed.
    chains : sequence of Chain
        One for each image, in the order of the page.
    title, intro : str
        Heading and what stands under it; empty lines separate paragraphs.

    Returns
    -------
    Path
        The file.

    Raises
    ------
    InputError
        A figure is no SVG.
    """
    text = render_page(chains, title=title, intro=intro)
    return replace_file(Path(path), text)


def render_page(chains: Sequence[Chain], *, title: str, intro: str = "") -> str:
    """The page as text; see ``write_page``."""
    return (
        words.page_environment()
        .get_template("page.html.j2")
        .render(
            version=__version__,
            title=title,
            intro=[part.strip() for part in intro.split("\n\n") if part.strip()],
            chains=[_chain(chain, f"c{place}") for place, chain in enumerate(chains, 1)],
            cautions=CAUTIONS,
        )
    )


def replace_file(path: Path, text: str) -> Path:
    """Write a text file that is complete or absent."""
    unfinished = path.with_name(f".{path.name}.unfinished")
    try:
        unfinished.write_text(text, encoding="utf-8", errors="replace")
        unfinished.replace(path)
    finally:
        unfinished.unlink(missing_ok=True)
    return path


def drawing(svg: str, prefix: str) -> Markup:
    """A figure as markup that the template may print: checked, its ids its own."""
    return Markup(inline_svg(svg, prefix=prefix))


def _chain(chain: Chain, key: str) -> dict[str, Any]:
    measurement = chain.measurement
    statistics = measurement.statistics
    flags = [*measurement.flags]
    for _, prediction, _ in chain.predictions:
        flags += prediction.flags
    for _, comparison, _ in chain.comparisons:
        flags += comparison.flags
    conclusions = {comparison.agreement.conclusion for _, comparison, _ in chain.comparisons}
    return {
        "name": chain.name,
        "anchor": f"{key}-{words.anchor(chain.name)}",
        "intro": chain.intro,
        "answer": answer_of(measurement),
        "conclusion": conclusions.pop() if len(conclusions) == 1 else "",
        "figure": drawing(chain.measurement_svg, f"{key}m"),
        "figure_words": describe_measurement(measurement),
        "averages": average_rows(measurement),
        "budget": [row for row in measurement.budget if row.quantity.startswith("period")],
        "limited_by": statistics.limited_by if statistics else None,
        "next_measurement": statistics.next_measurement if statistics else None,
        "light": [_light(*entry, f"{key}p{place}") for place, entry in enumerate(chain.predictions)],
        "compared": [_compared(*entry, f"{key}o{place}") for place, entry in enumerate(chain.comparisons)],
        "flags": list(dict.fromkeys(flags)),
    }


def answer_of(measurement: Measurement) -> str:
    """The answer in one or two sentences: period, dark and bright layers with u and n."""
    if not measurement.layered:
        return "No layered structure was found in this image, so nothing else is stated."
    parts = []
    if measurement.period is not None:
        parts.append(f"Lamellar period {words.average_words(measurement.period)}")
    elif measurement.spacing is not None:
        spacing = words.number(measurement.spacing.value, measurement.spacing.u)
        parts.append(f"Layers without a repeating period; dominant spacing {spacing} nm")
    else:
        parts.append("Layers without a repeating period")
    for name, average in (("dark", measurement.dark), ("middle", measurement.middle), ("bright", measurement.bright)):
        if average is not None:
            parts.append(f"{name} layers {words.average_words(average)}")
    unknown = "calibration_uncertainty_unknown" in measurement.flags
    end = ", without the calibration, whose uncertainty is not known." if unknown else ", calibration included."
    return "; ".join(parts) + ". After ±: standard uncertainty of the mean in this image" + end


def average_rows(measurement: Measurement) -> list[dict[str, str]]:
    """Lines of the table of means."""
    named: list[tuple[str, Average | None]] = [
        ("lamellar period", measurement.period),
        ("dark layers", measurement.dark),
        ("middle layers", measurement.middle),
        ("bright layers", measurement.bright),
    ]
    return [
        {
            "name": name,
            "mean": words.number(average.mean, average.u).partition(" ")[0],
            "u": words.small(average.u),
            "expanded": words.small(None if average.u is None else 2 * average.u),
            "sd": words.small(average.sd, 3),
            "n": str(average.n),
        }
        for name, average in named
        if average is not None
    ]


def _light(name: str, prediction: Prediction, svg: str, key: str) -> dict[str, Any]:
    main = words.main_peak(prediction.peaks)
    peak = "no peak in the range"
    if main is not None:
        order = "" if main.order is None else f" (order {main.order})"
        peak = f"main peak {words.number(main.wavelength_nm, main.u_wavelength_nm)} nm{order}"
    return {
        "name": name,
        "peak": peak,
        "code": words.check_swatch(prediction.colour),
        "words": words.swatch_words(prediction.colour),
        "figure": drawing(svg, key),
        "figure_words": describe_prediction(prediction),
        "peaks": prediction.peaks,
    }


def _compared(name: str, comparison: Comparison, svg: str, key: str) -> dict[str, Any]:
    explained = comparison.agreement.conclusion == "explains"
    shown = [reason for reason in comparison.reasons if not explained or (reason.evidence or 0.0) > 0]
    return {
        "name": name,
        "sentence": comparison.sentence,
        "figure": drawing(svg, key),
        "figure_words": "Observed over predicted, with what would have passed as a band.",
        "reasons": words.reason_rows(shown),
    }
