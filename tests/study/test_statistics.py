from __future__ import annotations

import math
from decimal import Decimal
from pathlib import Path

import numpy as np
import pytest
import scipy.stats
from hypothesis import given, settings
from hypothesis import strategies as st

from layerscan.errors import SettingsError
from layerscan.study.statistics import (
    adjust_holm,
    compare_groups,
    estimate_mean,
    find_drift,
    hedges_g,
    welch_test,
)

NIST = Path(scipy.stats.__file__).parent / "tests" / "data" / "nist_anova"


def read_nist(name: str) -> tuple[float, list[str], list[Decimal]]:
    """Certified F, labels and values of a data set of the NIST StRD for ANOVA, which ships with scipy."""
    path = NIST / f"{name}.dat"
    if not path.is_file():
        pytest.skip("this scipy carries no test data: no tests/data/nist_anova")
    lines = path.read_text().splitlines()
    certified = next(line for line in lines[40:47] if line.startswith("Between"))
    rows = [line.split() for line in lines[60:] if line.strip()]
    return float(certified.split()[-1]), [row[0] for row in rows], [Decimal(row[1]) for row in rows]


def log_relative_error(found: float, certified: float) -> float:
    """Number of digits that agree (NIST StRD's own measure)."""
    return 15.0 if found == certified else -math.log10(abs(found - certified) / abs(certified))


@pytest.mark.parametrize(
    ("name", "digits"),
    [
        ("SiRstv", 12),
        ("AtmWtAg", 9.0),
        ("SmLs01", 12),
        ("SmLs02", 12),
        ("SmLs03", 12),
        ("SmLs04", 9.5),
        ("SmLs05", 9.5),
        ("SmLs06", 9.5),
        ("SmLs07", 3.5),
        ("SmLs08", 3.5),
        ("SmLs09", 3.5),
    ],
)
def test_anova_agrees_with_certified_values(name, digits):
    # NIST Statistical Reference Datasets, analysis of variance: certified F. Data of 7 and 13 constant leading digits
    # lose digits when they become binary floats, before any arithmetic: those bounds are what the input still holds.
    certified, groups, values = read_nist(name)
    specimens = [str(i) for i in range(len(values))]
    rows = compare_groups([float(v) for v in values], groups, specimens)
    # two groups (AtmWtAg) are compared by Welch's test; equal sizes make its t squared the F of the ANOVA
    found = rows[0].statistic if rows[0].name == "one-way ANOVA" else rows[0].statistic ** 2
    assert log_relative_error(found, certified) >= digits


@pytest.mark.parametrize("name", ["SmLs07", "SmLs08", "SmLs09"])
def test_anova_keeps_every_digit_once_the_data_are_centred(name):
    # the same data with the constant taken off in decimal: certified F to 9 digits at least
    certified, groups, values = read_nist(name)
    centred = [float(v - Decimal("1000000000000")) for v in values]
    rows = compare_groups(centred, groups, [str(i) for i in range(len(values))])
    assert log_relative_error(rows[0].statistic, certified) >= 9


def test_nested_anova_of_mosquito_wings():
    # R. R. Sokal & F. J. Rohlf, Biometry, nested ANOVA of wing lengths (data from memory): F = 1.7409, p = 0.2295 for
    # cages over females, as in the JHSPH 140.615 notes. With equal numbers it is the ANOVA of the females' means.
    wings = [
        [(58.5, 59.5), (77.8, 80.9), (84.0, 83.6), (70.1, 68.3)],
        [(69.8, 69.8), (56.0, 54.5), (50.7, 49.3), (63.8, 65.8)],
        [(56.6, 57.5), (77.8, 79.2), (69.9, 69.2), (62.1, 64.5)],
    ]
    data = np.array(wings)
    means = data.mean(axis=2)
    # the sums of squares show that the data are the published ones: 665.68, 1720.68, 15.62
    cages = 8 * ((means.mean(axis=1) - data.mean()) ** 2).sum()
    females = 2 * ((means - means.mean(axis=1, keepdims=True)) ** 2).sum()
    within = ((data - means[..., None]) ** 2).sum()
    assert [cages, females, within] == pytest.approx([665.68, 1720.68, 15.62], abs=0.005)
    groups = np.repeat(["1", "2", "3"], 4)
    rows = compare_groups(means.ravel().tolist(), groups.tolist(), [str(i) for i in range(12)])
    assert rows[0].statistic == pytest.approx(1.7409, abs=5e-5)
    assert rows[0].p_value == pytest.approx(0.2295, abs=5e-5)
    assert rows[0].degrees_of_freedom == (2.0, 9.0)


