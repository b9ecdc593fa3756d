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


def is_report(folder: Path) -> bool:
    """True for a folder that an earlier run wrote."""
    try:
        data = json.loads((folder / MARK).read_text(encoding="utf-8"))
    except (OSError, ValueError):
        return False
    return isinstance(data, dict) and str(data.get("format", "")).startswith(_FORMAT_PREFIX)


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
        If it is a file, holds something else than an earlier report, or cannot be written.
    """
    if folder.exists() and not folder.is_dir():
        raise OutputError(
            f"{folder}: this is a file; expected a folder for the pages. Choose another --out."
        )
    if folder.is_dir() and any(folder.iterdir()) and not holds(folder):
        raise OutputError(
            f"{folder}: the folder is not empty and holds no earlier output of this command of "
            "glidefit; nothing was changed. Choose another --out, or empty the folder yourself."
        )
    parent = next(p for p in folder.absolute().parents if p.exists())
    if not os.access(parent, os.W_OK | os.X_OK) or not parent.is_dir():
        raise OutputError(
            f"{folder}: {parent} cannot be written to; nothing was changed. Choose another --out, "
            "or have the permissions changed."
        )


@contextmanager
def replaced(folder: Path, *, holds: Callable[[Path], bool] = is_report) -> Iterator[Path]:
    """A temporary sibling to write into; it takes the folder's place when the block ends well.

    Raises
    ------
    OutputError
        As `check_output`, or if writing fails; the previous report then stays whole.
    """
    check_output(folder, holds=holds)
    try:
        folder.absolute().parent.mkdir(parents=True, exist_ok=True)
        fresh = Path(tempfile.mkdtemp(prefix=f".{folder.name}-", dir=folder.absolute().parent))
    except OSError as error:
        raise OutputError(f"{folder}: cannot be made ({error.strerror}). {_ELSEWHERE}") from error
    try:
        fresh.chmod(0o755)
        yield fresh
        _swap(fresh, folder)
    except OSError as error:
        raise OutputError(
            f"{folder}: cannot be written ({error.strerror}). {_ELSEWHERE}"
        ) from error
    finally:
        shutil.rmtree(fresh, ignore_errors=True)


_ELSEWHERE = "The previous report, if any, is unchanged. Choose another --out."


def _swap(fresh: Path, folder: Path) -> None:
    if not folder.exists():
        fresh.rename(folder)
        return
    old = fresh.with_name(fresh.name + "-old")
    folder.rename(old)
    try:
        fresh.rename(folder)
    except OSError:
        old.rename(folder)
        raise
    shutil.rmtree(old)


def write_files(folder: Path, files: Mapping[str, str]) -> None:
    """Write texts as UTF-8 under relative names, line ends as they are."""
    for name, text in files.items():
        path = folder / name
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_text(text, encoding="utf-8", newline="")
