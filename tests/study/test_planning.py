from __future__ import annotations

import math

import numpy as np
import pytest
import scipy.stats

from layerscan.errors import SettingsError
from layerscan.study.planning import half_width, plan_interval, plan_power, power_of_t, variance_of_mean

SPREAD = {"sd_specimen_nm": 5.0, "sd_image_nm": 3.0, "sd_layer_nm": 15.0}


def test_variance_of_a_mean_over_three_stages():
    # W. G. Cochran 1977, section 10.8; and by simulation of 20,000 means (standard error of a variance: 1 %)
    stated = variance_of_mean(**SPREAD, specimens=4, images=3, layers=10)
    assert stated == pytest.approx(25 / 4 + 9 / 12 + 225 / 120)
    rng = np.random.default_rng(1)
    specimen = rng.normal(0, 5, (20_000, 4, 1, 1))
    image = rng.normal(0, 3, (20_000, 4, 3, 1))
    means = (specimen + image + rng.normal(0, 15, (20_000, 4, 3, 10))).mean(axis=(1, 2, 3))
    assert means.var() == pytest.approx(stated, rel=0.04)


def test_power_of_the_t_test_agrees_with_published_numbers():
    # J. Cohen 1988, table 2.4.1 (from memory, as widely quoted): d = 0.5, two-sided 5 %, power 0.80 needs 64 a group
    assert power_of_t(0.5, 1.0, 64) == pytest.approx(0.80, abs=0.005)
    assert power_of_t(0.5, 1.0, 63) < 0.80 <= power_of_t(0.5, 1.0, 64) + 0.002
    # d = 0.8: 26 a group
    assert power_of_t(0.8, 1.0, 25) < 0.80 <= power_of_t(0.8, 1.0, 26)
    # statsmodels, another implementation
    power = pytest.importorskip("statsmodels.stats.power")
    assert power_of_t(1.2, 1.0, 9) == pytest.approx(power.TTestIndPower().power(1.2, 9, 0.05), rel=1e-9)


def test_power_without_a_difference_is_the_level():
    # law: under no difference the test rejects as often as its level says
    assert power_of_t(0.0, 1.0, 7) == pytest.approx(0.05, abs=1e-12)
    assert power_of_t(100.0, 1.0, 7) == 1.0
    assert power_of_t(1.0, 1.0, 1) == 0.0


def test_the_planned_number_is_the_smallest_that_reaches_what_is_wanted():
    # half width t sqrt(v / n), scipy's own interval of a mean for comparison
    row = plan_interval(4.0, **SPREAD, images=3, layers=10)
    one = variance_of_mean(**SPREAD, specimens=1, images=3, layers=10)
    n = row.specimens_per_group
    assert half_width(one, n) <= 4.0 < half_width(one, n - 1)
    low, high = scipy.stats.t.interval(0.95, n - 1, scale=math.sqrt(one / n))
    assert row.reached == pytest.approx((high - low) / 2)
    plan = plan_power(8.0, 0.9, **SPREAD, images=3, layers=10)
    found = plan.specimens_per_group
    assert power_of_t(8.0, one, found) >= 0.9 > power_of_t(8.0, one, found - 1)
    assert f"{found} specimens a group" in plan.sentence


def test_what_cannot_be_reached_or_wanted_is_said():
    # bad input, and a wish beyond reason
    assert plan_interval(0.01, **SPREAD, images=1, layers=1).specimens_per_group is None
    with pytest.raises(SettingsError, match="half width of 0"):
        plan_interval(0, **SPREAD, images=1, layers=1)
    with pytest.raises(SettingsError, match="difference of -1"):
        plan_power(-1, 0.8, **SPREAD, images=1, layers=1)
