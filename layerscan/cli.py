"""Words in, one workflow call, lines out. Documents go to standard output, everything else to standard error."""

from __future__ import annotations

import os
import sys
from collections.abc import Callable
from importlib import import_module
from typing import Any

import click

from layerscan._version import __version__
from layerscan.errors import LayerscanError

NO_LAYERS = 4
COMMANDS = {
    "inspect": ("measuring", "what the file holds: shape, pixel size and where it comes from, doubts"),
    "measure": ("measuring", "layers, period, uncertainty of one image"),
    "predict": ("light", "spectrum and colour from layers and materials"),
    "compare": ("light", "does the imaged structure explain the observed spectrum or colour"),
    "study": ("many", "a whole sample set: resumable, parallel, then statistics and a report"),
    "report": ("many", "the report again from a finished or unfinished study"),
    "verify": ("keeping", "runs a saved result again from its settings and hashes: equal, or what changed"),
    "materials": ("light", "the catalogue: index, source, valid range"),
    "demo": ("keeping", "the whole chain on the sample images, no other input needed, from any folder"),
}
EPILOG = (
    "Not an accredited measurement; see 'Limits and cautions' in the README. "
    "Each command explains itself: layerscan COMMAND --help."
)


class LazyGroup(click.Group):
    """Commands are imported when they are run, so that ``--help`` answers at once."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        """Name the commands in the order of the work."""
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        """Import one command."""
        if cmd_name not in COMMANDS:
            return None
        command: click.Command = getattr(import_module(f"layerscan.commands.{COMMANDS[cmd_name][0]}"), cmd_name)
        return command

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        """List the commands without importing them."""
        with formatter.section("Commands"):
            formatter.write_dl([(name, text) for name, (_, text) in COMMANDS.items()])

    def resolve_command(
        self, ctx: click.Context, args: list[str]
    ) -> tuple[str | None, click.Command | None, list[str]]:
        """Say the nearest command where one is not known."""
        if args and args[0] not in COMMANDS and not args[0].startswith("-"):
            import difflib

            near = difflib.get_close_matches(args[0], COMMANDS, n=1, cutoff=0.0)
            ctx.fail(f"There is no command '{args[0]}'. The nearest is '{near[0]}'.")
        return super().resolve_command(ctx, args)


@click.group(cls=LazyGroup, context_settings={"help_option_names": ["-h", "--help"]}, epilog=EPILOG)
@click.version_option(__version__, prog_name="layerscan")
def program() -> None:
    """Layers measured in electron micrographs, and the colour that they predict."""


def main(arguments: list[str] | None = None) -> None:
    """Run the command line and leave with its exit code."""
    sys.exit(run(arguments))


def run(arguments: list[str] | None = None) -> int:
    """Run the command line; returns the exit code (0 done, 2 wrong usage, 3 input unusable, 4 no layers, ...)."""
    try:
        result = program.main(arguments, prog_name="layerscan", standalone_mode=False)
        return result if isinstance(result, int) else 0
    except click.exceptions.Exit as leave:
        return leave.exit_code
    except click.ClickException as error:
        error.show(file=sys.stderr)
        return 2
    except (click.Abort, KeyboardInterrupt):
        return _fail("Interrupted; nothing half-written was left behind.", 1)
    except LayerscanError as error:
        return _fail(f"layerscan: {error}", error.exit_code)
    except BrokenPipeError:
        sys.stderr.close()
        return 0
    except Exception as error:
        if os.environ.get("LAYERSCAN_TRACEBACK"):
            raise
        return _fail(
            f"layerscan: unexpected {type(error).__name__}: {error}\n"
            "This is a fault of the program, not of your input. Set LAYERSCAN_TRACEBACK=1 to see where it happened.",
            1,
        )


def _fail(text: str, code: int) -> int:
    click.echo(text, err=True)
    return code


def show_progress(what: str, fraction: float | None) -> None:
    """Progress as one line on standard error, rewritten in place on a terminal and left out elsewhere."""
    if sys.stderr.isatty():
        part = "" if fraction is None else f" {100 * fraction:3.0f} %"
        sys.stderr.write(f"\r\x1b[K{what}{part}" if fraction is None or fraction < 1 else "\r\x1b[K")
        sys.stderr.flush()


def quiet_warnings() -> None:
    """Libraries' warnings and log lines are no part of our output."""
    import logging
    import warnings

    warnings.simplefilter("ignore")
    logging.getLogger("tifffile").setLevel(logging.CRITICAL)


Command = Callable[..., Any]

if __name__ == "__main__":
    main()
