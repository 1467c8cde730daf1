"""Rows of a plan: file patterns with named parts, and the columns and cells of CSV tables."""

from __future__ import annotations

import glob
import re
from collections.abc import Callable, Mapping, Sequence
from typing import Any

from layerscan.errors import SettingsError
from layerscan.settings import CompareSettings, MeasureSettings, PredictSettings, Settings
from layerscan.study.tables import nearest_name


def read_pattern(pattern: str, place: str, known: Mapping[str, Any]) -> tuple[str, re.Pattern[str]]:
    """Glob and regular expression of a pattern; ``{name}`` stands for a part without '/' and fills the key ``name``."""
    allowed = [name for name in known if name in ("group", "specimen", "section", "position", "note")]
    allowed += ["spot"]
    glob_text, expression = "", ""
    for part in re.split(r"(\{[^}]*\}|\*\*/|\*|\?|\[[^\]]+\])", pattern):
        if part.startswith("{"):
            name = part[1:-1]
            if name not in allowed:
                raise SettingsError(
                    f"{place}: pattern '{pattern}' has the unknown part '{part}'. The nearest is "
                    f"'{{{nearest_name(name, allowed)}}}'; known are {', '.join(allowed)}."
                )
            glob_text += "*"
            expression += f"(?P={name})" if f"(?P<{name}>" in expression else f"(?P<{name}>[^/]+?)"
        elif part == "**/":
            glob_text, expression = glob_text + part, expression + "(?:.*/)?"
        elif part in ("*", "?"):
            glob_text, expression = glob_text + part, expression + ("[^/]*" if part == "*" else "[^/]")
        elif part.startswith("[") and part.endswith("]"):
            inner = part[1:-1].replace("\\", r"\\").replace("[", r"\[")
            glob_text, expression = glob_text + part, expression + f"[{'^' + inner[1:] if inner[0] == '!' else inner}]"
        else:
            glob_text, expression = glob_text + glob.escape(part), expression + re.escape(part)
    try:
        return glob_text, re.compile(expression)
    except re.error as error:
        raise SettingsError(f"{place}: pattern '{pattern}' cannot be read ({error}). Correct it.") from None


def read_column(text: str, file_name: str, kind: type[Settings]) -> tuple[str, ...]:
    """Key of a CSV column: a key of the entry, or ``measure.NAME``, ``predict.NAME``, ``compare.NAME``."""
    tables: dict[str, type[Settings]] = {
        "measure": MeasureSettings,
        "predict": PredictSettings,
        "compare": CompareSettings,
    }
    tables = {name: table for name, table in tables.items() if name in kind.model_fields}
    plain = [name for name in kind.model_fields if name != "table" and name not in tables]
    head, _, rest = text.strip().partition(".")
    if not rest and head in plain:
        return (head,)
    if rest and head in tables and rest in tables[head].model_fields:
        return head, rest
    known = plain + [f"{name}.{field}" for name, table in tables.items() for field in table.model_fields]
    raise SettingsError(
        f"{file_name}, line 1: unknown column '{text}'. The nearest is '{nearest_name(text, known)}'; "
        f"known are {', '.join(plain)} and {', '.join(f'{t}.SETTING' for t in tables)}."
    )


_LISTS: Mapping[str, Callable[[str], Any]] = {
    "region": lambda text: several_numbers(text),
    "line": lambda text: several_numbers(text),
    "lab": lambda text: several_numbers(text),
    "edits": lambda text: tuple(part.strip() for part in text.split(";") if part.strip()),
}


def fill_nested(values: dict[str, Any], columns: Sequence[tuple[str, ...]], cells: Sequence[str]) -> None:
    """Put the cells of a row where their columns say; blank cells leave what was there."""
    for column, cell in zip(columns, cells, strict=True):
        text = cell.strip()
        if not text:
            continue
        if len(column) == 1:
            values[column[0]] = text
        else:
            head, name = column
            values[head] = {**values.get(head, {}), name: _LISTS[name](text) if name in _LISTS else text}


def several_numbers(value: Any) -> Any:
    """Numbers of a text with commas between them; anything but a text stays as it is."""
    if not isinstance(value, str):
        return value
    try:
        return tuple(float(part) if "." in part else int(part) for part in re.split(r"[,;\s]+", value.strip("()[] ")))
    except ValueError:
        raise SettingsError(f"'{value}' are not numbers separated by commas.") from None
