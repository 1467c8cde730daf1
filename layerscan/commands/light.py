"""``predict``, ``compare`` and ``materials``."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from layerscan import documents, workflow
from layerscan._version import __version__
from layerscan.commands.options import (
    chosen,
    clear_progress,
    output_options,
    print_document,
    print_notes,
    progress,
    settings_options,
    with_u,
)
from layerscan.document_files import dump_json, write_file
from layerscan.settings import CompareSettings, PredictSettings, change_settings

if TYPE_CHECKING:
    from collections.abc import Iterator

    from layerscan.records import Colour, Comparison, Prediction


@click.command()
@click.argument("source", metavar="MEASUREMENT|LAYERS.csv", type=click.Path())
@settings_options(PredictSettings)
@output_options
def predict(source: str, out: str | None, as_json: bool, **words: Any) -> None:
    """Predict spectrum and colour from layers and materials."""
    show = progress()
    settings = change_settings(PredictSettings, None, chosen(PredictSettings, words))
    light = workflow.predict(source, settings=settings, progress=show)
    clear_progress()
    if out is None:
        document = documents.prediction_document(light)
    else:
        from layerscan.figures.prediction import draw_prediction

        document = documents.write_prediction(out, light, figure=draw_prediction(light))
        if light.series is not None:
            from layerscan.figures.series import draw_series

            write_file(Path(out) / "series.svg", draw_series(light))
    print_document(document, as_json=as_json, lines=_prediction_lines(light))
    print_notes(light.flags, *light.notes)


def _prediction_lines(light: Prediction) -> Iterator[str]:
    structure = light.structure
    yield f"{structure.source}: {structure.layers} layers ({structure.layers_seen} seen)"
    for peak in light.peaks:
        order = "?" if peak.order is None else peak.order
        yield (
            f"  peak, order {order:<4}  {with_u(peak.wavelength_nm, peak.u_wavelength_nm)}, "
            f"reflectance {peak.reflectance:.3f}, width {peak.fwhm_nm:.0f} nm"
        )
    if not light.peaks:
        yield "  no peak can be read at half height in the range"
    yield f"  colour            {_colour(light.colour)}"
    if light.swapped is not None:
        peaks = ", ".join(f"{peak.wavelength_nm:.0f} nm" for peak in light.swapped.peaks) or "none"
        yield f"  if dark were {light.swapped.dark} and bright {light.swapped.bright}: peaks {peaks}"
    if light.series is not None:
        for point in light.series.points:
            best = max(point.peaks, key=lambda peak: peak.reflectance, default=None)
            at = "no peak" if best is None else f"peak {best.wavelength_nm:.1f} nm, {best.reflectance:.3f}"
            unit = "" if light.series.unit == "1" else f" {light.series.unit}"
            yield f"  {light.series.name} {point.value:g}{unit}: {at}, {point.colour.srgb}"


def _colour(colour: Colour) -> str:
    lab = ", ".join(f"{x:.1f}" for x in colour.lab)
    wave = colour.dominant_wavelength_nm
    tail = "" if wave is None else f", {'dominant' if wave > 0 else 'complementary'} wavelength {abs(wave):.0f} nm"
    return f"{colour.srgb} (L*, a*, b* {lab}; {colour.illuminant}, {colour.observer_deg} degrees){tail}"


@click.command()
@click.argument("prediction", type=click.Path())
@click.argument("observed", type=click.Path(), required=False)
@settings_options(CompareSettings)
@output_options
def compare(prediction: str, observed: str | None, out: str | None, as_json: bool, **words: Any) -> None:
    """Say whether the imaged structure explains the OBSERVED spectrum (or --lab colour)."""
    from layerscan.readers.spectra import open_spectrum

    show = progress()
    settings = change_settings(CompareSettings, None, chosen(CompareSettings, words))
    answer = workflow.compare(prediction, observed, settings=settings, progress=show)
    clear_progress()
    if out is None:
        document = documents.comparison_document(answer)
    else:
        from layerscan.figures.comparison import draw_comparison

        spectrum = None if observed is None else open_spectrum(observed, quantity=settings.quantity)
        light = documents.read_prediction(prediction)
        document = documents.write_comparison(out, answer, figure=draw_comparison(answer, light, spectrum))
    print_document(document, as_json=as_json, lines=_comparison_lines(answer))
    print_notes(answer.flags, *answer.notes)


def _comparison_lines(answer: Comparison) -> Iterator[str]:
    yield answer.sentence
    yield f"  conclusion        {answer.agreement.conclusion.replace('_', ' ')}"
    if answer.peak_difference_nm is not None:
        difference = with_u(answer.peak_difference_nm, answer.u_peak_difference_nm)
        yield f"  peak difference   {difference} (predicted - observed)"
    if answer.agreement.passing_peak_range_nm is not None:
        low, high = answer.agreement.passing_peak_range_nm
        yield f"  would also pass   peaks from {low:.0f} to {high:.0f} nm"
    if answer.rms is not None:
        yield f"  RMS               {answer.rms:.4f}"
    if answer.delta_e00 is not None:
        yield f"  colour difference {answer.delta_e00:.2f} (CIEDE2000)"
    yield from _reason_lines(answer)


def _reason_lines(answer: Comparison) -> Iterator[str]:
    alike: dict[frozenset[str], None] = {}
    for reason in answer.reasons:
        changes = ", ".join(f"{p} {v:.4g}" for p, v in zip(reason.parameters, reason.values, strict=True))
        yield f"  would explain it  {changes} ({'; '.join(reason.prior)})"
        if reason.indistinguishable_from:
            alike[frozenset((", ".join(reason.parameters), *reason.indistinguishable_from))] = None
    for names in alike:
        yield f"  not told apart    {'; '.join(sorted(names))}"


@click.command()
@click.argument("name", required=False)
@click.option("--materials-folder", type=click.Path(), help="folder with further materials in the catalogue's form")
@output_options
def materials(name: str | None, materials_folder: str | None, out: str | None, as_json: bool) -> None:
    """List the materials of the catalogue, or show one: index, source, valid range."""
    from layerscan.optics.materials import find_medium, list_media

    progress()
    media = list_media(folder=materials_folder) if name is None else (find_medium(name, folder=materials_folder),)
    document = documents.materials_document(media, version=__version__)
    if out is not None:
        from layerscan.figures.materials import draw_medium

        for medium in media:
            write_file(Path(out) / f"{medium.name.replace('/', '_')}.svg", draw_medium(medium))
        write_file(Path(out) / "materials.json", dump_json(document))
    lines = _medium_lines(document["media"][0]) if name is not None else _list_lines(document["media"])
    print_document(document, as_json=as_json, lines=lines)


def _index_text(medium: dict[str, Any]) -> str:
    values = []
    for axis, value in zip(medium["axes"], medium["index_589"], strict=True):
        if value is None:
            values.append(f"{axis} outside its range")
        else:
            k = f" + {value[1]:.3g}i" if value[1] else ""
            values.append(f"{axis} {value[0]:.4f}{k}")
    return ", ".join(values)


def _range_text(medium: dict[str, Any]) -> str:
    return "constant" if medium["range_nm"] is None else f"{medium['range_nm'][0]:.0f}-{medium['range_nm'][1]:.0f} nm"


def _list_lines(media: list[dict[str, Any]]) -> Iterator[str]:
    yield f"{'material':<28} {'index at 589.3 nm':<34} {'valid range':<16} status"
    for medium in media:
        yield f"{medium['name']:<28} {_index_text(medium):<34} {_range_text(medium):<16} {medium['status']}"


def _medium_lines(medium: dict[str, Any]) -> Iterator[str]:
    yield medium["name"] + (f" (also {', '.join(medium['names'])})" if medium["names"] else "")
    yield f"  index at 589.3 nm  {_index_text(medium)}"
    yield f"  valid range        {_range_text(medium)}"
    yield f"  u of the index     {'not stated' if medium['u_index'] is None else medium['u_index']}"
    if medium["temperature_c"] is not None:
        yield f"  temperature        {medium['temperature_c']:g} C"
    yield f"  source             {medium['source']}" + (f" DOI {medium['doi']}" if medium["doi"] else "")
    yield f"  status             {medium['status']}"
    if medium["note"]:
        yield f"  note               {medium['note']}"
