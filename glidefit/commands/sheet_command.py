"""glidefit sheet."""

from __future__ import annotations

import shlex
from pathlib import Path

import click

from glidefit.commands.wording import counted


@click.command("sheet")
@click.argument("folder", type=click.Path(path_type=Path, readable=False), metavar="FOLDER")
@click.option(
    "--names",
    metavar="PATTERN",
    help="How names are to be read, such as {day}/{condition}_ch{chamber}_{field}; * is any text.",
)
@click.option(
    "--out",
    type=click.Path(path_type=Path, readable=False),
    metavar="FILE",
    help="Where to write the sheet.  (default: assay.csv in FOLDER)",
)
def command(folder: Path, names: str | None, out: Path | None) -> None:
    """Draft an assay sheet from a folder of recordings.

    Calibration is filled in where the files tell it, days and conditions where the names do. An
    existing file is never overwritten.
    """
    from glidefit.pipeline.draft import draft, lacking

    path, rows = draft(folder, names=names, out=out)
    empty = sorted(
        {name for row in rows for name in ("condition", "day", "chamber") if not row[name]}
    )
    wanted = [", ".join(empty)] if empty else []
    if of_videos := lacking(rows):
        wanted.append(f"{', '.join(of_videos)} of the videos")
    rest = f" Fill in {'; '.join(wanted)}." if wanted else ""
    recordings = counted(len(rows), "recording")
    check = f"glidefit check {shlex.quote(str(path))}"
    click.echo(f"{path}: {recordings}.{rest} Then run `{check}`.")
