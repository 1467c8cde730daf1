"""Records to JSON and CSV and back: the one owner of every file layout and schema version.

A finished document is complete or absent: every file is written under a temporary name, flushed to disk and renamed,
and the JSON document comes last.
"""

from __future__ import annotations

import json
import math
from collections.abc import Iterable, Sequence
from dataclasses import asdict, replace
from pathlib import Path
from typing import Any, TypeVar

from pydantic import BaseModel, ValidationError

from layerscan import document_models as models
from layerscan import records
from layerscan.document_files import (
    csv_text,
    dump_json,
    plain,
    read_csv,
    read_number,
    relative_to_folder,
    rounded,
    write_file,
)
from layerscan.errors import InputError
from layerscan.settings import explain_validation

R = TypeVar("R")
M = TypeVar("M", bound=BaseModel)

LAYER_COLUMNS = ("index", "phase", "material", "thickness_nm", "u_nm", "sd_lateral_nm", "complete")
TRACE_COLUMNS = ("boundary", "station", "row_px", "column_px", "depth_nm", "u_depth_nm")
SPECTRUM_COLUMNS = ("wavelength_nm", "reflectance", "lower", "upper", "transmittance")


# --- measurement -----------------------------------------------------------------------------------------------------


def image_document(image: records.ImageSource) -> dict[str, Any]:
    """The ``image`` part of a document."""
    size = image.pixel_size
    return {
        "path": image.path,
        "sha256": image.sha256,
        "page": image.page,
        "shape": list(image.shape),
        "pixel_size_nm": None if size is None else [size.row_nm, size.column_nm],
        "u_pixel_size_relative": None if size is None else size.u_relative,
        "pixel_size_source": None if size is None else size.source,
        "doubts": [*image.doubts, *(d for d in (size.doubts if size else ()) if d not in image.doubts)],
        "excluded": [{"region": list(e.region), "reason": e.reason} for e in image.excluded],
    }


def measurement_document(measurement: records.Measurement) -> dict[str, Any]:
    """``layerscan.measurement/1`` of a measurement, ready for ``dump_json``."""
    m = measurement
    profile = m.profile
    document = {
        "schema": "layerscan.measurement/1",
        "version": m.version,
        "settings": m.settings,
        "flags": m.flags,
        "image": image_document(m.image),
        "structure": m.structure,
        "layered": m.layered,
        "periodic": m.periodic,
        "detection": {
            "statistic": m.detection.statistic,
            "p_value": m.detection.p_value,
            "region": m.detection.region,
        },
        "orientation_deg": m.orientation_deg,
        "u_orientation_deg": m.u_orientation_deg,
        "spacing_nm": m.spacing and asdict(m.spacing),
        "period_nm": m.period and asdict(m.period),
        "dark_nm": m.dark and asdict(m.dark),
        "middle_nm": m.middle and asdict(m.middle),
        "bright_nm": m.bright and asdict(m.bright),
        "arc_repeat_nm": m.arc_repeat and asdict(m.arc_repeat),
        "pitch_nm": m.pitch and asdict(m.pitch),
        "layers": [_pick(layer, models.LayerModel) for layer in m.layers],
        "boundaries": [_pick(boundary, models.BoundaryModel) for boundary in m.boundaries],
        "budget": [asdict(row) for row in m.budget],
        "statistics": m.statistics and asdict(m.statistics),
        "ends": {"start_cut_by_frame": m.start_cut_by_frame, "end_cut_by_frame": m.end_cut_by_frame},
        "profile": profile
        and {
            "depth_nm": rounded(profile.depth_nm),
            "intensity": rounded(profile.intensity),
            "frequency_per_nm": rounded(profile.frequency_per_nm),
            "power": rounded(profile.power),
        },
    }
    return _complete(document, models.MeasurementDocument)


