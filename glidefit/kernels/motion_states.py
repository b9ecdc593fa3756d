"""Which tracks glide: a mixture of motions whose shares come from all tracks of a recording.

Each state of motion is offered with many values of its parameters (`state_likelihood`), none of
them fixed by a speed or a viscosity: the grids reach from what the noise hides to the longest step.
Summing over the values, weighted by how common they are in the recording, is the marginal
likelihood, which pays for every parameter by itself. The weights come by expectation-maximization.
"""

from __future__ import annotations

import itertools
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from glidefit.kernels import state_likelihood as states
from glidefit.kernels.likelihood import filter_tracks

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

# Log odds that a motion must bring to be seen: its own parameters cost about as much.
_SEEN = 8.0
# What moves fewer σ than this during the longest track creeps with the stage, as far as one can
# tell; creeping is offered from about one σ on.
_SLOWEST_TRAVEL, _CREEP_STEPS = 5.0, 3
# Neighbouring values of a grid differ by these factors.
_SPEED_FACTOR, _RADIUS_FACTOR, _DIFFUSION_FACTOR = 1.7, 1.6, 1.5
# Share of the velocity forgotten per frame; what forgets faster cannot be told from diffusion.
_TURNING = (0.001, 0.02, 0.06, 0.2)
# Diffusion beside gliding, as 4 D over speed² per frame, and noise in units of the usual one.
_BESIDE = ((0.0, 1.0), (0.0, 1.4), (0.03, 1.0), (0.15, 1.0), (0.6, 1.0))
# Gliding takes a filament farther than its own diffusion: speed² / (turning D) is at least this.
_PERSISTENT = 20.0
_STOPS = ((0.01, 0.02), (0.1, 0.3))  # stopping and starting, per frame
_PAUSING_TURNING, _PAUSING_BESIDE = (0.01,), 0.01
# A stage creeps steadily: it forgets no more of its velocity than this per frame.
_CREEP_TURNING = 0.02
_REST_NOISE = (1.0, 1.2, 1.5, 1.9)
_MEMORIES = (0.3, 1.0, 3.0, 10.0, 30.0, 100.0, 300.0)  # of what is confined, in frames
# The usual glider of the recording: rotational diffusion per frame, and 4 D over speed².
_USUAL_TURNING, _USUAL_BESIDE = (0.002, 0.02), (0.01, 0.1)
_USUAL_SPREAD, _USUAL_SLOWEST = 0.25, 0.5
_USUAL_SURE = 0.9
# The step from a wrong first position is longer than so many usual ones and so many σ.
_LONG_STEP, _STEP_NOISE = 5.0, 8.0
# Pseudo-tracks of each state, evenly over its values: nothing is impossible before it is seen.
_PSEUDO_TRACKS = 1.0
_ROUNDS, _CONVERGED = 100, 1e-5


@dataclass(frozen=True, slots=True, kw_only=True)
class StateProbabilities:
    """Probabilities of m tracks, given the shares of the states in the recording.

    Parameters
    ----------
    gliding, at_rest, confined, floating : (m,) arrays
        They sum to 1; NaN for tracks that were not eligible. What creeps with the stage rests.
    slowest : float
        Slowest gliding that was considered, in µm per frame.
    """

    gliding: Floats
    at_rest: Floats
    confined: Floats
    floating: Floats
    slowest: float


def state_probabilities(
    frame: Ints,
    offsets: Ints,
    x: Floats,
    y: Floats,
    *,
    noise: float,
    speed: Floats,
    radius: float,
    creep: float,
    eligible: Bools,
) -> StateProbabilities:
    """Probability that each track rests, is confined, floats or glides.

    Parameters
    ----------
    frame : (n,) array of int
        Increasing within a track; a missing frame is a gap.
    offsets : (m + 1,) array of int
        Track k owns the rows ``offsets[k]:offsets[k + 1]``.
    x, y : (n,) arrays
        Positions in µm.
    noise : float
        Localization error of a coordinate in µm.
    speed : (m,) array
        Rough speed of each track in µm per frame, NaN where unknown.
    radius : float
        Largest distance of what is confined from its place, in µm.
    creep : float
        What moves slower than this share of the typical speed rests on a creeping stage.
    eligible : (m,) array of bool
        Tracks that are judged, and from which the shares are taken.
    """
    probability = np.full((4, len(offsets) - 1), np.nan)
    slowest = float("nan")
    if eligible.any():
        chosen = np.repeat(eligible, np.diff(offsets))
        chosen &= ~_wrong_start(frame, offsets, x, y, noise=noise)
        seen = _Seen.of(frame, offsets, x, y, chosen)
        probability[:, eligible], slowest = _judged(
            seen, noise=seen.least_noise(noise), speed=speed[eligible], radius=radius, creep=creep
        )
    return StateProbabilities(
        gliding=probability[states.GLIDING],
        at_rest=probability[states.AT_REST],
        confined=probability[states.CONFINED],
        floating=probability[states.FLOATING],
        slowest=slowest,
    )


