"""The TIFF family: OME-TIFF, stacks with an ImageJ description, plain TIFF and BigTIFF."""

from __future__ import annotations

import json
import math
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from glidefit.errors import InputError
from glidefit.reading.complaints import contradictory
from glidefit.reading.film import Film, choose, planes_in_time
from glidefit.reading.ome_planes import AXES
from glidefit.reading.ome_tiff import open_ome_tiff
from glidefit.reading.tiff_frames import Stack, film_of, heard
from glidefit.reading.tiff_pages import Pages, common_shape, pixel_type, scan_pages
from glidefit.reading.tiff_series import (
    Header,
    block_start,
    imagej_calibration,
    imagej_series,
    plain_calibration,
    plain_series,
    series_name,
)

if TYPE_CHECKING:
    import tifffile

_FOREIGN = ("lsm", "stk", "fluoview")  # kinds of TIFF that order their pages in a way of their own


def open_tiff(path: Path, *, channel: int | None, position: int | None) -> Film:
    """Check a TIFF file and find the frames of one channel and position in it.

    Raises
    ------
    InputError
        When the file is damaged, is no video, or a choice is missing.
    """
    pages = scan_pages(path)
    header = _read_header(path, pages)
    if header.ome_xml is not None:
        return open_ome_tiff(path, header.ome_xml, pages, channel=channel, position=position)
    if header.imagej is not None:
        series = [imagej_series(path, header.imagej, pages)]
        calibration = imagej_calibration(path, header)
    else:
        series = plain_series(path, header, pages)
        calibration = plain_calibration(path, header)
    names = [series_name(one, pages) for one in series]
    chosen = series[choose(path, "position", position, count=len(series), names=names)]
    shape = common_shape(path, [pages.shapes[k] for k in np.unique(pages.shape_of[chosen.pages])])
    start = block_start(path, chosen, pages, shape) if chosen.is_block else None
    planes, notes = planes_in_time(path, chosen.sizes, channel=channel)
    stack = Stack(
        files=(path,),
        file_of=np.zeros(planes.size, dtype=np.int64),
        page_of=planes if chosen.is_block else chosen.pages[planes],
        shape=(shape.height, shape.width),
        dtype=pixel_type(path, shape).newbyteorder(pages.order),
        block_start=start,
    )
    return film_of(path, stack, calibration=calibration, notes=notes)


def _read_header(path: Path, pages: Pages) -> Header:
    import tifffile

    with heard(str(path)), tifffile.TiffFile(path) as tif:
        if any(getattr(tif, f"is_{kind}") for kind in _FOREIGN):
            raise InputError(
                str(path),
                "a TIFF of a maker's own kind, which orders its pages in its own way",
                expected="OME-TIFF, an ImageJ stack, or plain TIFF",
                remedy="Export the recording as OME-TIFF.",
            )
        first = tif.pages.first
        is_ome = first.description.rstrip().endswith("OME>")
        is_imagej = not is_ome and bool(tif.is_imagej)
        unit = first.tags.get(296)
        return Header(
            ome_xml=first.description if is_ome else None,
            imagej=tif.imagej_metadata if is_imagej else None,
            pixel=(_inverse(first.tags.get(282)), _inverse(first.tags.get(283))),
            resolution_unit=2 if unit is None else int(unit.value),
            runs=() if is_ome or is_imagej else _described_runs(path, tif, pages.n_pages),
        )


def _inverse(tag: Any) -> float | None:
    """Pixel size from a resolution, None if there is none."""
    numerator, denominator = tag.value if tag is not None else (0, 0)
    return denominator / numerator if numerator and denominator else None


def _described_runs(
    path: Path, tif: tifffile.TiffFile, n_pages: int
) -> tuple[tuple[int, Mapping[str, int]], ...]:
    """First page and axes of the stacks that tell their shape as JSON; none if a page does not."""
    runs = []
    number = 0
    while number < n_pages:
        page = tif.pages[number].aspage()
        if not (page.description.startswith("{") and '"shape":' in page.description):
            return ()
        sizes = _described_sizes(path, json.loads(page.description), page.shape)
        runs.append((number, sizes))
        number += math.prod(sizes.values())
    return tuple(runs)


def _described_sizes(
    path: Path, description: Mapping[str, Any], page_shape: tuple[int, ...]
) -> dict[str, int]:
    """Length of each axis but those of a page, the slowest first."""
    shape = tuple(int(size) for size in description["shape"])
    letters = str(description.get("axes", ""))
    letters = letters if len(letters) == len(shape) else "Q" * len(shape)
    while shape[-1:] == (1,) and shape[-len(page_shape) :] != page_shape:
        shape = shape[:-1]
    outer = shape[: -len(page_shape)]
    if outer + tuple(page_shape) != shape or math.prod(outer) < 1:
        raise contradictory(
            path, f"its description, shape {shape}, does not fit its pages {page_shape}"
        )
    return {
        letter if letter in AXES else f"axis {k}": size
        for k, (letter, size) in enumerate(zip(letters, outer, strict=False))
    }
