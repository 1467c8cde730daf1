"""The catalogue of media and everything else that a user may name as a material.

One file a medium under ``media/`` (TOML), the same form in a folder of the user's own:

- ``name``, ``names`` (others), ``status`` (published, second-hand, convention, user), ``source``, ``doi``, ``note``,
  ``range_nm``, ``temperature_c``, ``u_index`` (standard uncertainty of n; left out where the source states none);
- one ``[[index]]`` for an isotropic medium, or three with ``axis`` nx, ny, nz (z along the layer normal), each with
  ``formula`` and ``coefficients`` or a ``table`` of wavelength in nm, n and k; k may have a table of its own.
"""

from __future__ import annotations

import re
import tomllib
from collections.abc import Callable, Mapping
from functools import lru_cache
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from layerscan.errors import MaterialError
from layerscan.records import Medium

if TYPE_CHECKING:
    from layerscan.records import ComplexArray, FloatArray

MEDIA_FOLDER = Path(__file__).with_name("media")
SODIUM_D_NM = 589.3
AXES = {("n",), ("nx", "ny", "nz")}

_NUMBER = r"(?:\d+\.?\d*|\.\d+)(?:[eE][-+]?\d+)?"
_TYPED = re.compile(
    rf"^n\s*=\s*([-+]?{_NUMBER})\s*(?:([-+])\s*({_NUMBER})\s*[ij])?\s*(?:(?:\+-|\+/-|±)\s*({_NUMBER}))?\s*$"
)

IndexFunction = Callable[["FloatArray"], "ComplexArray"]


def find_medium(text: str, *, folder: str | Path | None = None) -> Medium:
    """Find the medium that a user names.

    Parameters
    ----------
    text : str
        A catalogue name or one of its other names (capitals do not matter), ``n=1.56``, ``n=1.56 +- 0.01`` (standard
        uncertainty), ``n=1.68+0.03i``, or the path of a table: wavelength in nm (or um), n and, if wanted, k.
    folder : path, optional
        Folder of the user's own media in the catalogue's form; they come before those of the catalogue.

    Returns
    -------
    Medium
        With index functions from wavelength in nm to n + ik.

    Raises
    ------
    MaterialError
        The name is unknown (the nearest ones are said), the index is impossible, k is negative, or the table cannot
        be read.

    Examples
    --------
    >>> round(float(find_medium("Chitin").index[0](np.array([500.0])).real[0]), 4)
    1.5522
    """
    body = text.strip()
    if re.match(r"^n\s*=", body):
        return _typed_medium(body)
    catalogue = _names(folder)
    key = body.casefold()
    if key in catalogue:
        return catalogue[key]
    if _is_file(body):
        return read_table(Path(body).expanduser())
    import difflib

    near = (
        difflib.get_close_matches(key, catalogue, n=4, cutoff=0.5)
        or sorted(name for name in catalogue if name.startswith(key[:1]))[:4]
    )
    known = f"The nearest names are {', '.join(near)}. " if near else ""
    raise MaterialError(
        f"Material '{text}' is not in the catalogue and is no file. {known}Give a catalogue name (layerscan materials "
        "lists them), an index such as 'n=1.56 +- 0.01' or 'n=1.68+0.03i', or a table file of wavelength, n and k."
    )


def _is_file(text: str) -> bool:
    try:
        return Path(text).expanduser().is_file()
    except (OSError, ValueError, RuntimeError):  # no text for a path: too long, a null byte, an unknown ~user
        return False


def list_media(folder: str | Path | None = None) -> tuple[Medium, ...]:
    """Every medium of the catalogue, and of a user's own folder where one is given, by name."""
    return tuple(sorted({medium.name: medium for medium in _names(folder).values()}.values(), key=lambda m: m.name))


def index_of(medium: Medium, wavelength_nm: FloatArray) -> ComplexArray:
    """Index that a layer of the medium shows to light along the layer normal: the mean of nx and ny, or n.

    Raises
    ------
    MaterialError
        The formula gives no usable index at one of the wavelengths, or k is negative.
    """
    parts = medium.index[:2] if len(medium.index) == 3 else medium.index
    n: ComplexArray = np.mean([part(wavelength_nm) for part in parts], axis=0)
    bad = ~(np.isfinite(n) & (n.real > 0))
    if bad.any():
        raise MaterialError(
            f"Material '{medium.name}' has no usable index at {wavelength_nm[bad][0]:g} nm. "
            f"{_range_text(medium)} Choose wavelengths in that range or another material."
        )
    if (n.imag < 0).any():
        raise MaterialError(f"Material '{medium.name}' has k = {n.imag.min():g} < 0. Give k >= 0 (n + ik absorbs).")
    return n


