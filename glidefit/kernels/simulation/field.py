"""Filaments in and around a field of view: who is seen, and the tracks that come of it."""

from __future__ import annotations

from itertools import accumulate

import numpy as np
from numpy.typing import ArrayLike, NDArray

from glidefit.kernels.simulation.paths import active_paths
from glidefit.kernels.simulation.records import (
    ExposedPaths,
    FrameTiming,
    Motion,
    PathState,
    SeenPositions,
    SimulatedTracks,
    View,
)

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

_FEWEST_FRAMES_OF_A_BLOCK = 16


def stage_drift(
    timing: FrameTiming,
    *,
    velocity: ArrayLike,
    wander: float,
    wander_time: float,
    rng: np.random.Generator,
) -> Floats:
    """Displacement of the stage at each frame, (n_frames, 2) in µm, 0 at the first.

    Its velocity is ``velocity`` (2,) in µm/s plus a wandering part whose coordinates have an
    SD of ``wander`` (µm/s) and are forgotten as exp(-t / wander_time).
    """
    keep = np.exp(-timing.frame_s / wander_time)
    fresh = rng.normal(0.0, wander, (timing.n_frames, 2))
    fresh[1:] *= np.sqrt(1 - keep**2)
    moving = np.array(list(accumulate(fresh, lambda before, new: keep * before + new)))
    drift: Floats = np.cumsum((moving + np.asarray(velocity)) * timing.frame_s, axis=0)
    drift -= drift[0].copy()
    return drift


def positions_around(
    expected: float, *, field_um: tuple[float, float], reach_um: float, rng: np.random.Generator
) -> tuple[Floats, Floats]:
    """Positions x, y of a uniform population, ``expected`` of it in the field, a Poisson number.

    They fill the field and a band of ``reach_um`` around it.
    """
    width, height = field_um
    area = (width + 2 * reach_um) * (height + 2 * reach_um)
    n = rng.poisson(expected * area / (width * height))
    return (
        rng.uniform(-reach_um, width + reach_um, n),
        rng.uniform(-reach_um, height + reach_um, n),
    )


def seen(
    paths: ExposedPaths, *, view: View, first_frame: int = 0, names: Ints | None = None
) -> SeenPositions:
    """The positions whose mean over the exposure is inside the field, edges included."""
    x, y = paths.x, paths.y
    n, n_frames, _ = x.shape
    if view.drift_um is not None:
        drift = view.drift_um[first_frame : first_frame + n_frames]
        x, y = x + drift[None, :, None, 0], y + drift[None, :, None, 1]
    inside = np.ones((n, n_frames), dtype=bool)
    if view.field_um is not None:
        for values, size in zip((x, y), view.field_um, strict=True):
            mean = values.mean(axis=2)
            inside &= (mean >= 0) & (mean <= size)
    row, frame = np.nonzero(inside)
    return SeenPositions(
        filament=row if names is None else names[row],
        frame=frame + first_frame,
        x=x[inside],
        y=y[inside],
        heading=paths.heading[inside],
    )


def seen_active(
    state: PathState, motion: Motion, *, view: View, rng: np.random.Generator
) -> SeenPositions:
    """What the field sees of active filaments (n,) that start around it.

    Exact if they fill the field and a band as wide as their reach in the whole time.
    Between blocks of frames those too far to come (back) are dropped.
    """
    timing = view.timing
    names = np.arange(len(state.x))
    block = max(_FEWEST_FRAMES_OF_A_BLOCK, timing.n_frames // 8)
    parts: list[SeenPositions] = []
    for first in range(0, timing.n_frames, block):
        left = timing.n_frames - first
        if view.field_um is not None:
            far = _distance_to_field(state, view.field_um) - view.margin_um
            near = far <= motion.reach(left * timing.frame_s)
            names, state, motion = names[near], state.select(near), motion.select(near)
        if parts and not len(names):
            break
        frames = FrameTiming(
            frame_s=timing.frame_s,
            n_frames=min(block, left),
            exposure_s=timing.exposure_s,
            exposed_steps=timing.exposed_steps,
        )
        paths, state = active_paths(state, motion, timing=frames, rng=rng)
        parts.append(seen(paths, view=view, first_frame=first, names=names))
    return SeenPositions.join(parts)


def _distance_to_field(state: PathState, field_um: tuple[float, float]) -> Floats:
    """Distance in µm from the field, 0 inside, (n,)."""
    dx = np.maximum(np.maximum(-state.x, state.x - field_um[0]), 0)
    dy = np.maximum(np.maximum(-state.y, state.y - field_um[1]), 0)
    distance: Floats = np.hypot(dx, dy)
    return distance


def tracks_of(
    positions: SeenPositions,
    *,
    kind: NDArray[np.str_],
    motion: Motion,
    frame_s: float,
    localization_error: float = 0.0,
    lost_probability: float = 0.0,
    break_probability: float = 0.0,
    rng: np.random.Generator,
) -> SimulatedTracks:
    """Tracks as a faultless or a faulty tracker gives them, numbered by their first frame.

    Each visit to the field is a track. A position is lost with ``lost_probability`` (a gap),
    and a track goes on under another number with ``break_probability`` a frame.

    Parameters
    ----------
    positions : SeenPositions
        Of the filaments 0 to n - 1.
    kind : (n,) array of str
        gliding, stuck, pivoting or detached.
    motion : Motion
        Of the n filaments.
    localization_error : float
        SD of one coordinate in µm.
    """
    filament, frame = positions.filament, positions.frame
    begins = np.ones(len(frame), dtype=bool)
    begins[1:] = (np.diff(filament) != 0) | (np.diff(frame) != 1)
    if break_probability > 0:
        begins |= rng.random(len(frame)) < break_probability
    visit = np.cumsum(begins)
    rows = np.arange(len(frame))
    if lost_probability > 0:
        rows = rows[rng.random(len(frame)) >= lost_probability]
    _, first, visit = np.unique(visit[rows], return_index=True, return_inverse=True)
    by_time = np.argsort(frame[rows][first], kind="stable")
    number = np.empty(len(first), dtype=np.int64)
    number[by_time] = np.arange(len(first))
    order = np.argsort(number[visit], kind="stable")
    rows, track, owner = rows[order], number[visit][order], filament[rows][first][by_time]
    x, y = positions.x[rows], positions.y[rows]
    noise = localization_error * rng.standard_normal((2, len(rows)))
    return SimulatedTracks(
        track=track,
        frame=frame[rows],
        time_s=frame[rows].astype(np.float64) * frame_s,
        x_um=x.mean(axis=1) + noise[0],
        y_um=y.mean(axis=1) + noise[1],
        exposed_x_um=x,
        exposed_y_um=y,
        true_heading_rad=positions.heading[rows],
        kind=kind[owner],
        filament=owner,
        true_speed_um_s=motion.speed[owner],
        true_rotational_diffusion_rad2_s=motion.rotational_diffusion[owner],
        true_turning_rate_rad_s=motion.turning_rate[owner],
    )
