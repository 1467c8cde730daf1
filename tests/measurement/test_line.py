from __future__ import annotations

import math

import numpy as np
import pytest
import sections
from measurement.made_profiles import as_micrograph, flat_stack

from layerscan.errors import InputError, MeasurementError
from layerscan.measurement.line import sample_band
from layerscan.measurement.measure import measure_micrograph
from layerscan.records import Measurement
from layerscan.settings import MeasureSettings


def _along(image: np.ndarray, line: tuple[float, float, float, float], width: str = "20", **how: object) -> Measurement:
    return measure_micrograph(as_micrograph(image, **how), MeasureSettings(line=line, width=width))  # type: ignore[arg-type]


@pytest.fixture(scope="module")
def stack() -> np.ndarray:
    return flat_stack()


def test_the_band_pulls_in_nothing_from_outside_the_picture() -> None:
    # a constant picture stays constant in every sample; what lies outside is NaN, never zero
    image = np.full((60, 50), 7.0, dtype=np.float32)
    band = sample_band(image, start=(-10.0, 5.0), stop=(70.0, 48.0), width_px=9)
    seen = np.isfinite(band.intensity)
    assert seen.any()
    assert not seen.all()
    assert np.allclose(band.intensity[seen], 7.0)


def test_a_line_gives_the_same_record_as_the_field(stack: np.ndarray) -> None:
    # same estimators, same record: period 20 px
    line = _along(stack, (5, 120, 315, 120))
    field = measure_micrograph(as_micrograph(stack), MeasureSettings())
    assert line.layered
    assert line.period.mean == pytest.approx(field.period.mean, rel=2e-3)
    assert line.period.mean == pytest.approx(20.0, abs=4 * line.period.u)
    assert line.orientation_deg == pytest.approx(90, abs=0.5)
    assert all(b.trace is not None and len(b.trace.station) == 1 for b in line.boundaries)
    assert [row.quantity for row in line.budget if row.component == "boundary fit"] == [
        "period_nm",
        "dark_nm",
        "bright_nm",
    ]


@pytest.mark.parametrize("tilt", [-25.0, -8.0, 8.0, 25.0])
def test_a_line_at_an_angle_measures_along_the_normal(stack: np.ndarray, tilt: float) -> None:
    # closed form: intervals on the line are longer by 1/cos(tilt); the band sees the layers' direction and takes it out
    reach = 140.0
    r, c = reach * math.cos(math.radians(tilt)), reach * math.sin(math.radians(tilt))
    found = _along(stack, (160 - r, 120 - c, 160 + r, 120 + c), "30")
    assert found.period.mean == pytest.approx(20.0, rel=3e-3)
    assert found.orientation_deg == pytest.approx(90, abs=0.7)


def test_a_narrow_line_says_that_it_cannot_see_the_direction(stack: np.ndarray) -> None:
    # one column shows no direction: the line is taken as the normal, and a flag says so
    found = _along(stack, (5, 120, 315, 120), "1")
    assert "line_taken_as_normal" in found.flags
    assert found.period.mean == pytest.approx(20.0, rel=5e-3)


def test_the_end_from_which_the_line_is_drawn_does_not_matter(stack: np.ndarray) -> None:
    # change that must not matter: depth grows along the stated orientation either way
    there, back = _along(stack, (5, 100, 315, 140)), _along(stack, (315, 140, 5, 100))
    assert [b.depth_nm for b in there.boundaries] == pytest.approx([b.depth_nm for b in back.boundaries], abs=1e-6)
    assert there.layers[0].phase == back.layers[0].phase


def test_a_width_in_nm_is_the_same_width_in_pixels(stack: np.ndarray) -> None:
    # units: 20 px at 2 nm are 40 nm
    pixels = _along(stack, (5, 120, 315, 120), "20", pixel_size_nm=2.0)
    length = _along(stack, (5, 120, 315, 120), "40 nm", pixel_size_nm=2.0)
    assert length.period.mean == pytest.approx(pixels.period.mean, rel=1e-12)


def test_a_line_that_leaves_the_picture_is_measured_inside_it(stack: np.ndarray) -> None:
    # no zeros are pulled in: the period stays right
    found = _along(stack, (-60, 120, 400, 120))
    assert found.period.mean == pytest.approx(20.0, rel=2e-3)
    rows = [float(b.trace.row_px[0]) for b in found.boundaries]
    assert min(rows) >= 0
    assert max(rows) <= 319


def test_boundaries_on_a_line_lie_where_the_truth_has_them() -> None:
    # truth of the generator along one line, noise/contrast 0.1, no roughness; pull of the stated uncertainty
    recipe = sections.Recipe(
        period_px=24.0, orientation_deg=100.0, noise=0.05, cv_dark=0.1, cv_bright=0.1, pixel_size_nm=1.0
    )
    image, truth = sections.render_section(recipe, 8, (400, 300))
    found = _along(image, (30, 150, 370, 120), "24")
    ids, errors, stated = [], [], []
    for boundary in found.boundaries:
        row, column = boundary.trace.row_px, boundary.trace.column_px
        index, _ = truth.nearest_boundary(row, column)
        ids.append(index)
        errors.append(float(truth.boundary_distance(row, column, index)[0]))
        stated.append(boundary.u_nm)
    assert list(np.diff(ids)) == [1] * (len(ids) - 1)
    assert np.sqrt(np.mean(np.square(errors))) < 0.08
    assert 0.6 < np.sqrt(np.mean(np.square(np.array(errors) / stated))) < 1.6


def test_noise_along_a_line_is_no_stack() -> None:
    # honest refusal, at several widths
    image = np.random.default_rng(3).standard_normal((300, 300))
    for width in ("1", "3", "10", "40"):
        found = _along(image, (20, 30, 280, 260), width)
        assert not found.layered
        assert found.period is None
        assert found.detection.statistic is not None


def test_a_line_along_the_layers_finds_none(stack: np.ndarray) -> None:
    # nothing changes along a layer
    assert not _along(stack, (160, 10, 160, 230)).layered


@pytest.mark.parametrize("line", [(400, 10, 500, 10), (10, -90, 300, -5), (-50, -50, -10, 200)])
def test_a_line_outside_the_picture_is_refused(stack: np.ndarray, line: tuple[float, float, float, float]) -> None:
    # bad input
    with pytest.raises(InputError, match="lies outside the image of 320 rows and 240 columns"):
        _along(stack, line)


def test_a_line_of_a_few_samples_is_refused(stack: np.ndarray) -> None:
    # bad input
    with pytest.raises(MeasurementError, match="samples of the line lie in the image"):
        _along(stack, (10, 10, 15, 10))


def test_edits_work_on_a_line_too(stack: np.ndarray) -> None:
    # the same corrections by hand
    plain = _along(stack, (5, 120, 315, 120))
    found = measure_micrograph(
        as_micrograph(stack), MeasureSettings(line=(5, 120, 315, 120), width="20", edits=("move 2 -1 nm",))
    )
    assert found.boundaries[2].depth_nm == pytest.approx(plain.boundaries[2].depth_nm - 1)
    assert "edited_by_hand" in found.flags
