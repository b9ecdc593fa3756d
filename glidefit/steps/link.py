"""Linking: detections of successive frames joined into tracks."""

from __future__ import annotations

import dataclasses
import itertools
import math
from collections.abc import Iterator, Sequence

import numpy as np
from numpy.typing import NDArray

from glidefit.errors import InputError
from glidefit.kernels.matching import (
    MotionLaw,
    Spots,
    TrackStates,
    best_links,
    born,
    clear_steps,
    continued,
    link_gain,
    predicted,
    reachable,
    speed_mixture,
    turning_and_wobble,
)
from glidefit.settings import LinkSettings
from glidefit.tracks import Detections, Tracks

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# How spots move is learned from so many frames, from the first one with spots on.
_LEARNING_FRAMES = 400
# Spots in one group of competing links from which on a frame is called crowded.
_CROWD = 30
_FEWEST_STEPS = 30


def link(
    detections: Detections, *, times_s: Floats, settings: LinkSettings, where: str
) -> tuple[Tracks, tuple[str, ...]]:
    """Tracks of the spots of a recording, and notes on what may be wrong with them.

    A spot continues a track if that is likelier than that the track is missed and another begins:
    the likelihood is that of its distance from where the track, which has a velocity, was going.
    How fast spots are and how sharply they turn is learned from the recording. No link is faster
    than `settings.max_speed` since the track was last seen, but for the noise of both positions;
    a track is bridged over `settings.max_gap` frames. All links of a frame are chosen together.

    Parameters
    ----------
    detections : Detections
        n positions in f frames.
    times_s : (f,) array
        Start of each frame in s, increasing.
    settings : LinkSettings
        Largest speed and gap.
    where : str
        The recording, for messages.

    Returns
    -------
    Tracks
        Every position is in one track, however short; numbered by their first frames from "1".
    tuple of str
        Sentences for the page, none if nothing is wrong.

    Raises
    ------
    InputError
        For times that do not increase.
    """
    _check(times_s, detections.n_frames, where)
    if len(detections.frame) == 0:
        return _tracks(detections, times_s, np.empty(0, dtype=np.int64)), ()
    spots = _spots(detections, times_s)
    first = int(detections.frame[0])
    seen = spots[first : first + _LEARNING_FRAMES]
    law = _first_law(seen, settings)
    for _ in range(2):
        law = _learned(law, seen, _linked(seen, law, settings)[0], settings)
    track, crowds = _linked(spots, law, settings)
    tracks = _tracks(detections, times_s, track)
    notes = *_crowd_notes(crowds), *_spacing_notes(law, seen), *_speed_notes(tracks, settings)
    return tracks, notes


def _check(times_s: Floats, n_frames: int, where: str) -> None:
    if len(times_s) != n_frames:
        raise ValueError(f"{len(times_s)} times for {n_frames} frames")
    late = np.flatnonzero(~(np.diff(times_s) > 0))
    if len(late):
        k = int(late[0])
        raise InputError(
            f"{where}, frame {k + 1}",
            f"its time is {times_s[k + 1]:g} s, after {times_s[k]:g} s of the frame before",
            expected="times in s that increase from frame to frame",
            remedy="Give frame_s in the assay sheet if the times of the file are wrong.",
        )


def _spots(detections: Detections, times_s: Floats) -> list[Spots]:
    cuts = detections.offsets
    return [
        Spots(
            f,
            float(times_s[f]),
            detections.x_um[a:b],
            detections.y_um[a:b],
            detections.precision_um[a:b],
        )
        for f, (a, b) in enumerate(itertools.pairwise(cuts))
    ]


def _linked(spots: Sequence[Spots], law: MotionLaw, settings: LinkSettings) -> tuple[Ints, Ints]:
    """Track of each position (n,), and the largest crowd of each frame (f,)."""
    longest_s = 1.5 * (settings.max_gap + 1) * _usual_interval(spots)
    states = TrackStates.none()
    tracks: list[Ints] = []
    crowds, n_tracks = [], 0
    for here in spots:
        alive = states.frame >= here.frame - 1 - settings.max_gap
        states = states.select(alive & (here.time_s - states.time_s <= longest_s))
        ahead = predicted(states, time_s=here.time_s, law=law)
        i, j = reachable(states, here, max_speed=settings.max_speed)
        gain = link_gain(ahead, i, here, j, law=law)
        best, crowd = best_links(i, j, gain, n_tracks=len(states.track), n_spots=len(here.x))
        i, j = i[best], j[best]
        new = np.setdiff1d(np.arange(len(here.x)), j)
        track = np.empty(len(here.x), dtype=np.int64)
        track[j] = states.track[i]
        track[new] = n_tracks + np.arange(len(new))
        going = continued(ahead, i, here, j, law=law)
        begun = born(here, new, first_track=n_tracks, law=law)
        states = states.select(~np.isin(states.track, going.track)).joined(going).joined(begun)
        n_tracks += len(new)
        tracks.append(track)
        crowds.append(crowd)
    return np.concatenate([np.empty(0, dtype=np.int64), *tracks]), np.array(crowds, dtype=np.int64)


def _usual_interval(spots: Sequence[Spots]) -> float:
    times = [here.time_s for here in spots]
    return float(np.median(np.diff(times))) if len(times) > 1 else 1.0


def _density(spots: Sequence[Spots]) -> float:
    """Spots per µm² of a frame, in the part of the field that has spots."""
    x, y = (np.concatenate([getattr(s, name) for s in spots]) for name in ("x", "y"))
    return len(x) / len(spots) / max(float(np.ptp(x) * np.ptp(y)), 1.0) if len(x) else 0.0


