"""Combine chambers by level, and say how far the result reaches: nested draws, t quantiles."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from glidefit.evidence import ChamberEvidence, Combined
from glidefit.kernels import resampling
from glidefit.results import Estimate
from glidefit.settings import IntervalSettings

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
    by_day = np.array([_mean(values[day_of_chamber == d]) for d in range(len(days))])
    top, covers = (by_day, "days") if len(days) > 1 else (values, "chambers")
    if len(top) < 2:
        covers = ""
    n = settings.resamples
    draws = _drawn_means(top, n_resamples=n, rng=rng)
    scalars = slice(0, n_scalars)
    errors = {
        "days": _spread(_drawn_means(by_day[:, scalars], n_resamples=n, rng=rng)),
        "chambers": _chamber_error(values[:, scalars], day_of_chamber, n_resamples=n, rng=rng),
        "recordings": _inner_error(chambers, day_of_chamber, scalars, "recordings", n, rng),
        "tracks": _inner_error(chambers, day_of_chamber, scalars, "tracks", n, rng),
    }
    return Combined(
        value=_mean(by_day),
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
    )


def _mean(values: Floats) -> Floats:
    """Mean over rows of what is there, NaN where nothing is."""
    there = np.isfinite(values)
    count = there.sum(axis=0)
    total = np.where(there, values, 0.0).sum(axis=0)
    return np.where(count > 0, total / np.maximum(count, 1), np.nan)


def _drawn_means(values: Floats, *, n_resamples: int, rng: np.random.Generator) -> Floats:
    """Means of drawn rows (b, p), stretched so that their variance is unbiased."""
    there = np.isfinite(values)
    units = there.sum(axis=0)
    counts = resampling.draw_counts(len(values), n_resamples=n_resamples, rng=rng)
    weight = counts @ there.astype(np.float64)
    total = counts @ np.where(there, values, 0.0)
    mean = _mean(values)
    drawn = np.where(weight > 0, total / np.maximum(weight, 1), mean)
    stretch = np.sqrt(units / np.maximum(units - 1, 1))
    return np.where(units > 1, mean + stretch * (drawn - mean), np.nan)


def _spread(draws: Floats) -> Floats:
    """Standard deviation over resamples about their centre, (p,); NaN without resamples."""
    known = np.isfinite(draws).all(axis=0)
    out = np.full(draws.shape[1], np.nan)
    out[known] = draws[:, known].std(axis=0)
    return out


def _chamber_error(
    values: Floats, day_of_chamber: Ints, *, n_resamples: int, rng: np.random.Generator
) -> Floats:
    """Error of the condition's mean from drawing chambers within their days.

    A day with one chamber cannot tell; it is taken to be like the others.
    """
    days = np.unique(day_of_chamber)
    variance = np.array(
        [
            _spread(_drawn_means(values[day_of_chamber == d], n_resamples=n_resamples, rng=rng))
            ** 2
            * np.sum(day_of_chamber == d)
            for d in days
        ]
    )  # of one chamber, by day
    share = np.mean([1 / np.sum(day_of_chamber == d) for d in days]) / len(days)
    return np.asarray(np.sqrt(_mean(variance) * share))


def _inner_error(
    chambers: Sequence[ChamberEvidence],
    day_of_chamber: Ints,
    columns: slice,
    level: str,
    n_resamples: int,
    rng: np.random.Generator,
) -> Floats:
    """Error of the condition's mean from drawing recordings, or tracks, within each chamber."""
    variance = []
    for chamber in chambers:
        influence, parent = chamber.influence[:, columns], chamber.recording_of_track
        if level == "recordings":
            fields = np.unique(parent)
            influence = np.array([influence[parent == f].sum(axis=0) for f in fields])
            parent = np.zeros(len(fields), dtype=np.int64)
        size = np.bincount(parent, minlength=int(parent.max()) + 1)
        if not np.any(size > 1):
            variance.append(np.full(influence.shape[1], np.nan))
            continue
        # Within each parent the spread is about its own mean; stretched to be unbiased.
        stretch = np.sqrt(size / np.maximum(size - 1, 1))[:, None]
        sums = resampling.resampled_sums(parent, influence, n_resamples=n_resamples, rng=rng)
        centre = np.array([influence[parent == p].sum(axis=0) for p in range(len(size))])
        moved = ((sums - centre) * stretch).sum(axis=1)
        known = np.isfinite(chamber.values[columns])
        variance.append(np.where(known, moved.var(axis=0), np.nan))
    by_chamber = np.array(variance)
    days = np.unique(day_of_chamber)
    by_day = np.array(
        [_mean(by_chamber[day_of_chamber == d]) / np.sum(day_of_chamber == d) for d in days]
    )
    return np.asarray(np.sqrt(_mean(by_day) / len(days)))


@dataclass(frozen=True, slots=True, kw_only=True)
class _Rule:
    """How one quantity follows from columns, and on which scale its interval is made.

    ``scale`` maps columns to the scale on which the quantity is nearly linear, ``back`` that
    scale to the quantity; ``below`` and ``beyond`` are its own limits.
    """

    columns: tuple[str, ...]
    scale: Callable[..., Floats]
    back: Callable[[float], float] = float
    decreasing: bool = False
    below: float = -np.inf
    beyond: float = np.inf
    unresolved: str = ""  # what to say when the value itself leaves the limits


