"""Set tracks aside that do not glide or cannot be trusted; measure and subtract stage drift."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from glidefit.errors import InputError
from glidefit.evidence import (
    DETACHED,
    JUMP,
    KEPT,
    MIN_POSITIONS,
    PIVOTING,
    SHORT,
    STUCK,
    UNCLEAR,
    CleanTracks,
)
from glidefit.kernels import drift as drifting
from glidefit.kernels import motion
from glidefit.kernels.motion_states import (
    StateProbabilities,
    smallest_noticed_speed,
    state_probabilities,
)
from glidefit.results import Drift
from glidefit.settings import CleanSettings
from glidefit.tracks import Tracks

Floats = NDArray[np.float64]

# A step is out of the noise from this many σ on.
_STEP_NOISE = 8.0
# Objects from which drift is taken must be seen for this share of the recording.
_DRIFT_SHARE = 0.5
# Drift is slower than this share of the typical gliding speed, and resting objects agree in
# velocity to this share of it.
_DRIFT_FASTEST, _DRIFT_SLACK = 0.3, 0.01
# Where drift could not be measured, what moves slower than this share of the typical speed
# cannot be told from an object at rest on a drifting stage.
_UNSEEN_DRIFT = 0.03
# A circle of radius R about a pivot has an extent of 2√2 R.
_EXTENT_OF_RADIUS = 2 * np.sqrt(2.0)


def clean(
    tracks: Tracks,
    *,
    frame_s: float,
    settings: CleanSettings,
    where: str,
    resting: Tracks | None = None,
) -> CleanTracks:
    """Verdict on every track of one recording.

    Parameters
    ----------
    tracks : Tracks
        All tracks of the recording.
    frame_s : float
        Frame interval in s.
    settings : CleanSettings
    where : str
        Names the recording in errors.
    resting : Tracks, optional
        Specks that are no tracers, from which drift may be seen too.

    Raises
    ------
    InputError
        If no track has three successive frames, so that the noise cannot be measured.
    """
    tracks, flagged, unclear = _without_flagged(tracks)
    noise = _noise(tracks, where)
    rest = _noise_of_rest(tracks, noise)
    shift, drift = _drift(tracks, resting, rest, frame_s, settings)
    if drift.subtracted:
        tracks = _shifted(tracks, shift)
        flagged = None if flagged is None else _shifted(flagged, shift)
        noise = _noise(tracks, where)
        rest = _noise_of_rest(tracks, noise)
    measured = motion.measure(tracks.frame, tracks.offsets, tracks.x_um, tracks.y_um, noise=rest)
    jump = _jumps(measured, rest, settings)
    long_enough = tracks.n_positions >= MIN_POSITIONS
    creep = _DRIFT_SLACK if drift.measured else _UNSEEN_DRIFT
    states = state_probabilities(
        tracks.frame,
        tracks.offsets,
        tracks.x_um,
        tracks.y_um,
        noise=rest,
        speed=measured.speed_um_frame,
        radius=settings.pivot_extent / _EXTENT_OF_RADIUS,
        creep=creep,
        eligible=long_enough & ~jump,
    )
    reason = _reasons(tracks, measured, states, jump, noise=rest, settings=settings)
    reason[unclear] = UNCLEAR
    gliding = (reason == KEPT) & (measured.lag > 0)
    duration = _duration(tracks, frame_s)
    noticed = smallest_noticed_speed(tracks.n_positions.astype(np.float64), duration, noise=rest)
    noticed = np.maximum(noticed, states.slowest / frame_s)
    surest = np.fmax(states.gliding, 1 - states.gliding)
    return CleanTracks(
        tracks=tracks,
        reason=reason.astype(np.str_),
        decided=long_enough & ~unclear & (jump | (surest >= settings.odds / (1 + settings.odds))),
        gliding_probability=states.gliding,
        noise_um=noise,
        typical_speed_um_s=_median(measured.speed_um_frame[gliding]) / frame_s,
        smallest_speed_um_s=_median(noticed[long_enough]),
        drift=drift,
        drift_x_um=shift[0],
        drift_y_um=shift[1],
        flagged=flagged,
    )


def _without_flagged(tracks: Tracks) -> tuple[Tracks, Tracks | None, NDArray[np.bool_]]:
    """Tracks without positions that are not to be trusted, these, and which tracks are unclear.

    A track that would be left with fewer than three positions keeps all and is unclear.
    """
    if tracks.flag is None or not np.any(tracks.flag != ""):
        return tracks, None, np.zeros(tracks.n_tracks, dtype=np.bool_)
    good = tracks.flag == ""
    left = np.bincount(tracks.index[good], minlength=tracks.n_tracks)
    unclear = (left < MIN_POSITIONS) & (left < tracks.n_positions)
    good = good | unclear[tracks.index]
    if good.all():
        return tracks, None, unclear
    return tracks.positions(good), tracks.positions(~good), unclear


def _shifted(tracks: Tracks, shift: tuple[Floats, Floats]) -> Tracks:
    last = len(shift[0]) - 1
    frame = np.minimum(tracks.frame, last)
    return tracks.moved(tracks.x_um - shift[0][frame], tracks.y_um - shift[1][frame])


def _noise(tracks: Tracks, where: str) -> float:
    each = motion.localization_noise(tracks.frame, tracks.offsets, tracks.x_um, tracks.y_um)
    noise = motion.common_noise(each, tracks.n_positions)
    if not np.isfinite(noise):
        raise InputError(
            where,
            f"none of its {tracks.n_tracks} tracks has a position in three successive frames",
            expected="tracks from which localization error can be told from motion",
            remedy="Check the frame column, or film faster.",
        )
    return noise


def _duration(tracks: Tracks, frame_s: float) -> Floats:
    first, last = tracks.offsets[:-1], tracks.offsets[1:] - 1
    frames = np.maximum(tracks.frame[last] - tracks.frame[first], 1)
    return np.asarray(frames * frame_s, dtype=np.float64)


def _median(values: Floats) -> float:
    return float(np.median(values)) if len(values) else float("nan")


def _jumps(measured: motion.Motion, noise: float, settings: CleanSettings) -> NDArray[np.bool_]:
    """Tracks with a step too long for the others' speed and for their own steps."""
    moving = motion.advancing(measured)
    # Free diffusion makes long steps too: a jump also stands out of the track's own steps.
    usual = np.fmax(_median(measured.speed_um_frame[moving]), measured.median_step_um)
    return np.asarray(measured.longest_step_um > settings.jump * usual + _STEP_NOISE * noise)


