"""What may stand in STUDY.toml: one validated record per table, and the words for what is wrong in it."""

from __future__ import annotations

import difflib
import re
from typing import Annotated, Any, Literal, TypeVar

from pydantic import AfterValidator, BeforeValidator, Field, ValidationError, model_validator

from layerscan.errors import SettingsError
from layerscan.settings import Settings
from layerscan.uncertainty import parse_quantity

QUANTITIES = ("period", "dark", "middle", "bright", "spacing")


def _length(text: str) -> str:
    parse_quantity(text, dimension="length", name="Length")
    return text


def _ratio(text: str) -> str:
    parse_quantity(text, dimension="ratio", name="Ratio")
    return text


def _as_text(value: Any) -> Any:
    if isinstance(value, bool):
        raise SettingsError(f"{str(value).lower()} is no text. Give words, such as a reason.")
    if hasattr(value, "isoformat"):  # TOML dates and times
        return value.isoformat()
    return str(value) if isinstance(value, int | float) else value


def _no_blank(text: str | None) -> str | None:
    return text.strip() or None if text else None


LengthText = Annotated[str, AfterValidator(_length)]
RatioText = Annotated[str, AfterValidator(_ratio)]
Text = Annotated[str | None, BeforeValidator(_as_text), AfterValidator(_no_blank)]


class StudyTable(Settings):
    """``[study]``: the question, and how it is answered."""

    title: str = Field("Study", description="title of the page")
    question: Text = Field(None, description="what the study asks, in words")
    quantity: Literal["period", "dark", "middle", "bright", "spacing"] = Field(
        "period", description="what groups are compared on"
    )
    level: float = Field(0.95, gt=0.5, lt=1, description="confidence level of intervals and tests")
    groups: tuple[str, ...] = Field((), description="groups in the order to show; a group without images is said")
    compare_groups: bool = Field(True, description="whether groups are tested against each other")
    adjust: Literal["holm", "tukey", "dunnett"] = Field("holm", description="adjustment for several groups")
    reference_group: Text = Field(None, description="group that Dunnett's test compares the others with")
    equivalence: LengthText | None = Field(
        None, description="margin within which groups count as equal, such as '5 nm'"
    )
    position: str = Field("position", description="what the position is: 'web position', 'depth'")
    position_unit: str = Field("", description="unit of the position")
    wanted_half_width: LengthText | None = Field(
        None, description="half width of the interval of a group mean that is wanted"
    )
    wanted_difference: LengthText | None = Field(None, description="difference between groups that is to be found")
    wanted_power: float = Field(0.8, gt=0.05, lt=1, description="with which power")
    allow_outside: bool = Field(False, description="whether files may lie outside the study's folder")

    @model_validator(mode="after")
    def _reference_for_dunnett(self) -> StudyTable:
        if self.adjust == "dunnett" and not self.reference_group:
            raise SettingsError("adjust = 'dunnett' compares with one group. Give reference_group too.")
        return self


class RunTable(Settings):
    """``[run]``: what one image may cost."""

    workers: int | None = Field(None, ge=1, le=1024, description="worker processes of the local cluster")
    deadline_s: float = Field(600.0, gt=0, le=1e6, description="seconds that one image may take")
    memory_mib: float = Field(
        4096.0, ge=64, description="memory that one image may take, beyond what the program itself needs"
    )
    retries: int = Field(2, ge=0, le=10, description="further attempts after a failure that may be chance")


class ImageEntry(Settings):
    """One entry of ``images``: a file, a pattern of files, or a CSV table of files."""

    file: str | None = Field(
        None, description="a path, a glob, or a pattern such as 'lot_{group}/{specimen}_{section}.tif'"
    )
    table: str | None = Field(None, description="a CSV file whose columns are these keys")
    group: Text = None
    specimen: Text = None
    section: Text = None
    position: Text = Field(None, description="along the web or with depth")
    region: tuple[int, int, int, int] | None = Field(None, description="ROW0,COL0,ROW1,COL1 in pixels, half-open")
    page: int | None = Field(None, ge=0)
    pixel_size: Text = None
    exclude: Text = Field(None, description="reason why the image does not count; it is measured all the same")
    note: Text = None
    measure: dict[str, Any] = Field({}, description="settings of measure that differ for these images")
    predict: dict[str, Any] = Field({}, description="settings of predict that differ for these images")

    @model_validator(mode="after")
    def _one_source(self) -> ImageEntry:
        return _one_of_file_and_table(self)


class SpectrumEntry(Settings):
    """One entry of ``spectra``: a file, a pattern of files, or a CSV table of files."""

    file: str | None = None
    table: str | None = None
    group: Text = None
    specimen: Text = None
    spot: Text = None
    quantity: Literal["reflectance", "transmittance", "absorbance"] | None = None
    reference: Text = Field(None, description="against which reference it was taken, in words")
    reference_file: Text = Field(None, description="spectrum of that reference, which the values are multiplied by")
    column: int | str | None = Field(None, description="column of the file")
    exclude: Text = None
    note: Text = None
    compare: dict[str, Any] = Field({})

    @model_validator(mode="after")
    def _one_source(self) -> SpectrumEntry:
        return _one_of_file_and_table(self)


