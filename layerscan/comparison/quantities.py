"""Like compared with like: prediction and observation as the same quantity on the same wavelengths."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from layerscan.errors import InputError, SettingsError

if TYPE_CHECKING:
    from layerscan.records import FloatArray, Prediction, Spectrum, SpectrumKind
    from layerscan.settings import CompareSettings

SMALLEST_OVERLAP_NM = 20.0
"""A shorter common range holds no band: the narrowest first-order bands of soft matter are about 20 nm wide."""


@dataclass(frozen=True, kw_only=True, eq=False)
class Pair:
    """Both sides on the prediction's wavelengths, within the common range.

    ``observed`` is scaled by ``scale``; ``noise`` is the standard deviation of one observed value; ``step_nm`` the
    distance of the observed samples. ``bands`` turns the dips of a transmittance upwards.
    """

    kind: SpectrumKind
    wavelength_nm: FloatArray
    predicted: FloatArray
    observed: FloatArray
    noise: float
    step_nm: float
    scale: float | None
    covers_prediction: bool
    flags: tuple[str, ...]
    notes: tuple[str, ...]

    @property
    def through(self) -> bool:
        """Whether transmittance is compared."""
        return self.kind == "transmittance"

    def bands(self, value: FloatArray) -> FloatArray:
        """The curve with its bands upwards: 1 - T for transmittance."""
        return 1.0 - value if self.through else value


def like_with_like(prediction: Prediction, observed: Spectrum, settings: CompareSettings) -> Pair:
    """Bring both sides to one quantity and one set of wavelengths.

    Parameters
    ----------
    prediction : Prediction
        Reflectance and transmittance, 0 to 1.
    observed : Spectrum
        Reflectance is compared with reflectance, transmittance with transmittance; absorbance A becomes the
        transmittance 10^-A (decadic: IUPAC Gold Book, "absorbance"). Linear interpolation to the prediction's
        wavelengths.
    settings : CompareSettings
        ``quantity`` must be what the spectrum says it is; ``scale`` "free" fits one factor on the observed values.

    Raises
    ------
    SettingsError
        ``quantity`` contradicts the spectrum.
    InputError
        The wavelengths do not increase, a value is not finite, or the ranges share less than 20 nm.
    """
    import numpy as np

    if settings.quantity is not None and settings.quantity != observed.kind:
        raise SettingsError(
            f"The observed spectrum says that it is {observed.kind}, quantity says {settings.quantity}. "
            f"Open it again with quantity='{settings.quantity}', or leave quantity out."
        )
    wavelength, value = _checked(observed)
    noise = noise_of(value) if observed.u is None else float(np.median(observed.u))
    notes = []
    kind: SpectrumKind = observed.kind
    if kind == "absorbance":
        noise *= float(np.median(10.0**-value)) * np.log(10)
        kind, value = "transmittance", 10.0**-value
        notes.append("The observed absorbance A was compared as the transmittance 10^-A.")
    curve = prediction.transmittance if kind == "transmittance" else prediction.reflectance
    low = max(float(curve.wavelength_nm[0]), float(wavelength[0]))
    high = min(float(curve.wavelength_nm[-1]), float(wavelength[-1]))
    if high - low < SMALLEST_OVERLAP_NM:
        raise InputError(
            f"Prediction ({_span(curve.wavelength_nm)}) and observation ({_span(wavelength)}) share "
            f"{max(high - low, 0.0):.0f} nm; at least {SMALLEST_OVERLAP_NM:.0f} nm are needed. "
            "Predict over the observed range with wavelengths=START:STOP:STEP."
        )
    inside = (curve.wavelength_nm >= low) & (curve.wavelength_nm <= high)
    common = curve.wavelength_nm[inside]
    if common.size < 5:
        raise InputError(
            f"The prediction has {common.size} wavelengths from {low:.0f} to {high:.0f} nm, where the observation "
            "lies; 5 are needed. Predict in finer steps with wavelengths=START:STOP:STEP."
        )
    predicted, seen = curve.value[inside], np.interp(common, wavelength, value)
    flags = [*observed.flags]
    scale = None
    if settings.scale == "free":
        scale = _fitted_scale(predicted, seen)
        seen, noise = seen * scale, noise * scale
        flags.append("scale_free")
    elif kind == "reflectance" and float(np.max(seen)) > 1.0 + 4 * noise + 0.02:
        flags.append("specular_reference_suspected")
    if observed.u is None:
        flags.append("observed_uncertainty_unknown")
    covers = bool(np.count_nonzero(inside) >= curve.wavelength_nm.size - 1)
    if not covers:
        flags.append("partial_overlap")
    return Pair(
        kind=kind,
        wavelength_nm=common,
        predicted=predicted,
        observed=seen,
        noise=noise,
        step_nm=float(np.median(np.diff(wavelength))),
        scale=scale,
        covers_prediction=covers,
        flags=tuple(flags),
        notes=tuple(notes),
    )


def noise_of(value: FloatArray) -> float:
    """Standard deviation of the noise of an evenly sampled curve, from its second differences.

    Robust (median absolute deviation, 1.4826 for a normal law), so that sharp flanks do not count as noise; noise that
    a maker's smoothing has spread over several samples is not seen.
    """
    import numpy as np

    second = value[:-2] - 2 * value[1:-1] + value[2:]
    return float(1.4826 * np.median(np.abs(second - np.median(second))) / np.sqrt(6)) if second.size else 0.0


def _checked(observed: Spectrum) -> tuple[FloatArray, FloatArray]:
    import numpy as np

    wavelength = np.asarray(observed.wavelength_nm, dtype=np.float64)
    value = np.asarray(observed.value, dtype=np.float64)
    name = observed.source or "the observed spectrum"
    if wavelength.ndim != 1 or wavelength.shape != value.shape or wavelength.size < 5:
        raise InputError(
            f"{name} has {value.size} values at {wavelength.size} wavelengths; at least 5 pairs are needed."
        )
    if not (np.all(np.isfinite(wavelength)) and np.all(np.isfinite(value))):
        raise InputError(f"{name} has values that are not finite. Leave those wavelengths out.")
    if np.any(np.diff(wavelength) <= 0):
        raise InputError(f"The wavelengths of {name} do not increase. Sort them and remove duplicates.")
    return wavelength, value


def _fitted_scale(predicted: FloatArray, observed: FloatArray) -> float:
    """Least-squares factor on the observed values, both sides sorted; refused where it is not positive.

    Sorting makes the factor one of heights alone: a band that lies elsewhere does not pull it down.
    """
    import numpy as np

    high, seen = np.sort(predicted), np.sort(observed)
    total = float(seen @ seen)
    factor = float(high @ seen) / total if total > 0 else 0.0
    if factor <= 0:
        raise InputError("No positive factor brings the observed spectrum to the predicted one: is it all zero?")
    return factor


def _span(wavelength_nm: FloatArray) -> str:
    return f"{wavelength_nm[0]:.0f} to {wavelength_nm[-1]:.0f} nm"
