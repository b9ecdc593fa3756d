"""The run folder: written beside its place and moved in, so that a killed run harms nothing."""

from __future__ import annotations

import json
import os
import shutil
import tempfile
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path

from glidefit.errors import OutputError

MARK = "results.json"
_FORMAT_PREFIX = "glidefit-"
# What a run writes, by folder. Anything else in a report is somebody's own and not replaced.
_WRITTEN = {
    "": ("index.html", "comparison.html", "response.html", MARK, "provenance.json", "*.eln"),
    "conditions": ("*.html",),
    "recordings": ("*.html",),
    "tables": ("*.csv",),
}
# Left behind by file browsers in every folder that they show.
_BROWSER_FILES = (".DS_Store", "Thumbs.db", "desktop.ini")


def is_report(folder: Path) -> bool:
    """True for a folder that an earlier run wrote, with nothing else in it."""
    return is_marked(folder / MARK, _FORMAT_PREFIX) and not _foreign(folder)


def is_marked(path: Path, format_prefix: str) -> bool:
    """True for a JSON file whose ``format`` begins so."""
    try:
        data = json.loads(path.read_text(encoding="utf-8"))
    except (OSError, ValueError, RecursionError):
        return False
    return isinstance(data, dict) and str(data.get("format", "")).startswith(format_prefix)


def _foreign(folder: Path) -> list[str]:
    """Names in a report that no run writes, sorted."""
    found = []
    for path in sorted(folder.rglob("*")):
        name = path.relative_to(folder)
        known = _WRITTEN.get(name.parent.as_posix().removeprefix("."), ())
        is_ours = any(map(path.match, known)) if path.is_file() else name.as_posix() in _WRITTEN
        if not is_ours and path.name not in _BROWSER_FILES:
            found.append(name.as_posix())
    return found


def check_output(folder: Path, *, holds: Callable[[Path], bool] = is_report) -> None:
    """Refuse a folder that a run may not replace, before any work is done.

    Parameters
    ----------
    folder : Path
    holds : callable
        Tells of a folder that is not empty whether an earlier output may be replaced.

    Raises
    ------
    OutputError
        If it is a file, holds something else than an earlier report, holds the current folder,
        or cannot be written.
    """
    place = Path(os.path.realpath(folder))
    if place.exists() and not place.is_dir():
        raise OutputError(f"{folder}: this is a file; expected a folder. Choose another --out.")
    if place.is_dir() and any(place.iterdir()) and not holds(place):
        raise OutputError(f"{folder}: {_what_is_there(place)}; nothing was changed. {_ELSEWHERE}")
    if place in (Path.cwd(), *Path.cwd().parents):
        raise OutputError(
            f"{folder}: this is the folder you are in, or one above it, and it would be replaced; "
            "nothing was changed. Choose another --out, or go to another folder first."
        )
    parent = next(p for p in place.parents if p.exists())
    if not parent.is_dir():
        raise OutputError(
            f"{folder}: {parent} is a file, so no folder can be made in it; nothing was changed. "
            f"{_ELSEWHERE}"
        )
    if not os.access(parent, os.W_OK | os.X_OK):
        raise OutputError(
            f"{folder}: {parent} cannot be written to; nothing was changed. Choose another --out, "
            "or have the permissions changed."
        )


_ELSEWHERE = "Choose another --out."


def _what_is_there(folder: Path) -> str:
    if is_marked(folder / MARK, _FORMAT_PREFIX) and (foreign := _foreign(folder)):
        more = f" and {len(foreign) - 1} more" if len(foreign) > 1 else ""
        return f"the report there also holds {foreign[0]!r}{more}, which no run wrote"
    return "the folder is not empty and holds no earlier output of this command of glidefit"


@contextmanager
def replaced(folder: Path, *, holds: Callable[[Path], bool] = is_report) -> Iterator[Path]:
    """A temporary sibling to write into; it takes the folder's place when the block ends well.

    Raises
    ------
    OutputError
        As `check_output`, or if writing fails; the previous report then stays whole.
    """
    check_output(folder, holds=holds)
    # Of a symbolic link the folder is replaced, not the link.
    place = Path(os.path.realpath(folder))
    try:
        place.parent.mkdir(parents=True, exist_ok=True)
        fresh = Path(tempfile.mkdtemp(prefix=f".{place.name}-", dir=place.parent))
    except OSError as error:
        raise OutputError(f"{folder}: cannot be made ({error.strerror}). {_UNCHANGED}") from error
    try:
        fresh.chmod(0o755)
        yield fresh
        _swap(fresh, place)
    except OSError as error:
        raise OutputError(
            f"{folder}: cannot be written ({error.strerror or error}). {_UNCHANGED}"
        ) from error
    finally:
        shutil.rmtree(fresh, ignore_errors=True)


_UNCHANGED = f"The previous report, if any, is unchanged. {_ELSEWHERE}"


def _swap(fresh: Path, folder: Path) -> None:
    if not folder.exists():
        fresh.rename(folder)
        return
    old = fresh.with_name(fresh.name + "-old")
    try:
        folder.rename(old)
        fresh.rename(folder)
    except BaseException:  # Ctrl-C between the two renames, too
        if old.exists() and not folder.exists():
            old.rename(folder)
        raise
    shutil.rmtree(old, ignore_errors=True)


def write_files(folder: Path, files: Mapping[str, str]) -> None:
    """Write texts as UTF-8 under relative names, line ends as they are."""
    for name, text in files.items():
        path = folder / name
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_text(text, encoding="utf-8", newline="")
