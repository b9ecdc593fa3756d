"""Simulated chambers against their own truth and the least that their tracks allow."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from glidefit.designs import AgainstBound, ChamberOutcome, FilmedDesign, RehearsedQuantity
from glidefit.evidence import ChamberEvidence
from glidefit.kernels.bound import least_relative_error_of_ratio, least_standard_errors
from glidefit.kernels.bound_of_lengths import information_of_lengths, own_speed_errors
from glidefit.quantities import QUANTITIES

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

SPEED, TURNING, LENGTH = (
    "speed_um_s",
    "rotational_diffusion_rad2_s",
    "persistence_length_um",
)
# A scatter this many times the bound leaves little to be gained.
_REACHED = 1.1
# The same for a whole design, whose days and chambers no analysis can make more alike.
_BEST = 1.05
_SURE = 2.0  # Monte-Carlo errors


@dataclass(frozen=True, slots=True, kw_only=True)
class SimulatedChamber:
    """The truth of a simulated chamber.

    Parameters
    ----------
    day, chamber : str
    speed_um_s, rotational_diffusion_rad2_s : float
        Means of its filaments.
    n_positions : (m,) array of int
        Of its gliding tracks that were kept.
    """

    day: str
    chamber: str
    speed_um_s: float
    rotational_diffusion_rad2_s: float
    n_positions: Ints


def chamber_outcomes(
    design: FilmedDesign,
    chambers: Sequence[SimulatedChamber],
    fitted: Sequence[ChamberEvidence],
    columns: Mapping[str, int],
) -> tuple[ChamberOutcome, ...]:
    """What was found in each chamber of one experiment, beside its truth and its bound.

    Parameters
    ----------
    design : FilmedDesign
    chambers : sequence of SimulatedChamber
    fitted : sequence of ChamberEvidence
        Of the chambers that were fitted.
    columns : mapping
        Of the evidence.
    """
    found = {(one.day, one.chamber): one.values for one in fitted}
    nominal, none = design.truth, np.full(len(columns), np.nan)
    out = []
    for chamber in chambers:
        values = found.get((chamber.day, chamber.chamber), none)
        truth = _with_length(chamber.speed_um_s, chamber.rotational_diffusion_rad2_s)
        estimate = _with_length(
            float(values[columns["speed"]]), float(values[columns["rotational_diffusion"]])
        )
        out.append(
            ChamberOutcome(
                day=chamber.day,
                tracks=len(chamber.n_positions),
                truth={key: _ratio(truth[key], nominal[key]) - 1 for key in truth},
                off={key: _ratio(estimate[key], truth[key]) - 1 for key in truth},
                bound=_bound(design, chamber),
                present=_present(design, chamber),
            )
        )
    return tuple(out)


def _with_length(speed: float, turning: float) -> dict[str, float]:
    return {SPEED: speed, TURNING: turning, LENGTH: _ratio(speed, turning)}


def _ratio(value: float, truth: float) -> float:
    return value / truth if truth > 0 else math.nan


def _bound(design: FilmedDesign, chamber: SimulatedChamber) -> dict[str, float]:
    """Least standard errors, relative; what is 0 in truth is taken as known, being at its limit."""
    speed, turning = chamber.speed_um_s, chamber.rotational_diffusion_rad2_s
    information = information_of_lengths(
        chamber.n_positions,
        frame_s=design.frame_s,
        exposure_s=design.exposure_s,
        speed=speed,
        rotational_diffusion=turning,
        localization_error=design.localization_error_um,
        longitudinal_diffusion=design.longitudinal_diffusion_um2_s,
        speed_spread=design.filament_spread * speed,
    )
    unknown = ["speed", "localization_variance"]
    unknown += ["rotational_diffusion"] if turning > 0 else []
    unknown += ["longitudinal_diffusion"] if design.longitudinal_diffusion_um2_s > 0 else []
    unknown += ["speed_variance"] if design.filament_spread > 0 else []
    least = dict.fromkeys((SPEED, TURNING, LENGTH), math.nan)
    try:
        errors = least_standard_errors(information, unknown=unknown)
        least[SPEED] = errors["speed"] / speed
        if turning > 0:
            least[TURNING] = errors["rotational_diffusion"] / turning
            least[LENGTH] = least_relative_error_of_ratio(
                information, speed=speed, rotational_diffusion=turning, unknown=unknown
            )
    except np.linalg.LinAlgError:  # too few tracks to tell all parameters apart
        pass
    return least


def _present(design: FilmedDesign, chamber: SimulatedChamber) -> float:
    """Least relative error of the mean speed with tracks weighted by their positions.

    The bound weights tracks nearly alike where their speeds differ, but the mean over the
    filaments present at a moment cannot.
    """
    own = own_speed_errors(
        chamber.n_positions,
        frame_s=design.frame_s,
        exposure_s=design.exposure_s,
        localization_error=design.localization_error_um,
        longitudinal_diffusion=design.longitudinal_diffusion_um2_s,
    )
    told = np.isfinite(own)
    weight = chamber.n_positions[told] / max(chamber.n_positions[told].sum(), 1)
    variance = (own[told] / chamber.speed_um_s) ** 2 + design.filament_spread**2
    return float(np.sqrt(weight**2 @ variance)) if told.any() else math.nan


def against_bound(
    key: str, off: Sequence[float], chambers: Sequence[Sequence[ChamberOutcome]]
) -> AgainstBound | None:
    """Scatter of one quantity beside the least that the tracks allow.

    Parameters
    ----------
    key : str
        Of the quantity.
    off : sequence of float
        By experiment, its relative error.
    chambers : sequence of sequence of ChamberOutcome
        By experiment.

    Returns
    -------
    AgainstBound or None
        None for a quantity without a bound, or if fewer than two chambers have a value.
    """
    told = [
        [c for c in one if math.isfinite(c.off.get(key, math.nan) + c.bound.get(key, math.nan))]
        for one in chambers
    ]
    every = [chamber for one in told for chamber in one]
    if len(every) < 2:
        return None
    error = np.array([chamber.off[key] for chamber in every])
    bound = np.array([chamber.bound[key] for chamber in every])
    ratio, ratio_error = _root_ratio(error**2, bound**2)
    of_present = (math.nan, math.nan)
    if key == SPEED:
        of_present = _root_ratio(error**2, np.array([c.present for c in every]) ** 2)
    least = [
        (e, *_least(one, key)) for e, one in zip(off, told, strict=True) if one and math.isfinite(e)
    ]
    square, truth, tracks = np.array(least).reshape(-1, 3).T ** 2
    of_best, of_best_error = _root_ratio(square, truth + tracks)
    return AgainstBound(
        chambers=len(every),
        tracks=_short(float(np.mean([chamber.tracks for chamber in every]))),
        bias=_short(error.mean()),
        bias_error=_short(error.std(ddof=1) / len(error) ** 0.5),
        rmse=_root_mean(error**2),
        bound=_root_mean(bound**2),
        ratio=ratio,
        ratio_error=ratio_error,
        of_present=of_present[0],
        of_present_error=of_present[1],
        chambers_alone=_root_mean(truth),
        tracks_alone=_root_mean(tracks),
        best=_root_mean(truth + tracks),
        of_best=of_best,
        of_best_error=of_best_error,
    )


def _least(chambers: Sequence[ChamberOutcome], key: str) -> tuple[float, float]:
    """Of one experiment: error of the mean of day means of true values, and what tracks add."""
    in_day = Counter(chamber.day for chamber in chambers)
    weight = np.array([1 / in_day[c.day] / len(in_day) for c in chambers])
    truth = np.array([c.truth[key] for c in chambers])
    bound = np.array([c.bound[key] for c in chambers])
    return float(weight @ truth), float(np.sqrt(weight**2 @ bound**2))


def _root_ratio(square: Floats, least: Floats) -> tuple[float, float]:
    """Root of the ratio of two means of pairs, and its standard error to first order."""
    if len(square) < 2 or not least.mean() > 0:
        return math.nan, math.nan
    ratio = square.mean() / least.mean()
    error = np.std(square - ratio * least, ddof=1) / least.mean() / len(square) ** 0.5
    root = math.sqrt(ratio)
    return _short(root), _short(error / 2 / root) if root > 0 else math.nan


def _root_mean(squares: Floats) -> float:
    return _short(np.sqrt(np.mean(squares))) if len(squares) else math.nan


def _short(value: float) -> float:
    return float(f"{value:.6g}")


def bound_sentences(quantities: Sequence[RehearsedQuantity]) -> tuple[str, ...]:
    """What the comparison with the bound means, in two sentences; none without a comparison."""
    known = [(q, q.against_bound) for q in quantities if q.against_bound is not None]
    known = [(q, b) for q, b in known if math.isfinite(b.ratio)]
    if not known:
        return ()
    within = _listed([(q, b.ratio, b.ratio_error) for q, b in known])
    whole = _listed([(q, b.of_best, b.of_best_error) for q, b in known])
    return (
        "Within a chamber the estimate scatters about the true value of that chamber by this many "
        f"times the Cramér-Rao bound, the least that its tracks allow: {within}; {_within(known)}.",
        "The whole design errs by this many times the least of any mean of day means, whose days "
        f"and chambers truly differ: {whole}; {_whole(known)}.",
    )


_Known = Sequence[tuple[RehearsedQuantity, AgainstBound]]


def _within(known: _Known) -> str:
    far = [q for q, b in known if _above(b.ratio, b.ratio_error, _REACHED)]
    paid = [q for q, b in known if q in far and not _is_wasted(b)]
    parts = []
    if wasted := [q for q in far if q not in paid]:
        parts.append(f"the tracks know the {_names(wasted)} better than the fit tells")
    if paid:
        parts.append(
            f"the {_names(paid)} pays for being the mean over the filaments present at a moment, "
            "which gives long tracks more weight"
        )
    return " and ".join(parts) or "hardly more can be got out of these tracks"


def _whole(known: _Known) -> str:
    short = [q for q, b in known if _above(b.of_best, b.of_best_error, _BEST) and _is_wasted(b)]
    if short:
        return f"a better analysis of the same chambers would still sharpen the {_names(short)}"
    return "more chambers or more days would sharpen it, a better analysis hardly"


def _above(ratio: float, error: float, limit: float) -> bool:
    """Surely more than the limit."""
    return ratio - _SURE * error > limit


def _is_wasted(b: AgainstBound) -> bool:
    """True where the excess is not the price of the mean that is asked for."""
    return math.isnan(b.of_present) or _above(b.of_present, b.of_present_error, _REACHED)


def _listed(numbers: Sequence[tuple[RehearsedQuantity, float, float]]) -> str:
    return ", ".join(
        f"{QUANTITIES[q.quantity].label} {value:.2f} ± {error:.2f}" for q, value, error in numbers
    )


def _names(quantities: Sequence[RehearsedQuantity]) -> str:
    return " and the ".join(QUANTITIES[q.quantity].label for q in quantities)
