"""Contours: centreline and ends of a filament whose shape is known."""

import math

import numpy as np
import pytest
from numpy.testing import assert_allclose

from glidefit.kernels import contours as c

WIDTH, NOISE = 1.0, 5.0
NONE = np.zeros((96, 128), dtype=np.float32)


def body(radius, *, length=60.0, peak=40.0, shape=(96, 128), start=(30.0, 40.0)):
    """An arc of this radius that begins at ``start`` to the right: image, x and y at each pixel."""
    s = np.arange(0, length + 1e-9, 0.05)
    x, y = start[0] + radius * np.sin(s / radius), start[1] + radius * (1 - np.cos(s / radius))
    image = np.zeros(shape, dtype=np.float32)
    fine = np.arange(0.0, length, 0.05)
    for px, py in zip(np.interp(fine, s, x), np.interp(fine, s, y), strict=True):
        j, i = round(px), round(py)
        v, u = np.mgrid[i - 6 : i + 7, j - 6 : j + 7]
        light = np.exp(-((u - px) ** 2 + (v - py) ** 2) / (2 * WIDTH**2))
        image[i - 6 : i + 7, j - 6 : j + 7] += (
            peak * 0.05 / (math.sqrt(2 * math.pi) * WIDTH) * light
        )
    return image, np.interp(np.arange(length + 1), s, x), np.interp(np.arange(length + 1), s, y)


def measured(image, x, y, *, tail, head, usual):
    width = c.profile_width(WIDTH)
    x, y, tail, head, amplitude, weight = c.fit_centreline(
        image, NONE, False, x, y, tail, head, width, NOISE, 400.0, usual
    )
    low, high = c.lit_interval(amplitude, weight, tail - 8, tail + 8, head - 8, head + 8, usual)
    ends = c.fit_ends(amplitude, weight, low, high, width, width, usual)
    return x, y, *ends


@pytest.mark.parametrize("radius", [1e6, 120.0, 40.0])
def test_centreline_and_ends_of_a_clean_arc(radius):
    image, true_x, true_y = body(radius)
    first, last = -6.0, 66.0
    x, y, _ = c.extended(true_x + 0.4, true_y - 0.6, 0.0, 60.0, -first, last - 60)
    x, y, tail, head, _, _ = measured(image, x, y, tail=6.0, head=66.0, usual=40.0)
    # The filament is blurred by the pixels between which it is read, alike at both ends.
    assert_allclose(head - tail, 60.0, atol=0.35)
    ends = [(c.at(x, p), c.at(y, p)) for p in (tail, head)]
    assert_allclose(ends[0], (true_x[0], true_y[0]), atol=0.25)
    assert_allclose(ends[1], (true_x[-1], true_y[-1]), atol=0.25)
    middle = c.at(x, (tail + head) / 2), c.at(y, (tail + head) / 2)
    assert_allclose(middle, (true_x[30], true_y[30]), atol=0.1)


def test_ends_scatter_as_their_errors_say():
    rng = np.random.default_rng(1)
    image, true_x, true_y = body(1e6)
    x, y, _ = c.extended(true_x, true_y, 0.0, 60.0, 7.0, 7.0)
    off, across, said = [], [], []
    for _ in range(60):
        noisy = (image + rng.normal(0, NOISE, image.shape)).astype(np.float32)
        px, py, tail, head, tail_sd, _ = measured(noisy, x, y, tail=7.0, head=67.0, usual=40.0)
        off.append(c.at(px, tail) - 30.0)
        across.append(c.at(py, (tail + head) / 2) - 40.0)
        said.append(tail_sd)
    # Amplitude 8 times the noise: the edge is known to about a third of the width.
    assert np.std(off) < 0.35
    assert abs(np.mean(off)) < 0.2
    assert 0.5 < np.std(off) / np.mean(said) < 2.0
    assert np.std(across) < 0.12


def test_others_light_is_taken_away():
    image, true_x, true_y = body(1e6)
    other = np.zeros_like(image)
    c.draw(other, np.full(60, 60.0), np.arange(10.0, 70.0), 0.0, 59.0, 40.0, WIDTH, 1.0)
    x, y, _ = c.extended(true_x, true_y + 0.3, 0.0, 60.0, 7.0, 7.0)
    width = c.profile_width(WIDTH)
    fits = [
        c.fit_centreline(picture, there, joint, x, y, 7.0, 67.0, width, NOISE, 400.0, 40.0)
        for picture, there, joint in ((image, NONE, False), (image + other, other, True))
    ]
    assert_allclose(fits[1][1], fits[0][1], atol=0.05)


def test_what_is_drawn_is_taken_away_exactly():
    image = np.zeros((40, 60), dtype=np.float32)
    x, y = np.linspace(5, 50, 46), np.linspace(10, 30, 46)
    c.draw(image, x, y, 3.2, 40.7, 25.0, 1.3, 1.0)
    assert 20 < image.max() < 30
    c.draw(image, x, y, 3.2, 40.7, 25.0, 1.3, -1.0)
    assert_allclose(image, 0, atol=1e-4)


def test_lit_interval_stops_at_a_dark_stretch():
    amplitude = np.full(100, 0.0)
    amplitude[20:60], amplitude[75:90] = 10.0, 10.0
    amplitude[40:43] = 0.0  # labels may be missing over a few pixels
    weight = np.ones(100)
    tail, head = c.lit_interval(amplitude, weight, 0.0, 30.0, 30.0, 99.0, 10.0)
    assert_allclose([tail, head], [19.5, 59.5])


def test_dark_stretch():
    amplitude, weight = np.full(80, 10.0), np.ones(80)
    assert c.dark_stretch(amplitude, weight, 5.0, 70.0, 10.0)[0] == 0
    amplitude[30:39] = 0.0
    length, middle = c.dark_stretch(amplitude, weight, 5.0, 70.0, 10.0)
    assert (length, middle) == (9, 34.0)
    weight[33:36] = 0.01  # something lies over it: nobody knows
    assert c.dark_stretch(amplitude, weight, 5.0, 70.0, 10.0)[0] == 3


def test_respaced_keeps_the_curve():
    s = np.sort(np.random.default_rng(2).uniform(0, 1.5, 400))
    x, y = 30 * np.cos(s), 30 * np.sin(s)
    new_x, new_y, way = c.respaced(x, y)
    assert_allclose(np.hypot(new_x, new_y), 30, atol=0.05)
    assert_allclose(np.hypot(np.diff(new_x), np.diff(new_y))[:-1], 1, atol=0.01)
    assert_allclose(way[-1], 30 * (s[-1] - s[0]), rtol=1e-3)


@pytest.mark.parametrize(
    ("point", "place", "across"),
    [((12.3, 7.0), 2.3, 2.0), ((5.0, 4.0), -5.0, -1.0), ((40.0, 5.0), 30.0, 0.0)],
)
def test_project(point, place, across):
    x, y = np.arange(10.0, 31.0), np.full(21, 5.0)
    found = c.project(x, y, *point)
    assert_allclose(found, (place, across), atol=1e-9)


def test_extended_goes_straight_on():
    x, y = np.arange(10.0, 31.0), np.full(21, 5.0)
    new_x, new_y, shift = c.extended(x, y, 2.0, 20.0, 4.0, 6.0)
    assert_allclose(new_x, np.arange(8.0, 37.0))
    assert_allclose(new_y, 5.0)
    assert shift == -2.0


def test_direction():
    s = np.arange(0, 60.0)
    assert_allclose(
        c.direction(30 * np.sin(s / 30), -30 * np.cos(s / 30), 15.0, 5.0), 0.5, atol=0.01
    )
