import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import settings as hypothesis_settings
from hypothesis import strategies as st

from layerscan.errors import SettingsError
from layerscan.uncertainty import (
    LENGTH_NM,
    combine,
    effective_degrees_of_freedom,
    expand,
    parse_pixel_size,
    parse_quantity,
    resample,
)


@pytest.mark.parametrize(
    ("text", "value", "u"),
    [
        ("2.5 nm", 2.5, None),
        ("2.5 +- 0.05 nm", 2.5, 0.05),
        ("2.5 ± 0.05 nm", 2.5, 0.05),
        ("25 angstrom", 2.5, None),
        ("0.0025 um", 2.5, None),
        ("2500pm", 2.5, None),
        ("2.5e-9 m", 2.5, None),
    ],
)
def test_reads_lengths_as_typed(text, value, u):
    # SI prefixes: BIPM, The International System of Units, 9th edition, table 7; 1 angstrom = 0.1 nm, table 8 (8th ed.)
    q = parse_quantity(text, dimension="length")
    assert q.value == pytest.approx(value, rel=1e-12)
    assert (q.u is None) if u is None else q.u == pytest.approx(u)
    assert q.unit == "nm"


def test_limits_have_the_standard_uncertainty_of_their_distribution():
    # JCGM 100:2008, 4.3.7: half-width / sqrt(3); 4.3.9: symmetric triangle, half-width / sqrt(6)
    assert parse_quantity("10 [8, 12] deg", dimension="angle").u == pytest.approx(2 / math.sqrt(3))
    assert parse_quantity("10 [8, 10, 12] deg", dimension="angle").u == pytest.approx(2 / math.sqrt(6))


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("2.5", "no unit"),
        ("2.5 furlong", "the unit 'furlong'"),
        ("nan nm", "not finite"),
        ("inf nm", "not finite"),
        ("abc", "no quantity"),
        ("2 +- -1 nm", "negative"),
        ("2 [3, 4] nm", "do not enclose"),
        ("2 [1, x] nm", "not numbers"),
        ("2 [1, 2, 3, 4] nm", "do not enclose"),
        ("", "no quantity"),
    ],
)
def test_says_what_is_wrong_with_a_quantity(text, words):
    with pytest.raises(SettingsError, match=words):
        parse_quantity(text, dimension="length")


@pytest.mark.parametrize("text", ["0 nm", "-2 nm", "2 m", "1e-9 nm"])
def test_refuses_pixel_sizes_that_no_micrograph_has(text):
    with pytest.raises(SettingsError, match="Pixel size"):
        parse_pixel_size(text)


def test_reads_a_pixel_size_for_each_axis():
    row, column = parse_pixel_size("2 +- 0.1 angstrom, 1 nm")
    assert (row.value, column.value) == pytest.approx((0.2, 1.0))
    assert row.u == pytest.approx(0.01)
    assert column.u is None


@hypothesis_settings(deadline=None, derandomize=True)
@given(st.floats(1e-3, 1e6), st.sampled_from(sorted(LENGTH_NM)), st.floats(0, 1e3))
def test_a_unit_only_scales(value, unit, u):
    q = parse_quantity(f"{value!r} +- {u!r} {unit}", dimension="length")
    assert q.value == pytest.approx(value * LENGTH_NM[unit], rel=1e-12)
    assert q.u == pytest.approx(u * LENGTH_NM[unit], rel=1e-12)


def test_combines_and_expands_as_the_guide_says():
    # JCGM 100:2008, table G.2: t_95(10) = 2.23, t_95(infinity) = 1.960; G.4: Welch-Satterthwaite
    assert combine(3.0, None, 4.0) == 5.0
    assert combine(None, None) is None
    assert expand(1.0, degrees_of_freedom=10) == pytest.approx(2.23, abs=0.005)
    assert expand(1.0) == pytest.approx(1.960, abs=0.0005)
    # JCGM 100:2008, H.1.6 (values from memory): end gauge, u 25, 9.7, 2.9, 16.6 nm with 18, 25.6, 50, 2 degrees of
    # freedom give 16.7 (16.76 with the digits printed there)
    assert effective_degrees_of_freedom([25.0, 9.7, 2.9, 16.6], [18, 25.6, 50, 2]) == pytest.approx(16.7, abs=0.1)
    assert effective_degrees_of_freedom([1.0, 1.0], [None, None]) is None


@pytest.mark.parametrize("text", ["10 +- 0.5 deg", "10 [9, 12] deg", "10 [9, 9.5, 12] deg", "10 deg"])
def test_draws_have_the_stated_spread(text):
    # JCGM 101:2008, 6.4: what is drawn has the standard deviation that was stated
    q = parse_quantity(text, dimension="angle")
    draws = resample(q, draws=200_000, rng=np.random.default_rng(1))
    assert draws.std() == pytest.approx(q.u or 0.0, rel=0.01, abs=1e-12)
    if q.low is not None:
        assert q.low <= draws.min()
        assert draws.max() <= q.high