def _reasons(
    tracks: Tracks,
    measured: motion.Motion,
    states: StateProbabilities,
    jump: NDArray[np.bool_],
    *,
    noise: float,
    settings: CleanSettings,
) -> NDArray[np.str_]:
    """One reason a track, the first that holds: short, stuck, jump, pivoting, detached.

    Whether a track glides is told by likelihood; how it stays in place if not, by its extent.
    """
    limit = motion.spread_limit(tracks.n_positions, multiple=settings.stuck)
    gliding = states.gliding >= 0.5
    creeps = states.at_rest >= np.fmax(states.confined, states.floating)
    rest = ~gliding & ~jump & ((measured.spread_um <= limit * noise) | creeps)
    n_frames = tracks.frame[tracks.offsets[1:] - 1] - tracks.frame[tracks.offsets[:-1]]
    in_place = motion.in_place(measured, n_frames, extent=settings.pivot_extent)
    reason = np.full(tracks.n_tracks, KEPT, dtype="U16")
    for name, holds in (
        (DETACHED, ~gliding),
        (PIVOTING, ~gliding & in_place),
        (JUMP, jump),
        (STUCK, rest),
        (SHORT, tracks.n_positions < MIN_POSITIONS),
    ):
        reason[holds] = name
    return reason


def _noise_of_rest(tracks: Tracks, noise: float) -> float:
    """Scatter of a coordinate of what rests; of filaments the mean of along and across."""
    if tracks.heading_rad is None or not np.all(np.isfinite(tracks.heading_rad)):
        return noise
    t = tracks
    each = motion.noise_along(t.frame, t.offsets, t.x_um, t.y_um, tracks.heading_rad)
    along = motion.common_noise(each, t.n_positions)
    return max(noise, float(np.sqrt((noise**2 + along**2) / 2)))


def _with(tracks: Tracks, resting: Tracks | None) -> Tracks:
    """Positions of both, and nothing else of them."""
    if resting is None or resting.n_tracks == 0:
        return tracks
    ends = resting.offsets[1:] + tracks.offsets[-1]
    return Tracks(
        label=np.concatenate([tracks.label, resting.label]),
        offsets=np.concatenate([tracks.offsets, ends]),
        frame=np.concatenate([tracks.frame, resting.frame]),
        time_s=np.concatenate([tracks.time_s, resting.time_s]),
        x_um=np.concatenate([tracks.x_um, resting.x_um]),
        y_um=np.concatenate([tracks.y_um, resting.y_um]),
    )


