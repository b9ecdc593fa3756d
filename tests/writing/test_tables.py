"""CSV tables: RFC 4180, no formula, numbers short and exact."""

from __future__ import annotations

import csv
import dataclasses
import io
import math
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from glidefit.tracks import Tracks
from glidefit.writing.tables import (
    comparisons_table,
    estimates_table,
    per_track_table,
    set_aside_table,
    table_text,
    tracks_table,
)

STORED = Path(__file__).parent / "stored"


def rows_of(text):
    return list(csv.DictReader(io.StringIO(text, newline="")))


def make_tracks(*, labels=("1", "2"), headings=False):
    n = 3 * len(labels)
    return Tracks(
        label=np.array(labels),
        offsets=np.arange(0, n + 1, 3),
        frame=np.tile([0, 1, 3], len(labels)),
        time_s=np.tile([0.0, 0.1 + 0.2, 0.9], len(labels)),
        x_um=np.linspace(0, 1 / 3, n),
        y_um=np.linspace(5, 6, n),
        heading_rad=np.r_[np.nan, np.linspace(0, 1, n - 1)] if headings else None,
    )


# RFC 4180, section 2: CRLF, quotes around commas, quotes and line breaks, quotes doubled.
def test_fields_are_quoted_as_rfc_4180_says():
    text = table_text(["a", "b"], [['say "no", twice', "two\nlines"], ["plain", 1]])
    assert text == 'a,b\r\n"say ""no"", twice","two\nlines"\r\nplain,1\r\n'


def test_numbers_are_short_and_nan_is_empty():
    row = [0.1 + 0.2, math.nan, math.inf, 1e-12, 123456789.123, True, False, 7, -0.5]
    text = table_text(["x"] * 9, [row])
    assert text.splitlines()[1] == "0.3,,,1e-12,123456789.0,true,false,7,-0.5"


@pytest.mark.parametrize("start", ["=", "+", "-", "@", "\t", "\r"])
def test_text_that_a_spreadsheet_would_run_is_defused(start):
    text = table_text(["a"], [[f"{start}HYPERLINK(1)"]])
    assert rows_of(text)[0]["a"] == f"'{start}HYPERLINK(1)"
    tracks = make_tracks(labels=[f"{start}1+1", "2"])
    rows = rows_of(tracks_table([(f"{start}cmd", tracks, ["", f"{start}x"])]))
    assert rows[0]["track"] == f"'{start}1+1"
    assert rows[0]["recording"] == f"'{start}cmd"
    assert rows[-1]["set_aside_reason"] == f"'{start}x"


def test_names_that_are_numbers_stay_numbers():
    assert table_text(["a"], [["-3"], ["+2.5e3"], [-3.0]]) == "a\r\n-3\r\n+2.5e3\r\n-3.0\r\n"


@given(st.lists(st.lists(st.text(st.characters(codec="utf-8")), min_size=2, max_size=2)))
def test_any_text_comes_back(rows):
    text = table_text(["a", "b"], rows)
    back = list(csv.reader(io.StringIO(text, newline="")))[1:]
    undone = [[c.removeprefix("'") if c[1:2] in set("=+-@\t\r") else c for c in r] for r in back]
    expected = [[c.removeprefix("'") if c[1:2] in set("=+-@\t\r") else c for c in r] for r in rows]
    assert undone == expected


def test_estimates_are_as_stored(invented):
    study = invented(("wild type", "R203A"), control="wild type")
    expected = (STORED / "estimates.csv").read_text(encoding="utf-8")
    assert estimates_table(study).replace("\r\n", "\n") == expected


def test_tracks_are_listed_once_and_set_aside_ones_again(study):
    tracks = rows_of(per_track_table(study))
    aside = rows_of(set_aside_table(study))
    assert len(tracks) == sum(c.counts.tracks_seen for c in study.conditions)
    assert len(aside) == sum(row["kept"] == "false" for row in tracks)
    assert len(aside) == sum(sum(c.counts.set_aside.values()) for c in study.conditions)
    assert all(row["set_aside_reason"] for row in aside)
    assert {row["speed_um_s"] for row in tracks if row["kept"] == "false"} == {""}
    assert {row["gliding_probability"] for row in tracks} == {""}  # unknown in these
    first = study.conditions[0].tracks[5]
    assert float(tracks[5]["speed_um_s"]) == pytest.approx(first.speed_um_s, rel=1e-8)


