"""Stacks with an ImageJ description and plain stacks: scale, clock, and frames in one block.

That description gives the resolution in px per `unit`, the interval as `finterval` in `tunit`
(seconds unless said), and counts `images`, `channels`, `slices` and `frames`, the channel fastest:
common practice, as the files of that program show it.
"""

import struct

import numpy as np
import pytest
import tifffile
from numpy.testing import assert_allclose, assert_array_equal

from glidefit.errors import InputError
from glidefit.reading.video import read_facts, read_frames

RNG = np.random.default_rng(3)
MOVIE = RNG.integers(0, 2**16, (6, 5, 4), dtype=np.uint16)


def described(path, text, movie=MOVIE, **options):
    """A stack with this ImageJ description."""
    tifffile.imwrite(path, movie, description=f"ImageJ=1.54\n{text}".encode(), metadata=None,
                     photometric="minisblack", **options)  # fmt: skip
    return path


def facts_of(tmp_path, text, resolution=(10.0, 10.0)):
    path = described(tmp_path / "f.tif", f"images=6\nframes=6\n{text}", resolution=resolution)
    return read_facts(path)


def error_of(path):
    with pytest.raises(InputError) as error:
        read_facts(path)
    return str(error.value)


@pytest.mark.parametrize(
    ("unit", "pixels_per_unit"),
    [("micron", 10.0), ("microns", 10.0), ("um", 10.0), ("µm", 10.0), ("\u03bcm", 10.0),
     ("\\u00B5m", 10.0), ("Âµm", 10.0), ("micrometer", 10.0), ("nm", 0.01), ("mm", 1e4),
     ("cm", 1e5), ("inch", 254_000.0), ("inches", 254_000.0), ("m", 1e7)],
)  # fmt: skip
def test_pixel_size_in_the_unit_of_the_description(unit, pixels_per_unit, tmp_path):
    facts = facts_of(tmp_path, f"unit={unit}", (pixels_per_unit, pixels_per_unit))
    assert_allclose(facts.pixel_um, 0.1, rtol=1e-6)  # a TIFF keeps a resolution as a fraction
    assert facts.notes == ()


def test_what_the_library_writes_is_read_back(tmp_path):
    metadata = {"axes": "TYX", "unit": "um", "finterval": 0.25}
    tifffile.imwrite(tmp_path / "f.tif", MOVIE, imagej=True, resolution=(1 / 0.1083, 1 / 0.1083),
                     metadata=metadata)  # fmt: skip
    facts = read_facts(tmp_path / "f.tif")
    assert_allclose(facts.pixel_um, 0.1083, rtol=1e-6)
    assert (facts.frame_s, facts.times_s, facts.exposure_s) == (0.25, None, None)


@pytest.mark.parametrize("unit", ["pixel", "pixels", "furlong"])
def test_a_unit_that_is_no_length_is_no_calibration(unit, tmp_path):
    facts = facts_of(tmp_path, f"unit={unit}")
    assert facts.pixel_um is None
    assert facts.notes == (f"pixel size in units of '{unit}' is no calibration",)


def test_a_resolution_without_a_unit_is_no_calibration(tmp_path):
    assert facts_of(tmp_path, "").pixel_um is None


def test_one_pixel_a_micrometre_is_taken_for_a_placeholder(tmp_path):
    facts = facts_of(tmp_path, "unit=micron", (1, 1))
    assert facts.pixel_um is None
    assert facts.notes == (
        "the file gives 1 µm per pixel, a common placeholder, and it is not used",
    )


def test_seventy_two_pixels_an_inch_are_no_calibration(tmp_path):
    facts = facts_of(tmp_path, "unit=inch", (72, 72))
    assert facts.pixel_um is None
    assert facts.notes == ("the file gives 352.8 µm per pixel, which is not believable",)


def test_pixels_that_are_not_square_are_refused(tmp_path):
    path = described(tmp_path / "f.tif", "images=6\nframes=6\nunit=um", resolution=(10.0, 5.0))
    assert error_of(path) == (
        f"{path}: pixels of 0.1 µm by 0.2 µm; expected square pixels, equal within 0.5 %. Rescale"
        " the video to square pixels, or correct its pixel size, and save it again."
    )


def test_the_two_sides_may_have_units_of_their_own(tmp_path):
    assert facts_of(tmp_path, "unit=um\nyunit=nm", (10.0, 0.01)).pixel_um == pytest.approx(0.1)


