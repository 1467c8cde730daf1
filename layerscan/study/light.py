"""Predicted beside observed light, specimen by specimen."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, fields, replace
from typing import Any

from layerscan.records import Colour
from layerscan.report.summary import LightPair, LineFit, PeakPair, SpecimenRow
from layerscan.study.analysis import Specimen
from layerscan.study.ledger import TaskRecord
from layerscan.study.lines import compare_with_identity
from layerscan.study.results import ImageResult, SpectrumResult, StudyResults
from layerscan.uncertainty import combine


@dataclass(frozen=True, kw_only=True)
class PeakMean:
    """Mean of a peak over images or spectra of one specimen."""

    mean_nm: float
    u_nm: float | None
    order: int | None
    n: int


def mean_peak(peaks: Sequence[Mapping[str, Any]]) -> PeakMean | None:
    """Mean of peaks; u combines their scatter with their own mean uncertainty, which they may share.

    The single uncertainties hold calibration and indices, common to all of them: averaging does not shrink that part,
    and here it does not shrink the rest of it either, which errs on the large side.
    """
    if not peaks:
        return None
    values = [float(peak["wavelength_nm"]) for peak in peaks]
    mean = math.fsum(values) / len(values)
    own = [float(peak["u_wavelength_nm"]) for peak in peaks if peak.get("u_wavelength_nm") is not None]
    shared = math.sqrt(math.fsum(u * u for u in own) / len(own)) if own else None
    scatter = None
    if len(values) > 1:
        scatter = math.sqrt(math.fsum((v - mean) ** 2 for v in values) / (len(values) - 1) / len(values))
    orders = {peak.get("order") for peak in peaks}
    return PeakMean(
        mean_nm=mean, u_nm=combine(scatter, shared), order=orders.pop() if len(orders) == 1 else None, n=len(values)
    )


def predicted_peak(specimen: Specimen) -> PeakMean | None:
    """Main predicted peak of a specimen over its images."""
    return mean_peak([peak for image in specimen.images if (peak := image.main_peak()) is not None])


def matched_peaks(specimen: Specimen) -> tuple[PeakMean, PeakMean] | None:
    """Predicted and observed peak of a specimen as its comparisons matched them, of the order that most of them share.

    Tallest peaks of both sides need not be of one order; only a comparison says which belong together.
    """
    pairs = []
    for image in specimen.images:
        for task in image.compare.values():
            pair = _match(image, task.document or {})
            if pair is not None:
                pairs.append(pair)
    if not pairs:
        return None
    orders = [predicted["order"] for predicted, _ in pairs]
    chosen = [pair for pair in pairs if pair[0]["order"] == max(orders, key=orders.count)]
    predicted, observed = mean_peak([p for p, _ in chosen]), mean_peak([o for _, o in chosen])
    return None if predicted is None or observed is None else (predicted, observed)


def _match(image: ImageResult, answer: Mapping[str, Any]) -> tuple[Mapping[str, Any], Mapping[str, Any]] | None:
    """The two peaks whose difference a comparison states; of transmittance, dips near the predicted peaks."""
    difference = answer.get("peak_difference_nm")
    pairs = [
        (predicted, observed)
        for predicted in (image.prediction or {}).get("peaks") or ()
        for observed in answer.get("observed_peaks") or ()
    ]
    if difference is None or not pairs:
        return None

    def distance(pair: tuple[Mapping[str, Any], Mapping[str, Any]]) -> float:
        return abs(float(pair[0]["wavelength_nm"]) - float(pair[1]["wavelength_nm"]) - float(difference))

    predicted, observed = min(pairs, key=distance)
    return {**predicted, "wavelength_nm": observed["wavelength_nm"] + difference}, observed


def observed_spectra(results: StudyResults, specimen: Specimen) -> list[SpectrumResult]:
    """Spectra of a specimen that count."""
    own = (s for s in results.spectra if (s.group, s.specimen) == (specimen.group, specimen.name))
    return [s for s in own if s.state == "done" and s.document is not None]


def observed_peak(spectra: Iterable[SpectrumResult]) -> PeakMean | None:
    """Main observed peak (of transmittance: dip) of a specimen over its spectra."""
    return mean_peak([peak for spectrum in spectra if (peak := spectrum.main_peak()) is not None])


def representative_image(specimen: Specimen) -> ImageResult | None:
    """The image whose predicted peak lies nearest the specimen's mean: its curve stands for the specimen."""
    mean = predicted_peak(specimen)
    predicted = [image for image in specimen.images if image.prediction is not None]
    if mean is None or not predicted:
        return predicted[0] if predicted else None

    def distance(image: ImageResult) -> float:
        peak = image.main_peak()
        return math.inf if peak is None else abs(float(peak["wavelength_nm"]) - mean.mean_nm)

    return min(predicted, key=distance)


