"""[limits] of a plan against a study's results: one decision a limit and group."""

from __future__ import annotations

import math
from collections.abc import Sequence
from datetime import date
from typing import Any

from layerscan.report.cautions import RELEASE_CAUTION
from layerscan.report.summary import Estimate, Lot, ReleaseDecision
from layerscan.study.analysis import Specimen, estimate_cv, estimate_group
from layerscan.study.light import observed_spectra
from layerscan.study.release import Limit, Rule, decide
from layerscan.study.results import StudyResults
from layerscan.study.statistics import estimate_mean
from layerscan.study.tables import ColourLimit, LimitsTable, LotTable, SpectrumLimit, StudyTable
from layerscan.uncertainty import parse_quantity

LENGTHS = ("period", "dark", "middle", "bright", "spacing")
SPECTRUM_LIMITS = ("peak", "band_short_edge", "band_long_edge")


def make_lot(table: LotTable, *, today: date | None = None) -> Lot:
    """The lot of a release record; says whether the calibration is overdue."""
    due = table.calibration_due
    overdue = None if due is None else date.fromisoformat(due) < (today or date.today())
    return Lot(**table.model_dump(), calibration_overdue=overdue)


def judge_limits(
    limits: LimitsTable | None,
    study: StudyTable,
    lot: Lot,
    results: StudyResults,
    specimens: Sequence[Specimen],
    groups: Sequence[str],
) -> tuple[ReleaseDecision, ...]:
    """Hold every group against every limit."""
    if limits is None:
        return ()
    rule = Rule(
        kind=limits.rule,
        guard=limits.guard,
        coverage_factor=limits.coverage_factor,
        probability=limits.probability,
    )
    decisions = []
    for group in limits.groups or groups:
        members = [s for s in specimens if s.group == group]
        for limit, estimate in _values(limits, study, results, members):
            decisions.append(
                decide(
                    limit,
                    group=group,
                    value=estimate.mean if estimate else None,
                    u=estimate.u if estimate else None,
                    degrees_of_freedom=estimate.degrees_of_freedom if estimate else None,
                    rule=rule,
                    lot=lot,
                    caution=RELEASE_CAUTION,
                    why_missing="; ".join(estimate.notes) if estimate else "no specimen of the group has it",
                )
            )
    return tuple(decisions)


def _values(
    limits: LimitsTable, study: StudyTable, results: StudyResults, members: Sequence[Specimen]
) -> list[tuple[Limit, Estimate | None]]:
    """Each limit with the group's value, its unit and combined u."""
    found: list[tuple[Limit, Estimate | None]] = []
    for name in LENGTHS:
        table = getattr(limits, name)
        if table is not None:
            found.append((_limit(name, table, "length", "nm"), estimate_group(members, name, level=study.level)))
    if limits.cv is not None:
        limit = _limit(f"CV of {study.quantity}", limits.cv, "ratio", "%", scale=100.0)
        found.append((limit, estimate_cv(members, study.quantity, level=study.level)))
    for name in SPECTRUM_LIMITS:
        table = getattr(limits, name)
        if table is not None:
            limit = _limit(f"{name.replace('_', ' ')} ({table.source})", table, "length", "nm")
            found.append((limit, _estimate_edge(name, table, study, results, members)))
    if limits.colour_difference is not None:
        colour = limits.colour_difference
        name = f"colour difference ({colour.source}, {colour.illuminant}, {colour.observer} degree observer)"
        found.append((Limit(name=name, unit="", high=colour.high), _estimate_colour(colour, study, results, members)))
    return found


def _limit(name: str, table: Any, dimension: str, unit: str, *, scale: float = 1.0) -> Limit:
    low, high = (
        None if text is None else scale * parse_quantity(text, dimension=dimension, name=name).value
        for text in (table.low, table.high)
    )
    return Limit(name=name, unit=unit, low=low, high=high)


def _estimate_edge(
    name: str, table: SpectrumLimit, study: StudyTable, results: StudyResults, members: Sequence[Specimen]
) -> Estimate | None:
    """Mean over specimens of a wavelength of the main band; edges are at half height."""
    side = {"peak": 0.0, "band_short_edge": -0.5, "band_long_edge": 0.5}[name]
    values, own = [], []
    for specimen in members:
        if table.source == "observed":
            peaks = [spectrum.main_peak() for spectrum in observed_spectra(results, specimen)]
        else:
            peaks = [image.main_peak() for image in specimen.images]
        read = [p["wavelength_nm"] + side * p["fwhm_nm"] for p in peaks if p is not None]
        own += [p["u_wavelength_nm"] for p in peaks if p is not None and p["u_wavelength_nm"] is not None]
        if read:
            values.append(math.fsum(read) / len(read))
    if not values:
        return None
    shared = math.sqrt(math.fsum(u * u for u in own) / len(own)) if own else None
    return estimate_mean(values, quantity=name, level=study.level, u_systematic=shared)


def _estimate_colour(
    limit: ColourLimit, study: StudyTable, results: StudyResults, members: Sequence[Specimen]
) -> Estimate | None:
    """Mean over specimens of the CIEDE2000 difference from the target."""
    from layerscan.optics.colour import colour_difference

    wanted = (limit.illuminant, limit.observer)
    values = []
    for specimen in members:
        if limit.source == "observed":
            key = f"{limit.illuminant}/{limit.observer}"
            spectra = observed_spectra(results, specimen)
            labs = [c["lab"] for s in spectra if (c := ((s.document or {}).get("colours") or {}).get(key))]
        else:
            colours = [image.prediction["colour"] for image in specimen.images if image.prediction is not None]
            labs = [c["lab"] for c in colours if (c["illuminant"], c["observer_deg"]) == wanted]
        if labs:
            values.append(math.fsum(float(colour_difference(limit.target, lab)) for lab in labs) / len(labs))
    return estimate_mean(values, quantity="colour_difference", level=study.level) if values else None