def _wrong_start(frame: Ints, offsets: Ints, x: Floats, y: Floats, *, noise: float) -> Bools:
    """Positions at the start of a track that lie far from the next, (n,), all but the last two.

    Wrong positions later on are borne by the likelihood, but every track starts from its first.
    """
    wrong = np.zeros(len(frame), dtype=bool)
    for first, stop in itertools.pairwise(offsets):
        z = x[first:stop] + 1j * y[first:stop]
        step = np.abs(np.diff(z)) / np.diff(frame[first:stop])
        if len(step) > 2:
            usual = step <= _LONG_STEP * np.median(step) + _STEP_NOISE * noise
            wrong[first : first + min(int(np.argmax(usual)), len(step) - 2)] = True
    return wrong


@dataclass(frozen=True, slots=True, kw_only=True)
class _Seen:
    """The tracks that are judged."""

    frame: Ints
    x: Floats
    y: Floats
    offsets: Ints
    wait: Floats  # different times between positions, in frames
    wait_index: Ints  # which of them lies before each position
    step: Floats  # µm per frame

    @classmethod
    def of(cls, frame: Ints, offsets: Ints, x: Floats, y: Floats, rows: Bools) -> _Seen:
        left = np.add.reduceat(rows, offsets[:-1], dtype=np.int64)
        frame, x, y = frame[rows], x[rows], y[rows]
        offsets = np.concatenate([[0], np.cumsum(left[left > 0])]).astype(np.int64)
        inside = np.ones(len(frame), dtype=bool)
        inside[offsets[:-1]] = False
        since = np.where(inside, np.diff(frame, prepend=frame[0]), 1)
        wait, index = np.unique(since, return_inverse=True)
        return cls(
            frame=frame,
            x=x,
            y=y,
            offsets=offsets,
            wait=wait.astype(np.float64),
            wait_index=index.astype(np.int64),
            step=np.hypot(np.diff(x), np.diff(y))[inside[1:]] / since[1:][inside[1:]],
        )

    @property
    def longest(self) -> float:
        """Duration of the longest track in frames."""
        return float(np.max(self.frame[self.offsets[1:] - 1] - self.frame[self.offsets[:-1]]))

    def least_noise(self, noise: float) -> float:
        """The noise, or a little: without any, one motion would be infinitely likely."""
        return max(noise, 1e-3 * float(np.median(self.step)), 1e-9)


def _judged(
    seen: _Seen, *, noise: float, speed: Floats, radius: float, creep: float
) -> tuple[Floats, float]:
    """Probabilities (4, m) of the families, and the slowest gliding considered."""
    fastest = max(1.5 * float(np.quantile(seen.step, 0.99)), 10 * noise)
    slowest = _SLOWEST_TRAVEL * noise / seen.longest
    offered = _offered(seen, noise, (slowest, fastest), radius)
    likelihood = states.log_likelihoods(
        offered,
        wait_index=seen.wait_index,
        x=seen.x,
        y=seen.y,
        offsets=seen.offsets,
        reach=max(float(np.ptp(seen.x)), float(np.ptp(seen.y)), 100 * noise),
    )
    family = offered.family
    posterior = _posterior(likelihood, family)
    frames = np.diff(seen.offsets) @ posterior
    typical = _typical_speed(posterior.sum(axis=0), frames, family, offered.speed)
    slow = (family == states.GLIDING) & (offered.speed < creep * typical)
    # A stage creeps steadily; to and fro as slowly as that, nothing does.
    steady = (offered.turning <= _CREEP_TURNING) & (offered.running == 1)
    family = np.where(slow, states.AT_REST, family)[steady | ~slow]
    likelihood = likelihood[:, steady | ~slow]
    posterior = _posterior(likelihood, family)
    sure = posterior[:, family == states.GLIDING].sum(axis=1) > _USUAL_SURE
    own = speed[sure & np.isfinite(speed)]
    if len(own) and np.median(own) > 0:
        usual = _usual_gliders(seen, noise=noise, speed=float(np.median(own)))
        likelihood = np.concatenate([likelihood, usual], axis=1)
        family = np.append(family, np.full(usual.shape[1], states.GLIDING))
        posterior = _posterior(likelihood, family)
    of_family = np.stack([posterior[:, family == kind].sum(axis=1) for kind in range(4)])
    return of_family, max(slowest, creep * typical)


def _grid(low: float, high: float, factor: float) -> Floats:
    n = max(int(np.ceil(np.log(high / low) / np.log(factor))), 0) + 1
    return np.asarray(low * factor ** np.arange(n), dtype=np.float64)


def _values(*grids: Sequence[Any] | Floats) -> tuple[Floats, ...]:
    """Every combination of the values, one array for each grid."""
    return tuple(np.array(list(itertools.product(*grids)), dtype=np.float64).T)


