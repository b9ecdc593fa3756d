"""glidefit check."""

from __future__ import annotations

import math
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from glidefit.commands import options
from glidefit.commands.wording import counted, printable, told
from glidefit.errors import InputErrors

if TYPE_CHECKING:
    from glidefit.pipeline.check import Look


@click.command("check")
@click.argument("sheet", type=options.SHEET, metavar="SHEET")
@options.workers_option
@options.with_settings("columns", "detect", "link", "clean")
def command(sheet: Path, workers: int | None, settings_file: Path | None, **given: Any) -> None:
    """Check an assay sheet and look at each recording, without a full run.

    Shows units, frames, noise, first detections and a quick speed, and lists all that is wrong at
    once. The exit code is 3 if anything is.
    """
    from glidefit.pipeline.check import check

    done = check(
        sheet,
        settings=options.sourced(settings_file, given),
        workers=options.count_workers(workers),
    )
    for look in done.looks:
        click.echo(printable(_paragraph(look)))
    for note in done.notes:
        click.echo(printable(f"Note: {note}."))
    recordings = counted(len(done.assay.recordings), "recording")
    if done.errors:
        wrong = len(done.assay.recordings) - len(done.looks)
        click.echo(told(InputErrors(done.errors)), err=True)
        click.echo(f"{wrong} of {recordings} cannot be used as {_BE[wrong > 1]}.", err=True)
        sys.exit(3)
    conditions = counted(len(done.assay.conditions), "condition")
    click.echo(f"{recordings} of {conditions} can be run.")


_BE = "it is", "they are"


def _paragraph(look: Look) -> str:
    lines = [
        f"{look.recording}  ({look.condition}, {look.kind})",
        f"  {look.n_frames} frames every {look.frame_s:.4g} s ({look.frame_source})"
        + _known(", pixel {:.4g} µm", look.pixel_um)
        + (_known(", exposure {:.4g} s", look.exposure_s) or ", exposure unknown"),
        f"  {look.seen}"
        + (f", background {look.brightness}" if look.brightness else "")
        + _known(", localization error {:.3g} µm", look.localization_error_um),
        "  quick speed "
        + (_known("{:.3g} µm/s", look.quick_speed_um_s) or "unknown: no track advances"),
    ]
    return "\n".join([*lines, *(f"  note: {note}" for note in look.notes)])


def _known(text: str, value: float) -> str:
    return "" if math.isnan(value) else text.format(value)
