"""``study`` and ``report``."""

from __future__ import annotations

import click


@click.command()
@click.argument("plan", metavar="STUDY.toml", type=click.Path())
@click.option("--check", is_flag=True, help="say what would run and what is missing, and run nothing")
@click.option("--cluster", metavar="ADDRESS", help="an existing dask.distributed scheduler instead of this machine")
@click.option("--workers", type=click.IntRange(min=1), help="processes on this machine")
@click.option("--json", "as_json", is_flag=True, help="print the JSON document on standard output")
def study(plan: str, check: bool, cluster: str | None, workers: int | None, as_json: bool) -> int:
    """Run a whole sample set: resumable, parallel, then statistics and a report."""
    raise NotImplementedError


@click.command()
@click.argument("folder", type=click.Path())
def report(folder: str) -> None:
    """Write the report again from a finished or unfinished study."""
    raise NotImplementedError
