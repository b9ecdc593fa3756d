"""Paths of filaments that glide, stand, swing about a point or float."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from glidefit.kernels.simulation.records import ExposedPaths, FrameTiming, Motion, PathState

Floats = NDArray[np.float64]

# Variance of the heading change in one step, rad²; the step is exact to first order in it.
_TURN_VARIANCE_OF_A_STEP = 0.05
# A rod of 5 µm × 25 nm in water at 25 °C, formulas of Tirado & García de la Torre (1979, 1980):
# along, across (µm²/s), about the transverse axis (rad²/s).
_ROD_ALONG, _ROD_ACROSS, _ROD_TURN = 0.750284, 0.451848, 0.163980


def step_lengths(motion: Motion, *, timing: FrameTiming) -> tuple[Floats, int]:
    """Lengths in s of the steps that make up a frame, and how many of them are exposed."""
    per_s = max(
        2 * motion.rotational_diffusion.max(initial=0.0) / _TURN_VARIANCE_OF_A_STEP,
        np.abs(motion.turning_rate).max(initial=0.0) / np.sqrt(_TURN_VARIANCE_OF_A_STEP),
    )

    def cut(duration: float, groups: int) -> list[float]:
        if duration <= 0:
            return []
        n = groups * max(1, int(np.ceil(duration * per_s / groups)))
        return [duration / n] * n

    exposed = cut(timing.exposure_s, timing.exposed_steps)
    dark = cut(timing.frame_s - timing.exposure_s, 1)
    return np.array(exposed + dark), len(exposed)


def active_paths(
    state: PathState, motion: Motion, *, timing: FrameTiming, rng: np.random.Generator
) -> tuple[ExposedPaths, PathState]:
    """Paths of active Brownian filaments, and where they are after the last frame.

    With the heading θ, independent noises W and all of it only while a filament runs::

        dr = (v dt + sqrt(2 D_par) dW) (cos θ, sin θ) + sqrt(2 D_perp) dW (-sin θ, cos θ)
        dθ = ω dt + sqrt(2 D_r) dW

    A pause (stop rate, start rate) freezes position and heading. Within a step the heading's
    end, mean and early-weighted mean, which give the chord and the mean position, are drawn
    from their joint Gaussian law, so that a step may be as long as a frame.

    Returns
    -------
    ExposedPaths, PathState
        Means over the parts of each exposure (at an exposure of 0, the position itself).
    """
    lengths, n_exposed = step_lengths(motion, timing=timing)
    shape = (len(state.x), timing.n_frames, len(lengths))
    if np.any(motion.stop_rate > 0) or not np.all(state.running):
        clock = _pausing_clock(state.running, motion, steps=np.tile(lengths, shape[1]), rng=rng)
        run, elapsed, running = clock[0].reshape(shape), clock[1].reshape(shape), clock[2]
    else:
        run, elapsed, running = lengths[None, None, :], lengths[None, None, :] / 2, state.running

    bend = motion.turning_rate[:, None, None] * run
    blur = motion.rotational_diffusion[:, None, None] * run
    end, mean, early = _integrals_of_noise(2 * blur, shape, order=3, rng=rng)
    heading, last_heading = _starts(state.heading, bend + end)
    along = _integrals_of_noise(
        2 * motion.longitudinal_diffusion[:, None, None] * run, shape, rng=rng
    )
    across = _integrals_of_noise(2 * motion.sideways_diffusion[:, None, None] * run, shape, rng=rng)
    speed = motion.speed[:, None, None]

    # A chord is shorter than its path by the spread of the headings along it.
    chord = np.sinc((bend + end) / (2 * np.pi)) * (1 - blur / 12)
    dx, dy = _turned(heading + bend / 2 + mean, chord * (speed * run + along[0]), across[0])
    x, last_x = _starts(state.x, dx)
    y, last_y = _starts(state.y, dy)

    shown = np.s_[:, :, :n_exposed]
    chord = 1 - bend**2 / 36 - 2 * blur / 15
    ahead = np.broadcast_to(chord * (speed * elapsed + along[1]), shape)
    mx, my = _turned((heading + bend / 3 + early)[shown], ahead[shown], across[1][shown])
    paths = ExposedPaths(
        x=_exposed(x, mx, parts=timing.exposed_steps),
        y=_exposed(y, my, parts=timing.exposed_steps),
        heading=heading[:, :, 0],
    )
    return paths, PathState(x=last_x, y=last_y, heading=last_heading, running=running)


def _integrals_of_noise(
    variance: Floats, shape: tuple[int, int, int], *, order: int = 2, rng: np.random.Generator
) -> list[Floats]:
    """End, mean and early-weighted mean (weight 2 (h - t) / h²) of Brownian steps 0 to h.

    They are the integrals of 1, u and u² over dW with u = (h - t) / h, here expanded in
    Legendre polynomials of u.
    """
    if not np.any(variance > 0):
        return [np.zeros(shape)] * order
    sd = np.sqrt(variance)
    z = rng.standard_normal((order, *shape))
    z *= sd
    mean = z[0] / 2 + z[1] / np.sqrt(12)
    integrals = [z[0], mean]
    if order == 3:
        integrals.append(mean - z[0] / 6 + z[2] / np.sqrt(180))
    return integrals


def _starts(first: Floats, change: Floats) -> tuple[Floats, Floats]:
    """Values at the start of each step (n, f, s), and after the last (n,)."""
    n = len(first)
    values = np.empty((n, change[0].size + 1 if n else 1))
    values[:, 0] = first
    values[:, 1:] = change.reshape(n, -1) if n else 0.0
    np.cumsum(values, axis=1, out=values)
    return values[:, :-1].reshape(change.shape), values[:, -1]


def _turned(angle: Floats, along: Floats, across: Floats) -> tuple[Floats, Floats]:
    """Displacements along and across an angle, as x and y."""
    cos, sin = np.cos(angle), np.sin(angle)
    return along * cos - across * sin, along * sin + across * cos


def _exposed(start: Floats, mean: Floats, *, parts: int) -> Floats:
    """Mean positions over ``parts`` equal parts of each exposure (n, f, parts)."""
    n, f, k = mean.shape
    if k == 0:
        return np.repeat(start[:, :, :1], parts, axis=2)
    positions: Floats = (start[:, :, :k] + mean).reshape(n, f, parts, k // parts).mean(axis=3)
    return positions


def _pausing_clock(
    running: NDArray[np.bool_], motion: Motion, *, steps: Floats, rng: np.random.Generator
) -> tuple[Floats, Floats, NDArray[np.bool_]]:
    """Running time in each step (n, s), its mean elapsed part over the step, the last state.

    The pauses begin and end at their own exact times, not at those of the steps.
    """
    edges = np.concatenate([[0.0], np.cumsum(steps)])
    end = edges[-1]
    n = len(running)
    switch, states = [np.zeros(n)], [running]
    while n and switch[-1].min() < end:
        rate = np.where(states[-1], motion.stop_rate, motion.start_rate)
        wait = rng.standard_exponential(n) / np.maximum(rate, 1e-300)
        switch.append(np.minimum(switch[-1] + wait, end))
        states.append(~states[-1])
    times, run = np.stack(switch, axis=1), np.stack(states, axis=1)
    wait = np.diff(times, axis=1)
    run_before = _from_zero(run[:, :-1] * wait)
    area_before = _from_zero(run_before[:, :-1] * wait + run[:, :-1] * wait**2 / 2)

    # All filaments searched in one list: each is moved to its own stretch of the axis.
    stretch = 2 * end * np.arange(n)[:, None]
    at = np.searchsorted((times + stretch).ravel(), (edges + stretch).ravel(), side="right") - 1
    at = np.clip(at.reshape(n, -1) - times.shape[1] * np.arange(n)[:, None], 0, None)
    since = np.maximum(edges - np.take_along_axis(times, at, axis=1), 0)
    ran = np.take_along_axis(run_before, at, axis=1)
    moving = np.take_along_axis(run, at, axis=1)
    area = np.take_along_axis(area_before, at, axis=1) + ran * since + moving * since**2 / 2
    ran = ran + moving * since
    last = np.take_along_axis(run, (times < end).sum(axis=1)[:, None] - 1, axis=1)[:, 0]
    elapsed = np.diff(area, axis=1) / steps - ran[:, :-1]
    return np.maximum(np.diff(ran, axis=1), 0), elapsed, last


def _from_zero(change: Floats) -> Floats:
    """Cumulative sums along the rows, from 0."""
    return np.concatenate([np.zeros((len(change), 1)), np.cumsum(change, axis=1)], axis=1)


def standing_paths(
    x: Floats, y: Floats, *, timing: FrameTiming, rng: np.random.Generator
) -> ExposedPaths:
    """Filaments that stay where they are (n,), each with a heading of its own."""
    shape = (len(x), timing.n_frames, timing.exposed_steps)
    heading = np.broadcast_to(rng.uniform(-np.pi, np.pi, (len(x), 1)), shape[:2])
    return ExposedPaths(
        x=np.broadcast_to(x[:, None, None], shape),
        y=np.broadcast_to(y[:, None, None], shape),
        heading=heading,
    )


def pivoting_paths(
    x: Floats,
    y: Floats,
    *,
    radius: Floats,
    sweep: Floats,
    angular_diffusion: float,
    timing: FrameTiming,
    rng: np.random.Generator,
) -> ExposedPaths:
    """Filaments that swing about the fixed points (x, y), (n,).

    Parameters
    ----------
    radius : (n,) array
        Distance of the position from the fixed point in µm.
    sweep : (n,) array
        Largest angle to either side of the mean, in rad, where it turns back; inf swings freely.
    angular_diffusion : float
        In rad²/s.
    """
    n, parts = len(x), timing.exposed_steps
    motion = Motion.of(n, rotational_diffusion=4 * angular_diffusion)  # only to cut the steps finer
    lengths, n_exposed = step_lengths(motion, timing=timing)
    change = np.sqrt(2 * angular_diffusion * lengths) * rng.standard_normal(
        (n, timing.n_frames, len(lengths))
    )
    middle = rng.uniform(-np.pi, np.pi, n)[:, None, None]
    bound = np.where(np.isfinite(sweep), sweep, 1.0)[:, None, None]
    angle, _ = _starts(bound[:, 0, 0] * rng.uniform(-1, 1, n), change)
    folded = bound - np.abs((angle + bound) % (4 * bound) - 2 * bound)
    angle = middle + np.where(np.isfinite(sweep)[:, None, None], folded, angle)
    shown = angle[:, :, : max(n_exposed, 1)]
    if n_exposed == 0:
        shown = np.repeat(shown, parts, axis=2)
    dx, dy = _turned(shown, radius[:, None, None], np.zeros(1))
    groups = (n, timing.n_frames, parts, -1) if n else (0, timing.n_frames, parts, 1)
    return ExposedPaths(
        x=x[:, None, None] + dx.reshape(groups).mean(axis=3),
        y=y[:, None, None] + dy.reshape(groups).mean(axis=3),
        heading=angle[:, :, 0],
    )


def detached_motion(n: int, *, mean_diffusion: float = 0.5) -> Motion:
    """Motion of rods floating free near the glass: (D along + D across) / 2 given in µm²/s."""
    scale = 2 * mean_diffusion / (_ROD_ALONG + _ROD_ACROSS)
    return Motion.of(
        n,
        rotational_diffusion=_ROD_TURN * scale,
        longitudinal_diffusion=_ROD_ALONG * scale,
        sideways_diffusion=_ROD_ACROSS * scale,
    )
