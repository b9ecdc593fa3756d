"""A field of filaments that glide, stick, bundle, land and detach, and its film."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from glidefit.kernels.filament_optics import FilamentOptics, FilmFaults
from glidefit.kernels.laid_paths import Filaments, advances, filaments_on_paths
from glidefit.kernels.simulation import (
    FrameTiming,
    Motion,
    PathState,
    View,
    positions_around,
    stage_drift,
)
from glidefit.kernels.synthetic_filaments import FilamentFrame, filament_frames

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

_BUNDLE_ASIDE_UM = (0.03, 0.15)  # between the paths of two bundled filaments
_SHORTEST_UM = 0.3
_LONGEST_SD = 2.5  # of the logarithm: longer ones may come in from farther than is drawn
_FASTEST = 1.8  # over the mean speed


@dataclass(frozen=True, slots=True, kw_only=True)
class FilamentLaw:
    """What the filaments of a field are like; numbers are expected ones at a moment."""

    in_field: float = 40.0  # with their midpoint in the field
    length_um: float = 8.0  # mean
    length_spread: float = 0.5  # SD of the logarithm
    stuck_share: float = 0.0
    bundled_share: float = 0.0  # of the gliding ones, in pairs
    detach_rate: float = 0.0  # 1/s; as many land

    def __post_init__(self) -> None:
        if not self.length_um > 0 or min(self.in_field, self.length_spread, self.detach_rate) < 0:
            raise ValueError("length_um must be > 0; numbers, spread and rate >= 0")
        if not (0 <= self.stuck_share <= 1 and 0 <= self.bundled_share <= 1):
            raise ValueError("stuck_share and bundled_share must be 0 to 1")

    def lengths(self, n: int, *, rng: np.random.Generator) -> Floats:
        """Contour lengths of n filaments in µm, log-normal; none below 0.3 µm or the mean."""
        middle = np.log(self.length_um) - self.length_spread**2 / 2
        drawn: Floats = np.exp(middle + self.length_spread * rng.standard_normal(n))
        return np.maximum(drawn, min(_SHORTEST_UM, self.length_um))


def draw_filaments(
    law: FilamentLaw,
    *,
    motions: Callable[[int], Motion],
    reach_um: float,
    view: View,
    rng: np.random.Generator,
) -> Filaments:
    """The filaments of a field and those that may come into it.

    Parameters
    ----------
    law : FilamentLaw
    motions : callable
        Motion of so many filaments.
    reach_um : float
        Farthest that one of them glides in the whole time.
    view : View
        With a field.
    """
    gliding = law.in_field * (1 - law.stuck_share)
    pairs = law.bundled_share / (2 - law.bundled_share)
    singles = _drawn(
        gliding / (1 + pairs), law, motions=motions, reach_um=reach_um, view=view, rng=rng
    )
    partners = _bundled(singles, law, rng.random(len(singles.length_um)) < pairs, rng=rng)
    stuck = _drawn(
        law.in_field * law.stuck_share, law, motions=motions, reach_um=0.0, view=view, rng=rng
    )
    return Filaments.join([singles, partners, stuck])


def _drawn(
    expected: float,
    law: FilamentLaw,
    *,
    motions: Callable[[int], Motion],
    reach_um: float,
    view: View,
    rng: np.random.Generator,
) -> Filaments:
    """Single filaments; stuck ones where the reach is 0."""
    if view.field_um is None:
        raise ValueError("the view must have a field")
    stuck = reach_um == 0
    duration = view.timing.frame_s * view.timing.n_frames
    turnover = 0.0 if stuck else law.detach_rate * duration
    longest = law.length_um * np.exp(_LONGEST_SD * law.length_spread)
    x, y = positions_around(
        expected * (1 + turnover),
        field_um=view.field_um,
        reach_um=reach_um + longest / 2 + view.margin_um,
        rng=rng,
    )
    n = len(x)
    motion = motions(n)
    state = PathState.stationary(x, y, motion, rng=rng)
    gone = advances(motion, state.running, timing=view.timing, rng=rng)
    filaments = filaments_on_paths(
        state,
        motion,
        length_um=law.lengths(n, rng=rng),
        gone_um=np.zeros_like(gone) if stuck else gone,
        field_um=view.field_um,
        margin_um=view.margin_um + 1.0,
        rng=rng,
    )
    if turnover == 0:
        return filaments
    # Those there at first and those that land later, any of them for an exponential time.
    m = len(filaments.length_um)
    first = np.where(rng.random(m) < 1 / (1 + turnover), 0.0, rng.uniform(0, duration, m))
    last = first + rng.exponential(1 / law.detach_rate, m)
    frames = [np.ceil(t / view.timing.frame_s).astype(np.int64) for t in (first, last)]
    return replace(filaments, first_frame=frames[0], end_frame=frames[1])


def _bundled(
    leaders: Filaments, law: FilamentLaw, chosen: NDArray[np.bool_], *, rng: np.random.Generator
) -> Filaments:
    """Partners of the chosen leaders (n,), side by side on the same path; both get a number."""
    leaders.bundle[chosen] = np.flatnonzero(chosen)
    who = np.flatnonzero(chosen)
    length = law.lengths(len(who), rng=rng)
    own = leaders.length_um[who]
    shift = (own - length) / 2 + own * rng.uniform(-0.5, 0.5, len(who))
    side = np.where(rng.random(len(who)) < 0.5, 1.0, -1.0)
    rows = [np.arange(*leaders.path_offset[[k, k + 1]]) for k in who]
    at = np.concatenate([np.empty(0, dtype=np.int64), *rows])
    return Filaments(
        length_um=length,
        path_offset=np.concatenate([[0], np.cumsum([len(r) for r in rows])]).astype(np.int64),
        path_x=leaders.path_x[at],
        path_y=leaders.path_y[at],
        tail_um=leaders.tail_um[who] + shift[:, None, None],
        aside_um=side * rng.uniform(*_BUNDLE_ASIDE_UM, len(who)),
        first_frame=leaders.first_frame[who],
        end_frame=leaders.end_frame[who],
        stuck=leaders.stuck[who],
        bundle=who,
        motion=leaders.motion.select(chosen),
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class FilamentVideo:
    """A film that can be played any number of times, each time the same."""

    filaments: Filaments
    view: View
    shape_px: tuple[int, int]
    optics: FilamentOptics
    faults: FilmFaults
    seed: Sequence[int]  # of the light and the camera

    def frames(self) -> Iterator[FilamentFrame]:
        """The frames in order, made one at a time."""
        return filament_frames(
            self.filaments,
            view=self.view,
            shape_px=self.shape_px,
            optics=self.optics,
            faults=self.faults,
            rng=np.random.default_rng(self.seed),
        )


def make_filament_video(
    *,
    seed: int = 1,
    shape_px: tuple[int, int] = (1024, 1024),
    timing: FrameTiming,
    law: FilamentLaw,
    optics: FilamentOptics,
    faults: FilmFaults | None = None,
    speed_um_s: float = 0.8,
    speed_spread: float = 0.1,
    rotational_diffusion: float = 0.004,
    longitudinal_diffusion: float = 0.0,
    turning_rate: float = 0.0,
    drift_um_s: float = 0.0,
) -> FilamentVideo:
    """A film of filaments of one kind, whose headings turn per path travelled.

    Parameters
    ----------
    speed_um_s, speed_spread : float
        Mean speed, and the relative SD between filaments, which have at most 1.8 times the mean.
    rotational_diffusion : float
        In rad²/s at the mean speed.
    longitudinal_diffusion : float
        In µm²/s.
    turning_rate : float
        In rad/s at the mean speed.
    drift_um_s : float
        Of the stage, in a direction of its own, with as much wandering.
    """
    rng = np.random.default_rng([seed, 0])
    drift = None
    if drift_um_s > 0:
        angle = rng.uniform(-np.pi, np.pi)
        drift = stage_drift(
            timing,
            velocity=drift_um_s * np.array([np.cos(angle), np.sin(angle)]),
            wander=drift_um_s,
            wander_time=30.0,
            rng=rng,
        )
    height, width = (n * optics.pixel_um for n in shape_px)
    view = View(timing=timing, field_um=(width, height), drift_um=drift)

    def motions(n: int) -> Motion:
        factor = np.clip(1 + speed_spread * rng.standard_normal(n), 0.2, _FASTEST)
        return Motion.of(
            n,
            speed=speed_um_s * factor,
            rotational_diffusion=rotational_diffusion * factor,
            turning_rate=turning_rate * factor,
            longitudinal_diffusion=longitudinal_diffusion,
        )

    fastest = Motion.of(
        1,
        speed=speed_um_s * min(_FASTEST, 1 + 4 * speed_spread),
        longitudinal_diffusion=longitudinal_diffusion,
    )
    reach = float(fastest.reach(timing.frame_s * timing.n_frames)[0])
    return FilamentVideo(
        filaments=draw_filaments(law, motions=motions, reach_um=reach, view=view, rng=rng),
        view=view,
        shape_px=shape_px,
        optics=optics,
        faults=FilmFaults() if faults is None else faults,
        seed=(seed, 1),
    )
