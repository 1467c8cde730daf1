"""What a worker does with one image or spectrum of a study: plain functions that any process can import."""

from __future__ import annotations

import errno
import time
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

from layerscan._version import __version__
from layerscan.errors import LayerscanError
from layerscan.settings import CompareSettings, MeasureSettings, PredictSettings

if TYPE_CHECKING:
    from layerscan.records import Measurement, Micrograph, Prediction, Spectrum, SpectrumKind

Illuminant = Literal["D65", "D50", "A"]
Observer = Literal[2, 10]

MEASUREMENTS_FOLDER = "measurements"
"""Folder of a study's output in which every image has a folder of its own."""

THUMBNAIL_PX = 300
"""Longest side of a thumbnail."""

OVERLAY_POINTS = 600
"""Most points of all lines over one thumbnail together."""


@dataclass(frozen=True, kw_only=True, slots=True)
class Step:
    """One thing to do for a unit. ``key`` is its task key in the ledger."""

    key: str
    kind: str  # measure, predict, compare, spectrum
    settings: MeasureSettings | PredictSettings | CompareSettings | None = None
    path: str | None = None  # of the spectrum
    reference_path: str | None = None  # of the mirror that it was measured against
    input_sha256: str | None = None
    quantity: SpectrumKind | None = None
    column: int | str | None = None
    colours: tuple[tuple[Illuminant, Observer], ...] = ()  # illuminant and observer of each colour wanted


@dataclass(frozen=True, kw_only=True, slots=True)
class Unit:
    """One image or spectrum with what is still to be done for it; sent to a worker."""

    key: str
    kind: str  # image, spectrum
    path: str
    name: str
    sha256: str
    folder: str
    steps: tuple[Step, ...]


@dataclass(frozen=True, kw_only=True, slots=True)
class StepResult:
    """What became of one step. ``by_chance``: trying again may end otherwise."""

    step: Step
    state: str  # done, failed, skipped
    failure: str | None = None
    reason: str | None = None
    by_chance: bool = False
    document: Mapping[str, Any] | None = None
    extras: Mapping[str, Any] | None = None
    picture: bytes | None = None
    layers: tuple[tuple[Any, ...], ...] = ()
    seconds: float = 0.0


@dataclass(frozen=True, kw_only=True, slots=True)
class UnitResult:
    """What became of a unit, sent back by a worker."""

    key: str
    results: tuple[StepResult, ...]
    versions: Mapping[str, str] = field(default_factory=dict)
    disk_full: bool = False


def run_unit(unit: Unit) -> UnitResult:
    """Do every step of a unit; a step that fails leaves the results of the steps before it standing.

    Parameters
    ----------
    unit : Unit
        An image (measure, then predict, then compare with each spectrum of its specimen) or a spectrum.

    Returns
    -------
    UnitResult
        One result a step, in order. It raises nothing but what ends the process.
    """
    chain = _Chain(unit)
    results: list[StepResult] = []
    disk_full = False
    for step in unit.steps:
        start = time.process_time()
        try:
            result = chain.run(step)
        except Exception as error:
            disk_full = disk_full or _is_disk_full(error)
            result = describe_failure(step, error)
        results.append(replace(result, seconds=time.process_time() - start))
    return UnitResult(key=unit.key, results=tuple(results), versions=versions(), disk_full=disk_full)


def describe_failure(step: Step, error: BaseException) -> StepResult:
    """A failed step in words; errors that layerscan raises on purpose would come again, others may be chance."""
    meant = isinstance(error, LayerscanError)
    kind = "memory" if isinstance(error, MemoryError) else "unusable" if meant else "unexpected error"
    text = str(error) if meant else f"{type(error).__name__}: {error}"
    if isinstance(error, MemoryError):
        text = "it needed more memory than [run] memory_mib allows. Raise it, or measure a region of the image."
    return StepResult(
        step=step, state="failed", failure=kind, reason=text[:2000], by_chance=not meant or _is_disk_full(error)
    )


def _is_disk_full(error: BaseException | None) -> bool:
    while error is not None:
        if isinstance(error, OSError) and error.errno in (errno.ENOSPC, errno.EDQUOT):
            return True
        error = error.__cause__
    return False


