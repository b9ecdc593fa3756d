"""Image arithmetic of one frame with spots: background, noise, significance, sub-pixel fit.

A spot is a Gaussian of standard deviation ``width_px``; lengths are pixels, brightness is counts.
"""

from __future__ import annotations

import math
from typing import Any, NamedTuple

import numpy as np
from numba import njit
from numpy.typing import NDArray
from scipy import ndimage

Floats = NDArray[np.float64]
Image = NDArray[np.float32]
Mask = NDArray[np.bool_]

# Pixels above this many times the noise, and those around them, say nothing about the noise.
_SPOT_HEIGHT = 4.0
# Rounding to whole counts adds this variance.
_ROUNDING_VARIANCE = 1 / 12
# Fewer looks than frames usually have: at 5 hardly one empty frame in 500 has a false spot.
_REFERENCE_LOOKS = 140.0


def frame_fault(frame: NDArray[Any], shape: tuple[int, ...] | None) -> tuple[str, str] | None:
    """What is wrong with a frame and what was expected; None if it can be used.

    Parameters
    ----------
    frame : array
        One frame as it was read.
    shape : tuple of int or None
        Of the frames before.
    """
    if frame.ndim != 2 or frame.dtype.kind not in "uif" or min(frame.shape) < 3:
        found = f"an array of {frame.dtype} with shape {frame.shape}"
        return found, "one channel of grey values, height × width"
    if shape is not None and frame.shape != shape:
        return f"shape {frame.shape}", f"{shape} as in the frames before"
    if frame.dtype.kind == "f" and not np.all(np.isfinite(frame)):
        return "pixels without a finite value", "a number in every pixel"
    return None


class FilteredFrame(NamedTuple):
    """One frame, made ready to look for spots."""

    contrast: Image  # (h, w), counts above the local background
    significance: Image  # (h, w), filtered contrast over its local noise
    noise: Image  # (h, w), standard deviation of a pixel of empty background, in counts
    background: float  # median, in counts
    skewness: float  # of the significance where there are no spots, >= 0
    looks: float  # as if so many independent places were looked at


def filter_frame(frame: NDArray[Any], *, width_px: float, block_px: int) -> FilteredFrame:
    """Contrast, significance and noise of a frame with spots and uneven illumination.

    The background is interpolated between the means of blocks without their spots. The variance
    is a straight line in the background over the frame, as photon noise and a camera's noise
    together are, so that the noise is known everywhere from all of the frame.

    Parameters
    ----------
    frame : (h, w) array
        Counts, finite.
    width_px : float
        Standard deviation of the Gaussian filter, best that of a spot, > 0.
    block_px : int
        Side of a block, some spot diameters.

    Returns
    -------
    FilteredFrame
        Of a frame without any noise the significance is zero where the contrast is.
    """
    level = float(np.median(frame))
    image = (frame - level).astype(np.float32)
    weight = 4 * math.pi * width_px**2  # white noise loses so much of its variance in the filter
    near = round(3 * width_px)

    everything = np.zeros(image.shape, dtype=np.bool_)
    first = _background(image, everything, block_px=block_px)
    filtered = _smoothed(image - first, width_px=width_px)
    spread = float(np.median(np.abs(filtered[::3, ::3]))) / 0.6745
    spots = _around(filtered, _SPOT_HEIGHT * spread, near)

    background = _background(image, spots, block_px=block_px)
    filtered += (first - background) * _border(image.shape, width_px=width_px)
    rounding = _ROUNDING_VARIANCE / weight if np.issubdtype(frame.dtype, np.integer) else 0.0
    least = max(rounding, _negligible(filtered))
    variance = _variance_line(filtered, background, spots, block_px=block_px, least=least)
    # Where the light is strong, noise was taken for spots so far.
    spots = _around(filtered / np.sqrt(variance), _SPOT_HEIGHT, near)
    variance = _variance_line(filtered, background, spots, block_px=block_px, least=least)

    contrast: Image = image - background
    significance = (filtered / np.sqrt(variance)).astype(np.float32)
    seen = _Empty(*_moments(contrast, filtered, significance, spots))
    return FilteredFrame(
        contrast=contrast,
        significance=significance,
        noise=np.sqrt(variance * (seen.noise_ratio or weight)),
        background=level,
        skewness=seen.skewness(width_px),
        looks=image.size / (2 * width_px**2 * (2 * math.pi) ** 1.5),
    )


