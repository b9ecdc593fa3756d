"""Videos of every kind of TIFF: the same frames come back, a missing choice is named."""

import io
import logging
import tracemalloc
from concurrent.futures import ThreadPoolExecutor

import numpy as np
import pytest
import tifffile
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays
from numpy.testing import assert_array_equal

from glidefit.errors import InputError
from glidefit.reading.video import VIDEO_SUFFIXES, VideoFacts, read_facts, read_frames

RNG = np.random.default_rng(7)
MOVIE = RNG.integers(0, 2**16, (5, 12, 9), dtype=np.uint16)


def error_of(path, **choice):
    """Text of the error, the same from both functions."""
    with pytest.raises(InputError) as from_facts:
        read_facts(path, **choice)
    with pytest.raises(InputError) as from_frames:
        list(read_frames(path, **choice))
    assert str(from_facts.value) == str(from_frames.value)
    return str(from_facts.value)


def write_stack(path, stack, *, kind, compression=None):
    if kind == "pages":
        with tifffile.TiffWriter(path) as writer:
            for frame in stack:
                writer.write(frame, photometric="minisblack", compression=compression)
        return
    options = {
        "ome": {"ome": True, "metadata": {"axes": "TYX"}},
        "imagej": {"imagej": True, "metadata": {"axes": "TYX"}},
        "plain": {"metadata": None},
        "described": {},
        "big": {"bigtiff": True, "metadata": None},
        "motorola": {"byteorder": ">", "metadata": None},
    }[kind]
    tifffile.imwrite(path, stack, photometric="minisblack", compression=compression, **options)


KINDS = ["ome", "imagej", "plain", "described", "big", "motorola", "pages"]


@st.composite
def stacks(draw):
    dtype = draw(st.sampled_from([np.uint8, np.uint16, np.float32]))
    # The writer takes a stack of single pixels or lines for one image.
    shape = draw(st.tuples(st.integers(3, 6), st.integers(2, 17), st.integers(2, 17)))
    elements = None
    if dtype is np.float32:
        elements = st.floats(width=32, allow_nan=False, allow_infinity=False)
    return draw(arrays(dtype, shape, elements=elements, fill=st.just(0)))


@settings(max_examples=120, deadline=None)
@given(
    stack=stacks(),
    kind=st.sampled_from(KINDS),
    compression=st.sampled_from([None, "zlib", "lzw"]),
)
def test_frames_come_back_identical(stack, kind, compression, tmp_path_factory):
    path = tmp_path_factory.mktemp("film") / "film.tif"
    write_stack(path, stack, kind=kind, compression=compression)
    facts = read_facts(path)
    frames = list(read_frames(path))
    assert_array_equal(np.array(frames), stack)
    assert facts.n_frames == len(frames) == len(stack)
    assert (facts.height_px, facts.width_px) == stack.shape[1:]
    assert facts.dtype == stack.dtype.name
    assert all(frame.dtype == stack.dtype and frame.flags.writeable for frame in frames)


@pytest.mark.parametrize("dtype", ["int16", "uint32", "int32", "float16", "float64"])
def test_other_numbers_come_back_identical(dtype, tmp_path):
    stack = RNG.normal(0, 100, (3, 8, 8)).astype(dtype)
    tifffile.imwrite(tmp_path / "film.tif", stack, photometric="minisblack", byteorder=">")
    assert_array_equal(np.array(list(read_frames(tmp_path / "film.tif"))), stack)
    assert read_facts(tmp_path / "film.tif").dtype == dtype


def test_twelve_bit_frames_come_back_in_sixteen(tmp_path):
    stack = MOVIE >> 4
    tifffile.imwrite(tmp_path / "f.tif", stack, photometric="minisblack", bitspersample=12,
                     metadata=None)  # fmt: skip
    assert_array_equal(np.array(list(read_frames(tmp_path / "f.tif"))), stack)
    assert read_facts(tmp_path / "f.tif").dtype == "uint16"


