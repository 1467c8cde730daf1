from __future__ import annotations

import math

import numpy as np
import pytest

from layerscan.errors import MeasurementError
from layerscan.study.lines import compare_with_identity, fit_line

# K. Pearson 1901 with the weights of D. York 1966
X = [0.0, 0.9, 1.8, 2.6, 3.3, 4.4, 5.2, 6.1, 6.5, 7.4]
WX = [1000, 1000, 500, 800, 200, 80, 60, 20, 1.8, 1]
Y = [5.9, 5.4, 4.4, 4.6, 3.5, 3.7, 2.8, 2.8, 2.4, 1.5]
WY = [1, 1.8, 4, 8, 20, 20, 70, 70, 100, 500]


def test_pearsons_data_with_yorks_weights():
    # slope and intercept as other software gives them to 14 digits (test of a Julia package after York et al. 2004):
    # a = 5.47991022403286, b = -0.48053340744620; their u, multiplied by sqrt(S / 8) = 1.217905640539398, are
    # 0.359246522551112 and 0.070620269528771
    line = fit_line(X, Y, u_x=1 / np.sqrt(WX), u_y=1 / np.sqrt(WY))
    assert (line.intercept, line.slope) == pytest.approx((5.47991022403286, -0.48053340744620), rel=1e-12)
    widen = math.sqrt(line.chi_square / 8)
    assert widen == pytest.approx(1.217905640539398, rel=1e-9)
    assert line.u_intercept * widen == pytest.approx(0.359246522551112, rel=1e-9)
    assert line.u_slope * widen == pytest.approx(0.070620269528771, rel=1e-9)


def test_the_axes_may_be_exchanged():
    # a line with errors in both axes has no preferred axis: y(x) and x(y) are one line
    u_x, u_y = 1 / np.sqrt(WX), 1 / np.sqrt(WY)
    one, other = fit_line(X, Y, u_x=u_x, u_y=u_y), fit_line(Y, X, u_x=u_y, u_y=u_x)
    assert other.slope == pytest.approx(1 / one.slope, rel=1e-9)
    assert other.intercept == pytest.approx(-one.intercept / one.slope, rel=1e-9)
    assert other.chi_square == pytest.approx(one.chi_square, rel=1e-9)


def test_errors_in_one_axis_give_weighted_least_squares():
    # closed form: numpy.polyfit with weights 1/u
    u_y = 1 / np.sqrt(WY)
    line = fit_line(X, Y, u_x=np.zeros(10), u_y=u_y)
    coefficients, covariance = np.polyfit(X, Y, 1, w=1 / u_y, cov="unscaled")
    assert (line.slope, line.intercept) == pytest.approx(tuple(coefficients), rel=1e-9)
    assert (line.u_slope, line.u_intercept) == pytest.approx(tuple(np.sqrt(np.diag(covariance))), rel=1e-9)
    assert line.covariance == pytest.approx(covariance[0, 1], rel=1e-9)


@pytest.mark.parametrize(
    ("x", "y", "u", "message"),
    [
        ([1, 2], [1, 2], [1, 1], "needs three points; 2 came"),
        ([1, 1, 1], [1, 2, 3], [1, 1, 1], "the same predicted peak"),
        ([1, 2, 3], [1, 2, 3], [0, 1, 1], "no uncertainty in either axis"),
    ],
)
def test_points_that_hold_no_line_are_refused(x, y, u, message):
    # bad input
    with pytest.raises(MeasurementError, match=message):
        fit_line(x, y, u_x=u, u_y=u)


def test_one_to_one_holds_as_often_as_stated_and_its_failure_is_found():
    # coverage: the test of slope 1 and intercept 0 at 5 % over seeded true 1:1 data, within three standard errors
    rng = np.random.default_rng(9)
    truth = np.linspace(450, 620, 8)
    rejected = held = 0
    for _ in range(400):
        found = compare_with_identity(
            truth + rng.normal(0, 6, 8),
            truth + rng.normal(0, 4, 8),
            u_predicted=[6.0] * 8,
            u_observed=[4.0] * 8,
        )
        rejected += found.p_one_to_one < 0.05
        held += found.slope_interval[0] <= 1 <= found.slope_interval[1]
    # points that scatter more than stated are widened (Birge), so the test is on the careful side
    assert rejected / 400 <= 0.05 + 3 * math.sqrt(0.05 * 0.95 / 400)
    assert held / 400 >= 0.95 - 3 * math.sqrt(0.05 * 0.95 / 400)
    shifted = compare_with_identity(truth, truth + 30, u_predicted=[6.0] * 8, u_observed=[4.0] * 8)
    assert shifted.p_one_to_one < 1e-6
    assert shifted.offset_nm == pytest.approx(30)
    assert "differs from the 1:1 line" in shifted.sentence


def test_unstated_uncertainties_give_demings_line_and_say_so():
    # Deming's line with ratio 1 is the principal axis: closed form from the covariance matrix
    x, y = np.array(X), np.array(Y)
    found = compare_with_identity(X, Y, u_predicted=[None] * 10, u_observed=[1.0] * 10)
    sxx, syy, sxy = x.var(), y.var(), np.mean((x - x.mean()) * (y - y.mean()))
    slope = (syy - sxx + math.sqrt((syy - sxx) ** 2 + 4 * sxy**2)) / (2 * sxy)
    assert found.slope == pytest.approx(slope, rel=1e-9)
    assert found.p_value is None
    assert "not stated for every point" in found.sentence
    two = compare_with_identity([1, 2], [1, 2], u_predicted=[1, 1], u_observed=[1, 1])
    assert two.slope is None
    assert "a line needs three" in two.sentence
