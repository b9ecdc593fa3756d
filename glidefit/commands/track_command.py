"""glidefit track."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from glidefit.commands import options
from glidefit.commands.wording import counted


@click.command("track")
@click.argument("sheets", nargs=-1, required=True, type=options.SHEET, metavar="SHEET...")
@click.option(
    "--out",
    type=click.Path(path_type=Path, readable=False),
    required=True,
    metavar="DIR",
    help="Folder for the track tables and their sheet.",
)
@options.workers_option
@options.with_settings("detect", "link")
def command(
    sheets: tuple[Path, ...],
    out: Path,
    workers: int | None,
    settings_file: Path | None,
    **given: Any,
) -> None:
    """Turn the videos of an assay sheet into track tables.

    DIR gets the tables and an assay.csv that lists them for `glidefit fit` or `glidefit run`.
    """
    from glidefit.pipeline.track import track_videos

    done = track_videos(
        sheets,
        out,
        settings=options.sourced(settings_file, given),
        workers=options.count_workers(workers),
    )
    for note in done.notes:
        click.echo(f"Note: {note}", err=True)
    tracks = counted(done.n_tracks, "track")
    videos = counted(done.n_videos, "video")
    click.echo(f"{done.sheet}: {tracks} from {videos}.")