def test_welch_agrees_with_scipy_and_its_interval():
    # scipy.stats.ttest_ind(equal_var=False), another implementation
    a, b = np.array([3.0, 5.1, 4.2, 6.6]), np.array([7.0, 6.1, 9.9])
    row = welch_test(a, b)
    other = scipy.stats.ttest_ind(a, b, equal_var=False)
    interval = other.confidence_interval(0.95)
    assert (row.statistic, row.p_value, row.degrees_of_freedom[0]) == pytest.approx(
        (other.statistic, other.pvalue, other.df), rel=1e-12
    )
    assert (row.low, row.high) == pytest.approx((interval.low, interval.high), rel=1e-10)


def test_hedges_g_and_its_bias_correction():
    # Hedges 1981, eq. 6e: c(m) = Gamma(m/2) / (sqrt(m/2) Gamma((m-1)/2)); c(10) = 0.9228 (table 1, from memory)
    a, b = np.arange(6.0), np.arange(6.0) + 1
    g, low, high = hedges_g(a, b)
    d = -1 / np.std(a, ddof=1)
    assert g / d == pytest.approx(0.9228, abs=1e-4)
    assert low < g < high
    assert hedges_g(b, a) == pytest.approx((-g, -high, -low), rel=1e-9)


@pytest.mark.parametrize("shift", [0.0, 1.5])
def test_the_interval_of_hedges_g_holds_the_true_effect(shift):
    # coverage of the stated 95 % over seeded draws: within three standard errors of 0.95 (binomial, n = 800)
    rng = np.random.default_rng(5)
    held = 0
    for _ in range(800):
        _, low, high = hedges_g(rng.normal(shift, 1, 6), rng.normal(0, 1, 8))
        held += low <= shift <= high
    assert held / 800 == pytest.approx(0.95, abs=3 * math.sqrt(0.95 * 0.05 / 800))


def test_holm_adjusts_as_published():
    # S. Holm 1979, the step-down rule by hand: sorted p times 4, 3, 2, 1, made monotone
    assert adjust_holm([0.01, 0.02, 0.03, 0.5]) == pytest.approx([0.04, 0.06, 0.06, 0.5])
    assert adjust_holm([0.9, 0.9]) == [1.0, 1.0]


def make_three() -> tuple[list[float], list[str], list[str]]:
    # scipy's own documentation example of tukey_hsd
    a = [24.5, 23.5, 26.4, 27.1, 29.9]
    b = [28.4, 34.2, 29.5, 32.2, 30.1]
    c = [26.1, 28.3, 24.3, 26.2, 27.8]
    return a + b + c, ["A"] * 5 + ["B"] * 5 + ["C"] * 5, [str(i) for i in range(15)]


def test_tukey_gives_the_documented_example():
    # scipy.stats.tukey_hsd documentation (drug trial; the same values by other software are quoted there):
    # A - B = -4.600, p = 0.014, interval -8.249 to -0.951; B - C = 4.340, p = 0.020, interval 0.691 to 7.989
    rows = compare_groups(*make_three(), adjust="tukey")
    pairs = {row.compares: row for row in rows if row.name == "Tukey's test"}
    ab, bc = pairs["A", "B"], pairs["B", "C"]
    assert (ab.difference, ab.p_adjusted, ab.low, ab.high) == pytest.approx((-4.6, 0.014, -8.249, -0.951), abs=6e-4)
    assert (bc.difference, bc.p_adjusted, bc.low, bc.high) == pytest.approx((4.34, 0.020, 0.691, 7.989), abs=6e-4)


