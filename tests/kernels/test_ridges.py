"""Lines in a frame: background, noise, strength, tracing."""

import math

import numpy as np
import pytest
from numpy.testing import assert_allclose

from glidefit.kernels.ridges import (
    BlockStatistics,
    LineScale,
    block_statistics,
    find_seeds,
    own,
    owned_share,
    ridge_direction,
    ridge_frame,
    trace,
)

WIDTH = 1.2
BLOCK = 16


def line_image(angle, *, shape=(160, 160), peak=60.0, level=100.0, half=50.0, offset=0.3):
    """A straight line through the middle, its profile a Gaussian of standard deviation WIDTH."""
    y, x = np.mgrid[: shape[0], : shape[1]].astype(float)
    x, y = x - shape[1] / 2 - offset, y - shape[0] / 2 - offset
    along, across = x * np.cos(angle) + y * np.sin(angle), y * np.cos(angle) - x * np.sin(angle)
    ends = 1 / (1 + np.exp(2 * (np.abs(along) - half)))
    return level + peak * np.exp(-(across**2) / (2 * WIDTH**2)) * ends


def prepared(image, *, rounding=False):
    image = image.astype(np.float32)
    blocks = block_statistics(image, block_px=BLOCK, rounding=rounding)
    scale = LineScale.of_width(WIDTH)
    return ridge_frame(image, scale=scale, blocks=blocks, block_px=BLOCK), scale


def test_noise_of_a_second_difference_is_that_of_filtered_noise():
    rng = np.random.default_rng(1)
    frame, scale = prepared(rng.normal(50, 3.0, (256, 256)))
    d, s = scale.reach_px, frame.smooth
    second = 2 * s[:, d:-d] - s[:, : -2 * d] - s[:, 2 * d :]
    # About 256² / 20 independent values, so 1.3 % each; 4 standard errors.
    assert_allclose(second[20:-20].std(), 3.0 * scale.noise_share, rtol=0.05)


def test_background_and_noise_of_empty_uneven_frames():
    rng = np.random.default_rng(2)
    y, x = np.mgrid[:192, :256]
    level = 200 - 60 * ((x - 128) ** 2 + (y - 96) ** 2) / 128**2
    image = rng.poisson(level).astype(float)
    blocks = block_statistics(image.astype(np.float32), block_px=BLOCK, rounding=True)
    frame, _ = prepared(image, rounding=True)
    # A mean of 256 pixels scatters by a sixteenth of their noise; the parabola of the light is
    # level to half a count between blocks, and to one at the border.
    coarse = frame.contrast[:192, :256].reshape(12, 16, 16, 16).mean(axis=(1, 3))
    assert np.abs(coarse).max() < 4 * np.sqrt(200) / 16 + 1.0
    middle = np.sqrt(level[88:104, 120:136].mean()), blocks.noise[6, 8]
    assert_allclose(middle[1], middle[0], rtol=0.12)
    corner = np.sqrt(level[:16, :16].mean())
    assert_allclose(blocks.noise[0, 0], corner, rtol=0.2)


def test_statistics_that_start_from_the_frame_before_are_the_same():
    rng = np.random.default_rng(3)
    image = (line_image(0.5) + rng.normal(0, 5, (160, 160))).astype(np.float32)
    fresh = block_statistics(image, block_px=BLOCK, rounding=False)
    again = block_statistics(image, block_px=BLOCK, rounding=False, before=fresh)
    wrong = BlockStatistics(fresh.level + 300, fresh.noise)
    after_jump = block_statistics(image, block_px=BLOCK, rounding=False, before=wrong)
    assert_allclose(again.level, fresh.level, atol=0.5)
    assert_allclose(after_jump.level, fresh.level, atol=0.5)


@pytest.mark.parametrize("threshold", [4.5, 5.0])
def test_pure_noise_has_hardly_a_seed(threshold):
    rng = np.random.default_rng(4)
    found = 0
    for _ in range(6):
        frame, _ = prepared(rng.normal(100, 5, (512, 512)))
        owner = np.zeros((512, 512), dtype=np.int32)
        found += len(find_seeds(frame.strength, owner, threshold))
    # Measured 13 at 4.5 and 2 at 5 in these six frames of a quarter of the usual size.
    assert found <= (30 if threshold == 4.5 else 8)


