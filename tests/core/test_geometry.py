import math

import numpy as np
import pytest

from layerscan.errors import SettingsError
from layerscan.geometry import correct_lengths


def test_nothing_stated_changes_nothing():
    factor = correct_lengths()
    assert (factor.factor, factor.u_relative, factor.parts) == (1.0, 0.0, ())


@pytest.mark.parametrize(
    ("words", "expected"),
    [
        ({"obliquity": "30 deg"}, math.cos(math.pi / 6)),  # p = p_apparent cos(tau)
        ({"compression": "20 %"}, 1 / 0.8),
        ({"shrinkage": "0.1 1"}, 1 / 0.9),
        ({"stage_tilt": "52 deg"}, 1 / math.cos(math.radians(52))),  # foreshortened by cos T = 0.616
        ({"stage_tilt": "wall 52 deg"}, 1 / 0.788),  # sin 52 degrees = 0.788
    ],
)
def test_each_correction_is_its_closed_form(words, expected):
    assert correct_lengths(**words).factor == pytest.approx(expected, rel=1e-3)


def test_compression_at_an_angle_is_the_linear_map_of_the_wave_vector():
    # a linear map A of the section takes a wave vector k to A^-T k; compared with the matrix itself
    c, psi = 0.12, math.radians(35)
    cut = np.array([math.cos(psi), math.sin(psi)])  # the layer normal is (1, 0)
    a = np.eye(2) - c * np.outer(cut, cut)
    stretch = 1 / np.linalg.norm(np.linalg.inv(a).T @ np.array([1.0, 0.0]))
    assert correct_lengths(compression="12 %", normal_to_cut_deg=35).factor == pytest.approx(1 / stretch, rel=1e-12)


def test_a_tilt_along_the_layers_changes_nothing():
    assert correct_lengths(stage_tilt="40 deg", normal_to_tilt_axis_deg=0).factor == pytest.approx(1.0)


def test_obliquity_near_zero_is_one_sided():
    # cos(tau) of tau = 0 +- 5 degrees: mean 1 - sigma^2/2, never above 1 (JCGM 101:2008: why Monte Carlo)
    factor = correct_lengths(obliquity="0 +- 5 deg")
    assert factor.factor == pytest.approx(1 - math.radians(5) ** 2 / 2, abs=2e-4)
    assert factor.u_relative == pytest.approx(math.radians(5) ** 2 / math.sqrt(2), rel=0.05)


def test_uncertainties_of_independent_parts_add_in_quadrature():
    # JCGM 100:2008, eq. 12: a product's relative uncertainties, small enough for first order
    both = correct_lengths(compression="5 +- 1 %", shrinkage="3 +- 1 %")
    assert both.u_relative == pytest.approx(math.hypot(0.01 / 0.95, 0.01 / 0.97), rel=0.03)


@pytest.mark.parametrize(
    ("words", "match"),
    [
        ({"obliquity": "90 deg"}, "Obliquity"),
        ({"obliquity": "-1 deg"}, "Obliquity"),
        ({"compression": "96 %"}, "Compression"),
        ({"shrinkage": "-2 %"}, "Shrinkage"),
        ({"stage_tilt": "wall 0 deg"}, "no wall"),
        ({"obliquity": "12 nm"}, "the unit 'nm'"),
    ],
)
def test_refuses_impossible_geometry(words, match):
    with pytest.raises(SettingsError, match=match):
        correct_lengths(**words)
