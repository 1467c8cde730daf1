"""``verify`` and ``demo``."""

from __future__ import annotations

import click

from layerscan import documents, workflow
from layerscan.commands.options import clear_progress, print_document, progress


@click.command()
@click.argument("document", metavar="DOCUMENT.json", type=click.Path())
@click.option("--json", "as_json", is_flag=True, help="print the JSON document on standard output")
def verify(document: str, as_json: bool) -> int:
    """Run a saved result again from its settings and hashes: equal, or what changed."""
    show = progress()
    answer = workflow.verify(document, progress=show)
    clear_progress()
    lines = ["equal" if answer.equal else f"{len(answer.changes)} fields changed"]
    lines += [f"  {field}: saved {saved!r}, now {now!r}" for field, saved, now in answer.changes]
    print_document(documents.verification_document(answer), as_json=as_json, lines=[*lines, *answer.notes])
    return 0 if answer.equal else 1


@click.command()
@click.argument("folder", type=click.Path(file_okay=False), default="layerscan-demo")
def demo(folder: str) -> None:
    """Run the whole chain on the invented sample images and leave documents, figures and a page in FOLDER."""
    show = progress()
    page = workflow.run_demo(folder, progress=show)
    clear_progress()
    click.echo(f"Open {page} in a browser. The sample images and spectra are invented.")
