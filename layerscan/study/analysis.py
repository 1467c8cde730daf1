"""Numbers of a study from its images: specimens, groups, tests, variance components, budget, planning."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

from layerscan.errors import MeasurementError
from layerscan.records import BudgetRow
from layerscan.report.summary import (
    DesignRow,
    DriftRow,
    Estimate,
    PlanningRow,
    SensitivityRow,
    TableRow,
    TestRow,
    VarianceComponents,
)
from layerscan.study.mixed import compare_by_mixed_model, variance_components
from layerscan.study.planning import plan_interval, plan_power
from layerscan.study.results import ImageResult, LayerValue, StudyResults
from layerscan.study.statistics import compare_groups, estimate_mean, find_drift
from layerscan.study.tables import StudyTable
from layerscan.uncertainty import combine, parse_quantity

TABLE_QUANTITIES = ("period", "dark", "middle", "bright", "spacing")

COVERAGE_FACTOR = 2.0


@dataclass(frozen=True, kw_only=True)
class Specimen:
    """One specimen with those of its images that count."""

    group: str
    name: str
    images: tuple[ImageResult, ...]

    def estimate(self, quantity: str) -> Estimate | None:
        """Mean over the images, each counting once; None where no image has the quantity."""
        found = [average for image in self.images if (average := image.average(quantity)) is not None]
        if not found:
            return None
        means = [average.mean for average in found]
        mean = math.fsum(means) / len(means)
        shared = systematic_relative(self.images, quantity)
        u_systematic = None if shared is None else abs(mean) * shared
        notes: tuple[str, ...] = ()
        sd: float | None = None
        u_sampling: float | None = None
        if len(means) > 1:
            sd = math.sqrt(math.fsum((m - mean) ** 2 for m in means) / (len(means) - 1))
            u_sampling = sd / math.sqrt(len(means))
            u = combine(u_sampling, u_systematic)
        else:
            u = found[0].u
            notes = ("one image: nothing says how images differ",)
        return Estimate(
            quantity=f"{quantity}_nm",
            mean=mean,
            u=u,
            u_sampling=u_sampling,
            u_systematic=u_systematic,
            sd=sd,
            degrees_of_freedom=len(means) - 1 or None,
            n_specimens=1,
            n_images=len(means),
            n_layers=sum(average.n for average in found),
            notes=notes,
        )

    def cv_percent(self, quantity: str) -> float | None:
        """Spread between layers (or periods) within images over their mean, pooled over the images."""
        return _pooled_cv(self.images, quantity)

    def position(self) -> float | None:
        """Position as a number, where all images agree on one."""
        texts = {image.unit.row.get("position") for image in self.images}
        return _number(texts.pop()) if len(texts) == 1 else None


def find_specimens(images: Sequence[ImageResult]) -> tuple[Specimen, ...]:
    """Specimens in the plan's order, each with its images; a name counts within its group."""
    found: dict[tuple[str, str], list[ImageResult]] = {}
    for image in images:
        found.setdefault((image.group, image.specimen), []).append(image)
    return tuple(Specimen(group=g, name=s, images=tuple(members)) for (g, s), members in found.items())


def counted_images(results: StudyResults) -> list[ImageResult]:
    """Images that enter the means: measured, layered, not excluded."""
    return [image for image in results.images if image.counts]


def group_names(results: StudyResults, study: StudyTable) -> list[str]:
    """Groups in the order that the plan asks for, the others after them as they come."""
    present = dict.fromkeys(image.group for image in results.images)
    return [*study.groups, *(group for group in present if group not in study.groups)]


