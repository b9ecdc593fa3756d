"""Which pages of a TIFF without OME-XML form a stack, and the scale and clock they come with."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from glidefit.errors import InputError
from glidefit.reading.calibration import Calibration, Notes, frame_interval, pixel_size
from glidefit.reading.complaints import contradictory
from glidefit.reading.ome_planes import AXES
from glidefit.reading.tiff_pages import Pages, PageShape

_UNIT_OF_RESOLUTION = {3: "cm", 4: "mm", 5: "µm"}  # 1 is none and 2 the inch of printers


@dataclass(frozen=True, slots=True, kw_only=True)
class Header:
    """What the first page of a TIFF says in words."""

    ome_xml: str | None
    imagej: Mapping[str, Any] | None
    pixel: tuple[float | None, float | None]  # width and height in units of resolution
    resolution_unit: int
    runs: tuple[tuple[int, Mapping[str, int]], ...]  # first page and axes of each described stack


@dataclass(frozen=True, slots=True, kw_only=True)
class Series:
    """Pages that belong together; `sizes` has the length of each axis, the slowest first."""

    sizes: Mapping[str, int]
    pages: NDArray[np.int64]
    is_block: bool = False  # only the first page has a directory


def plain_series(path: Path, header: Header, pages: Pages) -> list[Series]:
    """The stacks of a file: as its descriptions say, or else all pages of one shape.

    A file that was written one page at a time describes each page as a stack of its own; its pages
    are one stack over time.
    """
    described = [(start, sizes) for start, sizes in header.runs if math.prod(sizes.values()) > 1]
    if described:
        return [_described_series(path, start, sizes, pages) for start, sizes in header.runs]
    numbers = np.arange(pages.n_pages)
    if not pages.is_small_copy.all():
        numbers = numbers[~pages.is_small_copy]
    alike = (numbers[pages.shape_of[numbers] == k] for k in range(len(pages.shapes)))
    return [Series(sizes={"T": group.size}, pages=group) for group in alike if group.size]


def _described_series(path: Path, start: int, sizes: Mapping[str, int], pages: Pages) -> Series:
    n_planes = math.prod(sizes.values())
    if pages.n_pages - start == 1 < n_planes:
        return Series(sizes=sizes, pages=np.array([start]), is_block=True)
    if pages.n_pages - start < n_planes:
        raise too_few(path, pages.n_pages - start, n_planes)
    return Series(sizes=sizes, pages=start + np.arange(n_planes))


def imagej_series(path: Path, metadata: Mapping[str, Any], pages: Pages) -> Series:
    """The one stack of a file with an ImageJ description; InputError if it does not fit."""
    keys = {"C": "channels", "Z": "slices", "T": "frames"}
    order = str(metadata.get("order", "czt")).upper()
    slow_first = order[::-1] if sorted(order) == sorted(AXES) else "TZC"
    sizes = {axis: _count(path, metadata, keys[axis]) for axis in slow_first}
    n_images = _count(path, metadata, "images")
    if math.prod(sizes.values()) == 1:
        sizes["T"] = max(n_images, pages.n_pages)
    n_planes = math.prod(sizes.values())
    if pages.n_pages == 1 < n_planes:
        return Series(sizes=sizes, pages=np.array([0]), is_block=True)
    if pages.n_pages < max(n_planes, n_images):
        raise too_few(path, pages.n_pages, max(n_planes, n_images))
    if pages.n_pages > n_planes:
        raise contradictory(
            path,
            f"its description announces {n_planes} frames, the file has {pages.n_pages}",
        )
    return Series(sizes=sizes, pages=np.arange(n_planes))


def _count(path: Path, metadata: Mapping[str, Any], key: str) -> int:
    value = metadata.get(key, 1)
    if type(value) is not int or value < 1:
        raise contradictory(path, f"its description says {key}={value}")
    return value


def too_few(path: Path, n_found: int, n_announced: int) -> InputError:
    """The error of a file with fewer frames than its description announces."""
    return contradictory(path, f"{n_found} of the {n_announced} frames that it announces")


def series_name(series: Series, pages: Pages) -> str:
    """Number and size of its frames, to tell one stack from another."""
    shape = pages.shapes[pages.shape_of[series.pages[0]]]
    n_planes = math.prod(series.sizes.values())
    return f"{n_planes} × {shape.width} × {shape.height} px"


def block_start(path: Path, series: Series, pages: Pages, shape: PageShape) -> int:
    """First byte of frames that follow each other without directories.

    Programs write stacks so when the file outgrows the addresses of a classic TIFF.
    """
    n_planes = math.prod(series.sizes.values())
    start = pages.first_data if series.pages[0] == 0 else None
    if start is None or shape.bits not in (8, 16, 32, 64):
        raise too_few(path, 1, n_planes)
    frame_bytes = shape.height * shape.width * shape.bits // 8
    n_whole = (pages.size - start) // frame_bytes
    if n_whole < n_planes:
        raise too_few(path, n_whole, n_planes)
    return start


def imagej_calibration(path: Path, header: Header) -> Calibration:
    """Scale from the resolution in px per unit of the description, clock from the description."""
    metadata = header.imagej or {}
    unit = str(metadata.get("unit", ""))
    pixel_um: float | None = None
    notes: Notes = ()
    if unit:
        x, y = header.pixel
        unit_y = str(metadata.get("yunit", unit))
        pixel_um, notes = pixel_size(path, x, y, unit_x=unit, unit_y=unit_y)
    interval, rate = (_positive(metadata.get(key)) for key in ("finterval", "fps"))
    frame_s, more = frame_interval(interval, unit=str(metadata.get("tunit", "s")))
    if interval is None and rate is not None:
        frame_s, more = frame_interval(1 / rate, unit="s")
        more += (
            f"the frame interval comes from {rate:g} frames per second, which may be the speed of"
            " playback",
        )
    return Calibration(pixel_um=pixel_um, frame_s=frame_s, notes=notes + more)


def _positive(value: object) -> float | None:
    return float(value) if isinstance(value, int | float) and 0 < value < 1e300 else None


def plain_calibration(path: Path, header: Header) -> Calibration:
    """Scale from a resolution per cm, mm or µm; per inch it is meant for printers."""
    unit = _UNIT_OF_RESOLUTION.get(header.resolution_unit)
    x, y = header.pixel
    if unit is None or x == y == 1:
        return Calibration()
    pixel_um, notes = pixel_size(path, x, y, unit_x=unit, unit_y=unit)
    return Calibration(pixel_um=pixel_um, notes=notes)
