"""Poisson numbers for whole frames, exact and fast: compiled, from tables."""

from __future__ import annotations

import functools
import math
from typing import Any

import numpy as np
from numba import njit
from numpy.typing import NDArray

Floats = NDArray[np.float64]

COMPILED: dict[str, Any] = {"cache": True, "error_model": "numpy"}
_LEVEL = 0.25  # between the means that have a table
_HIGHEST = 256.0  # mean up to which there are tables
_GUIDES = 256
_ONE = 2.0**32


def poisson_counts(expected: Floats, *, rng: np.random.Generator) -> NDArray[np.float32]:
    """Poisson numbers of any mean, in the shape of ``expected``.

    A number of mean λ is one of the table's mean just below λ plus one of the small rest; means
    above 256 are left to the generator. Probabilities are exact to 2⁻³².
    """
    if not expected.min(initial=0.0) >= 0:
        raise ValueError("expected must be >= 0")
    below, guide = _tables()
    flat = expected.ravel()
    bits = rng.integers(0, 2**64, size=flat.size, dtype=np.uint64)
    counts: NDArray[np.float32] = _from_tables(flat, bits, below, guide)
    bright = np.flatnonzero(flat >= _HIGHEST)
    counts[bright] = rng.poisson(flat[bright])
    return counts.reshape(expected.shape)


@functools.cache
def _tables() -> tuple[NDArray[np.uint32], NDArray[np.uint16]]:
    """Chance of at most k, as 32-bit integers, (levels, k); the k at which to begin to look."""
    from scipy.special import pdtr

    means = np.arange(0, _HIGHEST, _LEVEL)
    k = np.arange(int(_HIGHEST + 8 * math.sqrt(_HIGHEST)))
    below = np.minimum(np.rint(pdtr(k, means[:, None]) * _ONE), _ONE - 1).astype(np.uint32)
    below[:, -1] = 2**32 - 1
    starts = np.arange(_GUIDES, dtype=np.uint32) << 24
    guide = np.stack([np.searchsorted(row, starts, side="right") for row in below])
    return below, guide.astype(np.uint16)


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def _from_tables(
    expected: Floats,
    bits: NDArray[np.uint64],
    below: NDArray[np.uint32],
    guide: NDArray[np.uint16],
) -> NDArray[np.float32]:
    counts = np.zeros(len(expected), dtype=np.float32)
    for i in range(len(expected)):
        if expected[i] >= _HIGHEST:
            continue
        level = int(expected[i] / _LEVEL)
        rest = expected[i] - level * _LEVEL
        first = bits[i] >> np.uint64(32)
        k = guide[level, first >> np.uint64(24)]
        while k < below.shape[1] - 1 and below[level, k] <= first:
            k += 1
        second = (bits[i] & np.uint64(0xFFFFFFFF)) / _ONE
        # exp(-rest) is at least 1 - rest, which is enough for most.
        if second >= 1 - rest:
            term = math.exp(-rest)
            total, more = term, 0
            while second >= total and more < 20:
                more += 1
                term *= rest / more
                total += term
            k += more
        counts[i] = k
    return counts