def systematic_relative(images: Sequence[ImageResult], quantity: str) -> float | None:
    """Relative standard uncertainty that all images share: the type B rows of their budgets; None where none is known.

    Calibration and section geometry are taken as common to the whole study, so that averaging does not shrink them.
    """
    found = []
    for image in images:
        document = image.document or {}
        parts = [
            row["relative"]
            for row in document.get("budget") or ()
            if row["quantity"] in (f"{quantity}_nm", quantity) and row["kind"] == "B" and row["relative"] is not None
        ]
        pixel = (document.get("image") or {}).get("u_pixel_size_relative")
        shared = combine(*parts) if parts else pixel
        if shared is not None:
            found.append(float(shared))
    return math.fsum(found) / len(found) if found else None


def _pooled_cv(images: Sequence[ImageResult], quantity: str) -> float | None:
    total = weight = 0.0
    for image in images:
        average = image.average(quantity)
        if average is not None and average.sd is not None and average.n > 1 and average.mean:
            total += (average.n - 1) * (average.sd / average.mean) ** 2
            weight += average.n - 1
    return 100 * math.sqrt(total / weight) if weight else None


def _number(text: Any) -> float | None:
    words = str(text or "").split()
    try:
        return float(words[0]) if words else None
    except ValueError:
        return None


# --- groups ---------------------------------------------------------------------------------------------------------


def design_rows(results: StudyResults, groups: Sequence[str]) -> tuple[DesignRow, ...]:
    """What stands behind each group's numbers."""
    rows = []
    for group in groups:
        images = [image for image in results.images if image.group == group]
        counted = [image for image in images if image.counts]
        states = [image.state for image in images]
        rows.append(
            DesignRow(
                group=group,
                specimens=len({image.specimen for image in counted}),
                images_planned=len(images),
                images_done=states.count("done"),
                images_failed=states.count("failed"),
                images_excluded=states.count("excluded"),
                images_missing=states.count("missing"),
                layers=sum(layer.complete for image in counted for layer in image.layers),
                spectra=sum(s.group == group and s.state == "done" for s in results.spectra),
            )
        )
    return tuple(rows)


def estimate_group(specimens: Sequence[Specimen], quantity: str, *, level: float) -> Estimate | None:
    """Mean of a group over its specimens; None where no specimen has the quantity."""
    found = [estimate for specimen in specimens if (estimate := specimen.estimate(quantity)) is not None]
    if not found:
        return None
    shared = systematic_relative([image for s in specimens for image in s.images], quantity)
    means = [estimate.mean for estimate in found]
    return estimate_mean(
        means,
        quantity=f"{quantity}_nm",
        level=level,
        u_systematic=None if shared is None else shared * abs(math.fsum(means) / len(means)),
        n_images=sum(estimate.n_images or 0 for estimate in found),
        n_layers=sum(estimate.n_layers or 0 for estimate in found),
    )


def estimate_cv(specimens: Sequence[Specimen], quantity: str, *, level: float) -> Estimate | None:
    """Mean over the specimens of the spread between their layers, in per cent."""
    found = [cv for specimen in specimens if (cv := specimen.cv_percent(quantity)) is not None]
    return estimate_mean(found, quantity="cv_percent", level=level, u_systematic=0.0) if found else None


def table_rows(specimens: Sequence[Specimen], groups: Sequence[str], *, level: float) -> tuple[TableRow, ...]:
    """The main table: every quantity of every group that has it."""
    rows = []
    for group in groups:
        members = [s for s in specimens if s.group == group]
        for quantity in TABLE_QUANTITIES:
            estimate = estimate_group(members, quantity, level=level)
            if estimate is None:
                continue
            rows.append(
                TableRow(
                    group=group,
                    quantity=f"{quantity}_nm",
                    mean_nm=estimate.mean,
                    cv_percent=_pooled_cv([image for s in members for image in s.images], quantity),
                    n_layers=estimate.n_layers or 0,
                    n_images=estimate.n_images or 0,
                    n_specimens=estimate.n_specimens or 0,
                    u_nm=estimate.u,
                    expanded_nm=None if estimate.u is None else COVERAGE_FACTOR * estimate.u,
                    notes=estimate.notes,
                )
            )
    return tuple(rows)


