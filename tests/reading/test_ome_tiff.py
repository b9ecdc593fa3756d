"""OME-TIFF: scale and clock by the schema, sets of files, and files that mean harm.

Attributes, defaults and units are those of the OME schema 2016-06 (ome.xsd): PhysicalSizeXUnit and
PhysicalSizeYUnit default to µm; TimeIncrementUnit, DeltaTUnit and ExposureTimeUnit to s; FirstT,
FirstZ, FirstC and IFD to 0; PlaneCount to 1 beside an IFD, else to all pages of the file.
"""

import builtins
import io

import numpy as np
import pytest
import tifffile
from numpy.testing import assert_allclose, assert_array_equal

from glidefit.errors import InputError
from glidefit.reading.video import read_facts, read_frames

RNG = np.random.default_rng(5)
MOVIE = RNG.integers(0, 2**16, (4, 6, 5), dtype=np.uint16)
SCHEMA = 'xmlns="http://www.openmicroscopy.org/Schemas/OME/2016-06"'


def image(inside='<TiffData IFD="0" PlaneCount="4"/>', *, pixels="", name="field", sizes=(4, 1, 1)):
    t, z, c = sizes
    return (
        f'<Image ID="Image:0" Name="{name}"><Pixels ID="Pixels:0" Type="uint16" SizeX="5" SizeY="6"'
        f' SizeT="{t}" SizeZ="{z}" SizeC="{c}" DimensionOrder="XYCZT" {pixels}>{inside}</Pixels>'
        "</Image>"
    )


def xml(*images, root=""):
    head = '<?xml version="1.0" encoding="UTF-8"?>'
    return f"{head}<OME {SCHEMA} {root}>{''.join(images)}</OME>"


def write(path, text, movie=MOVIE):
    tifffile.imwrite(
        path, movie, description=text.encode(), metadata=None, photometric="minisblack"
    )
    return path


def facts_of(tmp_path, pixels="", planes=""):
    inside = f'<TiffData IFD="0" PlaneCount="4"/>{planes}'
    return read_facts(write(tmp_path / "f.ome.tif", xml(image(inside, pixels=pixels))))


def error_of(path, **choice):
    with pytest.raises(InputError) as error:
        read_facts(path, **choice)
    return str(error.value)


def planes(attributes):
    return "".join(f'<Plane TheT="{t}" TheZ="0" TheC="0" {a}/>' for t, a in enumerate(attributes))


# Scale and clock


def test_units_that_are_not_given_are_micrometres_and_seconds(tmp_path):
    facts = facts_of(
        tmp_path,
        'PhysicalSizeX="0.1083" PhysicalSizeY="0.1083" TimeIncrement="0.5"',
        planes([f'DeltaT="{2 + 0.5 * t}" ExposureTime="0.4"' for t in range(4)]),
    )
    assert (facts.pixel_um, facts.frame_s, facts.exposure_s) == (0.1083, 0.5, 0.4)
    assert_array_equal(facts.times_s, [0, 0.5, 1, 1.5])
    assert facts.notes == ()


@pytest.mark.parametrize(
    ("size", "unit"),
    [("108.3", "nm"), ("0.1083", "µm"), ("1.083e-4", "mm"), ("1.083e-5", "cm"), ("1.083e-7", "m"),
     ("1083", "Å"), ("108300", "pm")],
)  # fmt: skip
def test_pixel_size_in_units_of_the_schema(size, unit, tmp_path):
    pixels = f'PhysicalSizeX="{size}" PhysicalSizeXUnit="{unit}"'
    assert_allclose(facts_of(tmp_path, pixels).pixel_um, 0.1083, rtol=1e-12)  # rounding only


@pytest.mark.parametrize(
    ("value", "unit"), [("1500", "ms"), ("1.5", "s"), ("0.025", "min"), ("1500000", "µs"),
                        ("1.5e9", "ns"), ("1.5", None)],
)  # fmt: skip
def test_times_in_units_of_the_schema(value, unit, tmp_path):
    of = "" if unit is None else f'="{unit}"'
    inc, delta, exp = ("" if unit is None else f"{key}Unit{of}" for key in
                       ("TimeIncrement", "DeltaT", "ExposureTime"))  # fmt: skip
    facts = facts_of(tmp_path, f'TimeIncrement="{value}" {inc}')
    assert_allclose(facts.frame_s, 1.5, rtol=1e-12)
    timed = planes(
        [f'DeltaT="{t * float(value)}" {delta} ExposureTime="{value}" {exp}' for t in range(4)]
    )
    facts = facts_of(tmp_path, "", timed)
    assert_allclose(facts.times_s, [0, 1.5, 3, 4.5], rtol=1e-12)
    assert_allclose((facts.frame_s, facts.exposure_s), 1.5, rtol=1e-12)


