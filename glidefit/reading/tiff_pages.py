"""The skeleton of a TIFF file: where its pages and their data lie, and whether they are all there.

Libraries that decode TIFF return fewer frames, or zeros, for a file that was cut off. So the chain
of directories is walked here first, and every address in it must lie inside the file.
"""

from __future__ import annotations

import struct
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, BinaryIO, Literal, NamedTuple

import numpy as np
from numpy.typing import NDArray

from glidefit.errors import InputError
from glidefit.reading.complaints import colour, contradictory, damaged

MOST_PIXELS = 2**28  # of a frame; no camera has as many, and a broken header must not fill memory
MOST_TAGS = 4096  # of one page; more means that the address does not point to a directory

WIDTH, HEIGHT, BITS, COMPRESSION, PHOTOMETRIC = 256, 257, 258, 259, 262
SAMPLES, SAMPLE_FORMAT, SUBFILE, OLD_SUBFILE = 277, 339, 254, 255
OFFSETS, COUNTS = (273, 324), (279, 325)  # of strips, of tiles
_NEEDED = {WIDTH, HEIGHT, BITS, COMPRESSION, PHOTOMETRIC, SAMPLES, SAMPLE_FORMAT}
_NEEDED |= {SUBFILE, OLD_SUBFILE, *OFFSETS, *COUNTS}
_STANDARD = range(254, 533)  # tags of the TIFF 6.0 specification, sections 8 to 22
_IMAGEJ = (50838, 50839)
_ORDERS: dict[bytes, Literal["<", ">"]] = {b"II": "<", b"MM": ">"}
_COLOUR = {2, 5, 6, 8}  # RGB, CMYK, YCbCr, Lab

_SIZE_OF_TYPE = {1: 1, 2: 1, 3: 2, 4: 4, 5: 8, 6: 1, 7: 1, 8: 2, 9: 4, 10: 8, 11: 4, 12: 8, 13: 4}
_SIZE_OF_TYPE |= {16: 8, 17: 8, 18: 8}
_LETTER_OF_TYPE = {1: "u1", 3: "u2", 4: "u4", 13: "u4", 16: "u8", 18: "u8"}
_BITS_OF_FORMAT = {1: "u", 2: "i", 3: "f", 4: "u"}


class PageShape(NamedTuple):
    """What two pages of one video have in common."""

    height: int
    width: int
    bits: int
    sample_format: int
    n_values: int  # per pixel
    is_colour: bool

    @property
    def dtype(self) -> np.dtype[Any] | None:
        """Type of a decoded pixel, None if it is no plain number of 8 bits or more."""
        letter = _BITS_OF_FORMAT.get(self.sample_format)
        if letter is None or self.bits < 2 or self.bits > 64 or (letter == "f" and self.bits < 16):
            return None
        n_bytes = next(size for size in (1, 2, 4, 8) if 8 * size >= self.bits)
        return np.dtype(f"{letter}{n_bytes}")


@dataclass(frozen=True, slots=True, kw_only=True)
class Pages:
    """The pages of a complete TIFF file.

    ``shapes[shape_of[k]]`` is the shape of page ``k``; the shapes are in order of appearance.
    """

    shapes: tuple[PageShape, ...]
    shape_of: NDArray[np.int64]
    is_small_copy: NDArray[np.bool_]  # a thumbnail of another page
    order: Literal["<", ">"]  # of bytes
    size: int  # of the file in bytes
    first_data: int | None  # start of the data of page 0, if they are uncompressed and in one piece

    @property
    def n_pages(self) -> int:
        """How many pages there are."""
        return int(self.shape_of.size)


@dataclass(frozen=True, slots=True, kw_only=True)
class _Layout:
    """Classic TIFF or BigTIFF."""

    order: Literal["<", ">"]
    size: int
    first: int
    count: str  # struct formats of the number of tags, of a tag, of an address
    tag: str
    address: str

    @property
    def inline(self) -> int:
        """Number of bytes of a value that stands in its tag."""
        return struct.calcsize(self.order + self.address)


