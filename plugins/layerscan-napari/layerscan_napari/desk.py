"""Work on the desk: kept results with names and notes, their documents, and a folder from which all of it reopens.

No Qt here. A saved folder holds ``desk.json`` and the same documents that the command line writes.
"""

from __future__ import annotations

import json
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

from layerscan.document_files import csv_text, dump_json, find_source, relative_to_folder, write_file
from layerscan.errors import InputError
from layerscan.settings import CompareSettings, MeasureSettings, PredictSettings, explain_validation
from pydantic import BaseModel, ConfigDict, Field, ValidationError

from layerscan_napari import __version__, calls

if TYPE_CHECKING:
    from layerscan.records import Average, Measurement, Micrograph, Prediction, Progress

SCHEMA: Literal["layerscan.desk/1"] = "layerscan.desk/1"
TABLE_COLUMNS = (
    "name", "note", "image", "page", "line", "width", "edited",
    "period_nm", "u_period_nm", "sd_period_nm", "n_period",
    "dark_nm", "u_dark_nm", "sd_dark_nm", "n_dark",
    "bright_nm", "u_bright_nm", "sd_bright_nm", "n_bright",
    "peak_nm", "u_peak_nm", "srgb", "conclusion", "folder",
)  # fmt: skip


# --- the file --------------------------------------------------------------------------------------------------------


class _Part(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True)


class LineEntry(_Part):
    """A line drawn on an image."""

    line: tuple[float, float, float, float] = Field(description="R0,C0,R1,C1 in pixels of the full page")
    width: str = Field(description="width of the line, pixels ('20') or a length ('300 nm')")


class ImageEntry(_Part):
    """An image that was open."""

    path: str | None = Field(description="from the folder of desk.json; null for an image that came from no file")
    sha256: str | None
    page: int
    pixel_size: str | None = Field(description="pixel size as the user stated it; null where the file's own was used")
    lines: tuple[LineEntry, ...] = ()
    field: str | None = Field(None, description="folder of the whole-field result")


class KeptEntry(_Part):
    """A kept result; its documents lie in ``folder``."""

    name: str
    note: str
    folder: str
    edited: bool
    predicted: bool
    predict: PredictSettings | None
    compare: CompareSettings | None
    observed: str | None
    conclusion: str


class DeskFile(_Part):
    """``desk.json``."""

    schema_: Literal["layerscan.desk/1"] = Field(SCHEMA, alias="schema")
    version: str
    images: tuple[ImageEntry, ...]
    selected: int | None = Field(description="which of the images was at hand")
    measure: MeasureSettings = Field(description="corrections of the section geometry")
    predict: PredictSettings
    compare: CompareSettings
    observed: str | None = Field(description="file of the observed spectrum")
    kept: tuple[KeptEntry, ...]


class SettingsFile(_Part):
    """Saved settings without any work: materials, light, corrections, comparison."""

    schema_: Literal["layerscan.desk-settings/1"] = Field("layerscan.desk-settings/1", alias="schema")
    version: str
    measure: MeasureSettings
    predict: PredictSettings
    compare: CompareSettings


def json_schema() -> dict[str, Any]:
    """JSON Schema of ``desk.json``."""
    return {"$schema": "https://json-schema.org/draft/2020-12/schema", "$id": SCHEMA, **DeskFile.model_json_schema()}


# --- kept results ----------------------------------------------------------------------------------------------------


@dataclass(frozen=True, kw_only=True, eq=False)
class Kept:
    """A result in the table: with its edits, and without them where there are any."""

    name: str
    note: str = ""
    measurement: Measurement
    unedited: Measurement | None = None
    predict: PredictSettings | None = None
    prediction: Prediction | None = None
    compare: CompareSettings | None = None
    observed: str | None = None
    conclusion: str = ""

    @property
    def call(self) -> str:
        """The command-line call that repeats the measurement."""
        settings = MeasureSettings(**self.measurement.settings)
        return calls.measure_call(self.measurement.image.path or "IMAGE", settings)