def extrapolation_nm(medium: Medium, wavelength_nm: FloatArray) -> float:
    """How far the wavelengths reach beyond the range that the source covers [nm]; 0 within it."""
    if medium.range_nm is None:
        return 0.0
    low, high = medium.range_nm
    return float(max(low - wavelength_nm.min(), wavelength_nm.max() - high, 0.0))


def material_record(medium: Medium) -> dict[str, Any]:
    """What a document keeps of a medium: where its index comes from."""
    try:
        at_d: complex | None = complex(index_of(medium, np.array([SODIUM_D_NM]))[0])
    except MaterialError:  # a formula that has no value there
        at_d = None
    return {
        "name": medium.name,
        "source": medium.source,
        "doi": medium.doi,
        "status": medium.status,
        "range_nm": None if medium.range_nm is None else list(medium.range_nm),
        "u_index": medium.u_index,
        "temperature_c": medium.temperature_c,
        "n_589": None if at_d is None else at_d.real,
        "k_589": None if at_d is None else at_d.imag,
        "kind": medium.kind,
        "note": medium.note,
    }


def _range_text(medium: Medium) -> str:
    if medium.range_nm is None:
        return "Its source states no range."
    return f"Its source covers {medium.range_nm[0]:g} to {medium.range_nm[1]:g} nm."


# --- what a user types ----------------------------------------------------------------------------------------------


def _typed_medium(text: str) -> Medium:
    match = _TYPED.match(text)
    if match is None:
        raise MaterialError(f"Index '{text}' cannot be read. Give 'n=1.56', 'n=1.56 +- 0.01' or 'n=1.68+0.03i'.")
    n = float(match[1])
    k = float((match[2] or "+") + (match[3] or "0"))
    if not 0 < n < 100:
        raise MaterialError(f"Index '{text}' has n = {n:g}; a positive refractive index is needed, such as 'n=1.56'.")
    if k < 0:
        raise MaterialError(f"Index '{text}' has k = {k:g} < 0, a medium with gain. Give n + ik with k >= 0.")
    return Medium(
        name=text,
        index=(_constant(n, k),),
        u_index=None if match[4] is None else float(match[4]),
        source="given by the user",
        status="user",
        kind="constant",
    )


def read_table(path: Path) -> Medium:
    """Read a table of wavelength, n and, if there, k; separators are blanks, commas or semicolons.

    A comma is a decimal sign where semicolons or tabs separate, or where blanks do and no number has a point.
    The wavelength is taken as um where a header says so or every value lies below 30, else as nm.

    Raises
    ------
    MaterialError
        No numbers, fewer than two rows, a wavelength twice, or values that are impossible.
    """
    try:
        text = path.read_text(encoding="utf-8-sig", errors="replace")
    except OSError as error:
        raise MaterialError(f"Material table '{path}' cannot be read: {error.strerror}.") from None
    rows, header = [], ""
    for line in text.splitlines():
        parts = _split(line)
        try:
            rows.append([float(part) for part in parts[:3]])
        except ValueError:
            header += line.casefold() + "\n"
    rows = [row for row in rows if len(row) >= 2]
    form = "Give rows of wavelength in nm, n and, if wanted, k, with '.' as decimal sign."
    if len(rows) < 2 or len({len(row) for row in rows}) != 1:
        raise MaterialError(f"Material table '{path.name}' has {len(rows)} usable rows. {form}")
    table = np.array(rows)
    table = table[np.argsort(table[:, 0])]
    if re.search(r"(?<![a-z])(um|µm|μm|micro(n|met(er|re)))s?(?![a-z])", header) or (
        "nm" not in header and table[-1, 0] < 30
    ):
        table[:, 0] *= 1e3
    return _table_medium(table, path)


def _split(line: str) -> list[str]:
    """Numbers of one row as text with a decimal point."""
    body = line.strip()
    blanks = re.search(r"\d\s+[-+.\d]", body) and "." not in body
    if re.search(r"\d,\d", body) and (";" in body or "\t" in body or blanks):
        body = re.sub(r"(?<=\d),(?=\d)", ".", body)
    return [part for part in re.split(r"[;\s,]+", body) if part]


