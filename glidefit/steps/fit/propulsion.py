"""Passive or not: do the tracks that seem to glide move on at all?"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from glidefit.evidence import DETACHED, KEPT, CleanRecording
from glidefit.kernels.gliding_data import first_guess
from glidefit.kernels.likelihood_fit import PASSIVE as PASSIVE_NAMES
from glidefit.kernels.likelihood_fit import fit_likelihood
from glidefit.kernels.passive import directedness, squared_speed
from glidefit.results import ModelEvidence
from glidefit.settings import FitSettings
from glidefit.steps.fit.intervals import Kept
from glidefit.steps.fit.likelihood import (
    ChamberLikelihood,
    by_interval,
    data_of,
    failed,
    strange,
)

Floats = NDArray[np.float64]

PASSIVE = "passive"
# A track is directed if successive displacements have this share of their squares in common, and
# there are so many of them that diffusion has it in 1 of 1000.
_DIRECTED, _FEWEST_PAIRS = 0.5, 10
# A chamber has no propulsion if less than this share of the filament-frames of its kept tracks is
# of directed ones: tracks that float and happen to look directed for some time.
_SHARE = 0.03
# Without propulsion are conditions of which so many chambers are.
_CHAMBERS = 2 / 3
# Where no track glides at all, those that float are worth a fit if there are so many, with this
# share of the filament-frames.
_FEWEST_FLOATING, _FLOATING_SHARE = 5, 0.2


@dataclass(frozen=True, slots=True, kw_only=True)
class Propulsion:
    """What the tracks of a condition show of propulsion.

    Parameters
    ----------
    directed : float
        Share of the filament-frames of kept tracks that are of directed ones, mean over chambers.
    undirected : float
        Share of the chambers in which it is too little for gliding, of those that can tell.
    """

    directed: float
    undirected: float
    forced: str = ""  # the model that a setting asks for

    @property
    def none(self) -> bool:
        """True if the tracks are fitted as passive."""
        return self.forced == PASSIVE if self.forced else self.undirected >= _CHAMBERS

    @property
    def evidence(self) -> tuple[ModelEvidence, ...]:
        """What spoke for or against passive motion."""
        return (
            ModelEvidence(
                model=PASSIVE,
                name="chambers without direction",
                value=self.undirected,
                needed=_CHAMBERS,
                speaks_for=self.undirected >= _CHAMBERS,
                meaning=f"Share of the chambers in which less than {_SHARE:.0%} of the filament-"
                f"frames are of directed tracks: successive displacements have more than "
                f"{_DIRECTED:.0%} of their squares in common, of straight paths all, of diffusion "
                f"nothing. Here {self.directed:.0%} are.",
            ),
        )


def look_for_propulsion(chambers: Sequence[Sequence[Kept]], settings: FitSettings) -> Propulsion:
    """Direction of the kept tracks, chamber by chamber; a forced model stands whatever it says."""
    forced = "" if settings.model == "auto" and settings.method == "likelihood" else settings.model
    each = np.array([_directed(members) for members in chambers])
    told = each[np.isfinite(each)]
    return Propulsion(
        directed=float(told.mean()) if len(told) else float("nan"),
        undirected=float((told < _SHARE).mean()) if len(told) else 0.0,
        forced=forced,
    )


def _directed(members: Sequence[Kept]) -> float:
    """Share of the filament-frames, of tracks long enough to tell; NaN if there are none."""
    directed, told = 0, 0
    for one in members:
        t = one.tracks
        share, pairs = directedness(
            t.frame, t.offsets, t.x_um, t.y_um, noise=one.source.clean.noise_um
        )
        long = pairs >= _FEWEST_PAIRS
        told += int(t.n_positions[long].sum())
        directed += int(t.n_positions[long & (share > _DIRECTED)].sum())
    return directed / told if told else float("nan")


def with_floating(
    recordings: Sequence[CleanRecording], *, settings: FitSettings
) -> list[CleanRecording]:
    """The recordings of a condition with its detached tracks kept, if nothing in it glides.

    That is so if a person says so, if the tracks that were kept show no direction, or if there
    are none and many float.
    """
    if settings.method != "likelihood" or settings.model not in ("auto", PASSIVE):
        return list(recordings)
    if settings.model == "auto" and not _nothing_glides(recordings, settings):
        return list(recordings)
    out = []
    for r in recordings:
        reason = np.where(r.clean.reason == DETACHED, KEPT, r.clean.reason)
        out.append(replace(r, clean=replace(r.clean, reason=reason)))
    return out


def _nothing_glides(recordings: Sequence[CleanRecording], settings: FitSettings) -> bool:
    chambers: dict[tuple[str, str], list[Kept]] = {}
    for r in recordings:
        if r.clean.kept.any():
            chambers.setdefault((r.day, r.chamber), []).append(Kept.of(r))
    if chambers:
        return look_for_propulsion(list(chambers.values()), settings).none
    floating = [(r.clean.reason == DETACHED, r.clean.tracks.n_positions) for r in recordings]
    frames = sum(int(n[these].sum()) for these, n in floating)
    seen = sum(int(n.sum()) for _, n in floating)
    return (
        sum(int(these.sum()) for these, _ in floating) >= _FEWEST_FLOATING
        and frames > _FLOATING_SHARE * seen
    )


FLOATING = (*PASSIVE_NAMES, "squared_speed")


def fit_floating(members: Sequence[Kept]) -> ChamberLikelihood:
    """Diffusion and localization error of a chamber without propulsion, by likelihood.

    And the square of a steady velocity, from displacements far apart in time, which is 0 but for
    chance if there is none. The values are those of `FLOATING`.
    """
    return by_interval(members, _fit_group)


def _fit_group(members: Sequence[Kept]) -> ChamberLikelihood:
    counts = np.concatenate([one.tracks.n_positions for one in members])
    judged = counts >= 2
    every = data_of(members, judged, "per_time")
    guess = first_guess(every)
    start = {name: guess[name] for name in PASSIVE_NAMES}
    used = judged.copy()
    for _ in range(2):  # the second time without tracks that are not what they seem
        data = data_of(members, used, "per_time")
        fit = fit_likelihood(data, free=PASSIVE_NAMES, start=start)
        if fit.problem:
            return failed(len(counts), len(FLOATING), fit.problem)
        start = dict(zip(fit.names, map(float, fit.values), strict=True))
        fitted, like = used, ~strange(every, start)
        if like.any():
            used = np.zeros(len(counts), dtype=bool)
            used[judged] = like
    influence = np.zeros((len(counts), len(FLOATING)))
    influence[fitted, :2] = fit.influence
    square, influence[:, 2] = _squared_speed(members)
    none = np.full(len(counts), np.nan)
    return ChamberLikelihood(
        values=np.append(fit.values, square),
        influence=influence,
        speed=none,
        speed_error=none,
        used=fitted,
        innovation=data.filtered(start).innovation,
        log_likelihood=none,
        promise=float("nan"),
        problem="",
    )


def _squared_speed(members: Sequence[Kept]) -> tuple[float, Floats]:
    tables = [one.tracks for one in members]
    each = [squared_speed(t.frame, t.time_s, t.offsets, t.x_um, t.y_um) for t in tables]
    products = np.concatenate([p for p, _ in each])
    squares = np.concatenate([s for _, s in each])
    if not squares.sum() > 0:
        return float("nan"), np.zeros(len(products))
    value = float(products.sum() / squares.sum())
    return value, (products - value * squares) / squares.sum()