def test_dunnett_gives_the_published_example():
    # C. W. Dunnett 1955, blood counts, as in the scipy.stats.dunnett documentation: p = 0.62004941, 0.0058899
    control = [7.40, 8.50, 7.20, 8.24, 9.84, 8.32]
    a = [9.76, 8.80, 7.68, 9.36]
    b = [12.80, 9.68, 12.16, 9.20, 10.55]
    values = control + a + b
    groups = ["control"] * 6 + ["A"] * 4 + ["B"] * 5
    rows = compare_groups(values, groups, [str(i) for i in range(15)], adjust="dunnett", reference_group="control")
    pairs = {row.compares: row for row in rows if row.name == "Dunnett's test"}
    assert pairs["A", "control"].p_adjusted == pytest.approx(0.62004941, abs=1e-3)
    assert pairs["B", "control"].p_adjusted == pytest.approx(0.0058899, abs=2e-4)


def test_layers_are_refused_as_specimens():
    # issue: "a refusal to compare groups on layers as if they were specimens"
    with pytest.raises(SettingsError, match="6 values of 4 specimens: values of one specimen are not independent"):
        compare_groups([1, 2, 3, 4, 5, 6], list("AAABBB"), ["1", "1", "2", "3", "4", "4"])


def test_one_specimen_a_group_gives_no_test_and_says_so():
    # issue: "one specimen per group (no test possible: said)"
    rows = compare_groups([1.0, 2.0], ["A", "B"], ["1", "2"])
    assert len(rows) == 1
    assert not rows[0].possible
    assert rows[0].p_value is None
    assert "no test can be made" in rows[0].sentence
    mixed = compare_groups([1.0, 2.0, 3.0, 9.0, 8.0], list("AABCC"), list("12345"))
    assert {row.compares: row.possible for row in mixed} == {("A", "C"): True, ("A", "B"): False, ("B", "C"): False}


def test_groups_without_any_spread_give_no_test():
    # 0/0 is no number
    rows = compare_groups([1.0, 1.0, 2.0, 2.0], list("AABB"), list("1234"))
    assert (rows[0].possible, rows[0].p_value) == (False, None)


def test_an_unknown_reference_group_is_refused():
    # bad input
    with pytest.raises(SettingsError, match="Reference group 'X' has no specimen"):
        compare_groups([1.0, 2.0], ["A", "B"], ["1", "2"], adjust="dunnett", reference_group="X")


def test_equivalence_needs_the_whole_interval_within_the_margin():
    # Schuirmann 1987: both one-sided tests pass exactly where the interval of level 1 - 2 alpha lies within the margin
    rng = np.random.default_rng(3)
    seen = set()
    for _ in range(40):
        values = [*rng.normal(0, 1, 6), *rng.normal(rng.uniform(-1, 1), 1, 6)]
        rows = compare_groups(values, ["A"] * 6 + ["B"] * 6, [str(i) for i in range(12)], equivalence=1.5)
        row = rows[-1]
        inside = row.low > -1.5 and row.high < 1.5
        assert (row.p_value < 0.05) == inside
        assert ("are equivalent" in row.sentence) == inside
        seen.add(inside)
    assert seen == {True, False}
    same = compare_groups([1.0, 2.0, 3.0] * 2, list("AAABBB"), list("123456"), equivalence=5.0)[-1]
    assert (same.difference, same.p_value < 0.05) == (0.0, True)  # no difference at all is no missing number


