"""Progress: on a terminal only."""

from __future__ import annotations

import io
import sys

import pytest

from glidefit.running.progress import progress


class Stream(io.StringIO):
    def __init__(self, *, terminal):
        super().__init__()
        self.terminal = terminal

    def isatty(self):
        return self.terminal


@pytest.fixture
def shown(monkeypatch, capsys):
    """What two pieces of work leave on a standard error that is a terminal, or is none."""

    def work(*, terminal):
        stream = Stream(terminal=terminal)
        monkeypatch.setenv("TERM", "xterm")
        monkeypatch.setattr(sys, "stderr", stream)
        with progress(2, "recordings") as done:
            done("first.tif")
            done("second [red].tif")
        assert capsys.readouterr().out == ""
        return stream.getvalue()

    return work


def test_terminal_sees_a_bar_that_goes_away(shown):
    text = shown(terminal=True)
    assert "recordings" in text
    assert "2/2" in text
    assert "second [red].tif" in text  # a name, not a colour
    assert text.endswith("\x1b[1A\x1b[2K")  # up one line, and that line is cleared


def test_file_sees_nothing(shown):
    assert shown(terminal=False) == ""
