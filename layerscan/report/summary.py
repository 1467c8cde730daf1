"""What the page of a study shows: finished, frozen records. No ledger, no arithmetic, no drawing.

``study.workup`` fills them, ``report.study_page`` draws them. Lengths are nm, angles degrees, reflectance 0 to 1;
points are (row, column). Unknown is ``None`` and printed as "not stated" or "not known", never as 0.
Every text may hold a file name, metadata or a user's words: the page escapes it.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, Literal

from layerscan.records import Average, BudgetRow, Colour, SpectrumKind

State = Literal["done", "failed", "excluded", "missing"]
"""done: a result exists; failed: it was tried and ended with a reason; missing: not run yet."""

Verdict = Literal["pass", "fail", "undecided"]


# --- images ---------------------------------------------------------------------------------------------------------


@dataclass(frozen=True, kw_only=True)
class Thumbnail:
    """A small copy of an image, contrast stretched, some kilobytes; ``data`` are the bytes of the file itself."""

    media_type: str  # "image/jpeg" or "image/png"
    data: bytes
    width_px: int
    height_px: int
    image_px_per_px: float  # pixels of the full page per pixel of the thumbnail, the same in both directions
    pixel_size_nm: float | None  # of the thumbnail, along the columns' direction, for a scale bar


@dataclass(frozen=True, kw_only=True)
class OverlayLine:
    """One line over a thumbnail; ``points`` are (row, column) in thumbnail pixels."""

    kind: Literal["boundary", "doubtful", "edited"]  # doubtful: incomplete trace, not resolved or otherwise flagged
    points: tuple[tuple[float, float], ...]


@dataclass(frozen=True, kw_only=True)
class OverlayArea:
    """A rectangle over a thumbnail: what was used, or what was left out and why. Half-open, in thumbnail pixels."""

    kind: Literal["used", "rejected"]
    area: tuple[float, float, float, float]  # row0, column0, row1, column1
    reason: str


@dataclass(frozen=True, kw_only=True)
class LayerPoint:
    """One layer for the plot of thickness against layer number."""

    index: int
    phase: str
    thickness_nm: float
    u_nm: float | None
    complete: bool
    resolved: bool  # False: hatched
    flags: tuple[str, ...] = ()


@dataclass(frozen=True, kw_only=True)
class ImageRow:
    """One image of the study, whatever became of it."""

    key: str  # unique in the study, safe in a file name and as an HTML id
    path: str  # as the plan names it, relative to the study's folder
    group: str
    specimen: str
    section: str | None = None
    position: str | None = None  # along a web or with depth, as typed
    state: State
    reason: str | None = None  # of a failure or an exclusion
    attempts: int = 0
    seconds: float | None = None  # processor time of the last attempt
    sha256: str | None = None
    layered: bool | None = None
    periodic: bool | None = None
    structure: str | None = None
    orientation_deg: float | None = None
    period: Average | None = None
    dark: Average | None = None
    middle: Average | None = None
    bright: Average | None = None
    spacing_nm: float | None = None
    u_spacing_nm: float | None = None
    layers: tuple[LayerPoint, ...] = ()
    edited_by_hand: bool = False
    flags: tuple[str, ...] = ()
    rejected: tuple[str, ...] = ()  # one sentence per thing that was left out: regions, end layers, doubtful traces
    thumbnail: Thumbnail | None = None
    overlay: tuple[OverlayLine, ...] = ()
    areas: tuple[OverlayArea, ...] = ()
    figure: str | None = None  # file with the full figure (SVG), relative to the folder the page is written to
    overrides: Mapping[str, Any] = field(default_factory=dict)  # settings that differ from the shared ones


@dataclass(frozen=True, kw_only=True)
class Failure:
    """Something that was tried and did not work: an image or a specimen's prediction or comparison."""

    key: str
    path: str
    task: Literal["measure", "predict", "compare"]
    kind: str  # short: "unreadable", "deadline", "memory", "worker lost", "no layers", ...
    reason: str
    attempts: int


# --- design, specimens, numbers -------------------------------------------------------------------------------------


