"""What simulated filaments are: their motion, where they are, what a field of view sees of them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, fields
from typing import Literal, Self

import numpy as np
from numpy.typing import ArrayLike, NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Turning = Literal["per_time", "per_path"]


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
