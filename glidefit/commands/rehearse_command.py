"""glidefit rehearse."""

from __future__ import annotations

from pathlib import Path

import click

from glidefit.commands import options
from glidefit.commands.wording import counted, printable


@click.command("rehearse")
@click.argument("run", type=options.SHEET, metavar="RUN")
@click.option(
    "--experiments",
    type=click.IntRange(min=2),
    default=200,
    show_default=True,
    metavar="N",
    help="Experiments to simulate of each condition.",
)
@click.option(
    "--condition",
    "conditions",
    multiple=True,
    metavar="NAME",
    help="Condition to rehearse; may be given several times.  (default: all that have a speed)",
)
@click.option(
    "--workers",
    type=click.IntRange(min=1),
    default=None,
    metavar="N",
    help="Experiments worked on at once.  (default: one a core)",
)
@options.seed_option
@click.option(
    "--out",
    type=click.Path(path_type=Path, readable=False),
    metavar="DIR",
    help="Folder for rehearsal.json and rehearsal.html.  (default: beside RUN, "
    "<its name>-rehearsal)",
)
def command(
    run: Path,
    experiments: int,
    conditions: tuple[str, ...],
    workers: int | None,
    seed: int,
    out: Path | None,
) -> None:
    """Simulate the design of a run many times and see whether its intervals hold.

    RUN is the folder that `glidefit run` or `glidefit fit` wrote. Neither videos nor track tables
    are needed.
    """
    from glidefit.pipeline.finished import sibling
    from glidefit.pipeline.rehearse import rehearse

    folder = out or sibling(run, "rehearsal")
    done = rehearse(
        run,
        out=folder,
        experiments=experiments,
        conditions=conditions,
        workers=options.count_workers(workers),
        seed=seed,
    )
    for one in done.conditions:
        click.echo(printable(f"{one.design.condition}:"))
        for sentence in one.said:
            click.echo(f"- {sentence}")
    rehearsed = counted(len(done.conditions), "condition")
    click.echo(f"{folder / 'rehearsal.html'}: {rehearsed} rehearsed.")
