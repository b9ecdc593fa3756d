"""Which spot continues which track: prediction, likelihood of a link, the best set of links.

A track is a position and a velocity with a covariance that is the same for x and y (a Kalman
filter); lengths are µm, times s.
"""

from __future__ import annotations

import dataclasses
import math
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Mask = NDArray[np.bool_]


@dataclass(frozen=True, slots=True, kw_only=True)
class MotionLaw:
    """How spots move from frame to frame, how often they are missed, how often they appear."""

    slow_um_s: float  # standard deviation of a velocity coordinate of the slower ones
    fast_um_s: float  # and of the faster ones
    fast_share: float  # share of the faster ones, 0 to 1
    turning: float  # 1/s, growth of a velocity's variance over its square
    wobble_um: float  # standard deviation of a coordinate beside the localization precision
    missed: float  # chance that a spot that is there is not seen, 0 to 1
    births: float  # tracks that begin, per µm² and frame
    changed: float = 0.02  # chance that a spot starts, stops or turns sharply before a link


@dataclass(frozen=True, slots=True)
class TrackStates:
    """Tracks as they were when last seen, (n,) arrays."""

    track: Ints
    frame: Ints
    time_s: Floats
    seen_x: Floats  # position as it was seen, µm
    seen_y: Floats
    precision: Floats  # of that position, µm
    x: Floats  # position and velocity from all of the track, µm and µm/s
    y: Floats
    vx: Floats
    vy: Floats
    pp: Floats  # variances and covariance of position and velocity
    pv: Floats
    vv: Floats
    young: Mask  # seen only once: velocity unknown

    @classmethod
    def none(cls) -> TrackStates:
        """No track."""
        dtypes = {"track": np.int64, "frame": np.int64, "young": np.bool_}
        return cls(
            *(np.empty(0, dtype=dtypes.get(f.name, np.float64)) for f in dataclasses.fields(cls))
        )

    def select(self, chosen: Ints | Mask) -> TrackStates:
        """Some of the tracks."""
        return TrackStates(*(getattr(self, f.name)[chosen] for f in dataclasses.fields(self)))

    def joined(self, other: TrackStates) -> TrackStates:
        """These tracks and others, sorted by number."""
        both = TrackStates(
            *(
                np.concatenate([getattr(self, f.name), getattr(other, f.name)])
                for f in dataclasses.fields(self)
            )
        )
        return both.select(np.argsort(both.track, kind="stable"))


class Spots(NamedTuple):
    """Spots of one frame, (m,) arrays."""

    frame: int
    time_s: float
    x: Floats
    y: Floats
    precision: Floats


def _seen(spots: Spots, j: Ints) -> TrackStates:
    """Tracks that are seen as spots j and of which nothing else is known."""
    n, zero = len(j), np.zeros(len(j))
    x, y, precision = spots.x[j], spots.y[j], spots.precision[j]
    return TrackStates(
        track=np.arange(n),
        frame=np.full(n, spots.frame),
        time_s=np.full(n, spots.time_s),
        seen_x=x,
        seen_y=y,
        precision=precision,
        x=x,
        y=y,
        vx=zero,
        vy=zero,
        pp=precision**2,
        pv=zero,
        vv=zero,
        young=np.ones(n, dtype=np.bool_),
    )


def born(spots: Spots, j: Ints, *, first_track: int, law: MotionLaw) -> TrackStates:
    """New tracks, numbered on from ``first_track``, at spots j."""
    new = _seen(spots, j)
    return dataclasses.replace(
        new,
        track=first_track + new.track,
        pp=new.pp + law.wobble_um**2,
        vv=np.full(len(j), law.slow_um_s**2),
    )


def predicted(states: TrackStates, *, time_s: float, law: MotionLaw) -> TrackStates:
    """The tracks at a later time; the velocity does a random walk whose size is its own.

    ``pp + 2 Δ pv + Δ² vv + q Δ³/3``, ``pv + Δ vv + q Δ²/2``, ``vv + q Δ`` with
    q = turning (|v|²/2 + vv); frames and times stay those of the last sight.
    """
    dt = time_s - states.time_s
    q = law.turning * ((states.vx**2 + states.vy**2) / 2 + states.vv)
    return dataclasses.replace(
        states,
        x=states.x + dt * states.vx,
        y=states.y + dt * states.vy,
        pp=states.pp + 2 * dt * states.pv + dt**2 * states.vv + q * dt**3 / 3,
        pv=states.pv + dt * states.vv + q * dt**2 / 2,
        vv=states.vv + q * dt,
    )


