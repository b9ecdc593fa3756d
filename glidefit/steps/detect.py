"""Detection: the spots of each frame of a recording, with the precision of their positions."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from glidefit.errors import InputError
from glidefit.kernels.frames import (
    FilteredFrame,
    FittedSpots,
    detection_height,
    filter_frame,
    fit_spots,
    frame_fault,
)
from glidefit.settings import DetectSettings
from glidefit.tracks import Detections

Frame = NDArray[np.generic]
Floats = NDArray[np.float64]
Mask = NDArray[np.bool_]

# A spot fades within three standard deviations of its Gaussian.
_DIAMETERS_PER_WIDTH = 6.0
# A fainter spot so close to a brighter one cannot be told from the brighter one's skirt.
_FAINTEST_NEIGHBOUR = 0.1
# Of the threshold, for the fitted amplitude: its error is larger, as it has its own background.
_FITTED_SHARE = 0.8
# A pixel that stands above the fit by more than its amplitude is hot and no spot.
_SPIKE = 1.0
# Steps of the integer image in which trackpy looks for maxima, per noise.
_STEPS = 1000
# From so many spots on the optics are known well enough to fit each frame once.
_ENOUGH_SPOTS = 50


def detect_spots(
    frames: Iterable[Frame], *, pixel_um: float, settings: DetectSettings, where: str
) -> Detections:
    """Positions of the spots in every frame.

    Local maxima of the filtered frame that stand `settings.threshold` times out of its local noise
    (trackpy), each then fitted with a Gaussian together with its neighbours. Width of the spots
    and noise of their light are learned from the spots of the frames so far. One frame is in
    memory at a time.

    Parameters
    ----------
    frames : iterable of (h, w) arrays
        Counts, integer or float.
    pixel_um : float
        Side of a pixel in µm.
    settings : DetectSettings
        Threshold and spot diameter.
    where : str
        The recording, for messages.

    Returns
    -------
    Detections
        Sorted by frame, then by y and x.

    Raises
    ------
    InputError
        For a frame that is no grey image or has pixels without a value, frames of different size,
        or pixels too large or too small for the spots.
    """
    diameter_px = _diameter(settings.spot_diameter, pixel_um, where)
    width_px = settings.spot_diameter / pixel_um / _DIAMETERS_PER_WIDTH
    optics = _Optics(width_px=width_px)
    shape: tuple[int, ...] | None = None
    found, noise, background = [np.empty((5, 0))], [], []
    for number, frame in enumerate(frames):
        _check(frame, shape, f"{where}, frame {number}")
        shape = frame.shape
        filtered = filter_frame(frame, width_px=optics.width_px, block_px=2 * diameter_px)
        spots, optics = _spots(filtered, optics, settings.threshold, diameter_px)
        found.append(_rows(number, spots, optics.width_px))
        noise.append(float(np.median(filtered.noise[::4, ::4])))
        background.append(filtered.background)
    table = np.concatenate(found, axis=1)
    return Detections(
        frame=table[0].astype(np.int64),
        x_um=table[1] * pixel_um,
        y_um=table[2] * pixel_um,
        brightness=table[3],
        precision_um=table[4] * pixel_um,
        n_frames=len(noise),
        noise=np.array(noise),
        background=np.array(background),
    )


def _rows(number: int, spots: FittedSpots, width_px: float) -> Floats:
    brightness = 2 * math.pi * width_px**2 * spots.amplitude
    frame = np.full(len(brightness), float(number))
    rows = np.stack([frame, spots.x_px, spots.y_px, brightness, spots.precision_px])
    return rows[:, np.lexsort((spots.x_px, spots.y_px))]


def _diameter(spot_diameter: float, pixel_um: float, where: str) -> int:
    """Spot diameter in pixels, odd."""
    if not pixel_um > 0:
        raise ValueError(f"pixel_um must be > 0, is {pixel_um:g}")
    diameter = 2 * int(spot_diameter / pixel_um / 2) + 1
    if not 3 <= spot_diameter / pixel_um <= 99:
        raise InputError(
            where,
            f"a spot of {spot_diameter:g} µm is {spot_diameter / pixel_um:.3g} pixels wide "
            f"at {pixel_um:g} µm per pixel",
            expected="3 to 99 pixels",
            remedy="Check pixel_um in the assay sheet and the setting detect.spot_diameter.",
        )
    return diameter


def _check(frame: Frame, shape: tuple[int, ...] | None, where: str) -> None:
    fault = frame_fault(frame, shape)
    if fault is not None:
        found, expected = fault
        raise InputError(
            where, found, expected=expected, remedy="Save the video again, or choose the channel."
        )


@dataclass(frozen=True, slots=True, kw_only=True)
class _Optics:
    """What the spots seen so far tell about all spots."""

    width_px: float
    spots: float = 1.0  # the first guess of the width counts as one
    excess: float = 0.0
    light: float = 1e-9

    @property
    def gain(self) -> float:
        """Variance of a pixel per count of a spot's light."""
        return max(0.0, self.excess / self.light)

    def learned(self, fitted: FittedSpots, alone: Mask) -> _Optics:
        """With the spots of another frame, of which those that are alone show their width."""
        if not alone.any():
            return self
        widths = fitted.width_px[alone]
        widths = widths[(widths > self.width_px / 2) & (widths < 2 * self.width_px)]
        middle = float(np.median(widths)) if len(widths) else self.width_px
        n = self.spots + len(widths)
        excess, light = fitted.excess[alone].T
        ratio = excess / np.maximum(light, 1e-300)
        # Two spots in one do not fit, and would pass for noise.
        off = np.abs(ratio - np.median(ratio))
        usual = off <= 6 * np.median(off)
        return dataclasses.replace(
            self,
            width_px=(self.spots * self.width_px + len(widths) * middle) / n,
            spots=n,
            excess=self.excess + float(excess[usual].sum()),
            light=self.light + float(light[usual].sum()),
        )


