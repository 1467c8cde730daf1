"""``study`` and ``report``."""

from __future__ import annotations

from typing import TYPE_CHECKING

import click

from layerscan import documents
from layerscan._version import __version__
from layerscan.commands.options import clear_progress, print_document, progress
from layerscan.report.cautions import RELEASE_CAUTION

if TYPE_CHECKING:
    from collections.abc import Iterator

    from layerscan.study.session import StudyCheck, StudyOutcome

JSON_OPTION = click.option("--json", "as_json", is_flag=True, help="print the JSON document on standard output")


@click.command()
@click.argument("plan", metavar="STUDY.toml", type=click.Path())
@click.option("--check", is_flag=True, help="say what would run and what is missing, and run nothing")
@click.option("--cluster", metavar="ADDRESS", help="an existing dask.distributed scheduler instead of this machine")
@click.option("--workers", type=click.IntRange(min=1), help="processes on this machine")
@click.option("--out", type=click.Path(file_okay=False), help="folder for ledger, tables and page  [the plan's own]")
@JSON_OPTION
def study(plan: str, check: bool, cluster: str | None, workers: int | None, out: str | None, as_json: bool) -> int:
    """Run a whole sample set: resumable, parallel, then statistics and a report."""
    from layerscan.study.session import StudyOutcome, check_study, run_study

    show = progress()
    if check:
        answer = check_study(plan, out=out)
        document = documents.study_document(answer, version=__version__)
        print_document(document, as_json=as_json, lines=_check_lines(answer))
        return answer.exit_code
    outcome = run_study(plan, out=out, cluster=cluster, workers=workers, progress=show)
    clear_progress()
    assert isinstance(outcome, StudyOutcome)
    return _show(outcome, as_json)


@click.command()
@click.argument("folder", type=click.Path())
@click.option(
    "--figures", type=click.Choice(["svg", "pdf", "tif"]), multiple=True, help="figures as files too (TIFF at 600 dpi)"
)
@JSON_OPTION
def report(folder: str, figures: tuple[str, ...], as_json: bool) -> int:
    """Write the report again from a finished or unfinished study."""
    from layerscan.study.session import report_study

    progress()
    return _show(report_study(folder, figures=figures), as_json)


def _show(outcome: StudyOutcome, as_json: bool) -> int:
    document = documents.study_document(outcome, version=__version__)
    print_document(document, as_json=as_json, lines=_outcome_lines(outcome))
    return outcome.exit_code


def _check_lines(answer: StudyCheck) -> Iterator[str]:
    yield f"{answer.plan}: {answer.images} images, {answer.spectra} spectra; nothing was run"
    for group, specimens, images in answer.groups:
        yield f"  group {group}: {specimens} specimens, {images} images"
    yield f"  to do    measure {answer.to_measure}, predict {answer.to_predict}, compare {answer.to_compare}"
    yield f"  done     {answer.done}"
    for problem in answer.problems:
        yield f"  {problem.severity:<8} {problem.place}: {problem.text}"
    if answer.not_stated:
        yield f"  not stated: {', '.join(answer.not_stated)}"


def _outcome_lines(outcome: StudyOutcome) -> Iterator[str]:
    yield outcome.answer
    yield (
        f"  {outcome.images} images: {outcome.done} done, {outcome.failed} failed, {outcome.excluded} excluded, "
        f"{outcome.missing} missing, {outcome.without_layers} without layers"
    )
    yield f"  worked on {outcome.worked_on} now, {outcome.kept} were done before"
    for path, reason in outcome.failures:
        yield f"  failed   {path}: {reason}"
    for group, limit, decision in outcome.decisions:
        yield f"  {decision:<9} {group}: {limit}"
    if outcome.decisions:
        yield f"  {RELEASE_CAUTION}"
    yield f"  report   {outcome.report}"
