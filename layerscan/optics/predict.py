"""Spectrum and colour of a measured or hand-made sequence of layers."""

from __future__ import annotations

import sys
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from layerscan._version import __version__
from layerscan.errors import InputError, SettingsError
from layerscan.optics import conditions, ensemble
from layerscan.optics.colour import (
    colour_difference,
    colour_of_spectrum,
    lab_of_xyz,
    tristimulus_weights,
    white_point,
)
from layerscan.optics.materials import extrapolation_nm, find_medium, index_of, material_record
from layerscan.optics.peaks import find_peaks
from layerscan.records import (
    Colour,
    Layer,
    LayerTable,
    Medium,
    Peak,
    PredictedStructure,
    Prediction,
    Progress,
    Series,
    SeriesPoint,
    Spectrum,
    SwappedAssignment,
)
from layerscan.settings import PredictSettings, parse_vary, parse_wavelengths

if TYPE_CHECKING:
    from layerscan.records import ComplexArray, FloatArray, IntArray

ABSORBER = "absorber"
CHUNK_LAYERS = 2_000_000  # layers of all draws held at once
WORK_LIMIT = 5e12  # draws x layers x wavelengths x directions: about an hour


@dataclass(frozen=True, kw_only=True, eq=False)
class _Stack:
    """The layers of a table from the lit side with the medium of each, and what the draws need."""

    media: tuple[Medium, ...]  # incident, substrate, then the layers' own
    sequence: IntArray  # (layers + 2,)
    thickness_nm: FloatArray
    u_nm: FloatArray  # without the common scale
    u_scale: float
    seen: int
    from_boundaries: bool
    model: ensemble.ThicknessModel | None
    extension_first: bool  # further layers lie on the lit side
    table: LayerTable
    flags: tuple[str, ...]
    notes: tuple[str, ...]


@dataclass(frozen=True, kw_only=True, eq=False)
class _Light:
    """What one stack under one set of conditions gives."""

    reflectance: Spectrum
    transmittance: Spectrum
    peaks: tuple[Peak, ...]
    colour: Colour
    flags: tuple[str, ...]
    quadrature_error: float
    directions: int
    thickness_nm: FloatArray
    sequence: IntArray


def predict_light(table: LayerTable, settings: PredictSettings, *, progress: Progress | None = None) -> Prediction:
    """Predict reflectance, transmittance, peaks and colour of a sequence of layers.

    Parameters
    ----------
    table : LayerTable
        Layers in depth order. A layer's own ``material`` counts; otherwise its phase takes ``settings.dark``,
        ``bright`` or ``middle``. Incomplete layers at the ends are left out.
    settings : PredictSettings
    progress : callable, optional
        Called as ``progress(what, fraction)``.

    Returns
    -------
    Prediction
        The nominal structure's curves, 95 % limits over the draws, peaks, colour, the swapped assignment, the series.

    Raises
    ------
    SettingsError
        A phase without material, an aperture that the incident medium does not allow, more work than is sensible.
    MaterialError
        An unknown material or one without index at the wavelengths asked for.
    InputError
        No complete layer, or a thickness that is negative or not finite.

    Notes
    -----
    Draws: every layer within its own uncertainty, one common factor for calibration, each medium's index within its
    stated uncertainty, and, where more layers exist than were seen, a new set of further layers from the measured
    distribution with its neighbour correlation and drift. A peak's wavelength, height and width are medians over the
    single curves of the draws, never read off an averaged curve.
    """
    tell = progress or _silent
    if "layerscan.optics.kernel" not in sys.modules:
        tell("loading the optics kernel (compiled on first use, which takes some seconds, then kept)", None)
    stack = _build_stack(table, settings)
    tell("calculating the spectrum", 0.0)
    light = _calculate(stack, settings, tell, what="drawing within the uncertainty")
    swapped = _swapped(table, settings, tell)
    series = _series(table, settings, tell)
    flags = [*table.flags, *stack.flags, *light.flags, *light.colour.flags]
    if swapped is not None:
        flags.append("phase_assignment_assumed")
    if settings.draws and light.colour.delta_e00_95 is not None:
        flags.append("not_colour_of_iridescence")
    names = tuple(stack.media[i].name for i in light.sequence)
    tell("done", 1.0)
    return Prediction(
        version=__version__,
        settings=settings.model_dump(),
        flags=tuple(dict.fromkeys(flags)),
        structure=PredictedStructure(
            layers=int(light.thickness_nm.size),
            layers_seen=stack.seen,
            sequence=names,
            thickness_nm=tuple(light.thickness_nm.tolist()),
            source=table.source,
            sha256=table.sha256,
        ),
        conditions=_conditions(stack, settings, light),
        reflectance=light.reflectance,
        transmittance=light.transmittance,
        peaks=light.peaks,
        colour=light.colour,
        swapped=swapped,
        series=series,
        materials=tuple(material_record(medium) for medium in dict.fromkeys(stack.media)),
        notes=stack.notes,
    )