def conclude(conclusions: Sequence[str]) -> str | None:
    """One conclusion from those of a specimen's images and spectra: theirs where all agree, else ``cannot_tell``."""
    if not conclusions:
        return None
    return conclusions[0] if len(set(conclusions)) == 1 else "cannot_tell"


def light_pairs(results: StudyResults, specimens: Sequence[Specimen]) -> tuple[LightPair, ...]:
    """One pair a spectrum, with the prediction of the specimen's representative image; alone where none was taken."""
    pairs = []
    for specimen in specimens:
        image = representative_image(specimen)
        if image is None or image.prediction is None:
            continue
        spectra = [s for s in observed_spectra(results, specimen) if (s.document or {})["kind"] != "absorbance"]
        if not spectra:
            pairs.append(_predicted_pair(specimen, image.prediction, "reflectance"))
        for spectrum in spectra:
            document = spectrum.document or {}
            pair = _predicted_pair(specimen, image.prediction, document["kind"])
            pairs.append(_with_observed(pair, spectrum, document, image.compare.get(spectrum.unit.key)))
    return tuple(pairs)


def _predicted_pair(specimen: Specimen, prediction: Mapping[str, Any], kind: Any) -> LightPair:
    reflected = kind == "reflectance"
    bounds = (prediction.get("lower"), prediction.get("upper")) if reflected else (None, None)
    return LightPair(
        group=specimen.group,
        specimen=specimen.name,
        kind=kind,
        wavelength_nm=tuple(prediction["wavelength_nm"]),
        predicted=_numbers(prediction[kind]),
        lower=None if bounds[0] is None else _numbers(bounds[0]),
        upper=None if bounds[1] is None else _numbers(bounds[1]),
        orders=tuple((peak["order"], float(peak["wavelength_nm"])) for peak in prediction["peaks"]),
        predicted_colour=read_colour(prediction.get("colour")),
        observed_path=None,
        flags=tuple(prediction.get("flags") or ()),
    )


def _with_observed(
    pair: LightPair, spectrum: SpectrumResult, document: Mapping[str, Any], compared: TaskRecord | None
) -> LightPair:
    u = document.get("u")
    pair = replace(
        pair,
        observed_path=spectrum.unit.row["path"],
        observed_spot=spectrum.unit.row.get("spot"),
        observed_reference=spectrum.unit.row.get("reference"),
        observed_wavelength_nm=tuple(document["wavelength_nm"]),
        observed=_numbers(document["value"]),
        observed_u=None if u is None else _numbers(u),
        observed_colour=_colour_like(document, pair.predicted_colour),
        flags=tuple(dict.fromkeys([*pair.flags, *(document.get("flags") or ())])),
    )
    if compared is None or compared.document is None:
        return replace(pair, sentence=compared.reason or "" if compared else "")
    answer = compared.document
    return replace(
        pair,
        conclusion=answer["agreement"]["conclusion"],
        sentence=answer["sentence"],
        peak_difference_nm=answer["peak_difference_nm"],
        u_peak_difference_nm=answer["u_peak_difference_nm"],
        delta_e00=answer["delta_e00"],
        reasons=tuple(_say_reason(reason) for reason in answer["reasons"]),
        flags=tuple(dict.fromkeys([*pair.flags, *answer["flags"]])),
    )


