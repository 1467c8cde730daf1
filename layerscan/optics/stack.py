"""From a table of layers and the user's choice of materials to the stack that is calculated, and to its draws."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from layerscan.errors import InputError, SettingsError
from layerscan.optics import conditions, ensemble
from layerscan.optics.materials import extrapolation_nm, find_medium, index_of
from layerscan.records import Layer, LayerTable, Medium
from layerscan.settings import PredictSettings, parse_wavelengths

if TYPE_CHECKING:
    from layerscan.records import ComplexArray, FloatArray, IntArray

ABSORBER = "absorber"
WEAK_EXTINCTION = 1e-4  # of an incident medium, left out with a note


@dataclass(frozen=True, kw_only=True, eq=False)
class Stack:
    """The layers of a table from the lit side with the medium of each, and what the draws need."""

    media: tuple[Medium, ...]  # incident, substrate, then the layers' own
    absorber_of: int | None  # number of the medium that the substrate is matched to
    sequence: IntArray  # (layers + 2,)
    thickness_nm: FloatArray
    u_nm: FloatArray  # without the common scale
    u_scale: float
    seen: int
    stations_nm: FloatArray | None  # (stations, layers), of layers between traced boundaries
    station_step_nm: float | None
    model: ensemble.ThicknessModel | None  # of the layers seen, where further ones are to be drawn
    extension_first: bool  # further layers lie on the lit side
    flags: tuple[str, ...]
    notes: tuple[str, ...]


def build_stack(table: LayerTable, settings: PredictSettings) -> Stack:
    """The stack from the lit side: complete layers, their media, incident medium, substrate, further layers.

    Raises
    ------
    InputError
        No complete layer, or a thickness that is negative or not finite.
    SettingsError
        A phase without material.
    MaterialError
        An unknown material.
    """
    flags: list[str] = []
    notes: list[str] = []
    layers, columns = _complete_layers(table, flags, notes)
    if settings.lit_side is None:
        flags.append("lit_side_assumed")
    if settings.lit_side == "end":
        layers, columns = layers[::-1], columns[::-1]
    media, numbers = _media_of_layers(layers, settings)
    incident = find_medium(settings.incident or "air", folder=settings.materials_folder)
    if settings.incident is None:
        flags.append("incident_assumed")
    near_cut, far_cut = _cut_ends(table, settings)
    ahead = near_cut and not far_cut
    last = _last_number(numbers, settings.layers, ahead=ahead)
    substrate, matched = _substrate(settings, incident, media[last], flags, notes)
    _remark_media(incident, substrate, media, settings, flags, notes)
    thickness = np.array([layer.thickness_nm for layer in layers])
    known = np.array([layer.u_nm if layer.u_nm is not None else 0.0 for layer in layers])
    u = ensemble.own_uncertainty(table, thickness, known)
    if table.u_scale_relative is None:
        flags.append("calibration_uncertainty_unknown")
    if any(layer.u_nm is None for layer in layers):
        notes.append("Some layers state no uncertainty of their thickness; the draws leave it out.")
    stations = table.station_thickness_nm
    model, seen = None, len(layers)
    if settings.layers is not None and settings.layers < seen:
        notes.append(f"{seen} complete layers were seen; the {settings.layers} nearest the light were used.")
        keep = settings.layers
        thickness, u, numbers, columns = thickness[:keep], u[:keep], numbers[:keep], columns[:keep]
    elif settings.layers is not None and settings.layers > seen:
        model = ensemble.describe_thickness(thickness, np.array(numbers), u, from_boundaries=stations is not None)
        flags.append("layers_extended")
        notes.append(
            f"{settings.layers - seen} further layers were drawn as the {seen} complete ones are: correlation of "
            f"neighbours {model.correlation:.2f}, drift {100 * model.drift_per_layer:.2g} % per layer. The nominal "
            "structure holds one such draw; each draw of the limits has its own."
        )
    return Stack(
        media=(incident, substrate, *media),
        absorber_of=2 + last if matched else None,
        sequence=np.array([0, *(2 + n for n in numbers), 1], dtype=np.int64),
        thickness_nm=thickness,
        u_nm=u,
        u_scale=table.u_scale_relative or 0.0,
        seen=seen,
        stations_nm=None if stations is None else stations[:, columns],
        station_step_nm=table.station_step_nm,
        model=model,
        extension_first=ahead,
        flags=tuple(flags),
        notes=tuple(notes),
    )


def _remark_media(
    incident: Medium,
    substrate: Medium,
    media: tuple[Medium, ...],
    settings: PredictSettings,
    flags: list[str],
    notes: list[str],
) -> None:
    """Say where an index is used beyond its source, or without a stated uncertainty."""
    wavelength = calculation_grid(settings)
    if 0 < index_of(incident, wavelength).imag.max() <= WEAK_EXTINCTION:
        notes.append(f"The weak absorption of the incident {incident.name} was left out.")
    for medium in dict.fromkeys((incident, substrate, *media)):
        beyond = extrapolation_nm(medium, wavelength)
        if beyond > 0:
            low, high = medium.range_nm or (0.0, 0.0)
            flags.append("index_extrapolated")
            notes.append(
                f"Index of {medium.name} used up to {beyond:.4g} nm outside the {low:g} to {high:g} nm of its source."
            )
    unknown = [medium.name for medium in media if medium.u_index is None and medium.status != "convention"]
    if unknown:
        flags.append("index_uncertainty_unknown")
        notes.append(f"No uncertainty of the index is stated for {' and '.join(unknown)}; the draws leave it out.")
    if settings.polarisation in ("left", "right"):
        notes.append("Circular light: isotropic layers reflect left and right alike, the mean of s and p.")


def _last_number(numbers: list[int], layers: int | None, *, ahead: bool) -> int:
    """Number of the medium of the last layer, of those seen or of those asked for; further ones may lie ahead."""
    if layers is None or layers == len(numbers) or (ahead and layers > len(numbers)):
        return numbers[-1]
    if layers < len(numbers):
        return numbers[layers - 1]
    pattern = ensemble.repeat_of(np.array(numbers))
    return int(pattern[(layers - 1) % pattern.size])


def _complete_layers(table: LayerTable, flags: list[str], notes: list[str]) -> tuple[list[Layer], list[int]]:
    """Layers without the incomplete ones at the ends, and their columns in the table."""
    columns = [i for i, layer in enumerate(table.layers) if layer.complete]
    if not columns:
        raise InputError(
            f"'{table.source}' has no complete layer. At least one layer that is not cut off by the frame is needed."
        )
    first, last = columns[0], columns[-1]
    if len(table.layers) > last - first + 1:
        left = len(table.layers) - (last - first + 1)
        flags.append("layers_left_out")
        notes.append(f"{left} incomplete end layer{'s were' if left > 1 else ' was'} left out.")
    layers = list(table.layers[first : last + 1])
    for layer in layers:
        if not (np.isfinite(layer.thickness_nm) and layer.thickness_nm >= 0):
            raise InputError(
                f"Layer {layer.index} of '{table.source}' has a thickness of {layer.thickness_nm} nm. "
                "Give thicknesses >= 0 in nm."
            )
    return layers, list(range(first, last + 1))


def _media_of_layers(layers: Sequence[Layer], settings: PredictSettings) -> tuple[tuple[Medium, ...], list[int]]:
    """Distinct media of the layers and the number of each layer's medium."""
    by_phase: Mapping[str, str | None] = {
        "dark": settings.dark, "bright": settings.bright, "middle": settings.middle, "other": None,
    }  # fmt: skip
    found: dict[str, int] = {}
    media: list[Medium] = []
    numbers = []
    for layer in layers:
        text = layer.material or by_phase[layer.phase]
        if text is None:
            if layer.phase == "other":
                raise SettingsError(
                    f"Layer {layer.index} is neither dark, middle nor bright and names no material. "
                    "Give it one in the column 'material' of the layer table."
                )
            raise SettingsError(
                f"The {layer.phase} layers have no material. Give {layer.phase}=MATERIAL (--{layer.phase}): a "
                "catalogue name such as 'chitin', an index such as 'n=1.56', or a table file."
            )
        if text not in found:
            found[text] = len(media)
            media.append(find_medium(text, folder=settings.materials_folder))
        numbers.append(found[text])
    return tuple(media), numbers


