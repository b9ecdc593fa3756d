"""What every video format comes down to: frames of one channel in one field, in order of time."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from glidefit.errors import InputError
from glidefit.reading.calibration import Calibration
from glidefit.reading.complaints import shown

FEWEST_FRAMES = 3  # two positions have a displacement, but no turn


@dataclass(frozen=True, slots=True, kw_only=True)
class Film:
    """An opened video: its frames are counted and checked, none is read yet."""

    path: Path
    n_frames: int
    height_px: int
    width_px: int
    dtype: np.dtype[Any]
    calibration: Calibration
    notes: tuple[str, ...]
    frames: Callable[[int, int], Iterator[NDArray[Any]]]  # first and last frame, both included


def choose(
    path: Path, what: str, wanted: int | None, *, count: int, names: Sequence[str] = ()
) -> int:
    """The wanted channel or position, which may be left open only if there is but one.

    Parameters
    ----------
    path : Path
        The file, for the message.
    what : {"channel", "position"}
        The column of the assay sheet.
    wanted : int or None
        What the sheet says, counted from 0.
    count : int
        How many the file has.
    names : sequence of str
        What the file calls them, if it does.

    Raises
    ------
    InputError
        When there are several and none was chosen, or the chosen one does not exist.
    """
    if wanted is None and count == 1:
        return 0
    if wanted is not None and 0 <= wanted < count:
        return wanted
    many = f"{count} {what}" + ("s" if count > 1 else "")
    if any(names):
        listed = [f"{k}: {shown(name)}" for k, name in enumerate(names[:8])]
        many += f" ({', '.join(listed)}{', …' if count > 8 else ''})"
    number = f"a number from 0 to {count - 1}" if count > 1 else "0, or leave it empty"
    if wanted is None:
        raise InputError(
            str(path),
            many,
            expected=f"one {what} to analyse",
            remedy=f"Fill in the column `{what}` of the assay sheet with {number}.",
        )
    raise InputError(
        str(path),
        f"{what} {wanted} is asked for, the file has {many}",
        expected=f"{number} ({what}s count from 0)",
        remedy=f"Correct the column `{what}` of the assay sheet.",
    )


def planes_in_time(
    path: Path,
    sizes: Mapping[str, int],
    *,
    channel: int | None,
    channel_names: Sequence[str] = (),
) -> tuple[NDArray[np.intp], tuple[str, ...]]:
    """Where the frames of one channel are among all planes of a field.

    Parameters
    ----------
    path : Path
        The file, for the message.
    sizes : mapping of str to int
        Length of each axis by its letter, the slowest first; C is the channel, T time, Z focus,
        any other letter an axis without a name.
    channel : int or None
        The wanted channel, counted from 0.

    Returns
    -------
    (n,) array of int
        Numbers of the planes, in order of time.
    tuple of str
        Sentences for the user.
    """
    planes: NDArray[np.intp] = np.arange(math.prod(sizes.values())).reshape(tuple(sizes.values()))
    long = [axis for axis, size in sizes.items() if size > 1 and axis != "C"]
    if len(long) > 1:
        raise _too_many_axes(path, {axis: sizes[axis] for axis in long})
    n_channels = sizes.get("C", 1)
    if not long and n_channels >= FEWEST_FRAMES and channel is None:
        raise _no_time(path, n_channels)
    chosen = choose(path, "channel", channel, count=n_channels, names=channel_names)
    if "C" in sizes:
        planes = np.take(planes, chosen, axis=list(sizes).index("C"))
    if long == ["Z"]:
        return planes.ravel(), (
            f"the file calls its {planes.size} frames slices of a Z stack; they are read as time",
        )
    return planes.ravel(), ()


def _too_many_axes(path: Path, sizes: Mapping[str, int]) -> InputError:
    names = {"T": "times", "Z": "slices"}
    found = " × ".join(f"{size} {names.get(axis, 'planes')}" for axis, size in sizes.items())
    return InputError(
        str(path),
        f"a stack of {found}",
        expected="one plane at each time",
        remedy="Save one focal plane, or a projection of them, as a stack over time.",
    )


def _no_time(path: Path, n_channels: int) -> InputError:
    return InputError(
        str(path),
        f"{n_channels} channels of a single frame",
        expected=f"a video of {FEWEST_FRAMES} or more frames",
        remedy="If the channels are really moments in time, save the stack again with time as"
        " its axis.",
    )


def check_length(path: Path, n_frames: int) -> None:
    """Raise InputError for a video too short to show a motion."""
    if n_frames >= FEWEST_FRAMES:
        return
    raise InputError(
        str(path),
        f"{n_frames} frame" + ("s" if n_frames != 1 else ""),
        expected=f"a video of {FEWEST_FRAMES} or more frames",
        remedy="Give the whole recording, or take the row out of the assay sheet.",
    )
