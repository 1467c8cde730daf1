"""What the panel asks of the core for one line or one field: the public functions, their settings, their cost.

No Qt here: the same job gives the same result in a window, in a thread, in a test.
"""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any, TypeVar

from layerscan_napari.budget import DragBudget

if TYPE_CHECKING:
    from layerscan.records import Comparison, FloatArray, Measurement, Micrograph, Prediction, Progress, Spectrum
    from layerscan.settings import CompareSettings, MeasureSettings, PredictSettings

R = TypeVar("R")
MEASURE, PREDICT = "measure", "predict"


@dataclass(frozen=True, kw_only=True, eq=False)
class Job:
    """One line or field of one image and everything chosen for it."""

    micrograph: Micrograph
    measure: MeasureSettings
    predict: PredictSettings | None = None
    compare: CompareSettings | None = None
    observed: Spectrum | None = None
    unedited: Measurement | None = None  # of the same settings without edits, where it is known already
    measured: Measurement | None = None  # of the very same settings, where it is known already


@dataclass(frozen=True, kw_only=True, eq=False)
class Result:
    """What a job gave. ``following`` names the parts that were too slow for a drag and follow on release.

    ``profile`` is the plain mean along the band, (distance along the line in nm, intensity), where the measurement
    itself is among those.
    ``unedited`` is the same measurement without corrections by hand, where there are any. ``notes`` say why a
    prediction or comparison is missing.
    """

    job: Job
    measurement: Measurement | None = None
    unedited: Measurement | None = None
    prediction: Prediction | None = None
    comparison: Comparison | None = None
    following: tuple[str, ...] = ()
    notes: tuple[str, ...] = ()
    final: bool = False
    profile: tuple[FloatArray, FloatArray] | None = None

    @property
    def origin_nm(self) -> float:
        """Depth, in the result without corrections, of the zero of the corrected result.

        Depth 0 is the first boundary, so a correction of that one moves the zero.
        """
        before, after = self.unedited, self.measurement
        if before is None or after is None or before.profile is None or after.profile is None:
            return 0.0
        return float(before.profile.depth_nm[0] - after.profile.depth_nm[0])


def refresh(job: Job, budget: DragBudget) -> Result:
    """The parts of a job that fit into a refresh while dragging; a line on which nothing is found gives a note."""
    import layerscan
    from layerscan.errors import LayerscanError

    parts = (MEASURE,) if job.predict is None else (MEASURE, PREDICT)
    fitting = budget.fitting(parts)
    following = tuple(part for part in parts if part not in fitting)
    result = Result(job=job, following=following)
    if MEASURE not in fitting:
        return replace(result, profile=band_profile(job))
    try:
        measurement = _timed(budget, MEASURE, lambda: layerscan.measure(job.micrograph, settings=job.measure))
        result = replace(result, measurement=measurement)
        if PREDICT in fitting and job.predict is not None and measurement.layers:
            quick = nominal(job.predict)
            prediction = _timed(budget, PREDICT, lambda: layerscan.predict(measurement, settings=quick))
            result = replace(result, prediction=prediction)
    except LayerscanError as error:
        result = replace(result, notes=(str(error),))
    return result


def band_profile(job: Job) -> tuple[FloatArray, FloatArray] | None:
    """Distance along the line in nm and intensity averaged across the band; None where the line misses the image.

    The quick look while a line moves: no shear, no boundaries. It runs the way that depth grows in the measurement.
    """
    import numpy as np
    from layerscan.measurement.line import sample_band
    from layerscan.settings import parse_width

    line, size = job.measure.line, job.micrograph.pixel_size
    if line is None or size is None:
        return None
    ends = [(line[0], line[1]), (line[2], line[3])]
    rise, run = ends[1][0] - ends[0][0], ends[1][1] - ends[0][1]
    if rise < 0 or (rise == 0 and run < 0):
        ends.reverse()
    value, unit = parse_width(job.measure.width or "10")
    width_px = value if unit == "px" else value / min(size.row_nm, size.column_nm)
    band = sample_band(job.micrograph.load(), start=ends[0], stop=ends[1], width_px=width_px)
    known = np.isfinite(band.intensity)
    number = known.sum(axis=1)
    if not number.any():
        return None
    total = np.where(known, band.intensity, 0.0).sum(axis=1, dtype=float)
    mean = np.divide(total, number, out=np.full(len(number), np.nan), where=number > 0)
    step_nm = np.hypot(rise * size.row_nm, run * size.column_nm) / np.hypot(rise, run)
    return np.arange(len(mean)) * step_nm, mean


def complete(job: Job, budget: DragBudget, progress: Progress | None = None) -> Result:
    """Everything of a job: measurement (with and without edits), prediction with its uncertainty, comparison.

    Raises
    ------
    LayerscanError
        The measurement itself is impossible; what hangs on it is missing with a note instead.
    """
    import layerscan
    from layerscan.errors import Interrupted, LayerscanError

    tell: Progress = progress or (lambda what, fraction: None)
    plain = job.measure if not job.measure.edits else job.measure.model_copy(update={"edits": ()})
    alone = job.measure.line is None

    def run(settings: MeasureSettings) -> Measurement:
        return layerscan.measure(job.micrograph, settings=settings, progress=progress)

    unedited = job.unedited
    if unedited is None:
        unedited = run(plain) if alone else _learned(budget, MEASURE, lambda: run(plain))
    tell("measured", None)
    measurement = job.measured or (unedited if plain is job.measure else run(job.measure))
    result = Result(
        job=job, measurement=measurement, unedited=None if measurement is unedited else unedited, final=True
    )
    if job.predict is None or not measurement.layers:
        return result
    try:
        if not alone:
            quick = nominal(job.predict)
            _learned(budget, PREDICT, lambda: layerscan.predict(measurement, settings=quick))
        prediction = layerscan.predict(measurement, settings=job.predict, progress=progress)
        result = replace(result, prediction=prediction)
        tell("predicted", None)
        if job.compare is not None and (job.observed is not None or job.compare.lab is not None):
            observed = None if job.compare.lab is not None else job.observed
            comparison = layerscan.compare(prediction, observed, settings=job.compare, progress=progress)
            result = replace(result, comparison=comparison)
    except Interrupted:
        raise
    except LayerscanError as error:
        result = replace(result, notes=(*result.notes, str(error)))
    return result


def nominal(settings: PredictSettings) -> PredictSettings:
    """The same prediction of the nominal structure alone: no draws, no series."""
    return settings.model_copy(update={"draws": 0, "vary": None})


def _timed(budget: DragBudget, part: str, function: Callable[[], R]) -> R:
    start = time.thread_time()
    result = function()
    budget.record(part, 1e3 * (time.thread_time() - start))
    return result


def _learned(budget: DragBudget, part: str, function: Callable[[], R]) -> R:
    """Run a part and note its cost; where the first run was slow (it loads and compiles), run it once more."""
    known = budget.cost_ms(part) is not None
    result = _timed(budget, part, function)
    if not known and (budget.cost_ms(part) or 0.0) > budget.budget_ms:
        result = _timed(budget, part, function)
    return result


def rounded_line(points: Any) -> tuple[float, float, float, float]:
    """Both ends of a drawn line as (row, column, row, column), to a hundredth of a pixel.

    So short that it can be read and typed, and the typed line is exactly the drawn one.
    """
    (row0, column0), (row1, column1) = ((float(p[-2]), float(p[-1])) for p in (points[0], points[-1]))
    return round(row0, 2), round(column0, 2), round(row1, 2), round(column1, 2)
