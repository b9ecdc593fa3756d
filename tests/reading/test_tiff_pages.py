"""Damaged TIFF files: whatever is broken, the user is told, and no frame is ever made up."""

import struct
from io import BytesIO

import numpy as np
import pytest
import tifffile
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_array_equal

from glidefit.errors import InputError
from glidefit.reading.tiff_pages import scan_pages
from glidefit.reading.video import read_facts, read_frames

RNG = np.random.default_rng(11)
MOVIE = RNG.integers(0, 2**16, (6, 9, 7), dtype=np.uint16)
COPY_AGAIN = (
    "; expected a complete video. Copy the file again from where it was recorded and compare the"
    " sizes."
)


def whole_file(kind, compression, movie=MOVIE):
    """Bytes of a complete file."""
    file = BytesIO()
    options = {"photometric": "minisblack", "compression": compression}
    if kind == "pages":
        with tifffile.TiffWriter(file) as writer:
            for frame in movie:
                writer.write(frame, **options)
    else:
        options |= {
            "ome": {"ome": True, "metadata": {"axes": "TYX"}},
            "imagej": {"imagej": True, "metadata": {"axes": "TYX"}},
            "plain": {"metadata": None},
            "described": {},
            "big": {"bigtiff": True, "metadata": None},
        }[kind]
        tifffile.imwrite(file, movie, **options)
    return file.getvalue()


def error_of(path):
    with pytest.raises(InputError) as error:
        read_facts(path)
    return str(error.value)


FILES = [
    (kind, compression)
    for kind in ("ome", "imagej", "plain", "described", "big", "pages")
    for compression in (None, "zlib", "lzw")
]


