"""What a ledger holds about each image and spectrum of the plan, as records; and as long tables."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, Any

from layerscan.records import Average
from layerscan.study.ledger import Ledger, TaskRecord, UnitRow
from layerscan.study.work import MEASUREMENTS_FOLDER

if TYPE_CHECKING:
    import pandas as pd

AVERAGES = ("period", "dark", "middle", "bright", "arc_repeat", "pitch")

IMAGE_COLUMNS = (
    "image", "path", "group", "specimen", "section", "position", "state", "reason", "layered", "periodic",
    "structure", "orientation_deg", "spacing_nm", "u_spacing_nm",
    *(f"{part}{name}_nm" if part != "n_" else f"n_{name}" for name in AVERAGES for part in ("", "u_", "sd_", "n_")),
    "predicted_peak_nm", "u_predicted_peak_nm", "pixel_size_row_nm", "pixel_size_column_nm",
    "u_pixel_size_relative", "pixel_size_source", "edited_by_hand", "flags", "attempts", "seconds", "sha256",
    "version", "folder",
)  # fmt: skip
LAYER_COLUMNS = (
    "image", "path", "group", "specimen", "section", "position", "counts", "layer", "phase", "thickness_nm", "u_nm",
    "sd_lateral_nm", "complete", "flags",
)  # fmt: skip
SPECTRUM_COLUMNS = (
    "spectrum", "path", "group", "specimen", "spot", "kind", "reference", "state", "reason", "peak_nm", "u_peak_nm",
    "height", "fwhm_nm", "sha256",
)  # fmt: skip


@dataclass(frozen=True, kw_only=True)
class LayerValue:
    """One layer as the ledger keeps it."""

    number: int
    phase: str
    thickness_nm: float
    u_nm: float | None
    sd_lateral_nm: float | None
    complete: bool
    flags: tuple[str, ...]


@dataclass(frozen=True, kw_only=True)
class ImageResult:
    """One image of the plan with what became of it; ``document`` is its measurement, None unless it is done."""

    unit: UnitRow
    state: str  # done, failed, excluded, missing
    reason: str | None
    task: TaskRecord | None
    predict: TaskRecord | None
    compare: Mapping[str, TaskRecord]  # by key of the spectrum
    layers: tuple[LayerValue, ...] = ()

    @property
    def document(self) -> Mapping[str, Any] | None:
        """The measurement, or None."""
        return self.task.document if self.task and self.task.state == "done" else None

    @property
    def prediction(self) -> Mapping[str, Any] | None:
        """The prediction, or None."""
        return self.predict.document if self.predict and self.predict.state == "done" else None

    @property
    def folder(self) -> str | None:
        """Folder of the measurement's files in the study's output, None where there is none."""
        return f"{MEASUREMENTS_FOLDER}/{self.task.folder}" if self.document and self.task and self.task.folder else None

    @property
    def group(self) -> str:
        """The group that the image belongs to."""
        return str(self.unit.row["group"])

    @property
    def specimen(self) -> str:
        """The specimen, unique within its group."""
        return str(self.unit.row["specimen"])

    @property
    def edited(self) -> bool:
        """Whether a boundary was moved, added or deleted by hand."""
        document = self.document or {}
        return bool((self.task.settings if self.task else {}).get("edits")) or "edited_by_hand" in document.get(
            "flags", ()
        )

    @property
    def counts(self) -> bool:
        """Whether the image enters the means: measured, layered and not excluded."""
        return self.state == "done" and bool((self.document or {}).get("layered"))

    def average(self, name: str) -> Average | None:
        """Mean, u, sd and n of a quantity; the dominant spacing has neither sd nor n."""
        document = self.document or {}
        found = document.get(f"{name}_nm")
        if not found:
            return None
        if name == "spacing":
            return Average(mean=float(found["value"]), u=found.get("u"), sd=None, n=0)
        return Average(mean=float(found["mean"]), u=found.get("u"), sd=found.get("sd"), n=int(found["n"]))

    def main_peak(self) -> Mapping[str, Any] | None:
        """The tallest predicted peak."""
        return max(
            (self.prediction or {}).get("peaks") or [], key=lambda peak: float(peak["reflectance"]), default=None
        )


@dataclass(frozen=True, kw_only=True)
class SpectrumResult:
    """One observed spectrum with its reading."""

    unit: UnitRow
    state: str
    reason: str | None
    task: TaskRecord | None

    @property
    def document(self) -> Mapping[str, Any] | None:
        """Values, peaks and colours, or None."""
        return self.task.document if self.task and self.task.state == "done" else None

    @property
    def group(self) -> str:
        """The group of the specimen."""
        return str(self.unit.row["group"])

    @property
    def specimen(self) -> str:
        """The specimen that it was taken on."""
        return str(self.unit.row["specimen"])

    def main_peak(self) -> Mapping[str, Any] | None:
        """The tallest peak (of a transmittance: the deepest dip)."""
        return max((self.document or {}).get("peaks") or [], key=lambda peak: float(peak["reflectance"]), default=None)


@dataclass(frozen=True, kw_only=True)
class StudyResults:
    """Everything that a ledger holds about the plan of its last run."""

    facts: Mapping[str, Any]
    images: tuple[ImageResult, ...]
    spectra: tuple[SpectrumResult, ...] = field(default=())


def collect_results(ledger: Ledger) -> StudyResults:
    """Read the results of the units that the last plan names."""
    images, spectra = [], []
    for unit in ledger.units():
        if unit.kind == "image":
            images.append(_image(ledger, unit))
        else:
            task = ledger.task(unit.tasks.get("spectrum", ""))
            state, reason = _state(unit, task)
            spectra.append(SpectrumResult(unit=unit, state=state, reason=reason, task=task))
    return StudyResults(facts=ledger.facts(), images=tuple(images), spectra=tuple(spectra))


def _image(ledger: Ledger, unit: UnitRow) -> ImageResult:
    task = ledger.task(unit.tasks.get("measure", ""))
    if task is not None and task.document is not None:  # long, and nothing here needs them
        task = replace(task, document={k: v for k, v in task.document.items() if k not in ("profile", "boundaries")})
    state, reason = _state(unit, task)
    compare = {}
    for name, key in unit.tasks.items():
        found = ledger.task(key) if name.startswith("compare:") else None
        if found is not None:
            compare[name.partition(":")[2]] = found
    rows = ledger.layers(task.key) if task else []
    return ImageResult(
        unit=unit,
        state=state,
        reason=reason,
        task=task,
        predict=ledger.task(unit.tasks.get("predict", "")),
        compare=compare,
        layers=tuple(
            LayerValue(
                number=n,
                phase=phase,
                thickness_nm=t,
                u_nm=u,
                sd_lateral_nm=sd,
                complete=bool(complete),
                flags=tuple(f for f in flags.split(",") if f),
            )
            for n, phase, t, u, sd, complete, flags in rows
        ),
    )


def _state(unit: UnitRow, task: TaskRecord | None) -> tuple[str, str | None]:
    if task is not None and task.state == "failed":
        return "failed", task.reason
    if unit.row.get("exclude"):
        return "excluded", unit.row["exclude"]
    return ("missing", None) if task is None else (task.state, task.reason)


# --- long tables ----------------------------------------------------------------------------------------------------


def image_rows(results: StudyResults) -> list[dict[str, Any]]:
    """One row an image, by ``IMAGE_COLUMNS``; unknown is None."""
    rows = []
    for image in results.images:
        row: dict[str, Any] = dict.fromkeys(IMAGE_COLUMNS)
        row |= {name: image.unit.row.get(name) for name in ("path", "group", "specimen", "section", "position")}
        row |= {"image": image.unit.key, "state": image.state, "reason": image.reason, "edited_by_hand": image.edited}
        row["folder"] = image.folder
        if image.task is not None:
            row |= {
                "attempts": image.task.attempts,
                "seconds": image.task.seconds,
                "sha256": image.task.input_sha256,
                "version": image.task.versions.get("layerscan"),
            }
        if image.document is not None:
            row |= _measured(image, image.document)
        peak = image.main_peak()
        if peak is not None:
            row |= {"predicted_peak_nm": peak["wavelength_nm"], "u_predicted_peak_nm": peak["u_wavelength_nm"]}
        rows.append(row)
    return rows


def _measured(image: ImageResult, document: Mapping[str, Any]) -> dict[str, Any]:
    source = document.get("image") or {}
    size = source.get("pixel_size_nm") or (None, None)
    spacing = document.get("spacing_nm") or {}
    row = {
        **{name: document.get(name) for name in ("layered", "periodic", "structure", "orientation_deg")},
        "spacing_nm": spacing.get("value"),
        "u_spacing_nm": spacing.get("u"),
        "pixel_size_row_nm": size[0],
        "pixel_size_column_nm": size[1],
        "u_pixel_size_relative": source.get("u_pixel_size_relative"),
        "pixel_size_source": source.get("pixel_size_source"),
        "flags": " ".join(document.get("flags") or ()),
    }
    for name in AVERAGES:
        average = image.average(name)
        if average is not None:
            row |= {f"{name}_nm": average.mean, f"u_{name}_nm": average.u, f"sd_{name}_nm": average.sd}
            row[f"n_{name}"] = average.n
    return row


def layer_rows(results: StudyResults) -> list[dict[str, Any]]:
    """One row a layer, by ``LAYER_COLUMNS``; ``counts`` says whether its image enters the means."""
    rows = []
    for image in results.images:
        shared = {name: image.unit.row.get(name) for name in ("path", "group", "specimen", "section", "position")}
        shared |= {"image": image.unit.key, "counts": image.counts}
        for layer in image.layers:
            values = {
                "layer": layer.number,
                "phase": layer.phase,
                "thickness_nm": layer.thickness_nm,
                "u_nm": layer.u_nm,
                "sd_lateral_nm": layer.sd_lateral_nm,
                "complete": layer.complete,
                "flags": " ".join(layer.flags),
            }
            rows.append({**shared, **values})
    return rows


def spectrum_rows(results: StudyResults) -> list[dict[str, Any]]:
    """One row a spectrum, by ``SPECTRUM_COLUMNS``."""
    rows = []
    for spectrum in results.spectra:
        row: dict[str, Any] = dict.fromkeys(SPECTRUM_COLUMNS)
        row |= {name: spectrum.unit.row.get(name) for name in ("path", "group", "specimen", "spot", "reference")}
        row |= {"spectrum": spectrum.unit.key, "state": spectrum.state, "reason": spectrum.reason}
        row["kind"] = (spectrum.document or {}).get("kind") or spectrum.unit.row.get("quantity")
        row["sha256"] = spectrum.task.input_sha256 if spectrum.task else None
        peak = spectrum.main_peak()
        if peak is not None:
            row |= {"peak_nm": peak["wavelength_nm"], "u_peak_nm": peak["u_wavelength_nm"]}
            row |= {"height": peak["reflectance"], "fwhm_nm": peak["fwhm_nm"]}
        rows.append(row)
    return rows


def make_table(rows: Sequence[Mapping[str, Any]], columns: Sequence[str]) -> pd.DataFrame:
    """A pandas table with these columns in this order and fitting types; unknown is missing, never 0."""
    import pandas as pd

    table = {}
    for name in columns:
        values = [row.get(name) for row in rows]
        table[name] = pd.Series(values, dtype=_column_type(name, values))
    return pd.DataFrame(table, columns=list(columns))


def _column_type(name: str, values: Sequence[Any]) -> str:
    """Nullable pandas type: a length stays a float although all values happen to be whole or unknown."""
    if name.endswith(("_nm", "_deg", "_relative", "seconds", "height")):
        return "Float64"
    if name.startswith("n_") or name in ("layer", "attempts"):
        return "Int64"
    found = {type(value) for value in values if value is not None}
    return "boolean" if found == {bool} else "string"
