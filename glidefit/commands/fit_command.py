"""glidefit fit."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from glidefit.commands import options


@click.command("fit")
@click.argument("sheets", nargs=-1, required=True, type=options.SHEET, metavar="SHEET...")
@click.option(
    "--out",
    type=click.Path(path_type=Path, readable=False),
    metavar="DIR",
    help="Folder for results and tables.  (default: reports/<sheet name>)",
)
@options.workers_option
@options.seed_option
@options.with_settings()
def command(
    sheets: tuple[Path, ...],
    out: Path | None,
    workers: int | None,
    seed: int,
    settings_file: Path | None,
    **given: Any,
) -> None:
    """Fit the track tables of an assay sheet; results and tables, no pages."""
    from glidefit.pipeline.run import Job, fit

    done = fit(
        Job(
            sheets=sheets,
            out=out or options.default_out(sheets),
            settings=options.sourced(settings_file, given),
            seed=seed,
            workers=options.count_workers(workers),
            command=options.command_line(),
        )
    )
    click.echo(options.last_line(done, "results.json"))
