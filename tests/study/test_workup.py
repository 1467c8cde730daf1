from __future__ import annotations

import math
from dataclasses import asdict

import numpy as np
import pytest

from layerscan.records import FLAGS
from layerscan.report.cautions import CAUTIONS
from layerscan.study import analysis
from layerscan.study.ledger import TaskRecord, UnitRow
from layerscan.study.light import mean_peak
from layerscan.study.notebook import Study
from layerscan.study.results import ImageResult, LayerValue, SpectrumResult, StudyResults
from layerscan.study.tables import PlanTables
from layerscan.study.workup import summarise


def make_layers(thickness: list[float], *, cut: bool = True) -> tuple[LayerValue, ...]:
    phases = ("dark", "bright")
    last = len(thickness) - 1
    return tuple(
        LayerValue(
            number=i,
            phase=phases[i % 2],
            thickness_nm=t,
            u_nm=1.0,
            sd_lateral_nm=None,
            complete=not (cut and i in (0, last)),
            flags=(),
        )
        for i, t in enumerate(thickness)
    )


def make_image(group: str, specimen: str, section: int, period: float, **more) -> ImageResult:
    """An invented image whose dark and bright layers are half the period each."""
    key = f"{group}_{specimen}_{section}"
    layers = more.pop("layers", make_layers([period / 2] * 8))
    peak = {
        "order": 1,
        "wavelength_nm": 2.5 * period,
        "u_wavelength_nm": 4.0,
        "reflectance": 0.8,
        "fwhm_nm": 40.0,
    }
    document = {
        "schema": "layerscan.measurement/1",
        "layered": True,
        "periodic": True,
        "structure": "lamellae",
        "flags": ["tilt_uncorrected", *more.pop("flags", [])],
        "period_nm": {"mean": period, "u": 2.0, "sd": 0.04 * period, "n": 3},
        "dark_nm": {"mean": period / 2, "u": 1.0, "sd": 2.0, "n": 3},
        "bright_nm": None,
        "middle_nm": None,
        "spacing_nm": {"value": period, "u": 3.0, "method": "x"},
        "orientation_deg": 90.0,
        "image": {"pixel_size_nm": [2.0, 2.0], "u_pixel_size_relative": 0.01, "pixel_size_source": "tag"},
        "budget": [
            {
                "quantity": "period_nm",
                "component": "pixel size",
                "kind": "B",
                "distribution": "normal",
                "relative": 0.01,
            },
            {"quantity": "period_nm", "component": "boundary fit", "kind": "A", "distribution": "t", "relative": 0.002},
        ],
    }
    prediction = {
        "settings": {"angle": 0.0, "polarisation": "unpolarised", "draws": 10, "dark": "chitin"},
        "wavelength_nm": [400.0, 500.0, 600.0],
        "reflectance": [0.1, 0.8, 0.2],
        "transmittance": [0.9, 0.2, 0.8],
        "lower": None,
        "upper": None,
        "peaks": [peak],
        "colour": COLOUR,
        "materials": [
            {"name": "chitin", "source": "a paper", "doi": None, "status": "published", "range_nm": [400, 700]}
        ],
        "flags": [],
    }
    state = more.pop("state", "done")
    task = TaskRecord(
        key="m" + key,
        kind="measure",
        unit=key,
        state="done",
        settings=more.pop("settings", {}),
        versions={"layerscan": "1"},
        document=document,
        seconds=0.5,
    )
    light = TaskRecord(
        key="p" + key, kind="predict", unit=key, state="done", settings={}, versions={}, document=prediction
    )
    more_compare = more.pop("compare", {})
    row = {
        "path": f"{key}.tif",
        "group": group,
        "specimen": specimen,
        "section": str(section),
        "position": more.pop("position", None),
        "exclude": "torn" if state == "excluded" else None,
        "overrides": {},
    }
    assert not more
    return ImageResult(
        unit=UnitRow(key=key, kind="image", row=row),
        state=state,
        reason=row["exclude"],
        task=task,
        predict=light,
        compare=more_compare,
        layers=layers,
    )


