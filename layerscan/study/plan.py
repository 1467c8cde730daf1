"""STUDY.toml -> StudyPlan: every image and spectrum with its settings, checked before anything runs."""

from __future__ import annotations

import contextlib
import csv
import gc
import glob
import hashlib
import os
import re
import tomllib
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Generic, TypeVar

from pydantic import ValidationError

from layerscan.errors import InputError, LayerscanError, SettingsError
from layerscan.records import SpectrumKind
from layerscan.settings import CompareSettings, MeasureSettings, PredictSettings, Settings, change_settings
from layerscan.study.manifest import fill_nested, read_column, read_pattern, several_numbers
from layerscan.study.tables import (
    ImageEntry,
    PlanTables,
    SpectrumEntry,
    explain_plan_errors,
    find_entry_lines,
    find_line,
    nearest_name,
    say_place,
)

MAX_PLAN_BYTES = 16 * 2**20
"""A longer STUDY.toml is refused: so many rows belong into a CSV table."""

MAX_ROWS = 2_000_000
"""More images than this are refused: split the study."""

MAX_PROBLEMS = 1000
"""Problems beyond this number are counted, not listed."""


@dataclass(frozen=True, kw_only=True, slots=True)
class PlannedImage:
    """One image of the study: where it is, what it belongs to, and the settings that apply to it."""

    key: str
    path: str
    name: str
    place: str
    group: str
    specimen: str
    section: str | None
    position: str | None
    exclude: str | None
    note: str | None
    measure: MeasureSettings
    predict: PredictSettings | None
    overrides: Mapping[str, Any]


@dataclass(frozen=True, kw_only=True, slots=True)
class PlannedSpectrum:
    """One spectrum of the study; it belongs to a specimen, not to an image."""

    key: str
    path: str
    name: str
    place: str
    group: str
    specimen: str
    spot: str | None
    quantity: SpectrumKind | None
    reference: str | None
    reference_path: str | None
    column: int | str | None
    exclude: str | None
    note: str | None
    compare: CompareSettings
    overrides: Mapping[str, Any]


@dataclass(frozen=True, kw_only=True)
class Problem:
    """Something about the plan that its owner should know. Fatal: nothing runs. Missing: that row cannot run."""

    place: str
    text: str
    severity: str  # "fatal", "missing" or "note"


@dataclass(frozen=True, kw_only=True)
class StudyPlan:
    """A plan with everything resolved. ``folder`` is where STUDY.toml lies; paths are inside it unless allowed."""

    path: Path
    folder: Path
    sha256: str
    tables: PlanTables
    measure: MeasureSettings
    predict: PredictSettings | None
    compare: CompareSettings
    images: tuple[PlannedImage, ...]
    spectra: tuple[PlannedSpectrum, ...]
    problems: tuple[Problem, ...] = ()


def read_plan(path: str | os.PathLike[str]) -> StudyPlan:
    """Read and check a STUDY.toml.

    Parameters
    ----------
    path : path
        The file, or a folder that holds a STUDY.toml.

    Returns
    -------
    StudyPlan
        ``problems`` names files that are missing and what else deserves attention; it never holds a fatal one.

    Raises
    ------
    InputError
        The file is missing, too large, no TOML, or a path in it leaves the study's folder.
    SettingsError
        An unknown key (the nearest name and the place are said), a value its key does not take, a missing group's
        specimen, the same image twice.
    """
    path = Path(path)
    if path.is_dir():
        path = path / "STUDY.toml"
    text, sha256 = _read_text(path)
    try:
        raw = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise InputError(f"{path.name} is no valid TOML: {error}. Correct that place and run again.") from None
    except RecursionError:
        raise InputError(f"{path.name} is nested too deeply to be a study. Correct it and run again.") from None
    if "images" not in raw:
        near = nearest_name("images", raw) if raw else None
        hint = f" ('{near}' is there; did you mean it?)" if near and near not in PlanTables.model_fields else ""
        raise SettingsError(f"{path.name} lists no images{hint}. Add [[images]] with file, group and specimen.")
    try:
        tables = PlanTables(**raw)
    except ValidationError as error:
        raise SettingsError(explain_plan_errors(error, file_name=path.name, text=text)) from None
    with _without_collecting():
        return _Resolver(path, text, tables, sha256).resolve()


