"""Combine chambers by level, and say how far the result reaches: nested draws, t quantiles."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from glidefit.evidence import BorrowedSpread, ChamberEvidence, Combined
from glidefit.kernels import resampling
from glidefit.results import Estimate
from glidefit.settings import IntervalSettings
from glidefit.steps.uncertainty.fraction_limits import all_or_none, inside
from glidefit.steps.uncertainty.levels import (
    chamber_error,
    drawn_means,
    inner_error,
    mean_of,
    spread_of,
)

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

LEVELS = ("days", "chambers", "recordings", "tracks")


def combine(
    chambers: Sequence[ChamberEvidence],
    *,
    settings: IntervalSettings,
    rng: np.random.Generator,
    n_scalars: int | None = None,
) -> Combined:
    """Combine chambers to days and days to the condition, with resamples level by level.

    Resampled is the highest level that repeats, whole units with everything inside them: their
    spread holds that of all levels below, which would count twice if they were drawn as well
    (they are drawn, each alone, for the shares in ``level_error``).

    Parameters
    ----------
    chambers : sequence of ChamberEvidence
        At least one; with the same columns.
    settings : IntervalSettings
    rng : Generator
    n_scalars : int, optional
        Only the first so many columns get a ``level_error``; the rest are points of curves.
    """
    values = np.array([chamber.values for chamber in chambers])
    days = list(dict.fromkeys(chamber.day for chamber in chambers))
    day_of_chamber = np.array([days.index(chamber.day) for chamber in chambers])
    by_day = np.array([mean_of(values[day_of_chamber == d]) for d in range(len(days))])
    top, covers = (by_day, "days") if len(days) > 1 else (values, "chambers")
    if len(top) < 2:
        covers = ""
    there = [c.filaments for c in chambers if c.filaments is not None]
    filaments = None
    if len(there) == len(chambers):
        unit = day_of_chamber if len(days) > 1 else np.arange(len(chambers))
        filaments = np.array([np.array(there)[unit == u].sum(axis=0) for u in range(len(top))])
    n = settings.resamples
    draws = drawn_means(top, n_resamples=n, rng=rng)
    scalars = slice(0, n_scalars)
    errors = {
        "days": spread_of(drawn_means(by_day[:, scalars], n_resamples=n, rng=rng)),
        "chambers": chamber_error(values[:, scalars], day_of_chamber, n_resamples=n, rng=rng),
        "recordings": inner_error(chambers, day_of_chamber, scalars, "recordings", n, rng),
        "tracks": inner_error(chambers, day_of_chamber, scalars, "tracks", n, rng),
    }
    return Combined(
        value=mean_of(by_day),
        draws=draws,
        units=np.isfinite(top).sum(axis=0),
        covers=covers,
        level_error=errors,
        level_units={
            "days": len(days),
            "chambers": len(chambers),
            "recordings": sum(len(np.unique(c.recording_of_track)) for c in chambers),
            "tracks": sum(len(c.recording_of_track) for c in chambers),
        },
        by_chamber=values[:, scalars],
        filaments=filaments,
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class _Rule:
    """How one quantity follows from columns, and on which scale its interval is made.

    ``scale`` maps columns to the scale on which the quantity is nearly linear, ``back`` that
    scale to the quantity; ``below`` and ``beyond`` are its own limits. ``relative_to`` says to what
    the scatter is proportional when conditions are compared: "value", or "binomial", √(f (1 − f));
    "" if they are not. ``instead`` are columns that can tell, below 0 too, when chambers are at the
    limit; ``beside`` is a column and the power of it beside which the last column may vanish.
    """

    columns: tuple[str, ...]
    scale: Callable[..., Floats]
    back: Callable[[float], float] = float
    decreasing: bool = False
    below: float = -np.inf
    beyond: float = np.inf
    unresolved: str = ""  # what to say when the value itself leaves the limits
    relative_to: str = ""
    instead: tuple[str, ...] = ()
    beside: tuple[str, float] | None = None

    def unit(self, centre: float) -> float:
        """That to which the scatter is proportional; 0 or NaN where there is none."""
        if self.relative_to == "binomial":
            return _root(centre * (1 - centre))
        return centre if self.relative_to else float("nan")


def _root(square: float) -> float:
    return float(np.sqrt(square)) if square >= 0 else 0.0


def _length(factor: float) -> Callable[[float], float]:
    """1 / (factor × curvature); a curvature of 0 or less is a path straighter than can be told."""
    return lambda curvature: 1 / (factor * curvature) if curvature > 0 else float("nan")


_STRAIGHT = "not resolved: the paths are straight within the noise"
_NOISE = "not resolved: longitudinal diffusion and localization error trade against each other here"

# The speed where nothing drives filaments: its square may come out below 0, and then it is 0.
SPEED_OF_PASSIVE = "speed of passive"
RULES = {
    "speed_um_s": _Rule(columns=("speed",), scale=lambda v: v, below=0.0, relative_to="value"),
    "rotational_diffusion_rad2_s": _Rule(
        columns=("rotational_diffusion",),
        scale=lambda d: d,
        below=0.0,
        unresolved=_STRAIGHT,
        relative_to="value",
        instead=("msd_rotational_diffusion",),
        beside=("msd_rotational_diffusion", 1.0),
    ),
    # Curvature per path, D_r / v, is linear in what is measured; its inverse is not.
    "persistence_length_um": _Rule(
        columns=("speed", "rotational_diffusion"),
        scale=lambda v, d: d / v,
        back=_length(1.0),
        decreasing=True,
        unresolved=_STRAIGHT,
        relative_to="value",
        instead=("msd_speed", "msd_rotational_diffusion"),
        beside=("msd_rotational_diffusion", 1.0),
    ),
    "path_persistence_length_um": _Rule(
        columns=("speed", "rotational_diffusion"),
        scale=lambda v, d: d / v,
        back=_length(2.0),
        decreasing=True,
        unresolved=_STRAIGHT,
        relative_to="value",
        instead=("msd_speed", "msd_rotational_diffusion"),
        beside=("msd_rotational_diffusion", 1.0),
    ),
    "translational_diffusion_um2_s": _Rule(
        columns=("longitudinal_diffusion",), scale=lambda d: d, below=0.0, unresolved=_NOISE
    ),
    "localization_error_um": _Rule(
        columns=("localization_variance",), scale=lambda s: s, back=_root, unresolved=_NOISE
    ),
    "speed_spread_um_s": _Rule(
        columns=("speed_variance",),
        scale=lambda s: s,
        back=_root,
        unresolved="not resolved: filaments differ by less than the measurement can tell",
        beside=("speed", 2.0),
    ),
    "turning_rate_rad_s": _Rule(columns=("turning_rate",), scale=lambda w: w),
    "mean_speed_um_s": _Rule(
        columns=("speed", "stop_rate", "go_rate"),
        scale=lambda v, stop, go: v * go / (stop + go),
        below=0.0,
    ),
    "running_fraction": _Rule(
        columns=("stop_rate", "go_rate"),
        scale=lambda stop, go: go / (stop + go),
        below=0.0,
        beyond=1.0,
    ),
    "stop_rate_per_s": _Rule(columns=("stop_rate",), scale=lambda rate: rate, below=0.0),
    "go_rate_per_s": _Rule(columns=("go_rate",), scale=lambda rate: rate, below=0.0),
    "diffusion_um2_s": _Rule(columns=("diffusion",), scale=lambda d: d, below=0.0),
    SPEED_OF_PASSIVE: _Rule(columns=("squared_speed",), scale=lambda s: s, back=_root),
    "sideways_diffusion_um2_s": _Rule(
        columns=("sideways_diffusion",), scale=lambda d: d, below=0.0, unresolved=_NOISE
    ),
    "further_error_along_um": _Rule(
        columns=("error_variance_along",), scale=lambda s: s, back=_root, unresolved=_NOISE
    ),
    "frame_speed_um_s": _Rule(
        columns=("frame_speed",), scale=lambda v: v, below=0.0, relative_to="value"
    ),
    "motile_fraction": _Rule(
        columns=("motile_fraction",),
        scale=lambda f: f,
        below=0.0,
        beyond=1.0,
        relative_to="binomial",
    ),
    "ever_moved_fraction": _Rule(
        columns=("ever_moved_fraction",),
        scale=lambda f: f,
        below=0.0,
        beyond=1.0,
        relative_to="binomial",
    ),
}


# A value this small beside the largest is as good as 0. One in eight chambers there makes a limit
# whatever the interval; where more than two in three are, their spread says nothing.
_TRIFLE, _FEW_AT_ZERO, _MOST_AT_ZERO = 1e-3, 1 / 8, 2 / 3


def estimates(
    combined: Combined,
    columns: Mapping[str, int],
    *,
    settings: IntervalSettings,
    borrowed: Mapping[str, BorrowedSpread] | None = None,
) -> dict[str, Estimate]:
    """Every quantity that follows from the columns, with its interval.

    The interval is value ± t × spread over resamples, with the degrees of freedom of the level
    that was drawn: three days have ten distinct resamples, whose own quantiles cannot know how
    little three days say. A borrowed spread takes its place. What is not told from its limit (0,
    or all of the filaments) gets a one-sided limit instead.

    Parameters
    ----------
    combined : Combined
    columns : mapping
        Name of a column: its index.
    settings : IntervalSettings
    borrowed : mapping, optional
        By quantity, what other conditions tell of its scatter.
    """
    return {
        key: _estimate(combined, columns, rule, settings, (borrowed or {}).get(key))
        for key, rule in RULES.items()
        if all(name in columns for name in rule.columns)
    }


def _estimate(
    combined: Combined,
    columns: Mapping[str, int],
    rule: _Rule,
    settings: IntervalSettings,
    borrowed: BorrowedSpread | None,
) -> Estimate:
    level, own = settings.level, [columns[name] for name in rule.columns]
    centre = float(rule.scale(*combined.value[own]))
    if not np.isfinite(centre):
        return Estimate(level=level, problem="no chamber has enough tracks to tell")
    resolved = centre > 0 or not rule.unresolved
    value = rule.back(centre) if resolved else float("nan")
    units = int(combined.units[own].min())
    if units < 2:
        return Estimate(value=value, level=level, problem="" if resolved else rule.unresolved)
    spread = _spread_on_scale(combined, own, rule)
    half = resampling.t_quantile(level, units - 1) * spread
    stopped = _share_at_zero(combined, columns, rule) if rule.unresolved else 0.0
    if (rule.unresolved and not resolved) or stopped > (0 if centre <= half else _FEW_AT_ZERO):
        return _limit(combined, columns, rule, settings, stopped)
    if rule.relative_to == "binomial" and centre in (0.0, 1.0) and combined.filaments is not None:
        return all_or_none(combined, own[0], centre, level)
    if spread == 0:
        problem = f"no interval: it is the same in all {units} {combined.covers}"
        return Estimate(value=value, level=level, problem=problem)
    df, covers, method = units - 1, combined.covers, _students_t(combined, units)
    if borrowed is not None:
        half, df, covers, method = (
            borrowed.half_width,
            borrowed.df,
            borrowed.covers,
            borrowed.method,
        )
    ends = [rule.back(centre - half), rule.back(centre + half)]
    low, high = ends[::-1] if rule.decreasing else ends
    if rule.relative_to == "binomial" and not (low > 0 and high < 1):
        low, high, method = inside(combined, own[0], centre, half, df, level, method)
    problem = ""
    if rule.unresolved and centre - half <= 0:
        problem = "hardly resolved: the interval reaches " + (
            "a straight path" if rule.unresolved == _STRAIGHT else "zero"
        )
    return Estimate(
        value=value,
        low=float(np.clip(low, rule.below, rule.beyond)),
        high=float(np.clip(high, rule.below, rule.beyond)),
        level=level,
        covers=covers,
        method=method,
        problem=problem,
    )


def _spread_on_scale(combined: Combined, columns: list[int], rule: _Rule) -> float:
    return float(rule.scale(*combined.draws[:, columns].T).std())


def _students_t(combined: Combined, units: int) -> str:
    return (
        f"Student's t with {units - 1} degrees of freedom over {units} {combined.covers}, "
        f"spread from {len(combined.draws)} resamples"
    )


def _share_at_zero(combined: Combined, columns: Mapping[str, int], rule: _Rule) -> float:
    """Share of the chambers that put the last column of a rule at 0, or as good as there.

    There a likelihood stops that would rather go on, at 0 or a trifle above it.
    """
    if combined.by_chamber is None:
        return 0.0
    values = combined.by_chamber[:, columns[rule.columns[-1]]]
    values = values[np.isfinite(values)]
    largest = np.abs(values).max(initial=0.0)
    if rule.beside is not None and rule.beside[0] in columns:
        other = combined.by_chamber[:, columns[rule.beside[0]]]
        # The square of a thousandth is a millionth.
        power = rule.beside[1]
        beside = _TRIFLE ** (power - 1) * np.nanmax(np.abs(other), initial=0.0) ** power
        largest = max(largest, float(beside))
    return float(np.mean(values <= _TRIFLE * largest)) if len(values) else 0.0


def _limit(
    combined: Combined,
    columns: Mapping[str, int],
    rule: _Rule,
    settings: IntervalSettings,
    stopped: float,
) -> Estimate:
    """A one-sided limit for what is not told from 0: at most so much, or at least so long.

    Counted from 0 where the value lies below, so that the limit is never nearer to 0 than the
    spread allows. Chambers that stop at 0 are alike there, more than they should; so the limit of
    columns that do not stop is taken if it is farther, and none without them if most stop. That
    the choice between an interval and a limit is the data's costs no coverage: 0 is outside
    neither, and what is well above 0 is hardly ever taken for it.
    """
    level = settings.level
    units = int(combined.units[[columns[name] for name in rule.columns]].min())
    # One-sided: all that may be missed is on one side.
    t = resampling.t_quantile(2 * level - 1, units - 1)
    ends = [] if stopped > _MOST_AT_ZERO else [(_upper_end(combined, columns, rule, t), "")]
    if rule.instead and all(name in columns for name in rule.instead):
        other = replace(rule, columns=rule.instead)
        ends.append((_upper_end(combined, columns, other, t), " of the mean squared displacement"))
    end, source = max(ends, default=(0.0, ""))
    if not end > 0:
        return Estimate(level=level, problem=rule.unresolved)
    end = rule.back(end)
    return Estimate(
        low=end if rule.decreasing else float("nan"),
        high=float("nan") if rule.decreasing else end,
        level=level,
        covers=combined.covers,
        method=f"one-sided limit{source}: {_students_t(combined, units)}",
        problem=rule.unresolved,
    )


def _upper_end(combined: Combined, columns: Mapping[str, int], rule: _Rule, t: float) -> float:
    """Upper end on the scale of a rule, counted from 0; 0 if there is no spread."""
    own = [columns[name] for name in rule.columns]
    spread = _spread_on_scale(combined, own, rule)
    centre = float(rule.scale(*combined.value[own]))
    return max(centre, 0.0) + t * spread if spread > 0 and np.isfinite(centre) else 0.0


def band(
    combined: Combined, columns: slice, *, settings: IntervalSettings
) -> tuple[Floats, Floats, Floats]:
    """Value and pointwise interval of a curve, (l,) each; NaN where no level repeats."""
    value, units = combined.value[columns], combined.units[columns]
    spread = spread_of(combined.draws[:, columns])
    t = np.array([resampling.t_quantile(settings.level, n - 1) if n > 1 else np.nan for n in units])
    return value, value - t * spread, value + t * spread