def make_spectrum(group: str, specimen: str, peak_nm: float) -> SpectrumResult:
    peak = {"order": None, "wavelength_nm": peak_nm, "u_wavelength_nm": 3.0, "reflectance": 0.6, "fwhm_nm": 50.0}
    document = {
        "kind": "reflectance",
        "wavelength_nm": [400.0, 500.0, 600.0],
        "value": [0.1, 0.6, None],
        "u": None,
        "peaks": [peak],
        "colours": {"D65/10": {**COLOUR, "observer_deg": 10}, "D65/2": COLOUR},
        "flags": [],
    }
    row = {"path": f"{specimen}.csv", "group": group, "specimen": specimen, "spot": "1", "reference": "mirror"}
    task = TaskRecord(
        key="s" + specimen, kind="spectrum", unit=specimen, state="done", settings={}, versions={}, document=document
    )
    return SpectrumResult(unit=UnitRow(key=specimen, kind="spectrum", row=row), state="done", reason=None, task=task)


def make_comparison(predicted_nm: float, observed_nm: float) -> TaskRecord:
    """A comparison that matched this observed peak, although a taller one of another order was seen too."""
    peak = {"order": None, "wavelength_nm": observed_nm, "u_wavelength_nm": 3.0, "reflectance": 0.6, "fwhm_nm": 50.0}
    document = {
        "peak_difference_nm": predicted_nm - observed_nm,
        "u_peak_difference_nm": 5.0,
        "delta_e00": None,
        "observed_peaks": [peak, {**peak, "wavelength_nm": 700.0, "reflectance": 0.9}],
        "agreement": {"conclusion": "explains"},
        "sentence": "x",
        "reasons": [],
        "flags": [],
    }
    return TaskRecord(
        key=f"c{predicted_nm}", kind="compare", unit="u", state="done", settings={}, versions={}, document=document
    )


COLOUR = {
    "xyz": [20.0, 21.0, 22.0],
    "xy": [0.3, 0.3],
    "lab": [50.0, 3.0, 4.0],
    "srgb": "#777777",
    "in_gamut": True,
    "dominant_wavelength_nm": None,
    "excitation_purity": None,
    "delta_e00_95": None,
    "illuminant": "D65",
    "observer_deg": 2,
    "flags": [],
}


def make_results(images, spectra=(), *, problems=(), **tables) -> StudyResults:
    plan = PlanTables.model_validate({"images": [], **tables})
    facts = {
        "tables": plan.model_dump(mode="json"),
        "plan_name": "STUDY.toml",
        "plan_sha256": "0" * 64,
        "settings": {"measure": {}, "predict": {}, "compare": {}},
        "settings_sha256": "1" * 64,
        "problems": [list(p) for p in problems],
        "started": "2024-05-01T10:00:00+00:00",
        "finished": "2024-05-01T11:00:00+00:00",
    }
    return StudyResults(facts=facts, images=tuple(images), spectra=tuple(spectra))


PERIODS = {
    "A": {"a1": (200, 202), "a2": (204, 206), "a3": (196, 198)},
    "B": {"b1": (214, 216), "b2": (218, 220), "b3": (210, 215)},
}


def two_lots(**more) -> list[ImageResult]:
    return [
        make_image(group, specimen, i, float(period), **more)
        for group, specimens in PERIODS.items()
        for specimen, periods in specimens.items()
        for i, period in enumerate(periods)
    ]


