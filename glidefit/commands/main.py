"""glidefit on the command line; every command is loaded only when it is used."""

from __future__ import annotations

import importlib
import io
import sys

import click

import glidefit

# Name: (first line of its help, module). The help of all must not load the modules.
COMMANDS = {
    "sheet": "Draft an assay sheet from a folder of recordings.",
    "check": "Check an assay sheet and look at each recording, without a full run.",
    "run": "Analyse assay sheets and write pages, tables and results.",
    "track": "Turn the videos of an assay sheet into track tables.",
    "fit": "Fit the track tables of an assay sheet; results and tables, no pages.",
    "report": "Write the pages of a run anew from its results.",
    "rehearse": "Simulate the design of a run many times and see whether its intervals hold.",
    "plan": "Say how many days, chambers and filaments the next experiment needs.",
    "simulate": "Make an assay with known truth from a recipe.",
}


class _Commands(click.Group):
    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        if cmd_name not in COMMANDS:
            return None
        module = importlib.import_module(f"glidefit.commands.{cmd_name}_command")
        command: click.Command = module.command
        return command

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        with formatter.section("Commands"):
            formatter.write_dl(list(COMMANDS.items()))

    def resolve_command(
        self, ctx: click.Context, args: list[str]
    ) -> tuple[str | None, click.Command | None, list[str]]:
        if args and not args[0].startswith("-") and args[0] not in COMMANDS:
            import difflib

            near = difflib.get_close_matches(args[0], COMMANDS, n=1)
            hint = f" Did you mean '{near[0]}'?" if near else " `glidefit --help` lists them."
            ctx.fail(f"'{args[0]}' is no command.{hint}")
        return super().resolve_command(ctx, args)


@click.command(
    cls=_Commands,
    context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100},
)
@click.version_option(glidefit.__version__, prog_name="glidefit")
def cli() -> None:
    """Speed, rotational diffusion and persistence length from gliding motility assays.

    Start with `glidefit sheet FOLDER`, fill in the sheet, then `glidefit run SHEET`.
    """


def main() -> None:
    """Entry point: errors become one clear text and an exit code, never a traceback."""
    from glidefit.commands.wording import told
    from glidefit.errors import GlidefitError

    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, io.TextIOWrapper):
            stream.reconfigure(errors="replace")  # a terminal that has no µ shows ?
    try:
        cli(prog_name="glidefit", standalone_mode=False)
    except click.exceptions.Abort:
        click.echo("Stopped; nothing was changed.", err=True)
        sys.exit(130)
    except click.ClickException as error:
        error.show()
        sys.exit(error.exit_code)
    except click.exceptions.Exit as stop:
        sys.exit(stop.exit_code)
    except GlidefitError as error:
        click.echo(told(error), err=True)
        sys.exit(error.exit_code)
    except Exception as error:  # noqa: BLE001  (the last resort: a fault of ours is told plainly)
        click.echo(_own_fault(error), err=True)
        sys.exit(1)


def _own_fault(error: Exception) -> str:
    import tempfile
    import traceback

    from glidefit.commands.wording import printable

    details = "".join(traceback.format_exception(error))
    said = printable(" ".join(f"{type(error).__name__}: {error}".split()))
    try:
        with tempfile.NamedTemporaryFile(
            "w", prefix="glidefit-fault-", suffix=".txt", delete=False, encoding="utf-8"
        ) as file:
            file.write(details.encode(errors="replace").decode())
    except OSError as no_room:
        report = f"Please report it; the details could not be written ({no_room.strerror})."
    else:
        report = f"Please report it with {file.name}, which says where it happened."
    return (
        f"Error: glidefit met a fault of its own ({said:.300}). Earlier output is unchanged. "
        f"{report}"
    )
