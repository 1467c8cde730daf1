"""Open a spectrum as instruments export it: text or CSV, whatever separates its columns and decimals."""

from __future__ import annotations

import re
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from layerscan.errors import InputError, SettingsError
from layerscan.readers.images import check_file, hash_file
from layerscan.records import Spectrum

if TYPE_CHECKING:
    from os import PathLike

    from layerscan.records import FloatArray, SpectrumKind

MIN_ROWS = 5
MAX_BYTES = 1 << 23
PERCENT_ABOVE = 2.0
"""Values above this, where no unit is stated, are taken as percent: no surface sends back twice the light."""

MICROMETRES_BELOW = 50.0
"""Wavelengths below this, where no unit is stated, are taken as um."""

_KINDS: tuple[tuple[str, SpectrumKind], ...] = (
    (r"reflect|reflex|\brfl\b|%\s*r\b|^r\s*[\[(]?%?[\])]?$", "reflectance"),
    (r"transm|%\s*t\b|^t\s*[\[(]?%?[\])]?$", "transmittance"),
    (r"absorb|\babs\b|\boptical density\b|^a$", "absorbance"),
)
_EMPTY_CELLS = {"", "nan", "na", "n/a", "-", "--", "inf", "-inf", "#n/a"}
_UNCERTAINTY = re.compile(
    r"^(u|sd|s\.d\.|std|stdev|st\.? ?dev\.?|sigma|uncertainty|error|err|se)($|[_ .(\[])|[_ ](u|sd|std|sigma)$"
)
_LAYOUTS: tuple[tuple[str | None, str], ...] = (
    ("\t", "."), ("\t", ","), (";", "."), (";", ","), (",", "."), (None, "."), (None, ","),
)  # fmt: skip


@dataclass(frozen=True, kw_only=True)
class Table:
    """The largest block of number rows in a text, and the header above it."""

    cells: FloatArray  # (rows, columns), NaN where a cell is empty
    names: tuple[str, ...]  # one per column, empty where nothing names it
    header: str


def open_spectrum(
    path: str | PathLike[str], *, quantity: SpectrumKind | None = None, column: int | str | None = None
) -> Spectrum:
    """Open a measured spectrum from text or CSV.

    Parameters
    ----------
    path : path-like
        Columns separated by tabs, semicolons, commas or spaces; decimal point or comma; header lines of any kind.
    quantity : {"reflectance", "transmittance", "absorbance"}, optional
        What the values are, where the file does not say it or says it wrongly.
    column : int or str, optional
        Column to read: its number in the file, from 0 (the wavelength is a column too), or its name.

    Returns
    -------
    Spectrum
        Wavelengths in nm, increasing; reflectance and transmittance 0 to 1; ``u`` from a column named u, sd, std or
        the like. All that was assumed is said among ``doubts``.

    Raises
    ------
    InputError
        Missing, empty, no table of numbers, fewer than five usable rows, all NaN, counts instead of reflectance.
    SettingsError
        No such column, or an unknown quantity.

    Notes
    -----
    Values are percent where the column's name says so or their 98th percentile over 400 to 700 nm is above 2.
    Wavelengths are um where all are below 50, wave numbers in 1/cm where the header says so, else nm.
    """
    path = Path(path)
    if quantity is not None and quantity not in ("reflectance", "transmittance", "absorbance"):
        raise SettingsError(f"Quantity '{quantity}' is not known. Give reflectance, transmittance or absorbance.")
    check_file(path)
    table = read_table(_read_text(path), name=path.name)
    doubts: list[str] = []
    axis = _wavelength_column(table)
    chosen = _choose_column(table, axis, quantity, column, path.name, doubts)
    wavelength_nm = _to_nm(table, axis, path.name, doubts)
    kind = _kind(table, chosen, quantity, doubts)
    value = table.cells[:, chosen].copy()
    spread = _uncertainty_column(table, axis, chosen)
    u = None if spread is None else np.abs(table.cells[:, spread])
    wavelength_nm, value, u = _tidy(wavelength_nm, value, u, path.name, doubts)
    factor = _scale(table, chosen, kind, wavelength_nm, value, doubts)
    value, u = value * factor, None if u is None else u * factor
    visible = (wavelength_nm >= 400) & (wavelength_nm <= 700)
    bright = value[visible] if visible.any() else value
    flags: tuple[str, ...] = ()
    if kind == "reflectance" and float(np.percentile(bright, 90)) > 1.0:
        flags = ("specular_reference_suspected",)
    return Spectrum(
        wavelength_nm=wavelength_nm,
        value=value,
        kind=kind,
        u=u,
        source=path.name,
        sha256=hash_file(path),
        doubts=tuple(doubts),
        flags=flags,
    )