def table_row(kept: Kept, *, folder: str = "") -> dict[str, Any]:
    """One row of the table, by ``TABLE_COLUMNS``; unknown is None."""
    m = kept.measurement
    settings = m.settings
    peak = max(kept.prediction.peaks, key=lambda p: p.reflectance, default=None) if kept.prediction else None
    line = settings.get("line")
    return {
        "name": kept.name,
        "note": kept.note,
        "image": m.image.path,
        "page": m.image.page,
        "line": None if line is None else ",".join(f"{v:g}" for v in line),
        "width": settings.get("width"),
        "edited": bool(settings.get("edits")),
        **_average("period", m.period),
        **_average("dark", m.dark),
        **_average("bright", m.bright),
        "peak_nm": None if peak is None else peak.wavelength_nm,
        "u_peak_nm": None if peak is None else peak.u_wavelength_nm,
        "srgb": kept.prediction.colour.srgb if kept.prediction else None,
        "conclusion": kept.conclusion or None,
        "folder": folder or None,
    }


def _average(what: str, average: Average | None) -> dict[str, Any]:
    mean, u, sd, n = (None,) * 4 if average is None else (average.mean, average.u, average.sd, average.n)
    return {f"{what}_nm": mean, f"u_{what}_nm": u, f"sd_{what}_nm": sd, f"n_{what}": n}


def free_name(wanted: str, taken: Sequence[str]) -> str:
    """The wanted name, with a number where it is taken.

    Examples
    --------
    >>> free_name("shell", ["shell", "shell 2"])
    'shell 3'
    """
    number = 2
    name = wanted
    while name in taken:
        name, number = f"{wanted} {number}", number + 1
    return name


# --- documents -------------------------------------------------------------------------------------------------------


def export_results(
    folder: Path | str,
    kept: Sequence[Kept],
    *,
    micrographs: Mapping[str, Micrograph] | None = None,
    progress: Progress | None = None,
) -> tuple[str, ...]:
    """Write every kept result as the command line would, and ``table.csv`` over all of them.

    Parameters
    ----------
    folder : path or str
        A folder of its own; it is made where missing.
    kept : sequence of Kept
        Results, in the order of the table.
    micrographs : mapping, optional
        Opened images by path, for the figures; results of other images are written without a figure.
    progress : callable, optional
        See ``layerscan.records.Progress``.

    Returns
    -------
    tuple of str
        The folder of each result, below ``folder``.
    """
    folder = Path(folder)
    names = tuple(f"{number:02d}-{_slug(item.name)}" for number, item in enumerate(kept, 1))
    for place, (name, item) in enumerate(zip(names, kept, strict=True)):
        if progress is not None:
            progress(f"writing {item.name}", place / len(names))
        micrograph = (micrographs or {}).get(item.measurement.image.path or "")
        _write_result(folder / name, item, micrograph, progress)
    rows = [table_row(item, folder=name) for name, item in zip(names, kept, strict=True)]
    write_file(folder / "table.csv", csv_text(TABLE_COLUMNS, ([row[c] for c in TABLE_COLUMNS] for row in rows)))
    return names


def _write_result(folder: Path, kept: Kept, micrograph: Micrograph | None, progress: Progress | None) -> None:
    """Documents of one result. Prediction and comparison are made from the written files, as the commands do."""
    import layerscan
    from layerscan import documents

    write_measurement(folder / "measurement", kept.measurement, micrograph)
    if kept.unedited is not None:
        write_measurement(folder / "measurement-before-edits", kept.unedited, micrograph)
    lines = [kept.call + " --out measurement"]
    if kept.predict is not None and kept.measurement.layers:
        light = layerscan.predict(folder / "measurement", settings=kept.predict, progress=progress)
        from layerscan.figures.prediction import draw_prediction

        documents.write_prediction(folder / "prediction", light, figure=draw_prediction(light))
        lines.append(calls.predict_call("measurement", kept.predict, out="prediction"))
        compare = kept.compare
        if compare is not None and (kept.observed is not None or compare.lab is not None):
            observed = None if compare.lab is not None else layerscan.open_spectrum(str(kept.observed))
            answer = layerscan.compare(folder / "prediction", observed, settings=compare, progress=progress)
            from layerscan.figures.comparison import draw_comparison

            figure = draw_comparison(answer, light, observed)
            documents.write_comparison(folder / "comparison", answer, figure=figure)
            beside = None if observed is None else kept.observed
            lines.append(calls.compare_call("prediction", beside, compare, out="comparison"))
    write_file(folder / "calls.txt", "\n".join(lines) + "\n")


