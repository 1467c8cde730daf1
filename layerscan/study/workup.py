"""Ledger -> StudySummary: everything that the page of a study shows, computed and put into words."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import date
from typing import Any

from layerscan._version import __version__
from layerscan.figures.style import number_text
from layerscan.report.cautions import CAUTIONS
from layerscan.report.summary import (
    Estimate,
    FactTable,
    Failure,
    ImageRow,
    LayerPoint,
    MaterialSource,
    MethodsFacts,
    OverlayArea,
    OverlayLine,
    RunFacts,
    StudySummary,
    TestRow,
    Thumbnail,
)
from layerscan.study import analysis
from layerscan.study.judging import judge_limits, make_lot
from layerscan.study.ledger import TaskRecord
from layerscan.study.light import fit_pairs, light_pairs, peak_pairs, specimen_rows
from layerscan.study.results import ImageResult, StudyResults
from layerscan.study.statistics import DUNNETT_SEED
from layerscan.study.tables import ColourTable, ImagingTable, PlanTables, PreparationTable

QUANTITY_NAMES = {
    "period": "lamellar period",
    "dark": "thickness of the dark layers",
    "middle": "thickness of the middle layers",
    "bright": "thickness of the bright layers",
    "spacing": "dominant spacing",
}

UNCERTAINTY = (
    "Standard uncertainties combine the scatter between specimens (type A) with calibration and section geometry "
    "(type B, common to all images) as in JCGM 100:2008; U is the expanded uncertainty with coverage factor k = 2."
)
LAYER_DEFINITION = (
    "A layer lies between two boundaries at the points of steepest change of grey; layers cut off by the frame are "
    "left out of means."
)


@dataclass(frozen=True)
class _Study:
    """The results with what the plan asks of them, read once."""

    results: StudyResults
    tables: PlanTables
    groups: tuple[str, ...]
    counted: tuple[ImageResult, ...]
    specimens: tuple[analysis.Specimen, ...]


def summarise(results: StudyResults) -> StudySummary:
    """Compute everything that the page shows.

    Parameters
    ----------
    results : StudyResults
        As ``collect_results`` reads them from a ledger, finished or not.

    Returns
    -------
    StudySummary
    """
    facts = results.facts
    tables = PlanTables.model_validate(facts["tables"])
    counted = tuple(analysis.counted_images(results))
    study = _Study(
        results,
        tables,
        tuple(analysis.group_names(results, tables.study)),
        counted,
        analysis.find_specimens(counted),
    )
    quantity, level = tables.study.quantity, tables.study.level
    variance, mixed = analysis.variance_rows(counted, tables.study)
    budget = analysis.study_budget(counted, study.specimens, variance, tables.study)
    limited_by, next_measurement = analysis.say_next_measurement(budget)
    tests = (*analysis.compare_specimens(study.specimens, tables.study), *mixed)
    pairs = peak_pairs(results, study.specimens)
    line = fit_pairs(pairs, level=level)
    estimates = tuple((group, _group_estimates(study, group)) for group in study.groups)
    states = [image.state for image in results.images]
    lot = make_lot(tables.lot, today=_run_date(facts))
    flags = sorted({flag for image in results.images for flag in (image.document or {}).get("flags") or ()})
    missing = states.count("missing")
    return StudySummary(
        title=tables.study.title,
        question=tables.study.question,
        quantity=f"{quantity}_nm",
        finished=missing == 0,
        counts={state: states.count(state) for state in ("done", "failed", "excluded", "missing")},
        measured=_say_measured(study),
        answer=_say_answer(study, tests, estimates, line.sentence if line else None),
        answer_limits=_say_limits(study, limited_by, next_measurement),
        cautions=CAUTIONS,
        design=analysis.design_rows(results, study.groups),
        table=analysis.table_rows(study.specimens, study.groups, level=level),
        groups=estimates,
        specimens=specimen_rows(results, study.specimens, analysis.TABLE_QUANTITIES),
        images=tuple(make_image_row(image) for image in results.images),
        variance=variance,
        tests=tests,
        sensitivity=analysis.sensitivity_rows(results, tables.study, study.groups),
        drift=analysis.drift_rows(study.specimens, tables.study, study.groups),
        planning=analysis.planning_rows(study.specimens, variance, tables.study),
        light=light_pairs(results, study.specimens),
        peaks=pairs,
        line=line,
        budget=budget,
        limited_by=limited_by,
        next_measurement=next_measurement,
        decisions=judge_limits(tables.limits, tables.study, lot, results, study.specimens, study.groups),
        failures=find_failures(results),
        lot=lot,
        facts=_fact_tables(tables),
        methods=_methods(study, tests),
        run=_run_facts(study),
        flags=tuple(flags),
    )


def _run_date(facts: Mapping[str, Any]) -> date | None:
    """Day of the run: a report written again later must not judge otherwise."""
    stamp = facts.get("finished") or facts.get("started")
    return date.fromisoformat(stamp[:10]) if stamp else None


def _group_estimates(study: _Study, group: str) -> tuple[Estimate, ...]:
    members = [s for s in study.specimens if s.group == group]
    level = study.tables.study.level
    found = [analysis.estimate_group(members, quantity, level=level) for quantity in analysis.TABLE_QUANTITIES]
    found.append(analysis.estimate_cv(members, study.tables.study.quantity, level=level))
    return tuple(estimate for estimate in found if estimate is not None)


# --- sentences ------------------------------------------------------------------------------------------------------


def _say_measured(study: _Study) -> str:
    layers = sum(layer.complete for image in study.counted for layer in image.layers)
    groups = len({s.group for s in study.specimens})
    return (
        f"The {QUANTITY_NAMES[study.tables.study.quantity]} was measured on {_count(len(study.specimens), 'specimen')} "
        f"of {_count(groups, 'group')}, in {_count(len(study.counted), 'image')} with {_count(layers, 'layer')}; "
        f"{_count(sum(s.state == 'done' for s in study.results.spectra), 'spectrum', 'spectra')} observed."
    )


def _count(number: int, one: str, many: str | None = None) -> str:
    return f"{number} {one if number == 1 else many or one + 's'}"


def _say_answer(
    study: _Study,
    tests: Sequence[TestRow],
    estimates: Sequence[tuple[str, tuple[Estimate, ...]]],
    line: str | None,
) -> str:
    name = f"{study.tables.study.quantity}_nm"
    words = []
    for group, found in estimates:
        estimate = next((e for e in found if e.quantity == name), None)
        if estimate is not None:
            words.append(_say_estimate(group, estimate))
    if not words:
        return f"No image gave a {QUANTITY_NAMES[study.tables.study.quantity]}: there is nothing to answer with."
    sentences = [f"Mean {QUANTITY_NAMES[study.tables.study.quantity]}: {'; '.join(words)}."]
    main = analysis.main_test(tests)
    if main is not None:
        sentences.append(main.sentence)
    elif tests and len(words) > 1:
        sentences.append(tests[0].sentence)
    sentences += [test.sentence for test in tests if "equivalence" in test.name and test.possible]
    if line:
        sentences.append(line)
    return " ".join(sentences)


def _say_estimate(group: str, estimate: Estimate) -> str:
    specimens = _count(estimate.n_specimens or 0, "specimen")
    if estimate.u is None:
        return f"{group} {estimate.mean:.4g} nm ({specimens}: no uncertainty of the mean can be stated)"
    return f"{group} {number_text(estimate.mean, estimate.u)} nm (standard uncertainty, {specimens})"


def _say_limits(study: _Study, limited_by: str | None, next_measurement: str | None) -> tuple[str, ...]:
    found = []
    missing = sum(image.state == "missing" for image in study.results.images)
    if missing:
        found.append(f"The study is unfinished: {_count(missing, 'image')} not measured yet.")
    if limited_by:
        found.append(f"The largest part of the uncertainty is {limited_by}. {next_measurement}")
    failed = sum(image.state == "failed" for image in study.results.images)
    if failed:
        found.append(f"{_count(failed, 'image')} could not be measured; see the failures.")
    plain = sum(image.state == "done" and not image.counts for image in study.results.images)
    if plain:
        found.append(f"{_count(plain, 'image')} showed no layered structure and count in no mean.")
    without = [i for i in study.counted if i.average(study.tables.study.quantity) is None]
    if without:
        found.append(f"{_count(len(without), 'image')} had layers but no {study.tables.study.quantity}.")
    versions = {(image.task.versions.get("layerscan") if image.task else None) for image in study.counted}
    if len(versions) > 1:
        found.append(f"Results of different versions are mixed: {', '.join(sorted(map(str, versions)))}.")
    return tuple(found)


# --- images and failures --------------------------------------------------------------------------------------------


def make_image_row(image: ImageResult) -> ImageRow:
    """One image as the page shows it."""
    document, task, row = image.document or {}, image.task, image.unit.row
    extras = (task.extras if task else None) or {}
    spacing = document.get("spacing_nm") or {}
    return ImageRow(
        key=image.unit.key,
        path=row["path"],
        group=image.group,
        specimen=image.specimen,
        section=row.get("section"),
        position=row.get("position"),
        state=image.state,  # type: ignore[arg-type]
        reason=image.reason,
        attempts=task.attempts if task else 0,
        seconds=task.seconds if task else None,
        sha256=task.input_sha256 if task else None,
        layered=document.get("layered"),
        periodic=document.get("periodic"),
        structure=document.get("structure"),
        orientation_deg=document.get("orientation_deg"),
        period=image.average("period"),
        dark=image.average("dark"),
        middle=image.average("middle"),
        bright=image.average("bright"),
        spacing_nm=spacing.get("value"),
        u_spacing_nm=spacing.get("u"),
        layers=tuple(
            LayerPoint(
                index=layer.number,
                phase=layer.phase,
                thickness_nm=layer.thickness_nm,
                u_nm=layer.u_nm,
                complete=layer.complete,
                resolved="not_resolved" not in layer.flags,
                flags=layer.flags,
            )
            for layer in image.layers
        ),
        edited_by_hand=image.edited,
        flags=tuple(document.get("flags") or ()),
        rejected=_rejected(image, extras),
        thumbnail=_thumbnail(task, extras),
        overlay=tuple(
            OverlayLine(kind=kind, points=tuple((r, c) for r, c in points)) for kind, points in extras.get("lines", ())
        ),
        areas=tuple(
            OverlayArea(kind=kind, area=(r0, c0, r1, c1), reason=reason)
            for kind, r0, c0, r1, c1, reason in extras.get("areas", ())
        ),
        figure=f"{image.folder}/figure.svg" if image.folder else None,
        overrides=row.get("overrides") or {},
    )


def _thumbnail(task: TaskRecord | None, extras: Mapping[str, Any]) -> Thumbnail | None:
    if task is None or task.picture is None:
        return None
    return Thumbnail(
        media_type="image/jpeg",
        data=task.picture,
        width_px=extras["width_px"],
        height_px=extras["height_px"],
        image_px_per_px=extras["image_px_per_px"],
        pixel_size_nm=extras["pixel_size_nm"],
    )


def _rejected(image: ImageResult, extras: Mapping[str, Any]) -> tuple[str, ...]:
    found = [f"region left out: {area[-1]}" for area in extras.get("areas", ()) if area[0] == "rejected"]
    cut = sum(not layer.complete for layer in image.layers)
    if cut:
        found.append(f"{_count(cut, 'layer')} cut off by the frame, left out of the means")
    doubtful = sum(kind == "doubtful" for kind, _ in extras.get("lines", ()))
    if doubtful:
        found.append(f"{_count(doubtful, 'boundary', 'boundaries')} followed in part of the field only, or in doubt")
    return tuple(found)


def find_failures(results: StudyResults) -> tuple[Failure, ...]:
    """Everything that was tried and failed: images first, then predictions, comparisons and spectra."""
    failures = []
    for image in results.images:
        tasks = [("measure", image.task), ("predict", image.predict)]
        tasks += [("compare", task) for task in image.compare.values()]
        failures += [
            _failure(image.unit.key, image.unit.row["path"], kind, task) for kind, task in tasks if _failed(task)
        ]
    for spectrum in results.spectra:
        if _failed(spectrum.task):
            failures.append(_failure(spectrum.unit.key, spectrum.unit.row["path"], "compare", spectrum.task))
    order = {"measure": 0, "predict": 1, "compare": 2}
    return tuple(sorted(failures, key=lambda failure: order[failure.task]))


def _failed(task: TaskRecord | None) -> bool:
    return task is not None and task.state == "failed"


def _failure(key: str, path: str, kind: Any, task: TaskRecord | None) -> Failure:
    assert task is not None
    return Failure(
        key=key,
        path=path,
        task=kind,
        kind=task.failure or "failed",
        reason=task.reason or "",
        attempts=task.attempts,
    )


# --- how it was made ------------------------------------------------------------------------------------------------


def _fact_tables(tables: PlanTables) -> tuple[FactTable, ...]:
    named: tuple[tuple[str, PreparationTable | ImagingTable | ColourTable], ...] = (
        ("Preparation", tables.preparation),
        ("Imaging", tables.imaging),
        ("Colour", tables.colour),
    )
    return tuple(
        FactTable(title=title, rows=tuple((name.replace("_", " "), value) for name, value in table))
        for title, table in named
    )


def _methods(study: _Study, tests: Sequence[TestRow]) -> MethodsFacts:
    sources, sizes, corrections = set(), [], []
    for image in study.counted:
        source = (image.document or {}).get("image") or {}
        if source.get("pixel_size_nm"):
            sizes += source["pixel_size_nm"]
            sources.add(str(source.get("pixel_size_source")))
        settings = image.task.settings if image.task else {}
        for name in ("obliquity", "stage_tilt", "compression", "shrinkage"):
            if settings.get(name):
                corrections.append(f"{name.replace('_', ' ')} {settings[name]}")
    predictions = [image.prediction for image in study.counted if image.prediction is not None]
    compared = sum(bool(image.compare) for image in study.counted)
    excluded = [f"{i.unit.row['path']}: {i.reason}" for i in study.results.images if i.state == "excluded"]
    quantity = study.tables.study.quantity
    return MethodsFacts(
        version=__version__,
        n_groups=len({s.group for s in study.specimens}),
        n_specimens=len(study.specimens),
        n_images=len(study.counted),
        n_layers=sum(layer.complete for image in study.counted for layer in image.layers),
        n_spectra=sum(s.state == "done" for s in study.results.spectra),
        quantity=QUANTITY_NAMES[quantity],
        pixel_size_sources=tuple(sorted(sources)),
        pixel_size_range_nm=(min(sizes), max(sizes)) if sizes else None,
        corrections=tuple(dict.fromkeys(corrections)),
        layer_definition=LAYER_DEFINITION,
        uncertainty=UNCERTAINTY,
        statistics=_say_statistics(tests, bool(study.counted)),
        optics=_say_optics(predictions[0]) if predictions else None,
        materials=_materials(predictions),
        comparison="line with errors in both axes (York et al. 2004) against the 1:1 line" if compared else None,
        exclusions=tuple(excluded),
        hand_edits=sum(image.edited for image in study.counted),
        seeds=_seeds(study.tables),
    )


def _say_statistics(tests: Sequence[TestRow], measured: bool) -> tuple[str, ...]:
    sources = {
        "Welch's t test": "Welch's t test on specimen means (Biometrika 34 (1947) 28)",
        "one-way ANOVA": "one-way analysis of variance on specimen means",
        "Tukey's test": "Tukey's test of all pairs",
        "Dunnett's test": "Dunnett's test against one group (J. Am. Stat. Assoc. 50 (1955) 1096)",
        "mixed model": "a mixed model of all layers with t on specimens minus groups degrees of freedom",
        "equivalence (two one-sided tests)": "two one-sided tests (J. Pharmacokinet. Biopharm. 15 (1987) 657)",
    }
    found = list(dict.fromkeys(sources[test.name] for test in tests if test.name in sources))
    if any(test.adjustment == "Holm" for test in tests):
        found.append("p values adjusted by Holm's procedure (Scand. J. Statist. 6 (1979) 65)")
    if measured:
        found.append("variance components by restricted maximum likelihood (Biometrika 58 (1971) 545)")
    return tuple(found)


def _say_optics(prediction: Mapping[str, Any]) -> str:
    settings = prediction["settings"]
    return (
        f"transfer-matrix calculation, {settings.get('angle', 0):g} degrees incidence, "
        f"{settings.get('polarisation')} light, {settings.get('draws')} draws for the uncertainty"
    )


def _materials(predictions: Sequence[Mapping[str, Any]]) -> tuple[MaterialSource, ...]:
    found: dict[str, MaterialSource] = {}
    for prediction in predictions:
        settings = prediction["settings"]
        for medium in prediction.get("materials") or ():
            name = str(medium["name"])
            if name in found:
                continue
            roles = [r for r in ("dark", "middle", "bright", "incident", "substrate") if settings.get(r) == name]
            span = medium.get("range_nm")
            found[name] = MaterialSource(
                name=name,
                role=str(medium.get("role") or ", ".join(roles)),
                source=str(medium.get("source") or ""),
                doi=medium.get("doi"),
                status=str(medium.get("status") or ""),
                range_nm=(float(span[0]), float(span[1])) if span else None,
                u_index=medium.get("u_index"),
            )
    return tuple(found.values())


def _seeds(tables: PlanTables) -> dict[str, int]:
    seeds = {"predict": int(tables.predict.get("seed", 1))} if tables.predict else {}
    return {**seeds, "Dunnett": DUNNETT_SEED} if tables.study.adjust == "dunnett" else seeds


def _run_facts(study: _Study) -> RunFacts:
    facts = study.results.facts
    tasks = [t for i in study.results.images for t in (i.task, i.predict, *i.compare.values()) if t is not None]
    versions: dict[str, str] = {}
    for task in tasks:
        versions |= task.versions
    seconds = [task.seconds for task in tasks if task.seconds is not None]
    elsewhere = "" if facts.get("in_plan_folder", True) else " --out FOLDER"
    command = f"layerscan study {facts['plan_name']}{elsewhere}"
    return RunFacts(
        command=command,
        plan_path=facts["plan_name"],
        plan_sha256=facts["plan_sha256"],
        ledger="study.sqlite",
        versions=versions,
        seeds=_seeds(study.tables),
        settings=facts["settings"],
        settings_sha256=facts["settings_sha256"],
        started=facts.get("started"),
        finished=facts.get("finished"),
        processor_seconds=sum(seconds) if seconds else None,
        how_to_run_again=(command, "layerscan report FOLDER"),
    )
