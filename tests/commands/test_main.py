"""The program itself: usage, help without heavy imports, faults of its own, Ctrl-C."""

from __future__ import annotations

import io
import json
import os
import re
import signal
import subprocess
import sys
from pathlib import Path

import pytest

import glidefit
from glidefit.commands.main import COMMANDS

HEAVY = ("pandas", "scipy", "lmfit", "trackpy", "matplotlib", "numba", "tifffile", "rich", "jinja2")


@pytest.mark.parametrize(
    ("typed", "hint"),
    [("rnu", "Did you mean 'run'?"), ("qqq", "`glidefit --help` lists them.")],
)
def test_unknown_command(desk, typed, hint):
    said = desk.glidefit(typed, "assay.csv")
    assert (said.code, said.out) == (2, "")
    assert said.err == (
        "Usage: glidefit [OPTIONS] COMMAND [ARGS]...\nTry 'glidefit --help' for help.\n\n"
        f"Error: '{typed}' is no command. {hint}\n"
    )


def test_unknown_option(desk):
    said = desk.glidefit("run", "assay.csv", "--sed", "2")
    assert (said.code, said.out) == (2, "")
    assert said.err == (
        "Usage: glidefit run [OPTIONS] SHEET...\nTry 'glidefit run --help' for help.\n\n"
        "Error: No such option '--sed'. Did you mean '--seed'?\n"
    )


def test_missing_sheet(desk):
    said = desk.glidefit("run")
    assert (said.code, said.out) == (2, "")
    assert said.err.endswith("\n\nError: Missing argument 'SHEET...'.\n")


def test_missing_out(desk):
    said = desk.glidefit("simulate", "recipe.toml")
    assert (said.code, said.out) == (2, "")
    assert said.err.endswith("\n\nError: Missing option '--out'.\n")


def test_no_command_shows_the_help(desk):
    said = desk.glidefit()
    assert (said.code, said.out) == (2, "")
    assert said.err == desk.glidefit("--help").out


def test_version(desk):
    assert desk.glidefit("--version").out == f"glidefit, version {glidefit.__version__}\n"


@pytest.mark.parametrize("name", COMMANDS)
def test_help_of_every_command(desk, name):
    said = desk.glidefit(name, "--help")
    assert (said.code, said.err) == (0, "")
    assert said.out.startswith(f"Usage: glidefit {name} ")
    assert desk.glidefit(name, "-h").out == said.out


def test_help_loads_no_heavy_library(process):
    said = process(
        "import sys\n"
        "from glidefit.commands.main import main\n"
        f"for arguments in [], *([name] for name in {list(COMMANDS)!r}):\n"
        "    sys.argv = ['glidefit', *arguments, '--help']\n"
        "    main()\n"
        f"    loaded = [m for m in {HEAVY!r} if m in sys.modules]\n"
        "    print(arguments, loaded, file=sys.stderr)\n"
    )
    assert said.out.count("Usage: glidefit ") == 1 + len(COMMANDS)
    assert said.err.splitlines() == ["[] []", *(f"[{name!r}] []" for name in COMMANDS)]


def test_import_of_the_package_loads_nothing(process):
    said = process("import sys, glidefit; print([m for m in sys.modules if m[:9] == 'glidefit.'])")
    assert said.out == "[]\n"


@pytest.fixture
def fault(desk, monkeypatch):
    """A fault inside `glidefit run`, with text that could command a terminal."""
    import glidefit.pipeline.run as pipeline

    def prepare_all(*_):
        raise KeyError("fault\x1b[2J\nof\n  ours")

    monkeypatch.setattr(pipeline, "prepare_all", prepare_all)
    monkeypatch.setenv("TMPDIR", str(desk.folder / "tmp"))
    monkeypatch.setattr("tempfile.tempdir", None)
    (desk.folder / "tmp").mkdir()


@pytest.mark.usefixtures("fault")
def test_fault_of_its_own_is_one_paragraph_and_a_file(desk):
    said = desk.glidefit("run", desk.two_conditions())
    assert (said.code, said.out) == (1, "")
    [details] = (desk.folder / "tmp").iterdir()
    assert said.err == (
        "Error: glidefit met a fault of its own (KeyError: 'fault\\x1b[2J\\nof\\n ours'). Earlier "
        f"output is unchanged. Please report it with {details}, which says where it happened.\n"
    )
    text = details.read_text(encoding="utf-8")
    assert text.startswith("Traceback (most recent call last):\n")
    assert "in prepare_all\n" in text


