"""Browser tests run where Chromium is; elsewhere they are left out, and the run says so."""

from __future__ import annotations

import importlib.util
import os
import shutil

import pytest

_HAS_BROWSER = bool(shutil.which("chromium")) and bool(importlib.util.find_spec("playwright"))
_left_out = 0


def pytest_collection_modifyitems(config, items):
    if _HAS_BROWSER:
        return
    if os.environ.get("GLIDEFIT_BROWSER") == "required":
        raise pytest.UsageError("browser tests are required, but Chromium or playwright is missing")
    browser = [item for item in items if item.get_closest_marker("browser")]
    global _left_out
    _left_out = len(browser)
    config.hook.pytest_deselected(items=browser)
    items[:] = [item for item in items if not item.get_closest_marker("browser")]


def pytest_terminal_summary(terminalreporter):
    if _left_out:
        terminalreporter.write_line(
            f"{_left_out} browser tests left out: they need Chromium and playwright"
        )
