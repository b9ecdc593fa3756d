"""What a user reads when a video is wrong: the whole text, and exit code 3."""

from __future__ import annotations

import shutil

import numpy as np
import pytest
import tifffile

SHEET = "recording,condition,day,chamber,shape,pixel_um,frame_s,exposure_s"


@pytest.fixture
def video(simulated, desk):
    """An OME-TIFF of 0.16 µm a pixel and 0.5 s a frame."""
    [source, _] = sorted((simulated / "videos").iterdir())
    shutil.copy(source, desk.folder / "v.ome.tif")
    return "v.ome.tif"


def refused(desk, row, *, command="run"):
    said = desk.glidefit(command, desk.sheet(row, header=SHEET))
    assert (said.code, said.out) == (3, "")
    assert not (desk.folder / "reports").exists()
    return said.err


def grey(n_frames):
    return np.random.default_rng(0).normal(100, 3, (n_frames, 64, 64)).astype("u2")


def test_pixel_size_that_contradicts_the_file(desk, video):
    assert refused(desk, f"{video},dots,d1,c1,spot,0.1,,") == (
        "Error: assay.csv, row 2, v.ome.tif: the sheet says pixel_um = 0.1, the file says 0.16 µm "
        "per pixel; expected the same calibration in both. Correct the sheet, or empty its "
        "pixel_um to take the file's.\n"
    )


def test_frame_interval_that_contradicts_the_file(desk, video):
    assert refused(desk, f"{video},dots,d1,c1,spot,,0.4,") == (
        "Error: assay.csv, row 2, v.ome.tif: the sheet says frame_s = 0.4, the file says 0.5 s "
        "between frames; expected the same calibration in both. Correct the sheet, or empty its "
        "frame_s to take the file's.\n"
    )


def test_exposure_longer_than_the_interval_of_the_file(desk, video):
    assert refused(desk, f"{video},dots,d1,c1,spot,,,0.7") == (
        "Error: assay.csv, row 2, v.ome.tif: exposure_s = 0.7 s from the sheet is longer than the "
        "frame interval of 0.5 s; expected an exposure that ends before the next frame begins. "
        "Correct exposure_s or frame_s; both are in seconds.\n"
    )


def test_no_shape_for_a_video(desk, video):
    assert refused(desk, f"{video},dots,d1,c1,,,,") == (
        "Error: assay.csv, row 2: the shape is not given for the video 'v.ome.tif'; expected in "
        "the column 'shape' the word 'filament' or 'spot'. Write 'spot' for a bead or quantum dot "
        "that rides on a filament.\n"
    )


def test_video_for_fit(desk, video):
    assert refused(desk, f"{video},dots,d1,c1,spot,,,", command="fit") == (
        "Error: assay.csv, row 2: v.ome.tif is a video; expected track tables. Make tables with "
        "`glidefit track`, or use `glidefit run`.\n"
    )


def test_truncated_tiff(desk, video):
    path = desk.folder / video
    data = path.read_bytes()
    path.write_bytes(data[: len(data) // 2])
    said = refused(desk, f"{video},dots,d1,c1,spot,,,")
    assert said == (
        f"Error: {path}: the file is cut off: the description of page 1 of the TIFF lies beyond "
        f"its end, at {len(data) // 2:,} bytes; expected a complete video. Copy the file again "
        "from where it was recorded and compare the sizes.\n"
    )


def test_empty_file(desk):
    desk.write("v.tif", "")
    assert refused(desk, "v.tif,dots,d1,c1,spot,0.16,0.5,") == (
        f"Error: {desk.folder}/v.tif: an empty file, 0 bytes; expected a complete video. Copy the "
        "file again from where it was recorded and compare the sizes.\n"
    )


def test_single_frame(desk):
    tifffile.imwrite(desk.folder / "v.tif", grey(1))
    assert refused(desk, "v.tif,dots,d1,c1,spot,0.16,0.5,") == (
        f"Error: {desk.folder}/v.tif: 1 frame; expected a video of 3 or more frames. Give the "
        "whole recording, or take the row out of the assay sheet.\n"
    )


def test_colour(desk):
    tifffile.imwrite(desk.folder / "v.tif", np.zeros((5, 32, 32, 3), "u1"), photometric="rgb")
    assert refused(desk, "v.tif,dots,d1,c1,spot,0.16,0.5,") == (
        f"Error: {desk.folder}/v.tif: colour frames, 3 values per pixel; expected grey frames, one "
        "value per pixel. Save the channel that shows the filaments on its own, as greyscale.\n"
    )


def test_no_calibration_anywhere(desk):
    tifffile.imwrite(desk.folder / "v.tif", grey(5), photometric="minisblack")
    assert refused(desk, "v.tif,dots,d1,c1,spot,,0.5,") == (
        "Error: assay.csv, row 2, v.tif: neither the sheet nor the file tells µm per pixel; "
        "expected a number of µm per pixel. Fill the column pixel_um of the sheet.\n"
    )


def test_frames_that_the_video_does_not_have(desk, video):
    header = "recording,condition,day,chamber,shape,first_frame,last_frame"
    said = desk.glidefit("run", desk.sheet(f"{video},dots,d1,c1,spot,5,20", header=header))
    assert said.code == 3
    assert said.err == (
        "Error: assay.csv, row 2, v.ome.tif: frames 5 to 20 are wanted, the video has frames 0 to "
        "11; expected at least three frames inside the video. Correct first_frame and last_frame.\n"
    )


def test_video_without_a_spot(desk):
    tifffile.imwrite(desk.folder / "v.tif", grey(5), photometric="minisblack")
    assert refused(desk, "v.tif,dots,d1,c1,spot,0.16,0.5,") == (
        "Error: assay.csv, row 2, v.tif: no spot stands out of the noise in any frame; expected "
        "spots above 5 × noise. Look at the video; lower detect.threshold or correct "
        "detect.spot_diameter.\n"
    )
