"""The JSON documents as pydantic models: what each field is called and holds. The JSON Schemas are made from these."""

from __future__ import annotations

from typing import Any, Literal

from pydantic import BaseModel, ConfigDict, Field


class _Part(BaseModel):
    model_config = ConfigDict(extra="forbid", populate_by_name=True)


class _Document(_Part):
    version: str = Field(description="version of layerscan that made the document")
    flags: list[str] = Field(description="doubts and conditions, each explained by the program")


class AverageModel(_Part):
    """A mean realised in the image."""

    mean: float
    u: float | None = Field(description="standard uncertainty, calibration included where known, no sampling term")
    sd: float | None = Field(description="spread between layers, measurement noise removed")
    n: int = Field(description="complete layers, or whole periods")


class ExclusionModel(_Part):
    """A part of the page that is no specimen."""

    region: list[int] = Field(min_length=4, max_length=4)
    reason: str


class ImageModel(_Part):
    """The image that was measured."""

    path: str | None = Field(description="relative paths start at the document's folder")
    sha256: str | None
    page: int
    shape: list[int] = Field(min_length=2, max_length=2)
    pixel_size_nm: list[float] | None = Field(description="[row, column]; null where unknown")
    u_pixel_size_relative: float | None
    pixel_size_source: str | None
    doubts: list[str]
    excluded: list[ExclusionModel] = []


class DetectionModel(_Part):
    """The evidence for a layered structure."""

    statistic: float | None
    p_value: float | None
    region: list[int] | None = Field(description="row0, column0, row1, column1 in pixels of the full page, half-open")


class SpacingModel(_Part):
    """The dominant spacing of the pattern."""

    value: float
    u: float | None
    method: str


class LayerModel(_Part):
    """One layer in depth order."""

    index: int
    phase: Literal["dark", "middle", "bright", "other"]
    thickness_nm: float
    u_nm: float | None
    sd_lateral_nm: float | None
    complete: bool
    flags: list[str]


class BoundaryModel(_Part):
    """One boundary between two layers."""

    index: int
    depth_nm: float
    u_nm: float | None
    roughness_nm: float | None
    correlation_length_nm: float | None
    flags: list[str]
    terminations: int = 0
    edited: bool = False


class BudgetModel(_Part):
    """One component of the uncertainty budget."""

    quantity: str
    component: str
    kind: Literal["A", "B"]
    distribution: str
    relative: float | None
    u_nm: float | None
    sensitivity: float | None
    share: float | None
    degrees_of_freedom: float | None


class PhaseStatisticsModel(_Part):
    """Distribution of the thickness of one phase."""

    phase: str
    n: int
    mean_nm: float
    sd_nm: float | None
    skewness: float | None
    law: str | None
    law_p_value: float | None


class StatisticsModel(_Part):
    """What the sequence of layers is like."""

    phases: list[PhaseStatisticsModel]
    neighbour_correlation: float | None
    u_neighbour_correlation: float | None
    drift_relative_per_layer: float | None
    u_drift_relative_per_layer: float | None
    disorder: Literal["cumulative", "non-cumulative", "undecided"] | None
    coherence_length_nm: float | None
    replication: float | None
    missing_layers: int
    terminations: int
    limited_by: str | None
    next_measurement: str | None


class EndsModel(_Part):
    """Whether the stack goes on beyond the frame."""

    start_cut_by_frame: bool | None
    end_cut_by_frame: bool | None


class ProfileModel(_Part):
    """Intensity against depth and its power spectrum."""

    depth_nm: list[float | None]
    intensity: list[float | None]
    frequency_per_nm: list[float | None]
    power: list[float | None]


class MeasurementDocument(_Document):
    """Layers, period and uncertainty of one image."""

    schema_: Literal["layerscan.measurement/1"] = Field("layerscan.measurement/1", alias="schema")
    settings: dict[str, Any]
    image: ImageModel
    structure: Literal["lamellae", "coating", "helicoid", "none"]
    layered: bool
    periodic: bool
    detection: DetectionModel
    orientation_deg: float | None = Field(description="layer normal, from the +column axis towards the +row axis")
    u_orientation_deg: float | None
    spacing_nm: SpacingModel | None
    period_nm: AverageModel | None
    dark_nm: AverageModel | None
    middle_nm: AverageModel | None
    bright_nm: AverageModel | None
    arc_repeat_nm: AverageModel | None
    pitch_nm: AverageModel | None
    layers: list[LayerModel]
    boundaries: list[BoundaryModel]
    budget: list[BudgetModel]
    statistics: StatisticsModel | None = None
    ends: EndsModel
    profile: ProfileModel | None = None


class PeakModel(_Part):
    """A band read at half height."""

    order: int | None
    wavelength_nm: float
    u_wavelength_nm: float | None
    reflectance: float
    fwhm_nm: float


class ColourModel(_Part):
    """Colour of a spectrum."""

    xyz: list[float] = Field(min_length=3, max_length=3)
    xy: list[float] = Field(min_length=2, max_length=2)
    lab: list[float] = Field(min_length=3, max_length=3)
    srgb: str
    in_gamut: bool
    dominant_wavelength_nm: float | None = Field(description="negative: complementary wavelength of a purple")
    excitation_purity: float | None
    delta_e00_95: float | None
    illuminant: str
    observer_deg: int
    flags: list[str] = []


class PredictedStructureModel(_Part):
    """The stack that was calculated, from the lit side."""

    layers: int
    layers_seen: int
    sequence: list[str]
    thickness_nm: list[float]
    source: str
    source_sha256: str | None