def test_tiles_and_strips_come_back_identical(tmp_path):
    stack = RNG.integers(0, 255, (3, 70, 50), dtype=np.uint8)
    tifffile.imwrite(tmp_path / "tile.tif", stack, tile=(16, 32), photometric="minisblack")
    tifffile.imwrite(tmp_path / "strip.tif", stack, rowsperstrip=7, photometric="minisblack")
    for name in ("tile.tif", "strip.tif"):
        assert_array_equal(np.array(list(read_frames(tmp_path / name))), stack)


def test_first_and_last_frame_are_included(tmp_path):
    path = tmp_path / "film.tif"
    write_stack(path, MOVIE, kind="imagej")
    assert_array_equal(np.array(list(read_frames(path, first=1, last=3))), MOVIE[1:4])
    assert_array_equal(np.array(list(read_frames(path, first=4))), MOVIE[4:])
    assert_array_equal(np.array(list(read_frames(path, last=0))), MOVIE[:1])


@pytest.mark.parametrize(("first", "last"), [(0, 5), (-1, 2), (3, 2), (7, None)])
def test_frames_that_are_not_there_are_refused_at_once(first, last, tmp_path):
    path = tmp_path / "film.tif"
    write_stack(path, MOVIE, kind="plain")
    with pytest.raises(InputError) as error:
        read_frames(path, first=first, last=last)
    assert str(error.value) == (
        f"{path}: frames {first} to {4 if last is None else last} are asked for, the file has 5;"
        " expected frames within 0 to 4, the first not after the last. Correct the columns"
        " `first_frame` and `last_frame` of the assay sheet."
    )


def test_a_file_without_calibration_has_none(tmp_path):
    write_stack(tmp_path / "film.tif", MOVIE, kind="plain")
    assert read_facts(tmp_path / "film.tif") == VideoFacts(
        n_frames=5, height_px=12, width_px=9, dtype="uint16", pixel_um=None, frame_s=None,
        times_s=None, exposure_s=None, notes=(),
    )  # fmt: skip


def test_times_that_do_not_fit_the_frames_are_a_mistake_of_the_program():
    with pytest.raises(ValueError, match="2 times for 3 frames"):
        VideoFacts(
            n_frames=3, height_px=1, width_px=1, dtype="uint8", pixel_um=None, frame_s=1.0,
            times_s=np.array([0.0, 1.0]), exposure_s=None, notes=(),
        )  # fmt: skip


@pytest.mark.parametrize("kind", ["ome", "imagej", "described"])
def test_one_of_several_channels_must_be_chosen(kind, tmp_path):
    path = tmp_path / "two.tif"
    stack = RNG.integers(0, 255, (5, 2, 12, 9), dtype=np.uint8)
    options = {"described": {}, "ome": {"ome": True}, "imagej": {"imagej": True}}[kind]
    tifffile.imwrite(path, stack, photometric="minisblack", metadata={"axes": "TCYX"}, **options)
    assert error_of(path) == (
        f"{path}: 2 channels; expected one channel to analyse. Fill in the column `channel` of the"
        " assay sheet with a number from 0 to 1."
    )
    assert error_of(path, channel=2) == (
        f"{path}: channel 2 is asked for, the file has 2 channels; expected a number from 0 to 1"
        " (channels count from 0). Correct the column `channel` of the assay sheet."
    )
    for channel in (0, 1):
        assert read_facts(path, channel=channel).n_frames == 5
        frames = list(read_frames(path, channel=channel))
        assert_array_equal(np.array(frames), stack[:, channel])


def test_a_channel_of_a_file_with_one_is_the_first(tmp_path):
    path = tmp_path / "film.tif"
    write_stack(path, MOVIE, kind="ome")
    assert_array_equal(np.array(list(read_frames(path, channel=0, position=0))), MOVIE)
    assert error_of(path, channel=1) == (
        f"{path}: channel 1 is asked for, the file has 1 channel; expected 0, or leave it empty"
        " (channels count from 0). Correct the column `channel` of the assay sheet."
    )