def test_hot_pixels_are_taken_out_and_filaments_are_not():
    rng = np.random.default_rng(5)
    image = line_image(0.7) + rng.normal(0, 3, (160, 160))
    image[30, 100] += 400
    image[120, 33] += 80
    frame, _ = prepared(image)
    assert {(30, 100), (120, 33)} == {tuple(place) for place in frame.hot.tolist()}
    assert frame.contrast[30, 100] < 20


@pytest.mark.parametrize("angle", [0.0, 0.4, 0.9, math.pi / 2, 2.5])
def test_trace_follows_a_line_to_its_ends(angle):
    rng = np.random.default_rng(6)
    frame, scale = prepared(line_image(angle) + rng.normal(0, 6, (160, 160)))
    owner = np.zeros((160, 160), dtype=np.int32)
    seeds = find_seeds(frame.strength, owner, 8.0)
    row, column = seeds[0]
    found, alone = ridge_direction(frame.smooth, float(column), float(row), scale.reach_px)
    assert alone > 0.45
    assert abs(math.sin(found - angle)) < 0.15
    unit = 6 * scale.noise_share
    ways = [
        trace(
            frame.smooth,
            owner,
            float(column),
            float(row),
            a,
            scale.reach_px,
            unit,
            2.0,
            500,
            7,
        )
        for a in (found, found + math.pi)
    ]
    path = np.concatenate([ways[1][::-1], ways[0]]) - 80.3
    across = path[:, 1] * np.cos(angle) - path[:, 0] * np.sin(angle)
    along = path[:, 0] * np.cos(angle) + path[:, 1] * np.sin(angle)
    assert np.abs(across[5:-5]).max() < 1.0
    # A smoothed end fades over about two pixels, and so does what is found of it.
    assert_allclose(np.sort([along[0], along[-1]]), [-50, 50], atol=5)


@pytest.mark.parametrize("between", [0.4, 0.8, math.pi / 2])
def test_trace_goes_straight_on_at_a_crossing(between):
    image = line_image(0.2) + line_image(0.2 + between, level=0.0)
    image += np.random.default_rng(7).normal(0, 4, image.shape)
    frame, scale = prepared(image)
    owner = np.zeros(image.shape, dtype=np.int32)
    x, y = 80.3 - 40 * math.cos(0.2), 80.3 - 40 * math.sin(0.2)
    path = trace(frame.smooth, owner, x, y, 0.2, scale.reach_px, 4 * scale.noise_share, 2.0, 500, 7)
    end = path[-1] - 80.3
    assert abs(end[1] * math.cos(0.2) - end[0] * math.sin(0.2)) < 2
    assert end[0] * math.cos(0.2) + end[1] * math.sin(0.2) > 40


def test_two_crossing_lines_are_not_alone():
    frame, scale = prepared(line_image(0.0) + line_image(math.pi / 2, level=0.0))
    _, crossing = ridge_direction(frame.smooth, 80.3, 80.3, scale.reach_px)
    _, single = ridge_direction(frame.smooth, 110.0, 80.3, scale.reach_px)
    assert crossing < 0.3
    assert single > 0.6


def test_owner():
    owner = np.zeros((20, 30), dtype=np.int32)
    x, y = np.arange(5.0, 25.0), np.full(20, 10.0)
    own(owner, x, y, 2.0, 7)
    assert set(np.unique(owner)) == {0, 7}
    assert np.array_equal(np.flatnonzero(owner[:, 15]), [8, 9, 10, 11, 12])
    assert owned_share(owner, x, y) == 1.0
    assert owned_share(owner, x, y + 5) == 0.0
    own(owner, np.array([-3.0]), np.array([50.0]), 2.0, 1)  # outside: nothing
    assert set(np.unique(owner)) == {0, 7}


def test_width_must_be_positive():
    with pytest.raises(ValueError, match="width_px"):
        LineScale.of_width(0.0)
