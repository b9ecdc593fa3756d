"""All chambers of a condition, with one longest lag and one spread of speeds."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from glidefit.evidence import ChamberEvidence, CleanRecording
from glidefit.fit_parameters import FitParameters
from glidefit.kernels import msd_fit
from glidefit.results import ModelEvidence
from glidefit.settings import FitSettings
from glidefit.steps.fit.chamber import ChamberFit, fit_chamber
from glidefit.steps.fit.evidence_columns import COLUMN, CurveColumns, curve_columns
from glidefit.steps.fit.intervals import FEWEST_FRAMES, Interval, Kept, intervals
from glidefit.steps.fit.model_choice import (
    CIRCLING,
    NO_TURNING,
    PAUSING,
    Pauses,
    Turning,
    compare_pauses,
    look_for_turning,
)
from glidefit.steps.fit.propulsion import PASSIVE, Propulsion, look_for_propulsion

Floats = NDArray[np.float64]

# Lags enter the fit only while the path is shorter than this share of the field.
_FIELD_SHARE = 1 / 3


@dataclass(frozen=True, slots=True, kw_only=True)
class ConditionFit:
    """What a fit leaves, whatever its method: evidence by chamber, curves, track speeds.

    Parameters
    ----------
    columns : dict of str: int
        Column of each scalar quantity in the evidence.
    chambers : tuple of ChamberEvidence
        Over the kept tracks.
    curves : tuple of CurveColumns
        One for each frame interval.
    track_speeds : dict of str: ((k,) array, (k,) array)
        By recording, speed of its kept tracks and its error, in µm/s.
    left_out : int
        Kept tracks that are not what they seem and did not enter the likelihood.
    innovation : (n, 2) array
        Normalised innovations of all tracks in the likelihood; empty without one.
    method : str
        "likelihood" or "msd".
    known : FitParameters
        What was held, bounded and freed.
    longest_lag_s : float
    pooled : (4,) array
        Parameters of all tracks in one pot, for reading speeds off single lags.
    model : str
        "active", "circling", "pausing", "circling and pausing" or "passive".
    turning : Turning
    evidence : tuple of ModelEvidence
        From which the model was chosen.
    problems : tuple of str
    """

    columns: dict[str, int]
    chambers: tuple[ChamberEvidence, ...]
    curves: tuple[CurveColumns, ...]
    track_speeds: dict[str, tuple[Floats, Floats]]
    left_out: int
    innovation: Floats
    method: str
    known: FitParameters
    longest_lag_s: float
    pooled: Floats
    model: str
    turning: Turning
    evidence: tuple[ModelEvidence, ...]
    problems: tuple[str, ...]


def fit(recordings: Sequence[CleanRecording], *, settings: FitSettings) -> ConditionFit:
    """Fit speed, D_r, D∥ and localization error to the recordings of one condition.

    Parameters
    ----------
    recordings : sequence of CleanRecording
        At least one of them with a kept track.
    settings : FitSettings
    """
    kept = [Kept.of(recording) for recording in recordings if recording.clean.kept.any()]
    parts = intervals(kept)
    longest, pooled = _longest_lag(parts, settings)
    columns = curve_columns(parts, longest)
    chambers: dict[tuple[str, str], list[Kept]] = {}
    for one in kept:
        chambers.setdefault((one.source.day, one.source.chamber), []).append(one)
    turning = _turning(list(chambers.values()), pooled, settings)
    members = list(chambers.values())

    def fitted(pauses: bool) -> list[ChamberFit]:
        return [
            fit_chamber(
                own,
                parts,
                columns,
                longest_s=longest,
                pooled=pooled,
                method=settings.method,
                turning=turning,
                pauses=pauses,
                passive=propulsion.none,
                known=known,
                clock=settings.clock,
            )
            for own in members
        ]

    known = _known(settings, kept)
    propulsion = look_for_propulsion(members, settings)
    if propulsion.none:
        results, pauses = fitted(False), Pauses(promise=-np.inf, forced=PASSIVE)
    else:
        results, pauses = _with_or_without_pauses(fitted, settings)
    variance = _speed_variance([result.evidence for result in results])
    corrected = ["msd_speed"] if settings.method == "likelihood" else ["msd_speed", "speed"]
    speeds: dict[str, tuple[Floats, Floats]] = {}
    for result in results:
        speeds |= result.track_speeds
    return ConditionFit(
        columns=COLUMN,
        chambers=tuple(_mean_speed(r.evidence, variance, corrected) for r in results),
        curves=columns,
        track_speeds=speeds,
        left_out=sum(result.left_out for result in results),
        innovation=np.concatenate([result.innovation for result in results]),
        method=settings.method,
        known=known,
        longest_lag_s=longest,
        pooled=pooled.values,
        model=_model(propulsion, turning, pauses),
        turning=turning,
        evidence=_evidence(propulsion, turning, pauses, settings),
        problems=tuple(result.problem for result in results if result.problem),
    )


def _known(settings: FitSettings, kept: Sequence[Kept]) -> FitParameters:
    """What a person says of the parameters; and the middle of a contour errs more along it."""
    known, further = settings.known, "error_variance_along"
    measured = any(one.tracks.length_um is not None for one in kept)
    if not measured or further in known.freed or further in known.fixed:
        return known
    return replace(known, freed=(*known.freed, further))


def _with_or_without_pauses(
    fitted: Callable[[bool], list[ChamberFit]], settings: FitSettings
) -> tuple[list[ChamberFit], Pauses]:
    """The chambers fitted by the model that is chosen."""
    if settings.method == "msd":
        return fitted(False), Pauses(promise=-np.inf)
    forced = "" if settings.model == "auto" else settings.model
    if forced == PAUSING:
        return fitted(True), Pauses(promise=np.nan, forced=forced)
    without = fitted(False)
    likely = [one.likelihood for one in without if one.likelihood is not None]
    promises = np.array([one.promise for one in likely])
    # A chamber that could not be fitted without pauses may have them.
    promise = 1000 * float(np.nanmean(promises)) if np.isfinite(promises).all() else np.nan
    pauses = Pauses(promise=promise, forced=forced)
    if not pauses.promising:
        return without, pauses
    results = fitted(True)
    rates = np.array([r.evidence.values[[COLUMN["stop_rate"], COLUMN["go_rate"]]] for r in results])
    pauses = compare_pauses(
        promise,
        [one.log_likelihood for one in likely],
        [
            np.where(one.likelihood.used, one.likelihood.log_likelihood, np.nan)
            for one in results
            if one.likelihood is not None
        ],
        rates[:, 0] / rates.sum(axis=1),
    )
    return (results if pauses.seen else without), pauses


def _evidence(
    propulsion: Propulsion, turning: Turning, pauses: Pauses, settings: FitSettings
) -> tuple[ModelEvidence, ...]:
    """What the model was chosen from: where there is no propulsion, there is no more to ask."""
    if settings.method == "msd":
        return ()
    if propulsion.none:
        return propulsion.evidence
    return (*propulsion.evidence, *turning.evidence, *pauses.evidence)


def _model(propulsion: Propulsion, turning: Turning, pauses: Pauses) -> str:
    """In words."""
    if propulsion.none:
        return PASSIVE
    if not pauses.seen:
        return turning.model
    return f"{CIRCLING} and {PAUSING}" if turning.steady else PAUSING


def _turning(
    chambers: Sequence[Sequence[Kept]], pooled: msd_fit.MsdFit, settings: FitSettings
) -> Turning:
    """Evidence of steady turning; a model that is forced stands whatever it says."""
    typical = [one.source.clean.typical_speed_um_s for them in chambers for one in them]
    if settings.method == "msd" or pooled.problem or not np.any(np.isfinite(typical)):
        return NO_TURNING
    found = look_for_turning(
        chambers,
        speed=float(np.nanmedian(typical)),
        rotational_diffusion=float(pooled.values[1]),
    )
    if settings.model == "auto":
        return found
    return replace(found, forced=settings.model)


def _longest_lag(parts: Sequence[Interval], settings: FitSettings) -> tuple[float, msd_fit.MsdFit]:
    curves = [part.curve(range(len(part.members))) for part in parts]
    if settings.longest_lag is not None:
        wanted = settings.longest_lag
        return wanted, msd_fit.fit_msd([curve.up_to(wanted) for curve in curves])
    shortest = float(min(p.lag_s[min(FEWEST_FRAMES, len(p.lag_s)) - 1] for p in parts))
    most = max(
        min(p.lag_s[-1], _FIELD_SHARE * p.width_um / p.speed_um_s if p.speed_um_s > 0 else np.inf)
        for p in parts
    )
    return msd_fit.longest_lag(
        curves, bend=settings.bend, at_least=shortest, at_most=max(float(most), shortest)
    )


def _speed_variance(chambers: Sequence[ChamberEvidence]) -> float:
    """Mean over chambers of the speed's variance from filament to filament, at least 0."""
    each = np.array([chamber.values[COLUMN["speed_variance"]] for chamber in chambers])
    return max(float(np.nanmean(each)), 0.0) if np.any(np.isfinite(each)) else 0.0


def _mean_speed(
    evidence: ChamberEvidence, variance: float, names: Sequence[str]
) -> ChamberEvidence:
    """The MSD knows √⟨v²⟩; the mean speed is a little less where filaments differ."""
    values, influence = evidence.values.copy(), evidence.influence.copy()
    for name in names:
        column = COLUMN[name]
        square = values[column] ** 2 - variance
        if square > 0:  # false for NaN too
            influence[:, column] *= values[column] / np.sqrt(square)
            values[column] = np.sqrt(square)
    return replace(evidence, values=values, influence=influence)