def versions() -> dict[str, str]:
    """Versions of layerscan and of the libraries that its numbers come from."""
    import platform
    from importlib.metadata import PackageNotFoundError, version

    found = {"layerscan": __version__, "python": platform.python_version()}
    for name in ("numpy", "scipy", "scikit-image", "numba"):
        try:
            found[name] = version(name)
        except PackageNotFoundError:
            continue
    return found


class _Chain:
    """The steps of one unit; a step takes what the one before it made, or reads it from the unit's folder."""

    def __init__(self, unit: Unit) -> None:
        self.unit = unit
        self.folder = Path(unit.folder)
        self.measurement: Measurement | None = None
        self.prediction: Prediction | None = None
        self.stopped: StepResult | None = None  # what keeps the later steps from running

    def run(self, step: Step) -> StepResult:
        if self.stopped is not None:
            before = self.stopped.step.kind
            return StepResult(
                step=step, state="skipped", reason=f"{before}: {self.stopped.reason}", by_chance=self.stopped.by_chance
            )
        do = {"measure": self._measure, "predict": self._predict, "compare": self._compare, "spectrum": self._spectrum}
        try:
            return do[step.kind](step)
        except Exception as error:
            if step.kind in ("measure", "predict"):
                self.stopped = describe_failure(step, error)
            raise

    def _measure(self, step: Step) -> StepResult:
        from layerscan import workflow
        from layerscan.documents import write_measurement
        from layerscan.figures.measurement import draw_measurement
        from layerscan.readers.images import open_image

        settings = step.settings
        assert isinstance(settings, MeasureSettings)
        image = open_image(self.unit.path, pixel_size=settings.pixel_size, page=settings.page)
        if image.sha256 is not None and image.sha256 != self.unit.sha256:
            raise RuntimeError("the file changed while the study was running; run the study again")
        found = workflow.measure(image, settings=settings)
        document = write_measurement(self.folder, found, figure=draw_measurement(found, image))
        self.measurement = found
        picture, extras = draw_thumbnail(image, found)
        result = StepResult(
            step=step, state="done", document=document, extras=extras, picture=picture, layers=_layer_rows(found)
        )
        if not found.layers:
            self.stopped = StepResult(step=step, state="skipped", reason="no layered structure was found")
        return result

    def _predict(self, step: Step) -> StepResult:
        from layerscan import workflow
        from layerscan.documents import write_prediction
        from layerscan.figures.prediction import draw_prediction

        assert isinstance(step.settings, PredictSettings)
        source = self.measurement if self.measurement is not None else self.folder
        light = workflow.predict(source, settings=step.settings)
        document = write_prediction(self.folder / "prediction", light, figure=draw_prediction(light))
        self.prediction = light
        return StepResult(step=step, state="done", document=document)

    def _compare(self, step: Step) -> StepResult:
        from layerscan import workflow
        from layerscan.documents import comparison_document, read_prediction

        assert isinstance(step.settings, CompareSettings)
        if self.prediction is None:
            self.prediction = read_prediction(self.folder / "prediction")
        answer = workflow.compare(self.prediction, self._open(step), settings=step.settings)
        return StepResult(step=step, state="done", document=comparison_document(answer))

    def _spectrum(self, step: Step) -> StepResult:
        from dataclasses import asdict

        from layerscan.optics.colour import colour_of_spectrum
        from layerscan.optics.peaks import find_peaks

        observed = self._open(step)
        grid, value = observed.wavelength_nm, observed.value
        colours: dict[str, Any] = {}
        peaks: tuple[Any, ...] = ()
        if observed.kind != "absorbance":
            peaks = find_peaks(grid, value if observed.kind == "reflectance" else 1 - value)
            for illuminant, observer in step.colours:
                colour = colour_of_spectrum(grid, value, illuminant=illuminant, observer_deg=observer)
                colours[f"{illuminant}/{observer}"] = asdict(colour)
        document = {
            "schema": "layerscan.observed-spectrum/1",
            "kind": observed.kind,
            "wavelength_nm": [float(v) for v in grid],
            "value": [float(v) for v in value],
            "u": None if observed.u is None else [float(v) for v in observed.u],
            "peaks": [asdict(peak) for peak in peaks],  # of a transmittance: its dips
            "colours": colours,
            "doubts": list(observed.doubts),
            "flags": list(observed.flags),
        }
        return StepResult(step=step, state="done", document=document)

    def _open(self, step: Step) -> Spectrum:
        from layerscan.readers.spectra import open_spectrum, relative_to

        path = step.path or self.unit.path
        observed = open_spectrum(path, quantity=step.quantity, column=step.column)
        if observed.sha256 is not None and observed.sha256 != step.input_sha256:
            raise RuntimeError("the spectrum changed while the study was running; run the study again")
        if step.reference_path is None:
            return observed
        return relative_to(observed, open_spectrum(step.reference_path, quantity=observed.kind))


