"""Parameters that are known, bounded or freed, as a person writes them."""

import math
import re

import pytest

from glidefit.fit_parameters import EXAMPLE, FitParameters, parse


def test_values_bounds_and_freed_parameters():
    known = parse(
        "speed_um_s = 0.8, 0.001 < rotational_diffusion_rad2_s <= .1,localization_error_um>0.02, "
        "speed_spread_um_s < 0.1, turning_rate_rad_s = -5e-2, sideways_diffusion_um2_s = free"
    )
    assert known == FitParameters(
        fixed={"speed": 0.8, "turning_rate": -0.05},
        limits={
            "rotational_diffusion": (0.001, 0.1),
            "localization_variance": (0.02**2, math.inf),
            "speed_variance": (-math.inf, 0.1**2),
        },
        freed=("sideways_diffusion",),
        held=("speed_um_s", "turning_rate_rad_s"),
    )


def test_the_example_can_be_read():
    assert parse(EXAMPLE).freed == ("sideways_diffusion",)


def test_a_bound_frees_what_the_model_leaves_out():
    known = parse("further_error_along_um < 0.1")
    assert known.freed == ("error_variance_along",)
    assert known.limits["error_variance_along"][1] == pytest.approx(0.01)


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("velocity = 1", "'velocity' is none of speed_um_s, "),
        ("speed_um_s", "cannot read 'speed_um_s'"),
        ("speed_um_s = fast", "cannot read 'speed_um_s = fast'"),
        ("speed_um_s = 1, ", "cannot read ''"),
        ("speed_um_s = free", "speed_um_s is fitted anyway"),
        ("speed_um_s = 1, speed_um_s < 2", "given twice"),
        ("2 < speed_um_s < 1", "cannot lie between 2 and 1"),
        ("rotational_diffusion_rad2_s = -1", "cannot be below 0"),
        ("rotational_diffusion_rad2_s < -1", "cannot be below 0"),
        ("localization_error_um = 0", "must be above 0"),
    ],
)
def test_what_cannot_be_read_is_said(text, said):
    with pytest.raises(ValueError, match=re.escape(said)):
        parse(text)