def compare_specimens(
    specimens: Sequence[Specimen], study: StudyTable, quantity: str | None = None
) -> tuple[TestRow, ...]:
    """Tests between groups on the specimens' means of the study's quantity."""
    if not study.compare_groups:
        return ()
    quantity = quantity or study.quantity
    found = [(s, estimate) for s in specimens if (estimate := s.estimate(quantity)) is not None]
    present = {s.group for s, _ in found}
    margin = study.equivalence
    return compare_groups(
        [estimate.mean for _, estimate in found],
        [s.group for s, _ in found],
        [s.name for s, _ in found],
        quantity=f"{quantity}_nm",
        level=study.level,
        adjust=study.adjust,
        reference_group=study.reference_group if study.reference_group in present else None,
        equivalence=None if margin is None else parse_quantity(margin, dimension="length").value,
    )


def main_test(tests: Sequence[TestRow]) -> TestRow | None:
    """The test that answers whether groups differ: the first that is no equivalence test."""
    return next((row for row in tests if row.p_value is not None and "equivalence" not in row.name), None)


def sensitivity_rows(results: StudyResults, study: StudyTable, groups: Sequence[str]) -> tuple[SensitivityRow, ...]:
    """The answer again with the excluded images, and without the images edited by hand; empty where there are none."""
    counted = counted_images(results)
    excluded = [i for i in results.images if i.state == "excluded" and (i.document or {}).get("layered")]
    edited = [image for image in counted if image.edited]
    variants = [("as planned", counted, "")]
    if excluded:
        variants.append(("with the excluded images", counted + excluded, f"{len(excluded)} images more"))
    if edited:
        rest = [image for image in counted if not image.edited]
        variants.append(("without images edited by hand", rest, f"{len(edited)} images fewer"))
    if len(variants) == 1:
        return ()
    rows = []
    for what, images, note in variants:
        specimens = find_specimens(images)
        test = main_test(compare_specimens(specimens, study))
        for group in groups:
            members = [s for s in specimens if s.group == group]
            rows.append(
                SensitivityRow(
                    what=what,
                    group=group,
                    quantity=f"{study.quantity}_nm",
                    estimate=estimate_group(members, study.quantity, level=study.level),
                    p_value=test.p_value if test else None,
                    note=note,
                )
            )
    return tuple(rows)


def drift_rows(specimens: Sequence[Specimen], study: StudyTable, groups: Sequence[str]) -> tuple[DriftRow, ...]:
    """Drift along the web or with depth: one row a group whose images state positions."""
    rows = []
    for group in groups:
        points: list[tuple[float, float, float | None]] = []
        for specimen in (s for s in specimens if s.group == group):
            for position, members in _by_position(specimen).items():
                estimate = replace(specimen, images=tuple(members)).estimate(study.quantity)
                if estimate is not None:
                    points.append((position, estimate.mean, estimate.u))
        if not points:
            continue
        row = find_drift(
            [p for p, _, _ in points],
            [m for _, m, _ in points],
            u=[u for _, _, u in points],
            group=group,
            quantity=f"{study.quantity}_nm",
            along=study.position,
            position_unit=study.position_unit,
            level=study.level,
        )
        several = len(points) > sum(s.group == group for s in specimens)
        if several and row.slope is not None:
            note = " Several positions of one specimen are counted as independent; the true uncertainty is larger."
            row = replace(row, sentence=row.sentence + note)
        rows.append(row)
    return tuple(rows)


def _by_position(specimen: Specimen) -> dict[float, list[ImageResult]]:
    found: dict[float, list[ImageResult]] = {}
    for image in specimen.images:
        position = _number(image.unit.row.get("position"))
        if position is not None:
            found.setdefault(position, []).append(image)
    return found


# --- layers, variance, budget ---------------------------------------------------------------------------------------