def write_measurement(
    folder: Path | str, measurement: records.Measurement, *, figure: str | None = None
) -> dict[str, Any]:
    """Write ``measurement.json``, ``layers.csv``, ``traces.csv`` and ``figure.svg``; returns the document."""
    folder = Path(folder)
    image = replace(measurement.image, path=relative_to_folder(measurement.image.path, folder))
    document = measurement_document(replace(measurement, image=image))
    layer_rows = ([getattr(layer, c) for c in LAYER_COLUMNS] for layer in measurement.layers)
    write_file(folder / "layers.csv", csv_text(LAYER_COLUMNS, layer_rows))
    write_file(folder / "traces.csv", csv_text(TRACE_COLUMNS, _trace_rows(measurement.boundaries)))
    if figure is not None:
        write_file(folder / "figure.svg", figure)
    write_file(folder / "measurement.json", dump_json(document))
    return document


def _trace_rows(boundaries: Sequence[records.Boundary]) -> Iterable[Sequence[Any]]:
    for boundary in boundaries:
        trace = boundary.trace
        if trace is not None:
            columns = (trace.station, trace.row_px, trace.column_px, trace.depth_nm, trace.u_depth_nm)
            for row in zip(*(c.tolist() for c in columns), strict=True):
                yield (boundary.index, *row)


def read_measurement(path: Path | str) -> records.Measurement:
    """Read ``measurement.json`` (or the folder that holds it) with the ``traces.csv`` beside it.

    Raises
    ------
    InputError
        The file is missing, is no measurement document, is of a later schema, or disagrees with its traces.
    """
    path = document_path(path, "measurement.json")
    document = read_document(path, models.MeasurementDocument)
    d = document
    size = None
    if d.image.pixel_size_nm is not None:
        size = records.PixelSize(
            row_nm=d.image.pixel_size_nm[0],
            column_nm=d.image.pixel_size_nm[1],
            u_relative=d.image.u_pixel_size_relative,
            source=d.image.pixel_size_source or "",
            stated=d.settings.get("pixel_size"),
            doubts=tuple(d.image.doubts),
        )
    traces = _read_traces(path.parent / "traces.csv", count=len(d.boundaries))
    boundaries = tuple(
        records.Boundary(**{**b.model_dump(), "flags": tuple(b.flags)}, trace=traces.get(b.index)) for b in d.boundaries
    )
    return records.Measurement(
        version=d.version,
        settings=d.settings,
        flags=tuple(d.flags),
        image=records.ImageSource(
            path=d.image.path,
            sha256=d.image.sha256,
            page=d.image.page,
            shape=(d.image.shape[0], d.image.shape[1]),
            pixel_size=size,
            excluded=tuple(
                records.Exclusion(region=(e.region[0], e.region[1], e.region[2], e.region[3]), reason=e.reason)
                for e in d.image.excluded
            ),
            doubts=tuple(d.image.doubts),
        ),
        structure=d.structure,
        layered=d.layered,
        periodic=d.periodic,
        detection=records.Detection(
            layered=d.layered,
            periodic=d.periodic,
            statistic=d.detection.statistic,
            p_value=d.detection.p_value,
            region=None if d.detection.region is None else tuple(d.detection.region),  # type: ignore[arg-type]
        ),
        orientation_deg=d.orientation_deg,
        u_orientation_deg=d.u_orientation_deg,
        spacing=_record(records.Spacing, d.spacing_nm),
        period=_record(records.Average, d.period_nm),
        dark=_record(records.Average, d.dark_nm),
        middle=_record(records.Average, d.middle_nm),
        bright=_record(records.Average, d.bright_nm),
        arc_repeat=_record(records.Average, d.arc_repeat_nm),
        pitch=_record(records.Average, d.pitch_nm),
        layers=tuple(records.Layer(**{**item.model_dump(), "flags": tuple(item.flags)}) for item in d.layers),
        boundaries=boundaries,
        budget=tuple(records.BudgetRow(**row.model_dump()) for row in d.budget),
        statistics=None if d.statistics is None else _statistics(d.statistics),
        profile=None if d.profile is None else _profile(d.profile),
        start_cut_by_frame=d.ends.start_cut_by_frame,
        end_cut_by_frame=d.ends.end_cut_by_frame,
    )