def detection_height(threshold: float, *, looks: float, skewness: float = 0.0) -> float:
    """Significance that a spot must reach so that ``threshold`` means the same in every frame.

    Noise alone rises above u in ``looks u exp(-u²/2)`` places of a frame. In a larger frame u is
    raised, ``u² = threshold² + 2 ln(looks / 140)``, to let through as few false spots a frame as
    ``threshold`` does in 140 looks: of empty simulated frames 0.3 at 4, 0.002 at 5.
    Photon noise in the dark reaches higher than Gaussian noise: with its skewness γ, a gamma
    distribution is as rarely above ``(2/γ) ((1 + γu/6 - γ²/36)³ - 1)``.

    References
    ----------
    Adler, The Geometry of Random Fields (1981), on maxima of Gaussian fields, from memory;
    Wilson & Hilferty, Proc. Natl Acad. Sci. 17, 684 (1931), from memory.
    """
    height = math.sqrt(threshold**2 + 2 * math.log(max(1.0, looks / _REFERENCE_LOOKS)))
    if skewness < 1e-6:
        return height
    return 2 / skewness * ((1 + skewness * height / 6 - skewness**2 / 36) ** 3 - 1)


def _smoothed(image: Image, *, width_px: float) -> Image:
    # Zero outside: towards the border a spot and the noise both fade, so neither is invented.
    smoothed: Image = ndimage.gaussian_filter(image, width_px, mode="constant", truncate=3.5)
    return smoothed


def _border(shape: tuple[int, ...], *, width_px: float) -> Image:
    """What the filter makes of ones: less towards the border."""
    rows, columns = (_smoothed(np.ones(n, dtype=np.float32), width_px=width_px) for n in shape)
    border: Image = np.multiply.outer(rows, columns)
    return border


def _negligible(filtered: Image) -> float:
    """A variance that stands for none."""
    largest = float(np.max(np.abs(filtered)))
    return (1e-6 * largest) ** 2 or float(np.finfo(np.float32).tiny)


def _background(image: Image, spots: Mask, *, block_px: int) -> Image:
    """Mean of the pixels outside spots of each block, interpolated between blocks."""
    rows, columns = (_block_edges(n, block_px) for n in image.shape)
    count, total = _block_sums(image, spots, rows, columns)
    # A block that is all spot takes the level of its neighbours, or of the frame.
    beside, beside_total = (ndimage.uniform_filter(a, 3, mode="nearest") for a in (count, total))
    mean = total.sum() / max(count.sum(), 1.0)
    level = (total + 0.1 * beside_total + 1e-6 * mean) / (count + 0.1 * beside + 1e-6)
    places = *_places(image.shape[0], rows), *_places(image.shape[1], columns)
    background: Image = _interpolated(level, *places)
    return background


def _block_edges(n: int, block_px: int) -> NDArray[np.int64]:
    blocks = max(1, round(n / block_px))
    return np.round(np.linspace(0, n, blocks + 1)).astype(np.int64)


def _places(n: int, edges: NDArray[np.int64]) -> tuple[NDArray[np.int64], Floats]:
    """Of pixels (n,): the first of two blocks, and the way from its centre to the other's.

    Before the first centre and after the last one the way is < 0 or > 1.
    """
    centres = (edges[:-1] + edges[1:] - 1) / 2
    if len(centres) == 1:
        return np.zeros(n, dtype=np.int64), np.zeros(n)
    first = np.clip(np.searchsorted(centres, np.arange(n)) - 1, 0, len(centres) - 2)
    return first, (np.arange(n) - centres[first]) / (centres[first + 1] - centres[first])