def _layer_rows(found: Measurement) -> tuple[tuple[Any, ...], ...]:
    return tuple(
        (
            layer.index,
            layer.phase,
            float(layer.thickness_nm),
            None if layer.u_nm is None else float(layer.u_nm),
            None if layer.sd_lateral_nm is None else float(layer.sd_lateral_nm),
            int(layer.complete),
            ",".join(layer.flags),
        )
        for layer in found.layers
    )


# --- thumbnails -----------------------------------------------------------------------------------------------------


def draw_thumbnail(image: Micrograph, found: Measurement) -> tuple[bytes, dict[str, Any]]:
    """A small JPEG of the image and what lies over it, in thumbnail pixels.

    Returns
    -------
    bytes, dict
        The JPEG, and ``width_px``, ``height_px``, ``image_px_per_px``, ``pixel_size_nm``, ``lines`` (kind and points
        (row, column)) and ``areas`` (kind, row0, column0, row1, column1, reason).
    """
    import io

    import numpy as np
    from PIL import Image

    from layerscan.figures.style import grey_picture

    grey, block = grey_picture(np.asarray(image.load(), dtype=np.float64), longest_px=THUMBNAIL_PX)
    buffer = io.BytesIO()
    Image.fromarray((grey * 255).astype(np.uint8)).save(buffer, format="JPEG", quality=70, optimize=True)
    size = image.pixel_size
    extras = {
        "width_px": grey.shape[1],
        "height_px": grey.shape[0],
        "image_px_per_px": float(block),
        "pixel_size_nm": None if size is None else size.column_nm * block,
        "lines": _overlay_lines(found, block),
        "areas": _overlay_areas(image, found, block),
    }
    return buffer.getvalue(), extras


_DOUBTFUL = ("not_resolved", "boundary_incomplete", "near_nyquist", "termination")


def _overlay_lines(found: Measurement, block: int) -> list[list[Any]]:
    """Kind and points of each traced boundary, thinned to ``OVERLAY_POINTS`` in all."""
    import numpy as np

    traced = [b for b in found.boundaries if b.trace is not None and len(b.trace.station) > 1]
    lines = []
    for boundary in traced:
        trace = boundary.trace
        assert trace is not None
        count = min(len(trace.station), max(2, OVERLAY_POINTS // len(traced)))
        chosen = np.unique(np.linspace(0, len(trace.station) - 1, count).round().astype(int))
        # a pixel's centre is its integer coordinate; in the thumbnail that is half a pixel further in
        rows, columns = (np.asarray(trace.row_px) + 0.5) / block, (np.asarray(trace.column_px) + 0.5) / block
        doubtful = any(flag in _DOUBTFUL for flag in boundary.flags)
        kind = "edited" if boundary.edited else "doubtful" if doubtful else "boundary"
        lines.append([kind, [[round(float(rows[i]), 1), round(float(columns[i]), 1)] for i in chosen]])
    return lines


def _overlay_areas(image: Micrograph, found: Measurement, block: int) -> list[list[Any]]:
    areas = [("rejected", e.region, e.reason) for e in image.excluded]
    if found.detection.region is not None:
        areas.append(("used", found.detection.region, "measured here"))
    return [[kind, *(round(v / block, 1) for v in region), reason] for kind, region, reason in areas]