def test_group_means_are_means_over_specimens_with_the_common_part_added_once():
    # GUM: specimens' means 201, 205, 197: mean 201, s = 4, u = sqrt((4 / sqrt 3)^2 + (0.01 * 201)^2)
    summary = summarise(make_results(two_lots()))
    row = next(r for r in summary.table if (r.group, r.quantity) == ("A", "period_nm"))
    assert (row.mean_nm, row.n_specimens, row.n_images, row.n_layers) == (pytest.approx(201), 3, 6, 18)
    assert row.u_nm == pytest.approx(math.hypot(4 / math.sqrt(3), 2.01))
    assert row.expanded_nm == pytest.approx(2 * row.u_nm)
    assert row.cv_percent == pytest.approx(4.0)


def test_the_difference_between_groups_leaves_the_common_calibration_out():
    # a common factor cancels: the test is Welch's on the specimens' means (scipy as another implementation)
    import scipy.stats

    summary = summarise(make_results(two_lots(), study={"question": "Same?", "equivalence": "30 nm"}))
    main = summary.tests[0]
    other = scipy.stats.ttest_ind([201, 205, 197], [215, 219, 212.5], equal_var=False)
    assert (main.statistic, main.p_value) == pytest.approx((other.statistic, other.pvalue), rel=1e-10)
    assert "A and B differ" in summary.answer
    assert "are equivalent within 30 nm" in summary.answer
    assert summary.question == "Same?"


def test_one_specimen_a_group_gives_a_mean_without_uncertainty_and_no_test():
    # issue: "one specimen per group (no test possible: said)"
    images = [make_image("A", "a", 0, 200.0), make_image("A", "a", 1, 202.0), make_image("B", "b", 0, 210.0)]
    summary = summarise(make_results(images))
    assert "no uncertainty of the mean can be stated" in summary.answer
    assert "no test can be made" in summary.answer
    assert [row.u_nm for row in summary.table if row.quantity == "period_nm"] == [None, None]
    assert all(not test.possible for test in summary.tests)


def test_excluded_and_edited_images_are_shown_with_and_without():
    # issue: "Results with and without exclusions and hand edits"
    images = two_lots()
    images.append(make_image("A", "a1", 9, 230.0, state="excluded"))
    images[0] = make_image("A", "a1", 0, 190.0, settings={"edits": ["delete 3"]})
    summary = summarise(make_results(images))
    rows = {(row.what, row.group): row.estimate.mean for row in summary.sensitivity}
    a = np.array([[190, 202], [204, 206], [196, 198]], dtype=float).mean(axis=1)
    assert rows["as planned", "A"] == pytest.approx(a.mean())
    assert rows["with the excluded images", "A"] == pytest.approx(np.mean([np.mean([190, 202, 230]), a[1], a[2]]))
    assert rows["without images edited by hand", "A"] == pytest.approx(np.mean([202, a[1], a[2]]))
    assert rows["with the excluded images", "B"] == rows["as planned", "B"]
    assert summary.methods.exclusions == ("A_a1_9.tif: torn",)
    assert summary.methods.hand_edits == 1
    assert summarise(make_results(two_lots())).sensitivity == ()


def test_images_without_layers_or_not_yet_measured_are_said():
    # an unfinished study says so first
    empty = make_image("A", "a1", 7, 200.0)
    empty.task.document["layered"] = False
    missing = ImageResult(
        unit=UnitRow(key="x", kind="image", row={"path": "x.tif", "group": "A", "specimen": "a4"}),
        state="missing",
        reason=None,
        task=None,
        predict=None,
        compare={},
    )
    summary = summarise(make_results([*two_lots(), empty, missing]))
    assert not summary.finished
    assert summary.counts == {"done": 13, "failed": 0, "excluded": 0, "missing": 1}
    assert any("unfinished: 1 image not measured" in text for text in summary.answer_limits)
    assert any("1 image showed no layered structure" in text for text in summary.answer_limits)
    nothing = summarise(make_results([missing]))
    assert "there is nothing to answer with" in nothing.answer