@njit(cache=True)
def _interpolated(level, rows, down, columns, right):  # type: ignore[no-untyped-def]
    """Bilinear interpolation of blocks, straight on at the border."""
    result = np.empty((len(rows), len(columns)), dtype=np.float32)
    last = (level.shape[0] - 1, level.shape[1] - 1)
    for y in range(len(rows)):
        i, below = rows[y], min(rows[y] + 1, last[0])
        for x in range(len(columns)):
            j, beside = columns[x], min(columns[x] + 1, last[1])
            upper = level[i, j] * (1 - right[x]) + level[i, beside] * right[x]
            lower = level[below, j] * (1 - right[x]) + level[below, beside] * right[x]
            result[y, x] = upper * (1 - down[y]) + lower * down[y]
    return result


@njit(cache=True)
def _block_sums(image, spots, rows, columns):  # type: ignore[no-untyped-def]
    """Number of pixels outside spots, and their sum, for each block."""
    shape = (len(rows) - 1, len(columns) - 1)
    count, total = np.zeros(shape), np.zeros(shape)
    for i in range(shape[0]):
        for y in range(rows[i], rows[i + 1]):
            for j in range(shape[1]):
                for x in range(columns[j], columns[j + 1]):
                    if not spots[y, x]:
                        count[i, j] += 1
                        total[i, j] += image[y, x]
    return count, total


@njit(cache=True)
def _around(image, height, radius):  # type: ignore[no-untyped-def]
    """Pixels within a radius of one that is above a height."""
    h, w = image.shape
    found = np.zeros((h, w), dtype=np.bool_)
    for y in range(h):
        for x in range(w):
            if image[y, x] > height:
                for v in range(max(0, y - radius), min(h, y + radius + 1)):
                    for u in range(max(0, x - radius), min(w, x + radius + 1)):
                        if (v - y) ** 2 + (u - x) ** 2 <= radius**2:
                            found[v, u] = True
    return found


def _variance_line(
    filtered: Image, background: Image, spots: Mask, *, block_px: int, least: float
) -> Image:
    """Variance of the filtered frame at each pixel, a straight line in the background."""
    rows, columns = (_block_edges(n, block_px) for n in filtered.shape)
    count, total = _block_sums(filtered * filtered, spots, rows, columns)
    _, level = _block_sums(background, spots, rows, columns)
    usable = count > 0.25 * block_px**2
    if not usable.any():  # spots everywhere: the middle of the values must do
        middle = float(np.median(np.abs(filtered))) / 0.6745
        return np.full(filtered.shape, max(middle**2, least), dtype=np.float32)
    variance, level = total[usable] / count[usable], level[usable] / count[usable]
    slope, mean_level, mean = _robust_line(level, variance)
    line = mean + slope * (np.clip(background, level.min(), level.max()) - mean_level)
    variances: Image = np.maximum(line, max(0.1 * mean, least)).astype(np.float32)
    return variances


def _robust_line(x: Floats, y: Floats) -> tuple[float, float, float]:
    """Slope, mean x and mean y of a line; scatter in proportion to y, without points far off."""
    weight = np.ones(len(x))
    slope = mean_x = mean_y = 0.0
    for _ in range(4):
        mean_x, mean_y = float(np.average(x, weights=weight)), float(np.average(y, weights=weight))
        dx = x - mean_x
        spread = float(np.sum(weight * dx**2))
        slope = float(np.sum(weight * dx * (y - mean_y))) / spread if spread > 0 else 0.0
        line = np.maximum(mean_y + slope * dx, 0.1 * mean_y)
        off = np.abs(y - line) / line if mean_y > 0 else np.zeros(len(x))
        weight = np.where(off <= 6 * np.median(off), (mean_y / line) ** 2 if mean_y > 0 else 1, 0)
    return slope, mean_x, mean_y


