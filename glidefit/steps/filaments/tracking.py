"""From frames to tracks of filaments."""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from glidefit.errors import InputError
from glidefit.kernels import ridges
from glidefit.kernels.frames import frame_fault
from glidefit.settings import DetectSettings, LinkSettings
from glidefit.steps.filaments.body import Body
from glidefit.steps.filaments.following import Following, follow
from glidefit.steps.filaments.measuring import Scene
from glidefit.steps.filaments.watch import Watch
from glidefit.tracks import Tracks

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# A spot fades within three standard deviations of its Gaussian, and so does a filament's profile.
_DIAMETERS_PER_WIDTH = 6.0
# Side of the blocks of the background, in widths.
_BLOCK_WIDTHS = 14
# What is shorter than so many widths looks like a spot.
_SPECK = 9.0
# Fewest frames in which a filament must be seen, unless it is bright.
_FEWEST_FRAMES = 3


@dataclass(frozen=True, slots=True, kw_only=True)
class FilamentTracks:
    """Tracks of the filaments of a recording and what else is known of them.

    Parameters
    ----------
    tracks : Tracks
        Midpoints of contours, with heading, length and flag.
    specks : Tracks
        What rests and is no longer than a spot: no filaments, but they show drift.
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
    specks: Tracks
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
    exposure_s: float = 0.0,
) -> FilamentTracks:
    """Filaments of a video, followed by their contours.

    In each frame a known filament is looked for where its own body, moved on along itself, should
    be; what light is left is traced for new ones, which are joined to filaments that were lost. So
    a crossing is resolved by where each filament was, and at first sight by going straight on.

    Parameters
    ----------
    frames : iterable of (h, w) arrays
        Counts, integer or float; bright filaments on a darker background.
    pixel_um : float
        Side of a pixel in µm.
    times_s : (f,) array
        Start of each frame in s, increasing; at least as many as frames.
    detect : DetectSettings
        Threshold and width of the picture.
    link : LinkSettings
        Largest speed and gap.
    where : str
        The recording, for messages.
    exposure_s : float
        Of a frame, for the blur of ends that move; NaN if unknown, and then taken as 0.

    Raises
    ------
    InputError
        For a frame that is no grey image or has pixels without a value, frames of different size,
        times that do not increase, or pixels too large or too small for the width.
    """
    width_px = _width(detect, pixel_um, where)
    _check_times(times_s, where)
    interval = float(np.median(np.diff(times_s))) if len(times_s) > 1 else 1.0
    state = Following(
        max_step_px=link.max_speed * interval / pixel_um,
        max_gap=link.max_gap,
        threshold=detect.threshold,
    )
    maker = _SceneMaker(
        scale=ridges.LineScale.of_width(width_px),
        block_px=max(12, round(_BLOCK_WIDTHS * width_px)),
        threshold=detect.threshold,
        where=where,
        exposed_share=min(exposure_s / interval, 1.0) if exposure_s > 0 else 0.0,
    )
    for number, raw in enumerate(frames):
        follow(state, number, maker.scene(raw))
    bodies = sorted([*state.ended, *state.bodies], key=lambda b: b.number)
    bodies = [b for b in bodies if len(b.rows) >= _FEWEST_FRAMES]
    speck = _specks(bodies, width_px, state.usual_step)
    filaments = [b for b, s in zip(bodies, speck, strict=True) if not s]
    notes = maker.watch.notes(filaments, crowded=state.crowded)
    if any(speck):
        are = "specks are" if sum(speck) > 1 else "speck is"
        notes = (*notes, f"{sum(speck)} resting {are} no longer than a spot, and left out.")
    specks = [b for b, s in zip(bodies, speck, strict=True) if s]
    contour = [r.contour[::-1] if b.travelled < 0 else r.contour for b in filaments for r in b.rows]
    points = np.cumsum([0, *map(len, contour)]).astype(np.int64)
    every = np.concatenate([np.empty((0, 2)), *contour])
    return FilamentTracks(
        tracks=_tracks(filaments, pixel_um, times_s),
        specks=_tracks(specks, pixel_um, times_s, prefix="speck "),
        contour_offsets=points,
        contour_um=every.astype(np.float32) * np.float32(pixel_um),
        n_frames=len(maker.noise),
        noise=np.array(maker.noise),
        background=np.array(maker.background),
        notes=notes,
    )


def _width(detect: DetectSettings, pixel_um: float, where: str) -> float:
    """Standard deviation of a filament's profile in pixels."""
    if not pixel_um > 0:
        raise ValueError(f"pixel_um must be > 0, is {pixel_um:g}")
    across = detect.spot_diameter / pixel_um
    if not 3 <= across <= 99:
        raise InputError(
            where,
            f"a filament of {detect.spot_diameter:g} µm is {across:.3g} pixels wide at "
            f"{pixel_um:g} µm per pixel",
            expected="3 to 99 pixels",
            remedy="Check pixel_um in the assay sheet and the setting detect.spot_diameter.",
        )
    return across / _DIAMETERS_PER_WIDTH


