"""Opens an OME-TIFF, of one file or of a set."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from glidefit.reading.calibration import Notes
from glidefit.reading.complaints import contradictory
from glidefit.reading.film import Film, choose, planes_in_time
from glidefit.reading.ome import fields_of_view, ome_calibration, read_ome, whole_number
from glidefit.reading.ome_planes import NOWHERE, FileSet, PlaneTable, locate_planes
from glidefit.reading.tiff_frames import Stack, film_of
from glidefit.reading.tiff_pages import Pages, PageShape, common_shape, pixel_type, scan_pages
from glidefit.reading.tiff_series import too_few

if TYPE_CHECKING:
    from xml.etree.ElementTree import Element


def open_ome_tiff(
    path: Path, xml: str, pages: Pages, *, channel: int | None, position: int | None
) -> Film:
    """Find the frames of one channel and position by the OME-XML of a file.

    Parameters
    ----------
    path : Path
        The file that was named.
    xml : str
        Its OME-XML.
    pages : Pages
        Its pages.
    channel, position : int or None
        What the assay sheet says, counted from 0.

    Raises
    ------
    InputError
        When a file of the set is missing or damaged, the metadata contradict the pages, or a
        choice is missing.
    """
    root = read_ome(path, xml)
    files = FileSet(path, root)
    pixels, here = _choose_field(files, fields_of_view(path, root), position)
    scans = {path: pages}

    def scan(file: Path) -> Pages:
        if file not in scans:
            scans[file] = scan_pages(file)
        return scans[file]

    table = locate_planes(files, pixels, n_pages=lambda file: scan(file).n_pages)
    planes, as_time = planes_in_time(
        path, table.sizes, channel=channel, channel_names=table.channel_names
    )
    planes, stopped = _recorded(path, table, planes)
    shape = _shape(path, table, planes, scan)
    _check_size(path, pixels, shape)
    stack = Stack(
        files=table.files,
        file_of=table.file_of.ravel()[planes],
        page_of=table.page_of.ravel()[planes],
        shape=(shape.height, shape.width),
        dtype=pixel_type(path, shape),
    )
    places = np.stack(np.unravel_index(planes, table.file_of.shape), axis=1)
    calibration = ome_calibration(path, pixels, places)
    return film_of(path, stack, calibration=calibration, notes=here + as_time + stopped)


def _choose_field(
    files: FileSet, fields: list[tuple[str, Element]], position: int | None
) -> tuple[Element, Notes]:
    """The wanted field of view, or the only one whose planes are in the named file."""
    notes: Notes = ()
    if position is None and len(fields) > 1:
        here = [k for k, (_, pixels) in enumerate(fields) if files.has_planes_of(pixels)]
        if len(here) == 1:
            position = here[0]
            notes = (f"position {position} of the {len(fields)} of its set is in this file",)
    names = [name for name, _ in fields]
    chosen = choose(files.path, "position", position, count=len(fields), names=names)
    return fields[chosen][1], notes


def _recorded(
    path: Path, table: PlaneTable, planes: NDArray[np.intp]
) -> tuple[NDArray[np.intp], Notes]:
    """The frames up to the end of a recording that was stopped early."""
    missing = table.file_of.ravel()[planes] == NOWHERE
    n_recorded = int((~missing).sum())
    if missing[:n_recorded].any() or n_recorded == 0:
        raise contradictory(
            f"{path}, frame {int(np.argmax(missing))}", "its OME-XML places this frame nowhere"
        )
    if n_recorded == planes.size:
        return planes, ()
    note = f"the file announces {planes.size} frames, {n_recorded} were recorded"
    return planes[:n_recorded], (note,)


def _shape(
    path: Path, table: PlaneTable, planes: NDArray[np.intp], scan: Callable[[Path], Pages]
) -> PageShape:
    """The one shape of all frames, which must all be in their files."""
    file_of, page_of = table.file_of.ravel()[planes], table.page_of.ravel()[planes]
    shapes: dict[PageShape, None] = {}
    for k in np.unique(file_of):
        pages, wanted = scan(table.files[k]), page_of[file_of == k]
        if wanted.max() >= pages.n_pages:
            raise too_few(table.files[k], pages.n_pages, int(wanted.max()) + 1)
        shapes |= {pages.shapes[s]: None for s in np.unique(pages.shape_of[wanted])}
    return common_shape(path, list(shapes))


def _check_size(path: Path, pixels: Element, shape: PageShape) -> None:
    width = whole_number(path, pixels, "SizeX", default=shape.width)
    height = whole_number(path, pixels, "SizeY", default=shape.height)
    if (width, height) != (shape.width, shape.height):
        raise contradictory(
            path,
            f"its OME-XML announces frames of {width} × {height} px, its pages have"
            f" {shape.width} × {shape.height} px",
        )