@pytest.mark.parametrize("unit", ["pixel", "reference frame", "Mm"])
def test_a_unit_that_is_no_length_is_no_calibration(unit, tmp_path):
    facts = facts_of(tmp_path, f'PhysicalSizeX="0.1" PhysicalSizeXUnit="{unit}"')
    assert facts.pixel_um is None
    assert facts.notes == (f"pixel size in units of '{unit}' is no calibration",)


def test_one_micrometre_is_taken_for_a_placeholder(tmp_path):
    facts = facts_of(tmp_path, 'PhysicalSizeX="1.0" PhysicalSizeY="1.0"')
    assert facts.pixel_um is None
    assert facts.notes == (
        "the file gives 1 µm per pixel, a common placeholder, and it is not used",
    )


@pytest.mark.parametrize("size", ["0", "-0.1", "nan", "INF", "1e-7", "350", "much"])
def test_a_pixel_size_that_cannot_be_is_not_used(size, tmp_path):
    facts = facts_of(tmp_path, f'PhysicalSizeX="{size}"')
    assert facts.pixel_um is None
    assert len(facts.notes) == 1
    assert facts.notes[0].endswith("µm per pixel, which is not believable")


def test_pixels_that_are_not_square_are_refused(tmp_path):
    pixels = 'PhysicalSizeX="0.1" PhysicalSizeY="200" PhysicalSizeYUnit="nm"'
    path = write(tmp_path / "f.ome.tif", xml(image(pixels=pixels)))
    assert error_of(path) == (
        f"{path}: pixels of 0.1 µm by 0.2 µm; expected square pixels, equal within 0.5 %. Rescale"
        " the video to square pixels, or correct its pixel size, and save it again."
    )


def test_sides_that_differ_by_rounding_are_one_size(tmp_path):
    facts = facts_of(tmp_path, 'PhysicalSizeX="0.1083" PhysicalSizeY="0.1084"')
    assert_allclose(facts.pixel_um, 0.10835, rtol=1e-12)


@pytest.mark.parametrize("increment", ["0", "-1", "NaN"])
def test_a_frame_interval_that_cannot_be_is_not_used(increment, tmp_path):
    facts = facts_of(tmp_path, f'TimeIncrement="{increment}"')
    assert facts.frame_s is None
    assert facts.notes[0].startswith("the file gives a frame interval of ")


def test_recorded_times_are_preferred_to_the_stated_interval(tmp_path):
    timed = planes([f'DeltaT="{t * 0.11}"' for t in range(4)])
    facts = facts_of(tmp_path, 'TimeIncrement="100" TimeIncrementUnit="ms"', timed)
    assert_allclose(facts.frame_s, 0.11, rtol=1e-12)
    assert facts.notes == (
        "the file states a frame interval of 0.1 s, but its frame times are 0.11 s apart; the times"
        " are used",
    )


def test_a_unit_that_is_no_time_is_not_used(tmp_path):
    timed = planes([f'DeltaT="{t}" DeltaTUnit="frame" ExposureTime="0.1"' for t in range(4)])
    facts = facts_of(tmp_path, "", timed)
    assert (facts.times_s, facts.frame_s, facts.exposure_s) == (None, None, 0.1)
    assert facts.notes == ("DeltaT in units of 'frame' is no time, it is not used",)


def test_what_the_library_writes_is_read_back(tmp_path):
    metadata = {
        "axes": "TYX", "PhysicalSizeX": 108.3, "PhysicalSizeXUnit": "nm", "PhysicalSizeY": 0.1083,
        "TimeIncrement": 250.0, "TimeIncrementUnit": "ms",
        "Plane": {"DeltaT": [10.0, 10.25, 10.5, 10.75], "ExposureTime": [200.0] * 4,
                  "ExposureTimeUnit": ["ms"] * 4},
    }  # fmt: skip
    tifffile.imwrite(tmp_path / "f.ome.tif", MOVIE, metadata=metadata)
    facts = read_facts(tmp_path / "f.ome.tif")
    assert_allclose((facts.pixel_um, facts.frame_s, facts.exposure_s), (0.1083, 0.25, 0.2))
    assert_allclose(facts.times_s, [0, 0.25, 0.5, 0.75])
    assert facts.notes == ()


