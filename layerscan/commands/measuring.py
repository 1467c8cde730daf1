"""``inspect`` and ``measure``."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import click

from layerscan import documents, workflow
from layerscan.cli import NO_LAYERS
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
from layerscan.settings import MeasureSettings, change_settings

if TYPE_CHECKING:
    from collections.abc import Iterator

    from layerscan.records import Average, Inspection, Measurement


@click.command()
@click.argument("image", type=click.Path())
@click.option("--page", type=click.IntRange(min=0), default=0, help="page of a file with several images, from 0")
@click.option("--pixel-size", metavar="QUANTITY", help="a pixel size to hold against the file's own")
@click.option("--json", "as_json", is_flag=True, help="print the JSON document on standard output")
def inspect(image: str, page: int, pixel_size: str | None, as_json: bool) -> None:
    """Say what IMAGE holds: shape, pixel size and where it comes from, doubts."""
    progress()
    settings = change_settings(MeasureSettings, None, {"page": page, "pixel_size": pixel_size})
    answer = workflow.inspect(image, page=settings.page, pixel_size=settings.pixel_size)
    print_document(documents.inspection_document(answer), as_json=as_json, lines=_inspection_lines(answer))
    print_notes(answer.flags, *answer.advice)


def _inspection_lines(answer: Inspection) -> Iterator[str]:
    image, size = answer.image, answer.image.pixel_size
    yield f"{image.path}: {answer.file_format}, {answer.stored_type}, page {image.page} of {answer.page_count}"
    yield f"  shape (rows, columns)  {image.shape[0]} x {image.shape[1]}"
    if size is None:
        yield "  pixel size             unknown"
    else:
        u = "not stated" if size.u_relative is None else f"{100 * size.u_relative:.3g} %"
        yield f"  pixel size             row {size.row_nm:.6g} nm, column {size.column_nm:.6g} nm (u {u})"
        yield f"  stated by              {size.source}"
    if answer.field_of_view_nm is not None:
        yield f"  field                  {answer.field_of_view_nm[0]:.5g} x {answer.field_of_view_nm[1]:.5g} nm"
    for exclusion in image.excluded:
        yield f"  left out               {exclusion.reason}, rows and columns {exclusion.region}"
    for doubt in image.doubts:
        yield f"  doubt                  {doubt}"
    for name, value in answer.metadata.items():
        yield f"  {name[:21]:<21}  {value[:90]}"


@click.command()
@click.argument("image", type=click.Path())
@settings_options(MeasureSettings)
@output_options
def measure(image: str, out: str | None, as_json: bool, **words: Any) -> int:
    """Measure the layers in IMAGE: period, thicknesses, uncertainty."""
    from layerscan.readers.images import open_image

    show = progress()
    settings = change_settings(MeasureSettings, None, chosen(MeasureSettings, words))
    opened = open_image(image, page=settings.page, pixel_size=settings.pixel_size)
    found = workflow.measure(opened, settings=settings, progress=show)
    clear_progress()
    if out is None:
        document = documents.measurement_document(found)
    else:
        from layerscan.figures.measurement import draw_measurement

        document = documents.write_measurement(out, found, figure=draw_measurement(found, opened))
    print_document(document, as_json=as_json, lines=_measurement_lines(found))
    print_notes(found.flags, *document["image"]["doubts"])
    return 0 if found.layered else NO_LAYERS


def _measurement_lines(found: Measurement) -> Iterator[str]:
    if not found.layered:
        yield f"{found.image.path}: no layered structure found (p = {found.detection.p_value})"
        return
    layers = f"{len(found.layers)} layers" if found.layers else "aligned lamellae that cannot be told apart"
    yield f"{found.image.path}: {layers}, {'periodic' if found.periodic else 'not periodic'}"
    for name, average in (
        ("period", found.period),
        ("dark layers", found.dark),
        ("middle layers", found.middle),
        ("bright layers", found.bright),
    ):
        if average is not None:
            yield f"  {name:<16} {_average(average)}"
    if found.spacing is not None:
        yield f"  {'main spacing':<16} {with_u(found.spacing.value, found.spacing.u)} ({found.spacing.method})"
    if found.orientation_deg is not None:
        yield f"  {'layer normal':<16} {with_u(found.orientation_deg, found.u_orientation_deg, 'deg')}"
    if found.statistics is not None and found.statistics.limited_by:
        yield f"  {'limited by':<16} {found.statistics.limited_by}"


def _average(average: Average) -> str:
    spread = "spread not known" if average.sd is None else f"spread (SD) {average.sd:.3g} nm"
    return f"{with_u(average.mean, average.u)}, {spread}, n = {average.n}"
