from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from layerscan.measurement.field import Frame, fit_frame, frame_to_picture, interpolate, sample_field
from layerscan.measurement.straighten import OrientationMap, straighten


@given(
    angle=st.floats(0, math.pi),
    curvature=st.floats(-0.004, 0.004),
    depth=st.floats(-80, 80),
    station=st.floats(-300, 300),
)
@settings(deadline=None, derandomize=True, max_examples=100)
def test_a_frame_goes_to_the_picture_and_back(angle: float, curvature: float, depth: float, station: float) -> None:
    # law: the two maps are inverse to each other
    frame = Frame(row=120.0, column=80.0, angle_rad=angle, curvature=curvature if abs(curvature) > 1e-6 else 0.0)
    row, column = frame_to_picture(frame, np.array([depth]), np.array([station]))
    back = frame.to_frame(row, column)
    assert back[0][0] == pytest.approx(depth, abs=1e-6)
    assert back[1][0] == pytest.approx(station, abs=1e-6)


def test_depth_grows_along_the_normal_from_column_towards_row() -> None:
    # convention of INTERFACE.md: (cos, sin) = (+column, +row)
    frame = Frame(row=10.0, column=20.0, angle_rad=math.radians(30), curvature=0.0)
    row, column = frame_to_picture(frame, np.array([2.0]), np.array([0.0]))
    assert (row[0], column[0]) == pytest.approx(
        (10 + 2 * math.sin(math.radians(30)), 20 + 2 * math.cos(math.radians(30)))
    )


def test_the_centre_of_concentric_layers_is_found_inside_the_picture() -> None:
    # closed form: normals of circles point to their centre
    rows, columns = np.meshgrid(np.arange(16.0, 500, 32), np.arange(16.0, 500, 32), indexing="ij")
    angle = np.arctan2(rows - 210, columns - 180)
    rng = np.random.default_rng(1)
    frame = fit_frame(
        angle_rad=(angle + 0.05 * rng.standard_normal(angle.shape)).ravel(), weight=np.ones(angle.size),
        row=rows.ravel(), column=columns.ravel(), size=512.0,
    )  # fmt: skip
    centre = frame_to_picture(frame, np.array([1 / frame.curvature]), np.array([0.0]))
    assert (centre[0][0], centre[1][0]) == pytest.approx((210, 180), abs=6)


def test_straight_layers_get_a_straight_frame() -> None:
    # the simpler of two models that fit alike
    rows, columns = np.meshgrid(np.arange(16.0, 500, 32), np.arange(16.0, 500, 32), indexing="ij")
    noise = 0.03 * np.random.default_rng(2).standard_normal(rows.size)
    frame = fit_frame(
        angle_rad=math.radians(70) + noise,
        weight=np.ones(rows.size),
        row=rows.ravel(),
        column=columns.ravel(),
        size=512.0,
    )
    assert frame.curvature == 0.0
    assert math.degrees(frame.angle_rad) == pytest.approx(70, abs=0.5)


def test_interpolation_keeps_cubics_and_pulls_in_nothing_from_outside() -> None:
    # cubic convolution reproduces polynomials up to the second degree (Keys 1981); outside is NaN, never zero
    r, c = np.mgrid[0:20, 0:20].astype(np.float32)
    image = (3 + 0.5 * r - 0.2 * c + 0.1 * r * c + 0.03 * r * r).astype(np.float32)
    for row, column in ((7.3, 5.8), (10.0, 4.25), (9.9, 9.1)):
        expected = 3 + 0.5 * row - 0.2 * column + 0.1 * row * column + 0.03 * row * row
        assert interpolate(image, row, column) == pytest.approx(expected, rel=1e-5)
    assert math.isnan(interpolate(image, -0.6, 5.0))
    assert math.isnan(interpolate(image, 5.0, 19.5))


def test_samples_at_whole_pixels_are_the_pixels_themselves() -> None:
    # change that must not matter: an upright frame at whole pixels interpolates nothing
    image = np.random.default_rng(3).random((40, 30)).astype(np.float32)
    frame = Frame(row=20.0, column=15.0, angle_rad=math.pi / 2, curvature=0.0)
    field = sample_field(image, frame.vector(), -20.0, 1.0, 40, -14.0, 1.0, 1, np.zeros((1, 30)), 0.0, 1.0)
    assert np.array_equal(field, image[:, ::-1])


def test_wavy_layers_become_straight() -> None:
    # the alignment must undo a known wave: what is left of it is its mean, which no alignment can see
    rows, columns = np.mgrid[0:240, 0:300].astype(float)
    wave = 6 * np.sin(2 * np.pi * columns / 260)
    image = np.sin(2 * np.pi * (rows - wave) / 22) + 0.3 * np.random.default_rng(4).standard_normal(rows.shape)
    grid_rows, grid_columns = np.meshgrid(np.arange(16.0, 240, 32), np.arange(16.0, 300, 32), indexing="ij")
    slope = 6 * 2 * np.pi / 260 * np.cos(2 * np.pi * grid_columns / 260)
    angle = np.pi / 2 + np.arctan(slope)
    field = straighten(
        np.ascontiguousarray(image, dtype=np.float32),
        orientation=OrientationMap(
            angle_rad=angle.ravel(), weight=np.ones(angle.size), row=grid_rows.ravel(), column=grid_columns.ravel()
        ),
        period=22.0, region=(0, 0, 240, 300),
    )  # fmt: skip
    stations = np.arange(20, field.intensity.shape[1] - 20)
    row, column = field.to_picture(np.full(len(stations), 120.0), stations)
    followed = row - 6 * np.sin(2 * np.pi * column / 260)
    assert np.std(followed) < 0.3