class SwappedModel(_Part):
    """What the other assignment of materials to dark and bright would give."""

    dark: str
    bright: str
    reflectance: list[float | None]
    peaks: list[PeakModel]
    colour: ColourModel


class SeriesPointModel(_Part):
    """One step of a parameter series."""

    value: float
    reflectance: list[float | None]
    peaks: list[PeakModel]
    colour: ColourModel


class SeriesModel(_Part):
    """Spectra against one varied parameter."""

    name: str
    unit: str
    points: list[SeriesPointModel]


class PredictionDocument(_Document):
    """Spectrum and colour that a structure predicts."""

    schema_: Literal["layerscan.prediction/1"] = Field("layerscan.prediction/1", alias="schema")
    settings: dict[str, Any]
    structure: PredictedStructureModel
    conditions: dict[str, Any]
    wavelength_nm: list[float]
    reflectance: list[float | None]
    lower: list[float | None] | None
    upper: list[float | None] | None
    transmittance: list[float | None]
    lateral: list[float | None] | None = Field(
        None, description="mean reflectance over the lateral positions of the traced boundaries"
    )
    peaks: list[PeakModel]
    colour: ColourModel
    swapped: SwappedModel | None = None
    series: SeriesModel | None = None
    materials: list[dict[str, Any]] = []
    notes: list[str] = []


class AgreementModel(_Part):
    """Whether the difference lies within the uncertainties of both sides."""

    statistic: float | None
    p_value: float | None
    conclusion: Literal["explains", "contradicts", "cannot_tell"]
    passing_peak_range_nm: list[float] | None


class ReasonModel(_Part):
    """A change of parameters that would explain the difference."""

    parameters: list[str]
    values: list[float]
    u: list[float | None]
    prior: list[str]
    evidence: float | None
    indistinguishable_from: list[str]


class SourceModel(_Part):
    """A file that a document was made from; relative paths start at the document's folder."""

    path: str | None
    sha256: str | None


class ComparisonDocument(_Document):
    """A prediction beside an observation."""

    schema_: Literal["layerscan.comparison/1"] = Field("layerscan.comparison/1", alias="schema")
    settings: dict[str, Any]
    peak_difference_nm: float | None
    u_peak_difference_nm: float | None
    fwhm_difference_nm: float | None
    rms: float | None
    delta_e00: float | None
    agreement: AgreementModel
    reasons: list[ReasonModel]
    sentence: str
    prediction: SourceModel
    observed: SourceModel
    scale: float | None = None
    predicted_colour: ColourModel | None = None
    observed_colour: ColourModel | None = None
    observed_peaks: list[PeakModel] = []
    notes: list[str] = Field([], description="doubts about the observed spectrum")


class InspectionDocument(_Document):
    """What an image file holds."""

    schema_: Literal["layerscan.inspection/1"] = Field("layerscan.inspection/1", alias="schema")
    image: ImageModel
    file_format: str
    stored_type: str
    page_count: int
    field_of_view_nm: list[float] | None
    minimum: float | None
    maximum: float | None
    saturated_fraction: float | None
    metadata: dict[str, str]
    advice: list[str]


class ChangeModel(_Part):
    """One field that came out differently."""

    field: str
    saved: Any
    now: Any


class VerificationDocument(_Part):
    """A saved document run again."""

    schema_: Literal["layerscan.verification/1"] = Field("layerscan.verification/1", alias="schema")
    version: str
    document: str
    equal: bool
    changes: list[ChangeModel]
    notes: list[str]


class MediumModel(_Part):
    """One material of the catalogue."""

    name: str
    names: list[str]
    axes: list[str]
    index_589: list[list[float] | None] = Field(description="[n, extinction coefficient] at 589.3 nm per axis")
    range_nm: list[float] | None
    u_index: float | None = Field(description="standard uncertainty of n; null: not stated")
    temperature_c: float | None
    source: str
    doi: str | None
    status: str
    note: str


class MaterialsDocument(_Part):
    """The catalogue, or one entry of it."""

    schema_: Literal["layerscan.materials/1"] = Field("layerscan.materials/1", alias="schema")
    version: str
    media: list[MediumModel]


class StudyDocument(_Part):
    """What a run of a study did."""

    schema_: Literal["layerscan.study/1"] = Field("layerscan.study/1", alias="schema")
    version: str
    folder: str
    ledger: str
    report: str
    written: list[str]
    images: int
    done: int
    failed: int
    excluded: int
    missing: int
    without_layers: int
    worked_on: int
    kept: int
    failures: list[list[str]] = Field(description="[path, reason] of each image or spectrum that failed")
    answer: str
    decisions: list[list[str]] = Field(description="[group, limit, pass | fail | undecided]")
    exit_code: int


class ProblemModel(_Part):
    """Something in a plan that is missing or worth knowing."""

    place: str
    text: str
    severity: str


class StudyCheckDocument(_Part):
    """What a run of a study would do; nothing was run."""

    schema_: Literal["layerscan.study_check/1"] = Field("layerscan.study_check/1", alias="schema")
    version: str
    plan: str
    folder: str
    images: int
    spectra: int
    groups: list[tuple[str, int, int]] = Field(description="[group, specimens, images]")
    done: int
    to_measure: int
    to_predict: int
    to_compare: int
    to_read: int
    problems: list[ProblemModel]
    not_stated: list[str]
    exit_code: int


DOCUMENTS: dict[str, type[_Part]] = {
    "measurement": MeasurementDocument,
    "prediction": PredictionDocument,
    "comparison": ComparisonDocument,
    "inspection": InspectionDocument,
    "verification": VerificationDocument,
    "materials": MaterialsDocument,
    "study": StudyDocument,
    "study_check": StudyCheckDocument,
}