def layer_values(layers: Sequence[LayerValue], quantity: str) -> list[float]:
    """Values of single layers of a phase, or of whole periods that do not overlap [nm]."""
    if quantity != "period":
        return [layer.thickness_nm for layer in layers if layer.complete and layer.phase == quantity]
    values: list[float] = []
    current: list[LayerValue] = []
    for layer in layers:
        if len(current) > 1 and layer.phase == current[0].phase:  # the boundary before a cut layer is whole
            values.append(math.fsum(part.thickness_nm for part in current))
            current = []
        current = [*current, layer] if layer.complete else []
    return values


def variance_rows(
    images: Sequence[ImageResult], study: StudyTable
) -> tuple[tuple[VarianceComponents, ...], tuple[TestRow, ...]]:
    """Variance components of the study's quantity and the mixed model's comparison of groups.

    Both are empty where the layers allow no estimate: no image with two values, or no spread.
    """
    quantity = study.quantity
    values: list[float] = []
    labels: list[tuple[str, str, str]] = []
    for image in images:
        single = layer_values(image.layers, quantity)
        values += single
        labels += [(image.unit.key, image.specimen, image.group)] * len(single)
    if not values:
        return (), ()
    try:
        found, fit = variance_components(
            values,
            [key for key, _, _ in labels],
            [specimen for _, specimen, _ in labels],
            [group for _, _, group in labels],
            quantity=f"{quantity}_nm",
            level=study.level,
        )
    except MeasurementError:
        return (), ()
    tests = compare_by_mixed_model(fit, quantity=f"{quantity}_nm", level=study.level) if study.compare_groups else ()
    note = "the spread between layers holds the measurement noise of single layers"
    return (replace(found, notes=(*found.notes, note)),), tests


def study_budget(
    images: Sequence[ImageResult],
    specimens: Sequence[Specimen],
    variance: Sequence[VarianceComponents],
    study: StudyTable,
) -> tuple[BudgetRow, ...]:
    """Budget of a group's mean of the study's quantity, averaged over the groups.

    Sampling (type A) is split between specimens, images and layers in proportion to what each contributes to the
    variance of a specimen's mean; type B rows are those of the images' own budgets.
    """
    quantity = study.quantity
    groups = dict.fromkeys(s.group for s in specimens)
    estimates = [estimate_group([s for s in specimens if s.group == g], quantity, level=study.level) for g in groups]
    sampled = [e for e in estimates if e is not None and e.u_sampling is not None]
    rows: list[tuple[str, str, str, float, float | None]] = []
    if sampled:
        u = math.sqrt(math.fsum((e.u_sampling or 0.0) ** 2 for e in sampled) / len(sampled))
        nu = float(sum((e.n_specimens or 1) - 1 for e in sampled))
        rows += [(name, "A", "t", u * math.sqrt(share), nu) for name, share in _sampling_shares(specimens, variance)]
    known = [e for e in estimates if e is not None]
    mean = math.fsum(e.mean for e in known) / len(known) if known else 0.0
    rows += [
        (name, "B", law, abs(mean) * relative, None) for name, law, relative in _systematic_parts(images, quantity)
    ]
    total = math.fsum(row[3] ** 2 for row in rows)
    return tuple(
        BudgetRow(
            quantity=f"{quantity}_nm",
            component=name,
            kind="A" if kind == "A" else "B",
            distribution=law,
            relative=u / abs(mean) if mean else None,
            u_nm=u,
            sensitivity=1.0,
            share=u * u / total if total else None,
            degrees_of_freedom=nu,
        )
        for name, kind, law, u, nu in sorted(rows, key=lambda row: -row[3])
    )