def relative_to(spectrum: Spectrum, reference: Spectrum) -> Spectrum:
    """Turn a spectrum measured against a mirror into an absolute one: multiply by the mirror's own reflectance.

    Parameters
    ----------
    spectrum, reference : Spectrum
        Measured against the mirror, and the mirror's reflectance; both reflectance (or both transmittance), 0 to 1.

    Returns
    -------
    Spectrum
        On the wavelengths of ``spectrum`` that the reference covers; u combines both relative uncertainties where
        both are known, and is otherwise that of ``spectrum`` alone.

    Raises
    ------
    InputError
        Fewer than five wavelengths in common, or absorbance.

    Notes
    -----
    R = (sample signal / mirror signal) * R_mirror, linear interpolation of R_mirror in wavelength.
    """
    if "absorbance" in (spectrum.kind, reference.kind):
        raise InputError("A reference corrects reflectance or transmittance, not absorbance. Give one of these.")
    inside = (spectrum.wavelength_nm >= reference.wavelength_nm[0]) & (
        spectrum.wavelength_nm <= reference.wavelength_nm[-1]
    )
    if inside.sum() < MIN_ROWS:
        raise InputError(
            f"'{spectrum.source}' and the reference '{reference.source}' share {int(inside.sum())} wavelengths. "
            "Give a reference that covers the same range."
        )
    wavelength_nm = spectrum.wavelength_nm[inside]
    mirror = np.interp(wavelength_nm, reference.wavelength_nm, reference.value)
    value = spectrum.value[inside] * mirror
    u = None
    if spectrum.u is not None:
        u = spectrum.u[inside] * np.abs(mirror)
        if reference.u is not None:
            u_mirror = np.interp(wavelength_nm, reference.wavelength_nm, reference.u)
            u = np.hypot(u, spectrum.value[inside] * u_mirror)
    doubts = [*spectrum.doubts]
    if not inside.all():
        doubts.append(f"{int((~inside).sum())} wavelengths outside the reference '{reference.source}' were left out.")
    if reference.u is None:
        doubts.append(f"The reference '{reference.source}' states no uncertainty; u leaves it out.")
    return replace(
        spectrum,
        wavelength_nm=wavelength_nm,
        value=value,
        u=u,
        lower=None,
        upper=None,
        source=f"{spectrum.source} relative to {reference.source}",
        doubts=tuple(doubts),
        flags=tuple(f for f in spectrum.flags if f != "specular_reference_suspected"),
    )


# --- the table ------------------------------------------------------------------------------------------------------


def read_table(text: str, *, name: str) -> Table:
    """Find the largest block of number rows, whichever separator and decimal sign give it.

    Raises
    ------
    InputError
        No such block of two columns, or commas that separate both columns and decimals.
    """
    lines = re.split(r"\r\n|\r|\n", text)
    best: tuple[int, int, list[list[float]], str | None] | None = None
    for separator, decimal in _LAYOUTS:
        if separator is not None and separator not in text:
            continue
        start, rows = _largest_block(lines, separator, decimal)
        if rows and (best is None or len(rows) > len(best[2])):
            best = (start, len(rows[0]), rows, separator)
    if best is None:
        shown = next((line.strip()[:60] for line in lines if line.strip()), "")
        raise InputError(
            f"'{name}' holds no table of numbers with at least two columns; it begins with '{shown}'. "
            "Give wavelength and value on each line."
        )
    start, width, rows, separator = best
    names = _column_names(lines[:start], separator, width)
    table = Table(cells=np.array(rows, dtype=np.float64), names=names, header="\n".join(lines[:start])[-20_000:])
    _refuse_double_commas(table, separator, lines[start], name)
    return table


