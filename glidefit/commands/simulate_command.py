"""glidefit simulate."""

from __future__ import annotations

from pathlib import Path

import click

from glidefit.commands.wording import counted


@click.command("simulate")
@click.argument("recipe", type=click.Path(path_type=Path, readable=False), metavar="RECIPE")
@click.option(
    "--out",
    type=click.Path(path_type=Path, readable=False),
    required=True,
    metavar="DIR",
    help="Folder for the sheet, the recordings and the truth.",
)
@click.option(
    "--seed",
    type=click.IntRange(min=0),
    default=None,
    metavar="N",
    help="Start of all randomness, in place of the recipe's own.",
)
def command(recipe: Path, out: Path, seed: int | None) -> None:
    """Make an assay with known truth from a recipe.

    RECIPE is a TOML file such as that of the example (example_tracks/recipe.toml).
    """
    from glidefit.pipeline.simulate import simulate

    n = simulate(recipe, out, seed=seed)
    recordings = counted(n, "recording")
    click.echo(f"{out / 'assay.csv'}: {recordings}; the truth is in {out / 'truth.csv'}.")
