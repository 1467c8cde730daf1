"""Files: written whole or not at all, read with errors that say the line; what CSV cells and JSON values look like."""

from __future__ import annotations

import contextlib
import csv
import hashlib
import io
import json
import math
import os
import tempfile
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

from layerscan.errors import InputError

if TYPE_CHECKING:
    from numpy.typing import NDArray


def write_file(path: Path, content: str | bytes) -> Path:
    """Write a file so that it is complete or absent: temporary name, flush to disk, rename.

    Raises
    ------
    InputError
        The folder cannot be made or written, or the disk is full; a file that was there before stays as it was.
    """
    data = content.encode("utf-8") if isinstance(content, str) else content
    temporary = None
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        handle, temporary = tempfile.mkstemp(prefix=f".{path.name}.", dir=path.parent)
        with os.fdopen(handle, "wb") as stream:
            stream.write(data)
            stream.flush()
            os.fsync(stream.fileno())
        os.chmod(temporary, 0o644)
        os.replace(temporary, path)
    except OSError as error:
        if temporary is not None:
            with contextlib.suppress(OSError):
                os.unlink(temporary)
        raise InputError(
            f"'{path}' cannot be written ({error.strerror or error}). Choose a folder that can be written with --out."
        ) from error
    return path


def dump_json(document: Mapping[str, Any]) -> str:
    """JSON text of a document: keys in the documented order, no NaN."""
    return json.dumps(document, ensure_ascii=False, indent=1, allow_nan=False) + "\n"


def file_sha256(path: Path) -> str:
    """SHA-256 of a file's bytes, in hexadecimal."""
    with open(path, "rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()


def plain(value: Any) -> Any:
    """Turn a record's field into what JSON holds: arrays to lists, NaN and infinities to null, paths to text."""
    if value is None or isinstance(value, bool | str | int):
        return value
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if isinstance(value, Mapping):
        return {str(k): plain(v) for k, v in value.items()}
    if hasattr(value, "tolist"):
        return plain(value.tolist())
    if isinstance(value, list | tuple):
        return [plain(v) for v in value]
    if isinstance(value, Path):
        return value.as_posix()
    raise TypeError(f"{type(value).__name__} has no place in a document")


def rounded(values: NDArray[Any]) -> list[float | None]:
    """Values with seven significant digits; what is not finite is None."""
    return [float(f"{v:.7g}") if math.isfinite(v) else None for v in values.tolist()]


def csv_text(columns: Sequence[str], rows: Iterable[Sequence[Any]]) -> str:
    """CSV with a header line; unknown is an empty cell, floats have nine significant digits."""
    stream = io.StringIO()
    writer = csv.writer(stream, lineterminator="\n")
    writer.writerow(columns)
    writer.writerows([_cell(v) for v in row] for row in rows)
    return stream.getvalue()


def _cell(value: Any) -> str:
    if value is None:
        return ""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, float):
        return format(value, ".9g") if math.isfinite(value) else ""
    return str(value)


def relative_to_folder(path: str | None, folder: Path) -> str | None:
    """Path as a document in ``folder`` states it: relative where that is possible."""
    if path is None or not Path(path).exists():
        return path
    try:
        return Path(os.path.relpath(Path(path).resolve(), folder.resolve())).as_posix()
    except ValueError:  # another drive
        return Path(path).resolve().as_posix()


def find_source(path: str | None, document: Path) -> Path | None:
    """The file that a document names: from the document's folder, else as given, else beside the document."""
    if path is None:
        return None
    candidates = (document.parent / path, Path(path), document.parent / Path(path).name)
    return next((c for c in candidates if c.is_file()), None)


def require_source(path: str | None, document: Path) -> Path:
    """The file that a document was made from; raises ``InputError`` where it is not to be found."""
    found = find_source(path, document)
    if found is None:
        raise InputError(
            f"'{document}' was made from '{path}', which is not there. Put the file back, or beside the document."
        )
    return found


def read_csv(path: Path, *, required: Sequence[str]) -> list[tuple[int, dict[str, str]]]:
    """Rows of a CSV table as (line number, cells by column); raises ``InputError`` where a column is missing."""
    try:
        text = path.read_text(encoding="utf-8-sig")
    except FileNotFoundError:
        raise InputError(f"'{path}' does not exist. Give a table with the column {required[0]}.") from None
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(f"'{path}' cannot be read as text ({error}). Give a CSV table.") from error
    delimiter = ";" if text.partition("\n")[0].count(";") > text.partition("\n")[0].count(",") else ","
    try:
        reader = csv.DictReader(io.StringIO(text), delimiter=delimiter, skipinitialspace=True)
        header = [name.strip() for name in reader.fieldnames or ()]
        missing = [name for name in required if name not in header]
        if missing:
            raise InputError(
                f"'{path}' has no column '{missing[0]}'; it has {', '.join(header) or 'no header'}. "
                f"Give the columns {', '.join(required)}."
            )
        reader.fieldnames = header
        rows = []
        for row in reader:
            if any((v or "").strip() for v in row.values() if isinstance(v, str)):
                rows.append((reader.line_num, {k: v for k, v in row.items() if isinstance(k, str)}))
    except csv.Error as error:
        raise InputError(f"'{path}' cannot be read as a table ({error}). Give a CSV table.") from error
    return rows


def read_number(text: str | None, *, path: Path, line: int, column: str) -> float | None:
    """Number in a cell, None where it is empty; raises ``InputError`` where it is none."""
    if text is None or not text.strip():
        return None
    try:
        value = float(text)
    except ValueError:
        value = math.nan
    if not math.isfinite(value):
        raise InputError(f"'{path}' line {line}: {column} is '{text}'. Give a number, with a decimal point.")
    return value
