"""glidefit report."""

from __future__ import annotations

from pathlib import Path

import click

from glidefit.commands.wording import counted


@click.command("report")
@click.argument("run", type=click.Path(path_type=Path, readable=False), metavar="RUN")
def command(run: Path) -> None:
    """Write the pages of a run anew from its results.

    RUN is the folder that `glidefit run` or `glidefit fit` wrote. Neither videos nor track tables
    are needed.
    """
    from glidefit.pipeline.report import report

    result = report(run)
    conditions = counted(len(result.conditions), "condition")
    folder = run if run.is_dir() else run.parent
    click.echo(f"{folder / 'index.html'}: pages of {conditions}.")