def _largest_block(lines: list[str], separator: str | None, decimal: str) -> tuple[int, list[list[float]]]:
    """Where the longest run of equally long number rows starts (blank lines do not end it), and its rows."""
    best_start, start = 0, 0
    best: list[list[float]] = []
    current: list[list[float]] = []
    for number, line in enumerate(lines):
        if not line.strip():
            continue
        row = _numbers(line, separator, decimal)
        if row is not None and current and len(row) == len(current[0]):
            current.append(row)
        else:
            start, current = number, [row] if row is not None else []
        if len(current) > len(best):
            best_start, best = start, current
    return best_start, best


def _numbers(line: str, separator: str | None, decimal: str) -> list[float] | None:
    cells = _split(line, separator)
    if len(cells) < 2:
        return None
    row = []
    for cell in cells:
        if cell.lower() in _EMPTY_CELLS:
            row.append(float("nan"))
            continue
        if decimal == ",":
            if "." in cell:
                return None
            cell = cell.replace(",", ".")
        try:
            row.append(float(cell))
        except ValueError:
            return None
    return row if np.isfinite(row[0]) or (len(row) > 2 and np.isfinite(row[1])) else None


def _split(line: str, separator: str | None) -> list[str]:
    cells = [cell.strip().strip('"').strip() for cell in (line.split() if separator is None else line.split(separator))]
    while cells and cells[-1] == "" and separator is not None and len(cells) > 2:
        cells.pop()
    return cells


def _column_names(header: list[str], separator: str | None, width: int) -> tuple[str, ...]:
    """Names from the one or two lines above the numbers that have as many cells as there are columns."""
    found: list[list[str]] = []
    for line in reversed([line for line in header if line.strip()][-3:]):
        line = line.strip(" ").lstrip("#!")
        cells = _split(line, separator)
        if separator is None and len(cells) != width:
            cells = [cell for cell in re.split(r"\s{2,}|\t", line.strip()) if cell]
        if len(cells) != width or (found and not _is_unit_row(found[-1])):
            break
        found.append(cells)
    if not found:
        return ("",) * width
    return tuple(" ".join(part for part in parts if part) for parts in zip(*reversed(found), strict=True))


def _is_unit_row(cells: list[str]) -> bool:
    """Whether a header row holds units, so that the row above it holds the names."""
    return all(re.fullmatch(r"[\[(].*[\])]|nm|um|µm|%|counts|a\.?u\.?|", cell.strip()) for cell in cells)


def _refuse_double_commas(table: Table, separator: str | None, line: str, name: str) -> None:
    """Raise where every cell is a whole number between commas and no header names three or four columns."""
    if separator != "," or table.cells.shape[1] not in (3, 4) or any(table.names):
        return
    if (table.cells == np.round(table.cells)).all():
        raise InputError(
            f"'{name}' has lines such as '{line.strip()[:40]}', in which commas may separate columns or decimals. "
            "Export it with semicolons, tabs or decimal points."
        )


def _read_text(path: Path) -> str:
    size = path.stat().st_size
    if size > MAX_BYTES:
        raise InputError(
            f"'{path.name}' has {size / 1e6:.0f} MB, too much for a spectrum. Export one spectrum as text."
        )
    raw = path.read_bytes()
    if raw.startswith((b"\xff\xfe", b"\xfe\xff")):
        return raw.decode("utf-16", errors="replace")
    try:
        return raw.decode("utf-8-sig")
    except UnicodeDecodeError:
        return raw.decode("latin-1")


# --- what the columns mean ------------------------------------------------------------------------------------------


