"""The command line that repeats what was done in the panel, as text to copy."""

from __future__ import annotations

import shlex
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from layerscan.settings import CompareSettings, MeasureSettings, PredictSettings, Settings


def measure_call(path: str, settings: MeasureSettings, *, out: str | None = None) -> str:
    """``layerscan measure`` for one image: the same settings, so the same numbers.

    Examples
    --------
    >>> from layerscan.settings import MeasureSettings
    >>> measure_call("my section.tif", MeasureSettings(line=(1, 2, 3.5, 40), width="20"))
    "layerscan measure 'my section.tif' --line 1,2,3.5,40 --width 20"
    """
    return _join("measure", path, *_options(settings), *_out(out))


def predict_call(source: str, settings: PredictSettings, *, out: str | None = None) -> str:
    """``layerscan predict`` for a measurement's folder."""
    return _join("predict", source, *_options(settings), *_out(out))


def compare_call(prediction: str, observed: str | None, settings: CompareSettings, *, out: str | None = None) -> str:
    """``layerscan compare``; ``observed`` is None where an observed colour stands in the settings."""
    return _join("compare", prediction, *([] if observed is None else [observed]), *_options(settings), *_out(out))


def _join(command: str, *words: str) -> str:
    return shlex.join(["layerscan", command, *words])


def _out(folder: str | None) -> list[str]:
    return [] if folder is None else ["--out", folder]


def _options(settings: Settings) -> list[str]:
    """Every setting that differs from its default, as the words of its option."""
    words: list[str] = []
    for name, field in type(settings).model_fields.items():
        value = getattr(settings, name)
        if value == field.default:
            continue
        if name == "edits":
            words += [word for edit in value for word in ("--edit", edit)]
        else:
            words += [f"--{name.replace('_', '-')}", _word(value)]
    return words


def _word(value: object) -> str:
    if isinstance(value, tuple):
        return ",".join(_word(item) for item in value)
    if isinstance(value, float):
        return str(int(value)) if value.is_integer() and abs(value) < 1e15 else repr(value)
    return str(value)
