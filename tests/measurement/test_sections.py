"""The test sections themselves: what the truth says is what the picture shows."""

from __future__ import annotations

import csv
import hashlib
import math
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from negatives import NEGATIVES, make_chatter, make_negative
from sections import KINDS, Recipe, correlated_noise, edge, make_section, render_section

SAMPLES = Path(__file__).resolve().parents[2] / "sample_images"
CLEAN = {"noise": 0.0, "cv_dark": 0.0, "cv_bright": 0.0, "pixel_size_nm": 1.0}


@settings(deadline=None, derandomize=True, max_examples=20)
@given(orientation=st.floats(0, 179.9), radius=st.one_of(st.none(), st.floats(200, 3000)), drift=st.floats(-10, 10))
def test_points_invert_coordinates(orientation, radius, drift):
    # law: the map from picture to (depth, lateral) and its inverse are one another's undoing
    recipe = Recipe(orientation_deg=orientation, radius_px=radius, drift_px=drift, **CLEAN)
    _, truth = render_section(recipe, 1, (96, 128))
    row, column = np.array([3.0, 50.5, 90.0]), np.array([100.0, 7.25, 64.0])
    again = truth.points(*truth.coordinates(row, column))
    np.testing.assert_allclose(again[0], row, atol=1e-6)
    np.testing.assert_allclose(again[1], column, atol=1e-6)


@pytest.mark.parametrize("changes", [{}, {"drift_px": 12.0}, {"radius_px": 300.0}, {"wave_amplitude_px": 4.0}])
def test_half_height_lies_on_the_true_boundary(changes):
    # law: a symmetric edge model has the mean of both levels at the boundary (noise-free, layers of 12 blurs)
    recipe = Recipe(orientation_deg=70.0, period_px=30.0, roughness_px=0.0, **{**CLEAN, **changes})
    image, truth = render_section(recipe, 3, (160, 160))
    from scipy.ndimage import map_coordinates

    index = len(truth.visible_px) // 2
    row, column = truth.trace(index)
    inner = (row > 4) & (row < 155) & (column > 4) & (column < 155)
    value = map_coordinates(image.astype(float), [row[inner], column[inner]], order=3)
    assert inner.sum() > 20
    np.testing.assert_allclose(value, 0.5, atol=0.01)


def test_boundary_distance_is_along_the_local_normal():
    # closed form: on a circle the distance of a point from it is the difference of radii
    recipe = Recipe(radius_px=150.0, centre=(-60.0, 80.0), **CLEAN)
    _, truth = render_section(recipe, 2, (160, 160))
    index = 3
    radius = 150.0 + truth.boundary_depth_px[index].mean()
    row, column = np.array([40.0, 100.0]), np.array([30.0, 120.0])
    expected = np.hypot(row + 60.0, column - 80.0) - radius
    np.testing.assert_allclose(truth.boundary_distance(row, column, index), expected, atol=1e-9)


def test_realised_period_of_a_perfect_lattice_is_the_stated_one():
    # law: without disorder (last - first)/n is the period, at any orientation
    for orientation in (0.0, 33.0, 90.0):
        _, truth = render_section(Recipe(period_px=21.5, orientation_deg=orientation, **CLEAN), 4, (200, 200))
        assert truth.period_px == pytest.approx(21.5, abs=1e-9)
        assert truth.orientation_deg == pytest.approx(orientation, abs=1e-6)


def test_waviness_shortens_the_period_along_the_local_normal():
    # closed form: layers shifted along the depth by w(s) are thinner along their own normal by 1/sqrt(1 + w'^2)
    recipe = Recipe(period_px=20.0, wave_amplitude_px=10.0, wave_length_px=200.0, orientation_deg=90.0, **CLEAN)
    _, truth = render_section(recipe, 5, (300, 300))
    slope = np.gradient(truth.wave_px)
    seen = truth.visible_from[truth.period_ends[0]] & truth.visible_from[truth.period_ends[1]]
    assert truth.period_px == pytest.approx(20.0 * np.mean(1 / np.sqrt(1 + slope[seen] ** 2)), rel=1e-9)
    assert truth.period_px < 19.99


def test_edge_through_blur_and_box_has_the_variance_of_both():
    # closed form: variances of a Gaussian and of a box of width w (w^2/12) add
    x = np.linspace(-30, 30, 6001)
    density = np.gradient(edge(x, 1.5, 7.0), x)
    assert np.trapezoid(density, x) == pytest.approx(1, abs=1e-6)
    assert np.trapezoid(density * x**2, x) == pytest.approx(1.5**2 + 49 / 12, rel=1e-4)
    assert edge(np.array([0.0]), 1.5, 7.0)[0] == pytest.approx(0.5)


