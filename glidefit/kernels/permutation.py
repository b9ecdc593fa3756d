"""Exact permutation tests of few units, and the smallest p value that a design can give."""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

# Up to so many arrangements are enumerated; beyond, they are drawn.
MOST_ENUMERATED = 100_000
_DRAWN = 99_999
# Sums of the same numbers in another order differ in their last digits.
_SAME = 1e-9


@dataclass(frozen=True, slots=True, kw_only=True)
class Permutation:
    """Two-sided permutation p value, and the smallest one that the design can give."""

    p_value: float
    smallest: float
    exact: bool  # all arrangements were enumerated


def sign_flips(differences: Floats, *, rng: np.random.Generator) -> Permutation:
    """Test that paired differences lie symmetrically about zero, by flipping their signs.

    The statistic is the absolute sum; all 2^n arrangements are enumerated where that can be done.

    Parameters
    ----------
    differences : (n,) array
        One a pair, n >= 1.
    rng : Generator
        Used only when there are too many arrangements.

    References
    ----------
    Fisher, The Design of Experiments (1935), chapter III; (b + 1)/(m + 1) for drawn arrangements:
    Phipson & Smyth, Stat. Appl. Genet. Mol. Biol. 9, 39 (2010); from memory.
    """
    n = len(differences)
    if n < 1:
        raise ValueError("there is no difference")
    smallest = 2.0 / 2.0**n
    if 2.0**n <= MOST_ENUMERATED:
        codes = np.arange(2**n)[:, np.newaxis] >> np.arange(n) & 1
        sums = np.abs((1 - 2 * codes) @ differences)
        return Permutation(p_value=_share(sums, sums[0]), smallest=smallest, exact=True)
    signs = rng.choice(np.array([-1.0, 1.0]), size=(_DRAWN, n))
    sums = np.abs(signs @ differences)
    p_value = _drawn_share(sums, abs(float(differences.sum())))
    return Permutation(p_value=p_value, smallest=max(smallest, 1 / (_DRAWN + 1)), exact=False)


def label_permutations(first: Floats, second: Floats, *, rng: np.random.Generator) -> Permutation:
    """Test that two groups are alike, by exchanging their members.

    The statistic is the absolute difference of means; all splits are enumerated where that can
    be done.

    Parameters
    ----------
    first, second : (n,) and (m,) arrays
        At least one value each.
    rng : Generator
        Used only when there are too many splits.
    """
    n, m = len(first), len(second)
    if min(n, m) < 1:
        raise ValueError("a group is empty")
    pooled = np.concatenate([first, second])
    total = float(pooled.sum())
    splits = math.comb(n + m, n)
    # In groups of one size the mirror image of a split differs as much as the split itself.
    smallest = (2.0 if n == m else 1.0) / splits

    def differences(sums: Floats) -> Floats:
        return np.abs(sums / n - (total - sums) / m)

    seen = float(differences(np.array([first.sum()]))[0])
    if splits <= MOST_ENUMERATED:
        members = np.array(list(itertools.combinations(range(n + m), n)))
        every = differences(pooled[members].sum(axis=1))
        return Permutation(p_value=_share(every, seen), smallest=smallest, exact=True)
    order = rng.permuted(np.tile(pooled, (_DRAWN // 10, 1)), axis=1)
    drawn = differences(order[:, :n].sum(axis=1))
    return Permutation(
        p_value=_drawn_share(drawn, seen),
        smallest=max(smallest, 1 / (len(drawn) + 1)),
        exact=False,
    )


def _share(every: Floats, seen: float) -> float:
    """Share of arrangements at least as extreme as the one seen, which is among them."""
    return float(np.mean(every >= seen - _SAME * max(1.0, seen)))


def _drawn_share(drawn: Floats, seen: float) -> float:
    as_extreme = int(np.sum(drawn >= seen - _SAME * max(1.0, seen)))
    return (as_extreme + 1) / (len(drawn) + 1)
