"""From frames to tracks of filaments."""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from glidefit.kernels import ridges
from glidefit.settings import DetectSettings, LinkSettings
from glidefit.steps.filaments.body import Body
from glidefit.steps.filaments.following import Following, follow
from glidefit.steps.filaments.measuring import Scene
from glidefit.tracks import Tracks

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# A spot fades within three standard deviations of its Gaussian, and so does a filament's profile.
_DIAMETERS_PER_WIDTH = 6.0
# Side of the blocks of the background, in widths.
_BLOCK_WIDTHS = 32
# Fewest frames in which a filament must be seen, unless it is bright.
_FEWEST_FRAMES = 3


@dataclass(frozen=True, slots=True, kw_only=True)
class FilamentTracks:
    """Tracks of the filaments of a recording and what else is known of them.

    Parameters
    ----------
    tracks : Tracks
        Midpoints of contours, with heading, length and flag.
    contour_offsets : (n + 1,) array of int
        Position i has the points ``contour_offsets[i]:contour_offsets[i + 1]``.
    contour_um : (m, 2) array
        x and y of points from tail to head.
    n_frames : int
    noise, background : (n_frames,) arrays
        Of each frame in counts.
    notes : tuple of str
        Sentences for the page.
    """

    tracks: Tracks
    contour_offsets: Ints
    contour_um: NDArray[np.float32]
    n_frames: int
    noise: Floats
    background: Floats
    notes: tuple[str, ...]


def track_filaments(
    frames: Iterable[NDArray[np.generic]],
    *,
    pixel_um: float,
    times_s: Floats,
    detect: DetectSettings,
    link: LinkSettings,
    where: str,
) -> FilamentTracks:
    """Filaments of a video, followed by their contours."""
    width_px = detect.spot_diameter / pixel_um / _DIAMETERS_PER_WIDTH
    scale = ridges.LineScale.of_width(width_px)
    interval = float(np.median(np.diff(times_s))) if len(times_s) > 1 else 1.0
    state = Following(
        max_step_px=link.max_speed * interval / pixel_um,
        max_gap=link.max_gap,
        threshold=detect.threshold,
    )
    block_px = max(16, round(_BLOCK_WIDTHS * width_px))
    noise, background = [], []
    blocks = None
    for number, raw in enumerate(frames):
        frame = np.asarray(raw, dtype=np.float32)
        blocks = ridges.block_statistics(
            frame, block_px=block_px, rounding=raw.dtype.kind in "ui", before=blocks
        )
        scene = Scene(
            frame=ridges.ridge_frame(frame, scale=scale, blocks=blocks, block_px=block_px),
            scale=scale,
            others=np.zeros(frame.shape, dtype=np.float32),
            owner=np.zeros(frame.shape, dtype=np.int32),
            threshold=detect.threshold,
        )
        follow(state, number, scene)
        noise.append(float(np.median(blocks.noise)))
        background.append(float(np.median(blocks.level)))
    bodies = sorted([*state.ended, *state.bodies], key=lambda b: b.number)
    kept = [b for b in bodies if len(b.rows) >= _FEWEST_FRAMES]
    return _tracks(kept, pixel_um, times_s, np.array(noise), np.array(background))


def _tracks(
    bodies: list[Body], pixel_um: float, times_s: Floats, noise: Floats, background: Floats
) -> FilamentTracks:
    rows = [(row, b.travelled < 0) for b in bodies for row in b.rows]
    counts = [len(b.rows) for b in bodies]
    frame = np.array([r.frame for r, _ in rows], dtype=np.int64)
    heading = np.array([r.heading + math.pi * back for r, back in rows])
    contour = [r.contour[::-1] if back else r.contour for r, back in rows]
    tracks = Tracks(
        label=np.array([str(k + 1) for k in range(len(bodies))], dtype=np.str_),
        offsets=np.concatenate([[0], np.cumsum(counts)]).astype(np.int64),
        frame=frame,
        time_s=times_s[frame],
        x_um=np.array([r.x_px for r, _ in rows]) * pixel_um,
        y_um=np.array([r.y_px for r, _ in rows]) * pixel_um,
        heading_rad=np.angle(np.exp(1j * heading)),
        length_um=np.array([r.length_px for r, _ in rows]) * pixel_um,
        flag=np.array([r.flag for r, _ in rows], dtype=np.str_),
    )
    points = [len(c) for c in contour]
    return FilamentTracks(
        tracks=tracks,
        contour_offsets=np.concatenate([[0], np.cumsum(points)]).astype(np.int64),
        contour_um=np.concatenate([np.empty((0, 2), dtype=np.float32), *contour]) * pixel_um,
        n_frames=len(noise),
        noise=noise,
        background=background,
        notes=(),
    )
