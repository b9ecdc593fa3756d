"""glidefit fit."""

from __future__ import annotations

from typing import Any

import click

from glidefit.commands import options


@click.command("fit")
@options.analysis
def command(**given: Any) -> None:
    """Fit the track tables of an assay sheet; results and tables, no pages."""
    from glidefit.pipeline.run import fit

    click.echo(options.last_line(fit(options.job(**given)), "results.json"))