@contextlib.contextmanager
def _without_collecting() -> Iterator[None]:
    """No search for reference cycles meanwhile: over a million new rows it would cost half as much again."""
    was_on = gc.isenabled()
    gc.disable()
    try:
        yield
    finally:
        if was_on:
            gc.enable()


def _read_text(path: Path) -> tuple[str, str]:
    try:
        if path.stat().st_size > MAX_PLAN_BYTES:
            raise InputError(
                f"{path.name} has {path.stat().st_size / 2**20:.0f} MiB; at most {MAX_PLAN_BYTES // 2**20} are read. "
                "Put the rows into a CSV file and name it: images = 'images.csv'."
            )
        data = path.read_bytes()
        return data.decode("utf-8-sig"), hashlib.sha256(data).hexdigest()
    except OSError as error:
        raise InputError(
            f"Study plan '{path}' cannot be read ({error.strerror}). Give the path of a STUDY.toml."
        ) from None
    except UnicodeDecodeError as error:
        raise InputError(f"{path.name} is not UTF-8 at byte {error.start}. Save it as UTF-8 and run again.") from None


K = TypeVar("K", bound=Settings)


class _Variants(Generic[K]):
    """Settings with per-row changes, each distinct set of changes checked once."""

    def __init__(self, kind: type[K], shared: K | None) -> None:
        self.kind, self.shared = kind, shared
        self.known: dict[str, K] = {}

    def change(self, changes: Mapping[str, Any]) -> K:
        key = repr(changes)
        if key not in self.known:
            self.known[key] = change_settings(self.kind, self.shared, dict(changes))
        return self.known[key]


class _Folders:
    """What each folder holds, looked at once: a million rows then cost a handful of system calls."""

    def __init__(self, root: Path, allow_outside: bool) -> None:
        self.root, self.real_root, self.allow_outside = str(root), os.path.realpath(root), allow_outside
        self.listed: dict[str, dict[str, bool]] = {}

    def locate(self, name: str, place: str) -> tuple[str, bool]:
        """Absolute path of a file of the plan and whether it exists; outside the folder it is refused."""
        try:
            name.encode()
        except UnicodeEncodeError:
            raise InputError(f"{place}: the file name {name!r} is no valid Unicode. Rename the file.") from None
        if "\0" in name:
            raise InputError(f"{place}: the file name {name!r} holds a null character. Correct it.")
        path = os.path.join(self.root, name)
        parent, base = os.path.split(path)
        if parent not in self.listed:
            self._check_inside(os.path.realpath(parent), name, place)
            try:
                with os.scandir(parent) as entries:
                    self.listed[parent] = {entry.name: entry.is_symlink() for entry in entries}
            except OSError:
                self.listed[parent] = {}
        is_link = self.listed[parent].get(base)
        if is_link:
            self._check_inside(os.path.realpath(path), name, place)
        if base in ("", ".", ".."):
            raise InputError(f"{place}: '{name}' names a folder. Name a file.")
        return path, is_link is not None

    def _check_inside(self, real: str, name: str, place: str) -> None:
        if self.allow_outside or real == self.real_root or real.startswith(self.real_root.rstrip(os.sep) + os.sep):
            return
        raise InputError(
            f"{place}: '{name}' lies outside the study's folder. "
            "Move it inside, or set allow_outside = true in [study]."
        )


Row = tuple[dict[str, Any], str]
"""Values of one row by key, and the words for its place."""