def _wavelength_column(table: Table) -> int:
    for number, name in enumerate(table.names):
        if re.search(r"wave|lambda|λ|^wl\b|^w$|\[nm\]|\(nm\)|^nm$", name.lower()):
            return number
    return 0


def _uncertainty_column(table: Table, axis: int, chosen: int) -> int | None:
    spreads = [k for k, n in enumerate(table.names) if k not in (axis, chosen) and _UNCERTAINTY.search(n.lower())]
    after = [k for k in spreads if k > chosen]
    return after[0] if after else (spreads[0] if len(spreads) == 1 else None)


def _choose_column(
    table: Table, axis: int, quantity: SpectrumKind | None, column: int | str | None, name: str, doubts: list[str]
) -> int:
    width = table.cells.shape[1]
    values = [k for k in range(width) if k != axis and not _UNCERTAINTY.search(table.names[k].lower())]
    listed = ", ".join(f"{k}: '{n}'" if n else str(k) for k, n in enumerate(table.names))
    if column is not None:
        chosen = _named_column(table, column)
        if chosen is None or chosen == axis:
            raise SettingsError(f"'{name}' has no value column {column!r}. Its columns are {listed}.")
    elif not values:
        raise InputError(f"'{name}' has no column of values beside wavelength and uncertainty. Its columns: {listed}.")
    else:
        chosen = _likely_column(table, values, quantity)
        if len(values) > 1:
            called = f"'{table.names[chosen]}'" if table.names[chosen] else str(chosen)
            doubts.append(f"There are {len(values)} columns of values; column {called} was read.")
    if re.search(r"\bcounts?\b", table.names[chosen].lower()):
        raise InputError(
            f"Column '{table.names[chosen]}' of '{name}' holds counts, not a ratio to a reference. "
            "Export reflectance or transmittance, or choose another column."
        )
    return chosen


def _named_column(table: Table, column: int | str) -> int | None:
    if isinstance(column, str):
        wanted = column.strip().lower()
        exact = [k for k, n in enumerate(table.names) if n.lower() == wanted]
        partial = [k for k, n in enumerate(table.names) if wanted and wanted in n.lower()]
        if exact or len(partial) == 1:
            return (exact or partial)[0]
        return int(wanted) if wanted.isdigit() and int(wanted) < len(table.names) else None
    return column if 0 <= column < len(table.names) else None


def _likely_column(table: Table, values: list[int], quantity: SpectrumKind | None) -> int:
    """The column whose name says the quantity, else any quantity, else the processed one, else the first."""
    kinds = {k: _kind_of(table.names[k]) for k in values}
    ranked = [
        [k for k in values if quantity and kinds[k] == quantity],
        [k for k in values if kinds[k] and len(table.names[k]) > 1],
        [k for k in values if table.names[k].lower() in ("p", "processed")],
        values,
    ]
    return next(group for group in ranked if group)[0]


def _kind_of(text: str) -> SpectrumKind | None:
    found = [kind for pattern, kind in _KINDS if re.search(pattern, text.lower())]
    return found[0] if len(found) == 1 else None


def _kind(table: Table, chosen: int, quantity: SpectrumKind | None, doubts: list[str]) -> SpectrumKind:
    stated = _kind_of(table.names[chosen]) or _kind_of(table.header)
    if quantity is not None:
        if stated is not None and stated != quantity:
            doubts.append(f"You gave {quantity}, but the file says {stated}; yours was used.")
        return quantity
    if stated is None:
        doubts.append("The file does not say what its values are; they were taken as reflectance.")
        return "reflectance"
    return stated


