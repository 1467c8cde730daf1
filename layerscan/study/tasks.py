"""Plan and ledger -> what is still to be done. A task's key says what is done, to which bytes, with which settings."""

from __future__ import annotations

import hashlib
import os
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from layerscan._version import __version__
from layerscan.errors import InputError
from layerscan.records import Progress
from layerscan.settings import PredictSettings, Settings
from layerscan.study.ledger import Ledger, TaskRecord, UnitRow, dump
from layerscan.study.plan import PlannedImage, PlannedSpectrum, StudyPlan
from layerscan.study.work import MEASUREMENTS_FOLDER, Illuminant, Observer, Step, Unit

MATERIALS = ("dark", "middle", "bright", "incident", "substrate")


@dataclass(frozen=True, kw_only=True)
class TaskList:
    """What a run would do: units still to be worked on, every unit's row, and failures known before anything runs."""

    units: tuple[Unit, ...]
    rows: tuple[UnitRow, ...]
    failures: tuple[TaskRecord, ...]
    done: int  # units with nothing left to do
    measure: int
    predict: int
    compare: int
    spectra: int


def list_tasks(plan: StudyPlan, ledger: Ledger | None, out: Path, *, progress: Progress | None = None) -> TaskList:
    """Find what is missing, changed or set differently.

    Parameters
    ----------
    plan : StudyPlan
    ledger : Ledger, optional
        None: nothing was done before. Opened for writing, it remembers the files' hashes.
    out : Path
        The study's output folder.
    progress : callable, optional
        Hashing many large files takes its time.

    Returns
    -------
    TaskList
    """
    hashes = _Hashes(ledger, progress, total=len(plan.images) + len(plan.spectra))
    maker = _Maker(plan, ledger, Path(out).absolute(), hashes)
    spectra = [maker.spectrum(spectrum) for spectrum in plan.spectra]
    images = [maker.image(image) for image in plan.images]
    hashes.remember()
    steps = [step.kind for unit in maker.units for step in unit.steps]
    return TaskList(
        units=tuple(maker.units),
        rows=tuple(images + spectra),
        failures=tuple(maker.failures),
        done=len(images) + len(spectra) - len(maker.units) - len(maker.failures),
        measure=steps.count("measure"),
        predict=steps.count("predict"),
        compare=steps.count("compare"),
        spectra=steps.count("spectrum"),
    )


def task_key(kind: str, *parts: Any) -> str:
    """Key of a task: SHA-256 over its kind and everything that its result depends on."""
    return hashlib.sha256(dump([kind, *parts]).encode()).hexdigest()


class _Hashes:
    """SHA-256 of files; a file with unchanged size and times is not read again."""

    def __init__(self, ledger: Ledger | None, progress: Progress | None, *, total: int) -> None:
        self.ledger, self.progress, self.total = ledger, progress, total
        self.known = ledger.known_hashes() if ledger else {}
        self.fresh: dict[str, tuple[str, int, int, int, str]] = {}
        self.done = 0

    def find(self, path: str) -> str | None:
        """Hash of the file, None where it cannot be read."""
        self.done += 1
        try:
            stat = os.stat(path)
            stamp = (stat.st_size, stat.st_mtime_ns, stat.st_ctime_ns)
            if path in self.known and tuple(self.known[path][:3]) == stamp:
                return self.known[path][3]
            if self.progress:
                self.progress(f"reading {os.path.basename(path)}", self.done / max(self.total, self.done))
            with open(path, "rb") as stream:
                sha256 = hashlib.file_digest(stream, "sha256").hexdigest()
        except OSError:
            return None
        self.fresh[path] = (path, *stamp, sha256)
        self.known[path] = (*stamp, sha256)
        return sha256

    def remember(self) -> None:
        if self.ledger is not None and self.ledger.writable and self.fresh:
            self.ledger.remember_hashes(list(self.fresh.values()))


