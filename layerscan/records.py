"""The data model: frozen, keyword-only records with units in field names. No numerics live here.

Lengths are nm, angles degrees, reflectance and transmittance 0 to 1. Points and arrays are (row, column) in pixels of
the full page; (0, 0) is the centre of the first pixel; regions are half-open. Unknown is ``None``, never 0 or 1.
A field named ``u`` or ``u_...`` is a standard uncertainty (k = 1, JCGM 100:2008).
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

    FloatArray = NDArray[np.float64]
    ComplexArray = NDArray[np.complex128]
    IntArray = NDArray[np.int64]
    BoolArray = NDArray[np.bool_]

Progress = Callable[[str, float | None], None]
"""Called as ``progress(what, fraction)``; fraction is 0 to 1 or None. Raise ``errors.Interrupted`` in it to stop."""

Region = tuple[int, int, int, int]
"""row0, column0, row1, column1 in pixels of the full page, half-open."""

Phase = Literal["dark", "middle", "bright", "other"]
Structure = Literal["lamellae", "coating", "helicoid", "none"]
Distribution = Literal["normal", "rectangular", "triangular", "t"]
SpectrumKind = Literal["reflectance", "transmittance", "absorbance"]

FLAGS: Mapping[str, str] = {
    # reading
    "calibration_uncertainty_unknown": "Nothing states how well the pixel size is known; u leaves calibration out.",
    "pixel_size_doubtful": "The stated pixel size is doubtful; see the image's doubts.",
    "banner_excluded": "An information banner was found and left out.",
    "anisotropic_pixels": "Rows and columns have different pixel sizes.",
    "saturated": "Part of the image is saturated; boundaries there may be displaced.",
    "holes_ignored": "Pixels without a finite value were left out.",
    # measuring
    "no_layers_found": "No layered structure was found.",
    "not_periodic": "Layers were found, but no repeating period.",
    "few_layers": "Too few layers for a spread or a period that means much.",
    "near_nyquist": "A layer is only a few pixels wide.",
    "not_resolved": "The layer is thinner than the blur resolves on its own; its thickness leans on its neighbours.",
    "line_taken_as_normal": "The line is too narrow to show the layers' direction; it was taken as their normal.",
    "edge_shape_doubtful": "Edges are brightened or rounded, no plain blurred steps; how signal became grey may move all of them towards one phase. u says how far; periods are not touched.",
    "sharper_than_pixels": "The edges are sharper than the pixels, so no boundary is known better than a pixel allows.",
    "field_too_small": "The field is too small in one direction to tell layers from other patterns; measure along a line (--line).",
    "line_cut_by_frame": "Part of the line lies outside the image (or region); only the part inside was measured.",
    "tilt_uncorrected": "No obliquity of the section was stated; an oblique cut shows layers too thick.",
    "geometry_corrected": "Thicknesses were corrected for the stated section geometry.",
    "orientation_varies": "The layers' direction varies across the field.",
    "boundary_incomplete": "The boundary could be followed in part of the field only.",
    "termination": "A layer or boundary ends inside the field.",
    "edited_by_hand": "A boundary was moved, added or deleted by hand.",
    "confirm_with_second_section": "The pattern is parallel to what knife chatter would show: confirm it in a section cut at another angle.",
    "scan_lines": "A weak sinusoid runs along the scan lines, as mains pick-up makes it; it was not taken for layers.",
    "ends_cut_by_frame": "The stack goes on beyond the frame: layers seen are not the layers of the specimen.",
    "spacing_ambiguous": "The dominant spacing may be a harmonic or one of several.",
    "irregular": "Lamellae are aligned but too irregular to be told apart: direction and main spacing only, with their spread.",
    # predicting
    "lit_side_assumed": "Which end faces the light was not stated; the start of the stack was assumed.",
    "substrate_assumed": "The substrate was not stated.",
    "incident_assumed": "The incident medium was not stated.",
    "phase_assignment_assumed": "Which material is dark and which is bright decides the peak; see the swapped assignment.",
    "index_extrapolated": "A refractive index was used outside the range its source covers.",
    "index_uncertainty_unknown": "A material's source states no uncertainty of the index; u leaves it out.",
    "layers_extended": "More layers were asked for than were seen; the further ones were drawn from the measured distribution.",
    "layers_left_out": "Incomplete end layers were left out of the stack.",
    "order_uncertain": "The order of a peak is uncertain.",
    "spectrum_truncated": "The spectrum does not cover the visible range; the colour is that of the covered part.",
    "out_of_gamut": "The colour lies outside sRGB; the swatch is the nearest that can be shown.",
    "not_colour_of_iridescence": "A colour difference is validated for small differences of matt samples, not for iridescence.",
    # comparing
    "scale_free": "The height of the observed spectrum was fitted; only shape and position were compared.",
    "observed_uncertainty_unknown": "The observed spectrum states no uncertainty.",
    "partial_overlap": "Prediction and observation share only part of the wavelength range.",
    "no_peak": "No peak could be read at half height in the range.",
    "specular_reference_suspected": "Reflectance above 1: the reference may be a diffuser while the specimen is specular.",
}
"""Every flag that a record may carry, and what it says to the user. A flag is defined here once."""


# --- quantities and calibration -------------------------------------------------------------------------------------


@dataclass(frozen=True, kw_only=True)
class Quantity:
    """A value with its standard uncertainty, or with the distribution that its limits describe."""

    value: float
    unit: str
    u: float | None = None
    distribution: Distribution = "normal"
    degrees_of_freedom: float | None = None
    low: float | None = None
    high: float | None = None


@dataclass(frozen=True, kw_only=True)
class PixelSize:
    """Size of a pixel along rows (vertical step) and columns (horizontal step), and where it comes from."""

    row_nm: float
    column_nm: float
    u_relative: float | None
    source: str
    stated: str | None = None  # the user's own words, where the user gave it
    doubts: tuple[str, ...] = ()


@dataclass(frozen=True, kw_only=True)
class Exclusion:
    """A region that is no specimen (banner, scale bar, border), and why."""

    region: Region
    reason: str


@dataclass(frozen=True, kw_only=True, eq=False)
class Micrograph:
    """One page of an image file, or an array; its pixels are read when ``load`` is called.

    ``load()`` gives a float32 array of shape ``shape`` (rows, columns), grey, NaN where nothing was recorded.
    ``mask`` is True where a pixel may be used; None means everywhere outside ``excluded``.
    """

    load: Callable[[], NDArray[np.float32]]
    shape: tuple[int, int]
    pixel_size: PixelSize | None
    path: Path | None = None
    sha256: str | None = None
    page: int = 0
    page_count: int = 1
    stored_type: str = "float32"
    file_format: str = "array"
    excluded: tuple[Exclusion, ...] = ()
    mask: BoolArray | None = None
    doubts: tuple[str, ...] = ()
    metadata: Mapping[str, str] = field(default_factory=dict)


@dataclass(frozen=True, kw_only=True)
class ImageSource:
    """What a measurement keeps of its image: enough to find it again and to check that it is the same."""

    path: str | None
    sha256: str | None
    page: int
    shape: tuple[int, int]
    pixel_size: PixelSize | None
    excluded: tuple[Exclusion, ...] = ()
    doubts: tuple[str, ...] = ()


# --- measuring ------------------------------------------------------------------------------------------------------


@dataclass(frozen=True, kw_only=True)
class Detection:
    """Whether there is a layered structure, where, and the evidence."""

    layered: bool
    periodic: bool
    statistic: float | None
    p_value: float | None
    region: Region | None
    flags: tuple[str, ...] = ()


@dataclass(frozen=True, kw_only=True, eq=False)
class Field:
    """The straightened field: depth (along the layer normal) is axis 0, station (along the layers) is axis 1.

    ``row_px`` and ``column_px`` have the shape of ``intensity`` and say where each sample lies in the page.
    """

    intensity: FloatArray
    mask: BoolArray
    step_depth_nm: float
    step_station_nm: float
    row_px: FloatArray
    column_px: FloatArray


@dataclass(frozen=True, kw_only=True, eq=False)
class Trace:
    """Where one boundary runs: one entry per traced station, all arrays of the same length."""

    station: IntArray
    row_px: FloatArray
    column_px: FloatArray
    depth_nm: FloatArray
    u_depth_nm: FloatArray


@dataclass(frozen=True, kw_only=True, eq=False)
class Boundary:
    """One boundary between two layers; ``depth_nm`` grows along the layer normal and is 0 at the first boundary."""

    index: int
    depth_nm: float
    u_nm: float | None
    roughness_nm: float | None = None
    correlation_length_nm: float | None = None
    trace: Trace | None = None
    terminations: int = 0
    edited: bool = False
    flags: tuple[str, ...] = ()


@dataclass(frozen=True, kw_only=True)
class Layer:
    """One layer in depth order. An incomplete layer is cut off by the frame and is left out of means."""

    index: int
    phase: Phase
    thickness_nm: float
    u_nm: float | None = None
    sd_lateral_nm: float | None = None
    complete: bool = True
    material: str | None = None
    flags: tuple[str, ...] = ()


@dataclass(frozen=True, kw_only=True)
class Average:
    """Mean realised in this image with its u, spread ``sd`` between layers (noise removed) and their number ``n``."""

    mean: float
    u: float | None
    sd: float | None
    n: int


@dataclass(frozen=True, kw_only=True)
class Spacing:
    """The dominant spacing of the pattern, also where single layers cannot be told apart."""

    value: float
    u: float | None
    method: str


@dataclass(frozen=True, kw_only=True)
class Period:
    """Period of one evenly spaced profile, as ``measurement.period.estimate_period`` gives it."""

    period_nm: float
    u_period_nm: float
    method: str
    statistic: float | None = None
    p_value: float | None = None
    flags: tuple[str, ...] = ()


@dataclass(frozen=True, kw_only=True)
class BudgetRow:
    """One component of an uncertainty budget: GUM type, distribution, size, share of the variance."""

    quantity: str
    component: str
    kind: Literal["A", "B"]
    distribution: str
    relative: float | None
    u_nm: float | None
    sensitivity: float | None
    share: float | None
    degrees_of_freedom: float | None = None


@dataclass(frozen=True, kw_only=True)
class PhaseStatistics:
    """Distribution of the thickness of one phase; ``law`` is the better of normal and lognormal, with its test."""

    phase: str
    n: int
    mean_nm: float
    sd_nm: float | None
    skewness: float | None
    law: str | None
    law_p_value: float | None


@dataclass(frozen=True, kw_only=True)
class StackStatistics:
    """What the sequence of layers is like; every entry is None where the stack is too short to say."""

    phases: tuple[PhaseStatistics, ...] = ()
    neighbour_correlation: float | None = None  # between adjacent layers' thickness residuals
    u_neighbour_correlation: float | None = None
    drift_relative_per_layer: float | None = None  # slope of period against its number, divided by the mean
    u_drift_relative_per_layer: float | None = None
    disorder: Literal["cumulative", "non-cumulative", "undecided"] | None = None
    coherence_length_nm: float | None = None
    replication: float | None = None  # correlation of the roughness of adjacent boundaries
    missing_layers: int = 0
    terminations: int = 0
    limited_by: str | None = None  # largest component of the budget of the period
    next_measurement: str | None = None  # what would halve it


@dataclass(frozen=True, kw_only=True, eq=False)
class Profile:
    """Intensity against depth, averaged along the layers, and its power spectrum."""

    depth_nm: FloatArray
    intensity: FloatArray
    frequency_per_nm: FloatArray
    power: FloatArray


@dataclass(frozen=True, kw_only=True, eq=False)
class Measurement:
    """All that was measured in one image. It refers to the image and holds none of its pixels."""

    version: str
    settings: Mapping[str, Any]
    flags: tuple[str, ...]
    image: ImageSource
    structure: Structure
    layered: bool
    periodic: bool
    detection: Detection
    orientation_deg: float | None = None
    u_orientation_deg: float | None = None
    spacing: Spacing | None = None
    period: Average | None = None
    dark: Average | None = None
    middle: Average | None = None
    bright: Average | None = None
    arc_repeat: Average | None = None
    pitch: Average | None = None
    layers: tuple[Layer, ...] = ()
    boundaries: tuple[Boundary, ...] = ()
    budget: tuple[BudgetRow, ...] = ()
    statistics: StackStatistics | None = None
    profile: Profile | None = None
    start_cut_by_frame: bool | None = None
    end_cut_by_frame: bool | None = None


# --- optics ---------------------------------------------------------------------------------------------------------


@dataclass(frozen=True, kw_only=True, eq=False)
class Medium:
    """A material: one index function (isotropic) or up to three (nx, ny, nz), each wavelength_nm -> n + ik."""

    name: str
    names: tuple[str, ...] = ()
    index: tuple[Callable[[FloatArray], ComplexArray], ...]
    axes: tuple[str, ...] = ("n",)
    range_nm: tuple[float, float] | None = None  # None: a constant, no range stated
    u_index: float | None = None  # standard uncertainty of n; None: not stated
    temperature_c: float | None = None
    source: str = ""
    doi: str | None = None
    status: str = ""  # published, second-hand, convention, user
    note: str = ""
    kind: str = ""  # what the index is made of: formula, table, constant


@dataclass(frozen=True, kw_only=True, eq=False)
class LayerTable:
    """Layers as optics takes them: no pixels. Made from a measurement or read from a hand-made table.

    ``station_thickness_nm`` is (stations, layers), NaN where a boundary was not traced; ``u_scale_relative`` is common
    to all layers (calibration and geometry) and is contained in each layer's ``u_nm``.
    """

    layers: tuple[Layer, ...]
    source: str
    sha256: str | None = None
    u_scale_relative: float | None = None
    station_thickness_nm: FloatArray | None = None
    station_step_nm: float | None = None
    start_cut_by_frame: bool | None = None
    end_cut_by_frame: bool | None = None
    flags: tuple[str, ...] = ()


@dataclass(frozen=True, kw_only=True, eq=False)
class LayerStack:
    """One or many stacks over the same media. ``sequence`` is (stacks, layers + 2): incident first, substrate last."""

    media: tuple[Medium, ...]
    sequence: IntArray
    thickness_nm: FloatArray
    weights: FloatArray | None = None
    roughness_nm: FloatArray | None = None
    incoherent: BoolArray | None = None


@dataclass(frozen=True, kw_only=True)
class Illumination:
    """How the specimen was lit and looked at. ``aperture`` is the effective NA of the illumination in ``incident``."""

    aoi_deg: float = 0.0
    aperture: float = 0.0
    azimuth_deg: float = 0.0
    polarisation: Literal["s", "p", "unpolarised", "left", "right"] = "unpolarised"
    bandwidth_nm: float = 0.0
    illuminant: Literal["D65", "D50", "A"] = "D65"
    observer_deg: Literal[2, 10] = 2


@dataclass(frozen=True, kw_only=True, eq=False)
class Spectrum:
    """Reflectance, transmittance (0 to 1) or absorbance against wavelength; lower and upper bound 95 % where known."""

    wavelength_nm: FloatArray
    value: FloatArray
    kind: SpectrumKind
    u: FloatArray | None = None
    lower: FloatArray | None = None
    upper: FloatArray | None = None
    aoi_deg: float | None = None
    source: str = ""
    sha256: str | None = None
    doubts: tuple[str, ...] = ()
    flags: tuple[str, ...] = ()


@dataclass(frozen=True, kw_only=True)
class Peak:
    """A reflectance band read at half height: the wavelength is the midpoint of its two flanks."""

    order: int | None
    wavelength_nm: float
    u_wavelength_nm: float | None
    reflectance: float
    fwhm_nm: float


@dataclass(frozen=True, kw_only=True)
class Colour:
    """Colour of a spectrum under an illuminant; ``delta_e00_95`` is the radius that holds 95 % of the draws."""

    xyz: tuple[float, float, float]
    xy: tuple[float, float]
    lab: tuple[float, float, float]
    srgb: str
    in_gamut: bool
    dominant_wavelength_nm: float | None  # negative: complementary wavelength of a purple
    excitation_purity: float | None
    delta_e00_95: float | None = None
    illuminant: str = "D65"
    observer_deg: int = 2
    flags: tuple[str, ...] = ()


@dataclass(frozen=True, kw_only=True, eq=False)
class SwappedAssignment:
    """What the other assignment of materials to dark and bright would give."""

    dark: str
    bright: str
    reflectance: Spectrum
    peaks: tuple[Peak, ...]
    colour: Colour


@dataclass(frozen=True, kw_only=True, eq=False)
class SeriesPoint:
    """One step of a parameter series."""

    value: float
    reflectance: Spectrum
    peaks: tuple[Peak, ...]
    colour: Colour


@dataclass(frozen=True, kw_only=True, eq=False)
class Series:
    """Spectra against one varied parameter."""

    name: str
    unit: str
    points: tuple[SeriesPoint, ...]


@dataclass(frozen=True, kw_only=True)
class PredictedStructure:
    """The stack that was calculated: phase, material and thickness from the lit side."""

    layers: int
    layers_seen: int
    sequence: tuple[str, ...]  # material names from the lit side, incident first, substrate last
    thickness_nm: tuple[float, ...]
    source: str
    sha256: str | None


@dataclass(frozen=True, kw_only=True, eq=False)
class Prediction:
    """Spectrum and colour that a structure predicts."""

    version: str
    settings: Mapping[str, Any]
    flags: tuple[str, ...]
    structure: PredictedStructure
    conditions: Mapping[str, Any]
    reflectance: Spectrum
    transmittance: Spectrum
    peaks: tuple[Peak, ...]
    colour: Colour
    swapped: SwappedAssignment | None = None
    series: Series | None = None
    lateral: Spectrum | None = None  # mean reflectance over the lateral positions of the traced boundaries
    materials: tuple[Mapping[str, Any], ...] = ()  # name, source, doi, status, range_nm, u_index of each medium used
    notes: tuple[str, ...] = ()


# --- comparing ------------------------------------------------------------------------------------------------------


@dataclass(frozen=True, kw_only=True)
class Agreement:
    """Whether the difference is within what both sides' uncertainties allow."""

    statistic: float | None
    p_value: float | None
    conclusion: Literal["explains", "contradicts", "cannot_tell"]
    passing_peak_range_nm: tuple[float, float] | None