class _Empty(NamedTuple):
    """Number of pixels without spots and their sums of squares and cubes."""

    n: float
    contrast_2: float
    contrast_3: float
    filtered_2: float
    significance_2: float
    significance_3: float

    @property
    def noise_ratio(self) -> float:
        """Variance of a pixel over that of the filtered frame."""
        return float(self.contrast_2 / self.filtered_2) if self.filtered_2 > 0 else 0.0

    def skewness(self, width_px: float) -> float:
        """Skewness of the significance, as seen there and as it follows from the pixels."""
        if not (self.contrast_2 > 0 and self.significance_2 > 0):
            return 0.0
        pixels = self.contrast_3 * math.sqrt(self.n) / self.contrast_2**1.5
        direct = self.significance_3 * math.sqrt(self.n) / self.significance_2**1.5
        # The filter, a Gaussian h, leaves Σh³/(Σh²)^1.5 of the skewness of independent pixels;
        # seen directly it lacks its own highest values, but holds for any noise.
        return float(max(0.0, pixels * 2 / (3 * math.sqrt(math.pi) * width_px), direct))


@njit(cache=True)
def _moments(contrast, filtered, significance, spots):  # type: ignore[no-untyped-def]
    n = c2 = c3 = f2 = s2 = s3 = 0.0
    for y in range(contrast.shape[0]):
        for x in range(contrast.shape[1]):
            if not spots[y, x]:
                c, f, s = float(contrast[y, x]), float(filtered[y, x]), float(significance[y, x])
                n += 1
                c2 += c * c
                c3 += c * c * c
                f2 += f * f
                s2 += s * s
                s3 += s * s * s
    return n, c2, c3, f2, s2, s3


class FittedSpots(NamedTuple):
    """Spots of a frame after the fit; every array (n,)."""

    x_px: Floats
    y_px: Floats
    amplitude: Floats  # counts at the centre above the background
    amplitude_sd: Floats  # counts
    precision_px: Floats  # standard deviation of each coordinate
    width_px: Floats  # the width that this spot alone would have, NaN if it cannot tell
    excess: Floats  # (n, 2): sums whose ratio is the variance per count of a spot's light
    spike: Floats  # highest that a pixel at the centre stands above the fit, over the amplitude


def fit_spots(
    filtered: FilteredFrame,
    x_px: Floats,
    y_px: Floats,
    *,
    width_px: float,
    half_px: int,
    gain: float,
) -> FittedSpots:
    """Positions and amplitudes of spots, all fitted together.

    Weighted least squares with the variance ``noise² + gain model`` of each pixel, iterated; for
    photon noise this is maximum likelihood. Each spot has its own background level, and is fitted
    to what its neighbours leave, in turns until nothing moves.

    Parameters
    ----------
    filtered : FilteredFrame
        The frame.
    x_px, y_px : (n,) arrays
        Where to start, inside the frame, within about a width of the spots.
    width_px : float
        Standard deviation of the spots' Gaussian.
    half_px : int
        A spot is fitted to the pixels up to so far from its start in x and in y.
    gain : float
        Variance per count of the spots' own light, >= 0.

    Returns
    -------
    FittedSpots
        Precisions are those of the fit at its end (Cramér-Rao), larger for a spot that is no
        Gaussian. A spot that left its window or has no brightness has amplitude 0 and precision
        inf.

    References
    ----------
    Mortensen et al., Nat. Methods 7, 377 (2010): the likelihood and what it can reach.
    """
    spots = np.zeros((len(x_px), 4))
    spots[:, 0], spots[:, 1] = x_px, y_px
    column, row = np.rint(x_px).astype(np.int64), np.rint(y_px).astype(np.int64)
    sd = filtered.noise[row, column].astype(np.float64)
    spots[:, 2] = np.maximum(filtered.contrast[row, column], sd)
    scene = _Scene(
        contrast=filtered.contrast.astype(np.float64),
        residual=filtered.contrast.astype(np.float64),
        gain=float(gain),
        width=float(width_px),
        half=int(half_px),
    )
    windows = _Windows(column=column, row=row, variance=sd**2)
    quality = np.full((len(x_px), 7), np.nan)
    _fit_in_turns(scene, windows, spots, quality)
    return FittedSpots(
        x_px=spots[:, 0],
        y_px=spots[:, 1],
        amplitude=spots[:, 2],
        amplitude_sd=quality[:, 1],
        precision_px=quality[:, 0],
        width_px=width_px + quality[:, 2] / quality[:, 3],
        excess=quality[:, 4:6],
        spike=quality[:, 6],
    )