def _offered(
    seen: _Seen, noise: float, speeds: tuple[float, float], radius: float
) -> states.Hypotheses:
    wait, longest = seen.wait, seen.longest
    radii = _grid(noise, max(radius, noise), _RADIUS_FACTOR)
    r, memory = _values(radii, [one for one in _MEMORIES if one <= max(longest / 2, 1)])
    # From what is hidden in the noise to steps as long as the longest.
    least, most = (1.5 * noise) ** 2 / longest / 4, speeds[1] ** 2 / 4
    diffusion = _grid(min(least, most), most, _DIFFUSION_FACTOR)
    speed, turning, which = _values(_grid(*speeds, _SPEED_FACTOR), _TURNING, range(len(_BESIDE)))
    beside, factor = np.array(_BESIDE)[which.astype(np.int64)].T
    gliders = states.gliding(
        wait,
        noise=factor * noise,
        speed=speed,
        turning=turning,
        diffusion=beside * speed**2 / 4,
    )
    pausing_speed, pausing_turning = _values(_grid(*speeds, _SPEED_FACTOR), _PAUSING_TURNING)
    running = states.gliding(
        wait,
        noise=noise + 0 * pausing_speed,
        speed=pausing_speed,
        turning=pausing_turning,
        diffusion=_PAUSING_BESIDE * pausing_speed**2 / 4,
    )
    slow, slow_turning = _values(
        speeds[0] * _SPEED_FACTOR ** -np.arange(1.0, _CREEP_STEPS + 1),
        [one for one in _TURNING if one <= _CREEP_TURNING],
    )
    creeping = states.gliding(
        wait, noise=noise + 0 * slow, speed=slow, turning=slow_turning, diffusion=0 * slow
    )
    return states.Hypotheses.join(
        [
            states.at_rest(wait, noise=noise * np.array(_REST_NOISE)),
            replace(creeping, family=np.full(len(slow), states.AT_REST)),
            states.confined(wait, noise=noise + 0 * r, radius=r, memory=memory),
            states.floating(wait, noise=noise + 0 * diffusion, diffusion=diffusion),
            gliders.some(_PERSISTENT * turning * beside <= 4),
            *(states.pausing(wait, running, stop=a, start=b) for a, b in _STOPS),
        ]
    )


def _usual_gliders(seen: _Seen, *, noise: float, speed: float) -> Floats:
    """Log likelihood as active Brownian motion at about the common speed, (m, k)."""
    result = []
    for turning, beside in itertools.product(_USUAL_TURNING, _USUAL_BESIDE):
        found = filter_tracks(
            seen.frame.astype(np.float64),
            seen.x,
            seen.y,
            seen.offsets,
            speed=speed,
            speed_spread=_USUAL_SPREAD * speed,
            rotational_diffusion=turning,
            localization_error=noise,
            longitudinal_diffusion=beside * speed**2 / 4,
        )
        # At hardly any speed it would be diffusion to and fro along the body.
        usual = (found.speed_mean >= _USUAL_SLOWEST * speed) & np.isfinite(found.log_likelihood)
        result.append(np.where(usual, found.log_likelihood, -np.inf))
    positions = np.diff(seen.offsets) - 1
    return np.asarray(np.stack(result, axis=1) + positions[:, None] * np.log(np.pi))


def _posterior(likelihood: Floats, family: Ints) -> Floats:
    """Probability of each hypothesis for each track, their shares by expectation-maximization.

    Parameters
    ----------
    likelihood : (m, k) array
        Logarithms, at least one finite for each track.
    family : (k,) array of int
    """
    relative = np.exp(likelihood - likelihood.max(axis=1, keepdims=True))
    pseudo = _PSEUDO_TRACKS / np.bincount(family, minlength=4)[family]
    share = pseudo / pseudo.sum()
    for _ in range(_ROUNDS):
        counted = share * (relative.T @ (1 / (relative @ share))) + pseudo
        before, share = share, counted / counted.sum()
        if np.abs(share - before).max() < _CONVERGED:
            break
    posterior = relative * share
    return np.asarray(posterior / posterior.sum(axis=1, keepdims=True))


def _typical_speed(tracks: Floats, frames: Floats, family: Ints, speed: Floats) -> float:
    """Median over the filament-frames that glide, of the grid; 0 if hardly a track does."""
    glides = np.flatnonzero(family == states.GLIDING)
    if tracks[glides].sum() < 0.5:
        return 0.0
    order = glides[np.argsort(speed[glides], kind="stable")]
    total = np.cumsum(frames[order])
    return float(speed[order][np.searchsorted(total, total[-1] / 2)])


def smallest_noticed_speed(n_positions: Floats, duration: Floats, *, noise: float) -> Floats:
    """Slowest straight motion that stands out of the noise, in µm/s.

    Along a path of length L evenly visited by n positions, motion is likelier than rest by a
    factor exp(n L² / (24 σ²)).

    Parameters
    ----------
    n_positions, duration : arrays
        Positions and duration in s of a track.
    noise : float
        Localization error in µm.
    """
    return np.asarray(noise * np.sqrt(24 * _SEEN / n_positions) / duration)
