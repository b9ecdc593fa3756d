"""Pages from results alone: no video, no track table is needed."""

from __future__ import annotations

import os
from pathlib import Path

from glidefit.errors import InputError, OutputError
from glidefit.results import StudyResult

_UNEDITED = "Take the results.json of a finished run, or run the analysis again."


def pages_of(result: StudyResult) -> dict[str, str]:
    """Text of every page by its name in the run folder."""
    from glidefit.writing.pages import condition_page, index_page

    pages = {"index.html": index_page(result)}
    for condition in result.conditions:
        pages[f"conditions/{condition.slug}.html"] = condition_page(result, condition)
    if result.comparisons:
        from glidefit.writing.comparison_page import comparison_page

        pages["comparison.html"] = comparison_page(result)
    if result.responses:
        from glidefit.writing.response_page import response_page

        pages["response.html"] = response_page(result)
    return pages


def report(run: Path) -> StudyResult:
    """Write the pages of a run folder anew from its results.json.

    Raises
    ------
    InputError
        For results that cannot be read, or that name pages outside their folder.
    OutputError
        If a page cannot be written.
    """
    from glidefit.reading.results_file import read_results

    source = run / "results.json" if run.is_dir() else run
    result = read_results(source)
    _check_slugs(source, result)
    target = run if run.is_dir() else run.parent
    if (target / "conditions").is_symlink():
        raise OutputError(
            f"{target / 'conditions'}: this is a link to another folder, which is not written to. "
            "Delete the link."
        )
    for name, text in pages_of(result).items():
        _replace(target / name, text)
    return result


def _check_slugs(source: Path, result: StudyResult) -> None:
    """The file may come from anybody; its slugs become paths."""
    from glidefit.writing.slugs import slug

    for condition in result.conditions:
        if condition.slug != slug(str(condition.slug)):
            raise InputError(
                str(source),
                f"the slug of condition {condition.condition!r} is {condition.slug!r}",
                expected="a name of a-z, 0-9 and hyphens, as a run writes it",
                remedy=_UNEDITED,
            )
    slugs = [condition.slug for condition in result.conditions]
    if not slugs or len(set(slugs)) < len(slugs):
        raise InputError(
            str(source),
            "two conditions have the same slug" if slugs else "it has no conditions",
            expected="conditions, each with a slug of its own",
            remedy=_UNEDITED,
        )


def _replace(path: Path, text: str) -> None:
    fresh = path.with_name(f".{path.name}.new")
    try:
        path.parent.mkdir(exist_ok=True)
        fresh.write_text(text, encoding="utf-8", newline="")
        os.replace(fresh, path)
    except OSError as error:
        fresh.unlink(missing_ok=True)
        raise OutputError(f"{path}: cannot be written ({error.strerror}).") from error
