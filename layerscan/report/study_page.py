"""The report of a study: one self-contained HTML page, summary first, from finished records only."""

from __future__ import annotations

import json
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any
from urllib.parse import quote

from markupsafe import Markup

from layerscan._version import __version__
from layerscan.figures.style import colour_words, render_svg
from layerscan.report import cards, study_figures, words
from layerscan.report.cautions import CAUTIONS
from layerscan.report.methods import describe_methods
from layerscan.report.page import drawing, replace_file

if TYPE_CHECKING:
    from layerscan.figures.style import Drawing
    from layerscan.records import Colour
    from layerscan.report.summary import Estimate, ImageRow, LightPair, StudySummary

EXAMPLES = 12
"""Images shown in full near the top; where there are more, all of them follow at the end of the page."""

MOST_FIGURES = 60
"""Spectra drawn one by one; further specimens stand in the table only, and the page says so."""


def write_study_page(path: str | Path, summary: StudySummary) -> Path:
    """Write the report of a study.

    Parameters
    ----------
    path : path
        The HTML file; written under a temporary name and renamed.
    summary : StudySummary
        What ``study.workup`` found. Every text in it may hold anything a file name or a user can hold.

    Returns
    -------
    Path
        The file.
    """
    return replace_file(Path(path), render_study_page(summary))


def render_study_page(summary: StudySummary) -> str:
    """The page as text; see ``write_study_page``."""
    points = cards.points_per_image(len(summary.images) + EXAMPLES)
    shown = examples(summary.images) if len(summary.images) > EXAMPLES else summary.images
    rest = summary.images if len(summary.images) > EXAMPLES else ()
    light = summary.light[:MOST_FIGURES]
    figures = {
        "specimens": _figure(study_figures.specimens_drawing(summary), "specimens"),
        "one_to_one": _figure(study_figures.one_to_one_drawing(summary.peaks, summary.line), "peaks"),
    }
    return (
        words.page_environment()
        .get_template("study.html.j2")
        .render(
            version=__version__,
            title=summary.title,
            summary=summary,
            cautions=summary.cautions or CAUTIONS,
            card_style=Markup(cards.STYLE),
            patterns=cards.PATTERNS,
            figures=figures,
            examples=[_card(image, f"x{n}", points) for n, image in enumerate(shown)],
            gallery=[
                (group, [_card(image, f"a{n}", points) for n, image in enumerate(rest) if image.group == group])
                for group in dict.fromkeys(image.group for image in rest)
            ],
            light=[_light(pair, f"l{n}") for n, pair in enumerate(light)],
            light_left_out=len(summary.light) - len(light),
            drift=[(row, _figure(study_figures.drift_drawing(row), f"d{n}")) for n, row in enumerate(summary.drift)],
            main=[
                (group, estimate)
                for group, estimates in summary.groups
                for estimate in estimates
                if estimate.quantity == summary.quantity
            ],
            specimens=[_specimen(row, summary.quantity) for row in summary.specimens],
            methods=describe_methods(summary.methods),
            settings=[(kind, _settings_text(values)) for kind, values in summary.run.settings.items()],
            axis_words=study_figures.axis_words,
            interval=interval,
        )
    )


def examples(images: Sequence[ImageRow]) -> list[ImageRow]:
    """A dozen images that stand for all: measured ones first of every group in turn, then those that failed."""
    by_group: dict[str, list[ImageRow]] = {}
    for image in sorted(images, key=lambda image: (image.state != "done", image.thumbnail is None)):
        by_group.setdefault(image.group, []).append(image)
    chosen: list[ImageRow] = []
    turn = 0
    while len(chosen) < EXAMPLES and any(len(members) > turn for members in by_group.values()):
        chosen += [members[turn] for members in by_group.values() if len(members) > turn]
        turn += 1
    return chosen[:EXAMPLES]


def interval(estimate: Estimate) -> str:
    """The interval of an estimate, or why there is none."""
    if estimate.low is None or estimate.high is None:
        return words.NOT_KNOWN
    return f"{words.number(estimate.low)} to {words.number(estimate.high)} ({100 * estimate.level:.0f} %)"


def safe_link(path: str | None) -> str | None:
    """A file beside the page as a link; None where it is absolute, leaves the folder or names a scheme."""
    if not path:
        return None
    clean = path.replace("\\", "/")
    parts = clean.split("/")
    if clean.startswith("/") or ".." in parts or ":" in parts[0] or any(ord(c) < 32 for c in clean):
        return None
    return quote(clean)


def _figure(figure: Drawing | None, key: str) -> Markup | None:
    return None if figure is None else drawing(render_svg(figure), key)


def _card(image: ImageRow, key: str, points: int) -> dict[str, Any]:
    label = f"Thickness against layer number of {image.path}"
    return {
        "key": key,
        "image": image,
        "picture": cards.overlay_picture(image, most_points=points),
        "thickness": cards.thickness_picture(image.layers, label=label),
        "link": safe_link(image.figure),
    }


def _light(pair: LightPair, key: str) -> dict[str, Any]:
    return {
        "pair": pair,
        "figure": _figure(study_figures.light_drawing(pair), key),
        "predicted": _swatch(pair.predicted_colour),
        "observed": _swatch(pair.observed_colour),
    }


def _swatch(colour: Colour | None) -> tuple[str, str, str] | None:
    """A swatch's code, its colour in words with numbers, and in words alone."""
    if colour is None:
        return None
    return words.check_swatch(colour), words.swatch_words(colour), colour_words(colour)


def _specimen(row: Any, quantity: str) -> dict[str, Any]:
    main = next((estimate for estimate in row.estimates if estimate.quantity == quantity), None)
    return {
        "row": row,
        "main": main,
        "predicted": _swatch(row.predicted_colour),
        "observed": _swatch(row.observed_colour),
    }


def _settings_text(values: Any) -> str:
    return json.dumps(values, indent=1, sort_keys=True, ensure_ascii=False, default=str)