def _statistics(model: models.StatisticsModel) -> records.StackStatistics:
    phases = tuple(records.PhaseStatistics(**phase.model_dump()) for phase in model.phases)
    return records.StackStatistics(**{**model.model_dump(), "phases": phases})


def _profile(model: models.ProfileModel) -> records.Profile:
    import numpy as np

    return records.Profile(**{name: np.array(values, dtype=float) for name, values in model.model_dump().items()})


def _read_traces(path: Path, *, count: int) -> dict[int, records.Trace]:
    import numpy as np

    if not path.is_file():
        return {}
    rows = read_csv(path, required=TRACE_COLUMNS)
    grouped: dict[int, list[tuple[float, ...]]] = {}
    for line, row in rows:
        values = [read_number(row[c], path=path, line=line, column=c) for c in TRACE_COLUMNS]
        grouped.setdefault(int(values[0] or 0), []).append(tuple(math.nan if v is None else v for v in values[1:]))
    if grouped and max(grouped) >= count:
        raise InputError(
            f"'{path}' traces boundary {max(grouped)}, but the document beside it has {count} boundaries. "
            "Write both again with 'layerscan measure --out'."
        )
    return {
        index: records.Trace(
            station=np.array([r[0] for r in values], dtype=np.int64),
            row_px=np.array([r[1] for r in values]),
            column_px=np.array([r[2] for r in values]),
            depth_nm=np.array([r[3] for r in values]),
            u_depth_nm=np.array([r[4] for r in values]),
        )
        for index, values in grouped.items()
    }


# --- prediction ------------------------------------------------------------------------------------------------------


def prediction_document(prediction: records.Prediction) -> dict[str, Any]:
    """``layerscan.prediction/1`` of a prediction, ready for ``dump_json``."""
    p = prediction
    s = p.structure
    document = {
        "schema": "layerscan.prediction/1",
        "version": p.version,
        "settings": p.settings,
        "flags": p.flags,
        "structure": {
            "layers": s.layers,
            "layers_seen": s.layers_seen,
            "sequence": s.sequence,
            "thickness_nm": s.thickness_nm,
            "source": s.source,
            "source_sha256": s.sha256,
        },
        "conditions": p.conditions,
        "wavelength_nm": p.reflectance.wavelength_nm,
        "reflectance": p.reflectance.value,
        "lower": p.reflectance.lower,
        "upper": p.reflectance.upper,
        "transmittance": p.transmittance.value,
        "lateral": None if p.lateral is None else p.lateral.value,
        "peaks": [asdict(peak) for peak in p.peaks],
        "colour": asdict(p.colour),
        "swapped": p.swapped
        and {
            "dark": p.swapped.dark,
            "bright": p.swapped.bright,
            **_spectral(p.swapped),
        },
        "series": p.series
        and {
            "name": p.series.name,
            "unit": p.series.unit,
            "points": [{"value": point.value, **_spectral(point)} for point in p.series.points],
        },
        "materials": p.materials,
        "notes": p.notes,
    }
    return _complete(document, models.PredictionDocument)


def _spectral(item: records.SwappedAssignment | records.SeriesPoint) -> dict[str, Any]:
    return {
        "reflectance": item.reflectance.value,
        "peaks": [asdict(peak) for peak in item.peaks],
        "colour": asdict(item.colour),
    }


