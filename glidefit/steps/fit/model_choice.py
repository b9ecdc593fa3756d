"""Active, circling or pausing: by practical size, and at the level of chambers."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from glidefit.kernels import resampling
from glidefit.kernels.turning import turning_rates
from glidefit.results import ModelEvidence
from glidefit.steps.fit.intervals import Kept

Floats = NDArray[np.float64]

ACTIVE, CIRCLING, PAUSING = "active", "circling", "pausing"

# Turning by a steady rate must make up this share of what rotational diffusion turns over a
# track before it is worth a parameter: left out, part of it would pass for diffusion.
_PRACTICAL = 0.1
# And it must be seen in the chambers at this level, or in the tracks where there is one chamber.
_LEVEL = 0.99
# Displacements between which turning is read are this many localization errors long, and at least
# half as long each.
_CLEAR = 10.0
# Pauses must take this share of the time before they are worth two parameters: left out, the
# speed while running comes out too low by as much.
_PAUSED = 0.02
# And they must add this to the log likelihood of a chamber (chance adds more in 1 of 10,000), in
# this share of the chambers.
_GAIN, _CHAMBERS = 10.0, 2 / 3


@dataclass(frozen=True, slots=True, kw_only=True)
class Turning:
    """What the tracks of a condition show of steady turning.

    Parameters
    ----------
    rate : float
        Mean turning rate in rad/s.
    variance : float
        Of the turning rate from filament to filament, errors removed; may come out negative.
    share : float
        (rate² + variance) T / (2 D_r): what steady turning adds to the spread of headings over a
        track of duration T, relative to rotational diffusion.
    seen : bool
        True if rate or variance differ from zero at the level of chambers.
    """

    rate: float
    variance: float
    share: float
    seen: bool
    forced: str = ""  # the model that a setting asks for

    @property
    def model(self) -> str:
        """The model that is fitted."""
        return self.forced or (CIRCLING if self.seen and self.share > _PRACTICAL else ACTIVE)

    @property
    def steady(self) -> bool:
        """True if turning rates are fitted."""
        return self.model == CIRCLING

    @property
    def evidence(self) -> tuple[ModelEvidence, ...]:
        """What spoke for or against circling."""
        return (
            ModelEvidence(
                model=CIRCLING,
                name="turning over a track",
                value=self.share,
                needed=_PRACTICAL,
                speaks_for=self.share > _PRACTICAL,
                meaning="What steady turning adds to the spread of headings over a track, relative "
                "to rotational diffusion.",
            ),
            ModelEvidence(
                model=CIRCLING,
                name="turning seen in the chambers",
                value=float(self.seen),
                needed=0.5,
                speaks_for=self.seen,
                meaning="1 if the mean turning rate, or its variance between filaments, differs "
                "from zero at the level of chambers, else 0.",
            ),
        )


NO_TURNING = Turning(rate=0.0, variance=0.0, share=0.0, seen=False)


@dataclass(frozen=True, slots=True, kw_only=True)
class Pauses:
    """What the tracks of a condition show of pauses.

    Parameters
    ----------
    promise : float
        Log likelihood by 1000 positions that a few pauses add to the model without, or cost.
    share : float
        Share of the time that filaments pause, mean over the chambers; NaN if it was not fitted.
    chambers : float
        Share of the chambers in which fitted pauses add to the likelihood what chance cannot.
    """

    promise: float
    share: float = float("nan")
    chambers: float = float("nan")
    forced: str = ""  # the model that a setting asks for

    @property
    def promising(self) -> bool:
        """True if pauses are worth a fit; where the other model failed they are."""
        return not self.forced and not self.promise <= 0

    @property
    def seen(self) -> bool:
        """True if pauses are fitted."""
        if self.forced:
            return self.forced == PAUSING
        return self.share > _PAUSED and self.chambers >= _CHAMBERS

    @property
    def evidence(self) -> tuple[ModelEvidence, ...]:
        """What spoke for or against pausing."""
        first = ModelEvidence(
            model=PAUSING,
            name="promise of pauses",
            value=self.promise,
            needed=0.0,
            speaks_for=not self.promise <= 0,
            meaning="Log likelihood by 1000 positions that a few pauses add to the model without; "
            "pauses are fitted only if it is above 0.",
        )
        if not np.isfinite(self.share):
            return (first,)
        return (
            first,
            ModelEvidence(
                model=PAUSING,
                name="share of time paused",
                value=self.share,
                needed=_PAUSED,
                speaks_for=self.share > _PAUSED,
                meaning="Mean over the chambers, as fitted.",
            ),
            ModelEvidence(
                model=PAUSING,
                name="chambers with pauses",
                value=self.chambers,
                needed=_CHAMBERS,
                speaks_for=self.chambers >= _CHAMBERS,
                meaning=f"Share of the chambers in which pauses add more than {_GAIN:g} to the log "
                "likelihood, which chance does in 1 of 10,000.",
            ),
        )


def compare_pauses(
    promise: float, without: Sequence[Floats], with_pauses: Sequence[Floats], shares: Floats
) -> Pauses:
    """Weigh pauses from fits without and with them, chamber by chamber.

    Parameters
    ----------
    promise : float
    without, with_pauses : sequences of arrays
        By chamber, log likelihood of each track; NaN of all where the fit failed, and of those
        that the fit with pauses left out.
    shares : (c,) array
        Share of the time paused, NaN for chambers where the fit failed.
    """
    gains = []
    for one, two in zip(without, with_pauses, strict=True):
        # Where there was no fit without pauses, that with pauses has nothing to beat.
        failed = not np.isfinite(one).any()
        gains.append(np.inf if failed else float(np.nansum(two - one)))
    seen = np.isfinite(shares) & (np.array(gains) > _GAIN)
    share = float(np.nanmean(shares)) if np.isfinite(shares).any() else 0.0
    return Pauses(promise=promise, share=share, chambers=float(seen.mean()))


def look_for_turning(
    chambers: Sequence[Sequence[Kept]], *, speed: float, rotational_diffusion: float
) -> Turning:
    """Steady turning of the kept tracks, chamber by chamber.

    Parameters
    ----------
    chambers : sequence of sequences of Kept
    speed : float
        Typical, in µm/s.
    rotational_diffusion : float
        Of the active model, in rad²/s.
    """
    each = [_chamber(members, speed) for members in chambers]
    rates, products, durations = (np.concatenate(column) for column in zip(*each, strict=True))
    if len(rates) < 3:
        return NO_TURNING
    rate = _weighted(rates, durations)
    # Rotational diffusion leaves a rate of variance 2 D_r / T, a product of its square.
    variance = _weighted(products, durations**2) - rate**2
    strength = rate**2 + max(variance, 0.0)
    typical = _weighted(durations, durations)
    share = strength * typical / (2 * rotational_diffusion) if rotational_diffusion > 0 else np.inf
    by_chamber = [
        (_weighted(r, d), _weighted(p, d**2) - _weighted(r, d) ** 2) for r, p, d in each if len(r)
    ]
    if len(by_chamber) > 1:
        one, two = np.array(by_chamber).T
    else:
        one, two = rates, products - rate**2
    return Turning(
        rate=rate,
        variance=variance,
        share=float(share) if strength > 0 else 0.0,
        seen=_differs(one) or (_differs(two) and variance > 0),
    )


def _weighted(values: Floats, weights: Floats) -> float:
    return float(values @ weights / weights.sum())


def _differs(values: Floats) -> bool:
    low, high = resampling.student_interval(values, level=_LEVEL)
    return not low <= 0 <= high


def _chamber(members: Sequence[Kept], speed: float) -> tuple[Floats, Floats, Floats]:
    """Turning rate of each track, product of the rates of its halves, and duration."""
    rates, products, durations = [], [], []
    for one in members:
        t, step = one.tracks, speed * one.source.frame_s
        lag = max(1, int(np.ceil(_CLEAR * one.source.clean.noise_um / max(step, 1e-12))))
        whole, first, second = turning_rates(
            *(t.frame, t.time_s, t.offsets, t.x_um, t.y_um),
            lag=lag,
            shortest=0.5 * _CLEAR * one.source.clean.noise_um,
        )
        there = np.isfinite(whole) & np.isfinite(first) & np.isfinite(second)
        rates.append(whole[there])
        products.append((first * second)[there])
        durations.append((t.time_s[t.offsets[1:] - 1] - t.time_s[t.offsets[:-1]])[there])
    return np.concatenate(rates), np.concatenate(products), np.concatenate(durations)