# --- from the table to a stack --------------------------------------------------------------------------------------


def _build_stack(table: LayerTable, settings: PredictSettings) -> _Stack:
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
    substrate = _substrate(settings, incident, media[numbers[-1]], flags, notes)
    wavelength = _grid(settings)
    for medium in dict.fromkeys((incident, substrate, *media)):
        beyond = extrapolation_nm(medium, wavelength)
        if beyond > 0:
            low, high = medium.range_nm or (0.0, 0.0)
            flags.append("index_extrapolated")
            notes.append(
                f"Index of {medium.name} used up to {beyond:.4g} nm outside the {low:g} to {high:g} nm of its source."
            )
        if medium.u_index is None and medium.status != "convention":
            flags.append("index_uncertainty_unknown")
    thickness = np.array([layer.thickness_nm for layer in layers])
    known = np.array([layer.u_nm if layer.u_nm is not None else 0.0 for layer in layers])
    u = ensemble.own_uncertainty(table, thickness, known)
    if table.u_scale_relative is None:
        flags.append("calibration_uncertainty_unknown")
    model, ahead = None, False
    if settings.layers is not None and settings.layers != len(layers):
        if settings.layers < len(layers):
            notes.append(f"{len(layers)} complete layers were seen; the {settings.layers} nearest the light were used.")
            keep = settings.layers
            layers, thickness, u, numbers = layers[:keep], thickness[:keep], u[:keep], numbers[:keep]
        else:
            model = ensemble.describe_thickness(thickness, np.array(numbers), u)
            flags.append("layers_extended")
            near_cut, far_cut = _cut_ends(table, settings)
            ahead = near_cut and not far_cut
    return _Stack(
        media=(incident, substrate, *media),
        sequence=np.array([0, *(2 + n for n in numbers), 1], dtype=np.int64),
        thickness_nm=thickness,
        u_nm=u,
        u_scale=table.u_scale_relative or 0.0,
        seen=len(columns),
        from_boundaries=table.station_thickness_nm is not None,
        model=model,
        extension_first=ahead,
        table=table,
        flags=tuple(flags),
        notes=tuple(notes),
    )


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


