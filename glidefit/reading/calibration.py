"""Pixel size, frame interval, frame times and exposure as a video file states them."""

from __future__ import annotations

import math
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from glidefit.errors import InputError
from glidefit.reading.complaints import shown

SHORTEST_FRAME_S, LONGEST_FRAME_S = 1e-6, 86_400.0
LARGEST_TIME_S = 1e12  # seconds since 1970 are welcome, nonsense is not
SMALLEST_PIXEL_UM, LARGEST_PIXEL_UM = 0.001, 20.0  # below is no camera, above no microscope
SQUARE_WITHIN = 0.005  # sides of a pixel that differ by less are one size, rounded
UNEVEN_ABOVE = 0.01  # relative spread of frame intervals worth a sentence

_UM_PER_UNIT = {
    1e-6: ("pm", "picometer", "picometre"),
    1e-4: ("å", "angstrom"),
    1e-3: ("nm", "nanometer", "nanometre"),
    1.0: ("µm", "um", "micron", "micrometer", "micrometre"),
    1e3: ("mm", "millimeter", "millimetre"),
    1e4: ("cm", "centimeter", "centimetre"),
    1e5: ("dm",),
    1e6: ("m", "meter", "metre"),
    25_400.0: ("in", "inch", "inche"),  # a plural loses its s
}
_S_PER_UNIT = {
    1e-9: ("ns", "nanosecond"),
    1e-6: ("µs", "us", "µsec", "usec", "microsecond"),
    1e-3: ("ms", "msec", "millisecond"),
    1.0: ("s", "sec", "second"),
    60.0: ("min", "minute"),
    3600.0: ("h", "hr", "hour"),
    86_400.0: ("d", "day"),
}
_UM = {name: size for size, names in _UM_PER_UNIT.items() for name in names}
_S = {name: size for size, names in _S_PER_UNIT.items() for name in names}

_CAPITAL_COUNTS = {"Mm", "Ms"}  # mega, not milli