def test_times_of_the_chosen_channel_are_taken(tmp_path):
    inside = '<TiffData IFD="0" PlaneCount="6"/>' + "".join(
        f'<Plane TheT="{t}" TheZ="0" TheC="{c}" DeltaT="{t + 0.25 * c}" ExposureTime="{0.1 + c}"/>'
        for t in range(3)
        for c in range(2)
    )
    inside = '<Channel Name="tubulin"/><Channel Name="beads"/>' + inside
    movie = np.concatenate([MOVIE, MOVIE[:2]])
    path = write(tmp_path / "f.ome.tif", xml(image(inside, sizes=(3, 1, 2))), movie)
    assert "2 channels (0: tubulin, 1: beads); expected one" in error_of(path)
    facts = read_facts(path, channel=0)
    assert_array_equal(facts.times_s, [0, 1, 2])
    assert facts.exposure_s == 0.1
    # Exposures of the other channel are longer than its interval.
    assert read_facts(path, channel=1).notes == (
        "the file gives an exposure of 1.1 s, longer than its frame interval of 1 s, and it is not"
        " used",
    )
    assert_array_equal(np.array(list(read_frames(path, channel=1))), movie[1::2])


def test_older_versions_of_the_schema_are_read(tmp_path):
    text = xml(image(pixels='PhysicalSizeX="0.2"')).replace("2016-06", "2011-06")
    assert read_facts(write(tmp_path / "f.tif", text)).pixel_um == 0.2


# Where planes are


@pytest.mark.parametrize(
    "data",
    ["", "<TiffData/>", '<TiffData IFD="0" PlaneCount="4"/>', '<TiffData PlaneCount="4"/>',
     "".join(f'<TiffData IFD="{t}" FirstT="{t}"/>' for t in range(4)),
     "".join(f'<TiffData IFD="{t}" FirstT="{t}" PlaneCount="1"/>' for t in (3, 1, 0, 2)),
     '<TiffData IFD="0" PlaneCount="2"/><TiffData IFD="2" FirstT="2" PlaneCount="2"/>'],
)  # fmt: skip
def test_every_way_to_list_planes_gives_the_same_frames(data, tmp_path):
    path = write(tmp_path / "f.ome.tif", xml(image(data)))
    assert_array_equal(np.array(list(read_frames(path))), MOVIE)


def test_pages_in_another_order_come_back_in_order_of_time(tmp_path):
    data = "".join(f'<TiffData IFD="{3 - t}" FirstT="{t}"/>' for t in range(4))
    path = write(tmp_path / "f.ome.tif", xml(image(data)))
    assert_array_equal(np.array(list(read_frames(path))), MOVIE[::-1])


@pytest.mark.parametrize("order", ["XYCTZ", "XYTCZ", "XYZTC", "XYCZT", "XYZCT", "XYTZC"])
def test_every_order_of_dimensions_agrees_with_the_library(order, tmp_path):
    movie = RNG.integers(0, 2**16, (6, 6, 5), dtype=np.uint16)
    text = xml(image('<TiffData IFD="0" PlaneCount="6"/>', sizes=(3, 1, 2)))
    path = write(tmp_path / "f.ome.tif", text.replace("XYCZT", order), movie)
    with tifffile.TiffFile(path) as tif:
        axes, whole = tif.series[0].axes, tif.series[0].asarray()
    whole = np.moveaxis(whole, [axes.index("T"), axes.index("C")], [0, 1])
    for channel in (0, 1):
        frames = list(read_frames(path, channel=channel))
        assert_array_equal(np.array(frames), whole[:, channel])


def test_a_recording_that_was_stopped_early_has_the_frames_it_has(tmp_path):
    data = "".join(f'<TiffData IFD="{t}" FirstT="{t}"/>' for t in range(4))
    facts = read_facts(write(tmp_path / "f.ome.tif", xml(image(data, sizes=(90, 1, 1)))))
    assert facts.n_frames == 4
    assert facts.notes == ("the file announces 90 frames, 4 were recorded",)


def test_a_frame_missing_in_the_middle_is_named(tmp_path):
    data = "".join(f'<TiffData IFD="{t}" FirstT="{t}"/>' for t in (0, 1, 3))
    path = write(tmp_path / "f.ome.tif", xml(image(data)))
    assert error_of(path) == (
        f"{path}, frame 2: its OME-XML places this frame nowhere; expected metadata that fit the"
        " frames. Open the file in the program that wrote it, check that all frames are there, and"
        " save it again as OME-TIFF."
    )