Tags = dict[int, NDArray[np.int64]]


def scan_pages(path: Path) -> Pages:
    """Walk through the pages of a TIFF file and check that all of it is there.

    Raises
    ------
    InputError
        When the file is empty, no TIFF, cut off, or its directories are broken.
    """
    shapes: dict[PageShape, int] = {}
    shape_of, is_small_copy = [], []
    first_data = None
    with path.open("rb") as file:
        layout = _read_header(path, file)
        for number, tags in enumerate(_directories(path, file, layout)):
            shape = _shape(path, number, tags)
            _check_data(path, number, tags, shape, layout)
            if number == 0:
                first_data = _start_of_one_piece(tags)
            shape_of.append(shapes.setdefault(shape, len(shapes)))
            is_small_copy.append(_value(tags, SUBFILE, 0) & 1 or _value(tags, OLD_SUBFILE, 0) == 2)
    if not shape_of:
        raise damaged(path, "a TIFF without any page")
    return Pages(
        shapes=tuple(shapes),
        shape_of=np.array(shape_of, dtype=np.int64),
        is_small_copy=np.array(is_small_copy, dtype=bool),
        order=layout.order,
        size=layout.size,
        first_data=first_data,
    )


def common_shape(path: Path, shapes: Sequence[PageShape]) -> PageShape:
    """The one shape of all frames; InputError if they differ or are no grey images."""
    shape = shapes[0]
    for other in shapes[1:]:
        raise contradictory(
            path,
            f"frames of {shape.width} × {shape.height} px ({shape.bits} bits) and of"
            f" {other.width} × {other.height} px ({other.bits} bits) in one recording",
        )
    if shape.is_colour:
        raise colour(path, shape.n_values)
    if shape.width * shape.height > MOST_PIXELS:
        raise contradictory(path, f"frames of {shape.width:,} × {shape.height:,} px")
    return shape


def pixel_type(path: Path, shape: PageShape) -> np.dtype[Any]:
    """Type of a pixel in the byte order of this machine; InputError if it is no grey value."""
    if shape.dtype is not None:
        return shape.dtype
    kind = "black and white" if shape.bits == 1 else "no plain number"
    raise InputError(
        str(path),
        f"pixels of {shape.bits} bit{'s' if shape.bits > 1 else ''}, {kind}",
        expected="grey values of 8, 16 or 32 bits",
        remedy="Save the original recording, not a mask, as 16-bit greyscale.",
    )


def _read_header(path: Path, file: BinaryIO) -> _Layout:
    size = path.stat().st_size
    if size == 0:
        raise damaged(path, "an empty file, 0 bytes")
    head = file.read(16)
    order = _ORDERS.get(head[:2])
    version = struct.unpack(order + "H", head[2:4])[0] if order and len(head) >= 4 else 0
    if order is None or version not in (42, 43):
        raise InputError(
            str(path),
            "this is no TIFF file, whatever its name says",
            expected="a video in TIFF, OME-TIFF or BigTIFF",
            remedy="Export the recording again as OME-TIFF.",
        )
    if len(head) < 16:
        raise _cut_off(path, "the header", size)
    if version == 42:
        first = struct.unpack(order + "I", head[4:8])[0]
        return _Layout(order=order, size=size, first=first, count="H", tag="HHI4s", address="I")
    first = struct.unpack(order + "Q", head[8:16])[0]
    return _Layout(order=order, size=size, first=first, count="Q", tag="HHQ8s", address="Q")