@settings(deadline=None, derandomize=True, max_examples=40)
@given(
    st.lists(st.floats(-50, 50), min_size=3, max_size=6, unique=True),
    st.lists(st.floats(-50, 50), min_size=3, max_size=6, unique=True),
    st.floats(0.1, 1000),
    st.floats(-1e4, 1e4),
)
def test_scale_shift_and_order_of_groups_matter_as_they_must(a, b, scale, shift):
    # p does not change with units or origin; the difference scales and changes sign with the order
    if min(np.std(a), np.std(b)) < 1e-3:
        return
    row = welch_test(np.array(a), np.array(b))
    other = welch_test(np.array(b) * scale + shift, np.array(a) * scale + shift)
    assert other.p_value == pytest.approx(row.p_value, rel=1e-6, abs=1e-9)
    assert other.difference == pytest.approx(-scale * row.difference, rel=1e-6, abs=1e-6 * scale)


def test_the_mean_of_specimens_combines_sampling_and_common_uncertainty():
    # GUM, JCGM 100:2008, eq. 10 and G.2b: u = sqrt(0.5^2 + 1.2^2) = 1.3; nu = 3 (1.3 / 0.5)^4
    values = [9.0, 10.0, 11.0, 10.0 + 0.0]
    values = [10 - 1.0, 10 + 1.0, 10 - 1.0, 10 + 1.0]
    sampling = np.std(values, ddof=1) / 2
    found = estimate_mean(values, u_systematic=1.2)
    assert found.u_sampling == pytest.approx(sampling)
    assert found.u == pytest.approx(math.hypot(sampling, 1.2))
    assert found.degrees_of_freedom == pytest.approx(3 * (found.u / sampling) ** 4)
    single = estimate_mean([10.0], u_systematic=1.2)
    assert (single.u, single.low) == (None, None)
    assert any("one specimen" in note for note in single.notes)


def test_the_interval_of_the_mean_holds_the_truth():
    # coverage over seeded draws of four specimens: within three standard errors of 0.95 (n = 2000)
    rng = np.random.default_rng(11)
    held = 0
    for _ in range(2000):
        found = estimate_mean(rng.normal(200, 5, 4).tolist())
        held += found.low <= 200 <= found.high
    assert held / 2000 == pytest.approx(0.95, abs=3 * math.sqrt(0.95 * 0.05 / 2000))


def test_drift_agrees_with_a_published_line():
    # NIST StRD linear regression "Norris" is large; here scipy.stats.linregress, another implementation
    x, y = [0.0, 1.0, 2.0, 5.0, 9.0], [10.0, 10.4, 11.5, 12.1, 14.9]
    row = find_drift(x, y, along="web position", position_unit="m")
    other = scipy.stats.linregress(x, y)
    assert (row.slope, row.u_slope, row.p_value) == pytest.approx((other.slope, other.stderr, other.pvalue), rel=1e-10)
    assert "changes along the web position" in row.sentence
    assert find_drift([1, 1, 2], [1.0, 2.0, 3.0]).slope is None


def false_positives(studies: int, seed: int) -> float:
    """Share of simulated studies of two equal groups whose Welch test on specimen means finds p < 0.05."""
    rng = np.random.default_rng(seed)
    found = 0
    for _ in range(studies):
        specimen = rng.normal(200, 5, (2, 5))
        image = specimen[..., None] + rng.normal(0, 3, (2, 5, 3))
        means = (image + rng.normal(0, 15 / math.sqrt(100), (2, 5, 3))).mean(axis=2)  # 100 layers an image
        rows = compare_groups(means.ravel().tolist(), ["A"] * 5 + ["B"] * 5, [str(i) for i in range(10)])
        found += rows[0].p_value < 0.05
    return found / studies


def test_equal_groups_seem_different_about_as_often_as_stated():
    # null simulation (SD: specimen 5, image 3, layer 15; 3 images x 100 layers); small version, wide by its size
    assert 0.02 <= false_positives(500, seed=1) <= 0.08


@pytest.mark.slow
def test_false_positives_lie_between_three_and_seven_per_cent():
    # the bound, over 4,000 simulated studies
    assert 0.03 <= false_positives(4000, seed=2) <= 0.07