def test_periods_are_whole_and_do_not_overlap():
    # dark-bright pairs between complete layers; a cut layer begins anew
    layers = make_layers([50, 60, 40, 61, 41, 62, 42, 30])
    assert analysis.layer_values(layers, "period") == [60 + 40, 61 + 41, 62 + 42]
    assert analysis.layer_values(layers, "dark") == [40, 41, 42]
    broken = (*layers[:3], LayerValue(**{**asdict(layers[3]), "complete": False}), *layers[4:])
    assert analysis.layer_values(broken, "period") == [60 + 40, 41 + 62]


def test_the_budget_adds_up_to_the_uncertainty_of_the_mean():
    # GUM: the shares of independent components add up to one
    summary = summarise(make_results(two_lots()))
    assert math.fsum(row.share for row in summary.budget) == pytest.approx(1.0)
    us = [row.u_nm for row in summary.table if row.quantity == "period_nm"]
    total = math.sqrt(math.fsum(row.u_nm**2 for row in summary.budget))
    assert total == pytest.approx(math.sqrt(np.mean(np.square(us))), rel=2e-3)
    assert summary.limited_by == summary.budget[0].component
    assert "specimens" in summary.next_measurement
    assert {row.component for row in summary.budget if row.kind == "B"} == {"pixel size"}


def test_predicted_and_observed_peaks_meet_specimen_by_specimen():
    # issue: "Predicted against observed peak per specimen: the 1:1 line"
    spectra, images = [], []
    for group, specimens in PERIODS.items():
        for specimen, periods in specimens.items():
            observed = 2.5 * sum(periods) / 2 + 1
            spectra.append(make_spectrum(group, specimen, observed))
            for i, period in enumerate(periods):
                compare = {specimen: make_comparison(2.5 * period, observed)}
                images.append(make_image(group, specimen, i, float(period), compare=compare))
    summary = summarise(make_results(images, spectra, predict={"dark": "chitin", "bright": "air"}))
    assert [p.specimen for p in summary.peaks] == ["a1", "a2", "a3", "b1", "b2", "b3"]
    assert summary.peaks[0].predicted_nm == pytest.approx(502.5)
    assert summary.peaks[0].u_predicted_nm == pytest.approx(math.hypot(2.5, 4.0))
    assert (summary.line.slope, summary.line.offset_nm) == pytest.approx((1.0, 1.0), abs=1e-6)
    assert "compatible with the 1:1 line" in summary.answer
    assert len(summary.light) == 6
    assert {row.conclusion for row in summary.specimens} == {"explains"}
    assert {row.observed_colour.observer_deg for row in summary.specimens} == {2}  # as the predicted one
    assert {pair.observed_colour.observer_deg for pair in summary.light} == {2}
    assert math.isnan(summary.light[0].observed[2])
    assert [m.name for m in summary.methods.materials] == ["chitin"]


def test_a_mean_peak_keeps_the_uncertainty_that_its_parts_share():
    # four equal peaks of u = 4 share their calibration: averaging must not make it 2
    peaks = [{"wavelength_nm": 500.0, "u_wavelength_nm": 4.0, "order": 1}] * 4
    assert mean_peak(peaks).u_nm == pytest.approx(4.0)
    assert mean_peak([]) is None


def test_drift_along_the_web_is_found_in_each_group():
    # positions 0, 10, 20 m and a slope of 0.5 nm per m
    images = [make_image("A", f"s{p}", 0, 200 + 0.5 * p, position=f"{p} m") for p in (0, 10, 20, 30)]
    study = {"position": "web position", "position_unit": "m"}
    row = summarise(make_results(images, study=study)).drift[0]
    assert row.slope == pytest.approx(0.5)
    assert "changes along the web position: +0.5 nm per m" in row.sentence