Entry = TypeVar("Entry", ImageEntry, SpectrumEntry)


def _one_of_file_and_table(entry: Entry) -> Entry:
    if (entry.file is None) == (entry.table is None):
        raise SettingsError("an entry names either 'file' or 'table'. Give one of the two.")
    return entry


class PreparationTable(Settings):
    """``[preparation]``: how the specimen came before the beam."""

    fixation: Text = None
    stain: Text = None
    embedding: Text = None
    drying: Text = None
    knife: Text = None
    cut_direction: Text = None
    section_thickness: Text = None
    coating: Text = None
    note: Text = None


class ImagingTable(Settings):
    """``[imaging]``: how the images were taken."""

    instrument: Text = None
    mode: Text = None
    accelerating_voltage: Text = None
    detector: Text = None
    working_distance: Text = None
    calibration_standard: Text = None
    calibration_date: Text = None
    note: Text = None


class ColourTable(Settings):
    """``[colour]``: how the spectra were taken."""

    instrument: Text = None
    spot: Text = None
    aperture: Text = Field(None, description="numerical aperture")
    geometry: Text = None
    reference: Text = None
    bandwidth: Text = None
    light_source: Text = None
    note: Text = None


class LotTable(Settings):
    """``[lot]``: what a release record carries."""

    lot: Text = None
    roll: Text = None
    web_position: Text = None
    operator: Text = None
    method: Text = None
    method_revision: Text = None
    calibration_due: Text = Field(None, description="date, YYYY-MM-DD")

    @model_validator(mode="after")
    def _date(self) -> LotTable:
        if self.calibration_due is not None and not re.fullmatch(r"\d{4}-\d{2}-\d{2}", self.calibration_due):
            raise SettingsError(f"calibration_due '{self.calibration_due}' is no date. Give YYYY-MM-DD.")
        return self


class LengthLimit(Settings):
    """Tolerance limits of a length; one of the two may be left out."""

    low: LengthText | None = None
    high: LengthText | None = None

    @model_validator(mode="after")
    def _order(self) -> LengthLimit:
        _in_order(self.low, self.high, "length")
        return self


class SpectrumLimit(LengthLimit):
    """Tolerance limits of a wavelength, read in the observed or in the predicted spectrum."""

    source: Literal["observed", "predicted"] = "observed"


class RatioLimit(Settings):
    """Tolerance limits of a ratio, such as ``high = "12 %"``."""

    low: RatioText | None = None
    high: RatioText | None = None

    @model_validator(mode="after")
    def _order(self) -> RatioLimit:
        _in_order(self.low, self.high, "ratio")
        return self


class ColourLimit(Settings):
    """Largest colour difference (CIEDE2000) from a target colour, for an illuminant and observer."""

    target: tuple[float, float, float] = Field(description="L*, a*, b* of the target")
    high: float = Field(gt=0, le=200)
    illuminant: Literal["D65", "D50", "A"] = "D65"
    observer: Literal[2, 10] = 10
    source: Literal["observed", "predicted"] = "observed"


def _in_order(low: str | None, high: str | None, dimension: str) -> None:
    if low is None and high is None:
        raise SettingsError("a limit needs 'low' or 'high'. Give at least one.")
    values = [parse_quantity(t, dimension=dimension, name="Limit").value for t in (low, high) if t is not None]
    if values != sorted(values):
        raise SettingsError(f"low '{low}' lies above high '{high}'. Give them in order.")


class LimitsTable(Settings):
    """``[limits]``: tolerance limits per group and the decision rule (JCGM 106:2012)."""

    rule: Literal["guarded", "probability", "simple"] = Field(
        "guarded", description="how a value near a limit is judged"
    )
    guard: float = Field(1.0, ge=0, le=10, description="width of the guard band in units of U")
    coverage_factor: float = Field(2.0, gt=0, le=10, description="k of U = k u")
    probability: float = Field(
        0.95, gt=0.5, lt=1, description="probability of conforming that passes, for rule = 'probability'"
    )
    groups: tuple[str, ...] = Field((), description="groups to judge; all where empty")
    period: LengthLimit | None = None
    dark: LengthLimit | None = None
    middle: LengthLimit | None = None
    bright: LengthLimit | None = None
    spacing: LengthLimit | None = None
    cv: RatioLimit | None = Field(None, description="spread between layers (or periods) over their mean")
    peak: SpectrumLimit | None = None
    band_short_edge: SpectrumLimit | None = None
    band_long_edge: SpectrumLimit | None = None
    colour_difference: ColourLimit | None = None


