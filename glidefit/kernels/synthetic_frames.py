"""Camera frames of bright spots at known positions, with the camera's own noise.

Light is counted in photons, one count each. Image arrays are (rows, columns); positions are in
µm with (0, 0) the centre of the first pixel, x along the columns.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Self

import numpy as np
from numpy.typing import NDArray
from scipy.special import erf, spence

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

OFFSET_COUNTS = 100
_DRAWN_SD = 5.0  # half-width of the drawn window; what is outside is below 1e-6 of a spot


@dataclass(frozen=True, slots=True, kw_only=True)
class SpotOptics:
    """What an evenly lit camera sees of one spot in one exposure."""

    psf_um: float  # SD of the Gaussian spot
    pixel_um: float
    photons: float  # of the spot
    background_photons: float = 0.0  # in each pixel
    read_noise: float = 0.0  # SD in counts

    def __post_init__(self) -> None:
        if not (self.psf_um > 0 and self.pixel_um > 0):
            raise ValueError("psf_um and pixel_um must be > 0")
        if min(self.photons, self.background_photons, self.read_noise) < 0:
            raise ValueError("photons, background_photons and read_noise must be >= 0")

    @classmethod
    def with_signal_to_noise(
        cls,
        ratio: float,
        *,
        psf_um: float,
        pixel_um: float,
        background_photons: float = 0.0,
        read_noise: float = 0.0,
    ) -> Self:
        """Optics whose resting spot, centred on a pixel, has this `signal_to_noise`.

        From ``ratio² = peak² / (peak + background + read_noise²)``, solved for the peak.
        """
        rest = background_photons + read_noise**2
        peak = (ratio**2 + ratio * np.sqrt(ratio**2 + 4 * rest)) / 2
        return cls(
            psf_um=psf_um,
            pixel_um=pixel_um,
            photons=float(peak / _central_share(psf_um, pixel_um)),
            background_photons=background_photons,
            read_noise=read_noise,
        )

    @property
    def peak_photons(self) -> float:
        """Photons of the spot in the pixel on which it is centred."""
        return self.photons * _central_share(self.psf_um, self.pixel_um)

    @property
    def signal_to_noise(self) -> float:
        """Peak of the spot over the SD of that pixel: its own shot noise, background, reading."""
        variance = self.peak_photons + self.background_photons + self.read_noise**2
        return float(self.peak_photons / np.sqrt(variance)) if variance > 0 else 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class CameraFaults:
    """What spoils real recordings; all absent by default."""

    unevenness: float = 0.0  # share of the light that is missing in the corners
    bleaching_rate: float = 0.0  # 1/s, of the photons of every spot
    dark_rate: float = 0.0  # 1/s, at which a blinking spot goes dark
    bright_rate: float = 1.0  # 1/s, at which it comes back
    hot_pixel_share: float = 0.0  # of all pixels
    hot_pixel_photons: float = 500.0  # that these see in the dark

    def __post_init__(self) -> None:
        if not (0 <= self.unevenness <= 1 and 0 <= self.hot_pixel_share <= 1):
            raise ValueError("unevenness and hot_pixel_share must be 0 to 1")
        if min(self.bleaching_rate, self.dark_rate, self.hot_pixel_photons) < 0:
            raise ValueError("bleaching_rate, dark_rate and hot_pixel_photons must be >= 0")
        if not self.bright_rate > 0:
            raise ValueError("bright_rate must be > 0")


@dataclass(frozen=True, slots=True, kw_only=True)
class SpotFrame:
    """One frame and its truth: the n spots whose centre is inside."""

    frame: int
    image: NDArray[np.uint16]  # (rows, columns) in counts
    track: Ints  # (n,)
    x_um: Floats  # (n,) mean over the exposure
    y_um: Floats
    photons: Floats  # (n,) that the spot sent out; 0 while it is dark


def least_localization_error(optics: SpotOptics) -> float:
    """Standard deviation in µm of one coordinate of a resting spot, located by maximum likelihood.

    With ``s² = psf² + pixel²/12`` and ``τ = 2π s² (background + read_noise²) / (photons pixel²)``::

        σ² = s² / photons / (1 + ∫₀¹ ln u / (1 + u/τ) du)

    Read noise enters as that many background photons.

    References
    ----------
    Mortensen et al., Nat. Methods 7, 377 (2010); the integral is τ Li₂(-1/τ).
    """
    if optics.photons == 0:
        return float("inf")
    spread = optics.psf_um**2 + optics.pixel_um**2 / 12
    rest = optics.background_photons + optics.read_noise**2
    tau = 2 * np.pi * spread * rest / (optics.photons * optics.pixel_um**2)
    integral = tau * spence(1 + 1 / tau) if tau > 0 else 0.0
    return float(np.sqrt(spread / optics.photons / (1 + integral)))


def spot_light(
    x_um: Floats,
    y_um: Floats,
    *,
    photons: Floats,
    shape_px: tuple[int, int],
    psf_um: float,
    pixel_um: float,
) -> Floats:
    """Expected photons in each pixel of n spots that move during the exposure.

    Parameters
    ----------
    x_um, y_um : (n, k) arrays
        k positions of each spot, passed in equal times; they may lie outside the image.
    photons : (n,) array
        Of each spot in the exposure, including what falls outside the image.
    shape_px : tuple of int
        Rows and columns of the image.
    psf_um, pixel_um : float
        SD of the Gaussian spot and side of a pixel, over which it is integrated.

    Returns
    -------
    (rows, columns) array
    """
    image = np.zeros(shape_px)
    if len(x_um) == 0:
        return image
    columns, x_share = _pixel_shares(x_um, psf_um=psf_um, pixel_um=pixel_um)
    rows, y_share = _pixel_shares(y_um, psf_um=psf_um, pixel_um=pixel_um)
    light = np.einsum("n,nkr,nkc->nrc", photons / x_um.shape[1], y_share, x_share, optimize=True)
    row = np.broadcast_to(rows[:, :, None], light.shape)
    column = np.broadcast_to(columns[:, None, :], light.shape)
    inside = (row >= 0) & (row < shape_px[0]) & (column >= 0) & (column < shape_px[1])
    np.add.at(image, (row[inside], column[inside]), light[inside])
    return image


def _pixel_shares(along_um: Floats, *, psf_um: float, pixel_um: float) -> tuple[Ints, Floats]:
    """Pixels near each spot along one axis (n, w), and the share of its light there (n, k, w)."""
    centre = (along_um.min(axis=1) + along_um.max(axis=1)) / 2
    reach = _DRAWN_SD * psf_um + float(np.max(np.ptp(along_um, axis=1))) / 2
    half = int(np.ceil(reach / pixel_um)) + 1
    pixels = np.rint(centre / pixel_um).astype(np.int64)[:, None] + np.arange(-half, half + 2)
    edges = (pixels - 0.5) * pixel_um
    below = erf((edges[:, None, :] - along_um[:, :, None]) / (np.sqrt(2) * psf_um))
    return pixels[:, :-1], np.diff(below, axis=2) / 2


def _central_share(psf_um: float, pixel_um: float) -> float:
    return float(erf(pixel_um / (2 * np.sqrt(2) * psf_um)) ** 2)


def illumination(shape_px: tuple[int, int], *, unevenness: float) -> Floats:
    """Relative light, 1 in the middle, falling with the distance squared to the corners."""
    row, column = (np.linspace(-1, 1, n) if n > 1 else np.zeros(1) for n in shape_px)
    light: Floats = 1 - unevenness * (row[:, None] ** 2 + column[None, :] ** 2) / 2
    return light


def counted(expected: Floats, *, read_noise: float, rng: np.random.Generator) -> NDArray[np.uint16]:
    """Counts of a camera: Poisson photons, Gaussian read noise, the offset, 0 to 65535."""
    counts: Floats = rng.poisson(expected).astype(np.float64)
    if read_noise > 0:
        counts += read_noise * rng.standard_normal(counts.shape)
    return np.clip(np.rint(counts + OFFSET_COUNTS), 0, 65535).astype(np.uint16)


def spot_frames(
    track: Ints,
    frame: Ints,
    x_um: Floats,
    y_um: Floats,
    *,
    n_frames: int,
    frame_s: float,
    shape_px: tuple[int, int],
    optics: SpotOptics,
    faults: CameraFaults | None = None,
    rng: np.random.Generator,
) -> Iterator[SpotFrame]:
    """Frames of spots, one at a time, in order.

    Parameters
    ----------
    track, frame : (n,) arrays
        Whose position it is (numbers from 0), and in which frame, in any order.
    x_um, y_um : (n, k) arrays
        k positions during the exposure; those outside the image shine in, but are no truth.

    Raises
    ------
    ValueError
        For a track with two positions in a frame.
    """
    faults = CameraFaults() if faults is None else faults
    order = np.lexsort((track, frame))
    sorted_frame = frame[order]
    if np.any((np.diff(sorted_frame) == 0) & (np.diff(track[order]) == 0)):
        raise ValueError("a track with two positions in a frame")
    light = illumination(shape_px, unevenness=faults.unevenness)
    hot = faults.hot_pixel_photons * (rng.random(shape_px) < faults.hot_pixel_share)
    bright = blinking(int(track.max(initial=-1)) + 1, frame_s=frame_s, faults=faults, rng=rng)
    for number in range(n_frames):
        first, last = np.searchsorted(sorted_frame, [number, number + 1])
        rows = order[first:last]
        fading = np.exp(-faults.bleaching_rate * number * frame_s)
        photons = optics.photons * fading * next(bright)[track[rows]]
        spots = spot_light(
            x_um[rows],
            y_um[rows],
            photons=photons,
            shape_px=shape_px,
            psf_um=optics.psf_um,
            pixel_um=optics.pixel_um,
        )
        expected = light * (spots + optics.background_photons) + hot
        x, y = x_um[rows].mean(axis=1), y_um[rows].mean(axis=1)
        inside = _inside(y, shape_px[0], optics.pixel_um) & _inside(x, shape_px[1], optics.pixel_um)
        yield SpotFrame(
            frame=number,
            image=counted(expected, read_noise=optics.read_noise, rng=rng),
            track=track[rows][inside],
            x_um=x[inside],
            y_um=y[inside],
            photons=photons[inside],
        )


def _inside(along_um: Floats, n_pixels: int, pixel_um: float) -> NDArray[np.bool_]:
    inside: NDArray[np.bool_] = np.abs(along_um / pixel_um - (n_pixels - 1) / 2) <= n_pixels / 2
    return inside


def blinking(
    n: int, *, frame_s: float, faults: CameraFaults, rng: np.random.Generator
) -> Iterator[NDArray[np.bool_]]:
    """Which of n spots shine, frame by frame: on or off for a whole frame, stationary."""
    total = faults.dark_rate + faults.bright_rate
    share = faults.bright_rate / total
    keep = np.exp(-total * frame_s)
    bright = np.ones(n, dtype=bool)
    if faults.dark_rate > 0:
        bright = rng.random(n) < share
    while True:
        yield bright
        if faults.dark_rate > 0:
            bright = rng.random(n) < share + (bright - share) * keep