@pytest.mark.parametrize(
    ("text", "frame_s"),
    [("finterval=0.5", 0.5), ("finterval=2", 2.0), ("finterval=500\ntunit=ms", 0.5),
     ("finterval=0.5\ntunit=sec", 0.5), ("finterval=0.5\ntunit=min", 30.0),
     ("finterval=0.5\nfps=7", 0.5), ("", None), ("finterval=0", None), ("finterval=-1", None),
     ("finterval=nan", None), ("finterval=soon", None)],
)  # fmt: skip
def test_frame_interval_of_the_description(text, frame_s, tmp_path):
    facts = facts_of(tmp_path, text)
    assert facts.frame_s == frame_s
    assert facts.notes == ()


def test_a_frame_rate_may_be_that_of_playback(tmp_path):
    facts = facts_of(tmp_path, "fps=20")
    assert facts.frame_s == 0.05
    assert facts.notes == (
        "the frame interval comes from 20 frames per second, which may be the speed of playback",
    )


def test_an_unknown_unit_of_time_is_no_calibration(tmp_path):
    facts = facts_of(tmp_path, "finterval=3\ntunit=fortnight")
    assert facts.frame_s is None
    assert facts.notes == ("a frame interval in units of 'fortnight' is no calibration",)


@pytest.mark.parametrize(
    ("order", "of_channel_1"), [("", [1, 3, 5]), ("order=czt", [1, 3, 5]), ("order=tcz", [3, 4, 5])]
)
def test_the_order_of_the_description_is_followed(order, of_channel_1, tmp_path):
    path = described(tmp_path / "f.tif", f"images=6\nchannels=2\nframes=3\n{order}")
    frames = list(read_frames(path, channel=1))
    assert_array_equal(np.array(frames), MOVIE[of_channel_1])


@pytest.mark.parametrize(
    ("text", "found"),
    [
        ("images=60\nframes=60", "6 of the 60 frames that it announces"),
        ("images=60", "6 of the 60 frames that it announces"),
        ("images=6\nframes=60", "6 of the 60 frames that it announces"),
        ("images=3\nframes=3", "its description announces 3 frames, the file has 6"),
        ("images=6\nframes=many", "its description says frames=many"),
        ("images=6\nslices=0", "its description says slices=0"),
        ("images=6\nchannels=1.5", "its description says channels=1.5"),
    ],
)
def test_a_description_that_does_not_fit_its_pages_is_refused(text, found, tmp_path):
    path = described(tmp_path / "f.tif", text)
    assert error_of(path) == (
        f"{path}: {found}; expected metadata that fit the frames. Open the file in the program that"
        " wrote it, check that all frames are there, and save it again as OME-TIFF."
    )


def keep_only_first_directory(path):
    """As programs write a stack that is too large for the addresses of a classic TIFF."""
    content = bytearray(path.read_bytes())
    order = "<" if content[:2] == b"II" else ">"
    with tifffile.TiffFile(path) as tif:
        first = tif.pages[0].offset
    n_tags = struct.unpack_from(order + "H", content, first)[0]
    struct.pack_into(order + "I", content, first + 2 + 12 * n_tags, 0)
    path.write_bytes(content)


@pytest.mark.parametrize("byteorder", ["<", ">"])
def test_frames_that_follow_each_other_without_directories_are_found(byteorder, tmp_path):
    path = described(tmp_path / "f.tif", "images=6\nframes=6", byteorder=byteorder)
    keep_only_first_directory(path)
    assert read_facts(path).n_frames == 6
    frames = list(read_frames(path))
    assert_array_equal(np.array(frames), MOVIE)
    assert all(frame.dtype.isnative for frame in frames)
    assert_array_equal(np.array(list(read_frames(path, first=2, last=3))), MOVIE[2:4])


def test_the_library_writes_such_files_too(tmp_path):
    tifffile.imwrite(tmp_path / "f.tif", MOVIE, photometric="minisblack", truncate=True)
    assert_array_equal(np.array(list(read_frames(tmp_path / "f.tif"))), MOVIE)


def test_a_block_of_frames_with_two_channels(tmp_path):
    path = described(tmp_path / "f.tif", "images=6\nchannels=2\nframes=3")
    keep_only_first_directory(path)
    assert_array_equal(np.array(list(read_frames(path, channel=1))), MOVIE[1::2])


