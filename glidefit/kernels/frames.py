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
# Looks among which Gaussian noise rises above 5 in one of about 180 frames.
_REFERENCE_LOOKS = 300.0


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

    contrast: Image = image - background
    significance = (filtered / np.sqrt(variance)).astype(np.float32)
    spots = _around(significance, _SPOT_HEIGHT, near)
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
    raised, ``u² = threshold² + 2 ln(looks / 300)``, to let through as few false spots a frame as
    ``threshold`` does in 300 looks: 0.4 at 4, 0.006 at 5, 0.00003 at 6. Photon noise in the dark
    reaches higher than Gaussian noise: with its skewness γ a gamma distribution is as rarely above
    ``(2/γ) ((1 + γu/6 - γ²/36)³ - 1)``.

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
    down, right = _places(image.shape[0], rows), _places(image.shape[1], columns)
    background: Image = _interpolated(level, down, right)
    return background


def _block_edges(n: int, block_px: int) -> NDArray[np.int64]:
    blocks = max(1, round(n / block_px))
    return np.round(np.linspace(0, n, blocks + 1)).astype(np.int64)


def _places(n: int, edges: NDArray[np.int64]) -> Floats:
    """Where pixels (n,) lie between the centres of blocks, counted in blocks."""
    centres = (edges[:-1] + edges[1:] - 1) / 2
    return np.interp(np.arange(n), centres, np.arange(len(centres)))


@njit(cache=True)
def _interpolated(level, rows, columns):  # type: ignore[no-untyped-def]
    """Bilinear interpolation of blocks at the places of rows and columns."""
    result = np.empty((len(rows), len(columns)), dtype=np.float32)
    last = (level.shape[0] - 1, level.shape[1] - 1)
    for y in range(len(rows)):
        i = int(rows[y])
        down, below = rows[y] - i, min(i + 1, last[0])
        for x in range(len(columns)):
            j = int(columns[x])
            right, beside = columns[x] - j, min(j + 1, last[1])
            upper = level[i, j] * (1 - right) + level[i, beside] * right
            lower = level[below, j] * (1 - right) + level[below, beside] * right
            result[y, x] = upper * (1 - down) + lower * down
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
    """Slope, mean x and mean y of a line without the points far from a first one."""
    keep = np.ones(len(x), dtype=np.bool_)
    slope = mean_x = mean_y = 0.0
    for _ in range(3):
        mean_x, mean_y = float(x[keep].mean()), float(y[keep].mean())
        dx = x[keep] - mean_x
        spread = float(np.sum(dx**2))
        slope = float(np.sum(dx * (y[keep] - mean_y))) / spread if spread > 0 else 0.0
        off = np.abs(y - mean_y - slope * (x - mean_x))
        keep = off <= 6 * np.median(off)
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
    n = len(x_px)
    spots = np.zeros((n, 4))
    spots[:, 0], spots[:, 1] = x_px, y_px
    column, row = np.rint(x_px).astype(np.int64), np.rint(y_px).astype(np.int64)
    variance = filtered.noise[row, column].astype(np.float64) ** 2
    spots[:, 2] = np.maximum(filtered.contrast[row, column], np.sqrt(variance))
    residual = filtered.contrast.astype(np.float64)
    quality = np.full((n, 7), np.nan)
    _fit_in_turns(residual, spots, column, row, variance, gain, width_px, half_px, quality)
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


@njit(cache=True)
def _add(residual, spot, width, half, sign):  # type: ignore[no-untyped-def]
    """Add a spot's model to the residual, or take it away."""
    h, w = residual.shape
    x0, y0 = int(np.rint(spot[0])), int(np.rint(spot[1]))
    for y in range(max(0, y0 - half), min(h, y0 + half + 1)):
        gy = sign * spot[2] * math.exp(-((y - spot[1]) ** 2) / (2 * width**2))
        for x in range(max(0, x0 - half), min(w, x0 + half + 1)):
            residual[y, x] += gy * math.exp(-((x - spot[0]) ** 2) / (2 * width**2))


@njit(cache=True)
def _slopes(spot, x, y, width, slopes):  # type: ignore[no-untyped-def]
    """Derivatives of a pixel by x, y, amplitude, level and width."""
    dx, dy = x - spot[0], y - spot[1]
    g = math.exp(-(dx * dx + dy * dy) / (2 * width * width))
    slopes[0] = spot[2] * g * dx / width**2
    slopes[1] = spot[2] * g * dy / width**2
    slopes[2] = g
    slopes[3] = 1.0
    slopes[4] = spot[2] * g * (dx * dx + dy * dy) / width**3
    return g


