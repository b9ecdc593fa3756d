"""Positions with a flag take no part in what is measured, and are not lost."""

import dataclasses

import numpy as np
from numpy.testing import assert_allclose, assert_array_equal

from glidefit.evidence import UNCLEAR
from glidefit.settings import CleanSettings
from glidefit.steps.clean import clean
from glidefit.tracks import Tracks


def gliders(n=5, frames=30):
    rng = np.random.default_rng(5)
    frame = np.tile(np.arange(frames), n)
    k = np.repeat(np.arange(n), frames)
    return Tracks(
        label=np.array([str(i) for i in range(n)]),
        offsets=np.arange(n + 1) * frames,
        frame=frame,
        time_s=0.5 * frame,
        x_um=0.4 * frame + rng.normal(0, 0.02, len(frame)),
        y_um=10.0 * k + rng.normal(0, 0.02, len(frame)),
        flag=np.full(len(frame), "", dtype="U16"),
    )


def cleaned(tracks):
    return clean(tracks, frame_s=0.5, settings=CleanSettings(), where="a.tif")


def test_flagged_positions_do_not_count():
    tracks = gliders()
    flag = tracks.flag.copy()
    flag[10:14] = "cut by the edge"
    x = tracks.x_um.copy()
    x[10:14] += 3.0  # would be a jump
    result = cleaned(dataclasses.replace(tracks, x_um=x, flag=flag))
    assert result.kept.all()
    assert result.tracks.n_positions[0] == 26
    assert_array_equal(result.flagged.frame, [10, 11, 12, 13])
    assert_array_equal(result.flagged.label, ["0"])
    whole = result.tracks.joined(result.flagged)
    assert_array_equal(whole.frame, tracks.frame)
    assert_allclose(whole.x_um, x)


def test_a_track_with_flags_throughout_is_unclear():
    tracks = gliders()
    flag = tracks.flag.copy()
    flag[:28] = "hidden in a crossing"
    result = cleaned(dataclasses.replace(tracks, flag=flag))
    assert result.reason[0] == UNCLEAR
    assert not result.decided[0]
    assert result.flagged is None
    assert result.tracks.n_positions[0] == 30


def test_without_flags_nothing_changes():
    tracks = gliders()
    result = cleaned(tracks)
    assert result.flagged is None
    assert_allclose(result.tracks.x_um, tracks.x_um)


def test_specks_show_drift_and_filaments_at_rest_are_stuck():
    tracks = gliders(n=6)
    rng = np.random.default_rng(6)
    x, _y, drift = tracks.x_um.copy(), tracks.y_um, 0.004 * tracks.frame
    # Along its body a filament is known less well than across.
    x += rng.normal(0, 0.06, len(x))
    rest = tracks.index == 5
    x[rest] = 7.0 + rng.normal(0, 0.06, rest.sum())
    bodies = dataclasses.replace(tracks, x_um=x + drift, heading_rad=np.zeros(len(x)))
    n = 4 * 30
    frame = np.tile(np.arange(30), 4)
    specks = Tracks(
        label=np.array(["a", "b", "c", "d"]),
        offsets=np.arange(5) * 30,
        frame=frame,
        time_s=0.5 * frame,
        x_um=np.repeat([3.0, 9.0, 2.0, 8.0], 30) + 0.004 * frame + rng.normal(0, 0.02, n),
        y_um=np.repeat([3.0, 9.0, 12.0, 18.0], 30) + rng.normal(0, 0.02, n),
    )
    result = clean(bodies, frame_s=0.5, settings=CleanSettings(), where="a.tif", resting=specks)
    assert result.drift.subtracted
    assert_allclose(result.drift_x_um[-1], 29 * 0.004, atol=0.03)
    assert result.tracks.n_tracks == 6
    assert_array_equal(result.reason, ["", "", "", "", "", "stuck"])