@pytest.mark.parametrize(("kind", "compression"), FILES)
@pytest.mark.parametrize("percent", [50, 99])
def test_a_cut_file_is_refused(kind, compression, percent, tmp_path):
    path = tmp_path / "cut.tif"
    content = whole_file(kind, compression)
    path.write_bytes(content[: len(content) * percent // 100])
    said = error_of(path)
    assert said.startswith(f"{path}: the file is cut off: ")
    assert said.endswith(
        f" lies beyond its end, at {path.stat().st_size:,} bytes; expected a complete video. Copy"
        " the file again from where it was recorded and compare the sizes."
    )


@pytest.mark.parametrize("compression", [None, "zlib"])
@pytest.mark.parametrize("kind", ["ome", "imagej", "plain", "big", "pages"])
def test_at_whatever_byte_a_file_is_cut_no_frame_is_lost_in_silence(kind, compression, tmp_path):
    path = tmp_path / "cut.tif"
    movie = MOVIE[:3, :4, :4]
    content = whole_file(kind, compression, movie)
    for size in {*range(0, len(content), 5), *range(len(content) - 40, len(content))}:
        path.write_bytes(content[:size])
        try:
            frames = list(read_frames(path))
        except InputError:
            continue
        assert_array_equal(np.array(frames), movie)
        assert size >= len(content) - 16  # the writer ends uncompressed files with padding


def test_a_file_cut_between_two_pages_names_the_first_that_is_missing(tmp_path):
    path = tmp_path / "cut.tif"
    content = whole_file("pages", None)
    path.write_bytes(content)
    with tifffile.TiffFile(path) as tif:
        fifth = tif.pages[4].offset
    path.write_bytes(content[:fifth])
    assert error_of(path) == (
        f"{path}: the file is cut off: page 5 of the TIFF lies beyond its end, at {fifth:,} bytes"
        + COPY_AGAIN
    )


def test_a_file_cut_within_the_last_image_names_it(tmp_path):
    path = tmp_path / "cut.tif"
    content = whole_file("pages", "zlib")
    path.write_bytes(content[:-8])
    assert error_of(path) == (
        f"{path}: the file is cut off: the image of page 6 of the TIFF lies beyond its end, at"
        f" {len(content) - 8:,} bytes" + COPY_AGAIN
    )


@settings(max_examples=300, deadline=None)
@given(
    kind=st.sampled_from(["ome", "imagej", "described", "big", "pages"]),
    compression=st.sampled_from([None, "zlib", "lzw"]),
    places=st.lists(st.floats(0, 1, exclude_max=True), min_size=1, max_size=4),
    values=st.lists(st.integers(0, 255), min_size=4, max_size=4),
    in_head=st.booleans(),
)
def test_flipped_bytes_give_frames_of_one_shape_or_a_message(
    kind, compression, places, values, in_head, tmp_path_factory
):
    content = bytearray(whole_file(kind, compression))
    for place, value in zip(places, values, strict=False):
        content[int(place * (400 if in_head else len(content)))] = value
    path = tmp_path_factory.mktemp("flip") / "flipped.tif"
    path.write_bytes(content)
    try:
        facts = read_facts(path)
        frames = list(read_frames(path))
    except InputError as error:
        said = str(error)
    else:
        said = str(path)
        assert len(frames) == facts.n_frames
        assert {frame.shape for frame in frames} == {(facts.height_px, facts.width_px)}
        assert {frame.dtype.name for frame in frames} == {facts.dtype}
    assert said.startswith(str(path))


@pytest.mark.parametrize("compression", ["zlib", "lzw"])
def test_a_broken_frame_in_the_middle_is_named_when_it_is_read(compression, tmp_path):
    path = tmp_path / "broken.tif"
    path.write_bytes(whole_file("pages", compression))
    with tifffile.TiffFile(path) as tif:
        start, length = tif.pages[3].dataoffsets[0], tif.pages[3].databytecounts[0]
    content = bytearray(path.read_bytes())
    content[start : start + length] = b"\xff" * length
    path.write_bytes(content)
    assert read_facts(path).n_frames == 6
    frames = read_frames(path)
    for k in range(3):
        assert_array_equal(next(frames), MOVIE[k])
    with pytest.raises(InputError, match=r"broken\.tif, frame 3: it cannot be decoded \(.+\);"):
        next(frames)


def overwrite(path, page, tag, value):
    with tifffile.TiffFile(path, mode="r+b") as tif:
        tif.pages[page].tags[tag].overwrite(value)


def test_an_unknown_compression_is_named_before_the_run(tmp_path):
    path = tmp_path / "odd.tif"
    path.write_bytes(whole_file("plain", "zlib"))
    for page in range(6):
        overwrite(path, page, "Compression", 9999)
    said = error_of(path)
    assert said.startswith(f"{path}, frame 0: it cannot be decoded (9999 is not a ")
    assert said.endswith(
        "); expected a complete video in a common compression. Copy the file again from where it"
        " was recorded; if that does not help, export it as OME-TIFF without compression."
    )


@pytest.mark.parametrize("tag", ["StripOffsets", "StripByteCounts"])
def test_an_image_that_was_never_written_is_no_black_frame(tag, tmp_path):
    path = tmp_path / "hole.tif"
    path.write_bytes(whole_file("pages", "zlib"))
    overwrite(path, 2, tag, 0)
    assert error_of(path) == (
        f"{path}: the image of page 3 of the TIFF was never written, or only in part" + COPY_AGAIN
    )


def test_an_image_with_too_few_bytes_is_named(tmp_path):
    path = tmp_path / "thin.tif"
    path.write_bytes(whole_file("pages", None))
    overwrite(path, 2, "StripByteCounts", 100)
    assert error_of(path) == (
        f"{path}: the image of page 3 of the TIFF has 100 of its 126 bytes" + COPY_AGAIN
    )


def test_pages_in_a_circle_end(tmp_path):
    path = tmp_path / "circle.tif"
    content = bytearray(whole_file("plain", None))
    path.write_bytes(content)
    with tifffile.TiffFile(path) as tif:
        first, last = tif.pages[0].offset, tif.pages[5].offset
    n_tags = struct.unpack_from("<H", content, last)[0]
    struct.pack_into("<I", content, last + 2 + 12 * n_tags, first)
    path.write_bytes(content)
    assert error_of(path) == (
        f"{path}: page 7 of the TIFF is a page that came before, the file is broken" + COPY_AGAIN
    )


def test_an_address_larger_than_any_file_is_beyond_its_end(tmp_path):
    path = tmp_path / "far.tif"
    path.write_bytes(b"II" + struct.pack("<HHHQ", 43, 8, 0, 2**64 - 1))
    assert error_of(path) == (
        f"{path}: the file is cut off: page 1 of the TIFF lies beyond its end, at 16 bytes"
        + COPY_AGAIN
    )


def test_a_file_without_pages_is_refused(tmp_path):
    (tmp_path / "none.tif").write_bytes(b"II*\0" + bytes(20))
    assert error_of(tmp_path / "none.tif") == (
        f"{tmp_path}/none.tif: a TIFF without any page" + COPY_AGAIN
    )


def test_an_empty_file_is_refused(tmp_path):
    (tmp_path / "empty.tif").write_bytes(b"")
    assert error_of(tmp_path / "empty.tif") == (
        f"{tmp_path}/empty.tif: an empty file, 0 bytes" + COPY_AGAIN
    )


@pytest.mark.parametrize(
    "content", [b"\n", b"II", b"<html>not found</html>", b"\x89PNG\r\n\x1a\n" + bytes(99), b"MM*\0"]
)
def test_another_file_under_the_name_of_a_tiff_is_refused(content, tmp_path):
    (tmp_path / "other.tif").write_bytes(content)
    assert error_of(tmp_path / "other.tif") == (
        f"{tmp_path}/other.tif: this is no TIFF file, whatever its name says; expected a video in"
        " TIFF, OME-TIFF or BigTIFF. Export the recording again as OME-TIFF."
    )


def test_a_frame_too_large_for_any_camera_is_not_allocated(tmp_path):
    path = tmp_path / "huge.tif"
    path.write_bytes(whole_file("plain", "zlib"))
    for page in range(6):
        overwrite(path, page, "ImageWidth", 2_000_000_000)
    assert f"{path}: frames of 2,000,000,000 × 9 px; expected metadata that" in error_of(path)


def test_frames_of_two_kinds_in_one_stack_are_refused(tmp_path):
    path = tmp_path / "mixed.tif"
    path.write_bytes(whole_file("imagej", "zlib"))
    overwrite(path, 4, "ImageWidth", 6)
    assert error_of(path) == (
        f"{path}: frames of 7 × 9 px (16 bits) and of 6 × 9 px (16 bits) in one recording; expected"
        " metadata that fit the frames. Open the file in the program that wrote it, check that all"
        " frames are there, and save it again as OME-TIFF."
    )


def test_a_broken_tag_of_a_maker_does_no_harm(tmp_path):
    path = tmp_path / "maker.tif"
    tag = (50_000, 3, 6, (1, 2, 3, 4, 5, 6), True)
    tifffile.imwrite(path, MOVIE, photometric="minisblack", metadata=None, extratags=[tag])
    content = bytearray(path.read_bytes())
    entry = content.index(struct.pack("<HHI", 50_000, 3, 6))
    struct.pack_into("<I", content, entry + 8, 2**31)
    path.write_bytes(content)
    assert_array_equal(np.array(list(read_frames(path))), MOVIE)


def test_a_description_in_an_unknown_encoding_does_no_harm(tmp_path):
    path = tmp_path / "bytes.tif"
    tifffile.imwrite(path, MOVIE, photometric="minisblack", metadata=None, description=b"\x81\x8d!")
    assert_array_equal(np.array(list(read_frames(path))), MOVIE)


@pytest.mark.parametrize("private_tag", [34412, 33628, 34362])
def test_a_tiff_with_an_order_of_its_own_is_refused(private_tag, tmp_path):
    path = tmp_path / "own.tif"
    tag = (private_tag, 1, 64, bytes(64), True)
    tifffile.imwrite(path, MOVIE, photometric="minisblack", metadata=None, extratags=[tag])
    assert error_of(path) == (
        f"{path}: a TIFF of a maker's own kind, which orders its pages in its own way; expected"
        " OME-TIFF, an ImageJ stack, or plain TIFF. Export the recording as OME-TIFF."
    )


@pytest.mark.parametrize("kind", ["plain", "big"])
def test_the_skeleton_agrees_with_the_library(kind, tmp_path):
    path = tmp_path / "film.tif"
    path.write_bytes(whole_file(kind, None))
    pages = scan_pages(path)
    with tifffile.TiffFile(path) as tif:
        assert pages.n_pages == len(tif.pages)
        assert pages.first_data == tif.pages[0].dataoffsets[0]
        assert [shape.dtype for shape in pages.shapes] == [tif.pages[0].dtype]
        assert (pages.order, pages.size) == (tif.byteorder, path.stat().st_size)
