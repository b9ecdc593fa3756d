"""Notice the same field of view filmed twice, by its stuck objects."""

from __future__ import annotations

import itertools
from collections.abc import Sequence

import numpy as np
from scipy.spatial import cKDTree

from glidefit.evidence import STUCK, CleanRecording

_FEWEST, _SHARE = 4, 0.5


def same_fields(recordings: Sequence[CleanRecording]) -> list[str]:
    """Pairs of recordings of one chamber that show the same stuck objects, in plain words.

    Recordings that the sheet already gives the same ``field`` are not named.
    """
    out = []
    for one, two in itertools.combinations(recordings, 2):
        if (one.day, one.chamber) != (two.day, two.chamber) or (
            one.field and one.field == two.field
        ):
            continue
        a, b = _stuck(one), _stuck(two)
        if min(len(a), len(b)) < _FEWEST:
            continue
        near = 4 * max(one.clean.noise_um, two.clean.noise_um) + 0.1
        hits = sum(bool(found) for found in cKDTree(b).query_ball_point(a, near))
        by_chance = len(b) * np.pi * near**2 / (one.field_um[0] * one.field_um[1])
        if hits / len(a) > max(_SHARE, 3 * by_chance):
            out.append(
                f"{one.recording} and {two.recording} show {hits} stuck objects in the same "
                "places: the same field filmed twice is one sample. Give both rows the same "
                "`field` in the assay sheet."
            )
    return out


def _stuck(one: CleanRecording) -> np.ndarray:
    tracks = one.clean.tracks.select(one.clean.reason == STUCK)
    count = np.maximum(tracks.n_positions, 1)
    x = np.bincount(tracks.index, weights=tracks.x_um, minlength=tracks.n_tracks) / count
    y = np.bincount(tracks.index, weights=tracks.y_um, minlength=tracks.n_tracks) / count
    return np.stack([x, y], axis=1)