@njit(cache=True)
def _normal_equations(  # type: ignore[no-untyped-def]
    residual, contrast, spot, x0, y0, variance, gain, width, half, normal, score
):
    """Weighted normal matrix (5, 5) and score (5,) of a spot whose model is in the residual."""
    h, w = residual.shape
    slopes = np.empty(5)
    normal[:] = 0.0
    score[:] = 0.0
    for y in range(max(0, y0 - half), min(h, y0 + half + 1)):
        for x in range(max(0, x0 - half), min(w, x0 + half + 1)):
            _slopes(spot, x, y, width, slopes)
            light = max(0.0, contrast[y, x] - residual[y, x])
            weight = 1.0 / (variance + gain * light)
            off = residual[y, x] - spot[3]
            for i in range(5):
                score[i] += weight * off * slopes[i]
                for j in range(5):
                    normal[i, j] += weight * slopes[i] * slopes[j]
    for i in range(5):  # keeps a spot without brightness solvable
        normal[i, i] = normal[i, i] * (1 + 1e-9) + 1e-12
    return score


@njit(cache=True)
def _fit_in_turns(  # type: ignore[no-untyped-def]
    residual, spots, columns, rows, variance, gain, width, half, quality
):
    """Fit spots (n, 4: x, y, amplitude, level) in turns; quality gets what `fit_spots` returns."""
    contrast = residual.copy()
    normal, score = np.empty((5, 5)), np.empty(5)
    reach = half + 2
    for spot in spots:
        _add(residual, spot, width, reach, -1.0)
    for _ in range(_SWEEPS):
        largest = 0.0
        for k in range(len(spots)):
            spot = spots[k]
            if spot[2] <= 0:
                continue
            _normal_equations(
                residual, contrast, spot, columns[k], rows[k], variance[k], gain, width, half,
                normal, score,
            )  # fmt: skip
            step = np.linalg.solve(normal[:4, :4].copy(), score[:4].copy())
            longest = max(abs(step[0]), abs(step[1]))
            if longest > width / 2:
                step[:2] *= width / 2 / longest
            _add(residual, spot, width, reach, 1.0)
            spot += step
            far = max(abs(spot[0] - columns[k]), abs(spot[1] - rows[k])) > half
            if far or spot[2] <= 0:
                spot[2] = 0.0
            _add(residual, spot, width, reach, -1.0)
            largest = max(largest, longest)
        if largest < _STILL:
            break
    for k in range(len(spots)):
        if spots[k, 2] > 0:
            _assess(
                residual, contrast, spots[k], columns[k], rows[k], variance[k], gain, width, half,
                normal, score, quality[k],
            )  # fmt: skip
        else:
            quality[k, 0] = quality[k, 1] = np.inf


@njit(cache=True)
def _assess(  # type: ignore[no-untyped-def]
    residual, contrast, spot, x0, y0, variance, gain, width, half, normal, score, quality
):
    """Precision, amplitude error, score and information of the width, excess variance, spike."""
    _normal_equations(residual, contrast, spot, x0, y0, variance, gain, width, half, normal, score)
    inner = normal[:4, :4].copy()
    covariance = np.linalg.inv(inner)
    quality[0] = math.sqrt((covariance[0, 0] + covariance[1, 1]) / 2)
    quality[1] = math.sqrt(covariance[2, 2])
    # The width, when everything else follows it.
    along = np.linalg.solve(inner, normal[:4, 4].copy())
    quality[2] = score[4] - np.sum(along * score[:4])
    quality[3] = normal[4, 4] - np.sum(along * normal[:4, 4])
    quality[4] = quality[5] = quality[6] = 0.0
    pixels, misfit = 0, 0.0
    h, w = residual.shape
    slopes = np.empty(5)
    for y in range(max(0, y0 - half), min(h, y0 + half + 1)):
        for x in range(max(0, x0 - half), min(w, x0 + half + 1)):
            g = _slopes(spot, x, y, width, slopes)
            light = max(0.0, contrast[y, x] - residual[y, x])
            pixel = variance + gain * light
            pixels += 1
            if abs(x - x0) <= 1 and abs(y - y0) <= 1:
                quality[6] = max(quality[6], (residual[y, x] - spot[3]) / spot[2])
            misfit += (residual[y, x] - spot[3]) ** 2 / pixel
            leverage = np.sum(covariance * np.outer(slopes[:4], slopes[:4])) / pixel
            off = (residual[y, x] - spot[3]) ** 2 / max(0.1, 1 - leverage)
            quality[4] += (off - variance) * g / pixel**2
            quality[5] += light * g / pixel**2
    if pixels > 4:  # two spots in one, or a smeared one, are placed less well than noise alone says
        quality[0] *= math.sqrt(max(1.0, misfit / (pixels - 4)))