@dataclass(frozen=True, kw_only=True)
class DesignRow:
    """One group: how many specimens, images and layers stand behind its numbers."""

    group: str
    specimens: int
    images_planned: int
    images_done: int
    images_failed: int
    images_excluded: int
    images_missing: int
    layers: int
    spectra: int


@dataclass(frozen=True, kw_only=True)
class Estimate:
    """A mean with what it rests on. ``u`` is standard; ``low`` and ``high`` bound the interval of the stated level.

    ``u_sampling`` is the part that more specimens would shrink, ``u_systematic`` the part that all share (calibration,
    geometry); ``u`` combines both. None where it cannot be told (one specimen: no sampling part).
    """

    quantity: str  # "period_nm", "dark_nm", "middle_nm", "bright_nm", "cv_percent", ...
    mean: float
    u: float | None
    u_sampling: float | None = None
    u_systematic: float | None = None
    sd: float | None = None  # spread between units (specimens of a group, images of a specimen)
    low: float | None = None
    high: float | None = None
    level: float = 0.95
    degrees_of_freedom: float | None = None
    n_specimens: int | None = None
    n_images: int | None = None
    n_layers: int | None = None
    notes: tuple[str, ...] = ()


@dataclass(frozen=True, kw_only=True)
class SpecimenRow:
    """One specimen: means over its images, and its predicted and observed main peak where both exist."""

    group: str
    specimen: str
    position: float | None  # along the web or with depth, where all its images agree
    estimates: tuple[Estimate, ...]
    predicted_peak_nm: float | None = None
    u_predicted_peak_nm: float | None = None
    observed_peak_nm: float | None = None
    u_observed_peak_nm: float | None = None
    conclusion: str | None = None  # explains, contradicts, cannot_tell
    predicted_colour: Colour | None = None
    observed_colour: Colour | None = None


@dataclass(frozen=True, kw_only=True)
class TableRow:
    """One line of the main table: a quantity of a group, with combined u and U for k = 2."""

    group: str
    quantity: str
    mean_nm: float
    cv_percent: float | None  # spread between layers (whole periods) within images, noise removed, of the mean
    n_layers: int
    n_images: int
    n_specimens: int
    u_nm: float | None
    expanded_nm: float | None  # U, coverage factor 2
    coverage_factor: float = 2.0
    notes: tuple[str, ...] = ()


# --- statistics -----------------------------------------------------------------------------------------------------


@dataclass(frozen=True, kw_only=True)
class VarianceComponent:
    """Spread at one level of the design."""

    level: str  # "group", "specimen", "image", "layer" (within image)
    sd: float
    low: float | None  # interval of the SD
    high: float | None
    share: float  # of the total variance
    boundary: bool  # the estimate is zero: at the edge of what is possible
    note: str = ""


@dataclass(frozen=True, kw_only=True)
class VarianceComponents:
    """Variance components of one quantity by REML, and the mean they go with."""

    quantity: str
    unit: str
    method: str
    components: tuple[VarianceComponent, ...]
    reml_criterion: float | None
    notes: tuple[str, ...] = ()


@dataclass(frozen=True, kw_only=True)
class TestRow:
    """One test or interval. Differences are first minus second group, in ``unit``."""

    quantity: str
    unit: str
    name: str  # "Welch's t test", "one-way ANOVA", "Tukey", "equivalence (two one-sided tests)", ...
    compares: tuple[str, ...]  # groups
    statistic_name: str | None = None
    statistic: float | None = None
    degrees_of_freedom: tuple[float, ...] = ()
    p_value: float | None = None
    p_adjusted: float | None = None
    adjustment: str | None = None
    difference: float | None = None
    low: float | None = None
    high: float | None = None
    level: float = 0.95
    effect_size_name: str | None = None
    effect_size: float | None = None
    effect_low: float | None = None
    effect_high: float | None = None
    n: tuple[int, ...] = ()  # specimens per group
    sentence: str = ""
    possible: bool = True  # False: the sentence says why no test can be made
    notes: tuple[str, ...] = ()

    __test__ = False  # not for pytest to collect


