"""The evidence of one chamber: its values, and how each track moves them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from glidefit.evidence import ChamberEvidence
from glidefit.fit_parameters import FitParameters
from glidefit.kernels import msd_fit
from glidefit.kernels.active_brownian import circling_msd, pausing_msd_frozen
from glidefit.kernels.likelihood import Clock
from glidefit.kernels.likelihood_fit import CIRCLING as CIRCLING_NAMES
from glidefit.kernels.likelihood_fit import PAUSING as PAUSING_NAMES
from glidefit.kernels.likelihood_fit import STRAIGHT
from glidefit.kernels.msd_fit import LagCurve, MsdFit
from glidefit.steps.fit.evidence_columns import COLUMN, CurveColumns
from glidefit.steps.fit.intervals import Interval, Kept
from glidefit.steps.fit.likelihood import ChamberLikelihood, fit_chamber_likelihood
from glidefit.steps.fit.model_choice import Turning
from glidefit.steps.fit.propulsion import FLOATING, fit_floating
from glidefit.steps.fit.track_speeds import frame_speed, lasting_variance, track_speed

Floats = NDArray[np.float64]

# Parameters that the likelihood has and the MSD has too, in this order, then the variance of speed.
_MAIN = [COLUMN[name] for name in STRAIGHT]
_CIRCLING = [COLUMN[name] for name in CIRCLING_NAMES[len(STRAIGHT) :]]
_FLOATING = [COLUMN[name] for name in FLOATING]
_PAUSING = [COLUMN[name] for name in PAUSING_NAMES[len(STRAIGHT) :]]


@dataclass(frozen=True, slots=True, kw_only=True)
class ChamberFit:
    """Evidence of one chamber and what else its fit leaves.

    Parameters
    ----------
    evidence : ChamberEvidence
    track_speeds : dict
        By recording, speed and its error of each kept track, in µm/s.
    left_out : int
        Kept tracks that are not what they seem and did not enter the likelihood.
    innovation : (k, 2) array
        Normalised innovations of the likelihood; empty without one.
    likelihood : ChamberLikelihood or None
    problem : str
        Why the chamber could not be fitted.
    """

    evidence: ChamberEvidence
    track_speeds: dict[str, tuple[Floats, Floats]]
    left_out: int
    innovation: Floats
    likelihood: ChamberLikelihood | None
    problem: str


def fit_chamber(
    members: Sequence[Kept],
    intervals: Sequence[Interval],
    columns: Sequence[CurveColumns],
    *,
    longest_s: float,
    pooled: MsdFit,
    method: str,
    turning: Turning,
    pauses: bool,
    passive: bool,
    known: FitParameters,
    clock: Clock,
) -> ChamberFit:
    """Fit one chamber: with a turning rate if the paths turn, with pauses, or as passive."""
    parts = [(c, i, i.of(members)) for c, i in zip(columns, intervals, strict=True)]
    parts = [(c, i, places) for c, i, places in parts if places]
    # Rows of the evidence follow the curves, interval by interval.
    ordered = [i.members[place] for _, i, places in parts for place in places]
    curves = [i.curve(places) for _, i, places in parts]
    from_msd = msd_fit.fit_msd([curve.up_to(longest_s) for curve in curves], start=_start(pooled))
    lasting = lasting_variance(ordered, longest_s=longest_s, parameters=from_msd.values)
    n_tracks = sum(one.tracks.n_tracks for one in ordered)
    width = columns[-1].heading_model.stop
    values, influence = np.full(width, np.nan), np.zeros((n_tracks, width))
    values[_MAIN], influence[:, _MAIN] = _by_msd(from_msd, lasting)
    for i, name in enumerate(("msd_speed", "msd_rotational_diffusion")):
        _set(values, influence, name, (from_msd.values[i], from_msd.influence[:, i]))
    own, left_out, problem = None, 0, from_msd.problem
    if passive:
        own = fit_floating(ordered)
        values[_MAIN], influence[:, _MAIN] = np.nan, 0.0
        values[_FLOATING], influence[:, _FLOATING] = own.values, own.influence
        problem = own.problem
    elif method == "likelihood":
        names = _names(turning, pauses, known)
        start = _likely_start(from_msd, pooled, lasting[0], turning, pauses)
        own = fit_chamber_likelihood(ordered, names=names, start=start, known=known, clock=clock)
        there = [COLUMN[name] for name in names]
        values[there], influence[:, there] = own.values, own.influence
        problem = own.problem
    if own is not None:
        left_out = 0 if problem else int((~own.used & (_counts(ordered) >= 2)).sum())
    _set(values, influence, "frame_speed", _mean_frame_speed(ordered))
    row = 0
    for (column, interval, places), curve in zip(parts, curves, strict=True):
        rows = slice(row, row + len(curve.sums))
        row = rows.stop
        _fill_msd(values, influence, rows, curve, column)
        cosines = [interval.cosines[place] for place in places]
        _fill_heading(values, influence, rows, cosines, column)
    source = ordered[0].source
    return ChamberFit(
        evidence=ChamberEvidence(
            day=source.day,
            chamber=source.chamber,
            values=values,
            influence=influence,
            recording_of_track=_field_of_track(ordered),
        ),
        track_speeds=_track_speeds(ordered, own, longest_s, pooled.values),
        left_out=left_out,
        innovation=np.empty((0, 2)) if own is None else own.innovation,
        likelihood=own,
        problem=f"{source.day}, chamber {source.chamber}: {problem}" if problem else "",
    )


def _start(pooled: MsdFit) -> dict[str, float] | None:
    """Parameters of all chambers together as the first guess of each."""
    if pooled.problem:
        return None
    return dict(zip(msd_fit.PARAMETERS, map(float, pooled.values), strict=True))


def _names(turning: Turning, pauses: bool, known: FitParameters) -> tuple[str, ...]:
    """Parameters of the likelihood; what is held joins them where the model has it."""
    names = CIRCLING_NAMES if turning.steady else STRAIGHT
    rates = PAUSING_NAMES[len(STRAIGHT) :]
    names = (*names, *(rates if pauses else ()), *known.freed)
    held = [name for name in known.fixed if name not in (*names, *rates) and name in COLUMN]
    return (*names, *held)


def _likely_start(
    own: MsdFit, pooled: MsdFit, variance: float, turning: Turning, pauses: bool
) -> dict[str, float] | None:
    """First guess of the likelihood, inside its limits; None where the MSD knows nothing."""
    known = own if not own.problem else pooled
    if known.problem:
        return None
    speed, bend, along, noise = map(float, known.values)
    circling = {}
    if turning.steady:
        # Circles look like diffusion to the MSD: most of its D_r is theirs.
        bend = 0.2 * abs(bend)
        circling = {
            "turning_rate": turning.rate,
            "turning_rate_variance": max(turning.variance, 0.01 * turning.rate**2),
        }
    if pauses:  # of which the MSD knows nothing
        return circling
    return circling | {
        "speed": speed,
        "rotational_diffusion": max(bend, 0.1 * abs(bend)),
        "longitudinal_diffusion": max(along, 0.1 * abs(along)),
        "localization_variance": max(noise, 0.1 * abs(noise)),
        "speed_variance": float(np.fmax(variance, (0.05 * speed) ** 2)),
    }


def _by_msd(fit: MsdFit, lasting: tuple[float, Floats]) -> tuple[Floats, Floats]:
    values = np.append(fit.values, lasting[0])
    return values, np.concatenate([fit.influence, lasting[1][:, None]], axis=1)


def _counts(members: Sequence[Kept]) -> NDArray[np.int64]:
    return np.concatenate([one.tracks.n_positions for one in members])


def _track_speeds(
    members: Sequence[Kept], own: ChamberLikelihood | None, longest_s: float, pooled: Floats
) -> dict[str, tuple[Floats, Floats]]:
    """Speed of each track and its error, by recording; without a likelihood from one lag."""
    out, row = {}, 0
    for one in members:
        rows = slice(row, row + one.tracks.n_tracks)
        row = rows.stop
        if own is None or own.problem:
            speed = track_speed(one, longest_s=longest_s, parameters=pooled)
            out[one.source.recording] = speed, np.full(len(speed), np.nan)
        else:
            out[one.source.recording] = own.speed[rows], own.speed_error[rows]
    return out


def _set(values: Floats, influence: Floats, name: str, known: tuple[float, Floats]) -> None:
    values[COLUMN[name]], influence[:, COLUMN[name]] = known


def _field_of_track(members: Sequence[Kept]) -> NDArray[np.int64]:
    fields = list(dict.fromkeys(one.field for one in members))
    each = [np.full(one.tracks.n_tracks, fields.index(one.field)) for one in members]
    return np.concatenate(each).astype(np.int64)


def _mean_frame_speed(members: Sequence[Kept]) -> tuple[float, Floats]:
    sums = [frame_speed(one) for one in members]
    path = np.concatenate([p for p, _ in sums])
    time = np.concatenate([t for _, t in sums])
    if not time.sum() > 0:
        return float("nan"), np.zeros(len(path))
    value = float(path.sum() / time.sum())
    return value, (path - value * time) / time.sum()


def _fill_msd(
    values: Floats, influence: Floats, rows: slice, curve: LagCurve, columns: CurveColumns
) -> None:
    """Measured MSD, and that of the fitted parameters."""
    values[columns.msd] = curve.value
    influence[rows, columns.msd] = np.nan_to_num(curve.influence * curve.value)
    if np.isfinite(values[COLUMN["diffusion"]]):
        free = 4 * (curve.lag_s - curve.exposure_s / 3)
        slopes = np.stack([free, np.full_like(free, 4.0)])
        values[columns.model] = values[_FLOATING[:2]] @ slopes
        influence[:, columns.model] = influence[:, _FLOATING[:2]] @ slopes
        return
    names = _MAIN + [place for place in (*_CIRCLING, *_PAUSING) if np.isfinite(values[place])]
    fitted = values[names]
    if not np.all(np.isfinite(fitted)):
        return
    values[columns.model] = _predicted(curve, names, fitted)
    influence[:, columns.model] = influence[:, names] @ _slope(curve, names, fitted)
    # Filaments of which a person says so also diffuse sideways, or err more along their heading.
    sideways = 2 * (curve.lag_s - curve.exposure_s / 3)
    for name, slope in (("sideways_diffusion", sideways), ("error_variance_along", 2.0)):
        if np.isfinite(values[COLUMN[name]]):
            values[columns.model] += values[COLUMN[name]] * slope
            influence[:, columns.model] += influence[:, [COLUMN[name]]] * slope


def _predicted(curve: LagCurve, names: Sequence[int], fitted: Floats) -> Floats:
    """MSD of the fitted parameters, those of active, circling or pausing paths.

    It knows the mean square of the speed, mean squared plus variance, and averages over the
    turning rates of the population.
    """
    speed, *others, variance = map(float, fitted[: len(_MAIN)])
    named = dict(zip(msd_fit.PARAMETERS, [_root(speed**2 + variance), *others], strict=True))
    of = dict(zip(names, map(float, fitted), strict=True))
    stop, go = (of.get(place, 0.0) for place in _PAUSING)
    if stop > 0:
        msd = _pausing(curve, named, stop_rate=stop, go_rate=go)
    else:
        msd = msd_fit.model_values(curve, named)
    if _CIRCLING[0] in of:
        rate, spread = of[_CIRCLING[0]], _root(of[_CIRCLING[1]])
        msd = msd + _circling(curve, named, rate=rate, spread=spread)
    return msd


def _pausing(
    curve: LagCurve, named: dict[str, float], *, stop_rate: float, go_rate: float
) -> Floats:
    """MSD of filaments that pause, with headings frozen in the pauses.

    The mean positions of two exposures differ as two instants do, averaged over how far apart
    the instants are, less what the instants of one exposure differ.
    """
    path = {name: named[name] for name in ("speed", "rotational_diffusion")}
    running = go_rate / (stop_rate + go_rate)

    def instants(lag: Floats) -> Floats:
        diffused = 2 * named["longitudinal_diffusion"] * running * lag
        return diffused + pausing_msd_frozen(lag, stop_rate=stop_rate, go_rate=go_rate, **path)

    lag, exposure = curve.lag_s, curve.exposure_s
    msd = instants(lag)
    if exposure > 0:
        node, weight = np.polynomial.legendre.leggauss(8)
        node, weight = (node + 1) / 2 * exposure, weight * (1 - (node + 1) / 2)
        apart = instants(lag[:, None] + node) + instants(np.abs(lag[:, None] - node))
        msd = (0.5 * apart - instants(node)) @ weight
    return np.asarray(msd + 4 * named["localization_variance"])


def _circling(curve: LagCurve, named: dict[str, float], *, rate: float, spread: float) -> Floats:
    """What steady turning takes from the MSD; its blur in one exposure is neglected."""
    path = {"speed": named["speed"], "rotational_diffusion": named["rotational_diffusion"]}
    node, weight = np.polynomial.hermite_e.hermegauss(9)
    turned = [
        circling_msd(curve.lag_s, turning_rate=float(rate + spread * z), **path) for z in node
    ]
    bent = weight @ np.array(turned) / weight.sum()
    return np.asarray(bent - circling_msd(curve.lag_s, turning_rate=0.0, **path))


def _root(square: float) -> float:
    return float(np.sqrt(max(square, 0.0)))


def _slope(curve: LagCurve, names: Sequence[int], fitted: Floats) -> Floats:
    """Derivative of the predicted MSD by each parameter, (p, l)."""
    slope = []
    for i, value in enumerate(fitted):
        step = np.zeros(len(fitted))
        step[i] = 1e-5 * max(abs(value), 1e-9)
        above, below = (_predicted(curve, names, fitted + sign * step) for sign in (1, -1))
        slope.append((above - below) / 2 / step[i])
    return np.array(slope)


def _fill_heading(
    values: Floats,
    influence: Floats,
    rows: slice,
    cosines: Sequence[tuple[Floats, Floats]],
    columns: CurveColumns,
) -> None:
    """Heading correlation, and A exp(-D_r t) through it from lag 2 on: noise lowers only A."""
    sums = np.concatenate([s for s, _ in cosines])
    counts = np.concatenate([c for _, c in cosines])
    total = counts.sum(axis=0)
    mean = np.where(total > 0, sums.sum(axis=0) / np.maximum(total, 1), np.nan)
    moved = np.nan_to_num((sums - mean * counts) / np.maximum(total, 1))
    values[columns.heading] = mean
    influence[rows, columns.heading] = moved
    use = columns.heading_fitted & (mean > 0)
    if use.sum() < 3:
        return
    t = columns.heading_lag_s
    design = np.stack([np.ones(use.sum()), -t[use]], axis=1)
    solve = np.linalg.solve(design.T @ design, design.T)
    log_a, turning = solve @ np.log(mean[use])
    change = (moved[:, use] / mean[use]) @ solve.T  # of (log A, D_r), by each track
    if np.isnan(values[COLUMN["heading_diffusion"]]):  # the first interval speaks for the chamber
        values[COLUMN["heading_diffusion"]] = turning
        influence[rows, COLUMN["heading_diffusion"]] = change[:, 1]
    model = np.exp(log_a - turning * t)
    values[columns.heading_model] = model
    influence[rows, columns.heading_model] = model * (change[:, :1] - change[:, 1:] * t)