def test_limits_become_decisions_with_lot_and_caution():
    # issue: release of a lot; a colour limit is judged on the stated observer
    limits = {
        "period": {"low": "180 nm", "high": "210 nm"},
        "cv": {"high": "10 %"},
        "band_long_edge": {"high": "560 nm"},
        "colour_difference": {"target": [50.0, 3.0, 4.0], "high": 2.0},
    }
    spectra = [make_spectrum(g, s, 505.0) for g, members in PERIODS.items() for s in members]
    lot = {"lot": "L1", "calibration_due": "2024-04-30"}
    results = make_results(two_lots(), spectra, limits=limits, lot=lot)
    decisions = {(d.group, d.name): d for d in summarise(results).decisions}
    period = decisions["A", "period"]
    assert (period.low, period.high, period.unit) == (180.0, 210.0, "nm")
    assert period.value == pytest.approx(201)
    assert period.decision == "undecided"  # the calibration was overdue on the day of the run
    assert period.lot.lot == "L1"
    assert "not an accredited measurement" in period.caution
    assert decisions["B", "period"].value == pytest.approx(215.5)
    assert decisions["A", "CV of period"].value == pytest.approx(4.0)
    edge = decisions["A", "band long edge (observed)"]
    assert edge.value == pytest.approx(505 + 25)
    colour = decisions["A", "colour difference (observed, D65, 10 degree observer)"]
    assert colour.value == pytest.approx(0.0, abs=1e-9)
    again = summarise(make_results(two_lots(), spectra, limits=limits)).decisions
    assert {d.name: d.decision for d in again if d.group == "A"}["CV of period"] == "pass"


def test_wanted_intervals_and_power_are_planned_from_the_spread_found():
    # issue: "How many specimens, images, layers for a wanted interval or power"
    rng = np.random.default_rng(6)
    images = [
        make_image("A", f"s{s}", i, 200.0, layers=make_layers((100 + d + rng.normal(0, 3, 12)).tolist()))
        for s, d in enumerate(rng.normal(0, 4, 5))
        for i in range(3)
    ]
    study = {"wanted_half_width": "3 nm", "wanted_difference": "10 nm", "wanted_power": 0.9}
    summary = summarise(make_results(images, study=study))
    assert [row.images_per_specimen for row in summary.planning] == [3, 6, 3, 3, 6, 3]
    assert [row.layers_per_image for row in summary.planning] == [10, 10, 20, 10, 10, 20]
    assert all(row.specimens_per_group >= 2 for row in summary.planning)
    assert [c.level for c in summary.variance[0].components] == ["specimen", "image", "layer"]


def test_what_was_not_stated_is_none_and_every_flag_is_defined():
    # "printed as 'not stated' where blank"
    tables = {"preparation": {"fixation": "2 % glutaraldehyde"}, "imaging": {"calibration_date": "2024-01-02"}}
    summary = summarise(make_results(two_lots(flags=["few_layers"]), **tables))
    preparation = dict(next(t for t in summary.facts if t.title == "Preparation").rows)
    assert preparation["fixation"] == "2 % glutaraldehyde"
    assert preparation["embedding"] is None
    assert set(summary.flags) == {"few_layers", "tilt_uncorrected"}
    assert set(summary.flags) <= set(FLAGS)
    assert summary.cautions == CAUTIONS


def test_a_notebook_gets_long_tables():
    # issue: "the same study from a notebook gives pandas tables in long form"
    study = Study(results=make_results(two_lots(), [make_spectrum("A", "a1", 500.0)]))
    assert len(study.images) == 12
    assert study.images["period_nm"].dtype == "Float64"
    assert len(study.layers) == 12 * 8
    assert study.layers.groupby("image")["complete"].sum().eq(6).all()
    specimens = study.specimens
    assert set(specimens["quantity"]) == {"period_nm", "dark_nm", "spacing_nm"}
    first = specimens[(specimens["specimen"] == "a1") & (specimens["quantity"] == "period_nm")].iloc[0]
    assert (first["mean_nm"], first["n_images"]) == (201.0, 2)
    assert first["u_nm"] == pytest.approx(math.hypot(1.0, 2.01))
    assert study.spectra["peak_nm"].tolist() == [500.0]
    assert study.images["bright_nm"].isna().all()
    assert study.summarise().counts["done"] == 12
