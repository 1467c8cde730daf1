"""What the program does, one function a command: records and settings in, records out. No arithmetic."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

from layerscan import documents
from layerscan._version import __version__
from layerscan.document_files import file_sha256, require_source
from layerscan.document_models import DOCUMENTS
from layerscan.errors import InputError, SettingsError
from layerscan.layer_tables import layer_table, read_layer_table
from layerscan.records import LayerTable, Measurement, Micrograph, Prediction, Spectrum, Verification
from layerscan.settings import CompareSettings, MeasureSettings, PredictSettings, change_settings

if TYPE_CHECKING:
    from layerscan.records import Comparison, Inspection, Progress


def inspect(image: Micrograph | Path | str, *, page: int = 0, pixel_size: str | None = None) -> Inspection:
    """Say what an image file holds: shape, pixel size and where it comes from, doubts.

    Parameters
    ----------
    image : Micrograph, path or str
        A file needs no pixel size to be inspected.
    page, pixel_size
        Page of a file with several images; a pixel size to be held against what the file states.

    Returns
    -------
    Inspection

    Raises
    ------
    InputError
        The file is missing, empty, damaged or no image.
    """
    from layerscan.readers.images import open_image
    from layerscan.readers.inspection import inspect_image

    if not isinstance(image, Micrograph):
        image = open_image(image, page=page, pixel_size=pixel_size, require_pixel_size=False)
    return inspect_image(image)


def measure(
    image: Micrograph | Path | str,
    *,
    settings: MeasureSettings | None = None,
    progress: Progress | None = None,
    **changes: Any,
) -> Measurement:
    """Measure the layers of one image: period, thicknesses, boundaries and the uncertainty budget.

    Parameters
    ----------
    image : Micrograph, path or str
        An opened image, or a file.
    settings, **changes
        A ``MeasureSettings`` record and changes to its fields, such as ``region=(0, 0, 400, 600)``.
    progress : callable, optional
        See ``records.Progress``.

    Returns
    -------
    Measurement
        With ``layered`` False and numbers None where no layered structure was found.

    Raises
    ------
    SettingsError, CalibrationError, InputError
        A setting is wrong; the pixel size is unknown; the image cannot be used.
    """
    from layerscan.measurement.measure import measure_micrograph
    from layerscan.readers.images import open_image

    chosen = change_settings(MeasureSettings, settings, changes)
    if isinstance(image, Micrograph):
        stated = image.pixel_size.stated if image.pixel_size else None
        if chosen.pixel_size not in (None, stated):
            raise SettingsError(
                f"The image was opened with a pixel size ({stated or 'from the file'}) and the settings say "
                f"{chosen.pixel_size}. Give the pixel size to open_image only."
            )
        chosen = change_settings(MeasureSettings, chosen, {"page": image.page, "pixel_size": stated})
    else:
        image = open_image(image, page=chosen.page, pixel_size=chosen.pixel_size)
    return measure_micrograph(image, chosen, progress=progress)


def predict(
    source: Measurement | LayerTable | Path | str,
    *,
    settings: PredictSettings | None = None,
    progress: Progress | None = None,
    **changes: Any,
) -> Prediction:
    """Predict the spectrum and colour of measured or hand-made layers.

    Parameters
    ----------
    source : Measurement, LayerTable, path or str
        A measurement, its ``--out`` folder or ``measurement.json``, or a table of layers.
    settings, **changes
        A ``PredictSettings`` record and changes to its fields, such as ``dark="chitin", bright="air"``.
    progress : callable, optional
        See ``records.Progress``.

    Returns
    -------
    Prediction

    Raises
    ------
    SettingsError, MaterialError, InputError
        A setting is wrong or a phase has no material; a material is unknown; the source has no layers.
    """
    from layerscan.optics.predict import predict_light

    chosen = change_settings(PredictSettings, settings, changes)
    if isinstance(source, Measurement):
        if not source.layers:
            raise InputError("The measurement found no layers, so nothing can be predicted from it.")
        source = layer_table(source)
    elif not isinstance(source, LayerTable):
        source = read_layer_table(source)
    return predict_light(source, chosen, progress=progress)


def compare(
    prediction: Prediction | Path | str,
    observed: Spectrum | Path | str | None = None,
    *,
    settings: CompareSettings | None = None,
    progress: Progress | None = None,
    **changes: Any,
) -> Comparison:
    """Compare a prediction with an observed spectrum or colour: does the imaged structure explain it?

    Parameters
    ----------
    prediction : Prediction, path or str
        A prediction, its ``--out`` folder or ``prediction.json``.
    observed : Spectrum, path or str, optional
        The observed spectrum; None where ``lab`` gives an observed colour instead.
    settings, **changes
        A ``CompareSettings`` record and changes to its fields, such as ``scale="free"``.
    progress : callable, optional
        See ``records.Progress``.

    Returns
    -------
    Comparison

    Raises
    ------
    SettingsError
        Neither or both of a spectrum and a colour were given; the observed quantity is not what was predicted.
    InputError
        A file cannot be read, or the spectra do not overlap.
    """
    from layerscan.comparison.compare import compare_light
    from layerscan.readers.spectra import open_spectrum

    chosen = change_settings(CompareSettings, settings, changes)
    if (observed is None) == (chosen.lab is None):
        raise SettingsError("Give either an observed spectrum or an observed colour (lab), and not both.")
    origin: dict[str, Any] = {}
    if not isinstance(prediction, Prediction):
        path = documents.document_path(prediction, "prediction.json")
        prediction = documents.read_prediction(path)
        origin = {"prediction_source": str(path), "prediction_sha256": file_sha256(path)}
    if observed is not None and not isinstance(observed, Spectrum):
        origin["observed_source"] = str(observed)
        observed = open_spectrum(observed, quantity=chosen.quantity)
    origin["notes"] = () if observed is None else observed.doubts
    return replace(compare_light(prediction, observed, chosen, progress=progress), **origin)


def verify(path: Path | str, *, progress: Progress | None = None) -> Verification:
    """Run a saved document again from its settings and the hashes of its sources: equal, or what changed.

    Parameters
    ----------
    path : path or str
        A measurement, prediction or comparison document.
    progress : callable, optional
        See ``records.Progress``.

    Returns
    -------
    Verification
        Numbers count as equal within 1e-9 relative (other processors round differently).

    Raises
    ------
    InputError
        The document or its source cannot be read, or the document is of a kind that cannot be run again.
    """
    from layerscan.verification import find_changes

    path = Path(path)
    kind = documents.document_kind(path)
    saved = documents.read_document(path, DOCUMENTS[kind]).model_dump(by_alias=True)
    if kind == "measurement":
        found = measure(require_source(saved["image"]["path"], path), progress=progress, **saved["settings"])
        again = documents.measurement_document(found)
        again["image"]["path"] = saved["image"]["path"]
    elif kind == "prediction":
        light = predict(require_source(saved["structure"]["source"], path), progress=progress, **saved["settings"])
        again = documents.prediction_document(light)
        again["structure"]["source"] = saved["structure"]["source"]
    elif kind == "comparison":
        again = _compare_again(saved, path, progress)
    else:
        raise InputError(f"'{path}' is a {kind} document, which holds no result to run again.")
    changes = find_changes(saved, again)
    return Verification(version=__version__, document=str(path), equal=not changes, changes=changes)


def _compare_again(saved: Mapping[str, Any], path: Path, progress: Progress | None) -> dict[str, Any]:
    prediction, observed = saved["prediction"]["path"], saved["observed"]["path"]
    beside = None if observed is None else require_source(observed, path)
    answer = compare(require_source(prediction, path), beside, progress=progress, **saved["settings"])
    return documents.comparison_document(replace(answer, prediction_source=prediction, observed_source=observed or ""))


def run_demo(folder: Path | str, *, progress: Progress | None = None) -> Path:
    """Run the whole chain on the sample images: measure, predict, compare, and write one page to read.

    Parameters
    ----------
    folder : path or str
        Where the documents, figures and ``index.html`` go.
    progress : callable, optional
        See ``records.Progress``.

    Returns
    -------
    Path
        The page.
    """
    from layerscan.demo import run_demo_chain

    return run_demo_chain(Path(folder), progress=progress)
