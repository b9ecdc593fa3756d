"""Pages from results alone: no video, no track table is needed."""

from __future__ import annotations

import os
from pathlib import Path

from glidefit.errors import OutputError
from glidefit.results import StudyResult


def pages_of(result: StudyResult) -> dict[str, str]:
    """Text of every page by its name in the run folder."""
    from glidefit.writing.pages import condition_page, index_page

    pages = {"index.html": index_page(result)}
    for condition in result.conditions:
        pages[f"conditions/{condition.slug}.html"] = condition_page(result, condition)
    return pages


def report(run: Path) -> StudyResult:
    """Write the pages of a run folder anew from its results.json."""
    from glidefit.reading.results_file import read_results

    result = read_results(run / "results.json" if run.is_dir() else run)
    target = run if run.is_dir() else run.parent
    for name, text in pages_of(result).items():
        _replace(target / name, text)
    return result


def _replace(path: Path, text: str) -> None:
    fresh = path.with_name(f".{path.name}.new")
    try:
        path.parent.mkdir(exist_ok=True)
        fresh.write_text(text, encoding="utf-8", newline="")
        os.replace(fresh, path)
    except OSError as error:
        fresh.unlink(missing_ok=True)
        raise OutputError(f"{path}: cannot be written ({error.strerror}).") from error