@dataclass(frozen=True, kw_only=True)
class Reason:
    """A change of one or more parameters that would explain the difference."""

    parameters: tuple[str, ...]
    values: tuple[float, ...]
    u: tuple[float | None, ...]
    prior: tuple[str, ...]
    evidence: float | None
    indistinguishable_from: tuple[str, ...] = ()


@dataclass(frozen=True, kw_only=True)
class Comparison:
    """A prediction beside an observation."""

    version: str
    settings: Mapping[str, Any]
    flags: tuple[str, ...]
    peak_difference_nm: float | None  # predicted minus observed
    u_peak_difference_nm: float | None
    fwhm_difference_nm: float | None
    rms: float | None
    delta_e00: float | None
    agreement: Agreement
    reasons: tuple[Reason, ...]
    sentence: str
    prediction_source: str | None = None
    prediction_sha256: str | None = None
    observed_source: str = ""
    observed_sha256: str | None = None
    scale: float | None = None  # factor on the observed spectrum where --scale free
    predicted_colour: Colour | None = None  # of the quantity and wavelengths that were compared
    observed_colour: Colour | None = None
    observed_peaks: tuple[Peak, ...] = ()
    notes: tuple[str, ...] = ()  # doubts about the observed spectrum


# --- what the other commands answer ---------------------------------------------------------------------------------


@dataclass(frozen=True, kw_only=True)
class Inspection:
    """What an image file holds."""

    version: str
    flags: tuple[str, ...]
    image: ImageSource
    file_format: str
    stored_type: str
    page_count: int
    field_of_view_nm: tuple[float, float] | None
    minimum: float | None
    maximum: float | None
    saturated_fraction: float | None
    metadata: Mapping[str, str]
    advice: tuple[str, ...] = ()


@dataclass(frozen=True, kw_only=True)
class Verification:
    """A saved document run again: equal, or what changed (field path, saved value, value now)."""

    version: str
    document: str
    equal: bool
    changes: tuple[tuple[str, Any, Any], ...]
    notes: tuple[str, ...] = ()
