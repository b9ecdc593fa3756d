"""Which days or chambers of two conditions belong together, and what that leaves to compare."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from glidefit.kernels import paired as t_tests
from glidefit.kernels import permutation
from glidefit.kernels.paired import Difference
from glidefit.kernels.permutation import Permutation
from glidefit.results import NAN

Floats = NDArray[np.float64]
Key = tuple[str, str]  # day, chamber
# The value of a group of chambers on the scale on which differences are taken.
Measure = Callable[[Sequence[Key]], float]
Group = tuple[Key, ...]

BY_CHAMBER, BY_DAY = "chambers of days", "days"
CHAMBERS_OF_A_DAY, WITHIN_A_DAY = "chambers of one day", "within one day"
SAMPLES, BORROWED, NOTHING = "two samples", "borrowed spread", "nothing"
# With so many days each, two samples of days say more than the single day that they share.
_ENOUGH_DAYS = 3


@dataclass(frozen=True, slots=True, kw_only=True)
class Arrangement:
    """What is compared with what: pairs of groups of chambers, or two samples of groups.

    Parameters
    ----------
    kind : str
        One of the names above.
    covers : str
        "days", "chambers" or "".
    units : tuple of (day, chamber or "")
        Of the pairs.
    pairs : tuple
        For each unit the pairs of groups whose differences are averaged.
    samples : two tuples of groups
        Of unpaired designs.
    """

    kind: str
    covers: str
    units: tuple[Key, ...] = ()
    pairs: tuple[tuple[tuple[Group, Group], ...], ...] = ()
    samples: tuple[tuple[Group, ...], tuple[Group, ...]] = ((), ())

    @property
    def paired(self) -> bool:
        """True where one value is the difference of two that belong together."""
        return bool(self.units)


@dataclass(frozen=True, slots=True, kw_only=True)
class Judged:
    """A difference as its design allows it to be judged."""

    difference: Difference
    permutation: Permutation | None
    units: tuple[tuple[Key, float], ...]  # of paired designs
    problem: str = ""


def arrange(first: Iterable[Key], second: Iterable[Key]) -> Arrangement:
    """Pair two conditions by the highest level that they share.

    Parameters
    ----------
    first, second : iterables of (day, chamber)
        Chambers of the condition and of its reference that have a value.
    """
    one, two = _by_day(first), _by_day(second)
    shared = [day for day in one if day in two]
    chambers = {day: [k for k in one[day] if k in two[day]] for day in shared}
    if len(shared) >= 2:
        return _paired_days(one, two, shared, chambers)
    within = _within_day(one, two, shared, chambers)
    days = min(len(one), len(two))
    if within is not None and days < _ENOUGH_DAYS:
        return within
    samples = (tuple(map(tuple, one.values())), tuple(map(tuple, two.values())))
    if days >= 2:
        return Arrangement(kind=SAMPLES, covers="days", samples=samples)
    if days == 1 and len(one) + len(two) >= 3 and not shared:
        return Arrangement(kind=BORROWED, covers="days", samples=samples)
    return Arrangement(kind=NOTHING, covers="", samples=samples)


def _by_day(keys: Iterable[Key]) -> dict[str, list[Key]]:
    days: dict[str, list[Key]] = {}
    for key in sorted(keys):
        days.setdefault(key[0], []).append(key)
    return days


def _paired_days(
    one: dict[str, list[Key]],
    two: dict[str, list[Key]],
    shared: list[str],
    chambers: dict[str, list[Key]],
) -> Arrangement:
    pairs: tuple[tuple[tuple[Group, Group], ...], ...]
    by_chamber = all(chambers[day] for day in shared)
    if by_chamber:
        pairs = tuple(tuple(((key,), (key,)) for key in chambers[day]) for day in shared)
    else:
        pairs = tuple(((tuple(one[day]), tuple(two[day])),) for day in shared)
    return Arrangement(
        kind=BY_CHAMBER if by_chamber else BY_DAY,
        covers="days",
        units=tuple((day, "") for day in shared),
        pairs=pairs,
    )


def _within_day(
    one: dict[str, list[Key]],
    two: dict[str, list[Key]],
    shared: list[str],
    chambers: dict[str, list[Key]],
) -> Arrangement | None:
    """Chambers of the one shared day, if there are enough of them."""
    if not shared:
        return None
    day = shared[0]
    if len(chambers[day]) >= 2:
        return Arrangement(
            kind=CHAMBERS_OF_A_DAY,
            covers="chambers",
            units=tuple(chambers[day]),
            pairs=tuple((((key,), (key,)),) for key in chambers[day]),
        )
    if min(len(one[day]), len(two[day])) >= 2:
        samples = (tuple((k,) for k in one[day]), tuple((k,) for k in two[day]))
        return Arrangement(kind=WITHIN_A_DAY, covers="chambers", samples=samples)
    return None


def judge(
    arrangement: Arrangement, first: Measure, second: Measure, *, rng: np.random.Generator
) -> Judged:
    """The difference first - second, by Student's t and by permutation.

    Parameters
    ----------
    arrangement : Arrangement
    first, second : callables
        Value of a group of chambers of each condition, NaN where there is none.
    rng : Generator
        For permutations that are too many to enumerate.
    """
    if arrangement.paired:
        return _judge_pairs(arrangement, first, second, rng)
    one = np.array([first(group) for group in arrangement.samples[0]])
    two = np.array([second(group) for group in arrangement.samples[1]])
    if not (np.isfinite(one).all() and np.isfinite(two).all() and len(one) and len(two)):
        return _nothing("not resolved: a value of one of them is not above zero")
    if arrangement.kind == NOTHING:
        value = float(one.mean() - two.mean())
        return Judged(
            difference=Difference(value=value, error=NAN, df=0), permutation=None, units=()
        )
    test = t_tests.borrowed_difference
    if arrangement.kind != BORROWED:
        test = t_tests.welch_difference
    return Judged(
        difference=test(one, two),
        permutation=permutation.label_permutations(one, two, rng=rng),
        units=(),
    )


def _judge_pairs(
    arrangement: Arrangement, first: Measure, second: Measure, rng: np.random.Generator
) -> Judged:
    differences = np.array(
        [np.mean([first(a) - second(b) for a, b in pairs]) for pairs in arrangement.pairs]
    )
    if not np.isfinite(differences).all():
        return _nothing("not resolved: the value of a day or chamber is not above zero")
    return Judged(
        difference=t_tests.paired_difference(differences),
        permutation=permutation.sign_flips(differences, rng=rng),
        units=tuple(zip(arrangement.units, differences.tolist(), strict=True)),
    )


def _nothing(problem: str) -> Judged:
    return Judged(
        difference=Difference(value=math.nan, error=math.nan, df=0),
        permutation=None,
        units=(),
        problem=problem,
    )
