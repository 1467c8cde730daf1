"""Tables of a study as CSV and Parquet, figures as files: each written whole or not at all."""

from __future__ import annotations

import csv
import io
import re
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

from layerscan.document_files import write_file
from layerscan.study.results import (
    IMAGE_COLUMNS,
    LAYER_COLUMNS,
    StudyResults,
    image_rows,
    layer_rows,
    make_table,
)

if TYPE_CHECKING:
    from layerscan.report.summary import StudySummary

_ACTIVE = ("=", "+", "-", "@", "＝", "＋", "－", "＠", "\t", "\r", "\n")
"""A text cell that begins with one of these is run as a formula by spreadsheet programs."""


def write_exports(folder: Path, results: StudyResults) -> tuple[Path, ...]:
    """Write ``results.csv``, ``layers.csv`` and, where pyarrow is installed, both as Parquet.

    Raises
    ------
    InputError
        The folder cannot be written or the disk is full; a file that was there before stays as it was.
    """
    written = []
    tables = (("results", IMAGE_COLUMNS, image_rows(results)), ("layers", LAYER_COLUMNS, layer_rows(results)))
    for name, columns, rows in tables:
        written.append(write_file(folder / f"{name}.csv", table_csv(columns, rows)))
        data = _parquet(columns, rows)
        if data is not None:
            written.append(write_file(folder / f"{name}.parquet", data))
    return tuple(written)


def write_figures(folder: Path, summary: StudySummary, formats: Sequence[str]) -> tuple[Path, ...]:
    """Write the figures of a study's page as files for a manuscript.

    Parameters
    ----------
    folder : Path
        They go into its ``figures`` folder.
    summary : StudySummary
    formats : sequence of {"svg", "pdf", "tif", "tiff"}
        A TIFF has 600 dots per inch.

    Raises
    ------
    SettingsError
        Another format.
    """
    from layerscan.figures.export import write_drawing
    from layerscan.report import study_figures

    drawings = {
        "specimens": study_figures.specimens_drawing(summary),
        "one_to_one": study_figures.one_to_one_drawing(summary.peaks, summary.line),
    }
    for drift in summary.drift:
        drawings[f"drift_{_file_name(drift.group)}"] = study_figures.drift_drawing(drift)
    for number, pair in enumerate(summary.light):
        name = f"light_{_file_name(pair.group)}_{_file_name(pair.specimen)}_{number}"
        drawings[name] = study_figures.light_drawing(pair)
    target = folder / "figures"
    target.mkdir(exist_ok=True)
    return tuple(
        write_drawing(drawing, target / f"{name}.{suffix}")
        for name, drawing in drawings.items()
        if drawing is not None
        for suffix in formats
    )


def _file_name(text: str) -> str:
    return re.sub(r"[^A-Za-z0-9]+", "_", text).strip("_")[:40] or "_"


def table_csv(columns: Sequence[str], rows: Sequence[Mapping[str, Any]]) -> str:
    """CSV text (RFC 4180, UTF-8, LF) of rows; unknown is empty, true and false are words, texts are made harmless."""
    buffer = io.StringIO()
    writer = csv.writer(buffer, lineterminator="\n")
    writer.writerow(columns)
    for row in rows:
        writer.writerow([_cell(row.get(name)) for name in columns])
    return buffer.getvalue()


def _cell(value: Any) -> str:
    if value is None:
        return ""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, float):
        return repr(value) if value - value == 0 else ""
    return neutralise(value) if isinstance(value, str) else str(value)


def neutralise(text: str) -> str:
    """The text with an apostrophe before it where a spreadsheet program would run it as a formula.

    Notes
    -----
    Characters from the Open Worldwide Application Security Project's page on CSV injection; leading blanks are looked
    through, because some programs strip them. Numbers are no texts here and keep their sign.

    Examples
    --------
    >>> neutralise('=HYPERLINK("x")'), neutralise("lot 7")
    ('\\'=HYPERLINK("x")', 'lot 7')
    """
    return "'" + text if text.startswith(_ACTIVE) or text.lstrip().startswith(_ACTIVE[:8]) else text


def _parquet(columns: Sequence[str], rows: Sequence[Mapping[str, Any]]) -> bytes | None:
    try:
        import pyarrow  # noqa: F401
    except ImportError:
        return None
    buffer = io.BytesIO()
    make_table(rows, columns).to_parquet(buffer, index=False, engine="pyarrow")
    return buffer.getvalue()
