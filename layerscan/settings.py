"""What a user can choose, one record per command. Command-line options, widgets and the ledger derive from the fields.

Every record is frozen and holds only what JSON can hold, so that the same settings give the same numbers anywhere.
Quantities stay as the user typed them (``VALUE [+- U] UNIT``) and are checked here.
"""

from __future__ import annotations

from typing import Annotated, Any, Literal, TypeVar

from pydantic import AfterValidator, BaseModel, ConfigDict, Field, ValidationError, model_validator

from layerscan.errors import SettingsError
from layerscan.uncertainty import parse_pixel_size, parse_quantity


def _checked(dimension: str, name: str) -> AfterValidator:
    def check(text: str) -> str:
        body = text.strip()
        if name == "Stage tilt" and body.lower().startswith("wall"):
            body = body[4:]
        parse_quantity(body, dimension=dimension, name=name)
        return text

    return AfterValidator(check)


def _pixel_size(text: str) -> str:
    parse_pixel_size(text)
    return text


def _width(text: str) -> str:
    parse_width(text)
    return text


def parse_width(text: str) -> tuple[float, str]:
    """Read a line width: a bare number is pixels, a length is nm; returns (value, "px" or "nm")."""
    body = text.strip()
    for suffix in ("pixels", "px"):
        if body.endswith(suffix):
            body = body[: -len(suffix)].strip()
    try:
        value, unit = float(body), "px"
    except ValueError:
        value, unit = parse_quantity(body, dimension="length", name="Width").value, "nm"
    if not 0 < value < 1e9:
        raise SettingsError(f"Width '{text}' must be positive. Give pixels ('20') or a length ('300 nm').")
    return value, unit


def parse_wavelengths(text: str) -> tuple[float, float, float]:
    """Read ``START:STOP:STEP`` in nm.

    Raises
    ------
    SettingsError
        Not three numbers, not increasing, outside 100 to 20000 nm, or more than 20001 points.
    """
    form = "Give START:STOP:STEP in nm, such as 380:780:1."
    try:
        start, stop, step = (float(part) for part in text.split(":"))
    except ValueError:
        raise SettingsError(f"Wavelengths '{text}' are not three numbers. {form}") from None
    if not (100 <= start < stop <= 20_000 and step > 0 and (stop - start) / step <= 20_000):
        raise SettingsError(
            f"Wavelengths '{text}' must increase within 100 to 20000 nm with at most 20001 points. {form}"
        )
    return start, stop, step


VARIED = ("angle", "aperture", "immersion", "scale", "layers", "strain")


def parse_vary(text: str) -> tuple[str, float, float, float]:
    """Read ``NAME=START:STOP:STEP``; NAME is one of ``VARIED``."""
    form = f"Give NAME=START:STOP:STEP with NAME one of {', '.join(VARIED)}."
    name, _, span = text.partition("=")
    try:
        start, stop, step = (float(part) for part in span.split(":"))
    except ValueError:
        raise SettingsError(f"Series '{text}' is not NAME=START:STOP:STEP. {form}") from None
    if name.strip() not in VARIED:
        raise SettingsError(f"Series '{text}' varies '{name}', which is not known. {form}")
    if not (step > 0 and stop >= start and (stop - start) / step <= 500):
        raise SettingsError(f"Series '{text}' must increase in at most 501 steps. {form}")
    return name.strip(), start, stop, step


def parse_edit(text: str) -> tuple[str, int | None, float | None]:
    """Read one correction by hand; returns (verb, boundary index, length in nm).

    Index and depth refer to the result without edits: ``move INDEX SHIFT UNIT`` (along the depth), ``delete INDEX``,
    ``add DEPTH UNIT``.
    """
    form = "Give 'move INDEX SHIFT UNIT', 'delete INDEX' or 'add DEPTH UNIT'."
    verb, _, rest = text.strip().partition(" ")
    try:
        if verb == "delete":
            return verb, int(rest), None
        if verb == "move":
            index, _, shift = rest.strip().partition(" ")
            return verb, int(index), parse_quantity(shift, dimension="length", name="Shift").value
        if verb == "add":
            return verb, None, parse_quantity(rest, dimension="length", name="Depth").value
    except ValueError as error:
        raise SettingsError(f"Edit '{text}' cannot be read ({error}). {form}") from None
    raise SettingsError(f"Edit '{text}' is not known. {form}")


class Settings(BaseModel):
    """Base of the settings records: frozen, unknown names refused."""

    model_config = ConfigDict(frozen=True, extra="forbid", allow_inf_nan=False)


S = TypeVar("S", bound=Settings)


def change_settings(kind: type[S], settings: S | None, changes: dict[str, Any]) -> S:
    """Settings of ``kind`` with ``changes`` made, checked; errors name the field, what came and what is needed.

    Raises
    ------
    SettingsError
        An unknown name (the nearest known one is said) or a value that its field does not take.
    """
    base = {} if settings is None else settings.model_dump()
    unknown = [name for name in changes if name not in kind.model_fields]
    if unknown:
        import difflib

        near = difflib.get_close_matches(unknown[0], kind.model_fields, n=1, cutoff=0.0)
        raise SettingsError(
            f"'{unknown[0]}' is no setting of {kind.__name__}. The nearest is '{near[0]}'; "
            f"known are {', '.join(kind.model_fields)}."
        )
    try:
        return kind(**{**base, **changes})
    except ValidationError as error:
        raise SettingsError(explain_validation(error)) from None