def _substrate(
    settings: PredictSettings, incident: Medium, last: Medium, flags: list[str], notes: list[str]
) -> tuple[Medium, bool]:
    """The medium behind the stack, and whether it is an absorber matched to the last layer."""
    if settings.substrate is None:
        flags.append("substrate_assumed")
        notes.append(f"No substrate was stated: {incident.name} was taken behind the stack too, as for a free film.")
        return incident, False
    if settings.substrate.strip().casefold() != ABSORBER:
        return find_medium(settings.substrate, folder=settings.materials_folder), False
    notes.append(
        f"Absorber: a medium with the real part of the index of the last layer's {last.name}, from which nothing comes "
        "back. What is transmitted is what it swallows."
    )
    absorber = Medium(
        name=f"{ABSORBER} matched to {last.name}",
        index=(lambda wavelength_nm: index_of(last, wavelength_nm).real.astype(complex),),
        range_nm=last.range_nm,
        u_index=last.u_index,
        source=last.source,
        doi=last.doi,
        status="convention",
        note="index-matched: nothing comes back",
        kind=last.kind,
    )
    return absorber, True


def _cut_ends(table: LayerTable, settings: PredictSettings) -> tuple[bool, bool]:
    """Whether the lit and the far end were cut off by the frame."""
    start, end = bool(table.start_cut_by_frame), bool(table.end_cut_by_frame)
    return (end, start) if settings.lit_side == "end" else (start, end)