def _drift(
    tracks: Tracks,
    resting: Tracks | None,
    noise: float,
    frame_s: float,
    settings: CleanSettings,
) -> tuple[tuple[Floats, Floats], Drift]:
    tracks = _with(tracks, resting)
    n_frames = int(tracks.frame.max()) + 1
    still = np.zeros(n_frames), np.zeros(n_frames)
    if settings.drift == "off":
        return still, _no_drift(0, "not measured: switched off")
    together = _resting_objects(tracks, noise, settings)
    n_objects = int(together.sum())
    if n_objects < settings.drift_objects:
        note = (
            f"not measured: fewer than {settings.drift_objects} objects rest for half the recording"
        )
        return still, _no_drift(n_objects, note)
    rest = tracks.select(together)
    raw = [
        drifting.common_displacement(rest.frame, rest.index, x, n_frames)
        for x in (rest.x_um, rest.y_um)
    ]
    seen = np.bincount(rest.frame, minlength=n_frames)
    significant = drifting.drift_is_significant(raw[0], raw[1], seen, noise=noise)
    x, y = (d - d[0] for d in map(drifting.smooth, raw))
    far = float(np.hypot(x, y).max())
    return (x, y) if significant else still, Drift(
        measured=True,
        subtracted=significant,
        n_objects=n_objects,
        speed_um_s=float(np.hypot(x[-1], y[-1])) / max((n_frames - 1) * frame_s, frame_s),
        largest_um=far,
        note="subtracted" if significant else "not subtracted: within the noise",
    )


def _resting_objects(tracks: Tracks, noise: float, settings: CleanSettings) -> NDArray[np.bool_]:
    """Tracks at rest on the stage: one common slow velocity, and no motion of their own."""
    n_frames = int(tracks.frame.max()) + 1
    velocity, error = drifting.track_velocities(
        tracks.frame, tracks.offsets, tracks.x_um, tracks.y_um
    )
    measured = motion.measure(tracks.frame, tracks.offsets, tracks.x_um, tracks.y_um, noise=noise)
    moving = motion.advancing(measured) & np.isfinite(measured.advance)
    typical = _median(measured.speed_um_frame[moving])
    if not np.isfinite(typical):
        typical = 0.0  # nothing advances: only noise separates the objects
    together = drifting.resting_together(
        velocity,
        error,
        noise=noise,
        slack=_DRIFT_SLACK * typical,
        fastest=_DRIFT_FASTEST * typical if typical else np.inf,
        eligible=tracks.n_positions >= max(MIN_POSITIONS, _DRIFT_SHARE * n_frames),
    )
    if together.sum() < settings.drift_objects:
        return together
    rest = tracks.select(together)
    own = []
    for x in (rest.x_um, rest.y_um):
        shift = drifting.common_displacement(rest.frame, rest.index, x, n_frames)
        own.append(x - shift[rest.frame])
    left = motion.measure(rest.frame, rest.offsets, own[0], own[1], noise=noise)
    limit = motion.spread_limit(rest.n_positions, multiple=settings.stuck)
    together[np.flatnonzero(together)[left.spread_um > limit * noise]] = False
    return together


def _no_drift(n_objects: int, note: str) -> Drift:
    nan = float("nan")
    return Drift(
        measured=False,
        subtracted=False,
        n_objects=n_objects,
        speed_um_s=nan,
        largest_um=nan,
        note=note,
    )


def closest_miss(cleaned: CleanTracks, reason: str) -> tuple[float, str]:
    """How near the best of the tracks with this reason came to being kept.

    Returns
    -------
    nearness : float
        Share of the limit that was reached; -inf if no track has the reason.
    text : str
        The rule, its limit, the best track and its value, and what to do.
    """
    chosen = cleaned.reason == reason
    if not chosen.any():
        return float("-inf"), ""
    t, noise = cleaned.tracks, cleaned.noise_um
    m = motion.measure(t.frame, t.offsets, t.x_um, t.y_um, noise=noise)
    told = "and glides with a probability of {limit:.2g}; it must reach 0.5"
    advice = "if they do glide, film longer"
    value, bound = m.spread_um / max(noise, 1e-12), cleaned.gliding_probability
    reached = bound / 0.5
    if reason == STUCK:
        what = "strays {value:.2g} × noise from its mean " + told
    elif reason == PIVOTING:
        what, value = "goes round within {value:.2g} µm " + told, m.extent_um
    elif reason == DETACHED:
        what, value = "has a mean cosine of {value:.2g} between displacements " + told, m.advance
    elif reason == JUMP:
        what, value = "has a step of {value:.2g} µm in one frame", m.longest_step_um
        reached, advice = -value, "if they do glide, change clean.jump"
    else:
        what = "has {value:.0f} positions; a track needs {limit:.0f}"
        value, bound = t.n_positions.astype(float), np.full(t.n_tracks, float(MIN_POSITIONS))
        reached, advice = value / bound, "if they do glide, change link.max_gap"
    reached = np.where(chosen & np.isfinite(reached), reached, -np.inf)
    best = int(np.argmax(reached))
    said = what.format(value=value[best], limit=bound[best])
    return float(reached[best]), (
        f"The nearest of the {int(chosen.sum())} {reason} tracks, {t.label[best]}, {said}. "
        f"Look at the tracks; {advice}."
    )