def write_prediction(
    folder: Path | str, prediction: records.Prediction, *, figure: str | None = None
) -> dict[str, Any]:
    """Write ``prediction.json``, ``spectrum.csv``, ``figure.svg`` (and ``series.csv``); returns the document."""
    folder = Path(folder)
    source = relative_to_folder(prediction.structure.source, folder)
    prediction = replace(prediction, structure=replace(prediction.structure, source=source or ""))
    document = prediction_document(prediction)
    light = prediction.reflectance
    empty = [None] * len(light.wavelength_nm)
    columns = [
        light.wavelength_nm.tolist(),
        light.value.tolist(),
        empty if light.lower is None else light.lower.tolist(),
        empty if light.upper is None else light.upper.tolist(),
        prediction.transmittance.value.tolist(),
    ]
    write_file(folder / "spectrum.csv", csv_text(SPECTRUM_COLUMNS, zip(*columns, strict=True)))
    if prediction.series is not None:
        write_file(folder / "series.csv", _series_csv(prediction.series))
    if figure is not None:
        write_file(folder / "figure.svg", figure)
    write_file(folder / "prediction.json", dump_json(document))
    return document


def _series_csv(series: records.Series) -> str:
    columns = (series.name, "peak_nm", "reflectance", "fwhm_nm", "L", "a", "b", "srgb")
    rows = []
    for point in series.points:
        peak = max(point.peaks, key=lambda q: q.reflectance, default=None)
        found = (None, None, None) if peak is None else (peak.wavelength_nm, peak.reflectance, peak.fwhm_nm)
        rows.append((point.value, *found, *point.colour.lab, point.colour.srgb))
    return csv_text(columns, rows)


def read_prediction(path: Path | str) -> records.Prediction:
    """Read ``prediction.json``, or the folder that holds it.

    Raises
    ------
    InputError
        The file is missing, is no prediction document, or is of a later schema.
    """
    path = document_path(path, "prediction.json")
    d = read_document(path, models.PredictionDocument)
    grid = _array(d.wavelength_nm)

    def spectrum(values: list[float | None], kind: Any, **more: Any) -> records.Spectrum:
        return records.Spectrum(
            wavelength_nm=grid,
            value=_array(values),
            kind=kind,
            aoi_deg=d.settings.get("angle"),
            source=str(path),
            **more,
        )

    def spectral(item: models.SwappedModel | models.SeriesPointModel) -> dict[str, Any]:
        return {
            "reflectance": spectrum(item.reflectance, "reflectance"),
            "peaks": _peaks(item.peaks),
            "colour": _colour(item.colour),
        }

    return records.Prediction(
        version=d.version,
        settings=d.settings,
        flags=tuple(d.flags),
        structure=records.PredictedStructure(
            layers=d.structure.layers,
            layers_seen=d.structure.layers_seen,
            sequence=tuple(d.structure.sequence),
            thickness_nm=tuple(d.structure.thickness_nm),
            source=d.structure.source,
            sha256=d.structure.source_sha256,
        ),
        conditions=d.conditions,
        reflectance=spectrum(
            d.reflectance,
            "reflectance",
            lower=None if d.lower is None else _array(d.lower),
            upper=None if d.upper is None else _array(d.upper),
        ),
        transmittance=spectrum(d.transmittance, "transmittance"),
        lateral=None if d.lateral is None else spectrum(d.lateral, "reflectance"),
        peaks=_peaks(d.peaks),
        colour=_colour(d.colour),
        swapped=None
        if d.swapped is None
        else records.SwappedAssignment(dark=d.swapped.dark, bright=d.swapped.bright, **spectral(d.swapped)),
        series=None
        if d.series is None
        else records.Series(
            name=d.series.name,
            unit=d.series.unit,
            points=tuple(records.SeriesPoint(value=p.value, **spectral(p)) for p in d.series.points),
        ),
        materials=tuple(d.materials),
        notes=tuple(d.notes),
    )


# --- comparison and the other documents ------------------------------------------------------------------------------