_SWEEPS = 40
_STILL = 1e-3  # px, a spot that moves less in a turn stands still


class _Scene(NamedTuple):
    """What all fits of a frame share."""

    contrast: Floats  # (h, w)
    residual: Floats  # (h, w), contrast without the models of all spots
    gain: float
    width: float
    half: int


class _Windows(NamedTuple):
    """Centre of each spot's window and variance of a dark pixel there, (n,) arrays."""

    column: NDArray[np.int64]
    row: NDArray[np.int64]
    variance: Floats


class _Equations(NamedTuple):
    """Weighted normal equations of one spot: x, y, amplitude, level, and last the width."""

    normal: Floats  # (5, 5)
    score: Floats  # (5,)
    covariance: Floats  # (4, 4), inverse of the normal matrix without the width


@njit(cache=True)
def _add(scene, spot, sign):  # type: ignore[no-untyped-def]
    """Add a spot's model to the residual, or take it away."""
    h, w = scene.residual.shape
    reach = scene.half + 2
    x0, y0 = int(np.rint(spot[0])), int(np.rint(spot[1]))
    for y in range(max(0, y0 - reach), min(h, y0 + reach + 1)):
        gy = sign * spot[2] * math.exp(-((y - spot[1]) ** 2) / (2 * scene.width**2))
        for x in range(max(0, x0 - reach), min(w, x0 + reach + 1)):
            gx = math.exp(-((x - spot[0]) ** 2) / (2 * scene.width**2))
            scene.residual[y, x] += gx * gy


@njit(cache=True)
def _slopes(spot, x, y, width, slopes):  # type: ignore[no-untyped-def]
    """Derivatives of a pixel by x, y, amplitude, level and width; returns the Gaussian."""
    dx, dy = x - spot[0], y - spot[1]
    g = math.exp(-(dx * dx + dy * dy) / (2 * width * width))
    slopes[0] = spot[2] * g * dx / width**2
    slopes[1] = spot[2] * g * dy / width**2
    slopes[2] = g
    slopes[3] = 1.0
    slopes[4] = spot[2] * g * (dx * dx + dy * dy) / width**3
    return g


@njit(cache=True)
def _set_up(scene, windows, k, spot, equations):  # type: ignore[no-untyped-def]
    """Fill in the equations of spot k."""
    h, w = scene.residual.shape
    half, x0, y0 = scene.half, windows.column[k], windows.row[k]
    normal, score, slopes = equations.normal, equations.score, np.empty(5)
    for i in range(5):
        score[i] = 0.0
        for j in range(5):
            normal[i, j] = 0.0
    for y in range(max(0, y0 - half), min(h, y0 + half + 1)):
        for x in range(max(0, x0 - half), min(w, x0 + half + 1)):
            _slopes(spot, x, y, scene.width, slopes)
            light = max(0.0, scene.contrast[y, x] - scene.residual[y, x])
            weight = 1.0 / (windows.variance[k] + scene.gain * light)
            off = scene.residual[y, x] - spot[3]
            for i in range(5):
                score[i] += weight * off * slopes[i]
                for j in range(5):
                    normal[i, j] += weight * slopes[i] * slopes[j]
    for i in range(5):  # keeps a spot without brightness solvable
        normal[i, i] = normal[i, i] * (1 + 1e-9) + 1e-12
    _invert(normal, equations.covariance)


@njit(cache=True)
def _invert(normal, inverse):  # type: ignore[no-untyped-def]
    """Inverse (4, 4) of the first rows and columns, positive definite (Gauss and Jordan)."""
    work = np.empty((4, 4))
    for i in range(4):
        for j in range(4):
            work[i, j] = normal[i, j]
            inverse[i, j] = 1.0 if i == j else 0.0
    for k in range(4):
        pivot = work[k, k]
        for j in range(4):
            work[k, j] /= pivot
            inverse[k, j] /= pivot
        for i in range(4):
            if i != k:
                factor = work[i, k]
                for j in range(4):
                    work[i, j] -= factor * work[k, j]
                    inverse[i, j] -= factor * inverse[k, j]


