"""What a film of filaments truly shows, frame by frame, and as the truth that tracks are scored by.

Positions are in µm with (0, 0) the centre of the first pixel.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from glidefit.kernels.tracking_scores import TruePositions

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

_EVERY_POINT = 4  # of a contour that is kept of a body that does not count


@dataclass(frozen=True, slots=True, kw_only=True)
class FilamentTruth:
    """The n filaments of which a frame shows anything, or would if they had not blinked off."""

    filament: Ints  # (n,)
    track: Ints  # (n,) a filament that comes back into the field has a new one
    x_um: Floats  # (n,) midpoint of the contour, like the ends the mean over the exposure
    y_um: Floats
    head_x_um: Floats
    head_y_um: Floats
    tail_x_um: Floats
    tail_y_um: Floats
    length_um: Floats  # of the whole contour
    heading_rad: Floats  # direction of the contour at its midpoint, towards the head
    cut: Bools  # by the edge of the field, or so near that nobody could tell
    stuck: Bools
    bundled: Bools
    dark: Bools  # blinked off
    overlapped: Bools  # crosses or touches another filament that shines
    contour_offset: Ints  # (n + 1,) rows of the bodies
    contour_x_um: Floats  # (m,) points tail to head, at half a spread
    contour_y_um: Floats

    @property
    def counted(self) -> Bools:
        """Filaments that must be found: whole, gliding, single, shining."""
        return ~(self.cut | self.stuck | self.bundled | self.dark)


@dataclass(frozen=True, slots=True, kw_only=True)
class FilmTruth:
    """The truth of a film: n rows, sorted by frame."""

    positions: TruePositions  # midpoints
    filament: Ints  # (n,)
    length_um: Floats
    heading_rad: Floats
    head_x_um: Floats
    head_y_um: Floats


def film_truth(truths: Iterable[FilamentTruth]) -> FilmTruth:
    """The truth of successive frames from 0; bodies that do not count become blank places.

    Nothing of a frame is kept but its numbers and, of those bodies, every fourth point.
    """
    columns: dict[str, list[NDArray[np.generic]]] = {
        name: []
        for name in (
            *("filament", "track", "x_um", "y_um", "counted", "overlapped"),
            *("length_um", "heading_rad", "head_x_um", "head_y_um"),
        )
    }
    frames, blank_frames, blank_x, blank_y = [], [], [], []
    for number, truth in enumerate(truths):
        for name, parts in columns.items():
            parts.append(getattr(truth, name))
        frames.append(np.full(len(truth.filament), number))
        rows = np.repeat(~truth.counted, np.diff(truth.contour_offset)).nonzero()[0][::_EVERY_POINT]
        blank_frames.append(np.full(len(rows), number))
        blank_x.append(truth.contour_x_um[rows])
        blank_y.append(truth.contour_y_um[rows])
    whole = {name: np.concatenate(parts) for name, parts in columns.items()}
    return FilmTruth(
        positions=TruePositions(
            frame=np.concatenate(frames),
            track=whole.pop("track"),
            x=whole.pop("x_um"),
            y=whole.pop("y_um"),
            counted=whole.pop("counted"),
            overlapped=whole.pop("overlapped"),
            blank_frame=np.concatenate(blank_frames),
            blank_x=np.concatenate(blank_x),
            blank_y=np.concatenate(blank_y),
        ),
        **whole,
    )
