"""How long a filament that runs and pauses has run between two positions.

A filament stops at a rate s while it runs and goes on at a rate g while it pauses. Over a time h
it has run for a part R of it. Given its modes at both ends, R has atoms at h (always running) and
0 (always paused) and a density::

    run → pause:  s exp(-s R - g (h - R)) I0(2 √y),  y = s g R (h - R)
    pause → run:  g exp(-s R - g (h - R)) I0(2 √y)
    run → run:    s g R exp(-s R - g (h - R)) I1(2 √y) / √y
    pause → pause: the same with h - R in place of the factor R

The interval ends with an exposure of length e, so a displacement at time t enters the mean
position with the weight w(t) = 1 before the exposure and (h - t) / e in it; M is the integral of
w over the running time. A *branch* is a pair of modes: its
probability, mean and covariance of (R, M), and how noise of the heading enters.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit
from numpy.typing import NDArray

from glidefit.kernels.heading_filter import COMPILED

Floats = NDArray[np.float64]

# The branches, by the modes at both ends.
RUNNING, RESTING, STOPPING, STARTING = 0, 1, 2, 3
N_BRANCHES = 4
# What a branch is: its probability given the mode before; mean running time R and weighted running
# time M, their covariance; and over the weighted running time, in units of R: mean ρ, variance of
# ρ, variance of the heading's mean, its covariance with the heading's mean over all of R (both in
# units of 2 D_r R), ∫w², ∫w.
SHARE, RUN, WEIGHTED, VAR_RUN, COV_RUN, VAR_WEIGHTED = 0, 1, 2, 3, 4, 5
PLACE, RIPPLE, OWN, SHARED, SQUARE, AREA = 6, 7, 8, 9, 10, 11
N_COLUMNS = 12

_NODE, _WEIGHT = np.polynomial.legendre.leggauss(8)
_NODE, _WEIGHT = (_NODE + 1) / 2, _WEIGHT / 2
# Terms of the series of the Bessel functions.
_MOST_TERMS = 200


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def fill_branches(table: Floats, h: float, exposure: float, stop: float, go: float) -> None:
    """Fill the table (4, 12) of the branches of an interval; both rates must be > 0."""
    dark, rate = h - exposure, stop + go
    moved = -math.expm1(-rate * h) / rate
    sums = np.zeros(6)
    for branch in (RUNNING, RESTING):
        # What never switched, and what left and came back.
        leave = stop if branch == RUNNING else go
        atom, run = math.exp(-leave * h), h if branch == RUNNING else 0.0
        _sum_twice(sums, branch, h, dark, exposure, stop, go)
        _scale(sums, max(1 - leave * moved - atom, 0.0))
        _add(sums, atom, run, _weighted(run, dark, exposure))
        _branch(table[branch], sums, branch, h, dark, exposure)
    for branch in (STOPPING, STARTING):
        _sum_once(sums, branch, h, dark, exposure, stop, go)
        _scale(sums, (stop if branch == STOPPING else go) * moved)
        _branch(table[branch], sums, branch, h, dark, exposure)


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def _weighted(t: float, dark: float, exposure: float) -> float:
    """Integral of w from 0 to t."""
    if t <= dark or exposure <= 0:
        return t
    return t - (t - dark) ** 2 / (2 * exposure)


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def _density(run: float, h: float, stop: float, go: float, order: int) -> float:
    """Density of a running time but for factors, with I0 (one switch) or I1 (two)."""
    y = stop * go * run * (h - run)
    term, total = 1.0, 1.0
    for k in range(1, _MOST_TERMS):
        term *= y / (k * (k + order))
        total += term
        if term < 1e-16 * total:
            break
    return total * math.exp(-stop * run - go * (h - run))


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def _add(sums: Floats, weight: float, run: float, weighted: float) -> None:
    sums[0] += weight
    sums[1] += weight * run
    sums[2] += weight * weighted
    sums[3] += weight * run * run
    sums[4] += weight * run * weighted
    sums[5] += weight * weighted * weighted


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def _scale(sums: Floats, probability: float) -> None:
    """Give what was summed this probability."""
    if sums[0] > 0:
        sums *= probability / sums[0]


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def _sum_once(
    sums: Floats, branch: int, h: float, dark: float, exposure: float, stop: float, go: float
) -> None:
    """Running times that end in the other mode, taken to lie all together."""
    sums[:] = 0.0
    whole = _weighted(h, dark, exposure)
    for node, weight in zip(_NODE, _WEIGHT):  # noqa: B905 - not known where it is compiled
        run = node * h
        if branch == STOPPING:
            weighted = _weighted(run, dark, exposure)
        else:
            weighted = whole - _weighted(h - run, dark, exposure)
        _add(sums, weight * _density(run, h, stop, go, 0), run, weighted)


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def _sum_twice(
    sums: Floats, branch: int, h: float, dark: float, exposure: float, stop: float, go: float
) -> None:
    """Running times that end in the mode they began in; the time away lies anywhere, together."""
    sums[:] = 0.0
    whole = _weighted(h, dark, exposure)
    for node, weight in zip(_NODE, _WEIGHT):  # noqa: B905
        away = node * h
        run = h - away if branch == RUNNING else away
        density = weight * (h - away) * _density(run, h, stop, go, 1)
        for place, share in zip(_NODE, _WEIGHT):  # noqa: B905
            left = place * (h - away)
            weighted = _weighted(left + away, dark, exposure) - _weighted(left, dark, exposure)
            _add(sums, share * density, run, whole - weighted if branch == RUNNING else weighted)


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def _branch(row: Floats, sums: Floats, branch: int, h: float, dark: float, exposure: float) -> None:
    """Write a branch from its sums."""
    run, weighted = sums[1] / sums[0], sums[2] / sums[0]
    row[SHARE], row[RUN], row[WEIGHTED] = sums[0], run, weighted
    row[VAR_RUN] = max(sums[3] / sums[0] - run * run, 0.0)
    row[COV_RUN] = sums[4] / sums[0] - run * weighted
    row[VAR_WEIGHTED] = max(sums[5] / sums[0] - weighted * weighted, 0.0)
    # Running time ρ passes at t = start + stretch ρ: first, last, or spread over all of h.
    start, stretch, length = 0.0, 1.0, max(run, 1e-12 * h)
    if branch in (RUNNING, RESTING):
        stretch = h / length
    elif branch == STARTING:
        start = h - length
    _shape(row, length, start, stretch, dark, exposure)


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def _shape(
    row: Floats, run: float, start: float, stretch: float, dark: float, exposure: float
) -> None:
    """How the heading's noise along the running time enters the mean position."""
    end = _weighted(start + stretch * run, dark, exposure)
    bent = min(max((dark - start) / stretch, 0.0), run)
    area = (end - _weighted(start, dark, exposure)) / stretch
    first, second, own, shared, square = 0.0, 0.0, 0.0, 0.0, 0.0
    for low, high in ((0.0, bent), (bent, run)):
        for node, weight in zip(_NODE, _WEIGHT):  # noqa: B905
            rho = low + node * (high - low)
            t = start + stretch * rho
            w = 1.0 if t <= dark or exposure <= 0 else 1 - (t - dark) / exposure
            later = (end - _weighted(t, dark, exposure)) / stretch
            width = weight * (high - low)
            first += width * w * rho
            second += width * w * rho * rho
            own += width * later * later
            shared += width * later * (run - rho)
            square += width * w * w
    place = first / area
    row[PLACE] = place / run
    row[RIPPLE] = (second / area - place * place) / (run * run)
    row[OWN] = own / (area * area * run)
    row[SHARED] = shared / (area * run * run)
    row[SQUARE], row[AREA] = square / run, area / run