def test_one_of_several_stacks_must_be_chosen(tmp_path):
    path = tmp_path / "positions.tif"
    with tifffile.TiffWriter(path) as writer:
        writer.write(MOVIE, photometric="minisblack")
        writer.write(MOVIE[:4, :8] + 1, photometric="minisblack")
    assert error_of(path) == (
        f"{path}: 2 positions (0: 5 × 9 × 12 px, 1: 4 × 9 × 8 px); expected one position to"
        " analyse. Fill in the column `position` of the assay sheet with a number from 0 to 1."
    )
    assert_array_equal(np.array(list(read_frames(path, position=1))), MOVIE[:4, :8] + 1)


def test_pages_of_two_sizes_are_two_positions(tmp_path):
    path = tmp_path / "overview.tif"
    with tifffile.TiffWriter(path) as writer:
        writer.write(MOVIE, photometric="minisblack", metadata=None)
        writer.write(np.zeros((30, 30), np.uint8), photometric="minisblack", metadata=None)
    assert "2 positions (0: 5 × 9 × 12 px, 1: 1 × 30 × 30 px)" in error_of(path)
    assert_array_equal(np.array(list(read_frames(path, position=0))), MOVIE)
    assert "1 frame; expected a video of 3 or more frames" in error_of(path, position=1)


def test_small_copies_of_pages_are_left_out(tmp_path):
    path = tmp_path / "copies.tif"
    with tifffile.TiffWriter(path) as writer:
        for frame in MOVIE:
            writer.write(frame, photometric="minisblack", metadata=None)
            writer.write(frame[::2, ::2], photometric="minisblack", metadata=None, subfiletype=1)
    assert_array_equal(np.array(list(read_frames(path))), MOVIE)


@pytest.mark.parametrize("kind", ["ome", "imagej", "described"])
def test_a_stack_of_slices_is_read_as_time_and_says_so(kind, tmp_path):
    options = {"described": {}, "ome": {"ome": True}, "imagej": {"imagej": True}}[kind]
    tifffile.imwrite(tmp_path / "z.tif", MOVIE, photometric="minisblack",
                     metadata={"axes": "ZYX"}, **options)  # fmt: skip
    assert read_facts(tmp_path / "z.tif").notes == (
        "the file calls its 5 frames slices of a Z stack; they are read as time",
    )
    assert_array_equal(np.array(list(read_frames(tmp_path / "z.tif"))), MOVIE)


@pytest.mark.parametrize("kind", ["ome", "imagej", "described"])
def test_a_stack_of_slices_at_each_time_is_refused(kind, tmp_path):
    path = tmp_path / "tz.tif"
    options = {"described": {}, "ome": {"ome": True}, "imagej": {"imagej": True}}[kind]
    stack = np.zeros((4, 3, 6, 6), np.uint8)
    tifffile.imwrite(path, stack, photometric="minisblack", metadata={"axes": "TZYX"}, **options)
    assert error_of(path) == (
        f"{path}: a stack of 4 times × 3 slices; expected one plane at each time. Save one focal"
        " plane, or a projection of them, as a stack over time."
    )


def test_two_axes_without_a_name_are_refused(tmp_path):
    path = tmp_path / "what.tif"
    tifffile.imwrite(path, np.zeros((4, 3, 6, 6), np.uint8), photometric="minisblack")
    assert "a stack of 4 planes × 3 planes" in error_of(path)


def test_a_hundred_channels_of_one_frame_are_not_taken_for_channels(tmp_path):
    path = tmp_path / "c.tif"
    tifffile.imwrite(path, np.zeros((100, 6, 6), np.uint8), imagej=True, metadata={"axes": "CYX"})
    assert error_of(path) == (
        f"{path}: 100 channels of a single frame; expected a video of 3 or more frames. If the"
        " channels are really moments in time, save the stack again with time as its axis."
    )


