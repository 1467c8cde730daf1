"""Direction of the layer normal: global at its bound, local along curved layers."""

from __future__ import annotations

import dataclasses
import math

import numpy as np
import pytest
from sections import Recipe, render_section

from layerscan.measurement.detection import detect_layers
from layerscan.measurement.orientation import analyse_tiles, refine_orientation, smooth_map, trace_grid
from layerscan.measurement.pyramid import build_pyramid


def _bound_deg(recipe, seed, shape, noise):
    """sigma / sqrt(sum (f' s)^2): Cramer-Rao bound of the direction with the profile f known."""
    clean, _ = render_section(dataclasses.replace(recipe, noise=0.0), seed, shape)
    a = math.radians(recipe.orientation_deg)
    y, x = np.mgrid[: shape[0], : shape[1]]
    y, x = y - (shape[0] - 1) / 2, x - (shape[1] - 1) / 2
    slope_y, slope_x = np.gradient(clean.astype(float))
    turn = (slope_x * math.cos(a) + slope_y * math.sin(a)) * (-x * math.sin(a) + y * math.cos(a))
    return math.degrees(noise / math.sqrt(float(np.sum(turn**2))))


@pytest.mark.parametrize("noise", [0.05, 0.4])
def test_global_direction_is_near_its_bound(noise):
    # Cramer-Rao bound, computed from the noise-free picture; the aim is 2 times, u must cover
    errors, pulls = [], []
    for seed in range(16):
        angle = float(np.random.default_rng(seed).uniform(0, 180))
        recipe = Recipe(period_px=20.0, cv_dark=0.05, cv_bright=0.05, orientation_deg=angle, noise=noise)
        image, _ = render_section(recipe, seed, (224, 224))
        found = detect_layers(image)
        error = (found.orientation_deg - angle + 90) % 180 - 90
        errors.append(error / _bound_deg(recipe, seed, (224, 224), noise))
        pulls.append(error / found.u_orientation_deg)
    assert np.sqrt(np.mean(np.square(errors))) < 2
    assert np.sqrt(np.mean(np.square(pulls))) < 1.5


def test_refinement_converges_from_a_start_that_is_off():
    # law: the fit does not depend on where it starts within its valley
    recipe = Recipe(period_px=24.0, orientation_deg=40.0, noise=0.1)
    image, _ = render_section(recipe, 1, (200, 200))
    use = np.ones(image.shape, dtype=bool)
    fits = [refine_orientation(image, use, angle_deg=40.0 + off) for off in (-1.5, 0.0, 1.5)]
    assert all(fit.converged for fit in fits)
    angles = [fit.angle_deg for fit in fits]
    assert np.ptp(angles) < 0.5 * fits[0].u_deg
    assert fits[0].noise == pytest.approx(0.1, rel=0.03)


def test_waviness_is_told_from_noise():
    # law: flat layers leave the straight line by no more than noise, wavy ones by their own rms
    flat = Recipe(period_px=24.0, orientation_deg=90.0, noise=0.2)
    wavy = dataclasses.replace(flat, wave_amplitude_px=2.0, wave_length_px=200.0)
    use = np.ones((256, 256), dtype=bool)
    first = refine_orientation(render_section(flat, 2, (256, 256))[0], use, angle_deg=90.0)
    image, truth = render_section(wavy, 2, (256, 256))
    second = refine_orientation(image, use, angle_deg=90.0)
    assert first.wave_px < 3 * first.u_wave_px
    seen = truth.visible_from[truth.period_ends[0]]
    place = truth.lateral_px[seen]
    own = truth.wave_px[seen] - np.polyval(np.polyfit(place, truth.wave_px[seen], 1), place)
    assert second.wave_px == pytest.approx(own.std(), rel=0.3)


def test_local_direction_follows_concentric_layers():
    # closed form: on circles the normal points to the centre
    recipe = Recipe(radius_px=400.0, centre=(-150.0, 256.0), period_px=18.0, noise=0.1)
    image, _ = render_section(recipe, 3, (512, 512))
    found = detect_layers(image)
    row, column = np.meshgrid(found.map_row_px, found.map_column_px, indexing="ij")
    expected = np.degrees(np.arctan2(row + 150.0, column - 256.0))
    off = np.abs((found.orientation_map_deg - expected + 90) % 180 - 90)
    assert np.median(off) < 1.0
    assert np.quantile(off, 0.95) < 4.0


def test_streamlines_stay_on_a_layer():
    # law: the depth does not change along a path that follows the layers
    recipe = Recipe(radius_px=500.0, centre=(-300.0, 200.0), period_px=12.0, noise=0.05, cv_dark=0.0, cv_bright=0.0)
    image, truth = render_section(recipe, 4, (320, 400))
    level = build_pyramid(image)[0]
    tiles = analyse_tiles(level)
    grid = trace_grid(smooth_map(tiles, np.log(np.maximum(tiles.contrast, 1))), image.shape, seed=(160.0, 200.0))
    middle = grid.origin[0]
    inside = (
        (grid.row[middle] >= 20) & (grid.row[middle] < 300) & (grid.column[middle] >= 20) & (grid.column[middle] < 380)
    )
    depth, _ = truth.coordinates(grid.row[middle, inside], grid.column[middle, inside])
    assert inside.sum() > 50
    assert np.ptp(depth) < 3.0
    along, _ = truth.coordinates(grid.row[:, grid.origin[1]], grid.column[:, grid.origin[1]])
    assert np.all(np.diff(along) > 0.9)


def test_tiles_of_noise_hold_no_strong_line():
    # law: white noise puts as much on every direction; the strongest of some hundred bins stays below the limit
    level = build_pyramid(np.random.default_rng(5).normal(size=(512, 512)))[0]
    assert np.median(analyse_tiles(level).contrast) < 5
