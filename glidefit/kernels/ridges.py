"""Bright lines in one frame: even background, noise, ridge strength, seeds, tracing.

A line has a Gaussian profile of standard deviation ``width_px`` across; lengths are pixels,
brightness is counts. Curves are (n,) arrays x (along columns) and y (along rows), a pixel apart.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any, NamedTuple

import numpy as np
from numba import njit
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Image = NDArray[np.float32]
Ints = NDArray[np.int64]

# Rounding to whole counts adds this variance.
_ROUNDING_VARIANCE = 1 / 12
# Pixels farther from the level of their block than this many times the noise are no background;
# a Gaussian cut there keeps this share of its variance.
_CLIP, _CLIPPED_VARIANCE = 2.5, 0.9112
# A hot pixel stands so far out of the noise, and its neighbours have less than this share of what
# a spot would give them.
_SPIKE_HEIGHT, _SPIKE_SHARE = 6.0, 0.55
# Half the distance over which second differences are taken, in widths of the smoothing.
_REACH = 1.33


class BlockStatistics(NamedTuple):
    """Background of a frame in square blocks, (rows, columns) arrays in counts."""

    level: Floats
    noise: Floats


@dataclass(frozen=True, slots=True, kw_only=True)
class LineScale:
    """At what scale lines are looked for."""

    width_px: float  # of a line's profile
    smooth_px: float  # of the Gaussian smoothing

    @classmethod
    def of_width(cls, width_px: float) -> LineScale:
        """Smoothing of 1.5 widths: what it gains along the line outweighs what it blurs."""
        if not width_px > 0:
            raise ValueError(f"width_px must be > 0, is {width_px:g}")
        return cls(width_px=width_px, smooth_px=1.5 * max(width_px, 0.8))

    @property
    def reach_px(self) -> int:
        """Whole pixels over which second differences are taken."""
        return max(1, round(_REACH * self.smooth_px))

    @property
    def noise_share(self) -> float:
        """Noise of a second difference of the smoothed frame, over the noise of a pixel.

        White noise smoothed by a Gaussian s has variance 1/(4πs²) and correlation
        ρ(d) = exp(-d²/4s²); that of ``2S(0) - S(d) - S(-d)`` is 6 - 8ρ(d) + 2ρ(2d).
        """
        s, d = self.smooth_px, self.reach_px
        near, far = (math.exp(-(k**2) / (4 * s**2)) for k in (d, 2 * d))
        return math.sqrt((6 - 8 * near + 2 * far) / (4 * math.pi)) / s


class RidgeFrame(NamedTuple):
    """One frame, made ready to look for lines."""

    contrast: Image  # (h, w) counts above the background, hot pixels taken out
    smooth: Image  # (h, w) the same, smoothed
    strength: Image  # (h, w) curvature across the most curved direction, over its noise
    noise: Floats  # noise of a pixel in blocks
    block_px: int
    hot: Ints  # (k, 2) rows and columns of hot pixels


def block_statistics(
    frame: Image, *, block_px: int, rounding: bool, before: BlockStatistics | None = None
) -> BlockStatistics:
    """Level and noise of the background in blocks, without what stands out.

    Means and standard deviations of every second pixel in both directions, without pixels that are
    2.5 times the noise off, smoothed over neighbouring blocks.

    Parameters
    ----------
    frame : (h, w) array
        Counts.
    block_px : int
        Side of a block, many line widths.
    rounding : bool
        Counts are whole numbers, so that a noise below that of rounding cannot be.
    before : BlockStatistics, optional
        Of the frame before, from which to start.
    """
    h, w = frame.shape
    rows, columns = max(1, round(h / block_px)), max(1, round(w / block_px))
    start = BlockStatistics(np.full((rows, columns), np.nan), np.full((rows, columns), np.nan))
    if before is not None and before.level.shape == (rows, columns):
        start = before
    level, noise = _clipped_blocks(frame, start.level, start.noise)
    least = max(1e-6 * float(np.abs(level).max()), float(np.finfo(np.float32).tiny))
    if rounding:
        least = max(least, math.sqrt(_ROUNDING_VARIANCE))
    return BlockStatistics(_weighted_of_nine(level), np.maximum(_median_of_nine(noise), least))


@njit(cache=True)
def _clipped_blocks(frame, level_before, noise_before):  # type: ignore[no-untyped-def]
    rows, columns = level_before.shape
    h, w = frame.shape
    level, noise = np.empty((rows, columns)), np.empty((rows, columns))
    for i in range(rows):
        y0, y1 = i * h // rows, (i + 1) * h // rows
        for j in range(columns):
            x0, x1 = j * w // columns, (j + 1) * w // columns
            middle, spread = level_before[i, j], noise_before[i, j]
            rounds = 2
            for attempt in range(2):
                if not (spread >= 0.0) or attempt == 1:
                    middle, spread = _middle_and_spread(frame[y0:y1:2, x0:x1:2])
                    rounds = 4
                total = 0
                for _ in range(rounds):
                    total, middle, spread = _clipped(frame, y0, y1, x0, x1, middle, spread)
                # So few inside mean that the light has changed since the frame before.
                if total * 8 > (y1 - y0) * (x1 - x0) or rounds == 4:
                    break
            level[i, j], noise[i, j] = middle, spread
    return level, noise


@njit(cache=True, fastmath=True)
def _clipped(frame, y0, y1, x0, x1, middle, spread):  # type: ignore[no-untyped-def]
    low, high = np.float32(middle - _CLIP * spread), np.float32(middle + _CLIP * spread)
    centre = np.float32(middle)
    n = 0
    s1 = np.float32(0.0)
    s2 = np.float32(0.0)
    for y in range(y0, y1, 2):
        row = frame[y]
        for x in range(x0, x1, 2):
            inside = (row[x] >= low) and (row[x] <= high)
            d = row[x] - centre if inside else np.float32(0.0)
            n += 1 if inside else 0
            s1 += d
            s2 += d * d
    if n == 0:
        return 0, middle, spread
    mean = s1 / n
    variance = s2 / n - mean * mean
    spread = math.sqrt(variance / _CLIPPED_VARIANCE) if variance > 0 else 0.0
    return n, middle + mean, spread


@njit(cache=True)
def _middle_and_spread(pixels):  # type: ignore[no-untyped-def]
    values = np.sort(pixels.copy().ravel())
    n = len(values)
    middle = float(values[n // 2])
    # The lower half has no filament in it.
    spread = (middle - float(values[int(0.1587 * n)])) if n > 3 else 0.0
    return middle, max(spread, 0.0)


def _weighted_of_nine(blocks: Floats) -> Floats:
    """Mean with weights 1, 2, 1 along both axes, straight on at the border."""
    for _ in range(2):
        if len(blocks) > 1:
            first, last = 2 * blocks[:1] - blocks[1:2], 2 * blocks[-1:] - blocks[-2:-1]
            wide = np.concatenate([first, blocks, last])
            blocks = 0.25 * (wide[:-2] + 2 * wide[1:-1] + wide[2:])
        blocks = blocks.T
    return np.ascontiguousarray(blocks)


@njit(cache=True)
def _median_of_nine(blocks):  # type: ignore[no-untyped-def]
    h, w = blocks.shape
    smooth = np.empty((h, w))
    for i in range(h):
        for j in range(w):
            near = blocks[max(0, i - 1) : i + 2, max(0, j - 1) : j + 2]
            smooth[i, j] = np.median(near.copy())
    return smooth


def ridge_frame(
    frame: NDArray[Any],
    *,
    scale: LineScale,
    blocks: BlockStatistics,
    block_px: int,
) -> RidgeFrame:
    """Contrast, smoothed contrast and strength of ridges of a frame.

    The strength is the largest second difference, over all directions, across which the smoothed
    frame is curved downwards, in multiples of its noise.

    Parameters
    ----------
    frame : (h, w) array
        Counts.
    scale : LineScale
        Of the lines.
    blocks : BlockStatistics
        Of this frame.
    block_px : int
        With which they were made.
    """
    contrast = _contrast(frame.astype(np.float32, copy=False), blocks.level)
    profile = scale.width_px**2 + 0.1
    hot = _take_out_spikes(contrast, blocks.noise, _SPIKE_SHARE * math.exp(-0.5 / profile))
    smooth = _smoothed(contrast, _gaussian(scale.smooth_px))
    strength = _strength(smooth, scale.reach_px, blocks.noise * scale.noise_share)
    return RidgeFrame(contrast, smooth, strength, blocks.noise, block_px, hot)


def _gaussian(width_px: float) -> Image:
    half = math.ceil(3.2 * width_px)
    taps = np.exp(-(np.arange(half + 1) ** 2) / (2 * width_px**2))
    taps /= taps[0] + 2 * taps[1:].sum()
    return taps.astype(np.float32)


@njit(cache=True)
def _between(n, blocks):  # type: ignore[no-untyped-def]
    """Of pixels (n,): the first of two blocks, and the way from its centre to the other's."""
    first = np.zeros(n, dtype=np.int64)
    way = np.zeros(n, dtype=np.float32)
    if blocks == 1:
        return first, way
    for x in range(n):
        place = (x + 0.5) * blocks / n - 0.5
        first[x] = min(max(math.floor(place), 0), blocks - 2)
        way[x] = min(max(place - first[x], -0.5), 1.5)
    return first, way