@pytest.mark.parametrize("kind", ["plain", "imagej", "described"])
def test_colour_is_refused(kind, tmp_path):
    path = tmp_path / "rgb.tif"
    options = {"plain": {"metadata": None}, "described": {}, "imagej": {"imagej": True}}[kind]
    tifffile.imwrite(path, np.zeros((5, 8, 8, 3), np.uint8), photometric="rgb", **options)
    assert error_of(path) == (
        f"{path}: colour frames, 3 values per pixel; expected grey frames, one value per pixel."
        " Save the channel that shows the filaments on its own, as greyscale."
    )


@pytest.mark.parametrize("n_frames", [1, 2])
@pytest.mark.parametrize("kind", KINDS)
def test_too_few_frames_are_refused(kind, n_frames, tmp_path):
    path = tmp_path / "short.tif"
    write_stack(path, MOVIE[:n_frames], kind=kind)
    assert error_of(path) == (
        f"{path}: {n_frames} frame{'s' * (n_frames - 1)}; expected a video of 3 or more frames."
        " Give the whole recording, or take the row out of the assay sheet."
    )


def test_a_mask_is_refused(tmp_path):
    path = tmp_path / "mask.tif"
    tifffile.imwrite(path, MOVIE > 9999, photometric="minisblack", metadata=None)
    assert error_of(path) == (
        f"{path}: pixels of 1 bit, black and white; expected grey values of 8, 16 or 32 bits. Save"
        " the original recording, not a mask, as 16-bit greyscale."
    )


def test_complex_numbers_are_refused(tmp_path):
    path = tmp_path / "complex.tif"
    tifffile.imwrite(path, np.zeros((3, 4, 4), np.complex64), photometric="minisblack",
                     metadata=None)  # fmt: skip
    assert "pixels of 64 bits, no plain number" in error_of(path)


def test_a_pixel_without_a_number_is_refused_with_its_frame(tmp_path):
    path = tmp_path / "nan.tif"
    stack = np.ones((4, 5, 5), np.float32)
    stack[2, :2, 0] = np.nan
    tifffile.imwrite(path, stack, photometric="minisblack")
    frames = read_frames(path)
    assert next(frames).shape == (5, 5)
    with pytest.raises(InputError) as error:
        list(frames)
    assert str(error.value) == (
        f"{path}, frame 2: 2 pixels without a number (NaN or infinite); expected a grey value in"
        " every pixel. Crop the empty border, or fill it with the background, and save again."
    )


def test_a_missing_file_and_a_folder_are_named(tmp_path):
    assert error_of(tmp_path / "gone.tif") == (
        f"{tmp_path}/gone.tif: there is no such file; expected a video file. Correct the column"
        " `recording` of the assay sheet, or put the file there."
    )
    (tmp_path / "folder.tif").mkdir()
    assert "folder.tif: this is no file, but a folder" in error_of(tmp_path / "folder.tif")


def test_a_name_too_long_for_the_disk_is_told(tmp_path):
    assert "the file cannot be read (File name too long)" in error_of(tmp_path / f"{'n' * 300}.tif")


def test_another_kind_of_file_is_refused_by_its_suffix(tmp_path):
    (tmp_path / "film.avi").write_bytes(b"RIFF")
    assert error_of(tmp_path / "film.avi") == (
        f"{tmp_path}/film.avi: a file of the kind '.avi'; expected a video: .btf, .nd2, .tf8, .tif,"
        " .tiff. Export the recording as OME-TIFF."
    )


@pytest.mark.parametrize("suffix", [*sorted(VIDEO_SUFFIXES - {".nd2"}), ".ome.tif", ".TIF"])
def test_every_suffix_of_a_tiff_is_read(suffix, tmp_path):
    write_stack(tmp_path / f"film{suffix}", MOVIE, kind="ome")
    assert read_facts(tmp_path / f"film{suffix}").n_frames == 5


def peak_of_reading(path):
    for _ in read_frames(path):  # what is kept from a first time, such as imports, does not count
        pass
    tracemalloc.start()
    for _ in read_frames(path):
        pass
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    return peak