class PlanTables(Settings):
    """The whole of STUDY.toml."""

    study: StudyTable = Field(default_factory=lambda: StudyTable.model_validate({}))
    run: RunTable = Field(default_factory=lambda: RunTable.model_validate({}))
    measure: dict[str, Any] = Field({})
    predict: dict[str, Any] = Field({})
    compare: dict[str, Any] = Field({})
    images: str | tuple[ImageEntry, ...]
    spectra: str | tuple[SpectrumEntry, ...] = ()
    preparation: PreparationTable = Field(default_factory=lambda: PreparationTable.model_validate({}))
    imaging: ImagingTable = Field(default_factory=lambda: ImagingTable.model_validate({}))
    colour: ColourTable = Field(default_factory=lambda: ColourTable.model_validate({}))
    lot: LotTable = Field(default_factory=lambda: LotTable.model_validate({}))
    limits: LimitsTable | None = None


# --- what is wrong, and where ---------------------------------------------------------------------------------------


def nearest_name(name: str, known: Any) -> str:
    """The known name most like ``name``."""
    return str(difflib.get_close_matches(name, list(known), n=1, cutoff=0.0)[0])


def explain_plan_errors(error: ValidationError, *, file_name: str, text: str) -> str:
    """One line per mistake: the place in the file, what came, what is needed; for unknown keys the nearest name."""
    lines = []
    for item in error.errors():
        path = tuple(part for part in item["loc"] if not _is_union_branch(part))
        if any(isinstance(part, str) and part == "str" for part in item["loc"]) and len(error.errors()) > 1:
            continue  # the other branch of "a CSV file or entries": its message would only distract
        where = say_place(path, file_name=file_name, text=text)
        if item["type"] == "extra_forbidden":
            known = known_names(path[:-1])
            near = nearest_name(str(path[-1]), known)
            lines.append(f"{where}: unknown key '{path[-1]}'. The nearest is '{near}'; known are {', '.join(known)}.")
            continue
        context = item.get("ctx", {}).get("error")
        message = str(context) if isinstance(context, Exception) else f"{item['msg']}, got {item.get('input')!r:.80}"
        lines.append(f"{where}: {message}")
    return "\n".join(lines)


def _is_union_branch(part: Any) -> bool:
    return isinstance(part, str) and (part == "str" or part.startswith("tuple["))


def known_names(path: tuple[Any, ...]) -> tuple[str, ...]:
    """Names that may stand in the table at ``path`` of STUDY.toml."""
    kind: Any = PlanTables
    for part in path:
        if isinstance(part, int):
            continue
        if part == "images":
            kind = ImageEntry
        elif part == "spectra":
            kind = SpectrumEntry
        else:
            annotation = kind.model_fields[part].annotation
            options = [a for a in getattr(annotation, "__args__", (annotation,)) if hasattr(a, "model_fields")]
            kind = options[0] if options else kind
    return tuple(kind.model_fields)


def say_place(path: tuple[Any, ...], *, file_name: str, text: str) -> str:
    """Words for a place in the file: its path of keys and, where it can be found, its line."""
    words = ""
    for part in path:
        words += f"[{part + 1}]" if isinstance(part, int) else ("." if words else "") + str(part)
    line = find_line(text, path)
    return f"{file_name}{f', line {line}' if line else ''}{f', {words}' if words else ''}"


_HEADER = re.compile(r"^\s*(\[\[?)\s*([^\]]+?)\s*\]\]?\s*(?:#.*)?$")


def find_line(text: str, path: tuple[Any, ...]) -> int | None:
    """Line (from 1) where the key at ``path`` stands, by its table header and name; None where it is not found.

    Entries of an inline array on one line share that line. The search reads the text, so a key that is written in
    dotted or quoted form beyond the plain ones may not be found.
    """
    if not path:
        return None
    wanted, index = _split_path(path)
    counts: dict[str, int] = {}
    table, best = "", None
    for number, line in enumerate(text.splitlines(), start=1):
        header = _HEADER.match(line)
        if header:
            table = header[2].replace('"', "").replace("'", "").replace(" ", "")
            if header[1] == "[[":
                counts[table] = counts.get(table, 0) + 1
            if table == ".".join(wanted) and (index is None or counts.get(table, 1) == index + 1):
                best = best or number
            continue
        inside = table.split(".") if table else []
        if wanted[: len(inside)] != inside or len(wanted) <= len(inside):
            continue
        if index is not None and inside and counts.get(table, index + 1) != index + 1:
            continue
        rest = wanted[len(inside) :]
        if re.match(rf"^\s*[\"']?{re.escape(rest[0])}[\"']?\s*[=.]", line):
            best = number
            if len(rest) == 1:
                return number
        if re.search(rf"(?:^|[{{,\s.])[\"']?{re.escape(rest[-1])}[\"']?\s*=", line) and (len(rest) == 1 or best):
            return number
    return best


def find_entry_lines(text: str, name: str) -> list[int]:
    """Lines (from 1) of the headers ``[[name]]``, in order; empty where the entries are written inline."""
    header = re.compile(rf"^\s*\[\[\s*[\"']?{re.escape(name)}[\"']?\s*\]\]")
    return [number for number, line in enumerate(text.splitlines(), start=1) if header.match(line)]


def _split_path(path: tuple[Any, ...]) -> tuple[list[str], int | None]:
    names = [part for part in path if isinstance(part, str)]
    numbers = [part for part in path if isinstance(part, int)]
    return names, numbers[0] if numbers else None