@dataclass(frozen=True, kw_only=True)
class SensitivityRow:
    """The answer again on other data: without exclusions, without images edited by hand."""

    what: str
    group: str
    quantity: str
    estimate: Estimate | None
    p_value: float | None  # of the main test on these data
    note: str = ""


@dataclass(frozen=True, kw_only=True)
class DriftRow:
    """Change of a specimen mean with its position along a web or with depth."""

    group: str
    quantity: str
    along: str  # "web position", "depth", ...
    position_unit: str
    slope: float | None  # nm per unit of position
    u_slope: float | None
    low: float | None
    high: float | None
    p_value: float | None
    points: tuple[tuple[float, float, float | None], ...]  # position, mean, u
    sentence: str


@dataclass(frozen=True, kw_only=True)
class PlanningRow:
    """How many specimens, images and layers would give a wanted interval or power."""

    wanted: str
    specimens_per_group: int | None
    images_per_specimen: int
    layers_per_image: int
    reached: float | None  # half width in nm, or power
    sentence: str


# --- light ----------------------------------------------------------------------------------------------------------


@dataclass(frozen=True, kw_only=True)
class PeakPair:
    """Predicted and observed main peak of one specimen."""

    group: str
    specimen: str
    order: int | None
    predicted_nm: float
    u_predicted_nm: float | None
    observed_nm: float
    u_observed_nm: float | None
    kind: SpectrumKind
    conclusion: str | None


@dataclass(frozen=True, kw_only=True)
class LineFit:
    """Straight line observed = intercept + slope * predicted with errors in both axes, beside the 1:1 line."""

    n: int
    slope: float | None
    u_slope: float | None
    intercept_nm: float | None
    u_intercept_nm: float | None
    covariance: float | None
    slope_interval: tuple[float, float] | None
    intercept_interval: tuple[float, float] | None
    pivot_nm: float | None  # the intercept at the pivot, "offset", is far better known than the one at zero
    offset_nm: float | None  # fitted observed minus predicted at the pivot
    u_offset_nm: float | None
    chi_square: float | None
    degrees_of_freedom: int | None
    p_value: float | None  # of the scatter about the fitted line
    p_one_to_one: float | None  # of slope 1 and intercept 0 together
    method: str
    sentence: str


@dataclass(frozen=True, kw_only=True)
class LightPair:
    """Observed over predicted spectrum of one specimen. All tuples of one curve have the same length."""

    group: str
    specimen: str
    kind: SpectrumKind  # reflectance or transmittance: the axis says which
    wavelength_nm: tuple[float, ...]
    predicted: tuple[float, ...]
    lower: tuple[float, ...] | None  # 95 % of the draws
    upper: tuple[float, ...] | None
    orders: tuple[tuple[int | None, float], ...]  # order, wavelength_nm of each predicted peak
    predicted_colour: Colour | None
    observed_path: str | None  # None: nothing was observed
    observed_spot: str | None = None
    observed_reference: str | None = None
    observed_wavelength_nm: tuple[float, ...] | None = None
    observed: tuple[float, ...] | None = None
    observed_u: tuple[float, ...] | None = None
    observed_colour: Colour | None = None
    conclusion: str | None = None
    sentence: str = ""
    peak_difference_nm: float | None = None
    u_peak_difference_nm: float | None = None
    delta_e00: float | None = None
    reasons: tuple[str, ...] = ()
    flags: tuple[str, ...] = ()


# --- release --------------------------------------------------------------------------------------------------------


@dataclass(frozen=True, kw_only=True)
class Lot:
    """What a release record carries, as typed; None is printed as "not stated"."""

    lot: str | None = None
    roll: str | None = None
    web_position: str | None = None
    operator: str | None = None
    method: str | None = None
    method_revision: str | None = None
    calibration_due: str | None = None  # ISO date
    calibration_overdue: bool | None = None