def test_a_block_that_is_cut_off_is_refused(tmp_path):
    path = described(tmp_path / "f.tif", "images=6\nframes=6")
    keep_only_first_directory(path)
    with tifffile.TiffFile(path) as tif:
        start = tif.pages[0].dataoffsets[0]
    path.write_bytes(path.read_bytes()[: start + 3 * MOVIE[0].nbytes + 5])
    assert f"{path}: 3 of the 6 frames that it announces; " in error_of(path)


def test_a_compressed_page_is_no_block(tmp_path):
    path = described(tmp_path / "f.tif", "images=6\nframes=6", compression="zlib")
    keep_only_first_directory(path)
    assert f"{path}: 1 of the 6 frames that it announces; " in error_of(path)


@pytest.mark.parametrize("n_frames", [2**31, 10**15])
def test_a_description_with_countless_frames_takes_no_memory(n_frames, tmp_path):
    path = described(tmp_path / "f.tif", f"images={n_frames}\nframes={n_frames}")
    keep_only_first_directory(path)
    assert f" of the {n_frames} frames that it announces; " in error_of(path)


def plain(path, resolution, unit):
    tifffile.imwrite(path, MOVIE, photometric="minisblack", metadata=None, resolution=resolution,
                     resolutionunit=unit)  # fmt: skip
    return read_facts(path)


@pytest.mark.parametrize(
    ("resolution", "unit"),
    [((1, 1), 1), ((1, 1), 3), ((10, 10), 1), ((72, 72), 2), ((254_000, 254_000), 2)],
)
def test_a_resolution_of_one_or_in_inches_or_nothing_means_nothing(resolution, unit, tmp_path):
    facts = plain(tmp_path / "f.tif", resolution, unit)
    assert (facts.pixel_um, facts.frame_s, facts.notes) == (None, None, ())


@pytest.mark.parametrize(("resolution", "unit"), [(1e5, 3), (1e4, 4), (10.0, 5)])
def test_a_resolution_in_metric_units_is_a_calibration(resolution, unit, tmp_path):
    facts = plain(tmp_path / "f.tif", (resolution, resolution), unit)
    assert_allclose(facts.pixel_um, 0.1, rtol=1e-6)


def test_a_resolution_for_printing_in_cm_is_not_believed(tmp_path):
    facts = plain(tmp_path / "f.tif", (28.35, 28.35), 3)  # 72 per inch
    assert facts.pixel_um is None
    assert facts.notes == ("the file gives 352.7 µm per pixel, which is not believable",)


@pytest.mark.parametrize(
    "text", ['{"shape": [3, 2, 5, 4], "axes": "TCYX"}', '{"axes": "TCYX", "shape": [3, 2, 5, 4]}']
)
def test_a_described_shape_is_followed_wherever_it_stands(text, tmp_path):
    path = tmp_path / "f.tif"
    tifffile.imwrite(path, MOVIE, photometric="minisblack", metadata=None, description=text)
    assert "2 channels; expected one channel to analyse" in error_of(path)
    assert_array_equal(np.array(list(read_frames(path, channel=1))), MOVIE[1::2])


def test_a_description_that_does_not_fit_the_shape_of_its_pages_is_refused(tmp_path):
    path = tmp_path / "f.tif"
    text = '{"shape": [6, 5, 9]}'
    tifffile.imwrite(path, MOVIE, photometric="minisblack", metadata=None, description=text)
    assert "its description, shape (6, 5, 9), does not fit its pages (5, 4)" in error_of(path)


def test_fewer_pages_than_a_described_shape_are_refused(tmp_path):
    path = tmp_path / "f.tif"
    text = '{"shape": [9, 5, 4]}'
    tifffile.imwrite(path, MOVIE, photometric="minisblack", metadata=None, description=text)
    assert f"{path}: 6 of the 9 frames that it announces; " in error_of(path)


def test_what_would_command_a_terminal_is_not_shown(tmp_path):
    facts = facts_of(tmp_path, "unit=\x1b[31mred\x07")
    assert facts.notes == ("pixel size in units of '\ufffd[31mred\ufffd' is no calibration",)
    path = described(tmp_path / "g.tif", "images=6\nframes=\x1b]0;title")
    assert "its description says frames=\ufffd]0;title; expected" in error_of(path)