def _root(square: float) -> float:
    return float(np.sqrt(square)) if square >= 0 else 0.0


def _length(factor: float) -> Callable[[float], float]:
    """1 / (factor × curvature); a curvature of 0 or less is a path straighter than can be told."""
    return lambda curvature: 1 / (factor * curvature) if curvature > 0 else float("nan")


_STRAIGHT = "not resolved: the paths are straight within the noise"
_NOISE = "not resolved: longitudinal diffusion and localization error trade against each other here"

RULES = {
    "speed_um_s": _Rule(columns=("speed",), scale=lambda v: v, below=0.0),
    "rotational_diffusion_rad2_s": _Rule(
        columns=("rotational_diffusion",), scale=lambda d: d, below=0.0, unresolved=_STRAIGHT
    ),
    # Curvature per path, D_r / v, is linear in what is measured; its inverse is not.
    "persistence_length_um": _Rule(
        columns=("speed", "rotational_diffusion"),
        scale=lambda v, d: d / v,
        back=_length(1.0),
        decreasing=True,
        unresolved=_STRAIGHT,
    ),
    "path_persistence_length_um": _Rule(
        columns=("speed", "rotational_diffusion"),
        scale=lambda v, d: d / v,
        back=_length(2.0),
        decreasing=True,
        unresolved=_STRAIGHT,
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
    "sideways_diffusion_um2_s": _Rule(
        columns=("sideways_diffusion",), scale=lambda d: d, below=0.0, unresolved=_NOISE
    ),
    "further_error_along_um": _Rule(
        columns=("error_variance_along",), scale=lambda s: s, back=_root, unresolved=_NOISE
    ),
    "frame_speed_um_s": _Rule(columns=("frame_speed",), scale=lambda v: v, below=0.0),
    "motile_fraction": _Rule(
        columns=("motile_fraction",), scale=lambda f: f, below=0.0, beyond=1.0
    ),
    "ever_moved_fraction": _Rule(
        columns=("ever_moved_fraction",), scale=lambda f: f, below=0.0, beyond=1.0
    ),
}


def estimates(
    combined: Combined, columns: Mapping[str, int], *, settings: IntervalSettings
) -> dict[str, Estimate]:
    """Every quantity that follows from the columns, with its interval.

    The interval is value ± t × spread over resamples, with the degrees of freedom of the level
    that was drawn: three days have ten distinct resamples, whose own quantiles cannot know how
    little three days say.

    Parameters
    ----------
    combined : Combined
    columns : mapping
        Name of a column: its index.
    settings : IntervalSettings
    """
    return {
        key: _estimate(combined, [columns[name] for name in rule.columns], rule, settings)
        for key, rule in RULES.items()
        if all(name in columns for name in rule.columns)
    }


def _estimate(
    combined: Combined, columns: list[int], rule: _Rule, settings: IntervalSettings
) -> Estimate:
    level = settings.level
    centre = float(rule.scale(*combined.value[columns]))
    if not np.isfinite(centre):
        return Estimate(level=level, problem="no chamber has enough tracks to tell")
    resolved = centre > 0 or not rule.unresolved
    value = rule.back(centre) if resolved else float("nan")
    problem = "" if resolved else rule.unresolved
    units = int(combined.units[columns].min())
    if units < 2:
        return Estimate(value=value, level=level, problem=problem)
    spread = float(rule.scale(*combined.draws[:, columns].T).std())
    if spread == 0:
        return Estimate(
            value=value,
            level=level,
            problem=problem or f"no interval: it is the same in all {units} {combined.covers}",
        )
    half = resampling.t_quantile(level, units - 1) * spread
    ends = [rule.back(centre - half), rule.back(centre + half)]
    low, high = ends[::-1] if rule.decreasing else ends
    if rule.unresolved and resolved and centre - half <= 0:
        problem = "hardly resolved: the interval reaches " + (
            "a straight path" if rule.unresolved == _STRAIGHT else "zero"
        )
    return Estimate(
        value=value,
        low=float(np.clip(low, rule.below, rule.beyond)),
        high=float(np.clip(high, rule.below, rule.beyond)),
        level=level,
        covers=combined.covers,
        method=f"Student's t with {units - 1} degrees of freedom over {units} {combined.covers}, "
        f"spread from {len(combined.draws)} resamples",
        problem=problem,
    )


def band(
    combined: Combined, columns: slice, *, settings: IntervalSettings
) -> tuple[Floats, Floats, Floats]:
    """Value and pointwise interval of a curve, (l,) each; NaN where no level repeats."""
    value, units = combined.value[columns], combined.units[columns]
    spread = _spread(combined.draws[:, columns])
    t = np.array([resampling.t_quantile(settings.level, n - 1) if n > 1 else np.nan for n in units])
    return value, value - t * spread, value + t * spread
