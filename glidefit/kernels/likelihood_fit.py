"""The active-Brownian parameters that make tracks most likely, and what each track says of them."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from glidefit.kernels.gliding_data import PARAMETERS, GlidingData, first_guess

if TYPE_CHECKING:
    import lmfit

__all__ = [
    "CIRCLING",
    "PARAMETERS",
    "PASSIVE",
    "PAUSING",
    "STRAIGHT",
    "GlidingData",
    "LikelihoodFit",
    "first_guess",
    "fit_likelihood",
    "fit_parameters",
]

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

STRAIGHT = PARAMETERS[:5]
CIRCLING = PARAMETERS[:7]
_SIGNED = ("turning_rate",)
PAUSING = (*STRAIGHT, "stop_rate", "go_rate")
PASSIVE = ("diffusion", "localization_variance")
_NEVER_ZERO = ("speed", "localization_variance", "stop_rate", "go_rate")

# The climb ends when the next step promises less than this of the logarithm of the likelihood:
# the optimum is then within 0.02 standard errors.
_NOTHING_TO_GAIN = 2e-4
_MOST_STEPS = 60
# A promise below this that is not kept is the fault of slopes by differences.
_ROUNDING = 0.01
# Positions looked at to choose among several starts, and their rotational diffusion.
_N_TRIED, _TRIED = 1500, (0.2, 1.0, 5.0)
# Their climbs end earlier.
_LITTLE_TO_GAIN = 0.02


@dataclass(frozen=True, slots=True, kw_only=True)
class LikelihoodFit:
    """Most likely parameters of m tracks, and what each track adds to them.

    Parameters
    ----------
    names : tuple of str
        The p parameters, from `PARAMETERS`.
    values : (p,) array
        NaN with a ``problem`` if there is no optimum.
    scores : (m, p) array
        Slope of each track's log likelihood by each parameter.
    information : (p, p) array
        Minus the curvature of the log likelihood of all tracks; rows and columns of parameters
        at their limit are 0.
    at_limit : (p,) array of bool
        True for a parameter at a limit (0, or one that was given) that would rather be beyond.
    log_likelihood : (m,) array
    n_evaluations : int
        How often all tracks were filtered.
    problem : str
        Empty if the optimum can be believed.
    """

    names: tuple[str, ...]
    values: Floats
    scores: Floats
    information: Floats
    at_limit: Bools
    log_likelihood: Floats
    n_evaluations: int
    problem: str

    @property
    def influence(self) -> Floats:
        """What each track adds to the values when drawn once more, (m, p); 0 at a limit.

        With weights of mean 1, the values of a resample are ``values + weights @ influence``.
        """
        influence = np.zeros_like(self.scores)
        free = ~self.at_limit
        if not self.problem and free.any():
            inverse = np.linalg.inv(self.information[np.ix_(free, free)])
            influence[:, free] = self.scores[:, free] @ inverse
        return influence

    @property
    def errors(self) -> Floats:
        """Standard errors from the curvature, (p,); NaN at a limit or with a problem."""
        errors = np.full(len(self.names), np.nan)
        free = ~self.at_limit
        if not self.problem and free.any():
            inverse = np.linalg.inv(self.information[np.ix_(free, free)])
            errors[free] = np.sqrt(np.diag(inverse))
        return errors


class _Surface:
    """Log density of every position as a function of p parameters, and its slopes."""

    def __init__(
        self,
        data: GlidingData,
        names: Sequence[str],
        fixed: Mapping[str, float],
        limits: Mapping[str, tuple[float, float]],
        scale: Floats,
    ) -> None:
        self.data, self.names, self.fixed, self.scale = data, tuple(names), dict(fixed), scale
        self.signed = np.array([name in _SIGNED for name in names], dtype=bool)
        kept = np.array([name in _NEVER_ZERO for name in names], dtype=bool)
        own = np.where(self.signed, -np.inf, np.where(kept, 1e-3 * scale, 0.0))
        given = np.array([limits.get(name, (-np.inf, np.inf)) for name in names]).reshape(-1, 2)
        self.lowest, self.highest = np.maximum(own, given[:, 0]), given[:, 1]
        self.n_evaluations = 0

    def __call__(self, values: Floats) -> Floats:
        self.n_evaluations += 1
        named = dict(zip(self.names, map(float, values), strict=True))
        return self.data.log_density(self.fixed | named)

    def inside(self, values: Floats) -> Floats:
        """The values brought within their limits."""
        return np.clip(values, self.lowest, self.highest)

    def outward(self, values: Floats, slope: Floats) -> Bools:
        """Parameters at a limit beyond which the likelihood rises."""
        below = (values <= self.lowest) & (slope <= 0)
        return np.asarray(below | (values >= self.highest) & (slope >= 0))

    def slopes(self, values: Floats, here: Floats) -> Floats:
        """By forward differences, (n, p)."""
        steps = 1e-6 * np.maximum(np.abs(values), 0.1 * self.scale)
        columns = [
            (self(values + step * unit) - here) / step
            for step, unit in zip(steps, np.eye(len(values)), strict=True)
        ]
        return np.stack(columns, axis=1) if columns else np.zeros((len(here), 0))


def fit_likelihood(
    data: GlidingData,
    *,
    free: Sequence[str] = STRAIGHT,
    fixed: Mapping[str, float] | None = None,
    start: Mapping[str, float] | None = None,
    limits: Mapping[str, tuple[float, float]] | None = None,
) -> LikelihoodFit:
    """Maximise the likelihood of all tracks together.

    Steps are those of scoring, with the sum of squared slopes over the positions in place of the
    curvature. Without a start, some of the tracks choose among several.

    Parameters
    ----------
    data : GlidingData
    free : sequence of str
        Parameters to fit, from `PARAMETERS`; the rest is 0 or as in ``fixed``.
    fixed : mapping, optional
    start : mapping, optional
        First guess of every free parameter; also sets the scale below which a parameter counts
        as 0, unless it is 0 itself.
    limits : mapping, optional
        (lowest, highest) of free parameters; inside their own limits of 0.

    Raises
    ------
    ValueError
        For a name that is no parameter.
    """
    fixed, limits = dict(fixed or {}), dict(limits or {})
    if unknown := (set(free) | set(fixed)) - set(PARAMETERS):
        raise ValueError(f"no such parameter: {', '.join(sorted(unknown))}")
    sizes = np.diff(data.offsets)
    if not np.any(sizes > 2):
        return _without_optimum(data, free, "no track has three positions")
    guess = first_guess(data)
    if not all(np.isfinite(list(guess.values()))):
        return _without_optimum(data, free, "the positions do not move")
    scale = np.array([abs(guess[name]) for name in free])
    if start is None:
        few = _Surface(data.some(_N_TRIED), free, fixed, limits, scale)
        tries = [
            np.where(np.array(free) == "rotational_diffusion", factor, 1.0)
            * [guess[name] for name in free]
            for factor in _TRIED
        ]
        climbs = [_climb(few, few.inside(first), enough=_LITTLE_TO_GAIN) for first in tries]
        first = max(
            climbs, key=lambda climb: float(np.nan_to_num(climb.here.sum(), nan=-np.inf))
        ).values
    else:
        first = np.array([start[name] for name in free], dtype=np.float64)
    surface = _Surface(data, free, fixed, limits, scale)
    top = _climb(surface, surface.inside(first))
    if top.problem:
        return _without_optimum(data, free, top.problem)
    return _at_optimum(surface, top)


def fit_parameters(data: GlidingData, parameters: lmfit.Parameters) -> LikelihoodFit:
    """Maximise the likelihood from parameters of lmfit.

    They hold what is to be fitted (``vary``, with ``value`` as the first guess and ``min`` and
    ``max`` as limits) and what is known. Fitted values and standard errors are left in them.

    Raises
    ------
    ValueError
        For a name that is no parameter, or one that is an expression of others.
    """
    if tied := [name for name, p in parameters.items() if p.expr]:
        raise ValueError(f"a parameter cannot be an expression of others: {', '.join(tied)}")
    free = {name: p for name, p in parameters.items() if p.vary}
    fit = fit_likelihood(
        data,
        free=tuple(free),
        fixed={name: float(p.value) for name, p in parameters.items() if not p.vary},
        start={name: float(p.value) for name, p in free.items()},
        limits={name: (float(p.min), float(p.max)) for name, p in free.items()},
    )
    for p, value, error in zip(free.values(), fit.values, fit.errors, strict=True):
        p.value, p.stderr = float(value), float(error)
    return fit


@dataclass(frozen=True, slots=True, kw_only=True)
class _Climb:
    """Where a climb ended: log densities there and their slopes."""

    values: Floats
    here: Floats
    slopes: Floats
    problem: str


def _climb(surface: _Surface, values: Floats, *, enough: float = _NOTHING_TO_GAIN) -> _Climb:
    """Climb until the next step promises less than ``enough``."""
    here, problem = surface(values), ""
    if not np.isfinite(here.sum()):
        problem = "the likelihood of the start is not finite"
        return _Climb(values=values, here=here, slopes=np.zeros((0, 0)), problem=problem)
    for _ in range(_MOST_STEPS):
        slopes = surface.slopes(values, here)
        step, gain = _scoring_step(slopes, surface.outward(values, slopes.sum(axis=0)))
        if gain < enough:
            break
        trial, there = _uphill(surface, values, step, float(here.sum()))
        if not there.sum() > here.sum():
            if gain > _ROUNDING:
                problem = "the likelihood has no way up from where its slope is not zero"
            break
        values, here = trial, there
    else:
        problem = f"the fit did not settle in {_MOST_STEPS} steps"
    return _Climb(values=values, here=here, slopes=slopes, problem=problem)


def _uphill(
    surface: _Surface, values: Floats, step: Floats, height: float
) -> tuple[Floats, Floats]:
    """The best of a step, of shorter ones until one leads up, of longer ones while they do."""
    best = _within_reach(values, step, surface)
    there = surface(best)
    rises = bool(there.sum() > height)
    for _ in range(20):
        step = step * (3.0 if rises else 0.25)
        trial = _within_reach(values, step, surface)
        here = surface(trial)
        if rises and not here.sum() > there.sum():
            break
        best, there = trial, here
        if not rises and there.sum() > height:
            break
    return best, there


def _scoring_step(slopes: Floats, outward: Bools) -> tuple[Floats, float]:
    """Step to the optimum of the parabola, and half of what it promises; limits are kept."""
    slope = slopes.sum(axis=0)
    size = np.sqrt((slopes**2).sum(axis=0))
    moving = ~outward & (size > 0)
    step = np.zeros(len(slope))
    if not moving.any():
        return step, 0.0
    unit = slopes[:, moving] / size[moving]
    curvature = unit.T @ unit
    curvature[np.diag_indices_from(curvature)] += 1e-8
    step[moving] = np.linalg.solve(curvature, slope[moving] / size[moving]) / size[moving]
    return step, float(slope @ step) / 2


def _within_reach(values: Floats, step: Floats, surface: _Surface) -> Floats:
    """The values after a step in which none more than trebles or leaves its limits."""
    highest = np.where(surface.signed, np.inf, 3 * values + 0.3 * surface.scale)
    least = np.where(values > 0.01 * surface.scale, values / 4, 0.0)
    lowest = np.where(surface.signed, -np.inf, least)
    return surface.inside(np.clip(values + step, lowest, highest))


def _at_optimum(surface: _Surface, top: _Climb) -> LikelihoodFit:
    """Slopes and curvature by central differences, as wide as a fifth of the standard errors."""
    values, here, slopes = top.values, top.here, top.slopes
    size = np.sqrt((slopes**2).sum(axis=0))
    p, offsets = len(values), surface.data.offsets
    at_limit = surface.outward(values, slopes.sum(axis=0)) | ~(size > 0)
    width = 0.2 / np.where(at_limit, np.inf, size)
    width = np.where(surface.signed, width, np.minimum(width, 0.5 * values))
    at_limit |= width == 0
    scores = np.add.reduceat(slopes, offsets[:-1], axis=0)
    information = np.zeros((p, p))
    free = np.flatnonzero(~at_limit)
    above, below = np.zeros((2, p))
    unit = np.diag(width)
    for i in free:
        up, down = surface(values + unit[i]), surface(values - unit[i])
        scores[:, i] = np.add.reduceat(up - down, offsets[:-1]) / (2 * width[i])
        above[i], below[i] = (up - here).sum(), (down - here).sum()
        information[i, i] = -(above[i] + below[i]) / width[i] ** 2
    for i in free:
        for j in free[free < i]:
            both = (surface(values + unit[i] + unit[j]) - here).sum()
            mixed = (both - above[i] - above[j]) / (width[i] * width[j])
            information[i, j] = information[j, i] = -mixed
    kept = information[np.ix_(free, free)]
    definite = len(free) > 0 and np.all(np.isfinite(kept)) and np.linalg.eigvalsh(kept).min() > 0
    fine = definite or p == 0
    return LikelihoodFit(
        names=surface.names,
        values=values,
        scores=scores,
        information=information,
        at_limit=at_limit,
        log_likelihood=np.add.reduceat(here, offsets[:-1]),
        n_evaluations=surface.n_evaluations,
        problem="" if fine else "the data do not determine every parameter",
    )


def _without_optimum(data: GlidingData, free: Sequence[str], problem: str) -> LikelihoodFit:
    m, p = len(data.offsets) - 1, len(free)
    return LikelihoodFit(
        names=tuple(free),
        values=np.full(p, np.nan),
        scores=np.zeros((m, p)),
        information=np.zeros((p, p)),
        at_limit=np.zeros(p, dtype=bool),
        log_likelihood=np.full(m, np.nan),
        n_evaluations=0,
        problem=problem,
    )