def reachable(
    states: TrackStates, spots: Spots, *, max_speed: float, noise_sd: float = 3.0
) -> tuple[Ints, Ints]:
    """Pairs of a track and a spot that no more than ``max_speed`` lies between.

    Up to ``max_speed Δ`` from where the track was last seen, Δ the time since then, and
    ``noise_sd`` standard deviations of the distance's noise on top.
    """
    from scipy.spatial import cKDTree

    if len(states.track) == 0 or len(spots.x) == 0:
        return np.empty(0, dtype=np.int64), np.empty(0, dtype=np.int64)
    seen = np.column_stack([states.seen_x, states.seen_y])
    position = np.column_stack([spots.x, spots.y])
    glide = max_speed * (spots.time_s - states.time_s)
    reach = glide + noise_sd * np.hypot(states.precision, spots.precision.max())
    near = cKDTree(position).query_ball_point(seen, reach, return_sorted=True)
    i = np.repeat(np.arange(len(near)), [len(found) for found in near])
    j = np.concatenate([np.asarray(found, dtype=np.int64) for found in near])
    distance = np.hypot(spots.x[j] - states.seen_x[i], spots.y[j] - states.seen_y[i])
    noise = np.hypot(states.precision[i], spots.precision[j])
    possible = distance <= glide[i] + noise_sd * noise
    return i[possible], j[possible]


def _two_laws(
    ahead: TrackStates, i: Ints, spots: Spots, j: Ints, law: MotionLaw
) -> tuple[Floats, Floats]:
    """Log density of finding spot j, if track i goes on as it did and if it changed."""
    square = (spots.x[j] - ahead.x[i]) ** 2 + (spots.y[j] - ahead.y[i]) ** 2
    same = ahead.pp[i] + spots.precision[j] ** 2 + law.wobble_um**2
    other = same + (law.fast_um_s * (spots.time_s - ahead.time_s[i])) ** 2
    share = np.where(ahead.young[i], law.fast_share, law.changed)
    log_same = np.log((1 - share) / (2 * math.pi * same)) - square / (2 * same)
    log_other = np.log(share / (2 * math.pi * other)) - square / (2 * other)
    return log_same, log_other


def link_gain(ahead: TrackStates, i: Ints, spots: Spots, j: Ints, *, law: MotionLaw) -> Floats:
    """Log of how much likelier it is that spot j continues track i than that it does not.

    ``ln f(displacement) + ln((1 - missed) / missed) - ln births``: the alternative is that the
    track is missed or over and another one begins here. A track that was missing already is as
    likely over as not.
    """
    log_same, log_other = _two_laws(ahead, i, spots, j, law)
    missed = np.where(ahead.frame[i] < spots.frame - 1, np.maximum(law.missed, 0.5), law.missed)
    gain: Floats = np.logaddexp(log_same, log_other) + np.log((1 - missed) / missed / law.births)
    return gain


def continued(ahead: TrackStates, i: Ints, spots: Spots, j: Ints, *, law: MotionLaw) -> TrackStates:
    """Tracks i after they were seen as spots j; one that changed has its velocity anew."""
    log_same, log_other = _two_laws(ahead, i, spots, j, law)
    chance = 1 / (1 + np.exp(np.clip(log_same - log_other, -50, 50)))
    dt = spots.time_s - ahead.time_s[i]
    extra = chance * law.fast_um_s**2
    pp, pv, vv = ahead.pp[i] + extra * dt**2, ahead.pv[i] + extra * dt, ahead.vv[i] + extra
    noise = spots.precision[j] ** 2 + law.wobble_um**2
    a, b = pp / (pp + noise), pv / (pp + noise)
    dx, dy = spots.x[j] - ahead.x[i], spots.y[j] - ahead.y[i]
    return dataclasses.replace(
        _seen(spots, j),
        track=ahead.track[i],
        x=ahead.x[i] + a * dx,
        y=ahead.y[i] + a * dy,
        vx=ahead.vx[i] + b * dx,
        vy=ahead.vy[i] + b * dy,
        pp=pp * (1 - a),
        pv=pv * (1 - a),
        vv=vv - b * pv,
        young=np.zeros(len(i), dtype=np.bool_),
    )


def best_links(i: Ints, j: Ints, gain: Floats, *, n_tracks: int, n_spots: int) -> tuple[Ints, int]:
    """The set of links with the largest total gain; every track and spot in at most one.

    Parameters
    ----------
    i, j : (k,) arrays of int
        Track and spot of each possible link, no pair twice.
    gain : (k,) array
        Of each link; not to link gains 0.
    n_tracks, n_spots : int
        How many there are.

    Returns
    -------
    (l,) array of int
        Chosen links, ascending.
    int
        Spots in the largest group whose links compete with each other.
    """
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components, min_weight_full_bipartite_matching

    useful = np.flatnonzero(gain > 0)
    if len(useful) == 0:
        return useful, 0
    i, j, gain = i[useful], j[useful], gain[useful]
    size = n_tracks + n_spots
    _, group = connected_components(
        coo_array((np.ones(len(i)), (i, n_tracks + j)), shape=(size, size)), directed=False
    )
    largest = int(np.bincount(group[n_tracks:][np.unique(j)]).max())
    # Each track and each spot also has a partner that stands for "none"; partners of a track and
    # a spot that are linked go together. So a full matching always exists.
    worst = float(gain.max()) + 1
    tracks, spots = np.arange(n_tracks), np.arange(n_spots)
    rows = np.concatenate([i, tracks, n_tracks + spots, n_tracks + j])
    columns = np.concatenate([j, n_spots + tracks, spots, n_spots + i])
    cost = np.concatenate([worst - gain, np.full(n_tracks + n_spots + len(i), worst)])
    graph = coo_array((cost, (rows, columns)), shape=(size, size)).tocsr()
    partner = np.full(size, -1)
    row, column = min_weight_full_bipartite_matching(graph)
    partner[row] = column
    return useful[partner[i] == j], largest


