"""Recordings as files: track tables, OME-TIFF videos and the sheet that lists them."""

from __future__ import annotations

import csv
import io
import itertools
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from glidefit.tracks import Tracks


def track_table_text(tracks: Tracks) -> str:
    """A track table as CSV, positions to 0.1 nm, times to 10 µs."""
    table = tracks.to_frame()
    table["time_s"] = table["time_s"].round(5)
    for name in ("x_um", "y_um", "heading_rad", "length_um"):
        if name in table:
            table[name] = table[name].round(4)
    text: str = table.to_csv(index=False, lineterminator="\r\n")
    return text


def sheet_text(rows: Sequence[Mapping[str, str]]) -> str:
    """An assay sheet as CSV: all columns that any row has, in the order of their appearance."""
    names = list(dict.fromkeys(name for row in rows for name in row))
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\r\n")
    writer.writerow(names)
    writer.writerows([row.get(name, "") for name in names] for row in rows)
    return out.getvalue()


def write_video(
    path: Path,
    frames: Iterable[NDArray[np.uint16]],
    *,
    n_frames: int,
    pixel_um: float,
    frame_s: float,
    exposure_s: float,
) -> None:
    """Write frames one by one as OME-TIFF with its calibration; the same frames, the same bytes."""
    import tifffile

    metadata: dict[str, Any] = {
        "axes": "TYX",
        "PhysicalSizeX": pixel_um,
        "PhysicalSizeXUnit": "µm",
        "PhysicalSizeY": pixel_um,
        "PhysicalSizeYUnit": "µm",
        "TimeIncrement": frame_s,
        "TimeIncrementUnit": "s",
        "UUID": "urn:uuid:00000000-0000-0000-0000-000000000000",
        "Plane": {"ExposureTime": [exposure_s] * n_frames, "ExposureTimeUnit": ["s"] * n_frames},
    }
    iterator = iter(frames)
    first = next(iterator)
    with tifffile.TiffWriter(path, ome=True) as writer:
        writer.write(
            itertools.chain([first], iterator),
            shape=(n_frames, *first.shape),
            dtype=first.dtype,
            compression="zlib",
            predictor=True,
            photometric="minisblack",
            metadata=metadata,
            software="glidefit",
        )
