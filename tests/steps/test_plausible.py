from __future__ import annotations

import pytest

from glidefit.steps.plausible import implausible

USUAL = {"speed_um_s": 0.8, "noise_um": 0.03, "frame_s": 0.5, "max_speed_um_s": 12.0}


@pytest.mark.parametrize(
    "usual",
    [
        {},
        {"speed_um_s": 0.01},
        {"speed_um_s": 8.0, "frame_s": 0.05},
        {"noise_um": 0.0},
        {"speed_um_s": float("nan")},
    ],
)
def test_what_assays_have_is_plausible(usual):
    assert implausible(**USUAL | usual) == ()


@pytest.mark.parametrize(
    ("odd", "told"),
    [
        (
            {"speed_um_s": 809.0},
            "a typical speed of 809 µm/s is beyond what is believed (link.max_speed = 12 µm/s): "
            "are positions in µm and times in s?",
        ),
        (
            {"speed_um_s": 0.0008},
            "a typical speed of 0.0008 µm/s is slower than gliding: are positions in µm and times "
            "in s?",
        ),
        ({"frame_s": 500.0}, "500 s from frame to frame is long: is it in s, not in ms?"),
        (
            {"noise_um": 30.0},
            "a localization error of 30 µm is implausible: are positions in µm?",
        ),
        (
            {"noise_um": 3e-5},
            "a localization error of 3e-05 µm is implausible: are positions in µm?",
        ),
    ],
)
def test_a_wrong_unit_is_told(odd, told):
    assert implausible(**USUAL | odd) == (told,)
