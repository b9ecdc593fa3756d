"""Where a run may write, and that a run that fails, is stopped or killed harms nothing."""

from __future__ import annotations

import os
import re
import signal
from pathlib import Path

import pytest

from glidefit.running import folder as run_folder


def refused(desk, *arguments):
    before = desk.files()
    said = desk.glidefit(*arguments)
    assert (said.code, said.out) == (3, "")
    assert desk.files() == before
    return said.err


def test_folder_with_something_else_is_left_alone(desk, sheet):
    desk.write("mine/notes.txt", "of somebody")
    assert refused(desk, "run", sheet, "--out", "mine") == (
        "Error: mine: the folder is not empty and holds no earlier output of this command of "
        "glidefit; nothing was changed. Choose another --out.\n"
    )


def test_report_with_somebodys_file_in_it_is_left_alone(desk, sheet, report):
    desk.write(f"{report}/tables/plot.py", "of somebody")
    desk.write(f"{report}/notes.txt", "of somebody")
    assert refused(desk, "run", sheet) == (
        "Error: reports/assay: the report there also holds 'notes.txt' and 1 more, which no run "
        "wrote; nothing was changed. Choose another --out.\n"
    )


def test_report_that_a_file_browser_has_shown_is_replaced(desk, sheet, report):
    desk.write(f"{report}/tables/.DS_Store", "")
    desk.write(f"{report}/Thumbs.db", "")
    assert desk.glidefit("fit", sheet).code == 0
    assert "Thumbs.db" not in desk.files(report)


def test_results_of_another_program_are_left_alone(desk, sheet):
    desk.write("mine/results.json", '{"format": "other/1"}')
    assert "holds no earlier output" in refused(desk, "run", sheet, "--out", "mine")


def test_empty_folder_is_used(desk, sheet):
    (desk.folder / "empty").mkdir()
    assert desk.glidefit("fit", sheet, "--out", "empty").code == 0
    assert "results.json" in desk.files("empty")


def test_out_is_a_file(desk, sheet):
    desk.write("out.txt", "")
    assert refused(desk, "run", sheet, "--out", "out.txt") == (
        "Error: out.txt: this is a file; expected a folder. Choose another --out.\n"
    )


def test_out_below_a_file(desk, sheet):
    desk.write("out.txt", "")
    assert refused(desk, "run", sheet, "--out", "out.txt/run") == (
        f"Error: out.txt/run: {desk.folder}/out.txt is a file, so no folder can be made in it; "
        "nothing was changed. Choose another --out.\n"
    )


def test_out_without_permission(desk, sheet, monkeypatch):
    monkeypatch.setattr(os, "access", lambda path, mode: not mode & os.W_OK)
    assert refused(desk, "run", sheet, "--out", "run") == (
        f"Error: run: {desk.folder} cannot be written to; nothing was changed. Choose another "
        "--out, or have the permissions changed.\n"
    )


def test_out_is_the_current_folder(desk, sheet, monkeypatch):
    (desk.folder / "here").mkdir()
    monkeypatch.chdir(desk.folder / "here")
    assert refused(desk, "run", f"../{sheet}", "--out", ".") == (
        "Error: .: this is the folder you are in, or one above it, and it would be replaced; "
        "nothing was changed. Choose another --out, or go to another folder first.\n"
    )


def test_output_is_refused_before_the_recordings_are_read(desk, monkeypatch):
    monkeypatch.setattr(run_folder, "is_report", lambda _: False)
    desk.write("mine/notes.txt", "of somebody")
    assert "mine: " in refused(desk, "run", "nosuch.csv", "--out", "mine")


def test_link_to_a_report_stays_a_link(desk, sheet, report):
    (desk.folder / "link").symlink_to(report)
    assert desk.glidefit("fit", sheet, "--out", "link").code == 0
    assert (desk.folder / "link").is_symlink()
    assert "index.html" not in desk.files(report)
    assert "results.json" in desk.files(report)


def test_nothing_left_to_fit_names_the_rule_and_leaves_the_report(desk, report):
    desk.table("stuck.csv", speed=0)
    desk.table("stuck2.csv", speed=0, seed=2, n_tracks=3)
    desk.sheet("stuck.csv,wild type,d1,c1,0.5,0.1", "stuck2.csv,mutant,d1,c2,0.5,0.1")
    before = desk.files()
    said = desk.glidefit("run", "assay.csv")
    assert (said.code, said.out) == (4, "")
    assert desk.files() == before
    lines = said.err.splitlines()
    assert lines[0].startswith("Error: wild type: nothing left to fit; ")
    assert lines[1].startswith("mutant: nothing left to fit; ")
    for line, n in zip(lines, (6, 3), strict=True):
        assert f"{n} stuck" in line
        assert re.search(
            rf"The nearest of the {n} stuck tracks, \d, strays [\d.]+ × noise from its mean "
            r"and glides with a probability of 0\.[\d]+; it must reach 0\.5\. Look at the tracks; "
            r"if they do glide, film longer\.$",
            line,
        )


def test_bad_input_leaves_the_report(desk, report):
    desk.table("a.csv", change={6: "1,4,nan,3"})
    before = desk.files()
    assert desk.glidefit("run", "assay.csv").code == 3
    assert desk.files() == before


@pytest.mark.parametrize(
    ("raised", "code", "told"),
    [
        (
            OSError(28, "No space left on device"),
            3,
            "Error: reports/assay: cannot be written (No space left on device). The previous "
            "report, if any, is unchanged. Choose another --out.\n",
        ),
        (KeyboardInterrupt(), 130, "\nStopped; nothing was changed.\n"),
        (RuntimeError("ours"), 1, "Error: glidefit met a fault of its own (RuntimeError: ours). "),
    ],
    ids=["disk full", "Ctrl-C", "fault"],
)
@pytest.mark.parametrize("moment", ["while writing", "while moving"])
def test_failure_at_the_end_leaves_the_report(
    desk, sheet, report, monkeypatch, raised, code, told, moment
):
    before = desk.files()
    if moment == "while writing":
        write_files = run_folder.write_files

        def written(folder, files):
            write_files(folder, dict(list(files.items())[:3]))
            raise raised

        monkeypatch.setattr(run_folder, "write_files", written)
    else:
        rename = Path.rename

        def renamed(path, target):
            if target == desk.folder / report and not path.name.endswith("-old"):
                raise raised
            return rename(path, target)

        monkeypatch.setattr(Path, "rename", renamed)
    said = desk.glidefit("fit", sheet)
    assert (said.code, said.out) == (code, "")
    assert said.err.startswith(told)
    assert desk.files() == before


KILLED = """
import os, signal, sys
from glidefit.running import folder
write_files = folder.write_files

def killed(to, files):
    write_files(to, dict(list(files.items())[:3]))
    os.kill(os.getpid(), signal.{signal})

folder.write_files = killed
sys.argv = ["glidefit", "fit", "assay.csv"]
from glidefit.commands.main import main
main()
"""


@pytest.mark.skipif(os.name != "posix", reason="signals")
def test_killed_run_leaves_the_report_and_the_next_run_works(desk, sheet, report, process):
    before = desk.files(report)
    said = process(KILLED.format(signal="SIGKILL"))
    assert said == type(said)(-signal.SIGKILL, "", "")
    assert desk.files(report) == before
    assert desk.glidefit("fit", sheet).code == 0
    assert desk.files(report).keys() < before.keys()
