"""In which file and on which page of an OME-TIFF set each plane lies."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path, PurePosixPath
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from glidefit.errors import InputError
from glidefit.reading.complaints import colour, contradictory, shown
from glidefit.reading.ome import MOST_OF_ANYTHING, children, member_files, whole_number

if TYPE_CHECKING:
    from xml.etree.ElementTree import Element

NOWHERE = -1  # the file of a plane that was announced and never recorded
AXES = "TZC"


@dataclass(frozen=True, slots=True, kw_only=True)
class PlaneTable:
    """File and page of each plane of one field of view.

    Both arrays have the shape (times, slices, channels); ``file_of`` is NOWHERE for a plane that
    the metadata place nowhere.
    """

    files: tuple[Path, ...]
    file_of: NDArray[np.int64]
    page_of: NDArray[np.int64]
    channel_names: tuple[str, ...]

    @property
    def sizes(self) -> dict[str, int]:
        """Length of each axis by its letter."""
        return dict(zip(AXES, self.file_of.shape, strict=True))


class FileSet:
    """The files of an OME-TIFF set.

    Parameters
    ----------
    path : Path
        The file that has the OME-XML.
    root : Element
        The OME-XML.
    """

    def __init__(self, path: Path, root: Element) -> None:
        self.path = path
        self._uuid = (root.get("UUID") or "").strip()
        self.is_alone = len(member_files(root)) <= 1

    def is_here(self, data: Element) -> bool:
        """Whether the planes of a ``TiffData`` element are in the file that has the OME-XML.

        A file that was renamed is known by its identifier, or because no other is named.
        """
        uuid = next(children(data, "UUID"), None)
        if uuid is None:
            return True
        text = (uuid.text or "").strip()
        name = str(PurePosixPath(uuid.get("FileName", self.path.name)))  # without a leading ./
        if (text and text == self._uuid) or name.lower() == self.path.name.lower():
            return True
        is_other = bool(text and self._uuid) and (self.path.parent / name).is_file()
        return self.is_alone and not is_other

    def has_planes_of(self, pixels: Element) -> bool:
        """Whether a plane of a field of view is in the file that has the OME-XML."""
        return any(self.is_here(data) for data in children(pixels, "TiffData"))

    def file(self, data: Element) -> Path:
        """The file with the planes of a ``TiffData`` element; InputError if it is missing."""
        if self.is_here(data):
            return self.path
        name = next(children(data, "UUID")).get("FileName", "")
        file = self.path.parent / name
        if name and file.is_file():
            return file
        raise InputError(
            str(self.path),
            f"one file of a set, of which {shown(name) or 'a file without a name'} is missing",
            expected=f"all files of the set in the folder {self.path.parent}",
            remedy="Copy the missing file there, under the name it was recorded with.",
        )


def locate_planes(files: FileSet, pixels: Element, *, n_pages: Callable[[Path], int]) -> PlaneTable:
    """Where each plane of a field of view is.

    Parameters
    ----------
    files : FileSet
        The set.
    pixels : Element
        The field of view.
    n_pages : callable
        Number of pages in a file, for metadata that leave it to the file.

    Raises
    ------
    InputError
        When a file of the set is missing, or the metadata contradict themselves.
    """
    path = files.path
    channels = list(children(pixels, "Channel"))
    for channel in channels:
        n_values = whole_number(path, channel, "SamplesPerPixel", default=1, least=1)
        if n_values > 1:
            raise colour(path, n_values)
    slow_first, shape = _shape(path, pixels)
    file_of = np.full(shape, NOWHERE, dtype=np.int64)
    page_of = np.zeros_like(file_of)
    number: dict[Path, int] = {}
    listed = list(children(pixels, "TiffData"))
    for data in listed or [pixels.makeelement("TiffData", {})]:
        file = files.file(data)
        least = file_of.size if files.is_alone else 0
        first, count, page = _run(
            path, data, slow_first, shape, to_the_end=max(least, n_pages(file))
        )
        file_of.flat[first : first + count] = number.setdefault(file, len(number))
        page_of.flat[first : first + count] = page + np.arange(count)
    to_axes = [slow_first.index(axis) for axis in AXES]
    return PlaneTable(
        files=tuple(number),
        file_of=file_of.transpose(to_axes),
        page_of=page_of.transpose(to_axes),
        channel_names=tuple(channel.get("Name", "") for channel in channels),
    )


def _shape(path: Path, pixels: Element) -> tuple[str, tuple[int, ...]]:
    """Axes, the slowest first, and their lengths."""
    order = pixels.get("DimensionOrder", "XYZCT")
    if sorted(order) != sorted("XY" + AXES) or not order.startswith("XY"):
        raise contradictory(path, f"its OME-XML says DimensionOrder='{order[:40]}'")
    slow_first = order[:1:-1]
    shape = tuple(
        whole_number(path, pixels, f"Size{axis}", default=1, least=1) for axis in slow_first
    )
    if math.prod(shape) > MOST_OF_ANYTHING:
        raise contradictory(path, f"its OME-XML announces {math.prod(shape):,} planes")
    return slow_first, shape


def _run(
    path: Path,
    data: Element,
    slow_first: str,
    shape: tuple[int, ...],
    *,
    to_the_end: int,
) -> tuple[int, int, int]:
    """First plane, number of planes and first page of a ``TiffData`` element.

    Without a number it means all planes to the end of the file.
    """
    start = [whole_number(path, data, f"First{axis}", default=0) for axis in slow_first]
    page = whole_number(path, data, "IFD", default=0)
    count = whole_number(path, data, "PlaneCount", default=1 if "IFD" in data.attrib else 0)
    total = math.prod(shape)
    inside = all(k < n for k, n in zip(start, shape, strict=True))
    first = int(np.ravel_multi_index(start, shape)) if inside else total
    if count == 0:
        count = min(to_the_end - page, total - first)
    if not inside or count < 1 or first + count > total:
        sizes = dict(zip(slow_first, shape, strict=True))
        raise contradictory(
            path,
            f"its OME-XML announces {sizes['T']} times × {sizes['Z']} slices × {sizes['C']}"
            " channels, and then lists planes beyond them",
        )
    return first, count, page
