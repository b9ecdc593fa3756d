"""Paths of filaments in a gliding assay whose truth is known.

Coordinates as everywhere: µm, x to the right, y down; a frame's time is the start of its exposure.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, fields
from itertools import accumulate
from typing import Literal, Self

import numpy as np
from numpy.typing import ArrayLike, NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Turning = Literal["per_time", "per_path"]

# Variance of the heading change in one step, rad²; the step is exact to first order in it.
_TURN_VARIANCE_OF_A_STEP = 0.05
_FEWEST_FRAMES_OF_A_BLOCK = 16
# A rod of 5 µm × 25 nm in water at 25 °C, formulas of Tirado & García de la Torre (1979, 1980):
# along, across (µm²/s), about the transverse axis (rad²/s).
_ROD_ALONG, _ROD_ACROSS, _ROD_TURN = 0.750284, 0.451848, 0.163980


@dataclass(frozen=True, slots=True, kw_only=True)
class FrameTiming:
    """Times of the frames; the exposure starts with the frame."""

    frame_s: float
    n_frames: int
    exposure_s: float = 0.0  # 0 to frame_s
    exposed_steps: int = 1  # positions kept of each exposure, each the mean over its part

    def __post_init__(self) -> None:
        if not self.frame_s > 0 or self.n_frames < 1 or self.exposed_steps < 1:
            raise ValueError("frame_s, n_frames and exposed_steps must be > 0")
        if not 0 <= self.exposure_s <= self.frame_s:
            raise ValueError(f"exposure_s must be 0 to {self.frame_s:g} s, is {self.exposure_s:g}")


@dataclass(frozen=True, slots=True, kw_only=True)
class Motion:
    """How each of n filaments moves, (n,) arrays; see `active_paths`."""

    speed: Floats  # µm/s, while not pausing
    rotational_diffusion: Floats  # rad²/s
    turning_rate: Floats  # rad/s, positive is clockwise on the screen
    longitudinal_diffusion: Floats  # µm²/s, along the heading
    sideways_diffusion: Floats  # µm²/s, across it
    stop_rate: Floats  # 1/s, of the pauses
    start_rate: Floats  # 1/s

    def __post_init__(self) -> None:
        for field in fields(self):
            if field.name != "turning_rate" and getattr(self, field.name).min(initial=0.0) < 0:
                raise ValueError(f"{field.name} must be >= 0")
        if np.any((self.stop_rate > 0) & (self.start_rate <= 0)):
            raise ValueError("a filament that stops needs a start_rate > 0")

    @classmethod
    def of(cls, n: int, **values: ArrayLike) -> Self:
        """Motion of n filaments from numbers and (n,) arrays; what is not given is 0."""
        names = [field.name for field in fields(cls)]
        if unknown := set(values) - set(names):
            raise ValueError(f"no such motion: {', '.join(sorted(unknown))}")
        given = {name: np.asarray(values.get(name, 0.0), dtype=np.float64) for name in names}
        return cls(**{name: np.broadcast_to(value, (n,)) for name, value in given.items()})

    @classmethod
    def join(cls, parts: Sequence[Motion]) -> Self:
        """The filaments of all parts, one after the other."""
        names = [field.name for field in fields(cls)]
        return cls(**{name: np.concatenate([getattr(p, name) for p in parts]) for name in names})

    def select(self, chosen: NDArray[np.bool_]) -> Motion:
        """The filaments for which ``chosen`` (n,) is true."""
        return Motion(**{field.name: getattr(self, field.name)[chosen] for field in fields(self)})

    def reach(self, duration_s: float) -> Floats:
        """Distance in µm that no filament exceeds in a time (6 SD of its diffusion), (n,)."""
        diffusion = self.longitudinal_diffusion + self.sideways_diffusion
        reach: Floats = self.speed * duration_s + 6 * np.sqrt(2 * diffusion * duration_s)
        return reach


@dataclass(frozen=True, slots=True, kw_only=True)
class PathState:
    """Where n filaments are, (n,) arrays."""

    x: Floats  # µm
    y: Floats
    heading: Floats  # rad
    running: NDArray[np.bool_]  # false in a pause

    @classmethod
    def stationary(cls, x: Floats, y: Floats, motion: Motion, *, rng: np.random.Generator) -> Self:
        """Filaments at (x, y) with headings all around, pausing as often as in the long run."""
        heading = rng.uniform(-np.pi, np.pi, len(x))
        pausing = motion.stop_rate / np.maximum(motion.stop_rate + motion.start_rate, 1e-300)
        return cls(x=x, y=y, heading=heading, running=rng.random(len(x)) >= pausing)

    def select(self, chosen: NDArray[np.bool_]) -> PathState:
        """The filaments for which ``chosen`` (n,) is true."""
        return PathState(**{f.name: getattr(self, f.name)[chosen] for f in fields(self)})


@dataclass(frozen=True, slots=True, kw_only=True)
class ExposedPaths:
    """What n filaments show in f frames: k positions an exposure, without localization error."""

    x: Floats  # (n, f, k) in µm
    y: Floats
    heading: Floats  # (n, f) in rad, at the start of the exposure


@dataclass(frozen=True, slots=True, kw_only=True)
class View:
    """A field of view: its frames, its edges, the drift of the stage."""

    timing: FrameTiming
    field_um: tuple[float, float] | None = None  # width, height; None sees everything
    drift_um: Floats | None = None  # (n_frames, 2), added to every position

    @property
    def margin_um(self) -> float:
        """Farthest that the drift moves anything."""
        return 0.0 if self.drift_um is None else float(np.hypot(*self.drift_um.T).max())


@dataclass(frozen=True, slots=True, kw_only=True)
class SeenPositions:
    """Positions in the field, sorted by filament, then frame; n rows of k exposed positions."""

    filament: Ints  # (n,)
    frame: Ints
    x: Floats  # (n, k) in µm, with drift, without localization error
    y: Floats
    heading: Floats  # (n,) in rad

    @classmethod
    def join(cls, parts: Sequence[SeenPositions], *, shifts: ArrayLike = 0) -> SeenPositions:
        """All rows of all parts, ``shifts`` (a number or one a part) added to ``filament``."""
        columns = {f.name: np.concatenate([getattr(p, f.name) for p in parts]) for f in fields(cls)}
        lengths = [len(part.frame) for part in parts]
        columns["filament"] += np.repeat(np.broadcast_to(shifts, len(parts)), lengths)
        order = np.lexsort((columns["frame"], columns["filament"]))
        return cls(**{name: column[order] for name, column in columns.items()})


@dataclass(frozen=True, slots=True, kw_only=True)
class SimulatedTracks:
    """Tracks with their truth, sorted by track, then frame: n positions of m tracks."""

    track: Ints  # (n,) from 0
    frame: Ints
    time_s: Floats
    x_um: Floats  # with localization error
    y_um: Floats
    exposed_x_um: Floats  # (n, k) without localization error; the mean over k is the true position
    exposed_y_um: Floats
    true_heading_rad: Floats  # (n,) at the start of the exposure
    kind: NDArray[np.str_]  # (m,) gliding, stuck, pivoting or detached
    filament: Ints  # (m,) visits of one filament share its number
    true_speed_um_s: Floats  # (m,)
    true_rotational_diffusion_rad2_s: Floats
    true_turning_rate_rad_s: Floats


def turning_scale(speed: Floats, *, mean_speed: float, turning: Turning) -> Floats:
    """Factor of each filament's rotational diffusion and turning rate, (n,).

    1 if the heading turns per time; speed / mean_speed if it turns per path travelled.
    """
    return speed / mean_speed if turning == "per_path" else np.ones_like(speed)


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