@njit(cache=True, fastmath=True)
def _contrast(frame, level):  # type: ignore[no-untyped-def]
    h, w = frame.shape
    rows, columns = level.shape
    fy, wy = _between(h, rows)
    fx, wx = _between(w, columns)
    out = np.empty((h, w), dtype=np.float32)
    wide = np.empty((rows, w), dtype=np.float32)
    last = columns - 1
    for i in range(rows):
        for x in range(w):
            a, b = level[i, fx[x]], level[i, min(fx[x] + 1, last)]
            wide[i, x] = a + (b - a) * wx[x]
    for y in range(h):
        upper, lower, way = wide[fy[y]], wide[min(fy[y] + 1, rows - 1)], wy[y]
        source, target = frame[y], out[y]
        for x in range(w):
            target[x] = source[x] - upper[x] - way * (lower[x] - upper[x])
    return out


@njit(cache=True)
def _take_out_spikes(contrast, noise, share):  # type: ignore[no-untyped-def]
    """Replace single pixels that stand out alone by the mean of their neighbours."""
    h, w = contrast.shape
    rows, columns = noise.shape
    lowest = np.float32(_SPIKE_HEIGHT * noise.min())
    hot = np.empty((256, 2), dtype=np.int64)
    n = 0
    for y in range(h):
        row = contrast[y]
        for x in range(w):
            v = row[x]
            if v <= lowest or v <= _SPIKE_HEIGHT * noise[y * rows // h, x * columns // w]:
                continue
            beside, total, count = np.float32(-1e30), 0.0, 0
            for a in range(max(0, y - 1), min(h, y + 2)):
                for b in range(max(0, x - 1), min(w, x + 2)):
                    if a != y or b != x:
                        beside = max(beside, contrast[a, b])
                        total += contrast[a, b]
                        count += 1
            if beside < share * v:
                contrast[y, x] = total / count
                if n < len(hot):
                    hot[n, 0], hot[n, 1] = y, x
                    n += 1
    return hot[:n].copy()


@njit(cache=True, fastmath=True)
def _smoothed(image, taps):  # type: ignore[no-untyped-def]
    """Separable, zero outside; rows are smoothed once into a ring that stays in the cache."""
    h, w = image.shape
    half = len(taps) - 1
    size = 2 * half + 1
    ring = np.zeros((size, w), dtype=np.float32)
    out = np.empty((h, w), dtype=np.float32)
    padded = np.zeros(w + 2 * half, dtype=np.float32)
    for y in range(h + half):
        here = ring[y % size]
        if y < h:
            padded[half : half + w] = image[y]
            middle = padded[half : half + w]
            for x in range(w):
                here[x] = taps[0] * middle[x]
            for k in range(1, half + 1):
                left, right, t = padded[half - k :], padded[half + k :], taps[k]
                for x in range(w):
                    here[x] += t * (left[x] + right[x])
        else:
            here[:] = 0
        z = y - half
        if z < 0:
            continue
        target, centre = out[z], ring[z % size]
        for x in range(w):
            target[x] = taps[0] * centre[x]
        for k in range(1, half + 1):
            above, below, t = ring[(z - k) % size], ring[(z + k) % size], taps[k]
            for x in range(w):
                target[x] += t * (above[x] + below[x])
    return out


@njit(cache=True, fastmath=True)
def _strength(smooth, d, noise):  # type: ignore[no-untyped-def]
    h, w = smooth.shape
    rows, columns = noise.shape
    out = np.zeros((h, w), dtype=np.float32)
    inverse = np.empty(w, dtype=np.float32)
    for y in range(d, h - d):
        for x in range(w):
            inverse[x] = 1.0 / noise[y * rows // h, x * columns // w]
        n = w - 2 * d
        a0, a1, a2 = smooth[y - d], smooth[y], smooth[y + d]
        target = out[y, d : w - d]
        scale = inverse[d : w - d]
        l0, l1, l2 = a0[:n], a1[:n], a2[:n]
        m0, m1, m2 = a0[d : d + n], a1[d : d + n], a2[d : d + n]
        r0, r1, r2 = a0[2 * d :], a1[2 * d :], a2[2 * d :]
        for x in range(n):
            two = np.float32(2) * m1[x]
            xx = l1[x] + r1[x] - two
            yy = m0[x] + m2[x] - two
            xy = np.float32(0.25) * (l0[x] + r2[x] - l2[x] - r0[x])
            half = np.float32(0.5) * (xx - yy)
            target[x] = scale[x] * (np.sqrt(half * half + xy * xy) - np.float32(0.5) * (xx + yy))
    return out


@njit(cache=True)
def find_seeds(strength, owner, height):  # type: ignore[no-untyped-def]
    """Local maxima of the strength above a height that nobody owns, strongest first.

    Parameters
    ----------
    strength : (h, w) array
    owner : (h, w) array of int32
        0 where there is nothing known.
    height : float
        In multiples of the noise.

    Returns
    -------
    (n, 2) array of int
        Rows and columns.
    """
    h, w = strength.shape
    size = 1024
    seeds = np.empty((size, 2), dtype=np.int64)
    value = np.empty(size)
    n = 0
    for y in range(1, h - 1):
        row = strength[y]
        for x in range(1, w - 1):
            v = row[x]
            if v <= height or owner[y, x] != 0:
                continue
            if (
                v < row[x - 1]
                or v <= row[x + 1]
                or v < strength[y - 1, x]
                or v <= strength[y + 1, x]
                or v < strength[y - 1, x - 1]
                or v <= strength[y + 1, x + 1]
                or v < strength[y - 1, x + 1]
                or v <= strength[y + 1, x - 1]
            ):
                continue
            if n == size:
                size *= 2
                more, values = np.empty((size, 2), dtype=np.int64), np.empty(size)
                more[:n], values[:n] = seeds, value
                seeds, value = more, values
            seeds[n, 0], seeds[n, 1], value[n] = y, x, v
            n += 1
    order = np.argsort(-value[:n], kind="mergesort")
    return seeds[:n][order]


@njit(cache=True, inline="always")
def bilinear(image, x, y):  # type: ignore[no-untyped-def]
    """Value between pixels; that of the nearest pixel outside the frame."""
    h, w = image.shape
    x = min(max(x, 0.0), w - 1.001)
    y = min(max(y, 0.0), h - 1.001)
    i, j = int(y), int(x)
    b, a = y - i, x - j
    return (image[i, j] * (1 - a) + image[i, j + 1] * a) * (1 - b) + (
        image[i + 1, j] * (1 - a) + image[i + 1, j + 1] * a
    ) * b


@njit(cache=True)
def _across(smooth, x, y, ux, uy, d):  # type: ignore[no-untyped-def]
    """Second difference across direction u, positive on a ridge along it."""
    return (
        2 * bilinear(smooth, x, y)
        - bilinear(smooth, x - d * uy, y + d * ux)
        - bilinear(smooth, x + d * uy, y - d * ux)
    )


@njit(cache=True)
def ridge_direction(smooth, x, y, d):  # type: ignore[no-untyped-def]
    """Direction of the ridge through a point in rad, its sign arbitrary, and how alone it is.

    The second number is 1 minus the strength of the strongest other direction over that of the
    best, from about 1 on a single line down to 0 where two cross.
    """
    n = 18
    total = np.zeros(n)
    for k in range(n):
        c, s = math.cos(math.pi * k / n), math.sin(math.pi * k / n)
        for j in range(-4, 5):
            total[k] += _across(smooth, x + j * c, y + j * s, c, s, d)
    best = int(np.argmax(total))
    other = -1e30
    for k in range(n):
        apart = abs(k - best)
        if min(apart, n - apart) >= 4:
            other = max(other, total[k])
    alone = 1 - max(other, 0.0) / max(total[best], 1e-9)
    left, right = total[(best - 1) % n], total[(best + 1) % n]
    curve = 2 * total[best] - left - right
    shift = 0.5 * (right - left) / curve if curve > 1e-9 else 0.0
    return math.pi * (best + shift) / n, alone


_TURNS = np.array([-0.36, -0.24, -0.12, 0.0, 0.12, 0.24, 0.36])
_AHEAD = 9  # pixels that are looked ahead
_BACK = 9  # and back, to know the direction
# What the sharpest of the turns costs: so much, and this share of the ridge's strength.
_TURN_COST, _TURN_SHARE = 1.5, 0.4


@njit(cache=True)
def _ahead(smooth, x, y, angle, d):  # type: ignore[no-untyped-def]
    """Mean second difference over the next pixels in a direction, the near ones counting more."""
    c, s = math.cos(angle), math.sin(angle)
    total, norm = 0.0, 0.0
    for j in range(1, _AHEAD + 1):
        weight = 1.0 - 0.06 * j
        total += weight * _across(smooth, x + j * c, y + j * s, c, s, d)
        norm += weight
    return total / norm


@njit(cache=True)
def trace(smooth, owner, x, y, angle, d, unit, low, steps, blind):  # type: ignore[no-untyped-def]
    """Follow a ridge from a point in one direction, a pixel a step.

    The direction is that of the last pixels; each step may turn a little to where the next pixels
    are stronger, less what turning costs, so that at a crossing the ridge goes straight on. Where
    it fades it goes straight on for up to ``blind`` steps before it gives up, over what is owned
    already twice as far.

    Parameters
    ----------
    smooth : (h, w) array
    owner : (h, w) array of int32
    x, y, angle : float
        Where to start and in which direction.
    d : int
        Reach of second differences.
    unit : float
        Noise of a second difference.
    low : float
        Strength, over its noise, below which the ridge counts as faded.
    steps, blind : int
        Most steps, and most of them in a row without a ridge.

    Returns
    -------
    (n, 2) array
        x and y of the points after the start.
    """
    h, w = smooth.shape
    path = np.empty((steps + 1, 2))
    path[0, 0], path[0, 1] = x, y
    good, n, lost, hidden = 0, 0, 0, 0
    scores = np.empty(len(_TURNS))
    while n < steps:
        straight = _ahead(smooth, x, y, angle, d) / unit
        price = _TURN_COST + _TURN_SHARE * max(straight, 0.0)
        best = 0
        here = 0.0
        for k in range(len(_TURNS)):
            found = straight
            if _TURNS[k] != 0.0:
                found = _ahead(smooth, x, y, angle + _TURNS[k], d) / unit
            scores[k] = found - price * (_TURNS[k] / 0.36) ** 2
            if k == 0 or scores[k] > scores[best]:
                best, here = k, found
        turn = _TURNS[best]
        if 0 < best < len(_TURNS) - 1:
            curve = 2 * scores[best] - scores[best - 1] - scores[best + 1]
            if curve > 1e-9:
                turn += 0.06 * (scores[best + 1] - scores[best - 1]) / curve
        i, j = int(y + 0.5), int(x + 0.5)
        taken = 0 <= i < h and 0 <= j < w and owner[i, j] != 0
        if taken or here < low:
            lost += 1
            hidden += 1 if taken else 0
            turn = 0.0
        else:
            lost, hidden = 0, 0
        if lost - hidden > blind or hidden > 2 * blind:
            break
        c, s = math.cos(angle + 0.4 * turn), math.sin(angle + 0.4 * turn)
        x, y = x + c, y + s
        if not (0 <= x <= w - 1 and 0 <= y <= h - 1):
            break
        if lost == 0:
            left = bilinear(smooth, x + s, y - c)
            right = bilinear(smooth, x - s, y + c)
            centre = bilinear(smooth, x, y)
            curve = 2 * centre - left - right
            if curve > 0.3 * unit:
                shift = min(max(0.5 * (right - left) / curve, -0.3), 0.3)
                x, y = x - s * shift, y + c * shift
        n += 1
        path[n, 0], path[n, 1] = x, y
        if lost == 0:
            good = n
            back = min(n, _BACK)
            recent = math.atan2(y - path[n - back, 1], x - path[n - back, 0])
            # A chord shows the direction half its length ago.
            ahead = math.atan2(math.sin(recent - angle), math.cos(recent - angle))
            share = back / (2.0 * _BACK)
            angle += share * ahead + 0.4 * (1 - share) * turn
    return path[1 : good + 1].copy()


@njit(cache=True)
def own(owner, x, y, radius, mark):  # type: ignore[no-untyped-def]
    """Mark the pixels within a radius of a curve."""
    h, w = owner.shape
    r = math.ceil(radius)
    for k in range(len(x)):
        j, i = int(x[k] + 0.5), int(y[k] + 0.5)
        for v in range(max(0, i - r), min(h, i + r + 1)):
            for u in range(max(0, j - r), min(w, j + r + 1)):
                if (v - y[k]) ** 2 + (u - x[k]) ** 2 <= radius * radius:
                    owner[v, u] = mark


@njit(cache=True)
def owned_share(owner, x, y):  # type: ignore[no-untyped-def]
    """Share of a curve's points that lie on owned pixels."""
    h, w = owner.shape
    n = 0
    for k in range(len(x)):
        j, i = int(x[k] + 0.5), int(y[k] + 0.5)
        if 0 <= i < h and 0 <= j < w and owner[i, j] != 0:
            n += 1
    return n / max(len(x), 1)