@dataclass
class _Resolver:
    path: Path
    text: str
    tables: PlanTables
    sha256: str
    problems: list[Problem] = field(default_factory=list)
    unlisted: int = 0

    def __post_init__(self) -> None:
        self.folder = self.path.parent.absolute()
        self.folders = _Folders(self.folder, self.tables.study.allow_outside)

    def resolve(self) -> StudyPlan:
        measure = self._shared(MeasureSettings, "measure", self.tables.measure)
        predict = self._shared(PredictSettings, "predict", self.tables.predict) if self.tables.predict else None
        compare = self._shared(CompareSettings, "compare", self.tables.compare)
        images = self._images(measure, predict)
        spectra = self._spectra(compare, images)
        self._look_at_design(images)
        if self.unlisted:
            text = f"{self.unlisted} more problems are not listed"
            self.problems.append(Problem(place=self.path.name, text=text, severity="missing"))
        if not images:
            why = f": {self.problems[0].text}" if self.problems else ""
            raise InputError(f"{self.path.name} leads to no image at all{why}. Correct [[images]].")
        return StudyPlan(
            path=self.path.absolute(),
            folder=self.folder,
            sha256=self.sha256,
            tables=self.tables,
            measure=measure,
            predict=predict,
            compare=compare,
            images=images,
            spectra=spectra,
            problems=tuple(self.problems),
        )

    def _shared(self, kind: type[K], name: str, values: dict[str, Any]) -> K:
        try:
            return change_settings(kind, None, values)
        except SettingsError as error:
            unknown = [key for key in values if key not in kind.model_fields]
            bad = unknown[0] if unknown else next((key for key in values if key in str(error)), None)
            where = say_place((name, *([bad] if bad else [])), file_name=self.path.name, text=self.text)
            raise SettingsError(f"{where}: {error}") from None

    def _note(self, place: str, text: str, severity: str) -> None:
        if len(self.problems) < MAX_PROBLEMS:
            self.problems.append(Problem(place=place, text=text, severity=severity))
        else:
            self.unlisted += 1

    # --- images

    def _images(self, measure: MeasureSettings, predict: PredictSettings | None) -> tuple[PlannedImage, ...]:
        measures, predicts = _Variants(MeasureSettings, measure), _Variants(PredictSettings, predict)
        images: list[PlannedImage] = []
        keys: set[str] = set()
        seen: dict[tuple[Any, ...], str] = {}
        for values, place in self._rows("images", self.tables.images, ImageEntry):
            with _At(place):
                image = self._image(values, place, measures, predicts, keys)
            settings = image.measure
            same = (image.path, settings.page, settings.region, settings.line)
            if same in seen:
                raise SettingsError(
                    f"{place}: image '{image.name}' stands twice, also at {seen[same]}. Counting it twice would make "
                    "the result look better than it is: remove one, or give another page or region."
                )
            seen[same] = place
            images.append(image)
            if len(images) > MAX_ROWS:
                raise InputError(f"{place}: more than {MAX_ROWS} images. Split the study.")
        return tuple(images)

    def _image(
        self,
        values: dict[str, Any],
        place: str,
        measures: _Variants[MeasureSettings],
        predicts: _Variants[PredictSettings],
        keys: set[str],
    ) -> PlannedImage:
        name = values["file"]
        path, exists = self.folders.locate(name, place)
        if not exists:
            self._note(place, f"image '{name}' is missing", "missing")
        changes = dict(values.get("measure") or {})
        for short in ("region", "page", "pixel_size"):
            if values.get(short) is not None:
                changes[short] = several_numbers(values[short]) if short == "region" else values[short]
        light = dict(values.get("predict") or {})
        settings = measures.change(changes) if changes else measures.shared
        assert settings is not None
        return PlannedImage(
            key=_make_key(name, keys, (settings.page, settings.region, settings.line)),
            path=path,
            name=name,
            place=place,
            group=values.get("group") or "all",
            specimen=_needed(values, "specimen", "which specimen it shows"),
            section=values.get("section"),
            position=values.get("position"),
            exclude=values.get("exclude"),
            note=values.get("note"),
            measure=settings,
            predict=predicts.change(light) if light else predicts.shared,
            overrides={**changes, **{f"predict.{k}": v for k, v in light.items()}} if changes or light else {},
        )

    # --- spectra

    def _spectra(self, compare: CompareSettings, images: Sequence[PlannedImage]) -> tuple[PlannedSpectrum, ...]:
        groups_of: dict[str, list[str]] = {}
        for image in images:
            found = groups_of.setdefault(image.specimen, [])
            if image.group not in found:
                found.append(image.group)
        variants = _Variants(CompareSettings, compare)
        keys: set[str] = set()
        seen: dict[tuple[Any, ...], str] = {}
        spectra = []
        for values, place in self._rows("spectra", self.tables.spectra, SpectrumEntry):
            with _At(place):
                spectrum = self._spectrum(values, place, variants, groups_of, keys)
            same = (spectrum.path, spectrum.column)
            if same in seen:
                raise SettingsError(
                    f"{place}: spectrum '{spectrum.name}' stands twice, also at {seen[same]}. Remove one."
                )
            seen[same] = place
            spectra.append(spectrum)
        return tuple(spectra)

    def _spectrum(
        self,
        values: dict[str, Any],
        place: str,
        variants: _Variants[CompareSettings],
        groups_of: Mapping[str, list[str]],
        keys: set[str],
    ) -> PlannedSpectrum:
        name = values["file"]
        path, exists = self.folders.locate(name, place)
        if not exists:
            self._note(place, f"spectrum '{name}' is missing", "missing")
        specimen = _needed(values, "specimen", "which specimen it was taken on")
        groups = groups_of.get(specimen, [])
        group = values.get("group")
        if group is None and len(groups) > 1:
            raise SettingsError(
                f"specimen '{specimen}' occurs in the groups {', '.join(groups)}. Say which one: add group."
            )
        group = group or (groups[0] if groups else "all")
        if group not in groups:
            self._note(
                place, f"spectrum '{name}' is of specimen '{specimen}' of group '{group}', which has no image", "note"
            )
        mirror = values.get("reference_file")
        if mirror and not self.folders.locate(mirror, place)[1]:
            self._note(place, f"reference '{mirror}' is missing", "missing")
        changes = dict(values.get("compare") or {})
        column = values.get("column")
        return PlannedSpectrum(
            key=_make_key(name, keys, (column,)),
            path=path,
            name=name,
            place=place,
            group=group,
            specimen=specimen,
            spot=values.get("spot"),
            quantity=values.get("quantity") or variants.change(changes).quantity,
            reference=values.get("reference") or self.tables.colour.reference,
            reference_path=self.folders.locate(mirror, place)[0] if mirror else None,
            column=int(column) if isinstance(column, str) and column.isdigit() else column,
            exclude=values.get("exclude"),
            note=values.get("note"),
            compare=variants.change(changes),
            overrides=changes,
        )

    # --- rows from entries, patterns and CSV tables

    def _rows(self, what: str, source: str | Sequence[Any], kind: type[Settings]) -> Iterator[Row]:
        if isinstance(source, str):
            yield from self._csv_rows(source, {}, say_place((what,), file_name=self.path.name, text=self.text), kind)
            return
        lines = find_entry_lines(self.text, what)
        shared = find_line(self.text, (what,))
        for number, entry in enumerate(source):
            line = lines[number] if number < len(lines) else shared
            place = f"{self.path.name}{f', line {line}' if line else ''}, {what}[{number + 1}]"
            values = {k: v for k, v in entry.model_dump().items() if v not in (None, {}) and k != "table"}
            if entry.table is not None:
                yield from self._csv_rows(entry.table, values, place, kind)
            else:
                yield from self._expand(values, place)

    def _expand(self, values: dict[str, Any], place: str) -> Iterator[Row]:
        pattern = values["file"]
        if not re.search(r"[*?\[{]", pattern) or os.path.lexists(self.folder / pattern):
            yield values, place
            return
        if os.path.isabs(pattern) and not self.tables.study.allow_outside:
            self.folders.locate(pattern, place)
        glob_text, expression = read_pattern(pattern, place, ImageEntry.model_fields)
        matched = False
        for name in sorted(glob.glob(glob_text, root_dir=self.folder, recursive=True)):
            fields = expression.fullmatch(name.replace(os.sep, "/"))
            if fields and not os.path.isdir(self.folder / name):
                matched = True
                yield {**values, "file": name.replace(os.sep, "/"), **fields.groupdict()}, place
        if not matched:
            self._note(place, f"no file matches '{pattern}'", "missing")

    def _csv_rows(self, name: str, defaults: dict[str, Any], place: str, kind: type[Settings]) -> Iterator[Row]:
        path, exists = self.folders.locate(name, place)
        if not exists:
            raise InputError(f"{place}: table '{name}' is missing. Put it there, or correct the name.")
        try:
            with open(path, encoding="utf-8-sig", newline="") as stream:
                yield from self._read_csv(stream, name, defaults, kind)
        except UnicodeDecodeError as error:
            raise InputError(f"{name} is not UTF-8 at byte {error.start}. Save it as UTF-8 and run again.") from None
        except csv.Error as error:
            raise InputError(f"{name} cannot be read as CSV: {error}. Correct it and run again.") from None
        except OSError as error:
            raise InputError(f"{name} cannot be read ({error.strerror}).") from None

    def _read_csv(self, stream: Any, name: str, defaults: dict[str, Any], kind: type[Settings]) -> Iterator[Row]:
        first = stream.readline()
        delimiter = max(",;\t", key=first.count)
        header = next(csv.reader([first], delimiter=delimiter), [])
        columns = [read_column(text, name, kind) for text in header]
        if len(set(columns)) != len(columns):
            raise SettingsError(f"{name}, line 1: a column stands twice. Remove one.")
        if ("file",) not in columns:
            raise SettingsError(f"{name}, line 1: no column 'file'. Columns are {', '.join(header)}.")
        plain = all(len(column) == 1 for column in columns)
        names = [column[0] for column in columns]
        reader = csv.reader(stream, delimiter=delimiter)
        for cells in reader:
            place = f"{name}, line {reader.line_num + 1}"
            if not any(cells):
                continue
            if len(cells) != len(names):
                raise InputError(f"{place}: {len(cells)} cells where the header has {len(names)}. Correct the row.")
            values = dict(defaults)
            if plain:
                values.update((key, cell.strip()) for key, cell in zip(names, cells, strict=True) if cell.strip())
            else:
                fill_nested(values, columns, cells)
            if not values.get("file"):
                raise SettingsError(f"{place}: no file. Name one, or delete the row.")
            yield values, place

    # --- the design as a whole

    def _look_at_design(self, images: Sequence[PlannedImage]) -> None:
        groups: dict[str, dict[str, int]] = {}
        for image in images:
            specimens = groups.setdefault(image.group, {})
            specimens[image.specimen] = specimens.get(image.specimen, 0) + (image.exclude is None)
        name, study, limits = self.path.name, self.tables.study, self.tables.limits
        asked = [*study.groups, *([study.reference_group] if study.reference_group else [])]
        for group in [*asked, *(limits.groups if limits else ())]:
            if group not in groups:
                self._note(name, f"group '{group}' has no image", "missing" if group in study.groups else "note")
        where: dict[str, list[str]] = {}
        for group, specimens in groups.items():
            counted = [s for s, n in specimens.items() if n]
            if not counted:
                self._note(name, f"every image of group '{group}' is excluded", "note")
            elif len(counted) == 1:
                self._note(
                    name, f"group '{group}' has one specimen: no test and no interval can be made for it", "note"
                )
            for specimen in specimens:
                where.setdefault(specimen, []).append(group)
        shared = {specimen: found for specimen, found in where.items() if len(found) > 1}
        for specimen, found in list(shared.items())[:10]:
            text = f"specimen '{specimen}' occurs in the groups {', '.join(found)}: taken as different specimens"
            self._note(name, text, "note")


class _At:
    """Puts the place before the message of an error raised inside."""

    __slots__ = ("place",)

    def __init__(self, place: str) -> None:
        self.place = place

    def __enter__(self) -> None:
        return None

    def __exit__(self, kind: Any, error: BaseException | None, trace: Any) -> None:
        if isinstance(error, LayerscanError) and not str(error).startswith(self.place):
            raise type(error)(f"{self.place}: {error}") from None


def _needed(values: Mapping[str, Any], key: str, what: str) -> str:
    value = values.get(key)
    if not value:
        raise SettingsError(f"'{values['file']}' has no {key}. Say {what}: add {key}.")
    return str(value)


def _make_key(name: str, taken: set[str], parts: tuple[Any, ...]) -> str:
    """A key that is safe as a file name and HTML id: from the path, made unique by a hash where it must be."""
    key = re.sub(r"[^A-Za-z0-9]+", "_", os.path.splitext(name)[0]).strip("_")[-80:] or "image"
    if any(part not in (None, 0) for part in parts) or key in taken:
        key += "_" + hashlib.sha256(repr((name, parts)).encode()).hexdigest()[:8]
    taken.add(key)
    return key