def _sampling_shares(specimens: Sequence[Specimen], variance: Sequence[VarianceComponents]) -> list[tuple[str, float]]:
    """Shares of specimens, images and layers in the variance of a specimen's mean; they add up to one."""
    sd = {c.level: c.sd for v in variance for c in v.components}
    if "specimen" not in sd:
        return [("between specimens (sampling)", 1.0)]
    images = max(1.0, math.fsum(len(s.images) for s in specimens) / max(len(specimens), 1))
    layers = max(1.0, typical_layers(specimens))
    parts = {
        "between specimens (sampling)": sd["specimen"] ** 2,
        "between images of a specimen (sampling)": sd.get("image", 0.0) ** 2 / images,
        "between layers of an image (sampling)": sd.get("layer", 0.0) ** 2 / (images * layers),
    }
    total = math.fsum(parts.values())
    return [(name, v / total) for name, v in parts.items() if v > 0] if total else [(next(iter(parts)), 1.0)]


def typical_layers(specimens: Sequence[Specimen]) -> float:
    """Mean number of complete layers in an image."""
    counts = [sum(layer.complete for layer in image.layers) for s in specimens for image in s.images]
    return math.fsum(counts) / len(counts) if counts else 0.0


def _systematic_parts(images: Sequence[ImageResult], quantity: str) -> list[tuple[str, str, float]]:
    """Component, distribution and mean relative u of each type B row of the images' budgets."""
    found: dict[tuple[str, str], list[float]] = {}
    for image in images:
        document = image.document or {}
        rows = [r for r in document.get("budget") or () if r["quantity"] in (f"{quantity}_nm", quantity)]
        shared = [r for r in rows if r["kind"] == "B" and r["relative"] is not None]
        for row in shared:
            found.setdefault((row["component"], row["distribution"]), []).append(float(row["relative"]))
        pixel = (document.get("image") or {}).get("u_pixel_size_relative")
        if not shared and pixel is not None:
            found.setdefault(("pixel size", "normal"), []).append(float(pixel))
    return [(name, law, math.fsum(v) / len(v)) for (name, law), v in found.items()]


def say_next_measurement(budget: Sequence[BudgetRow]) -> tuple[str | None, str | None]:
    """The largest component and what would make it smaller."""
    if not budget:
        return None, None
    largest = budget[0].component
    advice: Mapping[str, str] = {
        "between specimens": "Measure more specimens: four times as many halve this part. More layers do not help.",
        "between images": "Take more images of each specimen, at other places.",
        "between layers": "Measure more layers in each image: a larger field, or more fields.",
        "pixel size": "Calibrate the magnification against a certified standard at the settings used.",
    }
    text = next((words for start, words in advice.items() if largest.startswith(start)), None)
    return largest, text or f"State or measure the {largest} better."


def planning_rows(
    specimens: Sequence[Specimen], variance: Sequence[VarianceComponents], study: StudyTable
) -> tuple[PlanningRow, ...]:
    """How many specimens the wanted interval or power takes, with the spread found here: with images and layers as
    they are, with twice the images, with twice the layers.
    """
    sd = {c.level: c.sd for v in variance for c in v.components}
    if "specimen" not in sd or not (study.wanted_half_width or study.wanted_difference):
        return ()
    images = max(1, round(math.fsum(len(s.images) for s in specimens) / max(len(specimens), 1)))
    spread: dict[str, Any] = {
        "sd_specimen_nm": sd["specimen"],
        "sd_image_nm": sd.get("image", 0.0),
        "sd_layer_nm": sd.get("layer", 0.0),
        "level": study.level,
    }
    rows: list[PlanningRow] = []
    plans: list[Callable[..., PlanningRow]] = []
    if study.wanted_half_width:
        wanted = parse_quantity(study.wanted_half_width, dimension="length").value
        plans.append(lambda **more: plan_interval(wanted, **spread, **more))
    if study.wanted_difference:
        difference = parse_quantity(study.wanted_difference, dimension="length").value
        plans.append(lambda **more: plan_power(difference, study.wanted_power, **spread, **more))
    layers = max(1, round(typical_layers(specimens)))
    for plan in plans:
        rows += [plan(images=m, layers=k) for m, k in ((images, layers), (2 * images, layers), (images, 2 * layers))]
    return tuple(rows)
