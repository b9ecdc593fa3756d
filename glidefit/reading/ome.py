"""OME-XML: the fields of view of an OME-TIFF, their scale and their clock.

Attributes and their defaults are those of the OME schema 2016-06. Older versions of it differ in
nothing that is read here.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from pathlib import Path, PurePosixPath, PureWindowsPath
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from glidefit.errors import InputError
from glidefit.reading.calibration import (
    Calibration,
    Notes,
    clock,
    frame_interval,
    pixel_size,
    time_in_s,
)
from glidefit.reading.complaints import contradictory, shown

if TYPE_CHECKING:
    from xml.etree.ElementTree import Element

LENGTH_UNIT, TIME_UNIT = "µm", "s"  # where the file names none
MOST_OF_ANYTHING = 10_000_000  # times, slices, channels, planes, pages


def read_ome(path: Path, xml: str) -> Element:
    """Root of the OME-XML of a file, checked to be harmless.

    Raises
    ------
    InputError
        When it is no XML, defines entities, belongs to another file, or names files elsewhere.
    """
    from defusedxml.common import DefusedXmlException
    from defusedxml.ElementTree import ParseError, fromstring

    try:
        root: Element = fromstring(xml, forbid_dtd=True)
    except DefusedXmlException as error:
        raise _unsafe(path, "its OME-XML defines entities, which can do harm") from error
    except (ParseError, ValueError) as error:
        raise contradictory(path, f"its OME-XML cannot be read ({error})") from error
    for other in children(root, "BinaryOnly"):
        raise InputError(
            str(path),
            "one part of a set of files, which is described in"
            f" '{shown(other.get('MetadataFile', 'another file'))}'",
            expected="the file that describes the set",
            remedy="Name that file in the assay sheet, or export the recording as one OME-TIFF.",
        )
    for name, _ in sorted(member_files(root)):
        if _leaves_folder(name):
            raise _unsafe(path, f"its OME-XML refers to '{name}', outside of the file's folder")
    return root


def children(element: Element, name: str) -> Iterator[Element]:
    """Children of a name, whatever the version of the schema."""
    return (child for child in element if _local_name(child) == name)


def member_files(root: Element) -> set[tuple[str, str]]:
    """Name and identifier of all files that hold planes, empty as far as they are not given."""
    uuids = (element for element in root.iter() if _local_name(element) == "UUID")
    return {(uuid.get("FileName", ""), (uuid.text or "").strip()) for uuid in uuids}


def whole_number(path: Path, element: Element, key: str, *, default: int, least: int = 0) -> int:
    """Value of an attribute that counts something; InputError if it does not."""
    text = element.get(key)
    if text is None:
        return default
    digits = text.strip()
    if not (digits.isascii() and digits.isdigit() and len(digits) < 10):
        raise contradictory(path, f"its OME-XML says {key}='{text[:40]}'")
    if not least <= int(digits) <= MOST_OF_ANYTHING:
        raise contradictory(path, f"its OME-XML says {key}='{text}'")
    return int(digits)


def fields_of_view(path: Path, root: Element) -> list[tuple[str, Element]]:
    """Name and ``Pixels`` element of each field of view; InputError if there is none."""
    found = [
        (image.get("Name", ""), pixels)
        for image in children(root, "Image")
        for pixels in children(image, "Pixels")
    ]
    if not found:
        raise contradictory(path, "its OME-XML describes no image")
    return found


def ome_calibration(path: Path, pixels: Element, places: NDArray[np.intp]) -> Calibration:
    """Scale and clock of the frames of one channel.

    Parameters
    ----------
    path : Path
        The file, for the message.
    pixels : Element
        The field of view.
    places : (n, 3) array of int
        Time, slice and channel of each frame.

    Raises
    ------
    InputError
        For pixels that are not square.
    """
    x, y = (_number(pixels, f"PhysicalSize{axis}") for axis in "XY")
    unit_x, unit_y = (pixels.get(f"PhysicalSize{axis}Unit", LENGTH_UNIT) for axis in "XY")
    pixel_um, notes = pixel_size(path, x, y, unit_x=unit_x, unit_y=unit_y)
    stated_s, more = frame_interval(
        _number(pixels, "TimeIncrement"), unit=pixels.get("TimeIncrementUnit", TIME_UNIT)
    )
    times, exposures, unread = _plane_times(path, pixels, places)
    timing = clock(times, exposures, stated_s=stated_s)
    return Calibration(
        pixel_um=pixel_um,
        frame_s=timing.frame_s,
        times_s=timing.times_s,
        exposure_s=timing.exposure_s,
        notes=notes + more + unread + timing.notes,
    )


def _plane_times(
    path: Path, pixels: Element, places: NDArray[np.intp]
) -> tuple[NDArray[np.float64], NDArray[np.float64], Notes]:
    """Start and exposure of each frame in s, NaN where there is none."""
    frame_at = {tuple(place): frame for frame, place in enumerate(places.tolist())}
    times, exposures = np.full((2, len(places)), np.nan)
    unknown: dict[str, None] = {}
    for plane in children(pixels, "Plane"):
        place = tuple(whole_number(path, plane, f"The{axis}", default=0) for axis in "TZC")
        frame = frame_at.get(place)
        if frame is None:
            continue
        for values, key in ((times, "DeltaT"), (exposures, "ExposureTime")):
            value, unit = _number(plane, key), plane.get(f"{key}Unit", TIME_UNIT)
            scale = time_in_s(unit)
            if scale is None:
                unknown[f"{key} in units of '{shown(unit)}' is no time, it is not used"] = None
            elif value is not None:
                values[frame] = value * scale
    return times, exposures, tuple(unknown)


def _number(element: Element, key: str) -> float | None:
    """Value of an attribute; NaN, which is never believed, where it is not a number."""
    text = element.get(key)
    if text is None:
        return None
    try:
        return float(text)
    except ValueError:
        return math.nan


def _local_name(element: Element) -> str:
    return str(element.tag).rpartition("}")[2]


def _leaves_folder(name: str) -> bool:
    windows, posix = PureWindowsPath(name), PurePosixPath(name)
    anchored = windows.drive or windows.root or posix.root
    return bool(anchored) or ".." in windows.parts or ".." in posix.parts


def _unsafe(path: Path, found: str) -> InputError:
    return InputError(
        str(path),
        shown(found),
        expected="plain OME-XML, and all files of a set in one folder",
        remedy="Open no file from a source that you do not trust; export the recording again.",
    )
