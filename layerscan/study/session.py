"""A study from plan to page: check, run, report. What command line and notebooks call."""

from __future__ import annotations

import os
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING, Any

from layerscan._version import __version__
from layerscan.errors import InputError
from layerscan.records import Progress
from layerscan.study.ledger import FILE_NAME, Ledger
from layerscan.study.plan import Problem, StudyPlan, read_plan
from layerscan.study.tasks import TaskList, list_tasks, task_key

if TYPE_CHECKING:
    from layerscan.study.runner import Work

PAGE_NAME = "report.html"


@dataclass(frozen=True, kw_only=True)
class StudyCheck:
    """What a run would do and what is missing; nothing was run."""

    plan: str
    folder: str
    images: int
    spectra: int
    groups: tuple[tuple[str, int, int], ...]  # group, specimens, images
    done: int  # images and spectra with nothing left to do
    to_measure: int
    to_predict: int
    to_compare: int
    to_read: int  # spectra
    problems: tuple[Problem, ...]
    not_stated: tuple[str, ...]
    exit_code: int = 0

    @property
    def missing(self) -> tuple[str, ...]:
        """What is missing, in words."""
        return tuple(f"{p.place}: {p.text}" for p in self.problems if p.severity == "missing")


@dataclass(frozen=True, kw_only=True)
class StudyOutcome:
    """What a run did. ``exit_code`` is 5 where something of the study failed or is missing,
    4 where no image shows layers."""

    folder: str
    ledger: str
    report: str
    written: tuple[str, ...]
    images: int
    done: int
    failed: int
    excluded: int
    missing: int
    without_layers: int
    worked_on: int  # units that this run worked on
    kept: int  # units that were done before
    failures: tuple[tuple[str, str], ...]  # path, reason
    answer: str
    decisions: tuple[tuple[str, str, str], ...]  # group, limit, decision
    exit_code: int


def check_study(path: str | os.PathLike[str], *, out: str | os.PathLike[str] | None = None) -> StudyCheck:
    """Say what a study would run and what is missing.

    Parameters
    ----------
    path : path
        A STUDY.toml, or the folder that holds it.
    out : path, optional
        Where the study's ledger and results lie; the plan's own folder unless stated.

    Returns
    -------
    StudyCheck

    Raises
    ------
    InputError, SettingsError
        The plan cannot be read, or is wrong.
    """
    plan = read_plan(path)
    folder = _output_folder(plan, out)
    if (folder / FILE_NAME).is_file():
        with Ledger(folder) as ledger:
            return _describe(plan, folder, list_tasks(plan, ledger, folder))
    return _describe(plan, folder, list_tasks(plan, None, folder))


def run_study(
    path: str | os.PathLike[str],
    *,
    check: bool = False,
    out: str | os.PathLike[str] | None = None,
    cluster: Any = None,
    workers: int | None = None,
    progress: Progress | None = None,
    work: Work | None = None,
) -> StudyOutcome | StudyCheck:
    """Run a study: measure what is missing, changed or set differently, then export, conclude and report.

    Parameters
    ----------
    path : path
        A STUDY.toml, or the folder that holds it.
    check : bool
        Run nothing; say what would run and what is missing.
    out : path, optional
        Where ledger, results and page go; the plan's own folder unless stated.
    cluster : str, optional
        Address of a ``dask.distributed`` scheduler whose workers see the same files; this machine unless stated.
    workers : int, optional
        Processes on this machine.
    progress : callable, optional
        See ``records.Progress``. Raising ``Interrupted`` in it (or Ctrl-C) stops the run; run again to go on.
    work : callable, optional
        What is done with one image or spectrum; ``work.run_unit`` unless stated.

    Returns
    -------
    StudyOutcome, or StudyCheck with ``check``

    Raises
    ------
    InputError, SettingsError
        The plan is wrong or nothing in it can be read; the folder cannot be written; another process runs the study.
    LayerscanError
        The disk is full or the cluster was lost. What was recorded stands.
    """
    if check:
        return check_study(path, out=out)
    from layerscan.study.runner import run_units
    from layerscan.study.work import run_unit

    plan = read_plan(path)
    folder = _output_folder(plan, out)
    with Ledger(folder, write=True) as ledger:
        tasks = list_tasks(plan, ledger, folder, progress=progress)
        _refuse_nothing(plan, tasks)
        ledger.write_plan(_facts(plan, folder, cluster), tasks.rows)
        ledger.record(tasks.failures)
        run_units(
            tasks.units,
            work=work or run_unit,
            ledger=ledger,
            run=plan.tables.run,
            cluster=cluster,
            workers=workers,
            progress=progress,
        )
        ledger.write_facts({"finished": _now()})
        return _finish(ledger, folder, tasks)


def report_study(folder: str | os.PathLike[str], *, figures: Sequence[str] = ()) -> StudyOutcome:
    """Write exports and page again from a finished or unfinished study; nothing is measured.

    Parameters
    ----------
    folder : path
        Where the study's ledger lies.
    figures : sequence of {"svg", "pdf", "tif", "tiff"}
        Formats in which the page's figures are written as files too; TIFF at 600 dots per inch.

    Raises
    ------
    InputError
        There is no ledger, or it was written by a newer layerscan.
    """
    with Ledger(folder) as ledger:
        return _finish(ledger, Path(folder), None, figures)


