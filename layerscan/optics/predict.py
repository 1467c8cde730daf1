"""Spectrum and colour of a measured or hand-made sequence of layers."""

from __future__ import annotations

import sys
from dataclasses import dataclass, replace
from functools import partial
from typing import TYPE_CHECKING, Any

import numpy as np

from layerscan._version import __version__
from layerscan.errors import SettingsError
from layerscan.optics import conditions, ensemble
from layerscan.optics.colour import (
    FIRST_NM,
    LAST_NM,
    colour_difference,
    colour_of_spectrum,
    lab_of_xyz,
    tristimulus_weights,
    white_point,
)
from layerscan.optics.lateral import LATERAL_APERTURE, lateral_reflectance
from layerscan.optics.materials import index_of, material_record
from layerscan.optics.peaks import find_peaks
from layerscan.optics.series import UNITS, vary_one
from layerscan.optics.stack import (
    WEAK_EXTINCTION,
    Stack,
    asked_wavelengths,
    build_stack,
    calculation_grid,
    draw_further,
    drawn_index,
    join_layers,
    nominal_structure,
    order_numbers,
)
from layerscan.optics.transfer import MEMORY_LIMIT
from layerscan.records import (
    Colour,
    LayerTable,
    Peak,
    PredictedStructure,
    Prediction,
    Progress,
    Series,
    SeriesPoint,
    Spectrum,
    SwappedAssignment,
)
from layerscan.settings import PredictSettings, parse_vary

if TYPE_CHECKING:
    from layerscan.records import ComplexArray, FloatArray, IntArray

CHUNK_LAYERS = 40_000  # layers of the draws calculated between two reports of progress
DRAWS_TOLERANCE = 5e-3  # of the quadrature over the cone, small against what the draws spread
ORDER_CERTAIN = 0.15  # how far from its place, in orders, a peak may lie without doubt about its order
WORK_LIMIT = 1e12  # draws x layers x wavelengths x directions: about a quarter of an hour


@dataclass(frozen=True, kw_only=True, eq=False)
class _Light:
    """What one stack under one set of conditions gives."""

    reflectance: Spectrum
    transmittance: Spectrum
    peaks: tuple[Peak, ...]
    colour: Colour
    flags: tuple[str, ...]
    quadrature_error: float
    cone: conditions.Cone
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
    stack = build_stack(table, settings)
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
    lateral, lateral_note = _lateral(stack, settings, light, tell)
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
        lateral=lateral,
        materials=tuple(material_record(medium) for medium in {m.name: m for m in stack.media}.values()),
        notes=stack.notes + _cone_note(light) + lateral_note,
    )


# --- calculating ----------------------------------------------------------------------------------------------------


