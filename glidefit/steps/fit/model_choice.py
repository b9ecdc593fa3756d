"""Active or circling: by practical size, and at the level of chambers."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from glidefit.kernels import resampling
from glidefit.kernels.turning import turning_rates
from glidefit.steps.fit.intervals import Kept

Floats = NDArray[np.float64]

ACTIVE, CIRCLING = "active", "circling"

# Turning by a steady rate must make up this share of what rotational diffusion turns over a
# track before it is worth a parameter: left out, part of it would pass for diffusion.
_PRACTICAL = 0.1
# And it must be seen in the chambers at this level, or in the tracks where there is one chamber.
_LEVEL = 0.99
# Displacements between which turning is read are this many localization errors long.
_CLEAR = 10.0


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


NO_TURNING = Turning(rate=0.0, variance=0.0, share=0.0, seen=False)


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
        whole, first, second = turning_rates(t.frame, t.time_s, t.offsets, t.x_um, t.y_um, lag=lag)
        there = np.isfinite(whole) & np.isfinite(first) & np.isfinite(second)
        rates.append(whole[there])
        products.append((first * second)[there])
        durations.append((t.time_s[t.offsets[1:] - 1] - t.time_s[t.offsets[:-1]])[there])
    return np.concatenate(rates), np.concatenate(products), np.concatenate(durations)
