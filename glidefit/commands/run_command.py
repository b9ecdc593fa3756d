"""glidefit run."""

from __future__ import annotations

from typing import Any

import click

from glidefit.commands import options


@click.command("run")
@options.analysis
def command(**given: Any) -> None:
    """Analyse assay sheets and write pages, tables and results."""
    from glidefit.pipeline.run import run

    click.echo(options.last_line(run(options.job(**given)), "index.html"))