def clear_steps(before: Spots, after: Spots, *, max_speed: float) -> tuple[Ints, Ints]:
    """Pairs of spots of two frames that are each other's nearest, all others twice as far away."""
    from scipy.spatial import cKDTree

    if min(len(before.x), len(after.x)) == 0:
        return np.empty(0, dtype=np.int64), np.empty(0, dtype=np.int64)
    old, new = (np.column_stack([spots.x, spots.y]) for spots in (before, after))
    forth, target = map(np.asarray, cKDTree(new).query(old, k=[1, 2]))
    back, source = map(np.asarray, cKDTree(old).query(new, k=[1, 2]))
    i, j = np.arange(len(old)), target[:, 0]
    clear = (source[j, 0] == i) & (2 * forth[:, 0] <= forth[:, 1]) & (2 * back[j, 0] <= back[j, 1])
    clear &= forth[:, 0] <= max_speed * (after.time_s - before.time_s)
    return i[clear], j[clear].astype(np.int64)


def speed_mixture(
    square: Floats, dt: Floats, noise: Floats, *, max_speed: float
) -> tuple[float, float, float]:
    """Standard deviations of a velocity coordinate of slow and fast steps, share of the fast.

    Squared steps (n,) in µm² with the variance of each coordinate's noise, taken as two Gaussians
    in the plane and a rest of chance pairs that are spread evenly within reach; by expectation
    maximization, 50 rounds from the quantiles.
    """
    squared_speed = np.maximum(square / 2 - noise, 0.0) / dt**2
    sd = np.sqrt(np.quantile(squared_speed, [0.1, 0.9]))
    sd = np.maximum(sd, max_speed * np.array([1e-3, 1e-2]))
    share = np.array([0.45, 0.45, 0.1])
    chance = 1 / (math.pi * (max_speed * dt) ** 2)
    for _ in range(50):
        variance = np.outer(sd**2, dt**2) + noise
        density = np.exp(-square / (2 * variance)) / (2 * math.pi * variance)
        part = share[:, None] * np.vstack([density, chance])
        part /= part.sum(axis=0)
        share = np.maximum(part.mean(axis=1), 1e-3)
        total = np.maximum(part[:2].sum(axis=1), 1e-9)
        sd = np.sqrt(np.maximum((part[:2] @ ((square / 2 - noise) / dt**2)) / total, 0.0))
        sd = np.maximum(sd, max_speed * np.array([1e-3, 1e-2]))
    slow, fast = sorted(sd)
    part = share[:2][np.argsort(sd, kind="stable")]
    return float(slow), float(fast), float(part[1] / part.sum())


def turning_and_wobble(
    x: Floats, y: Floats, time_s: Floats, precision: Floats
) -> tuple[float | None, float | None]:
    """Turning (1/s) and wobble (µm) of tracks from runs of five frames in a row, (n, 5) arrays.

    The second difference over a time T has the variance ``6 r² + 2/3 q T³`` per coordinate, with
    r² = precision² + wobble² and q = turning v²/2; two values of T tell q and r where a track
    moves, one tells r where it does not. Medians, so that stops and wrong links do not count.

    Returns
    -------
    turning, wobble : float or None
        None where fewer than 20 runs could tell; of the wobbles of moving and resting tracks the
        larger one.
    """
    runs = np.ptp(np.diff(time_s, axis=1), axis=1) < 0.05 * (time_s[:, 4] - time_s[:, 0])
    distance = np.hypot(x[:, 4] - x[:, 0], y[:, 4] - y[:, 0])
    far = distance > 6 * np.sqrt(np.mean(precision**2, axis=1))
    turning, wobbles = None, []
    for moving, chosen in ((True, runs & far), (False, runs & ~far)):
        if chosen.sum() < 20:
            continue
        short, long = (_bend_variance(x[chosen], y[chosen], k) for k in (1, 2))
        q, t = 0.0, float(np.median(time_s[chosen, 4] - time_s[chosen, 0])) / 4
        if moving:
            q = max(0.0, (long - short) / (2 / 3 * (2**3 - 1) * t**3))
            turning = 2 * q / (float(np.median(distance[chosen])) / (4 * t)) ** 2
        noise = (short - 2 / 3 * q * t**3) / 6 - float(np.median(precision[chosen])) ** 2
        wobbles.append(math.sqrt(max(0.0, noise)))
    return turning, max(wobbles) if wobbles else None


def _bend_variance(x: Floats, y: Floats, k: int) -> float:
    """Variance of the second difference over k frames around the middle one of five."""
    bends = np.concatenate([a[:, 2 + k] - 2 * a[:, 2] + a[:, 2 - k] for a in (x, y)])
    return float(np.median(bends**2)) / 0.455  # the median of a squared Gaussian