@pytest.mark.parametrize("data", ["", "<TiffData/>", '<TiffData IFD="0" PlaneCount="9"/>'])
def test_fewer_pages_than_announced_are_refused(data, tmp_path):
    path = write(tmp_path / "f.ome.tif", xml(image(data, sizes=(9, 1, 1))))
    assert f"{path}: 4 of the 9 frames that it announces; expected metadata" in error_of(path)


@pytest.mark.parametrize(
    ("old", "new", "found"),
    [
        ('SizeT="4"', 'SizeT="four"', "its OME-XML says SizeT='four'"),
        ('SizeT="4"', 'SizeT="0"', "its OME-XML says SizeT='0'"),
        ('SizeT="4"', 'SizeT="9999999999"', "its OME-XML says SizeT='9999999999'"),
        ('SizeT="4"', 'SizeT="9000000" SizeZ="9000"', "duplicate attribute"),
        ('SizeC="1"', 'SizeC="9000000"', "its OME-XML announces 36,000,000 planes"),
        ("XYCZT", "XYCZ", "its OME-XML says DimensionOrder='XYCZ'"),
        ('SizeX="5"', 'SizeX="50"', "frames of 50 × 6 px, its pages have 5 × 6 px"),
        ('IFD="0"', 'IFD="0" FirstT="4"', "4 times × 1 slices × 1 channels, and then lists planes"),
        ('PlaneCount="4"', 'PlaneCount="5"', "and then lists planes beyond them"),
        ("<Pixels", "<Picture", "its OME-XML cannot be read (mismatched tag"),
        ("Image", "Imago", "its OME-XML describes no image"),
    ],
)
def test_a_description_that_contradicts_itself_is_refused(old, new, found, tmp_path):
    path = write(tmp_path / "f.ome.tif", xml(image()).replace(old, new))
    said = error_of(path)
    assert said.startswith(f"{path}: ")
    assert found in said
    assert "; expected metadata that fit the frames. Open the file in the program" in said


def test_several_values_a_pixel_are_colour(tmp_path):
    text = xml(image('<Channel SamplesPerPixel="3"/><TiffData/>', sizes=(4, 1, 3)))
    assert "colour frames, 3 values per pixel" in error_of(write(tmp_path / "f.tif", text))


# Positions and sets of files


def test_one_of_several_positions_must_be_chosen(tmp_path):
    second = image('<TiffData IFD="4" PlaneCount="4"/>', name="edge")
    movie = np.concatenate([MOVIE, MOVIE + 1])
    path = write(tmp_path / "f.ome.tif", xml(image(name="centre"), second), movie)
    assert error_of(path) == (
        f"{path}: 2 positions (0: centre, 1: edge); expected one position to analyse. Fill in the"
        " column `position` of the assay sheet with a number from 0 to 1."
    )
    assert_array_equal(np.array(list(read_frames(path, position=1))), MOVIE + 1)


def part(t, name, uuid):
    return (
        f'<TiffData FirstT="{t}" IFD="0" PlaneCount="2">'
        f'<UUID FileName="{name}">urn:uuid:{uuid}</UUID></TiffData>'
    )


def write_set(folder, names=("a.ome.tif", "b.ome.tif")):
    text = image(part(0, names[0], "aaa") + part(2, names[1], "bbb"))
    for name, uuid, movie in zip(names, ("aaa", "bbb"), (MOVIE[:2], MOVIE[2:]), strict=True):
        write(folder / name, xml(text, root=f'UUID="urn:uuid:{uuid}"'), movie)


@pytest.mark.parametrize("name", ["a.ome.tif", "b.ome.tif"])
def test_a_set_of_files_is_one_recording_whichever_is_named(name, tmp_path):
    write_set(tmp_path)
    assert read_facts(tmp_path / name).n_frames == 4
    assert_array_equal(np.array(list(read_frames(tmp_path / name))), MOVIE)


def test_a_missing_file_of_a_set_is_named(tmp_path):
    write_set(tmp_path)
    (tmp_path / "b.ome.tif").unlink()
    path = tmp_path / "a.ome.tif"
    assert error_of(path) == (
        f"{path}: one file of a set, of which b.ome.tif is missing; expected all files of the set"
        f" in the folder {tmp_path}. Copy the missing file there, under the name it was recorded"
        " with."
    )


def test_a_damaged_file_of_a_set_is_named(tmp_path):
    write_set(tmp_path)
    path = tmp_path / "b.ome.tif"
    path.write_bytes(path.read_bytes()[:-60])
    said = error_of(tmp_path / "a.ome.tif")
    assert said.startswith(f"{path}: the file is cut off: ")


