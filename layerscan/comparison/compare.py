"""A prediction beside an observation: differences, agreement, what would explain them, and a sentence that says so."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from layerscan._version import __version__
from layerscan.comparison import agreement as agree
from layerscan.comparison.quantities import Pair, like_with_like
from layerscan.comparison.reasons import find_reasons
from layerscan.comparison.sentence import say_colour, say_peaks
from layerscan.errors import SettingsError
from layerscan.records import Colour, Comparison

if TYPE_CHECKING:
    from layerscan.records import FloatArray, Prediction, Progress, Spectrum
    from layerscan.settings import CompareSettings


def compare_light(
    prediction: Prediction,
    observed: Spectrum | None,
    settings: CompareSettings,
    *,
    progress: Progress | None = None,
) -> Comparison:
    """Say whether the imaged structure explains an observed spectrum or colour, and if not, what would.

    Parameters
    ----------
    prediction : Prediction
        With draws, so that its peaks carry an uncertainty.
    observed : Spectrum or None
        Reflectance, transmittance or absorbance; None where ``settings.lab`` gives an observed colour.
    settings : CompareSettings
        See its fields.
    progress : callable, optional
        See ``records.Progress``; called while reasons are sought.

    Returns
    -------
    Comparison
        Differences are predicted minus observed, for the dominant peak that both sides share. ``reasons`` holds the
        single changes that would bring the peak where it was observed, likeliest first.

    Raises
    ------
    SettingsError
        Neither or both of spectrum and colour; a colour with ``scale`` free; a quantity that is not the spectrum's.
    InputError
        The spectrum cannot be used, or its range and the prediction's share less than 20 nm.

    Notes
    -----
    What the conclusions mean and how they are reached stands at ``agreement.judge_peaks``. Agreement does not prove a
    mechanism; a pigment can have its band where a multilayer would.
    """
    if (observed is None) == (settings.lab is None):
        raise SettingsError("Give either an observed spectrum or an observed colour (lab), and not both.")
    calibrated = "calibration_uncertainty_unknown" not in prediction.flags
    if observed is None:
        return _compare_colour(prediction, settings, calibrated)
    pair = like_with_like(prediction, observed, settings)
    seen = agree.observed_peaks(pair)
    match = agree.match_peaks(agree.predicted_peaks(pair, prediction), seen)
    verdict = agree.judge_peaks(match, calibrated=calibrated)
    found = find_reasons(prediction, pair, match, progress=progress)
    flags = [*prediction.flags, *pair.flags]
    if match is None:
        flags.append("no_peak")
    elif match.order_uncertain:
        flags.append("order_uncertain")
    colours = _colours(pair, prediction)
    if colours is not None:
        flags += [*colours[1].flags, "not_colour_of_iridescence"]
    return Comparison(
        version=__version__,
        settings=settings.model_dump(mode="json"),
        flags=tuple(dict.fromkeys(flags)),
        peak_difference_nm=match.difference_nm if match else None,
        u_peak_difference_nm=match.u_nm if match else None,
        fwhm_difference_nm=match.predicted.fwhm_nm - match.observed.fwhm_nm if match else None,
        rms=_rms(pair.predicted - pair.observed),
        delta_e00=_difference(*colours) if colours else None,
        agreement=verdict.agreement,
        reasons=found.reasons,
        sentence=say_peaks(prediction, pair, match, verdict, found),
        observed_source=observed.source,
        observed_sha256=observed.sha256,
        scale=pair.scale,
        predicted_colour=colours[0] if colours else None,
        observed_colour=colours[1] if colours else None,
        observed_peaks=seen,
        notes=observed.doubts,
    )


def _compare_colour(prediction: Prediction, settings: CompareSettings, calibrated: bool) -> Comparison:
    from layerscan.optics.colour import colour_difference

    if settings.scale == "free":
        raise SettingsError("A colour has no spectrum to scale. Give scale='absolute' with lab.")
    if settings.quantity is not None and settings.quantity != "reflectance":
        raise SettingsError(f"A colour (lab) is that of reflected light; quantity says {settings.quantity}.")
    assert settings.lab is not None
    if not (0 <= settings.lab[0] <= 120 and max(abs(value) for value in settings.lab[1:]) <= 200):
        raise SettingsError(f"CIELAB {settings.lab} is no colour. Give L* from 0 to 100 and a*, b* within 200.")
    delta = float(colour_difference(prediction.colour.lab, settings.lab))
    verdict = agree.judge_colour(delta, prediction.colour.delta_e00_95, calibrated=calibrated)
    flags = (*prediction.flags, "observed_uncertainty_unknown", "not_colour_of_iridescence")
    return Comparison(
        version=__version__,
        settings=settings.model_dump(mode="json"),
        flags=tuple(dict.fromkeys(flags)),
        peak_difference_nm=None,
        u_peak_difference_nm=None,
        fwhm_difference_nm=None,
        rms=None,
        delta_e00=delta,
        agreement=verdict.agreement,
        reasons=(),
        sentence=say_colour(prediction, settings.lab, delta, verdict),
        observed_source="CIELAB as typed",
        observed_colour=_typed_colour(settings.lab, prediction.colour),
    )


def _colours(pair: Pair, prediction: Prediction) -> tuple[Colour, Colour] | None:
    """Both colours over the same wavelengths, under the prediction's illuminant and observer; None out of sight."""
    from layerscan.optics.colour import FIRST_NM, LAST_NM, colour_of_spectrum

    if pair.wavelength_nm[0] >= LAST_NM or pair.wavelength_nm[-1] <= FIRST_NM:
        return None

    def colour(value: FloatArray) -> Colour:
        return colour_of_spectrum(
            pair.wavelength_nm,
            value,
            illuminant=prediction.colour.illuminant,  # type: ignore[arg-type]
            observer_deg=prediction.colour.observer_deg,  # type: ignore[arg-type]
        )

    return colour(pair.predicted), colour(pair.observed)


def _difference(predicted: Colour, observed: Colour) -> float:
    from layerscan.optics.colour import colour_difference

    return float(colour_difference(predicted.lab, observed.lab))


def _typed_colour(lab: tuple[float, float, float], like: Colour) -> Colour:
    """The observed colour as a record with a swatch, under the illuminant and observer of the prediction."""
    from layerscan.optics.colour import dominant_wavelength, srgb_of_lab, white_point, xyz_of_lab

    light: dict[str, Any] = {"illuminant": like.illuminant, "observer_deg": like.observer_deg}
    xyz = [float(value) for value in xyz_of_lab(lab, white_point(**light))]
    srgb, in_gamut = srgb_of_lab(lab)
    total = sum(xyz)
    xy = (xyz[0] / total, xyz[1] / total) if total > 0 else like.xy
    dominant, purity = dominant_wavelength(xy, **light)
    return Colour(
        xyz=(xyz[0], xyz[1], xyz[2]),
        xy=xy,
        lab=lab,
        srgb=srgb,
        in_gamut=in_gamut,
        dominant_wavelength_nm=dominant,
        excitation_purity=purity,
        flags=() if in_gamut else ("out_of_gamut",),
        **light,
    )


def _rms(difference: FloatArray) -> float:
    import numpy as np

    return float(np.sqrt(np.mean(difference**2)))