def _calculate(stack: Stack, settings: PredictSettings, tell: Progress, *, what: str) -> _Light:
    """Nominal curves, draws, peaks and colour of one stack under one set of conditions."""
    wavelength, grid = asked_wavelengths(settings), calculation_grid(settings)
    index = np.array([index_of(medium, grid) for medium in stack.media])
    if index[0].imag.max() <= WEAK_EXTINCTION:
        index[0] = index[0].real
    else:
        raise SettingsError(
            f"The incident medium '{stack.media[0].name}' absorbs; reflectance is not defined there. "
            "Give one with k = 0."
        )
    if wavelength[0] > LAST_NM or wavelength[-1] < FIRST_NM:
        raise SettingsError(
            f"Wavelengths '{settings.wavelengths}' hold nothing of the visible range, so that no colour exists. "
            f"Let them reach into {FIRST_NM} to {LAST_NM} nm."
        )
    rng = np.random.default_rng(settings.seed)
    sequence, thickness = nominal_structure(stack, settings, rng)
    find_cone = partial(
        conditions.converged_cone, index, sequence[None], thickness[None], grid, aoi_deg=settings.angle,
        aperture=settings.aperture, incident_index=float(index[0].real[grid.size // 2]),
        polarisation=settings.polarisation,
    )  # fmt: skip
    cone, error = find_cone()
    coarse = find_cone(tolerance=DRAWS_TOLERANCE)[0] if settings.draws else cone
    slit = (
        None
        if settings.bandwidth <= 0
        else conditions.slit_weights(grid, wavelength, bandwidth_nm=settings.bandwidth).T
    )

    def observe(
        n: ComplexArray, order: IntArray, d: FloatArray, rule: conditions.Cone = coarse
    ) -> tuple[FloatArray, FloatArray]:
        r, t = conditions.observe_stacks(n, order, d, grid, cone=rule, polarisation=settings.polarisation)
        return (r, t) if slit is None else (r @ slit, t @ slit)

    r, t = observe(index, sequence[None], thickness[None], cone)
    numbers = order_numbers(index, sequence, thickness, grid, wavelength, settings.angle)
    peaks = find_peaks(wavelength, r[0], order=numbers, smooth=False) if wavelength.size >= 5 else ()
    colour = colour_of_spectrum(wavelength, r[0], illuminant=settings.illuminant, observer_deg=settings.observer)
    flags: list[str] = []
    lower = upper = t_lower = t_upper = None
    if settings.draws:
        drawn = _draw(stack, settings, index, coarse.weight.size, rng, observe, tell, what)
        reflected, transmitted, factor = drawn
        lower, upper = np.quantile(reflected, (0.025, 0.975), axis=0)
        t_lower, t_upper = np.quantile(transmitted, (0.025, 0.975), axis=0)
        peaks, uncertain = _peaks_of_draws(wavelength, reflected, numbers, factor, peaks)
        if uncertain:
            flags.append("order_uncertain")
        colour = _with_radius(colour, wavelength, reflected, settings)
    if _order_doubtful(wavelength, numbers, peaks):
        flags.append("order_uncertain")
    return _Light(
        reflectance=_spectrum(wavelength, r[0], "reflectance", lower, upper, settings),
        transmittance=_spectrum(wavelength, t[0], "transmittance", t_lower, t_upper, settings),
        peaks=peaks,
        colour=colour,
        flags=tuple(flags),
        quadrature_error=error,
        cone=cone,
        thickness_nm=thickness,
        sequence=sequence,
    )


def _cone_note(light: _Light) -> tuple[str, ...]:
    if light.quadrature_error <= conditions.CONE_TOLERANCE:
        return ()
    return (f"The average over the cone is good to {light.quadrature_error:.2g} in reflectance only.",)


def _lateral(
    stack: Stack, settings: PredictSettings, light: _Light, tell: Progress
) -> tuple[Spectrum | None, tuple[str, ...]]:
    """Mean reflectance over the traced stations, and the note that belongs to it; not without draws."""
    if stack.stations_nm is None or not stack.station_step_nm or not settings.draws or len(stack.stations_nm) < 2:
        return None, ()
    tell("averaging over the lateral positions", None)
    wavelength, grid = asked_wavelengths(settings), calculation_grid(settings)
    index = np.array([index_of(medium, grid) for medium in stack.media])
    index[0] = index[0].real
    thickness = np.repeat(light.thickness_nm[None], len(stack.stations_nm), axis=0)
    further = light.thickness_nm.size - stack.thickness_nm.size
    measured = slice(further, None) if stack.extension_first else slice(0, stack.thickness_nm.size)
    thickness[:, measured] = ensemble.fill_stations(stack.stations_nm, stack.thickness_nm)
    mean, windows = lateral_reflectance(
        index, light.sequence, thickness, grid, station_step_nm=stack.station_step_nm, aperture=settings.aperture,
        cone=light.cone, polarisation=settings.polarisation,
    )  # fmt: skip
    if settings.bandwidth > 0:
        mean = conditions.slit_weights(grid, wavelength, bandwidth_nm=settings.bandwidth) @ mean
    assumed = f" (NA {LATERAL_APERTURE:g} taken for the resolution)" if settings.aperture < LATERAL_APERTURE else ""
    note = (
        f"Mean over {len(stack.stations_nm)} lateral positions: amplitudes add within about wavelength/NA{assumed}, "
        f"intensities between the {windows} part{'s' if windows > 1 else ''} of the field that lie further apart."
    )
    return _spectrum(wavelength, mean, "reflectance", None, None, settings), (note,)


def _spectrum(
    wavelength: FloatArray, value: FloatArray, kind: Any, lower: Any, upper: Any, settings: PredictSettings
) -> Spectrum:
    return Spectrum(
        wavelength_nm=wavelength, value=value, kind=kind, lower=lower, upper=upper, aoi_deg=settings.angle,
        source="predicted",
    )  # fmt: skip


def _draw(
    stack: Stack,
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
            "would take more than a quarter of an hour. Give fewer draws (draws=0 gives the nominal curve alone)."
        )
    if 16.0 * settings.draws * index.shape[1] > MEMORY_LIMIT:
        raise SettingsError(
            f"The curves of {settings.draws} draws at {index.shape[1]} wavelengths do not fit into "
            f"{MEMORY_LIMIT / 2**30:.0f} GB. Give fewer draws or a wider wavelength step."
        )
    common = ensemble.draw_even_normal(1 + len(stack.media), draws=settings.draws, rng=rng)
    scale = 1 + stack.u_scale * common[:, 0]
    shift = common[:, 1:] * np.array([m.u_index or 0.0 for m in stack.media])
    if stack.absorber_of is not None:
        shift[:, 1] = shift[:, stack.absorber_of]
    chunk = max(min(settings.draws, CHUNK_LAYERS // total), 1)
    reflected, transmitted, factors = [], [], []
    mean = float(stack.thickness_nm.sum())
    for first in range(0, settings.draws, chunk):
        tell(what, first / settings.draws)
        some = slice(first, min(first + chunk, settings.draws))
        count = some.stop - some.start
        error = ensemble.draw_errors(stack.u_nm, draws=count, rng=rng, from_boundaries=stack.stations_nm is not None)
        d = np.maximum(stack.thickness_nm + error, 0.0)
        order = stack.sequence
        factor = d.sum(axis=1) / mean if mean > 0 else np.ones(count)
        if stack.model is not None:
            kind, further = draw_further(stack, stack.model, total - stack.thickness_nm.size, count, rng)
            order, d = join_layers(stack, kind, d, further)
        d = d * np.maximum(scale[some, None], 0.01)
        n, orders = drawn_index(index, shift[some], order)
        r, t = observe(n, orders, d)
        reflected.append(r)
        transmitted.append(t)
        factors.append(factor * scale[some])
    return np.concatenate(reflected), np.concatenate(transmitted), np.concatenate(factors)


def _order_doubtful(wavelength: FloatArray, numbers: FloatArray | None, peaks: tuple[Peak, ...]) -> bool:
    """Whether a peak has no order, or lies well away from where its order belongs."""
    if numbers is None:
        return bool(peaks)
    found = np.interp([peak.wavelength_nm for peak in peaks], wavelength, numbers)
    orders = np.array([peak.order for peak in peaks], dtype=float)
    return bool((abs(found - orders) > ORDER_CERTAIN).any())


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
            target = peak.wavelength_nm * float(scale)
            reach = peak.fwhm_nm if peak.order is None else np.inf
            same = [p for p in own if p.order == peak.order and abs(p.wavelength_nm - target) <= reach]
            if not same:
                continue
            best = same[int(np.argmin([abs(p.wavelength_nm - target) for p in same]))]
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
    """The colour with the radius that holds 95 % of the draws."""
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
    light = _calculate(build_stack(table, changed), changed, tell, what="calculating the swapped assignment")
    return SwappedAssignment(
        dark=settings.bright,
        bright=settings.dark,
        reflectance=light.reflectance,
        peaks=light.peaks,
        colour=light.colour,
    )


def _silent(what: str, fraction: float | None) -> None:
    return None


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
        light = _calculate(build_stack(changed_table, changed), changed, _silent, what="")
        points.append(SeriesPoint(value=value, reflectance=light.reflectance, peaks=light.peaks, colour=light.colour))
    return Series(name=name, unit=UNITS[name], points=tuple(points))


def _conditions(stack: Stack, settings: PredictSettings, light: _Light) -> dict[str, Any]:
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
        "directions": int(light.cone.weight.size),
        "quadrature_error": light.quadrature_error,
    }
