"""Records of the assay sheet."""

import dataclasses
from pathlib import Path

import pytest

from glidefit.assay import Assay, Recording


def recording(name="a.tif", condition="k", **fields):
    path = Path("/data") / name
    return Recording(name=name, path=path, condition=condition, day="1", chamber="1", **fields)


@pytest.mark.parametrize(
    ("name", "is_video"),
    [
        ("a.tif", True),
        ("a.ome.tiff", True),
        ("a.nd2", True),
        ("a.csv", False),
        ("A.CSV", False),
        ("a.parquet", False),
        ("a.pq", False),
        ("a.csv.tif", True),
    ],
)
def test_a_video_is_what_is_no_table(name, is_video):
    assert recording(name).is_video is is_video


def test_what_the_sheet_leaves_open_is_none():
    open_fields = ("pixel_um", "frame_s", "exposure_s", "minutes", "first_frame", "last_frame")
    open_fields += ("channel", "position")
    found = recording()
    assert [getattr(found, name) for name in open_fields] == [None] * 8
    assert (found.shape, found.control, found.numbers, found.labels) == ("filament", False, {}, {})
    with pytest.raises(dataclasses.FrozenInstanceError):
        found.day = "2"


def test_the_control_comes_first_and_the_others_as_they_appear():
    rows = [("z", False), ("b", False), ("wild type", False), ("b", False), ("wild type", True)]
    recordings = tuple(recording(condition=name, control=control) for name, control in rows)
    assay = Assay(name="assay", path=Path("/data/assay.csv"), recordings=recordings)
    assert assay.conditions == ("wild type", "z", "b")
    without = Assay(name="assay", path=Path("/data/assay.csv"), recordings=recordings[:4])
    assert without.conditions == ("z", "b", "wild type")