@pytest.mark.usefixtures("fault")
def test_fault_of_its_own_without_room_for_the_file(desk, monkeypatch):
    def no_room(*_, **__):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr("tempfile.NamedTemporaryFile", no_room)
    said = desk.glidefit("run", desk.two_conditions())
    assert (said.code, said.out) == (1, "")
    assert said.err.endswith(
        " Earlier output is unchanged. Please report it; the details could not be written (No "
        "space left on device).\n"
    )


def test_ctrl_c(desk, monkeypatch):
    def prepare_all(*_):
        raise KeyboardInterrupt

    monkeypatch.setattr("glidefit.pipeline.run.prepare_all", prepare_all)
    said = desk.glidefit("run", desk.two_conditions())
    assert (said.code, said.out) == (130, "")
    assert said.err == "\nStopped; nothing was changed.\n"
    assert not (desk.folder / "reports").exists()


# As in a terminal, Ctrl-C reaches the program and its workers, one of which is still starting.
# A shell lets what it starts in the background ignore Ctrl-C: answer it even if the tests run so.
WORKING = """
import signal, sys, time
import glidefit.pipeline.run as pipeline
from glidefit.commands.main import main
from glidefit.running.workers import run_all

def ready(name):
    print("ready", flush=True)

if __name__ == "__main__":
    signal.signal(signal.SIGINT, signal.default_int_handler)
    pipeline.run = lambda job: run_all(time.sleep, [0, 9e5, 9e5], workers=2, name=str, done=ready)
    sys.argv = ["glidefit", "run", "assay.csv"]
    main()
"""


@pytest.mark.skipif(os.name != "posix", reason="signals to a group of processes")
def test_ctrl_c_ends_the_workers_without_a_traceback(desk):
    program = subprocess.Popen(
        [sys.executable, "-c", WORKING],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        start_new_session=True,
    )
    assert program.stdout.readline() == "ready\n"
    os.killpg(program.pid, signal.SIGINT)
    # Returns only when every process that holds the pipes has ended.
    try:
        said = program.communicate(timeout=120)
    finally:
        if program.poll() is None:
            os.killpg(program.pid, signal.SIGKILL)
    assert said == ("", "\nStopped; nothing was changed.\n")
    assert program.returncode == 130


def test_exit_codes_of_the_program(process, desk):
    desk.two_conditions()
    desk.table("stuck.csv", speed=0)
    desk.sheet("stuck.csv,wild type,d1,c1,0.5,", name="stuck-sheet.csv")
    assert process("fit", "assay.csv", program=True).code == 0
    for code, arguments in (
        (2, ["fit"]),
        (3, ["fit", "nosuch.csv"]),
        (4, ["fit", "stuck-sheet.csv"]),
    ):
        said = process(*arguments, program=True)
        assert (said.code, said.out) == (code, "")
        assert "Traceback" not in said.err
        assert "Error: " in said.err


def test_terminal_without_micro_sign(process, desk):
    header = "recording,condition,day,chamber,frame_s,pixel_um"
    desk.sheet("a.csv,wild type,d1,c1,0.5,0", header=header)
    desk.table("a.csv")
    code = (
        "import sys, io\n"
        "sys.stderr = io.TextIOWrapper(sys.stderr.buffer, encoding='iso8859-2')\n"
        "sys.argv = ['glidefit', 'run', 'assay.csv']\n"
        "from glidefit.commands.main import main\n"
        "main()\n"
    )
    said = process(code)
    assert said.code == 3
    assert "expected the pixel size in ?m, above 0." in said.err


def test_command_as_typed_stands_in_the_provenance(desk):
    desk.glidefit("fit", desk.two_conditions(), "--out", "my folder", "--seed", "3")
    data = json.loads((desk.folder / "my folder/provenance.json").read_text(encoding="utf-8"))
    assert data["command"] == "glidefit fit assay.csv --out 'my folder' --seed 3"
    assert data["seed"] == 3


PACKAGE = Path(glidefit.__file__).parent


@pytest.mark.parametrize(
    "path",
    [p for p in sorted(PACKAGE.rglob("*.py")) if p.parent.name != "commands"],
    ids=lambda p: p.relative_to(PACKAGE).as_posix(),
)
def test_no_layer_below_the_commands_prints(path):
    text = path.read_text(encoding="utf-8")
    if path.name != "progress.py":
        assert not re.search(r"\bprint\(|\bsys\.std(out|err)\b|\becho\(", text)
    assert "click" not in re.findall(r"^\s*(?:import|from) (\w+)", text, re.MULTILINE)


def test_streams_that_are_no_text_files_are_left_alone(monkeypatch, desk):
    monkeypatch.setattr(sys, "stderr", io.StringIO())
    assert desk.glidefit("--version").code == 0