def _table_medium(table: FloatArray, path: Path) -> Medium:
    from hashlib import sha256

    if (
        not np.isfinite(table).all()
        or (np.diff(table[:, 0]) <= 0).any()
        or table[0, 0] <= 0
        or (table[:, 1] <= 0).any()
    ):
        raise MaterialError(
            f"Material table '{path.name}' holds a wavelength twice or values that are not finite and positive."
        )
    if table.shape[1] > 2 and (table[:, 2] < 0).any():
        raise MaterialError(
            f"Material table '{path.name}' holds k = {table[:, 2].min():g} < 0, a medium with gain. "
            "Give k >= 0 for absorption (n + ik)."
        )
    return Medium(
        name=path.stem,
        index=(_tabulated(table),),
        range_nm=(float(table[0, 0]), float(table[-1, 0])),
        source=f"table {path.name}, sha256 {sha256(path.read_bytes()).hexdigest()}",
        status="user",
        kind="table",
    )


# --- files of the catalogue -----------------------------------------------------------------------------------------


def _names(folder: str | Path | None) -> Mapping[str, Medium]:
    """Every name and other name, casefolded; a user's folder comes first."""
    own: dict[str, Medium] = {}
    if folder is not None:
        path = Path(folder)
        if not path.is_dir():
            raise MaterialError(f"Materials folder '{folder}' is no folder. Give one that holds .toml files.")
        for file in sorted(path.glob("*.toml")):
            _add(own, read_medium(file))
    return {**_catalogue(), **own}


@lru_cache(maxsize=1)
def _catalogue() -> Mapping[str, Medium]:
    found: dict[str, Medium] = {}
    for path in sorted(MEDIA_FOLDER.glob("*.toml")):
        _add(found, read_medium(path))
    return found


def _add(names: dict[str, Medium], medium: Medium) -> None:
    for name in (medium.name, *medium.names):
        key = name.casefold()
        if key in names:
            raise MaterialError(f"The name '{name}' stands for both '{names[key].name}' and '{medium.name}'.")
        names[key] = medium


def read_medium(path: Path) -> Medium:
    """Read one file of the catalogue's form.

    Raises
    ------
    MaterialError
        The file is no TOML, lacks name, source or index, or names an unknown formula or status.
    """
    try:
        content = tomllib.loads(path.read_text(encoding="utf-8"))
        axes = tuple(str(part.get("axis", "n")) for part in content["index"])
        if axes not in AXES:
            raise ValueError(f"axes {axes} are neither n nor nx, ny, nz")
        if content.get("status", "user") not in ("published", "second-hand", "convention", "user"):
            raise ValueError(f"status '{content['status']}' is not published, second-hand, convention or user")
        span = content.get("range_nm")
        functions = tuple(_function(part) for part in content["index"])
        return Medium(
            name=str(content["name"]),
            names=tuple(content.get("names", ())),
            index=functions,
            axes=axes,
            range_nm=None if span is None else (float(span[0]), float(span[1])),
            u_index=content.get("u_index"),
            temperature_c=content.get("temperature_c"),
            source=str(content["source"]),
            doi=content.get("doi"),
            status=content.get("status", "user"),
            note=content.get("note", ""),
            kind=_kind(content["index"][0]),
        )
    except (OSError, ValueError, KeyError, TypeError, IndexError) as error:
        raise MaterialError(
            f"Material file '{path.name}' cannot be used: {error}. It needs name, source and [[index]] with formula "
            "and coefficients, or a table."
        ) from None


def _kind(part: Mapping[str, Any]) -> str:
    if "table" in part:
        return "table"
    return "constant" if part["formula"] == "constant" else f"formula {part['formula']}"


def _function(part: Mapping[str, Any]) -> IndexFunction:
    """Index function of one axis."""
    if "table" in part:
        return _tabulated(_numbers(part["table"]))
    coefficients = tuple(float(c) for c in part["coefficients"])
    name = str(part["formula"])
    if name == "constant":
        return _constant(coefficients[0], coefficients[1] if len(coefficients) > 1 else 0.0)
    formula = FORMULAS[name]
    extinction = _extinction(part)

    def index(wavelength_nm: FloatArray) -> ComplexArray:
        with np.errstate(invalid="ignore", divide="ignore"):  # outside its range a formula may have no real value
            n = formula(np.asarray(wavelength_nm, dtype=float), coefficients)
        return n + 1j * extinction(wavelength_nm)

    return index


def _extinction(part: Mapping[str, Any]) -> Callable[[FloatArray], FloatArray]:
    if "extinction_table" in part:
        table = _numbers(part["extinction_table"])
        return lambda wavelength_nm: _interpolate(table[:, 0], table[:, 1], wavelength_nm)
    if "extinction_exponential" in part:
        height, length = part["extinction_exponential"]
        return lambda wavelength_nm: height * np.exp(-np.asarray(wavelength_nm) / length)
    return lambda wavelength_nm: np.zeros_like(np.asarray(wavelength_nm, dtype=float))


def _numbers(text: str) -> FloatArray:
    return np.array([[float(x) for x in line.split()] for line in text.strip().splitlines()])