Notes = tuple[str, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Calibration:
    """What a file says of its scale and its clock; None where it says nothing believable."""

    pixel_um: float | None = None
    frame_s: float | None = None
    times_s: NDArray[np.float64] | None = None
    exposure_s: float | None = None
    notes: Notes = ()


def length_in_um(unit: str) -> float | None:
    """One such unit of length in µm, or None if it is none."""
    return _UM.get(_plain(unit))


def time_in_s(unit: str) -> float | None:
    """One such unit of time in s, or None if it is none."""
    return _S.get(_plain(unit))


def _plain(unit: str) -> str:
    r"""One spelling for all: micro sign for Greek mu and ``\u00B5``, lower case, no plural."""
    unit = unit.strip().replace("\\u00B5", "µ").replace("\\u00b5", "µ").replace("Âµ", "µ")
    unit = unit.replace("\u03bc", "µ").replace("\u212b", "å")
    unit = unit if unit in _CAPITAL_COUNTS else unit.lower()
    return unit.removesuffix("s") if len(unit) > 3 else unit


def pixel_size(
    path: Path, x: float | None, y: float | None, *, unit_x: str, unit_y: str
) -> tuple[float | None, Notes]:
    """Side of a pixel in µm, or None with the reason.

    Parameters
    ----------
    path : Path
        The file, for the message.
    x, y : float or None
        Width and height of a pixel in units of `unit_x` and `unit_y`.

    Raises
    ------
    InputError
        When pixels are not square within 0.5 %.
    """
    stated = [(side, unit) for side, unit in ((x, unit_x), (y, unit_y)) if side is not None]
    sides = []
    for side, unit in stated:
        scale = length_in_um(unit)
        if scale is None:
            return None, (f"pixel size in units of '{shown(unit)}' is no calibration",)
        sides.append(side * scale)
    if not sides:
        return None, ()
    for side in sides:
        if not SMALLEST_PIXEL_UM <= side <= LARGEST_PIXEL_UM:
            return None, (f"the file gives {side:.4g} µm per pixel, which is not believable",)
    if max(sides) > min(sides) * (1 + SQUARE_WITHIN):
        raise InputError(
            str(path),
            f"pixels of {sides[0]:.5g} µm by {sides[1]:.5g} µm",
            expected="square pixels, equal within 0.5 %",
            remedy="Rescale the video to square pixels, or correct its pixel size, and save it"
            " again.",
        )
    if all(math.isclose(side, 1.0, rel_tol=1e-9) for side in sides):
        return None, ("the file gives 1 µm per pixel, a common placeholder, and it is not used",)
    return sum(sides) / len(sides), ()


def frame_interval(value: float | None, *, unit: str) -> tuple[float | None, Notes]:
    """Frame interval in s, or None with the reason."""
    if value is None:
        return None, ()
    scale = time_in_s(unit)
    if scale is None:
        return None, (f"a frame interval in units of '{shown(unit)}' is no calibration",)
    frame_s = value * scale
    if not SHORTEST_FRAME_S <= frame_s <= LONGEST_FRAME_S:
        return None, (f"the file gives a frame interval of {frame_s:.4g} s, not a believable one",)
    return frame_s, ()


def usable_times(times: NDArray[np.float64]) -> tuple[NDArray[np.float64] | None, Notes]:
    """Frame times from the first frame on, if all are there and increase.

    Parameters
    ----------
    times : (n,) array
        Start of each frame in s, NaN where the file has none.
    """
    n_given = int((np.abs(times) < LARGEST_TIME_S).sum())  # NaN is not smaller
    if n_given == 0 or times.size < 2:
        return None, ()
    if n_given < times.size:
        return None, (f"frame times are given for {n_given} of {times.size} frames only, not used",)
    steps = np.diff(times)
    if np.any(steps <= 0):
        frame = int(np.argmax(steps <= 0)) + 1
        return None, (f"frame times do not increase at frame {frame}, they are not used",)
    return times - times[0], ()


def interval_of_times(times_s: NDArray[np.float64]) -> tuple[float, Notes]:
    """Usual interval between frames in s, and sentences on what departs from it.

    The mean of the intervals within a factor of 1.5 of their median: a mean, because times may be
    rounded to whole ms; only those, because a dropped frame doubles an interval.
    """
    steps = np.diff(times_s)
    middle = np.median(steps)
    usual = steps[(steps < 1.5 * middle) & (steps > middle / 1.5)]
    interval = float(usual.mean()) if usual.size else float(middle)
    notes = []
    spread = float(usual.std() / interval) if usual.size else 0.0
    if spread > UNEVEN_ABOVE:
        notes.append(f"frame times vary by {100 * spread:.2g} %")
    long = np.flatnonzero(steps >= 1.5 * middle)
    if long.size:
        gaps = f"{long.size} gap" + ("s" if long.size > 1 else "")
        notes.append(f"frame times have {gaps}, the first after frame {long[0]}")
    return interval, tuple(notes)


def clock(
    times: NDArray[np.float64], exposures: NDArray[np.float64], *, stated_s: float | None
) -> Calibration:
    """Everything about time, recorded frame times preferred to the stated interval.

    Parameters
    ----------
    times, exposures : (n,) array
        Start and exposure of each frame in s, NaN where the file has none.
    stated_s : float or None
        The one interval that the file states for all frames, in s.
    """
    times_s, notes = usable_times(times)
    frame_s = stated_s
    if times_s is not None:
        frame_s, more = interval_of_times(times_s)
        notes += more
        if stated_s is not None and abs(frame_s / stated_s - 1) > UNEVEN_ABOVE:
            notes += (
                f"the file states a frame interval of {stated_s:.4g} s, but its frame times are"
                f" {frame_s:.4g} s apart; the times are used",
            )
    exposure_s, more = usual_exposure(exposures, frame_s=frame_s)
    return Calibration(frame_s=frame_s, times_s=times_s, exposure_s=exposure_s, notes=notes + more)


def usual_exposure(
    exposures: NDArray[np.float64], *, frame_s: float | None
) -> tuple[float | None, Notes]:
    """Median exposure in s, never longer than the frame interval, or None with the reason."""
    given = exposures[np.isfinite(exposures) & (exposures > 0)]
    if given.size == 0:
        return None, ()
    exposure_s = float(np.median(given))
    notes: Notes = ()
    if given.max() - given.min() > UNEVEN_ABOVE * exposure_s:
        notes = (
            f"exposures go from {given.min():.4g} to {given.max():.4g} s; the median,"
            f" {exposure_s:.4g} s, is used",
        )
    if frame_s is None or exposure_s <= frame_s:
        return exposure_s, notes
    if exposure_s <= frame_s * (1 + UNEVEN_ABOVE):  # rounding of a camera that exposes all the time
        return frame_s, notes
    return None, (
        f"the file gives an exposure of {exposure_s:.4g} s, longer than its frame interval of"
        f" {frame_s:.4g} s, and it is not used",
    )