def calculation_grid(settings: PredictSettings) -> FloatArray:
    """Wavelengths of the calculation: those asked for, and what the slit needs around them."""
    return conditions.slit_grid(asked_wavelengths(settings), bandwidth_nm=settings.bandwidth)


def asked_wavelengths(settings: PredictSettings) -> FloatArray:
    """Wavelengths that the settings ask for [nm]."""
    start, stop, step = parse_wavelengths(settings.wavelengths)
    count = int(np.floor((stop - start) / step + 1e-9)) + 1
    return np.asarray(start + step * np.arange(count), dtype=float)


def nominal_structure(stack: Stack, settings: PredictSettings, rng: np.random.Generator) -> tuple[IntArray, FloatArray]:
    """Sequence and thickness of the nominal structure; further layers are one draw."""
    if stack.model is None or settings.layers is None:
        return stack.sequence, stack.thickness_nm
    kind, further = draw_further(stack, stack.model, settings.layers - stack.thickness_nm.size, 1, rng)
    sequence, thickness = join_layers(stack, kind, stack.thickness_nm[None], further)
    return sequence, thickness[0]


def draw_further(
    stack: Stack, model: ensemble.ThicknessModel, layers: int, draws: int, rng: np.random.Generator
) -> tuple[IntArray, FloatArray]:
    """Kinds and thicknesses of further layers, in the order away from the measured ones."""
    if stack.extension_first:
        turned = ensemble.describe_thickness(
            stack.thickness_nm[::-1], model.kind[::-1], stack.u_nm[::-1], from_boundaries=stack.stations_nm is not None
        )
        return ensemble.draw_layers(
            turned, layers=layers, draws=draws, rng=rng, first=model.kind.size, conditional=True
        )
    return ensemble.draw_layers(model, layers=layers, draws=draws, rng=rng, first=model.kind.size, conditional=True)


def join_layers(stack: Stack, kind: IntArray, measured: FloatArray, further: FloatArray) -> tuple[IntArray, FloatArray]:
    """Sequence, (layers + 2,), and thickness, (draws, layers), of measured and further layers together."""
    inner = stack.sequence[1:-1]
    if stack.extension_first:
        order = np.concatenate([[0], (2 + kind)[::-1], inner, [1]])
        return order, np.concatenate([further[:, ::-1], measured], axis=1)
    return np.concatenate([[0], inner, 2 + kind, [1]]), np.concatenate([measured, further], axis=1)


def drawn_index(index: ComplexArray, shift: FloatArray, order: IntArray) -> tuple[ComplexArray, IntArray]:
    """Index table and sequences of draws; a medium of uncertain index has one row per draw."""
    count = shift.shape[0]
    uncertain = np.flatnonzero(shift.any(axis=0))
    orders = np.repeat(order[None], count, axis=0)
    if not uncertain.size:
        return index, orders
    rows = [index]
    for place, medium in enumerate(uncertain):
        rows.append(np.maximum(index[medium].real + shift[:, medium, None], 0.1) + 1j * index[medium].imag)
        start = index.shape[0] + place * count
        orders = np.where(order[None] == medium, start + np.arange(count)[:, None], orders)
    return np.concatenate(rows), orders


def order_numbers(
    index: ComplexArray,
    sequence: IntArray,
    thickness: FloatArray,
    grid: FloatArray,
    wavelength: FloatArray,
    aoi_deg: float,
) -> FloatArray | None:
    """Bragg order at each wavelength, 2 x optical period x cos / wavelength, or None where nothing repeats."""
    kind = sequence[1:-1]
    whole, periods = _periods(kind)
    if periods < 2:
        return None
    n = index.real
    sine = index[0].real * np.sin(np.radians(aoi_deg))
    depth = np.zeros(grid.size)
    for medium in np.unique(kind[:whole]):
        along = np.sqrt(np.maximum(n[medium] ** 2 - sine**2, 0.0))
        depth += along * thickness[:whole][kind[:whole] == medium].sum()
    result: FloatArray = np.interp(wavelength, grid, 2 * depth / periods / grid)
    return result


def _periods(kind: IntArray) -> tuple[int, int]:
    """How many layers make whole periods, and how many periods; two media may skip a layer here and there."""
    values, counts = np.unique(kind, return_counts=True)
    if values.size == 2:
        periods = int(counts.min())
        return (kind.size - 1 if kind.size == 2 * periods + 1 else kind.size), periods
    repeat = ensemble.repeat_of(kind).size
    return kind.size // repeat * repeat, kind.size // repeat if repeat > 1 else 0