def _finish(ledger: Ledger, folder: Path, tasks: TaskList | None, figures: Sequence[str] = ()) -> StudyOutcome:
    from layerscan.report.study_page import write_study_page
    from layerscan.study.exports import write_exports, write_figures
    from layerscan.study.results import collect_results
    from layerscan.study.workup import summarise

    results = collect_results(ledger)
    summary = summarise(results)
    written = [str(path) for path in write_exports(folder, results)]
    if figures:
        written += [str(path) for path in write_figures(folder, summary, figures)]
    report = str(folder / PAGE_NAME)
    write_study_page(folder / PAGE_NAME, summary)
    without = sum(image.state == "done" and not image.counts for image in results.images)
    counts = summary.counts
    lacking = any(severity == "missing" for _, _, severity in results.facts["problems"])
    nothing_layered = bool(counts["done"]) and without == counts["done"]
    exit_code = 5 if summary.failures or lacking else 4 if nothing_layered else 0
    return StudyOutcome(
        folder=str(folder),
        ledger=str(folder / FILE_NAME),
        report=report,
        written=(*written, report),
        images=len(results.images),
        done=counts["done"],
        failed=counts["failed"],
        excluded=counts["excluded"],
        missing=counts["missing"],
        without_layers=without,
        worked_on=len(tasks.units) if tasks else 0,
        kept=tasks.done if tasks else 0,
        failures=tuple((failure.path, failure.reason) for failure in summary.failures),
        answer=summary.answer,
        decisions=tuple((d.group, d.name, d.decision) for d in summary.decisions),
        exit_code=exit_code,
    )


def _output_folder(plan: StudyPlan, out: str | os.PathLike[str] | None) -> Path:
    return plan.folder if out is None else Path(out).absolute()


def _refuse_nothing(plan: StudyPlan, tasks: TaskList) -> None:
    """Where not one image can be read, nothing starts."""
    images = {image.key for image in plan.images}
    broken = {failure.unit for failure in tasks.failures if failure.unit in images}
    if broken == images:
        reasons = [failure.reason or "" for failure in tasks.failures if failure.unit in images]
        raise InputError(f"No image of the study can be read. The first: {reasons[0]}")


def _facts(plan: StudyPlan, folder: Path, cluster: Any) -> dict[str, Any]:
    """What the ledger keeps of the plan besides its rows: enough for the report without the plan's files."""
    settings = {
        "measure": plan.measure.model_dump(mode="json"),
        "predict": None if plan.predict is None else plan.predict.model_dump(mode="json"),
        "compare": plan.compare.model_dump(mode="json"),
    }
    tables = plan.tables.model_dump(mode="json")
    return {
        "tables": {**tables, "images": [], "spectra": []},  # the rows themselves are kept as units
        "plan_name": plan.path.name,
        "plan_sha256": plan.sha256,
        "settings": {name: values or {} for name, values in settings.items()},
        "settings_sha256": task_key("settings", settings),
        "problems": [[p.place, p.text, p.severity] for p in plan.problems],
        "version": __version__,
        "started": _now(),
        "finished": None,
        "in_plan_folder": folder == plan.folder,
        "cluster": cluster if isinstance(cluster, str) else None,
    }


def _now() -> str:
    return datetime.now(UTC).isoformat(timespec="seconds")


def _describe(plan: StudyPlan, folder: Path, tasks: TaskList) -> StudyCheck:
    groups: dict[str, tuple[set[str], list[int]]] = {}
    for image in plan.images:
        specimens, count = groups.setdefault(image.group, (set(), []))
        specimens.add(image.specimen)
        count.append(1)
    rows = {row.key: row.row["path"] for row in tasks.rows}
    duplicates = [
        Problem(place=str(rows[f.unit]), text=f.reason or "", severity="missing")
        for f in tasks.failures
        if f.failure == "duplicate"
    ]
    return StudyCheck(
        plan=str(plan.path),
        folder=str(folder),
        images=len(plan.images),
        spectra=len(plan.spectra),
        groups=tuple((group, len(specimens), len(count)) for group, (specimens, count) in groups.items()),
        done=tasks.done,
        to_measure=tasks.measure,
        to_predict=tasks.predict,
        to_compare=tasks.compare,
        to_read=tasks.spectra,
        problems=(*plan.problems, *duplicates),
        not_stated=_not_stated(plan),
    )


def _not_stated(plan: StudyPlan) -> tuple[str, ...]:
    tables = (
        ("preparation", plan.tables.preparation),
        ("imaging", plan.tables.imaging),
        *((("colour", plan.tables.colour),) if plan.spectra else ()),
        *((("lot", plan.tables.lot),) if plan.tables.limits else ()),
    )
    return tuple(
        f"{table}.{name}" for table, values in tables for name, value in values if value is None and name != "note"
    )