def _to_nm(table: Table, axis: int, name: str, doubts: list[str]) -> FloatArray:
    """Wavelengths in nm: wave numbers where the header says so, else um or nm by the size of the numbers.

    Numbers decide between nm and um, since a header may also name a slit in um; a stated unit that they contradict
    is a doubt.
    """
    values = table.cells[:, axis]
    title = table.names[axis].lower() or table.header.lower()
    says_nm = bool(re.search(r"(^|[^a-z])(nm|nanomet(er|re)s?)([^a-z]|$)", title))
    says_um = bool(re.search(r"(^|[^a-z])(um|µm|μm|microns?|micromet(er|re)s?)([^a-z]|$)", title))
    if not says_nm and re.search(r"cm\s*\^?\s*[-⁻]\s*[1¹]|1/cm|wave ?number", title):
        with np.errstate(divide="ignore"):
            wavelength_nm = 1e7 / values
    elif np.nanmax(values) < MICROMETRES_BELOW:
        wavelength_nm = values * 1e3
        if not says_um:
            doubts.append(f"The wavelengths ({np.nanmin(values):.4g} to {np.nanmax(values):.4g}) were taken as um.")
    else:
        wavelength_nm = values * 1.0
        if says_um and not says_nm and table.names[axis]:
            doubts.append(f"The header says um, but wavelengths up to {np.nanmax(values):.4g} were taken as nm.")
    finite = wavelength_nm[np.isfinite(wavelength_nm)]
    if not finite.size or finite.min() < 50 or finite.max() > 100_000:
        raise InputError(
            f"The wavelengths of '{name}' run from {np.nanmin(values):.4g} to {np.nanmax(values):.4g}, which is no "
            "range in nm, um or 1/cm. Put the wavelength first, with its unit in the header."
        )
    return wavelength_nm


def _scale(
    table: Table, chosen: int, kind: SpectrumKind, wavelength_nm: FloatArray, value: FloatArray, doubts: list[str]
) -> float:
    """Factor to a fraction: 0.01 for percent by the column's name or by the values, 1 for a fraction or absorbance."""
    if kind == "absorbance":
        return 1.0
    if re.search(r"%|percent", table.names[chosen].lower()):
        return 0.01
    visible = (wavelength_nm >= 400) & (wavelength_nm <= 700)
    high = float(np.percentile(np.abs(value[visible] if visible.any() else value), 98))
    if high > PERCENT_ABOVE:
        doubts.append(f"The values, up to about {high:.3g}, were taken as percent.")
        return 0.01
    if re.search(r"%|percent", table.header.lower()):
        doubts.append(f"The header mentions percent, but values up to about {high:.3g} were taken as fractions.")
    return 1.0


def _tidy(
    wavelength_nm: FloatArray, value: FloatArray, u: FloatArray | None, name: str, doubts: list[str]
) -> tuple[FloatArray, FloatArray, FloatArray | None]:
    """Rows without a value left out, wavelengths increasing, equal wavelengths averaged."""
    good = np.isfinite(wavelength_nm) & np.isfinite(value)
    if not good.any():
        raise InputError(f"'{name}' has no finite value in the column that was read. Export it again.")
    if good.sum() < MIN_ROWS:
        raise InputError(
            f"'{name}' has {int(good.sum())} usable rows; a spectrum needs at least {MIN_ROWS}. Export all of it."
        )
    if not good.all():
        doubts.append(f"{int((~good).sum())} rows without a finite value were left out.")
    if u is not None and not np.isfinite(u[good]).all():
        doubts.append("The column of uncertainties has gaps and was not used.")
        u = None
    order = np.argsort(wavelength_nm[good], kind="stable")
    wavelength_nm, value = wavelength_nm[good][order], value[good][order]
    u = None if u is None else u[good][order]
    single, where, counts = np.unique(wavelength_nm, return_inverse=True, return_counts=True)
    if single.size == wavelength_nm.size:
        return wavelength_nm, value, u
    if single.size < MIN_ROWS:
        raise InputError(f"'{name}' has {single.size} different wavelengths; a spectrum needs at least {MIN_ROWS}.")
    doubts.append(f"{int((counts > 1).sum())} wavelengths occur more than once; their values were averaged.")
    value = np.bincount(where, weights=value) / counts
    u = None if u is None else np.bincount(where, weights=u) / counts
    return single, value, u