def _say_reason(reason: Mapping[str, Any]) -> str:
    parts = [f"{name} = {value:.4g}" for name, value in zip(reason["parameters"], reason["values"], strict=False)]
    others = reason.get("indistinguishable_from") or ()
    return ", ".join(parts) + (f" (these data cannot tell it from: {', '.join(others)})" if others else "")


def _numbers(values: Sequence[float | None]) -> tuple[float, ...]:
    return tuple(math.nan if v is None else float(v) for v in values)


def read_colour(document: Mapping[str, Any] | None) -> Colour | None:
    """A colour record from its document form."""
    if not document:
        return None
    names = {f.name for f in fields(Colour)}
    values: dict[str, Any] = {k: tuple(v) if isinstance(v, list) else v for k, v in document.items() if k in names}
    return Colour(**values)


def specimen_rows(
    results: StudyResults, specimens: Sequence[Specimen], quantities: Sequence[str]
) -> tuple[SpecimenRow, ...]:
    """One row a specimen: means over its images, predicted and observed peak, and what the comparisons conclude."""
    rows = []
    for specimen in specimens:
        spectra = observed_spectra(results, specimen)
        predicted, observed = matched_peaks(specimen) or (predicted_peak(specimen), observed_peak(spectra))
        image = representative_image(specimen)
        colour = read_colour(((image.prediction if image else None) or {}).get("colour"))
        estimates = [e for name in quantities if (e := specimen.estimate(name)) is not None]
        rows.append(
            SpecimenRow(
                group=specimen.group,
                specimen=specimen.name,
                position=specimen.position(),
                estimates=tuple(estimates),
                predicted_peak_nm=predicted.mean_nm if predicted else None,
                u_predicted_peak_nm=predicted.u_nm if predicted else None,
                observed_peak_nm=observed.mean_nm if observed else None,
                u_observed_peak_nm=observed.u_nm if observed else None,
                conclusion=conclude(_conclusions(specimen)),
                predicted_colour=colour,
                observed_colour=_first_colour(spectra, colour),
            )
        )
    return tuple(rows)


def _conclusions(specimen: Specimen) -> list[str]:
    tasks = [task for image in specimen.images for task in image.compare.values()]
    return [str(task.document["agreement"]["conclusion"]) for task in tasks if task.document is not None]


def _colour_like(document: Mapping[str, Any], like: Colour | None) -> Colour | None:
    """The colour under the illuminant and observer of ``like``; the first one where that is None."""
    colours = document.get("colours") or {}
    if like is None:
        return read_colour(next(iter(colours.values()), None))
    return read_colour(colours.get(f"{like.illuminant}/{like.observer_deg}"))


def _first_colour(spectra: Sequence[SpectrumResult], like: Colour | None) -> Colour | None:
    found = (_colour_like(spectrum.document or {}, like) for spectrum in spectra)
    return next((colour for colour in found if colour is not None), None)


def peak_pairs(results: StudyResults, specimens: Sequence[Specimen]) -> tuple[PeakPair, ...]:
    """Predicted and observed peak of each specimen that was compared with a spectrum."""
    pairs = []
    for specimen in specimens:
        matched = matched_peaks(specimen)
        if matched is None:
            continue
        predicted, observed = matched
        kinds = [(s.document or {})["kind"] for s in observed_spectra(results, specimen)] or ["reflectance"]
        pairs.append(
            PeakPair(
                group=specimen.group,
                specimen=specimen.name,
                order=predicted.order,
                predicted_nm=predicted.mean_nm,
                u_predicted_nm=predicted.u_nm,
                observed_nm=observed.mean_nm,
                u_observed_nm=observed.u_nm,
                kind=kinds[0],
                conclusion=conclude(_conclusions(specimen)),
            )
        )
    return tuple(pairs)


def fit_pairs(pairs: Sequence[PeakPair], *, level: float) -> LineFit | None:
    """The line through the pairs, held against 1:1; None without any pair."""
    if not pairs:
        return None
    return compare_with_identity(
        [pair.predicted_nm for pair in pairs],
        [pair.observed_nm for pair in pairs],
        u_predicted=[pair.u_predicted_nm for pair in pairs],
        u_observed=[pair.u_observed_nm for pair in pairs],
        level=level,
    )