def _first_law(spots: Sequence[Spots], settings: LinkSettings) -> MotionLaw:
    """From the steps that cannot be mistaken."""
    steps: list[Floats] = [np.empty((3, 0))]
    for before, after in itertools.pairwise(spots):
        i, j = clear_steps(before, after, max_speed=settings.max_speed)
        square = (after.x[j] - before.x[i]) ** 2 + (after.y[j] - before.y[i]) ** 2
        noise = before.precision[i] ** 2 + after.precision[j] ** 2
        steps.append(np.stack([square, np.full(len(i), after.time_s - before.time_s), noise]))
    slow, fast, share = _speeds(np.concatenate(steps, axis=1), settings)
    return MotionLaw(
        slow_um_s=slow,
        fast_um_s=fast,
        fast_share=share,
        turning=1.0,
        wobble_um=0.0,
        missed=0.05,
        births=max(0.05 * _density(spots), 1e-9),
    )


def _speeds(steps: Floats, settings: LinkSettings) -> tuple[float, float, float]:
    """Slow, fast and the share of the fast, from rows of squared steps, their times, noise."""
    if steps.shape[1] < _FEWEST_STEPS:  # too few to learn from: anything up to the largest speed
        return settings.max_speed / 30, settings.max_speed / 3, 0.5
    slow, fast, share = speed_mixture(*steps, max_speed=settings.max_speed)
    return slow, fast, float(np.clip(share, 0.05, 0.95))


def _learned(
    law: MotionLaw, spots: Sequence[Spots], track: Ints, settings: LinkSettings
) -> MotionLaw:
    """From the tracks that the law before has given."""
    if len(track) == 0:
        return law
    columns = [[np.full(len(s.x), s.frame), np.full(len(s.x), s.time_s), *s[2:]] for s in spots]
    rows = np.concatenate(columns, axis=1)
    order = np.lexsort((rows[0], track))
    track, (frame, time_s, x, y, precision) = track[order], rows[:, order]

    inside = np.diff(track) == 0
    noise = precision[1:] ** 2 + precision[:-1] ** 2 + 2 * law.wobble_um**2
    steps = np.stack([np.diff(x) ** 2 + np.diff(y) ** 2, np.diff(time_s), noise])[:, inside]
    slow, fast, share = _speeds(steps, settings)

    runs = np.arange(max(len(x) - 4, 0))[:, None] + np.arange(5)
    first, last = runs[:, 0], runs[:, 4]
    runs = runs[(track[last] == track[first]) & (frame[last] == frame[first] + 4)]
    turning, wobble = turning_and_wobble(x[runs], y[runs], time_s[runs], precision[runs])

    begun = int(np.sum(frame[np.diff(track, prepend=-1) != 0] > 0))
    lost = int(np.sum(np.diff(frame)[inside] - 1))
    density = _density(spots)
    return dataclasses.replace(
        law,
        slow_um_s=slow,
        fast_um_s=fast,
        fast_share=share,
        turning=law.turning if turning is None else float(np.clip(turning, 0.02, 5.0)),
        wobble_um=law.wobble_um if wobble is None else wobble,
        missed=float(np.clip((lost + begun) / (len(x) + lost), 0.01, 0.3)),
        births=float(np.clip((begun + 1) / len(x), 2e-3, 1.0)) * density,
    )


def _crowd_notes(crowds: Ints) -> Iterator[str]:
    crowded = np.flatnonzero(crowds > _CROWD)
    if len(crowded):
        worst = int(np.argmax(crowds))
        more = f" and in {len(crowded) - 1} more" if len(crowded) > 1 else ""
        yield (
            f"In frame {worst}{more}, {crowds[worst]} spots lie so close that their links compete, "
            "and a track may go on with another's spot. A higher detect.threshold finds fewer "
            "faint spots; a lower link.max_speed leaves fewer links to choose from."
        )


def _spacing_notes(law: MotionLaw, spots: Sequence[Spots]) -> Iterator[str]:
    step, density = math.sqrt(2) * law.fast_um_s * _usual_interval(spots), _density(spots)
    # Crocker & Grier, J. Colloid Interface Sci. 179, 298 (1996), from memory: links hold while a
    # step is well under half the way to the nearest neighbour, 0.5/√density on average.
    if density > 0 and step > 0.25 / math.sqrt(density):
        yield (
            f"Spots move {step:.2g} µm from frame to frame and the next one is usually "
            f"{0.5 / math.sqrt(density):.2g} µm away, so that tracks may have been exchanged: "
            "film faster or with fewer spots."
        )


def _speed_notes(tracks: Tracks, settings: LinkSettings) -> Iterator[str]:
    inside = np.diff(tracks.index) == 0
    step = np.hypot(np.diff(tracks.x_um), np.diff(tracks.y_um))[inside]
    speed = step / np.diff(tracks.time_s)[inside] / settings.max_speed
    moving, fastest = int(np.sum(speed > 0.3)), int(np.sum(speed > 0.9))
    if fastest > max(1, 0.05 * moving):
        yield (
            f"{fastest} of {moving} fast links are within a tenth of link.max_speed, "
            f"{settings.max_speed:g} µm/s: it may cut the fastest tracks."
        )


def _tracks(detections: Detections, times_s: Floats, track: Ints) -> Tracks:
    order = np.lexsort((detections.frame, track))
    counts = np.bincount(track)
    frame = detections.frame[order]
    return Tracks(
        label=np.array([str(k + 1) for k in range(len(counts))], dtype=np.str_),
        offsets=np.concatenate([[0], np.cumsum(counts)]).astype(np.int64),
        frame=frame,
        time_s=times_s[frame],
        x_um=detections.x_um[order],
        y_um=detections.y_um[order],
    )