def comparison_document(comparison: records.Comparison) -> dict[str, Any]:
    """``layerscan.comparison/1`` of a comparison, ready for ``dump_json``."""
    c = comparison
    document = {
        "schema": "layerscan.comparison/1",
        "version": c.version,
        "settings": c.settings,
        "flags": c.flags,
        "peak_difference_nm": c.peak_difference_nm,
        "u_peak_difference_nm": c.u_peak_difference_nm,
        "fwhm_difference_nm": c.fwhm_difference_nm,
        "rms": c.rms,
        "delta_e00": c.delta_e00,
        "agreement": asdict(c.agreement),
        "reasons": [asdict(reason) for reason in c.reasons],
        "sentence": c.sentence,
        "prediction": {"path": c.prediction_source, "sha256": c.prediction_sha256},
        "observed": {"path": c.observed_source or None, "sha256": c.observed_sha256},
        "scale": c.scale,
        "predicted_colour": c.predicted_colour and asdict(c.predicted_colour),
        "observed_colour": c.observed_colour and asdict(c.observed_colour),
        "observed_peaks": [asdict(peak) for peak in c.observed_peaks],
        "notes": c.notes,
    }
    return _complete(document, models.ComparisonDocument)


def write_comparison(
    folder: Path | str, comparison: records.Comparison, *, figure: str | None = None
) -> dict[str, Any]:
    """Write ``comparison.json`` and ``figure.svg``; returns the document."""
    folder = Path(folder)
    comparison = replace(
        comparison,
        prediction_source=relative_to_folder(comparison.prediction_source, folder),
        observed_source=relative_to_folder(comparison.observed_source or None, folder) or "",
    )
    document = comparison_document(comparison)
    if figure is not None:
        write_file(folder / "figure.svg", figure)
    write_file(folder / "comparison.json", dump_json(document))
    return document


def inspection_document(inspection: records.Inspection) -> dict[str, Any]:
    """``layerscan.inspection/1`` of an inspection, ready for ``dump_json``."""
    i = inspection
    document = {
        "schema": "layerscan.inspection/1",
        "version": i.version,
        "flags": i.flags,
        "image": image_document(i.image),
        **{
            name: getattr(i, name)
            for name in (
                "file_format",
                "stored_type",
                "page_count",
                "field_of_view_nm",
                "minimum",
                "maximum",
                "saturated_fraction",
                "metadata",
                "advice",
            )
        },
    }
    return _complete(document, models.InspectionDocument)


def verification_document(verification: records.Verification) -> dict[str, Any]:
    """``layerscan.verification/1`` of a verification, ready for ``dump_json``."""
    v = verification
    changes = [{"field": f, "saved": saved, "now": now} for f, saved, now in v.changes]
    document = {
        "schema": "layerscan.verification/1",
        "version": v.version,
        "document": v.document,
        "equal": v.equal,
        "changes": changes,
        "notes": v.notes,
    }
    return _complete(document, models.VerificationDocument)


def materials_document(media: Sequence[records.Medium], *, version: str) -> dict[str, Any]:
    """``layerscan.materials/1`` of catalogue entries, ready for ``dump_json``."""
    document = {
        "schema": "layerscan.materials/1",
        "version": version,
        "media": [
            {
                **{name: getattr(medium, name) for name in models.MediumModel.model_fields if name != "index_589"},
                "index_589": [_index_589(medium, axis) for axis in range(len(medium.index))],
            }
            for medium in media
        ],
    }
    return _complete(document, models.MaterialsDocument)


def _index_589(medium: records.Medium, axis: int) -> list[float] | None:
    import numpy as np

    if medium.range_nm is not None and not medium.range_nm[0] <= 589.3 <= medium.range_nm[1]:
        return None
    value = complex(medium.index[axis](np.array([589.3]))[0])
    return [value.real, value.imag]


def study_document(answer: Any, *, version: str) -> dict[str, Any]:
    """``layerscan.study/1`` or ``layerscan.study_check/1`` of what a study's run or check answered."""
    what = "study" if hasattr(answer, "answer") else "study_check"
    document = {"schema": f"layerscan.{what}/1", "version": version, **asdict(answer)}
    return _complete(document, models.DOCUMENTS[what])