def _check_times(times_s: Floats, where: str) -> None:
    late = np.flatnonzero(~(np.diff(times_s) > 0))
    if len(late):
        k = int(late[0])
        raise InputError(
            f"{where}, frame {k + 1}",
            f"its time is {times_s[k + 1]:g} s, after {times_s[k]:g} s of the frame before",
            expected="times in s that increase from frame to frame",
            remedy="Give frame_s in the assay sheet if the times of the file are wrong.",
        )


@dataclass(slots=True, kw_only=True)
class _SceneMaker:
    """Frames made ready one after the other; images are used again."""

    scale: ridges.LineScale
    block_px: int
    threshold: float
    where: str
    exposed_share: float
    watch: Watch = field(default_factory=Watch)
    noise: list[float] = field(default_factory=list)
    background: list[float] = field(default_factory=list)
    blocks: ridges.BlockStatistics | None = None
    others: NDArray[np.float32] | None = None
    owner: NDArray[np.int32] | None = None

    def scene(self, raw: NDArray[np.generic]) -> Scene:
        """The next frame."""
        shape = None if self.others is None else self.others.shape
        fault = frame_fault(raw, shape)
        if fault is not None:
            raise InputError(
                f"{self.where}, frame {len(self.noise)}",
                fault[0],
                expected=fault[1],
                remedy="Save the video again, or choose the channel.",
            )
        if self.others is None or self.owner is None:
            self.others = np.zeros(raw.shape, dtype=np.float32)
            self.owner = np.zeros(raw.shape, dtype=np.int32)
        self.others[:], self.owner[:] = 0, 0
        self.watch.look(raw)
        frame = np.asarray(raw, dtype=np.float32)
        self.blocks = ridges.block_statistics(
            frame, block_px=self.block_px, rounding=raw.dtype.kind in "ui", before=self.blocks
        )
        made = ridges.ridge_frame(
            frame, scale=self.scale, blocks=self.blocks, block_px=self.block_px
        )
        self.watch.look_at_contrast(made, self.scale.smooth_px)
        self.noise.append(float(np.median(self.blocks.noise)))
        self.background.append(float(np.median(self.blocks.level)))
        return Scene(
            frame=made,
            scale=self.scale,
            others=self.others,
            owner=self.owner,
            threshold=self.threshold,
            exposed_share=self.exposed_share,
        )


def _specks(bodies: list[Body], width_px: float, usual_step: float) -> list[bool]:
    """Which bodies are no longer than a spot and never go anywhere: dirt, not filaments."""
    result = []
    for body in bodies:
        short = float(np.median([r.length_px for r in body.rows])) < _SPECK * width_px
        x, y = (np.array([getattr(r, name) for r in body.rows]) for name in ("x_px", "y_px"))
        frames = body.rows[-1].frame - body.rows[0].frame
        quarter = max(1, len(x) // 4)
        gone = math.hypot(
            x[-quarter:].mean() - x[:quarter].mean(), y[-quarter:].mean() - y[:quarter].mean()
        )
        slow = gone < 2.0 * width_px + 0.1 * frames * (usual_step if usual_step > 0 else 0.0)
        result.append(short and slow)
    return result


def _tracks(bodies: list[Body], pixel_um: float, times_s: Floats, *, prefix: str = "") -> Tracks:
    rows = [(row, b.travelled < 0) for b in bodies for row in b.rows]
    frame = np.array([r.frame for r, _ in rows], dtype=np.int64)
    heading = np.array([r.heading + math.pi * back for r, back in rows])
    return Tracks(
        label=np.array([f"{prefix}{k + 1}" for k in range(len(bodies))], dtype=np.str_),
        offsets=np.cumsum([0, *(len(b.rows) for b in bodies)]).astype(np.int64),
        frame=frame,
        time_s=times_s[frame],
        x_um=np.array([r.x_px for r, _ in rows]) * pixel_um,
        y_um=np.array([r.y_px for r, _ in rows]) * pixel_um,
        heading_rad=np.angle(np.exp(1j * heading)),
        length_um=np.array([r.length_px for r, _ in rows]) * pixel_um,
        flag=np.array([r.flag for r, _ in rows], dtype=np.str_),
    )
