"""Names of columns: which end in a unit, and which are misspelled."""

import pytest

from glidefit.reading.sheet_columns import CHOICES, KNOWN, NUMBERS, WHOLE, has_unit, nearest


@pytest.mark.parametrize(
    "name",
    [
        "atp_uM",
        "atp_µM",
        "atp_mM",
        "inhibitor_nM",
        "temperature_C",
        "temperature_K",
        "motor_ug_ml",
        "casein_mg_ml",
        "laser_mW",
        "glycerol_percent",
        "buffer_pH",
        "pH",
        "density_um2",
        "age_min",
        "age_h",
        "field_V",
        "viscosity_mPa_s",
        "stretch_fold",
    ],
)
def test_names_with_a_unit(name):
    assert has_unit(name)


@pytest.mark.parametrize(
    "name",
    ["atp", "mM", "C", "operator_id", "movie_no", "repeat_2", "slide_number", "note_", "_", "",
     "atp_uM_old", "motor_type", "batch_name"],
)  # fmt: skip
def test_names_without_a_unit(name):
    assert not has_unit(name)


@pytest.mark.parametrize("name", KNOWN)
def test_a_letter_left_out_or_doubled_is_noticed(name):
    variants = {name[:i] + name[i + 1 :] for i in range(1, len(name))}
    variants |= {name[:i] + name[i - 1] + name[i:] for i in range(1, len(name))}
    variants -= set(KNOWN)
    assert {nearest(variant) for variant in variants} == {name}


@pytest.mark.parametrize("name", ["Pixel µm", "PIXEL-UM", " pixel.um", "pixel (um)", "pixel_μm"])
def test_signs_between_words_do_not_hide_a_known_name(name):
    assert nearest(name) == "pixel_um"


@pytest.mark.parametrize("name", ["operator", "note", "motor", "atp_uM", "temperature_C", "slide"])
def test_names_of_their_own(name):
    assert nearest(name) == ""


def test_every_special_column_is_a_known_one():
    assert {*NUMBERS, *CHOICES, *WHOLE} <= set(KNOWN)
    assert set(WHOLE) <= set(NUMBERS)