def schema(what: str) -> dict[str, Any]:
    """JSON Schema (2020-12) of a document, by its name in ``document_models.DOCUMENTS``."""
    if what not in models.DOCUMENTS:
        raise InputError(f"There is no document '{what}'. Known are {', '.join(models.DOCUMENTS)}.")
    return {
        "$schema": "https://json-schema.org/draft/2020-12/schema",
        "$id": f"layerscan.{what}/1",
        **models.DOCUMENTS[what].model_json_schema(),
    }


def write_schemas(folder: Path) -> None:
    """Write every JSON Schema that ships with the package."""
    for what in models.DOCUMENTS:
        write_file(folder / f"{what}.schema.json", dump_json(schema(what)))


# --- reading ---------------------------------------------------------------------------------------------------------


def document_path(path: Path | str, name: str) -> Path:
    """The document ``name`` in a folder, or the path itself where it is a file.

    Raises
    ------
    InputError
        Nothing is there.
    """
    path = Path(path)
    found = path / name if path.is_dir() else path
    if not found.is_file():
        raise InputError(f"'{found}' does not exist. Give a {name} or the folder that 'layerscan ... --out' wrote.")
    return found


def document_kind(path: Path) -> str:
    """Which document a JSON file is, such as "measurement"."""
    name = str(_load_json(path).get("schema", ""))
    kind, _, number = name.removeprefix("layerscan.").partition("/")
    if not name.startswith("layerscan.") or kind not in models.DOCUMENTS:
        raise InputError(f"'{path}' has schema '{name}'. Give a document that layerscan wrote.")
    if number != "1":
        raise InputError(f"'{path}' has schema '{name}'; this version reads layerscan.{kind}/1. Update layerscan.")
    return kind


def _load_json(path: Path) -> dict[str, Any]:
    try:
        document = json.loads(path.read_text(encoding="utf-8"))
    except OSError as error:
        raise InputError(
            f"'{path}' cannot be read ({error.strerror}). Give a document that layerscan wrote."
        ) from error
    except (ValueError, RecursionError) as error:
        raise InputError(f"'{path}' is no JSON ({error}). Give a document that layerscan wrote.") from error
    if not isinstance(document, dict):
        raise InputError(f"'{path}' is JSON, but no document. Give a document that layerscan wrote.")
    return document


def read_document(path: Path, model: type[M]) -> M:
    """Read and check a JSON document against its model."""
    kind = document_kind(path)
    wanted = next(name for name, m in models.DOCUMENTS.items() if m is model)
    if kind != wanted:
        raise InputError(f"'{path}' is a {kind} document. Give a {wanted} document.")
    try:
        return model.model_validate(_load_json(path))
    except ValidationError as error:
        text = explain_validation(error)
        raise InputError(f"'{path}' does not fit layerscan.{kind}/1: {text[:500]}. Write it again.") from None


def _array(values: Sequence[float | None]) -> Any:
    import numpy as np

    return np.array([math.nan if v is None else v for v in values], dtype=float)


def _record(kind: type[R], model: BaseModel | None) -> R | None:
    return None if model is None else kind(**model.model_dump())


def _peaks(items: Sequence[models.PeakModel]) -> tuple[records.Peak, ...]:
    return tuple(records.Peak(**item.model_dump()) for item in items)


def _colour(item: models.ColourModel) -> records.Colour:
    values: dict[str, Any] = {k: tuple(v) if isinstance(v, list) else v for k, v in item.model_dump().items()}
    return records.Colour(**values)


def _pick(record: object, model: type[BaseModel]) -> dict[str, Any]:
    return {name: getattr(record, name) for name in model.model_fields}


def _complete(document: dict[str, Any], model: type[BaseModel]) -> dict[str, Any]:
    """Plain JSON values, checked against the model: a document that does not fit its schema is never written."""
    result: dict[str, Any] = plain(document)
    model.model_validate(result)
    return result