@njit(cache=True)
def _times(matrix, vector):  # type: ignore[no-untyped-def]
    """Matrix (4, 4) times the first four of a vector."""
    result = np.zeros(4)
    for i in range(4):
        for j in range(4):
            result[i] += matrix[i, j] * vector[j]
    return result


@njit(cache=True)
def _fit_in_turns(scene, windows, spots, quality):  # type: ignore[no-untyped-def]
    """Fit spots (n, 4: x, y, amplitude, level) in turns; quality (n, 7) as `_assess` has it."""
    equations = _Equations(np.empty((5, 5)), np.empty(5), np.empty((4, 4)))
    for k in range(len(spots)):
        _add(scene, spots[k], -1.0)
    for _ in range(_SWEEPS):
        farthest = 0.0
        for k in range(len(spots)):
            if spots[k, 2] > 0:
                farthest = max(farthest, _improve(scene, windows, k, spots[k], equations))
        if farthest < _STILL:
            break
    for k in range(len(spots)):
        if spots[k, 2] > 0:
            _assess(scene, windows, k, spots[k], equations, quality[k])
        else:
            quality[k, 0] = quality[k, 1] = np.inf


@njit(cache=True)
def _improve(scene, windows, k, spot, equations):  # type: ignore[no-untyped-def]
    """One step of the fit of spot k, which it returns the length of; amplitude 0 if it is lost."""
    _set_up(scene, windows, k, spot, equations)
    step = _times(equations.covariance, equations.score)
    longest = max(abs(step[0]), abs(step[1]))
    shorten = min(1.0, scene.width / 2 / longest) if longest > 0 else 1.0
    _add(scene, spot, 1.0)
    for i in range(4):
        spot[i] += step[i] * (shorten if i < 2 else 1.0)
    away = max(abs(spot[0] - windows.column[k]), abs(spot[1] - windows.row[k]))
    if away > scene.half or spot[2] <= 0:
        spot[2] = 0.0
    _add(scene, spot, -1.0)
    return longest


@njit(cache=True)
def _assess(scene, windows, k, spot, equations, quality):  # type: ignore[no-untyped-def]
    """Precision, amplitude error, width's score and information, excess and light, spike."""
    _set_up(scene, windows, k, spot, equations)
    covariance, variance = equations.covariance, windows.variance[k]
    quality[0] = math.sqrt((covariance[0, 0] + covariance[1, 1]) / 2)
    quality[1] = math.sqrt(covariance[2, 2])
    # The width, when everything else follows it.
    along = _times(covariance, equations.normal[4])
    quality[2], quality[3] = equations.score[4], equations.normal[4, 4]
    for i in range(4):
        quality[2] -= along[i] * equations.score[i]
        quality[3] -= along[i] * equations.normal[i, 4]
    quality[4] = quality[5] = quality[6] = 0.0
    pixels, misfit, slopes = 0, 0.0, np.empty(5)
    h, w = scene.residual.shape
    half, x0, y0 = scene.half, windows.column[k], windows.row[k]
    for y in range(max(0, y0 - half), min(h, y0 + half + 1)):
        for x in range(max(0, x0 - half), min(w, x0 + half + 1)):
            g = _slopes(spot, x, y, scene.width, slopes)
            off = scene.residual[y, x] - spot[3]
            light = max(0.0, scene.contrast[y, x] - scene.residual[y, x])
            pixel = variance + scene.gain * light
            leverage, spread = 0.0, _times(covariance, slopes)
            for i in range(4):
                leverage += spread[i] * slopes[i] / pixel
            quality[4] += (off**2 / max(0.1, 1 - leverage) - variance) * g / pixel**2
            quality[5] += light * g / pixel**2
            if abs(x - x0) <= 1 and abs(y - y0) <= 1:
                quality[6] = max(quality[6], off / spot[2])
            pixels += 1
            misfit += off**2 / pixel
    if pixels > 4:  # two spots in one, or a smeared one, are placed less well than noise alone says
        quality[0] *= math.sqrt(max(1.0, misfit / (pixels - 4)))
