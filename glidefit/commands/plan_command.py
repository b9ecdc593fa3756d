"""glidefit plan."""

from __future__ import annotations

import math
from pathlib import Path

import click

from glidefit.commands import options
from glidefit.commands.wording import printable

QUANTITIES = {
    "speed": "speed_um_s",
    "rotational-diffusion": "rotational_diffusion_rad2_s",
    "motile-fraction": "motile_fraction",
}


@click.command("plan")
@click.argument("run", type=options.SHEET, metavar="RUN")
@click.option(
    "--condition",
    metavar="NAME",
    help="Condition to plan with.  (default: the control, or the first filmed on two days)",
)
@click.option(
    "--quantity",
    type=click.Choice(list(QUANTITIES)),
    default="speed",
    show_default=True,
    help="Quantity that the next experiment is for.",
)
@click.option(
    "--half-width",
    type=click.FloatRange(min=0, min_open=True, max=1000),
    metavar="PERCENT",
    help="Half width wanted of the interval, in % of the value.  (default: 5)",
)
@click.option(
    "--difference",
    type=click.FloatRange(min=0, min_open=True, max=1000),
    metavar="PERCENT",
    help="Difference between two conditions to be seen, in % of the value.",
)
@click.option(
    "--power",
    type=click.FloatRange(min=0, max=1, min_open=True, max_open=True),
    metavar="NUMBER",
    help="Chance to see that difference.  (default: 0.8)",
)
@options.seed_option
@click.option(
    "--out",
    type=click.Path(path_type=Path, readable=False),
    metavar="DIR",
    help="Folder for plan.json and plan.html.  (default: beside RUN, <its name>-plan)",
)
def command(
    run: Path,
    condition: str | None,
    quantity: str,
    half_width: float | None,
    difference: float | None,
    power: float | None,
    seed: int,
    out: Path | None,
) -> None:
    """Say how many days, chambers and filaments the next experiment needs.

    RUN is the folder that `glidefit run` or `glidefit fit` wrote. Tell either the half width that
    the interval shall have, or the difference that shall be seen.
    """
    from glidefit.designs import Goal
    from glidefit.pipeline.finished import sibling
    from glidefit.pipeline.plan import plan

    if half_width is not None and difference is not None:
        raise click.UsageError("Give either --half-width or --difference.")
    if power is not None and difference is None:
        raise click.UsageError("--power needs --difference.")
    wanted = 5.0 if half_width is None else half_width
    if difference is None:
        goal = Goal(half_width=wanted / 100, difference=math.nan, power=math.nan)
    else:
        goal = Goal(half_width=math.nan, difference=difference / 100, power=power or 0.8)
    folder = out or sibling(run, "plan")
    made = plan(
        run,
        out=folder,
        condition=condition,
        quantity=QUANTITIES[quantity],
        goal=goal,
        seed=seed,
    )
    click.echo(printable(f"{made.condition}, {quantity.replace('-', ' ')}:"))
    for sentence in made.advice:
        click.echo(printable(sentence))
    click.echo(f"{folder / 'plan.html'}: all designs, and what this assumes.")
