"""Options that several commands share; those of the settings follow from their declarations."""

from __future__ import annotations

import shlex
import sys
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

import click

from glidefit.commands.wording import counted
from glidefit.settings import Declaration, SourcedSettings, declarations, resolve

if TYPE_CHECKING:
    from glidefit.pipeline.run import Done, Job

_Command = TypeVar("_Command", bound=Callable[..., Any])


class _Number(click.types.FloatParamType):
    name = "number"  # in "'abc' is not a valid number."


class _Count(click.types.IntParamType):
    name = "whole number"


_KINDS = {float: _Number(), int: _Count(), str: click.STRING}
# Whether it can be read is found out, and told, where it is read.
SHEET = click.Path(path_type=Path, readable=False)


def with_settings(*sections: str) -> Callable[[_Command], _Command]:
    """Add ``--settings FILE`` and an option for every setting of the sections (all if none)."""

    def decorate(command: _Command) -> _Command:
        wanted = [d for d in declarations() if not sections or d.section in sections]
        for d in reversed(wanted):
            command = _option(d)(command)
        return click.option(
            "--settings",
            "settings_file",
            type=click.Path(path_type=Path, readable=False),
            metavar="FILE",
            help="Settings as TOML; an option wins over the file.",
        )(command)

    return decorate


def _option(d: Declaration) -> Callable[[_Command], _Command]:
    kind: Any = click.Choice(d.choices) if d.choices else _KINDS[d.kind]
    unit = f" [{d.unit}]" if d.unit else ""
    default = "chosen from the data" if d.default is None else d.default
    metavar = None if d.choices else {float: "NUMBER", int: "COUNT", str: "NAME"}[d.kind]
    return click.option(
        d.option,
        d.parameter,
        type=kind,
        default=None,
        metavar=metavar,
        help=f"{d.help}{unit}  (default: {default})",
    )


def sourced(settings_file: Path | None, given: dict[str, Any]) -> SourcedSettings:
    """Settings from the file and from the options that were given."""
    by_parameter = {d.parameter: d.key for d in declarations()}
    options = {
        by_parameter[name]: value
        for name, value in given.items()
        if name in by_parameter and value is not None
    }
    if settings_file is None:
        return resolve(options=options)
    from glidefit.reading.settings_file import read_settings

    return resolve(file=read_settings(settings_file), file_name=settings_file.name, options=options)


def command_line() -> str:
    """The command as it was typed, without the path of the program."""
    return shlex.join(["glidefit", *sys.argv[1:]])


def default_out(sheets: tuple[Path, ...]) -> Path:
    """``reports/<sheet name>`` in the current folder."""
    name = sheets[0].stem + (f"-and-{len(sheets) - 1}-more" if len(sheets) > 1 else "")
    return Path("reports") / name


workers_option = click.option(
    "--workers",
    type=click.IntRange(min=1),
    default=None,
    metavar="N",
    help="Recordings worked on at once.  (default: one a core)",
)
seed_option = click.option(
    "--seed",
    type=click.IntRange(min=0),
    default=1,
    show_default=True,
    metavar="N",
    help="Start of all randomness; the same seed gives the same bytes.",
)


def count_workers(workers: int | None) -> int:
    """The number asked for, or one a core."""
    import os

    return workers or os.cpu_count() or 1


def analysis(command: _Command) -> _Command:
    """Sheets and options of the commands that analyse them; `job` reads what was given."""
    command = with_settings()(command)
    command = seed_option(workers_option(command))
    command = click.option(
        "--out",
        type=click.Path(path_type=Path, readable=False),
        metavar="DIR",
        help="Folder for what comes out.  (default: reports/<sheet name>)",
    )(command)
    return click.argument("sheets", nargs=-1, required=True, type=SHEET, metavar="SHEET...")(
        command
    )


def job(
    *,
    sheets: tuple[Path, ...],
    out: Path | None,
    workers: int | None,
    seed: int,
    settings_file: Path | None,
    **given: Any,
) -> Job:
    """What a command with the options of `analysis` was asked to do."""
    from glidefit.pipeline.run import Job

    return Job(
        sheets=sheets,
        out=out or default_out(sheets),
        settings=sourced(settings_file, given),
        seed=seed,
        workers=count_workers(workers),
        command=command_line(),
    )


def last_line(done: Done, page: str) -> str:
    """Where the result is, what was kept, what waits to be read."""
    wait = {0: "no problems", 1: "1 problem waits"}.get(
        done.problems, f"{done.problems} problems wait"
    )
    ending = "." if done.problems == 0 else " to be read."
    kept = counted(done.tracks_kept, "track")
    return f"{done.out / page}: {kept} kept, {done.tracks_set_aside} set aside; {wait}{ending}"
