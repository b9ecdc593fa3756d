from __future__ import annotations

import numpy as np

from glidefit.results import TimePoint
from glidefit.steps.ageing import ageing


def course(change, *, chambers=4, recordings=1, per_recording=0.0, scatter=0.002, seed=1):
    """Speed 0.8 with a relative change over each recording and from recording to recording."""
    rng = np.random.default_rng(seed)
    return [
        TimePoint(
            recording=f"c{c}r{r}",
            day="d",
            chamber=f"c{c}",
            time_s=10.0 * i,
            minutes=5.0 * r + i / 6,
            speed_um_s=0.8
            * (1 + change * i / 5 + per_recording * r + scatter * rng.standard_normal()),
            motile_fraction=0.9,
            n_frames=100,
        )
        for c in range(chambers)
        for r in range(recordings)
        for i in range(6)
    ]


def test_a_falling_speed_is_told_with_its_size():
    assert ageing(course(-0.20)) == [
        "Speed falls by 22% from the start to the end of a recording (photodamage, warming, or ATP "
        "running out); the headline numbers average over it."
    ]


def test_steady_speed_and_small_changes_say_nothing():
    assert ageing(course(0.0)) == []
    assert ageing(course(-0.03)) == []


def test_chance_is_rarely_taken_for_a_change():
    """99 % interval: of 300 courses with pure scatter 3 are expected, 11 or more in < 1e-3."""
    told = sum(bool(ageing(course(0.0, scatter=0.3, seed=s))) for s in range(300))
    assert told < 11


def test_change_from_recording_to_recording_is_told_along_the_chamber():
    found = ageing(course(0.0, recordings=4, per_recording=-0.06))
    assert len(found) == 1
    assert found[0].startswith("Speed falls by 2")
    assert "over the time that a chamber was filmed" in found[0]


def test_one_chamber_says_nothing():
    assert ageing(course(-0.5, chambers=1)) == []
