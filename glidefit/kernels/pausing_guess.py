"""Rough values of how filaments run and pause, from the lengths of their steps."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from glidefit.kernels.gliding_data import GlidingData, first_guess

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

# Steps are taken over so long that those of running filaments, the longer half, are as many
# localization errors long.
_CLEAR = 8.0
# A step shorter than this share of a running one is at rest.
_REST = 0.4


def pausing_guess(data: GlidingData) -> dict[str, float]:
    """Rough values of all parameters of filaments that pause.

    Steps over a few positions fall into long and short ones. A pause shows as a row of short
    steps, longer than the pause by the part of a step at either end that would still be short.
    """
    guess = first_guess(data)
    lag, length, rows = _clear_steps(data, np.sqrt(guess["localization_variance"]))
    wait = float(np.median(data.time_s[rows + lag] - data.time_s[rows]))
    running = float(np.quantile(length, 0.75))
    rest = length < _REST * running
    track = np.repeat(np.arange(len(data.offsets) - 1), np.diff(data.offsets))[rows]
    follows = np.concatenate([[False], (track[1:] == track[:-1]) & rest[:-1]])
    n_pauses = int((rest & ~follows).sum())
    spacing = wait / lag
    observed = spacing * len(rest)
    # As if half a pause were seen beyond those that were.
    pause = (spacing * rest.sum() + wait) / (n_pauses + 0.5) + (1 - 2 * _REST) * wait
    paused = min((n_pauses + 0.5) * pause / observed, 0.9)
    go = 1 / pause
    speed = running / wait
    return guess | {
        "speed": speed,
        "rotational_diffusion": guess["rotational_diffusion"] / (1 - paused),
        "speed_variance": (0.1 * speed) ** 2,
        "stop_rate": go * paused / (1 - paused),
        "go_rate": go,
    }


def _clear_steps(data: GlidingData, error: float) -> tuple[int, Floats, NDArray[np.int64]]:
    """Lag in positions, lengths of the steps over it, their first rows."""
    track = np.repeat(np.arange(len(data.offsets) - 1), np.diff(data.offsets))
    longest = max(1, int(np.diff(data.offsets).max()) // 4)
    lag = 1
    while True:
        rows = np.flatnonzero(track[lag:] == track[:-lag])
        length = np.hypot(data.x[rows + lag] - data.x[rows], data.y[rows + lag] - data.y[rows])
        if 2 * lag > longest or np.quantile(length, 0.75) > _CLEAR * error:
            return lag, length, rows
        lag *= 2