def explain_validation(error: ValidationError) -> str:
    """One sentence per mistake: which field, what came, what is needed."""
    lines = []
    for item in error.errors():
        context = item.get("ctx", {}).get("error")
        where = ".".join(str(part) for part in item["loc"]) or "settings"
        text = str(context) if isinstance(context, Exception) else f"{item['msg']}, got {item.get('input')!r}"
        lines.append(f"{where}: {text}")
    return "; ".join(lines)


PixelSizeText = Annotated[str, AfterValidator(_pixel_size)]
AngleText = Annotated[str, _checked("angle", "Obliquity")]
TiltText = Annotated[str, _checked("angle", "Stage tilt")]
CompressionText = Annotated[str, _checked("ratio", "Compression")]
ShrinkageText = Annotated[str, _checked("ratio", "Shrinkage")]
WidthText = Annotated[str, AfterValidator(_width)]


class MeasureSettings(Settings):
    """What can be chosen when one image is measured."""

    pixel_size: PixelSizeText | None = Field(
        None, description="size of a pixel, 'VALUE [+- U] UNIT' or 'ROW UNIT, COLUMN UNIT'"
    )
    page: int = Field(0, ge=0, description="page of a file with several images, from 0")
    region: tuple[int, int, int, int] | None = Field(
        None, description="part of the image: ROW0,COL0,ROW1,COL1 in pixels, half-open"
    )
    line: tuple[float, float, float, float] | None = Field(
        None, description="measure along a line R0,C0,R1,C1 instead of the field"
    )
    width: WidthText | None = Field(None, description="width of the line: pixels ('20') or a length ('300 nm')")
    obliquity: AngleText | None = Field(None, description="angle between layer normal and image plane")
    stage_tilt: TiltText | None = Field(
        None, description="stage tilt of the imaged face; 'wall ANGLE' for a face cut perpendicular"
    )
    compression: CompressionText | None = Field(
        None, description="relative compression along the cut, such as '5 +- 2 %'"
    )
    shrinkage: ShrinkageText | None = Field(None, description="relative shrinkage in preparation, such as '3 %'")

    edits: tuple[Annotated[str, AfterValidator(lambda t: (parse_edit(t), t)[1])], ...] = Field(
        (), description="boundaries corrected by hand: 'move INDEX SHIFT UNIT', 'delete INDEX', 'add DEPTH UNIT'"
    )

    @model_validator(mode="after")
    def _consistent(self) -> MeasureSettings:
        if self.region is not None:
            r0, c0, r1, c1 = self.region
            if not (0 <= r0 < r1 and 0 <= c0 < c1):
                raise SettingsError(f"Region {self.region} is empty or negative. Give ROW0,COL0,ROW1,COL1, half-open.")
        if self.line is not None and self.line[:2] == self.line[2:]:
            raise SettingsError(f"Line {self.line} has no length. Give two different points R0,C0,R1,C1.")
        if self.width is not None and self.line is None:
            raise SettingsError("A width belongs to a line. Give line R0,C0,R1,C1 too.")
        return self


class PredictSettings(Settings):
    """What can be chosen when a spectrum is predicted."""

    dark: str | None = Field(None, description="material of the dark layers")
    bright: str | None = Field(None, description="material of the bright layers")
    middle: str | None = Field(None, description="material of the layers of middle grey")
    incident: str | None = Field(None, description="medium that the light comes from (air if not stated)")
    substrate: str | None = Field(None, description="medium behind the stack, or 'absorber': nothing comes back")
    lit_side: Literal["start", "end"] | None = Field(
        None, description="which end of the measured stack faces the light"
    )
    layers: int | None = Field(None, ge=1, le=1_000_000, description="layers in the specimen, if more than were seen")
    angle: float = Field(0.0, ge=0, le=90, description="angle of incidence in degrees")
    aperture: float = Field(0.0, ge=0, lt=3, description="effective numerical aperture of the illumination")
    polarisation: Literal["s", "p", "unpolarised", "left", "right"] = Field(
        "unpolarised", description="polarisation of the light"
    )
    wavelengths: Annotated[str, AfterValidator(lambda t: (parse_wavelengths(t), t)[1])] = Field(
        "380:780:1", description="START:STOP:STEP in nm"
    )
    bandwidth: float = Field(0.0, ge=0, le=200, description="instrument bandwidth (full width at half maximum) in nm")
    illuminant: Literal["D65", "D50", "A"] = Field("D65", description="illuminant of the colour")
    observer: Literal[2, 10] = Field(2, description="standard observer in degrees")
    draws: int = Field(500, ge=0, le=100_000, description="draws that carry the uncertainty; 0 for none")
    seed: int = Field(1, ge=0, description="seed of the draws")
    vary: Annotated[str, AfterValidator(lambda t: (parse_vary(t), t)[1])] | None = Field(
        None, description="series NAME=START:STOP:STEP"
    )
    poisson_ratio: float = Field(0.46, gt=-1, le=0.5, description="Poisson ratio for a strain series")
    materials_folder: str | None = Field(None, description="folder with further materials in the catalogue's form")


class CompareSettings(Settings):
    """What can be chosen when a prediction is compared with an observation."""

    lab: tuple[float, float, float] | None = Field(None, description="observed colour L*,a*,b* instead of a spectrum")
    scale: Literal["absolute", "free"] = Field(
        "absolute", description="trust the height of the observed spectrum, or fit it"
    )
    quantity: Literal["reflectance", "transmittance", "absorbance"] | None = Field(
        None, description="what the observed spectrum is"
    )