def _substrate(settings: PredictSettings, incident: Medium, last: Medium, flags: list[str], notes: list[str]) -> Medium:
    if settings.substrate is None:
        flags.append("substrate_assumed")
        notes.append(f"No substrate was stated: {incident.name} was taken behind the stack too, as for a free film.")
        return incident
    if settings.substrate.strip().casefold() != ABSORBER:
        return find_medium(settings.substrate, folder=settings.materials_folder)
    notes.append(
        f"Absorber: a medium with the real part of the index of the last layer's {last.name}, from which nothing comes "
        "back. What is transmitted is what it swallows."
    )
    return Medium(
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


def _cut_ends(table: LayerTable, settings: PredictSettings) -> tuple[bool, bool]:
    """Whether the lit and the far end were cut off by the frame."""
    start, end = bool(table.start_cut_by_frame), bool(table.end_cut_by_frame)
    return (end, start) if settings.lit_side == "end" else (start, end)


# --- calculating ----------------------------------------------------------------------------------------------------


def _grid(settings: PredictSettings) -> FloatArray:
    """Wavelengths of the calculation: those asked for, and what the slit needs around them."""
    return conditions.slit_grid(_wavelengths(settings), bandwidth_nm=settings.bandwidth)


def _wavelengths(settings: PredictSettings) -> FloatArray:
    start, stop, step = parse_wavelengths(settings.wavelengths)
    count = int(np.floor((stop - start) / step + 1e-9)) + 1
    return np.asarray(start + step * np.arange(count), dtype=float)


def _calculate(stack: _Stack, settings: PredictSettings, tell: Progress, *, what: str) -> _Light:
    """Nominal curves, draws, peaks and colour of one stack under one set of conditions."""
    wavelength, grid = _wavelengths(settings), _grid(settings)
    index = np.array([index_of(medium, grid) for medium in stack.media])
    if (index[0].imag != 0).any():
        raise SettingsError(
            f"The incident medium '{stack.media[0].name}' absorbs; reflectance is not defined there. "
            "Give one with k = 0."
        )
    rng = np.random.default_rng(settings.seed)
    sequence, thickness = _nominal(stack, settings, rng)
    cone, error = conditions.converged_cone(
        index, sequence[None], thickness[None], grid, aoi_deg=settings.angle, aperture=settings.aperture,
        incident_index=float(index[0].real[grid.size // 2]), polarisation=settings.polarisation,
    )  # fmt: skip
    slit = (
        None
        if settings.bandwidth <= 0
        else conditions.slit_weights(grid, wavelength, bandwidth_nm=settings.bandwidth).T
    )

    def observe(n: ComplexArray, order: IntArray, d: FloatArray) -> tuple[FloatArray, FloatArray]:
        r, t = conditions.observe_stacks(n, order, d, grid, cone=cone, polarisation=settings.polarisation)
        return (r, t) if slit is None else (r @ slit, t @ slit)

    r, t = observe(index, sequence[None], thickness[None])
    numbers = _order_numbers(index[:, :], sequence, thickness, grid, wavelength, settings.angle)
    peaks = find_peaks(wavelength, r[0], order=numbers, smooth=False) if wavelength.size >= 5 else ()
    colour = colour_of_spectrum(
        wavelength, r[0], illuminant=settings.illuminant, observer_deg=settings.observer
    )  # fmt: skip
    flags: list[str] = []
    lower = upper = t_lower = t_upper = None
    if settings.draws:
        drawn = _draw(stack, settings, index, cone.weight.size, rng, observe, tell, what)
        reflected, transmitted, factor = drawn
        lower, upper = np.quantile(reflected, (0.025, 0.975), axis=0)
        t_lower, t_upper = np.quantile(transmitted, (0.025, 0.975), axis=0)
        peaks, uncertain = _peaks_of_draws(wavelength, reflected, numbers, factor, peaks)
        if uncertain:
            flags.append("order_uncertain")
        colour = _with_radius(colour, wavelength, reflected, settings)
    if numbers is None and peaks:
        flags.append("order_uncertain")
    return _Light(
        reflectance=_spectrum(wavelength, r[0], "reflectance", lower, upper, settings),
        transmittance=_spectrum(wavelength, t[0], "transmittance", t_lower, t_upper, settings),
        peaks=peaks,
        colour=colour,
        flags=tuple(flags),
        quadrature_error=error,
        directions=int(cone.weight.size),
        thickness_nm=thickness,
        sequence=sequence,
    )


def _spectrum(
    wavelength: FloatArray, value: FloatArray, kind: Any, lower: Any, upper: Any, settings: PredictSettings
) -> Spectrum:
    return Spectrum(
        wavelength_nm=wavelength, value=value, kind=kind, lower=lower, upper=upper, aoi_deg=settings.angle,
        source="predicted",
    )  # fmt: skip


def _nominal(stack: _Stack, settings: PredictSettings, rng: np.random.Generator) -> tuple[IntArray, FloatArray]:
    """Sequence and thickness of the nominal structure; further layers are one draw."""
    if stack.model is None or settings.layers is None:
        return stack.sequence, stack.thickness_nm
    kind, further = _further(stack, stack.model, settings.layers - stack.thickness_nm.size, 1, rng)
    return _join(stack, kind, stack.thickness_nm[None], further)[0], _join(
        stack, kind, stack.thickness_nm[None], further
    )[1][0]


def _further(
    stack: _Stack, model: ensemble.ThicknessModel, layers: int, draws: int, rng: np.random.Generator
) -> tuple[IntArray, FloatArray]:
    """Kinds and thicknesses of further layers, in the order away from the measured ones."""
    if stack.extension_first:
        turned = ensemble.describe_thickness(stack.thickness_nm[::-1], model.kind[::-1], stack.u_nm[::-1])
        return ensemble.draw_layers(
            turned, layers=layers, draws=draws, rng=rng, first=model.kind.size, conditional=True
        )
    return ensemble.draw_layers(model, layers=layers, draws=draws, rng=rng, first=model.kind.size, conditional=True)


def _join(stack: _Stack, kind: IntArray, measured: FloatArray, further: FloatArray) -> tuple[IntArray, FloatArray]:
    inner = stack.sequence[1:-1]
    if stack.extension_first:
        order = np.concatenate([[0], (2 + kind)[::-1], inner, [1]])
        return order, np.concatenate([further[:, ::-1], measured], axis=1)
    return np.concatenate([[0], inner, 2 + kind, [1]]), np.concatenate([measured, further], axis=1)


def _draw(
    stack: _Stack,
    settings: PredictSettings,
    index: ComplexArray,
    directions: int,
    rng: np.random.Generator,
    observe: Any,
    tell: Progress,
    what: str,
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Reflectance and transmittance, (draws, wavelengths), and the factor on the optical period of each draw."""
    total = settings.layers if stack.model is not None and settings.layers else stack.thickness_nm.size
    if settings.draws * float(total) * index.shape[1] * directions > WORK_LIMIT:
        raise SettingsError(
            f"{settings.draws} draws of {total} layers at {index.shape[1]} wavelengths and {directions} directions "
            "would take more than an hour. Give fewer draws (draws=0 gives the nominal curve alone)."
        )
    scale = 1 + stack.u_scale * rng.standard_normal(settings.draws)
    shift = rng.standard_normal((settings.draws, len(stack.media))) * np.array([m.u_index or 0.0 for m in stack.media])
    chunk = max(min(settings.draws, CHUNK_LAYERS // total), 1)
    reflected, transmitted, factors = [], [], []
    mean = float(stack.thickness_nm.sum())
    for first in range(0, settings.draws, chunk):
        tell(what, first / settings.draws)
        some = slice(first, min(first + chunk, settings.draws))
        count = some.stop - some.start
        error = ensemble.draw_errors(stack.u_nm, draws=count, rng=rng, from_boundaries=stack.from_boundaries)
        d = np.maximum(stack.thickness_nm + error, 0.0)
        order = stack.sequence
        factor = d.sum(axis=1) / mean if mean > 0 else np.ones(count)
        if stack.model is not None:
            kind, further = _further(stack, stack.model, total - stack.thickness_nm.size, count, rng)
            order, d = _join(stack, kind, d, further)
        d = d * np.maximum(scale[some, None], 0.01)
        n, orders = _drawn_index(index, shift[some], order)
        r, t = observe(n, orders, d)
        reflected.append(r)
        transmitted.append(t)
        factors.append(factor * scale[some])
    return np.concatenate(reflected), np.concatenate(transmitted), np.concatenate(factors)


def _drawn_index(index: ComplexArray, shift: FloatArray, order: IntArray) -> tuple[ComplexArray, IntArray]:
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


def _order_numbers(
    index: ComplexArray,
    sequence: IntArray,
    thickness: FloatArray,
    grid: FloatArray,
    wavelength: FloatArray,
    aoi_deg: float,
) -> FloatArray | None:
    """Bragg order at each wavelength, 2 x optical period x cos / wavelength, or None where nothing repeats."""
    kind = sequence[1:-1]
    repeat = ensemble.repeat_of(kind).size
    if kind.size < 2 * repeat:
        return None
    whole = kind.size // repeat * repeat
    n = index.real
    sine = index[0].real * np.sin(np.radians(aoi_deg))
    depth = np.zeros(grid.size)
    for medium in np.unique(kind[:whole]):
        along = np.sqrt(np.maximum(n[medium] ** 2 - sine**2, 0.0))
        depth += along * thickness[:whole][kind[:whole] == medium].sum()
    result: FloatArray = np.interp(wavelength, grid, 2 * depth / (whole // repeat) / grid)
    return result


def _peaks_of_draws(
    wavelength: FloatArray,
    reflected: FloatArray,
    numbers: FloatArray | None,
    factor: FloatArray,
    nominal: tuple[Peak, ...],
) -> tuple[tuple[Peak, ...], bool]:
    """Medians and u of each nominal peak over the single curves, and whether one was often missing."""
    found: list[list[tuple[float, float, float]]] = [[] for _ in nominal]
    for curve, scale in zip(reflected, factor, strict=True):
        own = find_peaks(wavelength, curve, order=None if numbers is None else numbers * scale, smooth=False)
        for place, peak in enumerate(nominal):
            same = [p for p in own if p.order == peak.order]
            if not same:
                continue
            distance = [abs(p.wavelength_nm - peak.wavelength_nm * float(scale)) for p in same]
            best = same[int(np.argmin(distance))]
            found[place].append((best.wavelength_nm, best.reflectance, best.fwhm_nm))
    peaks, uncertain = [], False
    for peak, values in zip(nominal, found, strict=True):
        if len(values) < max(2, 0.5 * len(reflected)):
            uncertain = True
            peaks.append(peak)
            continue
        table = np.array(values)
        middle = np.median(table, axis=0)
        peaks.append(
            Peak(
                order=peak.order,
                wavelength_nm=float(middle[0]),
                u_wavelength_nm=float(table[:, 0].std(ddof=1)),
                reflectance=float(middle[1]),
                fwhm_nm=float(middle[2]),
            )
        )
    return tuple(peaks), uncertain


def _with_radius(colour: Colour, wavelength: FloatArray, reflected: FloatArray, settings: PredictSettings) -> Colour:
    from dataclasses import replace

    weights = tristimulus_weights(wavelength, illuminant=settings.illuminant, observer_deg=settings.observer)
    white = white_point(illuminant=settings.illuminant, observer_deg=settings.observer)
    difference = colour_difference(np.array(colour.lab), lab_of_xyz(reflected @ weights, white))
    return replace(colour, delta_e00_95=float(np.quantile(difference, 0.95)))


# --- the other assignment, series, conditions -----------------------------------------------------------------------


def _swapped(table: LayerTable, settings: PredictSettings, tell: Progress) -> SwappedAssignment | None:
    """The spectrum with dark and bright exchanged, where the phases decide the materials."""
    phases = {layer.phase for layer in table.layers if layer.complete and layer.material is None}
    if not {"dark", "bright"} <= phases or settings.dark is None or settings.bright is None:
        return None
    if settings.dark == settings.bright:
        return None
    changed = settings.model_copy(update={"dark": settings.bright, "bright": settings.dark, "draws": 0})
    light = _calculate(_build_stack(table, changed), changed, tell, what="calculating the swapped assignment")
    return SwappedAssignment(
        dark=settings.bright,
        bright=settings.dark,
        reflectance=light.reflectance,
        peaks=light.peaks,
        colour=light.colour,
    )


def _silent(what: str, fraction: float | None) -> None:
    return None


UNITS = {"angle": "deg", "aperture": "1", "immersion": "1", "scale": "1", "layers": "1", "strain": "1"}


def _series(table: LayerTable, settings: PredictSettings, tell: Progress) -> Series | None:
    if settings.vary is None:
        return None
    name, start, stop, step = parse_vary(settings.vary)
    count = int(np.floor((stop - start) / step + 1e-9)) + 1
    points = []
    for number in range(count):
        value = start + number * step
        tell(f"calculating the series of {name}", number / count)
        changed_table, changed = vary_one(table, settings, name, value)
        light = _calculate(_build_stack(changed_table, changed), changed, _silent, what="")
        points.append(SeriesPoint(value=value, reflectance=light.reflectance, peaks=light.peaks, colour=light.colour))
    return Series(name=name, unit=UNITS[name], points=tuple(points))


def vary_one(
    table: LayerTable, settings: PredictSettings, name: str, value: float
) -> tuple[LayerTable, PredictSettings]:
    """Layers and settings with one parameter of a series at a value.

    Notes
    -----
    Strain is uniaxial along the layers: thickness scales by (1 + strain)^-ratio with Poisson's ratio. A ratio of 0.46
    fitted to an elastomer is common practice, no source. The indices stay as they are.
    """
    if name in ("scale", "strain"):
        if value <= (-1 if name == "strain" else 0):
            raise SettingsError(
                f"Series: {name} {value:g} leaves no layers. Give values above {-1 if name == 'strain' else 0}."
            )
        factor = value if name == "scale" else (1 + value) ** -settings.poisson_ratio
        return scale_table(table, factor), settings
    kinds: dict[str, dict[str, Any]] = {
        "angle": {"angle": value},
        "aperture": {"aperture": value},
        "immersion": {"incident": f"n={value:.10g}"},
        "layers": {"layers": round(value)},
    }
    return table, PredictSettings(**{**settings.model_dump(), **kinds[name]})


def scale_table(table: LayerTable, factor: float) -> LayerTable:
    """The same layers, every thickness and its uncertainty times a factor."""
    from dataclasses import replace

    layers = tuple(
        replace(
            layer,
            thickness_nm=layer.thickness_nm * factor,
            u_nm=None if layer.u_nm is None else layer.u_nm * factor,
        )
        for layer in table.layers
    )
    stations = None if table.station_thickness_nm is None else table.station_thickness_nm * factor
    return replace(table, layers=layers, station_thickness_nm=stations)


def _conditions(stack: _Stack, settings: PredictSettings, light: _Light) -> dict[str, Any]:
    return {
        "angle_deg": settings.angle,
        "aperture": settings.aperture,
        "polarisation": settings.polarisation,
        "bandwidth_nm": settings.bandwidth,
        "incident": stack.media[0].name,
        "substrate": stack.media[1].name,
        "lit_side": settings.lit_side or "start",
        "illuminant": settings.illuminant,
        "observer_deg": settings.observer,
        "directions": light.directions,
        "quadrature_error": light.quadrature_error,
    }
