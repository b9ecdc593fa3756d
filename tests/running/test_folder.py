"""The run folder: what may be replaced, and that it is replaced whole or not at all."""

from __future__ import annotations

import json

import pytest

from glidefit.errors import OutputError
from glidefit.running.folder import check_output, is_marked, is_report, replaced, write_files


def report(folder, **more):
    files = {"results.json": '{"format": "glidefit-results/1"}', "index.html": "old"} | more
    write_files(folder, files)
    return folder


def content(folder):
    return {
        p.relative_to(folder).as_posix(): p.read_text(encoding="utf-8")
        for p in folder.rglob("*")
        if p.is_file()
    }


def test_everything_that_a_run_writes_is_a_report(tmp_path):
    names = (
        "provenance.json",
        "assay.eln",
        "conditions/a.html",
        "recordings/a.html",
        "tables/tracks.csv",
    )
    assert is_report(report(tmp_path / "a", **dict.fromkeys(names, "")))


@pytest.mark.parametrize(
    "name",
    [
        "a.csv",
        "index.htm",
        "tables/a.html",
        "conditions/a.csv",
        "more/index.html",
        "tables/b/a.csv",
    ],
)
def test_one_other_file_makes_it_no_report(tmp_path, name):
    assert not is_report(report(tmp_path / "a", **{name: ""}))


@pytest.mark.parametrize("folder", ["conditions/more", "more"])
def test_other_folder_makes_it_no_report(tmp_path, folder):
    (report(tmp_path / "a") / folder).mkdir(parents=True)
    assert not is_report(tmp_path / "a")


@pytest.mark.parametrize("text", ["", "{}", "[1]", '{"format": "other/1"}', "\xff", "[" * 100_000])
def test_other_json_is_no_mark(tmp_path, text):
    (tmp_path / "results.json").write_text(text, encoding="latin-1")
    assert not is_marked(tmp_path / "results.json", "glidefit-")
    assert not is_report(tmp_path)


def test_mark_that_is_not_there(tmp_path):
    assert not is_marked(tmp_path / "results.json", "glidefit-")


def test_new_folder_appears_only_at_the_end(tmp_path):
    with replaced(tmp_path / "deep/er/out") as fresh:
        write_files(fresh, {"a/b.txt": "µ\r\n"})
        assert not (tmp_path / "deep/er/out").exists()
        assert fresh.parent == tmp_path / "deep/er"
    assert (tmp_path / "deep/er/out/a/b.txt").read_bytes() == "µ\r\n".encode()
    assert [p.name for p in (tmp_path / "deep/er").iterdir()] == ["out"]


def test_old_report_goes_altogether(tmp_path):
    report(tmp_path / "out", **{"conditions/gone.html": ""})
    with replaced(tmp_path / "out") as fresh:
        assert "conditions/gone.html" in content(tmp_path / "out")
        write_files(fresh, {"results.json": "new"})
    assert content(tmp_path) == {"out/results.json": "new"}


def test_new_folder_can_be_read_by_others(tmp_path):
    with replaced(tmp_path / "out"):
        pass
    assert (tmp_path / "out").stat().st_mode & 0o777 == 0o755


@pytest.mark.parametrize("error", [RuntimeError, KeyboardInterrupt, SystemExit])
def test_block_that_fails_changes_nothing(tmp_path, error):
    before = content(report(tmp_path / "out"))

    def fails():
        with replaced(tmp_path / "out") as fresh:
            write_files(fresh, {"results.json": "new"})
            raise error

    with pytest.raises(error):
        fails()
    assert content(tmp_path / "out") == before
    assert [p.name for p in tmp_path.iterdir()] == ["out"]


def test_folder_that_gains_a_file_meanwhile_is_refused_at_the_end(tmp_path):
    out = report(tmp_path / "out")
    check_output(out)
    (out / "notes.txt").write_text("of somebody")
    with (
        pytest.raises(OutputError, match=r"also holds 'notes.txt', which no run wrote"),
        replaced(out),
    ):
        pass
    assert (out / "notes.txt").exists()


def test_name_that_the_system_refuses(tmp_path):
    with pytest.raises(OutputError, match="cannot be made"), replaced(tmp_path / ("x" * 250)):
        pass


def test_other_judge_of_what_may_be_replaced(tmp_path):
    (tmp_path / "out").mkdir()
    (tmp_path / "out/a.json").write_text(json.dumps({"format": "glidefit-tracks/1"}))
    with pytest.raises(OutputError, match="holds no earlier output"):
        check_output(tmp_path / "out")
    check_output(tmp_path / "out", holds=lambda f: is_marked(f / "a.json", "glidefit-tracks/"))
