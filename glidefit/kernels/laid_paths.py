"""Filaments that glide along the path that their tip lays; every point of a body follows it.

Lengths are µm, times s; a place on a path is its arc length from the path's first vertex.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import NDArray

from glidefit.kernels.simulation import FrameTiming, Motion, PathState

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

STEP_UM = 0.1  # between the vertices of a path
_REACH_SD = 6.0  # of the diffusion along the path that a path leaves room for


@dataclass(frozen=True, slots=True, kw_only=True)
class Filaments:
    """n filaments, each on a path of its own, in f frames of k exposed parts."""

    length_um: Floats  # (n,) contour length
    path_offset: Ints  # (n + 1,) rows of its vertices
    path_x: Floats  # (m,) in µm, vertices STEP_UM apart along the path
    path_y: Floats
    tail_um: Floats  # (n, f, k) place of the tail on the path; the head is length_um ahead
    aside_um: Floats  # (n,) of the body from its path, to the right of the heading
    first_frame: Ints  # (n,) in which it has landed
    end_frame: Ints  # (n,) in which it is gone
    stuck: NDArray[np.bool_]  # (n,)
    bundle: Ints  # (n,) filaments with the same number are bundled; -1 is none
    motion: Motion  # of the n filaments; a stuck one has that which its shape would belong to

    @classmethod
    def join(cls, parts: Sequence[Filaments]) -> Filaments:
        """The filaments of all parts, one after the other; bundles are numbered anew."""
        columns = {
            f.name: np.concatenate([getattr(p, f.name) for p in parts])
            for f in fields(cls)
            if f.name not in ("path_offset", "bundle", "motion")
        }
        lengths = np.concatenate([np.diff(part.path_offset) for part in parts])
        shifts = np.cumsum([0] + [len(part.length_um) for part in parts[:-1]])
        bundles = [
            np.where(part.bundle >= 0, part.bundle + shift, -1)
            for part, shift in zip(parts, shifts, strict=True)
        ]
        return cls(
            **columns,
            path_offset=np.concatenate([[0], np.cumsum(lengths)]),
            bundle=np.concatenate(bundles),
            motion=Motion.join([part.motion for part in parts]),
        )


def laid_path(
    *,
    x: float,
    y: float,
    heading: float,
    behind_um: float,
    ahead_um: float,
    curvature: float,
    curvature_noise: float,
    rng: np.random.Generator,
) -> tuple[Floats, Floats]:
    """Vertices of a path through (x, y), at least so long behind and ahead of it.

    The heading turns with the path length s by ``curvature ds + sqrt(2 curvature_noise) dW``; in
    terms of a gliding speed v these are ω / v (rad/µm) and D_r / v (rad²/µm).

    Returns
    -------
    (m,) arrays
        x, y in µm; vertex ``ceil(behind_um / STEP_UM)`` is the given point.
    """
    back, forth = (int(np.ceil(part / STEP_UM)) for part in (behind_um, ahead_um))
    turns = curvature * STEP_UM + np.sqrt(2 * curvature_noise * STEP_UM) * rng.standard_normal(
        back + forth
    )
    angle = np.cumsum(turns)
    angle += heading - (angle[back - 1] if back else 0.0)
    px = np.concatenate([[0.0], np.cumsum(STEP_UM * np.cos(angle))])
    py = np.concatenate([[0.0], np.cumsum(STEP_UM * np.sin(angle))])
    return px + (x - px[back]), py + (y - py[back])


def advances(
    motion: Motion, running: NDArray[np.bool_], *, timing: FrameTiming, rng: np.random.Generator
) -> Floats:
    """Distance gone along the path since the first frame began, (n, f, k) in µm.

    ``ds = v dt + sqrt(2 D_par) dW`` while a filament runs, at the middle of each exposed part.
    Pauses begin and end with a part.
    """
    parts = timing.exposed_steps if timing.exposure_s > 0 else 1
    width = timing.exposure_s / parts
    times = np.arange(timing.n_frames)[:, None] * timing.frame_s + (np.arange(parts) + 0.5) * width
    steps = np.diff(times.ravel(), prepend=0.0)
    n = len(motion.speed)
    runs = _runs(motion, running, steps=steps, rng=rng)
    change = motion.speed[:, None] * steps * runs
    if np.any(motion.longitudinal_diffusion > 0):
        sd = np.sqrt(2 * motion.longitudinal_diffusion[:, None] * steps * runs)
        change += sd * rng.standard_normal((n, len(steps)))
    gone: Floats = np.cumsum(change, axis=1).reshape(n, timing.n_frames, parts)
    return gone


def _runs(
    motion: Motion, running: NDArray[np.bool_], *, steps: Floats, rng: np.random.Generator
) -> NDArray[np.bool_]:
    """Whether each filament runs in each step, (n, s): a stationary chain of two states."""
    n = len(running)
    runs = np.ones((n, len(steps)), dtype=bool)
    total = motion.stop_rate + motion.start_rate
    if not np.any(motion.stop_rate > 0):
        return runs
    share = motion.start_rate / np.maximum(total, 1e-300)
    share = np.where(motion.stop_rate > 0, share, 1.0)
    state = running
    for column, step in enumerate(steps):
        keep = np.exp(-total * step)
        state = rng.random(n) < share + (state - share) * keep
        runs[:, column] = state
    return runs


def filaments_on_paths(
    state: PathState,
    motion: Motion,
    *,
    length_um: Floats,
    gone_um: Floats,
    field_um: tuple[float, float] | None = None,
    margin_um: float = 0.0,
    rng: np.random.Generator,
) -> Filaments:
    """Filaments whose midpoints start at ``state``, (n,), each on the path that its tip lays.

    Parameters
    ----------
    state : PathState
        Midpoints and the headings there, at the start of the first frame.
    motion : Motion
        Its turning rate and rotational diffusion over its speed bend the path.
    length_um : (n,) array
    gone_um : (n, f, k) array
        From `advances`; zeros are stuck filaments.
    field_um, margin_um
        Filaments that never come so near the field are left out.
    """
    least = gone_um.min(axis=(1, 2), initial=0.0)
    most = gone_um.max(axis=(1, 2), initial=0.0)
    speed = np.maximum(motion.speed, 1e-12)
    paths, start, kept = [], [], []
    for k, half in enumerate(length_um / 2):
        behind = half - least[k] + STEP_UM
        x, y = laid_path(
            x=float(state.x[k]),
            y=float(state.y[k]),
            heading=float(state.heading[k]),
            behind_um=behind,
            ahead_um=half + most[k] + STEP_UM,
            curvature=float(motion.turning_rate[k] / speed[k]),
            curvature_noise=float(motion.rotational_diffusion[k] / speed[k]),
            rng=rng,
        )
        if field_um is None or _comes_near(x, y, field_um, margin_um):
            paths.append((x, y))
            start.append(np.ceil(behind / STEP_UM) * STEP_UM - half)
            kept.append(k)
    n, n_frames = len(kept), gone_um.shape[1]
    chosen = np.zeros(len(length_um), dtype=bool)
    chosen[kept] = True
    return Filaments(
        length_um=length_um[kept],
        path_offset=np.concatenate([[0], np.cumsum([len(x) for x, _ in paths])]).astype(np.int64),
        path_x=np.concatenate([np.empty(0), *(x for x, _ in paths)]),
        path_y=np.concatenate([np.empty(0), *(y for _, y in paths)]),
        tail_um=gone_um[kept] + np.array(start).reshape(n, 1, 1),
        aside_um=np.zeros(n),
        first_frame=np.zeros(n, dtype=np.int64),
        end_frame=np.full(n, n_frames, dtype=np.int64),
        stuck=~np.any(gone_um[kept], axis=(1, 2)),
        bundle=np.full(n, -1, dtype=np.int64),
        motion=motion.select(chosen),
    )


def _comes_near(x: Floats, y: Floats, field_um: tuple[float, float], margin_um: float) -> bool:
    inside = (x > -margin_um) & (x < field_um[0] + margin_um)
    inside &= (y > -margin_um) & (y < field_um[1] + margin_um)
    return bool(inside.any())
