"""The methods paragraph of a study, put into sentences from facts."""

from __future__ import annotations

from typing import TYPE_CHECKING

from layerscan.report.words import NOT_STATED

if TYPE_CHECKING:
    from layerscan.report.summary import MaterialSource, MethodsFacts


def describe_methods(facts: MethodsFacts) -> list[str]:
    """Paragraphs for a methods section: what was imaged and measured, how, with which uncertainty and which indices.

    Returns
    -------
    list of str
        Plain text, to be escaped by the page. What nobody stated is said to be "not stated".
    """
    return [part for part in (_images(facts), _layers(facts), _light(facts), _statistics(facts), _run(facts)) if part]


def _images(facts: MethodsFacts) -> str:
    size = NOT_STATED
    if facts.pixel_size_range_nm is not None:
        low, high = facts.pixel_size_range_nm
        size = f"{low:.4g} nm" if high - low < 1e-9 * high else f"{low:.4g} to {high:.4g} nm"
    known = ", ".join(facts.pixel_size_sources) or NOT_STATED
    return (
        f"{_count(facts.n_images, 'image')} of {_count(facts.n_specimens, 'specimen')} in "
        f"{_count(facts.n_groups, 'group')} were measured with layerscan {facts.version}. Pixel size: {size} "
        f"(known from: {known}). " + _left_out(facts)
    )


def _left_out(facts: MethodsFacts) -> str:
    text = f"Left out: {'; '.join(facts.exclusions)}. " if facts.exclusions else "Nothing was left out. "
    if facts.hand_edits:
        text += f"{_count(facts.hand_edits, 'boundary', 'boundaries')} were corrected by hand. "
    return text.strip()


def _layers(facts: MethodsFacts) -> str:
    corrections = "; ".join(facts.corrections) or "none stated"
    return (
        f"{facts.layer_definition.rstrip('.')}. {_count(facts.n_layers, 'complete layer')} entered. "
        f"Corrections for the section's geometry: {corrections}. {facts.uncertainty.rstrip('.')}."
    )


def _light(facts: MethodsFacts) -> str:
    if facts.optics is None:
        return ""
    materials = " ".join(_material(material) for material in facts.materials)
    text = f"{facts.optics.rstrip('.')}. {materials}"
    if facts.n_spectra:
        text += f" {_count(facts.n_spectra, 'observed spectrum', 'observed spectra')} were compared."
    return text + (f" {facts.comparison.rstrip('.')}." if facts.comparison else "")


def _material(material: MaterialSource) -> str:
    span = ""
    if material.range_nm is not None:
        span = f", valid {material.range_nm[0]:g} to {material.range_nm[1]:g} nm"
    u = "uncertainty not stated" if material.u_index is None else f"standard uncertainty {material.u_index:g}"
    doi = f", DOI {material.doi}" if material.doi else ""
    source = material.source or NOT_STATED
    return f"Refractive index of {material.name} ({material.role}): {source}{doi} ({material.status}{span}; {u})."


def _statistics(facts: MethodsFacts) -> str:
    return f"Statistics: {'; '.join(facts.statistics)}." if facts.statistics else ""


def _run(facts: MethodsFacts) -> str:
    seeds = ", ".join(f"{name} {seed}" for name, seed in sorted(facts.seeds.items()))
    return f"Seeds: {seeds}." if seeds else ""


def _count(number: int, one: str, many: str | None = None) -> str:
    return f"{number} {one if number == 1 else many or one + 's'}"
