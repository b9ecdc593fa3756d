"""README.md says what there is, and .ci/run runs what README.md says."""

from __future__ import annotations

import re
from pathlib import Path

import click
import pytest

from glidefit.commands.main import COMMANDS, cli
from glidefit.settings import declarations

ROOT = Path(__file__).parents[1]
README = (ROOT / "README.md").read_text(encoding="utf-8")


def block(mark):
    found = re.search(rf"<!-- {mark} -->\n```sh\n(.*?)```", README, re.DOTALL)
    assert found, f"README.md has no block under {mark}"
    return found[1]


@pytest.mark.parametrize("mark", ["main-command", "test-command"])
def test_ci_runs_the_block_of_the_readme(mark):
    assert f"$(readme {mark})" in (ROOT / ".ci/run").read_text(encoding="utf-8")
    assert block(mark).startswith("python3 -m venv .venv\n")


def test_main_command_analyses_the_example():
    assert ".venv/bin/glidefit run example_tracks/assay.csv" in block("main-command")


@pytest.mark.parametrize("declaration", list(declarations()), ids=lambda d: d.key)
def test_every_setting_has_its_row(declaration):
    d = declaration
    default = "from the data" if d.default is None else f"{d.default}"
    assert f"| `{d.key}` | `{d.option}` | {d.unit} | {default} | {d.help} |\n" in README


@pytest.mark.parametrize("name", COMMANDS)
def test_every_command_and_its_own_options_stand_in_the_readme(name):
    command = cli.get_command(click.Context(cli), name)
    assert f"glidefit {name} " in README
    shared = {d.option for d in declarations()}
    for parameter in command.params:
        if isinstance(parameter, click.Option) and parameter.opts[0] not in shared:
            assert parameter.opts[0] in README


@pytest.mark.parametrize("name", COMMANDS)
def test_first_line_of_help_is_that_of_the_list(name):
    command = cli.get_command(click.Context(cli), name)
    assert command.help.split("\n\n")[0] == COMMANDS[name]