@pytest.mark.parametrize("kind", ["ome", "imagej", "plain", "pages"])
def test_memory_does_not_grow_with_the_number_of_frames(kind, tmp_path):
    frames = RNG.integers(0, 2**16, (200, 256, 256), dtype=np.uint16)
    write_stack(tmp_path / "20.tif", frames[:20], kind=kind)
    write_stack(tmp_path / "200.tif", frames, kind=kind)
    few, many = peak_of_reading(tmp_path / "20.tif"), peak_of_reading(tmp_path / "200.tif")
    assert many < few + frames[0].nbytes  # 180 frames more take less than one frame


def test_the_library_is_silent_and_leaves_the_logger_as_it_was(tmp_path, capfd):
    write_stack(tmp_path / "film.tif", MOVIE, kind="ome")
    content = (tmp_path / "film.tif").read_bytes()
    (tmp_path / "cut.tif").write_bytes(content[: len(content) // 2])
    logger = logging.getLogger("tifffile")
    before = logger.level, logger.propagate, list(logger.handlers)
    list(read_frames(tmp_path / "film.tif"))
    error_of(tmp_path / "cut.tif")
    assert (logger.level, logger.propagate, list(logger.handlers)) == before
    assert capfd.readouterr() == ("", "")


def test_a_file_that_may_not_be_read_is_named(tmp_path, monkeypatch):
    path = tmp_path / "film.tif"
    write_stack(path, MOVIE, kind="plain")

    def denied(*args, **options):
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr(io, "open", denied)
    assert error_of(path) == (
        f"{path}: the file cannot be read (Permission denied); expected a complete video. Copy the"
        " file again from where it was recorded and compare the sizes."
    )


def test_a_file_that_shrinks_while_it_is_read_is_named(tmp_path):
    path = tmp_path / "film.tif"
    tifffile.imwrite(path, MOVIE, photometric="minisblack", truncate=True)
    frames = read_frames(path)
    path.write_bytes(path.read_bytes()[: -3 * MOVIE[0].nbytes])
    with pytest.raises(InputError, match=r"film\.tif, frame 2: the file ends within it;"):
        list(frames)


def test_a_file_that_is_replaced_before_it_is_read_is_named(tmp_path):
    path = tmp_path / "film.tif"
    write_stack(path, MOVIE, kind="plain")
    frames = read_frames(path)
    write_stack(path, MOVIE[:, :4], kind="plain")
    with pytest.raises(InputError) as error:
        next(frames)
    assert str(error.value) == (
        f"{path}, frame 0: 9 × 4 pixels of uint16, unlike the 9 × 12 of uint16 before; expected a"
        " complete video. Copy the file again from where it was recorded and compare the sizes."
    )


def test_a_description_may_end_in_axes_of_one(tmp_path):
    tifffile.imwrite(tmp_path / "f.tif", MOVIE[..., None], photometric="minisblack")
    assert_array_equal(np.array(list(read_frames(tmp_path / "f.tif"))), MOVIE)


def test_pages_that_are_all_called_small_copies_are_frames(tmp_path):
    tifffile.imwrite(tmp_path / "f.tif", MOVIE, photometric="minisblack", metadata=None,
                     subfiletype=1)  # fmt: skip
    assert_array_equal(np.array(list(read_frames(tmp_path / "f.tif"))), MOVIE)


def test_two_readers_at_once_do_not_disturb_each_other(tmp_path):
    write_stack(tmp_path / "a.tif", MOVIE, kind="ome")
    write_stack(tmp_path / "b.tif", MOVIE + 1, kind="pages")
    both = zip(read_frames(tmp_path / "a.tif"), read_frames(tmp_path / "b.tif"), strict=True)
    for k, (a, b) in enumerate(both):
        assert_array_equal(a, MOVIE[k])
        assert_array_equal(b, MOVIE[k] + 1)
    with ThreadPoolExecutor(4) as threads:
        found = list(threads.map(read_facts, [tmp_path / "a.tif", tmp_path / "b.tif"] * 8))
    assert {facts.n_frames for facts in found} == {5}
