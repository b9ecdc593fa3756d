"""Progress on standard error, and only on a terminal."""

from __future__ import annotations

import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager

Step = Callable[[str], None]


@contextmanager
def progress(total: int, title: str) -> Iterator[Step]:
    """Call what is yielded once for each finished piece, with its name.

    Without a terminal it does nothing.
    """
    if not sys.stderr.isatty():
        yield lambda name: None
        return
    from rich.console import Console
    from rich.progress import (
        BarColumn,
        MofNCompleteColumn,
        Progress,
        TextColumn,
        TimeRemainingColumn,
    )

    bar = Progress(
        TextColumn("{task.description}"),
        BarColumn(),
        MofNCompleteColumn(),
        TimeRemainingColumn(),
        TextColumn("{task.fields[name]}", markup=False),
        console=Console(stderr=True),
        transient=True,
    )
    with bar:
        task = bar.add_task(title, total=total, name="")
        yield lambda name: bar.update(task, advance=1, name=name)