def write_measurement(folder: Path, measurement: Measurement, micrograph: Micrograph | None) -> None:
    """The measurement's documents, with its figure where the image is at hand."""
    from layerscan import documents

    figure = None
    if micrograph is not None:
        from layerscan.figures.measurement import draw_measurement

        figure = draw_measurement(measurement, micrograph)
    documents.write_measurement(folder, measurement, figure=figure)


def _slug(name: str) -> str:
    return re.sub(r"[^a-z0-9]+", "-", name.lower()).strip("-")[:40] or "result"


# --- saving and reopening --------------------------------------------------------------------------------------------


@dataclass(frozen=True, kw_only=True, eq=False)
class FieldResult:
    """The whole-field result of an image: with its edits, and without them where there are any."""

    measurement: Measurement
    unedited: Measurement | None = None


@dataclass(frozen=True, kw_only=True, eq=False)
class OpenImage:
    """An open image with the lines drawn on it and its whole-field result."""

    path: str | None
    sha256: str | None = None
    page: int = 0
    pixel_size: str | None = None
    lines: tuple[LineEntry, ...] = ()
    field: FieldResult | None = None


@dataclass(frozen=True, kw_only=True, eq=False)
class Desk:
    """All of the work: images with their lines and fields, settings, observed spectrum, kept results."""

    images: tuple[OpenImage, ...] = ()
    selected: int | None = None
    measure: MeasureSettings = field(default_factory=MeasureSettings)
    predict: PredictSettings = field(default_factory=PredictSettings)
    compare: CompareSettings = field(default_factory=CompareSettings)
    observed: str | None = None
    kept: tuple[Kept, ...] = ()
    notes: tuple[str, ...] = ()


def save_desk(
    folder: Path | str,
    desk: Desk,
    *,
    micrographs: Mapping[str, Micrograph] | None = None,
    progress: Progress | None = None,
) -> Path:
    """Save the work in a folder: ``desk.json`` and every document; returns the file.

    Raises
    ------
    InputError
        The folder cannot be written.
    """
    folder = Path(folder)
    names = export_results(folder, desk.kept, micrographs=micrographs, progress=progress)
    entries = []
    for number, image in enumerate(desk.images, 1):
        place = None
        if image.field is not None:
            place = f"field-{number:02d}"
            write_measurement(folder / place / "measurement", image.field.measurement, None)
            if image.field.unedited is not None:
                write_measurement(folder / place / "measurement-before-edits", image.field.unedited, None)
        entries.append(
            ImageEntry(
                path=relative_to_folder(image.path, folder),
                sha256=image.sha256,
                page=image.page,
                pixel_size=image.pixel_size,
                lines=image.lines,
                field=place,
            )
        )
    kept = tuple(
        KeptEntry(
            name=item.name,
            note=item.note,
            folder=name,
            edited=item.unedited is not None,
            predicted=(folder / name / "prediction" / "prediction.json").is_file() and item.predict is not None,
            predict=item.predict,
            compare=item.compare,
            observed=relative_to_folder(item.observed, folder),
            conclusion=item.conclusion,
        )
        for name, item in zip(names, desk.kept, strict=True)
    )
    document = DeskFile(
        schema=SCHEMA,
        version=__version__,
        images=tuple(entries),
        selected=desk.selected,
        measure=desk.measure,
        predict=desk.predict,
        compare=desk.compare,
        observed=relative_to_folder(desk.observed, folder),
        kept=kept,
    )
    return write_file(folder / "desk.json", dump_json(document.model_dump(mode="json", by_alias=True)))


