"""The conclusion in plain English: the numbers, what would also have passed, what would explain it, what to do next."""

from __future__ import annotations

from typing import TYPE_CHECKING

from layerscan.figures.style import number_text

if TYPE_CHECKING:
    from layerscan.comparison.agreement import PeakMatch, Verdict
    from layerscan.comparison.quantities import Pair
    from layerscan.comparison.reasons import Found
    from layerscan.records import Peak, Prediction, Reason

OPENINGS = {
    "explains": "The imaged structure explains the observed {what}",
    "contradicts": "The imaged structure does not explain the observed {what}",
    "cannot_tell": "Whether the imaged structure explains the observed {what} cannot be told",
}
NEXT = (
    ("scale of all thicknesses", "image a length standard at this magnification, and measure the spectrum before and "
     "after preparation"),
    ("index", "measure the spectrum again with the specimen in a liquid of known index"),
    ("swapped", "identify the phases by their stain or in a second detector"),
    ("lit from", "measure the spectrum from both sides"),
    ("angle", "measure at stated angles: how the peak moves gives angle and index"),
    ("aperture", "measure with the aperture stopped down"),
    ("layers in", "image the full depth of the stack"),
)  # fmt: skip
"""What would test each kind of reason."""


def say_peaks(prediction: Prediction, pair: Pair, match: PeakMatch | None, verdict: Verdict, found: Found) -> str:
    """The conclusion of a comparison of spectra."""
    conclusion = verdict.agreement.conclusion
    opening = OPENINGS[conclusion].format(what=pair.kind)
    doubts = "; ".join(verdict.doubts)
    if match is None:
        advice = "Next: predict and measure over a wider range of wavelengths"
        return _join([f"{opening}: {doubts}", *pair.notes, advice])
    parts = [f"{opening}: {doubts}" if doubts else opening, _numbers(pair, match, verdict)]
    span = verdict.agreement.passing_peak_range_nm
    if span is not None:
        parts.append(f"Observed peaks from {span[0]:.0f} to {span[1]:.0f} nm would also have passed"
                     if conclusion == "explains" else f"Observed peaks from {span[0]:.0f} to {span[1]:.0f} nm would "
                     "have passed")  # fmt: skip
    ratio = match.observed.reflectance / match.predicted.reflectance
    if pair.scale is None and not pair.through and not 0.5 <= ratio <= 2:
        parts.append(f"The observed band is {ratio:.2g} times as high as predicted; height was not tested, since spot, "
                     "reference and scattering decide it too")  # fmt: skip
    if match.order_uncertain:
        parts.append("Which order the observed peak is remains uncertain")
    if "index_uncertainty_unknown" in prediction.flags:
        parts.append("The uncertainty of an index is not stated and is left out")
    if conclusion == "explains":
        parts.append("Agreement does not prove a mechanism")
    statistic = verdict.agreement.statistic
    if found.note or statistic is None or conclusion == "contradicts":
        parts += _reasons(found)
    parts.append(_next(conclusion, prediction, verdict, found))
    return _join([*parts, *pair.notes])


def say_colour(prediction: Prediction, lab: tuple[float, float, float], delta_e00: float, verdict: Verdict) -> str:
    """The conclusion of a comparison of colours alone."""
    opening = OPENINGS[verdict.agreement.conclusion].format(what="colour")
    doubts = "; ".join(verdict.doubts)
    predicted = ", ".join(f"{value:.1f}" for value in prediction.colour.lab)
    observed = ", ".join(f"{value:.1f}" for value in lab)
    parts = [
        f"{opening}: {doubts}" if doubts else opening,
        f"CIELAB {predicted} is predicted and {observed} observed, CIEDE2000 {delta_e00:.1f}",
    ]
    if prediction.colour.delta_e00_95:
        parts.append(f"95 % of the predicted colours lie within {prediction.colour.delta_e00_95:.1f}")
    parts.append("A colour alone says less than a spectrum: measure one")
    return _join(parts)


def name_reason(reason: Reason) -> str:
    """A reason as a phrase: what, and the value needed with its unit; a change that is all or nothing has no value."""
    name, _, unit = reason.parameters[0].removesuffix(")").rpartition(" (")
    value = number_text(reason.values[0], reason.u[0])
    if name:
        return f"{name} {value} {unit}"
    return unit if reason.values == (1.0,) and reason.u == (None,) else f"{unit} {value}"


def _numbers(pair: Pair, match: PeakMatch, verdict: Verdict) -> str:
    what = "dip" if pair.through else "peak"
    text = (
        f"The {what} is predicted at {_place(match.predicted)} and observed at {_place(match.observed)}, "
        f"{number_text(match.difference_nm, match.u_nm)} nm apart"
    )
    p_value = verdict.agreement.p_value
    return text if p_value is None else f"{text} (p {_p_text(p_value)})"


def _place(peak: Peak) -> str:
    order = "" if peak.order is None else f" (order {peak.order})"
    return f"{number_text(peak.wavelength_nm, peak.u_wavelength_nm)} nm{order}"


def _p_text(p_value: float) -> str:
    return "< 0.0001" if p_value < 1e-4 else f"= {p_value:.2g}"


def _reasons(found: Found) -> list[str]:
    if found.note:
        return [found.note[0].upper() + found.note[1:]]
    if not found.reasons:
        return ["No single change of thickness, index, assignment, side, angle, aperture or number of layers would "
                "bring the peak there"]  # fmt: skip
    named = [name_reason(reason) for reason in found.reasons if reason.evidence is None or reason.evidence > 0]
    if not named:
        return ["Every single change that would bring the peak there is unlikelier than the difference itself"]
    text = ["Single changes that would bring the peak there, likeliest first: " + "; ".join(named[:4])]
    first = found.reasons[0]
    if first.indistinguishable_from:
        others = " or ".join(first.indistinguishable_from[:3])
        text.append(f"This spectrum cannot tell {first.parameters[0]} from {others}")
    return text


def _next(conclusion: str, prediction: Prediction, verdict: Verdict, found: Found) -> str:
    if "calibration_uncertainty_unknown" in prediction.flags:
        return "Next: state the uncertainty of the pixel size (pixel_size='VALUE +- U nm'), from a length standard"
    if conclusion == "explains":
        return "Next: measure at several angles, where a multilayer's peak moves as predicted and a pigment's does not"
    if verdict.agreement.statistic is None:
        return "Next: predict again with the uncertainty of the layers and draws"
    if conclusion == "cannot_tell":
        return "Next: measure a smaller spot with a small aperture, and more sections, so that both bands say more"
    if found.reasons and found.reasons[0].indistinguishable_from:
        return "Next: measure at several stated angles and in a liquid of known index, which tells these apart"
    for reason in found.reasons:
        for key, advice in NEXT:
            if key in reason.parameters[0]:
                return f"Next: {advice}"
    return "Next: measure over a wider range of wavelengths, and image a second section"


def _join(parts: list[str]) -> str:
    return " ".join(part if part.endswith(".") else f"{part}." for part in parts if part)