def _spots(
    filtered: FilteredFrame, optics: _Optics, threshold: float, diameter_px: int
) -> tuple[FittedSpots, _Optics]:
    """Spots of one frame, and what is known of the optics after it."""
    height = detection_height(threshold, looks=filtered.looks, skewness=filtered.skewness)
    x, y = _candidates(filtered, height, diameter_px)
    shape = filtered.contrast.shape
    if len(x) == 0:
        return _fit(filtered, x, y, optics, diameter_px), optics
    learned = optics
    for _ in range(1 if optics.spots >= _ENOUGH_SPOTS else 4):
        fitted = _fit(filtered, x, y, learned, diameter_px)
        alone = _alone(x, y, 2 * diameter_px)
        learned = optics.learned(fitted, alone & _trusted(fitted, threshold, shape))
    good = _trusted(fitted, threshold, shape) & _distinct(fitted, learned.width_px, diameter_px)
    if not good.all():
        x, y = fitted.x_px[good], fitted.y_px[good]
        fitted = _fit(filtered, x, y, learned, diameter_px)
        good = _trusted(fitted, threshold, shape)
    return FittedSpots(*(column[good] for column in fitted)), learned


def _fit(
    filtered: FilteredFrame, x: Floats, y: Floats, optics: _Optics, diameter_px: int
) -> FittedSpots:
    return fit_spots(
        filtered, x, y, width_px=optics.width_px, half_px=diameter_px // 2, gain=optics.gain
    )


def _candidates(filtered: FilteredFrame, height: float, diameter_px: int) -> tuple[Floats, Floats]:
    """Local maxima of the significance above a height, x and y in pixels."""
    import trackpy

    standing = filtered.significance > height
    if not standing.any():
        return np.empty(0), np.empty(0)
    highest = float(filtered.significance.max()) - height
    steps = min(_STEPS, 2e9 / highest)
    core = max(3, diameter_px // 4 * 2 + 1)
    # trackpy leaves out a margin, and with percentile 0 what is not above the lowest of the values
    # that are not 0: a frame around the picture gives it both.
    image = np.pad(
        np.where(standing, 2 + (filtered.significance - height) * steps, 0).astype(np.int32),
        diameter_px,
    )
    image[0, 0] = 1
    table = trackpy.locate(
        image,
        core,
        separation=max(2, diameter_px // 3),
        percentile=0,
        preprocess=False,
        characterize=False,
        engine="numba",
    )
    h, w = standing.shape
    x = np.clip(table["x"].to_numpy(np.float64) - diameter_px, 0, w - 1)
    y = np.clip(table["y"].to_numpy(np.float64) - diameter_px, 0, h - 1)
    return x, y


def _alone(x: Floats, y: Floats, distance: float) -> Mask:
    """Spots without another one within a distance."""
    alone = np.ones(len(x), dtype=np.bool_)
    alone[_pairs(x, y, distance).ravel()] = False
    return alone


def _pairs(x: Floats, y: Floats, distance: float) -> NDArray[np.int64]:
    from scipy.spatial import cKDTree

    tree = cKDTree(np.column_stack([x, y]))
    return tree.query_pairs(distance, output_type="ndarray").astype(np.int64)


def _trusted(fitted: FittedSpots, threshold: float, shape: tuple[int, ...]) -> Mask:
    """Spots inside the frame that stand out also as they were fitted, and are no single pixel."""
    inside = np.abs(fitted.x_px - (shape[1] - 1) / 2) <= shape[1] / 2
    inside &= np.abs(fitted.y_px - (shape[0] - 1) / 2) <= shape[0] / 2
    bright = fitted.amplitude > _FITTED_SHARE * threshold * fitted.amplitude_sd
    return inside & bright & ~(fitted.spike > _SPIKE)


def _distinct(fitted: FittedSpots, width_px: float, diameter_px: int) -> Mask:
    """Spots that are neither a second fit of a brighter one nor part of its skirt."""
    x, y, bright = fitted.x_px, fitted.y_px, fitted.amplitude
    distinct = np.ones(len(x), dtype=np.bool_)
    pairs = _pairs(x, y, diameter_px)
    first, second = pairs.T
    fainter = np.where(bright[first] < bright[second], first, second)
    brighter = first + second - fainter
    distance = np.hypot(x[first] - x[second], y[first] - y[second])
    same = (distance < width_px) | (bright[fainter] < _FAINTEST_NEIGHBOUR * bright[brighter])
    distinct[fainter[same]] = False
    return distinct
