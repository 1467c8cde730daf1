"""Command-line options made from the fields of the settings records, and what every command prints the same way."""

from __future__ import annotations

import sys
import types
import typing
from collections.abc import Callable, Iterable, Mapping
from typing import Any, Literal, TypeVar

import click
from pydantic import BaseModel

from layerscan.document_files import dump_json
from layerscan.records import FLAGS

F = TypeVar("F", bound=Callable[..., Any])

METAVARS = {
    "pixel_size": "QUANTITY",
    "region": "ROW0,COL0,ROW1,COL1",
    "line": "R0,C0,R1,C1",
    "width": "PX|'NM nm'",
    "obliquity": "QUANTITY",
    "stage_tilt": "QUANTITY",
    "compression": "QUANTITY",
    "shrinkage": "QUANTITY",
    "dark": "MATERIAL",
    "bright": "MATERIAL",
    "middle": "MATERIAL",
    "incident": "MATERIAL",
    "substrate": "MATERIAL",
    "wavelengths": "START:STOP:STEP",
    "vary": "NAME=START:STOP:STEP",
    "lab": "L,a,b",
    "edits": "EDIT",
}
NAMES = {"edits": "--edit"}


class NumberList(click.ParamType):  # type: ignore[type-arg]
    """Numbers with commas between them, such as ``0,0,400,600``."""

    def __init__(self, count: int, kind: type) -> None:
        self.count, self.kind = count, kind
        self.name = "numbers"

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> Any:
        """Read the numbers, or say what came and what is needed."""
        if isinstance(value, tuple):
            return value
        try:
            numbers = tuple(self.kind(part) for part in str(value).split(","))
        except ValueError:
            numbers = ()
        if len(numbers) != self.count:
            whole = "whole " if self.kind is int else ""
            self.fail(f"'{value}' is not {self.count} {whole}numbers with commas between them.", param, ctx)
        return numbers


def settings_options(model: type[BaseModel], *, leave_out: Iterable[str] = ()) -> Callable[[F], F]:
    """Decorate a command with one option for each field of a settings record."""

    def decorate(function: F) -> F:
        for name, info in reversed(model.model_fields.items()):
            if name not in leave_out:
                function = click.option(*_names(name), **_option(name, info.annotation, info))(function)
        return function

    return decorate


def _names(name: str) -> tuple[str, ...]:
    return (NAMES.get(name, "--" + name.replace("_", "-")), name)


def _option(name: str, annotation: Any, info: Any) -> dict[str, Any]:
    kind = _without_none(annotation)
    option: dict[str, Any] = {"default": None, "help": info.description, "metavar": METAVARS.get(name)}
    if info.default is not None and not isinstance(info.default, tuple):
        option["help"] = f"{info.description}  [{info.default}]"
    origin = typing.get_origin(kind)
    if origin is Literal:
        choices = typing.get_args(kind)
        option["type"] = click.Choice([str(c) for c in choices])
    elif name == "edits":
        option["multiple"] = True
        option["default"] = ()
    elif origin is tuple:
        arguments = typing.get_args(kind)
        option["type"] = NumberList(len(arguments), arguments[0])
    elif kind in (int, float):
        option["type"] = kind
    else:
        option["type"] = str
    return option


def _without_none(annotation: Any) -> Any:
    origin = typing.get_origin(annotation)
    if origin in (typing.Union, types.UnionType):
        rest = [a for a in typing.get_args(annotation) if a is not type(None)]
        return _without_none(rest[0])
    if origin is typing.Annotated:
        return _without_none(typing.get_args(annotation)[0])
    return annotation


def chosen(model: type[BaseModel], words: Mapping[str, Any]) -> dict[str, Any]:
    """The settings that were given on the command line, ready for the settings record."""
    result: dict[str, Any] = {}
    for name, info in model.model_fields.items():
        value = words.get(name)
        if value is None or value == ():
            continue
        kind = _without_none(info.annotation)
        if typing.get_origin(kind) is Literal:
            value = next(c for c in typing.get_args(kind) if str(c) == value)
        result[name] = value
    return result


def output_options(function: F) -> F:
    """Decorate a command with ``--out`` and ``--json``."""
    function = click.option("--json", "as_json", is_flag=True, help="print the JSON document on standard output")(
        function
    )
    return click.option("--out", type=click.Path(file_okay=False), help="folder for the documents and the figure")(
        function
    )


def print_document(document: Mapping[str, Any], *, as_json: bool, lines: Iterable[str]) -> None:
    """Print the JSON document, or the lines for a reader."""
    click.echo(dump_json(document) if as_json else "\n".join(lines), nl=not as_json)


def print_notes(flags: Iterable[str], *notes: str) -> None:
    """Doubts and notes, in words, on standard error."""
    for flag in flags:
        click.echo(f"note: {FLAGS.get(flag, flag)} [{flag}]", err=True)
    for note in notes:
        click.echo(f"note: {note}", err=True)


def progress() -> Callable[[str, float | None], None]:
    """Progress on standard error where that is a terminal."""
    from layerscan.cli import quiet_warnings, show_progress

    quiet_warnings()
    return show_progress


def clear_progress() -> None:
    """Take the progress line away again."""
    if sys.stderr.isatty():
        sys.stderr.write("\r\x1b[K")
        sys.stderr.flush()


def with_u(value: float | None, u: float | None, unit: str = "nm", *, digits: int = 2) -> str:
    """A value with its standard uncertainty, rounded to two digits of the uncertainty."""
    import math

    if value is None:
        return "none"
    if not u or u < 1e-9 * abs(value):
        return f"{value:.4g} {unit} (u not known)"
    places = max(0, digits - 1 - math.floor(math.log10(u)))
    return f"{value:.{places}f} +- {u:.{places}f} {unit}"
