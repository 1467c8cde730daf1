"""The whole chain on the invented sample images: measure, predict, compare, and one page to read."""

from __future__ import annotations

import csv
import shutil
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from layerscan import documents, workflow
from layerscan.errors import InputError
from layerscan.figures.comparison import draw_comparison
from layerscan.figures.measurement import draw_measurement
from layerscan.figures.prediction import draw_prediction
from layerscan.readers.images import open_image
from layerscan.readers.spectra import open_spectrum
from layerscan.report.page import Chain, write_page

if TYPE_CHECKING:
    from layerscan.records import Progress, SpectrumKind

TITLE = "Layers and colour of two invented lots"
INTRO = """\
The images and spectra on this page are invented: a program drew them, with noise, blur, waviness and disorder, and \
their true values are known. One lot is a shell plate with nacre-like platelets, whose visible colour comes from \
higher orders. The other is a co-extruded film of two polymers, whose thickness drifts across the web.

Each image was measured without any human input, its spectrum predicted from the measured layers, and the prediction \
compared with the spectrum that was "observed". One spectrum was made from another state of the specimen than the one \
imaged, so that the comparison has something to find."""


@dataclass(frozen=True, kw_only=True)
class Sample:
    """One sample image with what is to be assumed about it; the known values come from the script that drew it."""

    image: str
    spectrum: str
    lot: str
    specimen: str
    what: str
    pixel_size: str
    known_period_nm: float
    dark: str
    bright: str
    incident: str
    substrate: str
    lit_side: str
    quantity: SpectrumKind


def find_samples() -> Path:
    """The folder of the sample images: shipped in the wheel, or beside the package in a checkout.

    Raises
    ------
    InputError
        The installation holds no sample images.
    """
    here = Path(__file__).resolve().parent
    for folder in (here / "sample_images", here.parent / "sample_images"):
        if (folder / "table.csv").is_file():
            return folder
    raise InputError("This installation holds no sample images. Install layerscan again.")


def list_samples(folder: Path) -> tuple[Sample, ...]:
    """What the table beside the sample images says."""
    with open(folder / "table.csv", newline="", encoding="utf-8") as stream:
        rows = list(csv.DictReader(stream))
    return tuple(_read_sample(row) for row in rows)


def _read_sample(row: dict[str, str]) -> Sample:
    values: dict[str, Any] = {name: row[name] for name in Sample.__annotations__}
    return Sample(**{**values, "known_period_nm": float(row["known_period_nm"])})


def run_demo_chain(folder: Path, *, progress: Progress | None = None) -> Path:
    """Measure every sample image, predict, compare, and write documents, figures and ``index.html``.

    Parameters
    ----------
    folder : Path
        Made where it is missing; what the demo wrote there before is replaced.
    progress : callable, optional
        See ``records.Progress``.

    Returns
    -------
    Path
        The page.

    Raises
    ------
    InputError
        There are no sample images, or the folder cannot be written.
    """
    source = find_samples()
    samples = list_samples(source)
    chains = []
    for count, sample in enumerate(samples):
        if progress is not None:
            progress(f"{sample.lot}, {sample.specimen} ({count + 1} of {len(samples)})", count / len(samples))
        chains.append(_run_sample(sample, source, folder))
    page = write_page(folder / "index.html", chains, title=TITLE, intro=INTRO)
    if progress is not None:
        progress("done", 1.0)
    return page


def _run_sample(sample: Sample, source: Path, folder: Path) -> Chain:
    image_path = _copy(source / sample.image, folder / "images")
    spectrum_path = _copy(source / sample.spectrum, folder / "images")
    here = folder / Path(sample.image).stem
    image = open_image(image_path, pixel_size=sample.pixel_size)
    found = workflow.measure(image)
    measured_figure = draw_measurement(found, image)
    documents.write_measurement(here / "measurement", found, figure=measured_figure)
    light = workflow.predict(
        here / "measurement",
        dark=sample.dark,
        bright=sample.bright,
        incident=sample.incident,
        substrate=sample.substrate,
        lit_side=sample.lit_side,
    )
    light_figure = draw_prediction(light)
    documents.write_prediction(here / "prediction", light, figure=light_figure)
    answer = workflow.compare(here / "prediction", spectrum_path, quantity=sample.quantity)
    answer_figure = draw_comparison(answer, light, open_spectrum(spectrum_path, quantity=sample.quantity))
    documents.write_comparison(here / "comparison", answer, figure=answer_figure)
    return Chain(
        name=f"{sample.lot}, {sample.specimen}",
        intro=f"{sample.what} (invented). The drawing program knows the period: {sample.known_period_nm:.1f} nm.",
        measurement=found,
        measurement_svg=measured_figure,
        predictions=((f"dark {sample.dark}, bright {sample.bright}", light, light_figure),),
        comparisons=(("observed spectrum (invented)", answer, answer_figure),),
    )


def _copy(path: Path, folder: Path) -> Path:
    try:
        folder.mkdir(parents=True, exist_ok=True)
        return Path(shutil.copyfile(path, folder / path.name))
    except OSError as error:
        raise InputError(
            f"'{folder}' cannot be written ({error.strerror}). Name another folder: layerscan demo FOLDER."
        ) from error
