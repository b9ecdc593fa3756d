"""How a filament looks to the camera, and what spoils its film.

Light is counted in photons, one count each.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import erf, sqrt
from typing import Self

from glidefit.kernels.synthetic_frames import CameraFaults


@dataclass(frozen=True, slots=True, kw_only=True)
class FilamentOptics:
    """What an evenly lit camera sees of a resting, evenly labelled, straight filament."""

    photons_per_um: float  # of its length, in one exposure
    psf_um: float = 0.13  # SD of the Gaussian spread
    pixel_um: float = 0.13
    background_photons: float = 20.0  # in each pixel
    read_noise: float = 1.6  # SD in counts
    labels_per_um: float = 60.0  # that shine, at random places; 0 is even labelling
    body_um: float = 0.0  # length of bodies too short to be lines; 0 is filaments

    def __post_init__(self) -> None:
        if not (self.psf_um > 0 and self.pixel_um > 0):
            raise ValueError("psf_um and pixel_um must be > 0")
        least = min(self.photons_per_um, self.background_photons, self.read_noise)
        if min(least, self.labels_per_um, self.body_um) < 0:
            raise ValueError(
                "photons_per_um, background_photons, read_noise, labels_per_um and body_um must "
                "be >= 0"
            )

    @classmethod
    def with_signal_to_noise(
        cls,
        ratio: float,
        *,
        psf_um: float = 0.13,
        pixel_um: float = 0.13,
        background_photons: float = 20.0,
        read_noise: float = 1.6,
        labels_per_um: float = 60.0,
        body_um: float = 0.0,
    ) -> Self:
        """Optics in which a filament along the middle of a row has this `signal_to_noise`.

        From ``ratio² = peak² / (peak + background + read_noise²)``, solved for the peak.
        """
        rest = background_photons + read_noise**2
        peak = (ratio**2 + ratio * sqrt(ratio**2 + 4 * rest)) / 2
        share = _central_share(psf_um, pixel_um)
        return cls(
            photons_per_um=peak / (share * (body_um * share or pixel_um)),
            psf_um=psf_um,
            pixel_um=pixel_um,
            background_photons=background_photons,
            read_noise=read_noise,
            labels_per_um=labels_per_um,
            body_um=body_um,
        )

    @property
    def peak_photons(self) -> float:
        """Photons of the filament in a pixel of the row along whose middle it lies.

        Of a short body, in the pixel on which it is centred.
        """
        share = _central_share(self.psf_um, self.pixel_um)
        return self.photons_per_um * share * (self.body_um * share or self.pixel_um)

    @property
    def signal_to_noise(self) -> float:
        """Peak over the SD of that pixel: the filament's own shot noise, background, reading."""
        variance = self.peak_photons + self.background_photons + self.read_noise**2
        return self.peak_photons / sqrt(variance) if variance > 0 else 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class FilmFaults(CameraFaults):
    """What spoils films of filaments, beside the camera's faults; all absent by default.

    A filament that blinks is off or on as a whole, for whole frames.
    """

    debris: float = 0.0  # bright specks in the field, on average; they do not move
    haze_patches: float = 0.0  # out-of-focus patches of light in the field, on average
    haze: float = 0.5  # mean peak of these, over the background
    focus_breathing: float = 0.0  # largest relative growth of the spread
    focus_period_s: float = 30.0  # in which it grows and shrinks
    saturation_counts: int = 65535  # the camera gives no more

    def __post_init__(self) -> None:
        CameraFaults.__post_init__(self)
        least = min(self.debris, self.haze_patches, self.haze, self.focus_breathing)
        if least < 0 or not self.focus_period_s > 0:
            raise ValueError("debris, haze and focus must be >= 0, focus_period_s > 0")
        if not 0 < self.saturation_counts <= 65535:
            raise ValueError("saturation_counts must be 1 to 65535")


def _central_share(psf_um: float, pixel_um: float) -> float:
    """Share of a line's light in the row along whose middle it lies."""
    return erf(pixel_um / (2 * sqrt(2) * psf_um))