@dataclass(frozen=True, kw_only=True)
class ReleaseDecision:
    """One limit, the value against it and the decision (JCGM 106:2012)."""

    group: str
    name: str  # as in [limits]
    unit: str
    value: float | None
    u: float | None
    low: float | None  # tolerance limits
    high: float | None
    guard_band: float | None
    accept_low: float | None  # acceptance limits
    accept_high: float | None
    rule: str  # in words
    probability_conforming: float | None
    decision: Verdict
    reason: str
    lot: Lot
    caution: str


# --- how it was made ------------------------------------------------------------------------------------------------


@dataclass(frozen=True, kw_only=True)
class FactTable:
    """A table of stated facts; a value of None is printed as "not stated"."""

    title: str
    rows: tuple[tuple[str, str | None], ...]


@dataclass(frozen=True, kw_only=True)
class MaterialSource:
    """A material that a prediction used, and where its index comes from."""

    name: str
    role: str  # dark, bright, incident, substrate, ...
    source: str
    doi: str | None
    status: str
    range_nm: tuple[float, float] | None
    u_index: float | None


@dataclass(frozen=True, kw_only=True)
class MethodsFacts:
    """What the methods paragraph says, ready as counts and short texts; the page puts them into sentences."""

    version: str
    n_groups: int
    n_specimens: int
    n_images: int
    n_layers: int
    n_spectra: int
    quantity: str
    pixel_size_sources: tuple[str, ...]  # how the pixel sizes were known, each once
    pixel_size_range_nm: tuple[float, float] | None
    corrections: tuple[str, ...]  # stated section geometry, in words
    layer_definition: str
    uncertainty: str
    statistics: tuple[str, ...]  # which tests, in words, with their sources
    optics: str | None  # None: nothing was predicted
    materials: tuple[MaterialSource, ...]
    comparison: str | None
    exclusions: tuple[str, ...]
    hand_edits: int
    seeds: Mapping[str, int]


@dataclass(frozen=True, kw_only=True)
class RunFacts:
    """How the study was run and how to run it again."""

    command: str
    plan_path: str
    plan_sha256: str
    ledger: str
    versions: Mapping[str, str]
    seeds: Mapping[str, int]
    settings: Mapping[str, Mapping[str, Any]]  # measure, predict, compare -> field -> value (shared settings)
    settings_sha256: str
    started: str | None  # ISO time, UTC
    finished: str | None
    processor_seconds: float | None
    how_to_run_again: tuple[str, ...]  # command lines


@dataclass(frozen=True, kw_only=True)
class StudySummary:
    """Everything that the page of a study shows, summary first."""

    title: str
    question: str | None
    quantity: str  # what the main answer is about, "period_nm" unless the plan says otherwise
    finished: bool  # False: images are missing, and the page says so on top
    counts: Mapping[str, int]  # State -> number of images
    measured: str  # one sentence: what was measured, on how many
    answer: str  # one or two sentences, with the uncertainty
    answer_limits: tuple[str, ...]  # what limits the answer, most important first
    cautions: tuple[str, ...]
    design: tuple[DesignRow, ...]
    table: tuple[TableRow, ...]
    groups: tuple[tuple[str, tuple[Estimate, ...]], ...]  # group -> estimates over its specimens
    specimens: tuple[SpecimenRow, ...]
    images: tuple[ImageRow, ...]
    variance: tuple[VarianceComponents, ...]
    tests: tuple[TestRow, ...]
    sensitivity: tuple[SensitivityRow, ...]
    drift: tuple[DriftRow, ...]
    planning: tuple[PlanningRow, ...]
    light: tuple[LightPair, ...]
    peaks: tuple[PeakPair, ...]
    line: LineFit | None
    budget: tuple[BudgetRow, ...]  # of the main quantity, over the study
    limited_by: str | None
    next_measurement: str | None
    decisions: tuple[ReleaseDecision, ...]
    failures: tuple[Failure, ...]
    lot: Lot
    facts: tuple[FactTable, ...]  # preparation, imaging, colour
    methods: MethodsFacts
    run: RunFacts
    flags: tuple[str, ...]  # every flag that some result carries, each once