def test_interface_noise_has_unit_rms_and_its_correlation_length():
    # definition: rms 1; the autocorrelation has fallen well by one correlation length and is gone at ten
    rng = np.random.default_rng(1)
    rows = np.array([correlated_noise(rng, 4096, 20.0) for _ in range(40)])
    assert np.sqrt(np.mean(rows**2)) == pytest.approx(1, rel=0.05)
    likeness = [float(np.mean(rows * np.roll(rows, lag, axis=1))) for lag in (2, 20, 200)]
    assert likeness[0] > 0.85
    assert 0.15 < likeness[1] < 0.6
    assert abs(likeness[2]) < 0.1


def test_tem_averages_mass_thickness():
    # closed form: a boundary half way through the section transmits the geometric, not the arithmetic mean
    recipe = Recipe(
        period_px=60.0, projection_px=14.0, mass_thickness=True, blur_px=0.51, dark_level=0.2, bright_level=0.8,
        orientation_deg=90.0, **CLEAN,
    )  # fmt: skip
    image, truth = render_section(recipe, 6, (240, 60))
    index = len(truth.visible_px) // 2
    depth = truth.points(truth.boundary_depth_px[index, 50], truth.lateral_px[50])[0]
    value = np.interp(float(depth), np.arange(240), image[:, 30])
    assert value == pytest.approx(math.sqrt(0.2 * 0.8), abs=0.01)


def test_terminations_end_both_boundaries_of_a_layer():
    # law: where a layer has ended its two boundaries coincide and are said not to exist
    recipe = Recipe(terminations=1, orientation_deg=90.0, **CLEAN)
    _, truth = render_section(recipe, 7, (256, 256))
    ended = np.flatnonzero(~truth.exists.all(axis=1))
    assert len(ended) == 2
    assert ended[1] == ended[0] + 1
    gone = ~truth.exists[ended[0]]
    np.testing.assert_allclose(truth.boundary_depth_px[ended[0], gone], truth.boundary_depth_px[ended[1], gone])


@pytest.mark.parametrize("kind", KINDS)
def test_kinds_are_seeded(kind):
    # the same kind and seed give the same picture, another seed another
    first, truth = make_section(kind, 3, (192, 192))
    again, _ = make_section(kind, 3, (192, 192))
    other, _ = make_section(kind, 4, (192, 192))
    np.testing.assert_array_equal(first, again)
    assert first.shape == (192, 192)
    assert first.dtype != other.dtype or not np.array_equal(first, other)
    assert len(truth.layer_phase) == len(truth.boundary_depth_px) - 1
    assert truth.noise > 0


@pytest.mark.parametrize("kind", NEGATIVES)
def test_negatives_are_seeded(kind):
    # the same kind and seed give the same picture
    first = make_negative(kind, 2, (128, 128))
    np.testing.assert_array_equal(first, make_negative(kind, 2, (128, 128)))
    assert np.ptp(first.astype(float)) > 0


def test_chatter_has_the_period_it_states():
    # law: the strongest frequency along the stated direction is one over the stated period
    image, period, angle = make_chatter(3)
    spectrum = np.abs(np.fft.fft2(image - image.mean()))
    i, j = np.unravel_index(np.argmax(spectrum), spectrum.shape)
    frequency = math.hypot(np.fft.fftfreq(512)[i], np.fft.fftfreq(512)[j])
    assert 1 / frequency == pytest.approx(period, rel=0.06)
    direction = math.degrees(math.atan2(np.fft.fftfreq(512)[i], np.fft.fftfreq(512)[j]))
    assert abs((direction - angle + 90) % 180 - 90) < 6


def test_unknown_kinds_are_refused_by_name():
    # bad input: the message names the value and what there is
    with pytest.raises(ValueError, match=r"'medium' is not known.*easy, moderate"):
        make_section("medium", 1)
    with pytest.raises(ValueError, match=r"'wood' is not known.*noise, power_law"):
        make_negative("wood", 1)


# --- the sample images that ship ------------------------------------------------------------------------------------


def _table():
    with (SAMPLES / "table.csv").open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


def test_shipped_samples_match_their_hashes():
    # every file named in the table is there and is the one the table was written for
    rows = _table()
    assert len(rows) == 6
    for row in rows:
        assert "invented" in row["origin"]
        for name in ("image", "spectrum"):
            assert hashlib.sha256((SAMPLES / row[name]).read_bytes()).hexdigest() == row[f"sha256_{name}"], row[name]


def test_script_makes_the_shipped_pixels_again():
    # the seeded script draws what ships; one grey level is allowed for another processor's rounding
    import tifffile
    from make_samples import SAMPLES as SPECIMENS
    from make_samples import draw_sample

    sample = next(one for one in SPECIMENS if one.name == "film_web_left")
    image, truth = draw_sample(sample)
    shipped = tifffile.imread(SAMPLES / "film_web_left.tif")
    assert np.abs(image.astype(int) - shipped.astype(int)).max() <= 1
    assert np.mean(image != shipped) < 1e-3
    row = next(one for one in _table() if one["image"] == "film_web_left.tif")
    assert float(row["known_period_nm"]) == pytest.approx(truth.period_px * truth.pixel_size_nm, abs=0.006)