def test_each_track_has_its_own_values_with_their_errors_or_a_reason(study):
    condition = study.conditions[0]
    told, silent = [t for t in condition.tracks if t.kept][:2]
    told = dataclasses.replace(
        told,
        speed_error_um_s=0.01,
        rotational_diffusion_rad2_s=0.02,
        rotational_diffusion_low_rad2_s=0.015,
        rotational_diffusion_high_rad2_s=0.027,
    )
    silent = dataclasses.replace(silent, rotational_diffusion_problem="it says nothing")
    one = dataclasses.replace(condition, tracks=(told, silent))
    first, second = rows_of(per_track_table(dataclasses.replace(study, conditions=(one,))))
    columns = ["speed_error_um_s", *(k for k in first if k.startswith("rotational_diffusion"))]
    assert [first[name] for name in columns] == ["0.01", "0.02", "0.015", "0.027", ""]
    assert [second[name] for name in columns] == ["", "", "", "", "it says nothing"]


def test_the_probability_that_a_track_glides_is_in_its_row(study):
    condition = study.conditions[0]
    known = dataclasses.replace(condition.tracks[0], gliding_probability=0.97)
    condition = dataclasses.replace(condition, tracks=(known, *condition.tracks[1:]))
    text = per_track_table(dataclasses.replace(study, conditions=(condition,)))
    assert [row["gliding_probability"] for row in rows_of(text)][:2] == ["0.97", ""]


def test_comparisons(study, compare):
    one = dataclasses.replace(study, comparisons=(compare("R203A", "wild type"),))
    row = rows_of(comparisons_table(one))[0]
    assert (row["ratio"], row["ratio_low"], row["p_adjusted"]) == ("1.12", "1.03", "0.0264")
    assert row["p_permutation"] == ""
    assert rows_of(comparisons_table(study)) == []


def test_track_table_has_every_position_with_its_verdict():
    plain, headed = make_tracks(), make_tracks(headings=True)
    flags = ["", "blurred", "", "", "", ""]
    text = tracks_table([("a.tif", plain, ["", "stuck"]), ("b, c.tif", headed, ["", ""], flags)])
    table = pd.read_csv(io.StringIO(text))
    assert list(table.columns) == [
        *("track", "frame", "time_s", "x_um", "y_um", "heading_rad"),
        *("recording", "kept", "set_aside_reason", "flag"),
    ]
    assert len(table) == 12
    assert text.count("\r\n") == 13
    assert table["kept"].tolist() == [True] * 3 + [False] * 3 + [True] * 6
    assert table["set_aside_reason"].fillna("").tolist() == [""] * 3 + ["stuck"] * 3 + [""] * 6
    assert table["flag"].fillna("").tolist() == [""] * 7 + ["blurred"] + [""] * 4
    assert table["recording"].iloc[-1] == "b, c.tif"
    assert table["heading_rad"].isna().sum() == 7
    # Written to 1 pm, half of which is the largest error.
    assert_allclose(table["x_um"], np.r_[plain.x_um, headed.x_um], rtol=0, atol=5.1e-7)


def test_track_table_reads_back_as_the_same_tracks():
    tracks = make_tracks()
    table = pd.read_csv(io.StringIO(tracks_table([("a.tif", tracks, ["", "stuck"])])))
    again = Tracks.from_frame(table)
    assert again.frame.tolist() == tracks.frame.tolist()
    assert_allclose(again.time_s, tracks.time_s, rtol=0, atol=1e-9)
    assert_allclose(again.y_um, tracks.y_um, rtol=0, atol=5.1e-7)


def test_track_table_of_nothing_is_its_header():
    assert tracks_table([]).startswith("track,frame,time_s,x_um,y_um,recording,kept")


def test_track_table_refuses_lists_of_another_length():
    with pytest.raises(ValueError, match="1 reasons for 2 tracks"):
        tracks_table([("a", make_tracks(), [""])])
    with pytest.raises(ValueError, match="1 flags for 6 positions"):
        tracks_table([("a", make_tracks(), ["", ""], [""])])