@dataclass
class _Maker:
    plan: StudyPlan
    ledger: Ledger | None
    out: Path
    hashes: _Hashes
    units: list[Unit] = field(default_factory=list)
    failures: list[TaskRecord] = field(default_factory=list)

    def __post_init__(self) -> None:
        self.states = self.ledger.states() if self.ledger else {}
        self.retried = self.ledger.failures_to_retry(__version__) if self.ledger else set()
        self.colours = _colours_wanted(self.plan)
        self.compared: dict[tuple[str, str], list[tuple[PlannedSpectrum, str, str | None]]] = {}
        self.content: dict[tuple[Any, ...], PlannedImage] = {}
        self.texts: dict[int, str] = {}
        self.lights: dict[int, tuple[PredictSettings, tuple[str, ...]]] = {}

    def _dump(self, settings: Settings) -> str:
        """Settings as text, made once for each record."""
        if id(settings) not in self.texts:
            self.texts[id(settings)] = dump(settings.model_dump(mode="json"))
        return self.texts[id(settings)]

    def _is_open(self, key: str) -> bool:
        return key not in self.states or key in self.retried

    def spectrum(self, spectrum: PlannedSpectrum) -> UnitRow:
        sha256 = self.hashes.find(spectrum.path)
        row = _row(spectrum, ("group", "specimen", "spot", "quantity", "reference", "exclude", "note", "overrides"))
        mirror = self.hashes.find(spectrum.reference_path) if spectrum.reference_path else None
        if sha256 is None:
            return self._missing(spectrum, "spectrum", row)
        if spectrum.reference_path and mirror is None:
            name = os.path.relpath(spectrum.reference_path, self.plan.folder)
            return self._missing(spectrum, "spectrum", row, name=name)
        key = task_key("spectrum", sha256, mirror, spectrum.quantity, spectrum.column, self.colours)
        if spectrum.exclude is None and spectrum.quantity != "absorbance":
            self.compared.setdefault((spectrum.group, spectrum.specimen), []).append((spectrum, sha256, mirror))
        if self._is_open(key):
            step = Step(
                key=key,
                kind="spectrum",
                path=spectrum.path,
                reference_path=spectrum.reference_path,
                input_sha256=sha256,
                quantity=spectrum.quantity,
                column=spectrum.column,
                colours=self.colours,
            )
            self._add(spectrum, "spectrum", sha256, "", (step,))
        return UnitRow(key=spectrum.key, kind="spectrum", row=row, tasks={"spectrum": key})

    def image(self, image: PlannedImage) -> UnitRow:
        sha256 = self.hashes.find(image.path)
        names = ("group", "specimen", "section", "position", "exclude", "note", "overrides")
        row = _row(image, names)
        if sha256 is None:
            return self._missing(image, "image", row)
        settings = image.measure
        first = self.content.setdefault((sha256, settings.page, settings.region, settings.line), image)
        if first is not image:
            return self._duplicate(image, first, row, sha256)
        measure = task_key("measure", sha256, self._dump(settings))
        steps = [Step(key=measure, kind="measure", settings=settings, input_sha256=sha256)]
        tasks = {"measure": measure}
        if image.predict is not None:
            steps += self._light_steps(image, image.predict, measure, tasks)
        folder = f"{MEASUREMENTS_FOLDER}/{image.key}-{measure[:8]}"
        wanted = self._open_steps(steps, folder)
        if wanted:
            self._add(image, "image", sha256, folder, wanted)
        return UnitRow(key=image.key, kind="image", row=row, tasks=tasks)

    def _light_steps(
        self, image: PlannedImage, predict: PredictSettings, measure: str, tasks: dict[str, str]
    ) -> list[Step]:
        settings, material_hashes = self._resolve_materials(predict, image.place)
        light = task_key("predict", measure, self._dump(predict), material_hashes)
        steps = [Step(key=light, kind="predict", settings=settings, input_sha256=measure)]
        tasks["predict"] = light
        for spectrum, sha256, mirror in self.compared.get((image.group, image.specimen), ()):
            key = task_key(
                "compare", light, sha256, mirror, spectrum.quantity, spectrum.column, self._dump(spectrum.compare)
            )
            tasks[f"compare:{spectrum.key}"] = key
            steps.append(
                Step(
                    key=key,
                    kind="compare",
                    settings=spectrum.compare,
                    path=spectrum.path,
                    reference_path=spectrum.reference_path,
                    input_sha256=sha256,
                    quantity=spectrum.quantity,
                    column=spectrum.column,
                )
            )
        return steps

    def _open_steps(self, steps: Sequence[Step], folder: str) -> tuple[Step, ...]:
        """Steps that are open, and the steps before them whose files have gone."""
        wanted = [self._is_open(step.key) for step in steps]
        light = next((i for i, step in enumerate(steps) if step.kind == "predict"), None)
        done = [self.states.get(step.key, ("",))[0] == "done" for step in steps]
        if light is not None and any(wanted[light + 1 :]) and not wanted[light] and done[light]:
            wanted[light] = not (self.out / folder / "prediction" / "prediction.json").is_file()
        if light is not None and not wanted[light] and not done[light]:  # no prediction, for good
            wanted[light + 1 :] = [False] * (len(steps) - light - 1)
        if light is not None and wanted[light] and not wanted[0] and done[0]:
            wanted[0] = not (self.out / folder / "measurement.json").is_file()
        if wanted[0]:  # what follows from a new measurement is made anew
            wanted = [True] * len(steps)
        elif light is not None and not done[0]:  # it failed or has no layers, for good
            wanted = [False] * len(steps)
        return tuple(step for step, open_ in zip(steps, wanted, strict=True) if open_)

    def _resolve_materials(self, settings: PredictSettings, place: str) -> tuple[PredictSettings, tuple[str, ...]]:
        """Material files named relative to the study's folder, found and hashed."""
        if id(settings) in self.lights:
            return self.lights[id(settings)]
        changes: dict[str, Any] = {}
        hashes = []
        for name in (*MATERIALS, "materials_folder"):
            text = getattr(settings, name)
            path = self.plan.folder / text if text else None
            if path is None or not os.path.exists(path):
                continue
            self._check_inside(path, name, place)
            changes[name] = str(path)
            files = sorted(p for p in path.rglob("*") if p.is_file()) if path.is_dir() else [path]
            hashes += [self.hashes.find(str(file)) or "" for file in files[:10_000]]
        found = (settings.model_copy(update=changes), tuple(hashes))
        self.lights[id(settings)] = found
        return found

    def _check_inside(self, path: Path, name: str, place: str) -> None:
        if not self.plan.tables.study.allow_outside and not path.resolve().is_relative_to(self.plan.folder.resolve()):
            raise InputError(
                f"{place}: predict.{name} '{path}' lies outside the study's folder. "
                "Move it inside, or set allow_outside = true in [study]."
            )

    def _add(
        self, row: PlannedImage | PlannedSpectrum, kind: str, sha256: str, folder: str, steps: tuple[Step, ...]
    ) -> None:
        where = str(self.out / folder) if folder else ""
        self.units.append(
            Unit(key=row.key, kind=kind, path=row.path, name=row.name, sha256=sha256, folder=where, steps=steps)
        )

    def _missing(
        self, planned: PlannedImage | PlannedSpectrum, kind: str, row: dict[str, Any], *, name: str | None = None
    ) -> UnitRow:
        reason = (
            f"'{name or planned.name}' is missing. Put it there and run the study again, or take it out of the plan."
        )
        return self._known_failure(planned, kind, row, None, "missing file", reason)

    def _duplicate(self, image: PlannedImage, first: PlannedImage, row: dict[str, Any], sha256: str) -> UnitRow:
        reason = (
            f"it holds the same bytes as '{first.name}' ({first.group}, {first.specimen}). Counting them twice would "
            "make the result look better than it is: put the right file there, or take one out of the plan."
        )
        return self._known_failure(image, "image", row, sha256, "duplicate", reason)

    def _known_failure(
        self,
        planned: PlannedImage | PlannedSpectrum,
        kind: str,
        row: dict[str, Any],
        sha256: str | None,
        failure: str,
        reason: str,
    ) -> UnitRow:
        task = "measure" if kind == "image" else "spectrum"
        key = task_key(failure, planned.name, sha256)
        self.failures.append(
            TaskRecord(
                key=key,
                kind=task,
                unit=planned.key,
                state="failed",
                settings={},
                versions={"layerscan": __version__},
                input_sha256=sha256,
                failure=failure,
                reason=reason,
                attempts=0,
            )
        )
        return UnitRow(key=planned.key, kind=kind, row=row, tasks={task: key})


def _row(planned: PlannedImage | PlannedSpectrum, names: Sequence[str]) -> dict[str, Any]:
    values: Mapping[str, Any] = {name: getattr(planned, name) for name in names}
    return {"path": planned.name, **values}


def _colours_wanted(plan: StudyPlan) -> tuple[tuple[Illuminant, Observer], ...]:
    """Illuminant and observer of every colour that the page or a limit needs."""
    wanted: list[tuple[Illuminant, Observer]] = [("D65", 2)]
    if plan.predict:
        wanted = [(plan.predict.illuminant, plan.predict.observer)]
    limits = plan.tables.limits
    if limits and limits.colour_difference:
        wanted.append((limits.colour_difference.illuminant, limits.colour_difference.observer))
    return tuple(sorted(set(wanted)))