def _directories(path: Path, file: BinaryIO, layout: _Layout) -> Iterator[Tags]:
    """The needed tags of each page in turn."""
    address, seen = layout.first, set[int]()
    count, tag, pointer = (layout.order + f for f in (layout.count, layout.tag, layout.address))
    while address:
        where = f"page {len(seen) + 1} of the TIFF"
        if address in seen:
            raise damaged(path, f"{where} is a page that came before, the file is broken")
        seen.add(address)
        if address + struct.calcsize(count) > layout.size:
            raise _cut_off(path, where, layout.size)
        file.seek(address)
        n_tags = struct.unpack(count, file.read(struct.calcsize(count)))[0]
        if not 0 < n_tags <= MOST_TAGS:
            raise damaged(path, f"{where} is broken ({n_tags} tags)")
        body = file.read(n_tags * struct.calcsize(tag))
        tail = file.read(layout.inline)
        if len(tail) < layout.inline:
            raise _cut_off(path, where, layout.size)
        yield _read_tags(path, file, struct.iter_unpack(tag, body), layout, where)
        address = struct.unpack(pointer, tail)[0]


def _read_tags(
    path: Path,
    file: BinaryIO,
    entries: Iterator[tuple[int, int, int, bytes]],
    layout: _Layout,
    where: str,
) -> Tags:
    tags: Tags = {}
    for code, kind, count, value in entries:
        if code not in _STANDARD and code not in _IMAGEJ:
            continue  # makers fill their own tags as they like
        n_bytes = count * _SIZE_OF_TYPE.get(kind, 0)
        if n_bytes > layout.inline:
            start = struct.unpack(layout.order + layout.address, value)[0]
            if start + n_bytes > layout.size:
                raise _cut_off(path, f"the description of {where}", layout.size)
        if code in _NEEDED and kind in _LETTER_OF_TYPE:
            if n_bytes > layout.inline:
                file.seek(start)
                value = file.read(n_bytes)
            numbers = np.frombuffer(value[:n_bytes], layout.order + _LETTER_OF_TYPE[kind])
            tags[code] = numbers.astype(np.int64)
    return tags


def _value(tags: Tags, code: int, default: int) -> int:
    numbers = tags.get(code)
    return default if numbers is None or numbers.size == 0 else int(numbers[0])


def _shape(path: Path, number: int, tags: Tags) -> PageShape:
    n_values = _value(tags, SAMPLES, 1)
    shape = PageShape(
        height=_value(tags, HEIGHT, 0),
        width=_value(tags, WIDTH, 0),
        bits=_value(tags, BITS, 1),
        sample_format=_value(tags, SAMPLE_FORMAT, 1),
        n_values=n_values,
        is_colour=n_values > 1 or _value(tags, PHOTOMETRIC, 1) in _COLOUR,
    )
    if shape.height < 1 or shape.width < 1:
        raise damaged(path, f"page {number + 1} of the TIFF has no width or no height")
    return shape


def _pieces(tags: Tags) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Start and length of the strips or tiles of a page in bytes."""
    none = np.empty(0, dtype=np.int64)
    starts = next((tags[code] for code in OFFSETS if code in tags), none)
    return starts, next((tags[code] for code in COUNTS if code in tags), none)


def _check_data(path: Path, number: int, tags: Tags, shape: PageShape, layout: _Layout) -> None:
    where = f"the image of page {number + 1} of the TIFF"
    starts, lengths = _pieces(tags)
    if starts.size == 0 or starts.size != lengths.size:
        raise damaged(path, f"{where} has no address")
    # A piece of no bytes would be decoded as zeros, without a word.
    if np.any(starts <= 0) or np.any(lengths <= 0):
        raise damaged(path, f"{where} was never written, or only in part")
    if np.any(lengths > layout.size - starts):
        raise _cut_off(path, where, layout.size)
    needed = shape.height * (shape.width * shape.bits * shape.n_values // 8)
    if _value(tags, COMPRESSION, 1) == 1 and lengths.sum() < needed:
        raise damaged(path, f"{where} has {lengths.sum():,} of its {needed:,} bytes")


def _start_of_one_piece(tags: Tags) -> int | None:
    starts, lengths = _pieces(tags)
    if _value(tags, COMPRESSION, 1) != 1 or OFFSETS[0] not in tags:
        return None
    return int(starts[0]) if np.all(starts[:-1] + lengths[:-1] == starts[1:]) else None


def _cut_off(path: Path, where: str, size: int) -> InputError:
    return damaged(path, f"the file is cut off: {where} lies beyond its end, at {size:,} bytes")
