"""Words of the panel: what is known of an image, doubts, corrections; and napari's notifications in plain words."""

from __future__ import annotations

from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from layerscan.records import Micrograph

    from layerscan_napari.compute import Result


def tell(text: str) -> None:
    """Show a message as a napari notification."""
    from napari.utils.notifications import show_warning

    show_warning(text)


def tell_error(error: Exception) -> None:
    """Show an error in plain words: ours say what to do; of others, what happened."""
    from layerscan.errors import LayerscanError

    if isinstance(error, LayerscanError):
        tell(str(error))
    else:
        tell(f"That did not work: {type(error).__name__}: {error}. The image and the results kept so far are intact.")


def image_in_words(micrograph: Micrograph) -> str:
    """Size, pixel size, where it comes from."""
    rows, columns = micrograph.shape
    size = micrograph.pixel_size
    text = f"{rows} × {columns} px (rows × columns)"
    if size is None:
        return f"{text}; pixel size unknown"
    per = f"{size.row_nm:.4g} nm" if size.row_nm == size.column_nm else f"{size.row_nm:.4g} × {size.column_nm:.4g} nm"
    known = "" if size.u_relative is None else f" ± {100 * size.u_relative:.2g} %"
    doubt = f"; {len(image_doubts(micrograph))} doubt(s), see Doubts" if image_doubts(micrograph) else ""
    return f"{text}; {per}{known} per pixel, {size.source}{doubt}"


def image_doubts(micrograph: Micrograph) -> tuple[str, ...]:
    """Doubts of the image and of its pixel size, each once."""
    doubts = (*micrograph.doubts, *(micrograph.pixel_size.doubts if micrograph.pixel_size else ()))
    return tuple(dict.fromkeys(doubts))


def doubts_of(result: Result) -> list[str]:
    """Every flag of measurement, prediction and comparison in words, then the doubts of the image."""
    from layerscan.records import FLAGS

    flags: list[str] = []
    for part in (result.measurement, result.prediction, result.comparison):
        if part is not None:
            flags += [flag for flag in part.flags if flag not in flags]
    return [FLAGS.get(flag, flag) for flag in flags] + list(image_doubts(result.job.micrograph))


def edits_in_words(result: Result) -> str:
    """Corrections made by hand and what they changed."""
    from layerscan_napari.traces import average_in_words

    edits = result.job.measure.edits
    if not edits or result.unedited is None or result.measurement is None:
        return "no corrections"
    before, after = average_in_words(result.unedited.period), average_in_words(result.measurement.period)
    return f"{'; '.join(edits)}\nPeriod as found: {before}\nPeriod as corrected: {after}"


def up_to_date(result: Result) -> str:
    """What is shown, in a few words."""
    if result.measurement is None or not result.measurement.layered:
        return "No layered structure was found here."
    where = "Whole field" if result.job.measure.line is None else "Line"
    state = ", corrected by hand" if result.job.measure.edits else ""
    advice = "" if result.job.predict else " State dark and bright material (Specimen) for spectrum and colour."
    return f"{where}{state}: up to date.{advice}"


def line_in_words(line: tuple[float, float, float, float] | None) -> str:
    """A line as it is typed: R0,C0,R1,C1."""
    return "" if line is None else ",".join(f"{v:.10g}" for v in line)


def material_names() -> list[str]:
    """Names in the catalogue, and the words that stand for no material of their own."""
    from layerscan.optics.materials import list_media

    names = {name for medium in list_media() for name in (medium.name, *medium.names)}
    return sorted(names | {"absorber"})