def _constant(n: float, k: float) -> IndexFunction:
    return lambda wavelength_nm: np.full(np.shape(wavelength_nm), complex(n, k))


def _tabulated(table: FloatArray) -> IndexFunction:
    def index(wavelength_nm: FloatArray) -> ComplexArray:
        n = _interpolate(table[:, 0], table[:, 1], wavelength_nm)
        k = _interpolate(table[:, 0], table[:, 2], wavelength_nm) if table.shape[1] > 2 else np.zeros_like(n)
        return n + 1j * k

    return index


def _interpolate(x: FloatArray, y: FloatArray, wavelength_nm: FloatArray) -> FloatArray:
    """Shape-preserving cubic between the rows; the end value beyond them.

    References
    ----------
    .. [1] F. N. Fritsch, J. Butland, SIAM J. Sci. Stat. Comput. 5, 300 (1984), DOI 10.1137/0905021.
    """
    from scipy.interpolate import PchipInterpolator

    inside = np.clip(np.asarray(wavelength_nm, dtype=float), x[0], x[-1])
    if x.size == 1:
        return np.full(inside.shape, y[0])
    with np.errstate(over="ignore"):  # of the harmonic mean of slopes near zero, which it takes as zero
        result: FloatArray = PchipInterpolator(x, y)(inside)
    return result


# --- dispersion formulas: wavelength in nm and coefficients to n ----------------------------------------------------
# Formulas 1 to 6 are numbered as in the refractiveindex.info database and take the wavelength in um.


def _sellmeier(wavelength_nm: FloatArray, c: tuple[float, ...]) -> FloatArray:
    square = (wavelength_nm / 1e3) ** 2
    return np.sqrt(1 + c[0] + sum(a * square / (square - b * b) for a, b in zip(c[1::2], c[2::2], strict=True)))


def _sellmeier_squared(wavelength_nm: FloatArray, c: tuple[float, ...]) -> FloatArray:
    square = (wavelength_nm / 1e3) ** 2
    return np.sqrt(1 + c[0] + sum(a * square / (square - b) for a, b in zip(c[1::2], c[2::2], strict=True)))


def _polynomial(wavelength_nm: FloatArray, c: tuple[float, ...]) -> FloatArray:
    micro = wavelength_nm / 1e3
    return np.sqrt(c[0] + sum(a * micro**b for a, b in zip(c[1::2], c[2::2], strict=True)))


def _mixed(wavelength_nm: FloatArray, c: tuple[float, ...]) -> FloatArray:
    micro = wavelength_nm / 1e3
    square = c[0] + np.zeros_like(micro)
    for start in (1, 5):
        if len(c) > start:
            a, b, e, f = c[start : start + 4]
            square = square + a * micro**b / (micro**2 - e**f)
    return np.sqrt(square + sum(a * micro**b for a, b in zip(c[9::2], c[10::2], strict=True)))


def _cauchy_powers(wavelength_nm: FloatArray, c: tuple[float, ...]) -> FloatArray:
    micro = wavelength_nm / 1e3
    return c[0] + sum((a * micro**b for a, b in zip(c[1::2], c[2::2], strict=True)), np.zeros_like(micro))


def _gases(wavelength_nm: FloatArray, c: tuple[float, ...]) -> FloatArray:
    inverse = (wavelength_nm / 1e3) ** -2
    return 1 + c[0] + sum((a / (b - inverse) for a, b in zip(c[1::2], c[2::2], strict=True)), np.zeros_like(inverse))


def _cauchy(wavelength_nm: FloatArray, c: tuple[float, ...]) -> FloatArray:
    """n = A + B/l^2 + ..., l in nm."""
    return sum((a * wavelength_nm ** (-2.0 * i) for i, a in enumerate(c)), np.zeros_like(wavelength_nm))


def _quan_fry(wavelength_nm: FloatArray, c: tuple[float, ...]) -> FloatArray:
    """Quan and Fry (1995): ten coefficients, then salinity in permil and temperature in C."""
    n, (s, t) = c[:10], c[10:]
    fixed = n[0] + (n[1] + n[2] * t + n[3] * t * t) * s + n[4] * t * t
    x = wavelength_nm
    return fixed + (n[5] + n[6] * s + n[7] * t) / x + n[8] / x**2 + n[9] / x**3


FORMULAS: Mapping[str, Callable[[FloatArray, tuple[float, ...]], FloatArray]] = {
    "1": _sellmeier,
    "2": _sellmeier_squared,
    "3": _polynomial,
    "4": _mixed,
    "5": _cauchy_powers,
    "6": _gases,
    "cauchy": _cauchy,
    "quan-fry": _quan_fry,
}
