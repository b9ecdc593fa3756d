"""Light that is no filament's: specks of debris on the glass, and haze from out of focus."""

from __future__ import annotations

from dataclasses import dataclass, replace
from math import erf, sqrt

import numpy as np
from numpy.typing import NDArray

from glidefit.kernels.filament_contours import add_points
from glidefit.kernels.filament_optics import FilamentOptics, FilmFaults

Floats = NDArray[np.float64]

_SPECK_POINTS = 4  # at most
_SPECK_UM = 0.2  # SD of its points about their middle
_SPECK_PEAKS = (0.5, 3.0)  # of a point, over that of a filament
_PATCH_UM = (1.5, 4.0)  # SD of a patch of haze
_PATCH_DRAWN_SD = 4.0
_PATCH_DIFFUSION_UM2_S = 0.2  # of what floats out of focus


@dataclass(frozen=True, slots=True, kw_only=True)
class StrayLight:
    """Debris as points, haze as wide Gaussian patches."""

    pixel_um: float
    speck_x: Floats  # (d,) µm
    speck_y: Floats
    speck_photons: Floats
    patch_x: Floats  # (p,) µm
    patch_y: Floats
    patch_um: Floats  # SD
    patch_peak: Floats  # photons in a pixel

    @classmethod
    def drawn(
        cls,
        faults: FilmFaults,
        optics: FilamentOptics,
        *,
        shape_px: tuple[int, int],
        rng: np.random.Generator,
    ) -> StrayLight:
        """Stray light all over the field, in Poisson numbers."""
        height, width = (n * optics.pixel_um for n in shape_px)
        specks, patches = rng.poisson(faults.debris), rng.poisson(faults.haze_patches)
        points = rng.integers(1, _SPECK_POINTS + 1, specks)
        # Of a point of the same peak as the filament's line, in the pixel on which it is centred.
        share = erf(optics.pixel_um / (2 * sqrt(2) * optics.psf_um)) ** 2
        peaks = np.repeat(rng.uniform(*_SPECK_PEAKS, specks) / np.sqrt(points), points)
        offsets = rng.normal(0.0, _SPECK_UM, (2, points.sum()))
        return cls(
            pixel_um=optics.pixel_um,
            speck_x=np.repeat(rng.uniform(0, width, specks), points) + offsets[0],
            speck_y=np.repeat(rng.uniform(0, height, specks), points) + offsets[1],
            speck_photons=peaks * optics.peak_photons / share,
            patch_x=rng.uniform(0, width, patches),
            patch_y=rng.uniform(0, height, patches),
            patch_um=rng.uniform(*_PATCH_UM, patches),
            patch_peak=faults.haze * optics.background_photons * rng.uniform(0.5, 1.5, patches),
        )

    def draw(self, image: Floats, *, drift: Floats, fading: float, psf_um: float) -> None:
        """Add it to an image (rows, columns); debris fades and goes out of focus like filaments."""
        x, y = (self.speck_x + drift[0], self.speck_y + drift[1])
        pixel = self.pixel_um
        add_points(image, x / pixel, y / pixel, fading * self.speck_photons, psf_um / pixel)
        for x0, y0, sd, peak in zip(
            self.patch_x, self.patch_y, self.patch_um, self.patch_peak, strict=True
        ):
            sides = [
                _profile(middle / pixel, sd / pixel, n)
                for middle, n in ((y0, image.shape[0]), (x0, image.shape[1]))
            ]
            (rows, down), (columns, across) = sides
            image[rows, columns] += peak * down[:, None] * across

    def later(self, time_s: float, *, rng: np.random.Generator) -> StrayLight:
        """The same after a time: haze floats about."""
        step = sqrt(2 * _PATCH_DIFFUSION_UM2_S * time_s)
        moves = step * rng.standard_normal((2, len(self.patch_x)))
        return replace(self, patch_x=self.patch_x + moves[0], patch_y=self.patch_y + moves[1])


def _profile(middle_px: float, sd_px: float, n_pixels: int) -> tuple[slice, Floats]:
    """Pixels near the middle, and a Gaussian of height 1 there."""
    reach = _PATCH_DRAWN_SD * sd_px
    first = min(max(int(middle_px - reach), 0), n_pixels)
    last = min(max(int(middle_px + reach) + 1, first), n_pixels)
    height: Floats = np.exp(-((np.arange(first, last) - middle_px) ** 2) / (2 * sd_px**2))
    return slice(first, last), height