def test_a_file_of_a_set_with_other_frames_is_refused(tmp_path):
    write_set(tmp_path)
    write(tmp_path / "b.ome.tif", "other", MOVIE[2:, :4])
    assert "frames of 5 × 6 px (16 bits) and of 5 × 4 px (16 bits) in one recording" in error_of(
        tmp_path / "a.ome.tif"
    )


def test_a_file_that_was_renamed_is_still_itself(tmp_path):
    text = image(part(0, "a.ome.tif", "aaa").replace('PlaneCount="2"', 'PlaneCount="4"'))
    own = write(tmp_path / "a.ome.tif", xml(text, root='UUID="urn:uuid:aaa"'))
    renamed = own.rename(tmp_path / "day1.ome.tif")
    # Meanwhile another recording has taken the old name.
    write(own, xml(image()), MOVIE + 1)
    assert_array_equal(np.array(list(read_frames(renamed))), MOVIE)
    nameless = write(tmp_path / "day2.ome.tif", xml(text))
    assert_array_equal(np.array(list(read_frames(nameless))), MOVIE)


def test_the_position_stored_in_the_named_file_is_taken(tmp_path):
    fields = [
        image(part(0, name, uuid).replace('PlaneCount="2"', 'PlaneCount="4"'), name=name)
        for name, uuid in (("p0.ome.tif", "aaa"), ("p1.ome.tif", "bbb"))
    ]
    write(tmp_path / "p0.ome.tif", xml(*fields, root='UUID="urn:uuid:aaa"'))
    write(tmp_path / "p1.ome.tif", xml(*fields, root='UUID="urn:uuid:bbb"'), MOVIE + 1)
    assert read_facts(tmp_path / "p1.ome.tif").notes == (
        "position 1 of the 2 of its set is in this file",
    )
    assert_array_equal(np.array(list(read_frames(tmp_path / "p1.ome.tif"))), MOVIE + 1)
    frames = list(read_frames(tmp_path / "p1.ome.tif", position=0))
    assert_array_equal(np.array(frames), MOVIE)


def test_a_part_that_points_to_the_description_of_its_set_says_where(tmp_path):
    inside = '<BinaryOnly MetadataFile="set.companion.ome" UUID="urn:uuid:aaa"/>'
    path = write(tmp_path / "part.ome.tif", xml(inside))
    assert error_of(path) == (
        f"{path}: one part of a set of files, which is described in 'set.companion.ome'; expected"
        " the file that describes the set. Name that file in the assay sheet, or export the"
        " recording as one OME-TIFF."
    )


# Files that mean harm


@pytest.mark.parametrize(
    "name",
    ["../../etc/hostname", "/etc/hostname", "sub/../../x.tif", "..\\x.tif", "C:\\x.tif",
     "\\\\host\\x.tif", "C:x.tif"],
)  # fmt: skip
def test_a_member_outside_of_the_folder_is_refused_unopened(name, tmp_path, monkeypatch):
    text = image(part(0, "f.ome.tif", "aaa") + part(2, name, "bbb"))
    path = write(tmp_path / "f.ome.tif", xml(text, root='UUID="urn:uuid:aaa"'))
    opened = []

    def watched(file, *args, real=io.open, **options):
        opened.append(str(file))
        return real(file, *args, **options)

    monkeypatch.setattr(io, "open", watched)
    monkeypatch.setattr(builtins, "open", watched)
    assert error_of(path) == (
        f"{path}: its OME-XML refers to '{name}', outside of the file's folder; expected plain"
        " OME-XML, and all files of a set in one folder. Open no file from a source that you do not"
        " trust; export the recording again."
    )
    assert set(opened) == {str(path)}


@pytest.mark.parametrize(
    "definition",
    ['<!ENTITY a "aaaaaaaaaa"><!ENTITY b "&a;&a;&a;&a;&a;&a;&a;&a;&a;&a;">',
     '<!ENTITY a SYSTEM "file:///etc/hostname">', ""],
)  # fmt: skip
def test_xml_with_a_document_type_is_refused(definition, tmp_path):
    text = xml(image()).replace("<OME", f"<!DOCTYPE OME [{definition}]><OME", 1)
    path = write(tmp_path / "bomb.ome.tif", text)
    assert error_of(path) == (
        f"{path}: its OME-XML defines entities, which can do harm; expected plain OME-XML, and all"
        " files of a set in one folder. Open no file from a source that you do not trust; export"
        " the recording again."
    )
