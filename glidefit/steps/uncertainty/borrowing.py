"""What the conditions of a study lend each other: chamber variance, and the variance of days."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from glidefit.evidence import BorrowedSpread, ChamberEvidence
from glidefit.kernels.pooling import Scatter, borrowed_days, pooled_chambers, scatter
from glidefit.settings import IntervalSettings
from glidefit.steps.uncertainty import RULES, _Rule
from glidefit.steps.uncertainty.levels import mean_of

Floats = NDArray[np.float64]

# A condition lends the variance of its days if it has so many, and so many times those of the
# other: from 5 degrees of freedom on Student's t gains little more.
FEWEST_DAYS, TIMES_THE_DAYS = 6, 2
# What scatters more than this, relative to its value, is hardly resolved and neither lends nor
# borrows.
_MOST_SCATTER = 0.5

Evidence = tuple[Sequence[ChamberEvidence], Mapping[str, int]]


@dataclass(frozen=True, slots=True, kw_only=True)
class _Known:
    """Scatter of one quantity of one condition, and the unit of its scale."""

    name: str
    scatter: Scatter
    unit: float


def borrowed_spreads(
    conditions: Mapping[str, Iterable[Evidence]], *, control: str, settings: IntervalSettings
) -> dict[str, dict[str, BorrowedSpread]]:
    """For every condition the quantities whose scatter other conditions tell better.

    - The variance of days, with the condition's own day × condition part in it, is borrowed from
      the control if it has at least 6 days and twice those of the condition; otherwise from the
      condition of most days, if that has. A condition filmed on one day borrows likewise if it
      has two chambers or more, and those scatter as the lender's do.
    - The variance of chambers is pooled over all conditions for one filmed on a single day.

    Both only where the condition scatters like the others (`kernels.pooling.alike`). Conditions
    that share their days do not pool the variance of days: it is not independent.

    Parameters
    ----------
    conditions : mapping
        Name of a condition: chambers and columns of its fit, and of its motility.
    control : str
        "" without one.
    settings : IntervalSettings

    Returns
    -------
    dict
        By condition, by quantity; only what is borrowed.
    """
    evidence = {name: list(parts) for name, parts in conditions.items()}
    out: dict[str, dict[str, BorrowedSpread]] = {name: {} for name in evidence}
    for key, rule in RULES.items():
        known = {
            name: found
            for name, parts in sorted(evidence.items())
            if rule.relative_to and (found := _known(name, parts, rule)) is not None
        }
        for name, own in known.items():
            others = [one for other, one in known.items() if other != name]
            spread = _spread(own, others, control, settings.level)
            if spread is not None:
                out[name][key] = spread
    return out


def _known(name: str, parts: Sequence[Evidence], rule: _Rule) -> _Known | None:
    """Scatter of a quantity; None if the condition does not have it, or it is hardly resolved."""
    for chambers, columns in parts:
        if all(column in columns for column in rule.columns):
            return _scatter(name, chambers, [columns[column] for column in rule.columns], rule)
    return None


def _scatter(
    name: str, chambers: Sequence[ChamberEvidence], columns: list[int], rule: _Rule
) -> _Known | None:
    there = [c for c in chambers if np.isfinite(c.values[columns]).all()]
    if not there:
        return None
    values = np.array([c.values[columns] for c in there])
    days = list(dict.fromkeys(c.day for c in there))
    day = np.array([days.index(c.day) for c in there])
    centre = mean_of(np.array([mean_of(values[day == d]) for d in range(len(days))]))
    unit = rule.unit(float(rule.scale(*centre)))
    each = rule.scale(*values.T)
    if not (unit > 0 and np.all(values > 0)):
        return None
    filament = [_filaments(c, columns, rule) / unit**2 for c in there]
    found = scatter(each / unit, day, np.array(filament))
    square = found.day_square if found.days > 1 else found.chamber_square
    if found.chambers < 2 or not square <= _MOST_SCATTER**2:
        return None
    return _Known(name=name, scatter=found, unit=unit)


def _filaments(chamber: ChamberEvidence, columns: list[int], rule: _Rule) -> float:
    """Sampling variance that the filaments of a chamber bring, on the scale of the rule."""
    values = chamber.values[columns]
    moved = rule.scale(*(values + chamber.influence[:, columns]).T) - rule.scale(*values)
    return len(moved) * float(moved.var(ddof=1)) if len(moved) > 1 else 0.0


def _spread(
    own: _Known, others: Sequence[_Known], control: str, level: float
) -> BorrowedSpread | None:
    lender = _lender(own, others, control)
    found = lender and borrowed_days(own.scatter, lender.scatter, level=level)
    if lender and found:
        return BorrowedSpread(
            half_width=found[0] * own.unit,
            df=found[1],
            covers="days",
            sources=(lender.name,),
            method=f"Student's t with {found[1]} degrees of freedom, the variance between days "
            f"borrowed from the {lender.scatter.days} days of {lender.name}",
        )
    if own.scatter.days > 1:
        return None
    pooled = pooled_chambers(own.scatter, [one.scatter for one in others], level=level)
    if pooled is None:
        return None
    sources = tuple(one.name for one in others if one.scatter.chamber_df > 0)
    return BorrowedSpread(
        half_width=pooled[0] * own.unit,
        df=pooled[1],
        covers="chambers",
        sources=sources,
        method=f"Student's t with {pooled[1]} degrees of freedom, the variance between chambers "
        f"pooled with {', '.join(sources)}",
    )


def _lender(own: _Known, others: Sequence[_Known], control: str) -> _Known | None:
    """The control, or else the condition of most days, if it has enough of them."""
    enough = max(FEWEST_DAYS, TIMES_THE_DAYS * own.scatter.days)
    able = [one for one in others if one.scatter.days >= enough]
    first = sorted(able, key=lambda one: (one.name != control, -one.scatter.days, one.name))
    return first[0] if first else None
