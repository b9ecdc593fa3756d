"""ND2 files, by the optional package nd2."""

from __future__ import annotations

import math
from collections.abc import Iterator
from functools import partial
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from glidefit.errors import InputError
from glidefit.reading.calibration import Calibration, clock, pixel_size
from glidefit.reading.complaints import colour, damaged, undecodable
from glidefit.reading.film import Film, choose, planes_in_time


def open_nd2(path: Path, *, channel: int | None, position: int | None) -> Film:
    """Find the frames of one channel and position of an ND2 file.

    Raises
    ------
    InputError
        When the package nd2 is missing, or the file is damaged, is no video, or a choice is
        missing.
    """
    nd2 = _package(path)
    try:
        with nd2.ND2File(path) as file:
            return _film(path, file, channel=channel, position=position)
    except InputError:
        raise
    except Exception as error:
        raise undecodable(path, error) from error


def _package(path: Path) -> Any:
    try:
        import nd2
    except ImportError as error:
        raise InputError(
            str(path),
            "an ND2 file, and the package that reads it is not installed",
            expected="the optional package nd2",
            remedy="Install it with: pip install 'glidefit[nd2]'. Or export the recording as"
            " OME-TIFF.",
        ) from error
    return nd2


def _film(path: Path, file: Any, *, channel: int | None, position: int | None) -> Film:
    if file.is_rgb:
        raise colour(path, int(file.sizes.get("S", 3)))
    sizes = {axis: n for axis, n in file.sizes.items() if axis not in "YXCP"}
    n_channels = file.sizes.get("C", 1)
    field = choose(path, "position", position, count=file.sizes.get("P", 1))
    chosen = choose(path, "channel", channel, count=n_channels)
    _, notes = planes_in_time(path, sizes or {"T": 1}, channel=None)
    sequence = np.array(
        [k for k, place in enumerate(file.loop_indices or [{}]) if place.get("P", 0) == field]
    )
    return Film(
        path=path,
        n_frames=sequence.size,
        height_px=file.sizes["Y"],
        width_px=file.sizes["X"],
        dtype=np.dtype(file.dtype).newbyteorder("="),
        calibration=_calibration(path, file, sequence, chosen),
        notes=notes,
        frames=partial(_frames, path, sequence, chosen if n_channels > 1 else None),
    )


def _calibration(path: Path, file: Any, sequence: NDArray[np.int64], channel: int) -> Calibration:
    size = file.voxel_size()
    pixel_um, notes = pixel_size(path, size.x, size.y, unit_x="µm", unit_y="µm")
    times_ms = [file.frame_metadata(int(k)).channels[channel].time.relativeTimeMs for k in sequence]
    unknown = np.full(sequence.size, math.nan)
    timing = clock(np.array(times_ms, dtype=float) / 1000, unknown, stated_s=None)
    return Calibration(
        pixel_um=pixel_um,
        frame_s=timing.frame_s,
        times_s=timing.times_s,
        notes=notes + timing.notes,
    )


def _frames(
    path: Path, sequence: NDArray[np.int64], channel: int | None, first: int, last: int
) -> Iterator[NDArray[Any]]:
    with _package(path).ND2File(path) as file:
        for frame in range(first, last + 1):
            where = f"{path}, frame {frame}"
            try:
                image = np.array(file.read_frame(int(sequence[frame])))
            except Exception as error:
                raise undecodable(where, error) from error
            image = image if channel is None else image[channel]
            # The package returns zeros for a frame that is not in the file; no camera does.
            if not image.any():
                raise damaged(where, "this frame is missing")
            yield image
