"""What a filament video says about itself: saturated, repeated, inverted, fading frames."""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from glidefit.kernels.ridges import RidgeFrame
from glidefit.steps.filaments.body import Body

# A frame is saturated if this share of its pixels has the largest value of all.
_SATURATED = 0.01
# Light so far below the background, over the noise of the smoothed frame, is dark.
_DARK_HEIGHT = 6.0
# Dark pixels outnumber bright ones so much in a frame of dark filaments.
_INVERTED = 3.0
# A frame with less than this share of the light of those around it is out of focus, or dark.
_LOST = 0.6
_AROUND = 10  # frames


@dataclass(slots=True, kw_only=True)
class Watch:
    """Facts of the frames so far."""

    saturated: list[int] = field(default_factory=list)
    repeated: list[int] = field(default_factory=list)
    dark_pixels: int = 0
    bright_pixels: int = 0
    frames: int = 0
    before: NDArray[Any] | None = None

    def look(self, raw: NDArray[Any]) -> None:
        """One frame more, as it was read."""
        sample = raw[::4, ::4]
        if sample.dtype.kind in "ui":
            top = int(raw.max())
            if top > int(raw.min()) and np.mean(sample == top) > _SATURATED:
                self.saturated.append(self.frames)
        if self.before is not None and np.array_equal(sample, self.before):
            self.repeated.append(self.frames)
        self.before = sample.copy()
        self.frames += 1

    def look_at_contrast(self, frame: RidgeFrame, smooth_px: float) -> None:
        """Light and dark in the first frames."""
        if self.frames > 3:
            return
        noise = float(np.median(frame.noise)) / (2 * math.sqrt(math.pi) * smooth_px)
        sample = frame.smooth[::2, ::2]
        self.dark_pixels += int(np.count_nonzero(sample < -_DARK_HEIGHT * noise))
        self.bright_pixels += int(np.count_nonzero(sample > _DARK_HEIGHT * noise))

    def notes(self, bodies: list[Body], *, crowded: int) -> tuple[str, ...]:
        """Sentences for the page."""
        notes = []
        if self.frames > 1 and len(self.repeated) == self.frames - 1:
            notes.append("All frames are equal: nothing can be said about motion.")
        elif self.repeated:
            notes.append(
                f"{len(self.repeated)} frames repeat the one before them exactly, "
                f"the first is frame {self.repeated[0]}."
            )
        if self.saturated:
            notes.append(
                f"{len(self.saturated)} of {self.frames} frames are saturated, the first is frame "
                f"{self.saturated[0]}: the ends of filaments are less sure there."
            )
        if self.dark_pixels > _INVERTED * max(self.bright_pixels, 50):
            notes.append(
                "More stands out dark than bright: if the filaments are dark, set detect.contrast "
                "to dark."
            )
        if crowded:
            notes.append(
                f"In {crowded} frames the field is so full of filaments that not all were followed."
            )
        return (*notes, *_light_notes(bodies, self.frames))


def light_course(bodies: list[Body], n_frames: int) -> NDArray[np.float64]:
    """Mean light of the filaments in each frame, in counts at the centre line; NaN without any."""
    total, count = np.zeros(n_frames), np.zeros(n_frames)
    for body in bodies:
        rows = [r for r in body.rows if not r.flag]
        if len(rows) < 3:
            continue
        frame = np.array([r.frame for r in rows])
        light = np.array([r.light for r in rows])
        total[frame] += light
        count[frame] += 1
    return np.where(count > 0, total / np.maximum(count, 1), np.nan)


def _light_notes(bodies: list[Body], n_frames: int) -> list[str]:
    course = light_course(bodies, n_frames)
    if np.count_nonzero(np.isfinite(course)) < 6:
        return []
    notes = []
    known, tenth = course[np.isfinite(course)], max(n_frames // 10, 3)
    start, end = known[:tenth].mean(), known[-tenth:].mean()
    if end < 0.7 * start:
        notes.append(f"The filaments' light falls to {100 * end / start:.0f} % in the recording.")
    lost = [
        f
        for f in np.flatnonzero(np.isfinite(course))
        if course[f] < _LOST * np.nanmedian(course[max(f - _AROUND, 0) : f + _AROUND + 1])
    ]
    if lost:
        notes.append(
            f"In {len(lost)} frames, the first is frame {lost[0]}, the filaments are much dimmer "
            "than in those around: focus or light was lost."
        )
    return notes
