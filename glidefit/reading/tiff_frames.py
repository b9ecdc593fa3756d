"""Frames of a TIFF stack, decoded one at a time, with every complaint of the decoder heard."""

from __future__ import annotations

import logging
import re
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from functools import partial
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from glidefit.errors import InputError
from glidefit.reading.calibration import Calibration, Notes
from glidefit.reading.complaints import damaged, undecodable
from glidefit.reading.film import Film

if TYPE_CHECKING:
    import tifffile

FIRST_PRIVATE_TAG = 32768  # TIFF 6.0, page 8: tags from here on are a maker's own
_HARMLESS = re.compile(r"coercing invalid ASCII|<tifffile\.imagej_metadata>")
_TAG = re.compile(r"TiffTag (\d+) @")
_ONE_AT_A_TIME = threading.RLock()  # the logger of a library belongs to the whole process


@dataclass(frozen=True, slots=True, kw_only=True)
class Stack:
    """Where the frames of a video are.

    Frame ``k`` is page ``page_of[k]`` of ``files[file_of[k]]``; where ``block_start`` is given, the
    frames follow each other from that byte on, without directories, and ``page_of`` counts them.
    """

    files: tuple[Path, ...]
    file_of: NDArray[np.int64]
    page_of: NDArray[np.int64]
    shape: tuple[int, int]
    dtype: np.dtype[Any]  # in the byte order of the file
    block_start: int | None = None


def film_of(path: Path, stack: Stack, *, calibration: Calibration, notes: Notes) -> Film:
    """The video whose frames are the pages of a stack."""
    return Film(
        path=path,
        n_frames=stack.page_of.size,
        height_px=stack.shape[0],
        width_px=stack.shape[1],
        dtype=stack.dtype.newbyteorder("="),
        calibration=calibration,
        notes=notes,
        frames=partial(stack_frames, stack),
    )


class _Collect(logging.Handler):
    """Keeps what a library logs."""

    def __init__(self) -> None:
        super().__init__(logging.WARNING)
        self.messages: list[str] = []

    def emit(self, record: logging.LogRecord) -> None:
        message = record.getMessage()
        tag = _TAG.search(message)
        private = tag is not None and int(tag.group(1)) >= FIRST_PRIVATE_TAG
        if not private and not _HARMLESS.search(message):
            self.messages.append(message)


@contextmanager
def heard(where: str) -> Iterator[None]:
    """Turn whatever the TIFF library raises or logs into an InputError.

    It decodes broken files as far as it can, fills the rest with zeros and says so to its logger
    only; what it raises depends on the byte at which a file was cut.

    Parameters
    ----------
    where : str
        File, and frame if one is read.
    """
    logger, collect = logging.getLogger("tifffile"), _Collect()
    with _ONE_AT_A_TIME:
        before = logger.propagate, logger.level, logger.disabled
        logger.addHandler(collect)
        logger.propagate, logger.disabled = False, False
        logger.setLevel(logging.WARNING)
        try:
            yield
        except InputError:
            raise
        except Exception as error:
            raise undecodable(where, error) from error
        finally:
            logger.propagate, logger.level, logger.disabled = before
            logger.removeHandler(collect)
    if collect.messages:
        raise undecodable(where, collect.messages[0])


def stack_frames(stack: Stack, first: int, last: int) -> Iterator[NDArray[Any]]:
    """Frames `first` to `last` in turn; only one is in memory.

    Raises
    ------
    InputError
        At a frame that cannot be read.
    """
    if stack.block_start is not None:
        yield from _block_frames(stack, stack.block_start, first, last)
        return
    opened: tifffile.TiffFile | None = None
    current = -1
    try:
        for frame in range(first, last + 1):
            where = f"{stack.files[stack.file_of[frame]]}, frame {frame}"
            with heard(where):
                if opened is None or current != stack.file_of[frame]:
                    if opened is not None:
                        opened.close()
                    current = int(stack.file_of[frame])
                    opened = _open(stack.files[current])
                page = opened.pages[int(stack.page_of[frame])]
                image = page.asarray(maxworkers=1)
            yield image
    finally:
        if opened is not None:
            opened.close()


def _open(path: Path) -> tifffile.TiffFile:
    import tifffile

    return tifffile.TiffFile(path)


def _block_frames(stack: Stack, start: int, first: int, last: int) -> Iterator[NDArray[Any]]:
    path, n_pixels = stack.files[0], stack.shape[0] * stack.shape[1]
    with heard(str(path)):
        file = path.open("rb")
    with file:
        for frame in range(first, last + 1):
            with heard(f"{path}, frame {frame}"):
                file.seek(start + int(stack.page_of[frame]) * n_pixels * stack.dtype.itemsize)
                image = np.fromfile(file, stack.dtype, n_pixels)
            if image.size < n_pixels:
                raise damaged(f"{path}, frame {frame}", "the file ends within it")
            yield image.reshape(stack.shape).astype(stack.dtype.newbyteorder("="), copy=False)
