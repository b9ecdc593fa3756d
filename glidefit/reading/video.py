"""Videos: what a file says of itself, and its frames one at a time."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from glidefit.errors import InputError
from glidefit.reading.complaints import damaged
from glidefit.reading.film import Film, check_length

_TIFF_SUFFIXES = frozenset({".tif", ".tiff", ".btf", ".tf8"})
VIDEO_SUFFIXES: frozenset[str] = _TIFF_SUFFIXES | {".nd2"}


@dataclass(frozen=True, slots=True, kw_only=True)
class VideoFacts:
    """What a video file says of itself.

    Parameters
    ----------
    n_frames : int
        Of the chosen channel and position, 3 or more.
    height_px, width_px : int
        Size of a frame.
    dtype : str
        Type of a pixel, for example "uint16".
    pixel_um : float or None
        Side of a pixel in µm; None when the file carries no believable one.
    frame_s : float or None
        Frame interval in s; None when the file carries none.
    times_s : (n_frames,) array or None
        Start of each frame in s after that of the first, when the file records real times.
    exposure_s : float or None
        Exposure in s, never longer than `frame_s`.
    notes : tuple of str
        Sentences for the user on what is doubtful.
    """

    n_frames: int
    height_px: int
    width_px: int
    dtype: str
    pixel_um: float | None
    frame_s: float | None
    times_s: NDArray[np.float64] | None
    exposure_s: float | None
    notes: tuple[str, ...]

    def __post_init__(self) -> None:
        if self.times_s is not None and self.times_s.shape != (self.n_frames,):
            raise ValueError(f"{self.times_s.size} times for {self.n_frames} frames")


def read_facts(
    path: Path, *, channel: int | None = None, position: int | None = None
) -> VideoFacts:
    """What a video file says of itself; its first frame is decoded, to see that this can be done.

    Parameters
    ----------
    path : Path
        A file with one of VIDEO_SUFFIXES.
    channel, position : int, optional
        Which one to take, counted from 0; needed if the file has several.

    Raises
    ------
    InputError
        When the file is missing, damaged, or no video of 3 or more grey frames; when it has
        several channels or positions and none is chosen; when its pixels are not square.
    """
    film = _open(path, channel=channel, position=position)
    for _ in _checked(film, 0, 0):
        pass
    return VideoFacts(
        n_frames=film.n_frames,
        height_px=film.height_px,
        width_px=film.width_px,
        dtype=film.dtype.name,
        pixel_um=film.calibration.pixel_um,
        frame_s=film.calibration.frame_s,
        times_s=film.calibration.times_s,
        exposure_s=film.calibration.exposure_s,
        notes=film.notes + film.calibration.notes,
    )


def read_frames(
    path: Path,
    *,
    first: int = 0,
    last: int | None = None,
    channel: int | None = None,
    position: int | None = None,
) -> Iterator[NDArray[Any]]:
    """Frames of a video in turn, one at a time in memory.

    The file is checked at the call, each frame when it is read.

    Parameters
    ----------
    path : Path
        A file with one of VIDEO_SUFFIXES.
    first, last : int, optional
        First and last frame, both included, counted from 0; `last` None is the end.
    channel, position : int, optional
        Which one to take, counted from 0; needed if the file has several.

    Yields
    ------
    (height, width) array
        In the type of the file.

    Raises
    ------
    InputError
        As `read_facts`; when the file has no such frames; at a frame that cannot be read.
    """
    film = _open(path, channel=channel, position=position)
    end = film.n_frames - 1 if last is None else last
    if not 0 <= first <= end < film.n_frames:
        raise InputError(
            str(path),
            f"frames {first} to {end} are asked for, the file has {film.n_frames}",
            expected=f"frames within 0 to {film.n_frames - 1}, the first not after the last",
            remedy="Correct the columns `first_frame` and `last_frame` of the assay sheet.",
        )
    return _checked(film, first, end)


def _open(path: Path, *, channel: int | None, position: int | None) -> Film:
    suffix = path.suffix.lower()
    if suffix not in VIDEO_SUFFIXES:
        raise InputError(
            str(path),
            f"a file of the kind '{suffix or 'without a suffix'}'",
            expected=f"a video: {', '.join(sorted(VIDEO_SUFFIXES))}",
            remedy="Export the recording as OME-TIFF.",
        )
    try:
        _check_file(path)
        film = _open_as(suffix, path, channel=channel, position=position)
    except OSError as error:
        raise damaged(path, f"the file cannot be read ({error.strerror or error})") from error
    check_length(path, film.n_frames)
    return film


def _check_file(path: Path) -> None:
    if path.is_file():
        return
    raise InputError(
        str(path),
        "this is no file, but a folder" if path.is_dir() else "there is no such file",
        expected="a video file",
        remedy="Correct the column `recording` of the assay sheet, or put the file there.",
    )


def _open_as(suffix: str, path: Path, *, channel: int | None, position: int | None) -> Film:
    if suffix in _TIFF_SUFFIXES:
        from glidefit.reading.tiff import open_tiff

        return open_tiff(path, channel=channel, position=position)
    from glidefit.reading.nd2_video import open_nd2

    return open_nd2(path, channel=channel, position=position)


def _checked(film: Film, first: int, last: int) -> Iterator[NDArray[Any]]:
    for frame, image in enumerate(film.frames(first, last), start=first):
        where = f"{film.path}, frame {frame}"
        if image.shape != (film.height_px, film.width_px) or image.dtype != film.dtype:
            raise damaged(
                where,
                f"{' × '.join(map(str, image.shape[::-1]))} pixels of {image.dtype}, unlike the"
                f" {film.width_px} × {film.height_px} of {film.dtype} before",
            )
        if image.dtype.kind == "f" and not np.isfinite(image).all():
            n_bad = int((~np.isfinite(image)).sum())
            raise InputError(
                where,
                f"{n_bad} pixel{'s' if n_bad > 1 else ''} without a number (NaN or infinite)",
                expected="a grey value in every pixel",
                remedy="Crop the empty border, or fill it with the background, and save again.",
            )
        yield image