def load_desk(path: Path | str) -> Desk:
    """Read saved work back: ``desk.json`` or its folder. What has moved or changed meanwhile is said in ``notes``.

    Raises
    ------
    InputError
        The file is missing, is no saved work, or one of its documents cannot be read.
    """
    from layerscan import documents

    path = Path(path)
    path = path / "desk.json" if path.is_dir() else path
    saved = _read(path, DeskFile)
    notes: list[str] = []
    images = []
    for entry in saved.images:
        source = find_source(entry.path, path)
        if source is None:
            notes.append(f"Image '{entry.path or 'without a file'}' was not found; its lines are left out.")
        elif entry.sha256 is not None and _changed(source, entry.sha256):
            notes.append(f"Image '{source}' has changed since the work was saved.")
        images.append(
            OpenImage(
                path=None if source is None else str(source.resolve()),
                sha256=entry.sha256,
                page=entry.page,
                pixel_size=entry.pixel_size,
                lines=entry.lines,
                field=None if entry.field is None else _read_field(path.parent / entry.field, path),
            )
        )
    kept = []
    for item in saved.kept:
        folder = path.parent / item.folder
        result = _read_field(folder, path)
        observed = find_source(item.observed, path)
        kept.append(
            Kept(
                name=item.name,
                note=item.note,
                measurement=result.measurement,
                unedited=result.unedited,
                predict=item.predict,
                prediction=documents.read_prediction(folder / "prediction") if item.predicted else None,
                compare=item.compare,
                observed=None if observed is None else str(observed.resolve()),
                conclusion=item.conclusion,
            )
        )
    observed = find_source(saved.observed, path)
    if saved.observed is not None and observed is None:
        notes.append(f"Observed spectrum '{saved.observed}' was not found.")
    return Desk(
        images=tuple(images),
        selected=saved.selected,
        measure=saved.measure,
        predict=saved.predict,
        compare=saved.compare,
        observed=None if observed is None else str(observed.resolve()),
        kept=tuple(kept),
        notes=tuple(notes),
    )


def save_settings(
    path: Path | str, *, measure: MeasureSettings, predict: PredictSettings, compare: CompareSettings
) -> Path:
    """Save settings alone."""
    document = SettingsFile(
        schema="layerscan.desk-settings/1", version=__version__, measure=measure, predict=predict, compare=compare
    )
    return write_file(Path(path), dump_json(document.model_dump(mode="json", by_alias=True)))


def load_settings(path: Path | str) -> SettingsFile:
    """Read saved settings.

    Raises
    ------
    InputError
        The file is missing or holds no settings.
    """
    return _read(Path(path), SettingsFile)


def _read(path: Path, model: type[Any]) -> Any:
    try:
        return model.model_validate(json.loads(path.read_text(encoding="utf-8")))
    except OSError as error:
        raise InputError(f"'{path}' cannot be read ({error.strerror}). Choose a file that the panel saved.") from error
    except ValidationError as error:
        raise InputError(
            f"'{path}' is not what the panel saves here: {explain_validation(error)[:400]}. Choose another file."
        ) from None
    except (ValueError, RecursionError) as error:
        raise InputError(f"'{path}' is no JSON ({error}). Choose a file that the panel saved.") from error


def _read_field(folder: Path, origin: Path) -> FieldResult:
    from layerscan import documents

    before = folder / "measurement-before-edits"
    found = _with_path(documents.read_measurement(folder / "measurement"), folder / "measurement")
    plain = _with_path(documents.read_measurement(before), before) if before.is_dir() else None
    return FieldResult(measurement=found, unedited=plain)


def _with_path(measurement: Measurement, folder: Path) -> Measurement:
    """The measurement with the path of its image as it is from here."""
    source = find_source(measurement.image.path, folder / "measurement.json")
    if source is None:
        return measurement
    return replace(measurement, image=replace(measurement.image, path=str(source.resolve())))


def _changed(path: Path, sha256: str) -> bool:
    from layerscan.document_files import file_sha256

    return file_sha256(path) != sha256
