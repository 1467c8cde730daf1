from __future__ import annotations

from datetime import date

import numpy as np
import pytest

from layerscan.report.cautions import RELEASE_CAUTION
from layerscan.report.summary import Lot
from layerscan.study.judging import make_lot
from layerscan.study.release import Limit, Rule, conformance_probability, coverage_factor, decide
from layerscan.study.tables import LotTable

BAND = Limit(name="period", unit="nm", low=190.0, high=210.0)


def judge(value, u, *, limit=BAND, rule=None, lot=None, why="", nu=None):
    return decide(
        limit,
        group="A",
        value=value,
        u=u,
        degrees_of_freedom=nu,
        rule=rule or Rule(),
        lot=lot or Lot(),
        caution=RELEASE_CAUTION,
        why_missing=why,
    )


def test_conformance_probabilities_of_jcgm_106():
    # JCGM 106:2012, 7.3 examples (from memory): breakdown voltage -5.47 V, u = 0.05 V, limit -5.40 V: 0.92;
    # burst pressure 509.7 kPa, u = 8.6 kPa, lower limit 490 kPa: 0.99
    zener = Limit(name="voltage", unit="V", high=-5.40)
    burst = Limit(name="pressure", unit="kPa", low=490.0)
    assert conformance_probability(-5.47, 0.05, zener) == pytest.approx(0.92, abs=0.005)
    assert conformance_probability(509.7, 8.6, burst) == pytest.approx(0.99, abs=0.005)


def test_conformance_probability_is_the_share_of_draws_within_the_limits():
    # definition, by drawing from the stated distribution (standard error 0.0011)
    draws = np.random.default_rng(1).normal(207, 4, 200_000)
    inside = ((draws >= 190) & (draws <= 210)).mean()
    assert conformance_probability(207.0, 4.0, BAND) == pytest.approx(inside, abs=0.004)


@pytest.mark.parametrize(
    ("value", "expected"),
    [(200, "pass"), (206, "pass"), (206.1, "undecided"), (210, "undecided"), (213.9, "undecided"), (214.1, "fail"),
     (194, "pass"), (193.9, "undecided"), (185.9, "fail")],
)  # fmt: skip
def test_guard_bands_of_one_expanded_uncertainty(value, expected):
    # JCGM 106:2012, 8.3: U = 2 * 2 nm = 4 nm narrows the limits to 194 and 206 for passing, widens them for failing
    found = judge(value, 2.0)
    assert found.decision == expected
    assert (found.guard_band, found.accept_low, found.accept_high) == (4.0, 194.0, 206.0)


def test_a_passed_value_rarely_does_not_conform():
    # the reason for the guard band: at the acceptance limit the risk is Phi(-2) = 2.3 % (one-sided, k = 2)
    assert 1 - judge(206.0, 2.0).probability_conforming == pytest.approx(0.02275, abs=1e-5)


@pytest.mark.parametrize(("value", "expected"), [(200, "pass"), (206.7, "pass"), (206.8, "undecided"), (213.3, "fail")])
def test_the_probability_rule(value, expected):
    # Phi((210 - value) / 2) = 0.95 at value = 206.71
    assert judge(value, 2.0, rule=Rule(kind="probability", probability=0.95)).decision == expected


def test_few_specimens_widen_the_guard_band_by_students_t():
    # JCGM 100:2008, table G.2: t for 95.45 % is 4.53 at 2 and 2.87 at 4 degrees of freedom
    assert coverage_factor(2.0, 2) == pytest.approx(4.53, abs=0.005)
    assert coverage_factor(2.0, 4) == pytest.approx(2.87, abs=0.005)
    found = judge(200.0, 2.0, nu=2)
    assert found.guard_band == pytest.approx(2 * 4.53, abs=0.01)
    assert (found.decision, judge(200.0, 3.0, nu=2).decision) == ("pass", "undecided")
    assert judge(200.0, 3.0, nu=2).probability_conforming < judge(200.0, 3.0).probability_conforming


def test_simple_acceptance_looks_at_the_value_alone():
    # JCGM 106:2012, 8.2: shared risk
    assert judge(210.0, 50.0, rule=Rule(kind="simple")).decision == "pass"
    assert judge(210.1, None, rule=Rule(kind="simple")).decision == "fail"


def test_without_a_value_or_its_uncertainty_nothing_is_decided():
    # no number where no honest number exists
    assert judge(None, None, why="no image").reason == "There is no value: no image."
    found = judge(200.0, None, why="one specimen")
    assert (found.decision, found.guard_band, found.accept_low) == ("undecided", None, None)
    assert "one specimen" in found.reason


def test_a_measurement_too_uncertain_for_its_limits_passes_nothing():
    # guard bands that meet leave no acceptance interval
    found = judge(200.0, 6.0)
    assert found.decision == "undecided"
    assert "leave nothing between the limits" in found.reason
    assert judge(260.0, 6.0).decision == "fail"


def test_one_sided_limits():
    # a colour difference has an upper limit only
    limit = Limit(name="difference", unit="", high=3.0)
    assert [judge(v, 0.5, limit=limit).decision for v in (1.9, 2.5, 3.9, 4.1)] == [
        "pass",
        "undecided",
        "undecided",
        "fail",
    ]


def test_an_overdue_calibration_passes_nothing_and_the_record_carries_the_lot():
    # issue: "calibration due date carried into the record"; an overdue one cannot stand behind a pass
    table = LotTable(lot="7", roll="R2", operator="N.N.", calibration_due="2024-05-01")
    late = make_lot(table, today=date(2024, 5, 2))
    found = judge(200.0, 1.0, lot=late)
    assert found.decision == "undecided"
    assert "calibration was due on 2024-05-01" in found.reason
    assert (found.lot.lot, found.lot.roll, found.lot.operator) == ("7", "R2", "N.N.")
    in_time = make_lot(table, today=date(2024, 5, 1))
    assert judge(200.0, 1.0, lot=in_time).decision == "pass"
    assert judge(250.0, 1.0, lot=late).decision == "fail"


def test_the_caution_stands_beside_every_decision():
    # issue: "With the caution of the README beside every decision"
    assert "not an accredited measurement" in judge(200.0, 1.0).caution
