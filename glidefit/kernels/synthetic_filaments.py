"""Camera frames of gliding filaments with their truth, one at a time.

Image arrays are (rows, columns); positions are in µm with (0, 0) the centre of the first pixel.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from glidefit.kernels.filament_contours import add_points, body_places, contour_points, overlapping
from glidefit.kernels.filament_optics import FilamentOptics, FilmFaults
from glidefit.kernels.filament_truth import FilamentTruth
from glidefit.kernels.laid_paths import STEP_UM, Filaments
from glidefit.kernels.photon_noise import poisson_counts
from glidefit.kernels.simulation import View
from glidefit.kernels.stray_light import StrayLight
from glidefit.kernels.synthetic_frames import OFFSET_COUNTS, blinking, illumination

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

_PIECE_SD = 0.5  # length of the drawn pieces of a contour, in spreads
EDGE_SD = 3.0  # a body that comes so near the edge, in spreads, is cut by it
OVERLAP_SD = 3.0  # and bodies so near each other overlap


@dataclass(frozen=True, slots=True, kw_only=True)
class FilamentFrame:
    """One frame and its truth."""

    frame: int
    image: NDArray[np.uint16]  # (rows, columns) in counts
    truth: FilamentTruth


def filament_frames(
    filaments: Filaments,
    *,
    view: View,
    shape_px: tuple[int, int],
    optics: FilamentOptics,
    faults: FilmFaults | None = None,
    rng: np.random.Generator,
) -> Iterator[FilamentFrame]:
    """Frames of filaments, one at a time, in order; memory does not grow with their number.

    Parameters
    ----------
    filaments : Filaments
    view : View
        Times of the frames and the drift, which moves all but hot pixels and uneven light.
    shape_px : tuple of int
        Rows and columns of the image.
    """
    faults = FilmFaults() if faults is None else faults
    frame_s, n = view.timing.frame_s, len(filaments.length_um)
    bodies = _Bodies.of(filaments, optics=optics, shape_px=shape_px, rng=rng)
    light = illumination(shape_px, unevenness=faults.unevenness)
    hot = faults.hot_pixel_photons * (rng.random(shape_px) < faults.hot_pixel_share)
    stray = StrayLight.drawn(faults, optics, shape_px=shape_px, rng=rng)
    bright = blinking(n, frame_s=frame_s, faults=faults, rng=rng)
    visits = _Visits.none(n)
    for number in range(view.timing.n_frames):
        drift = np.zeros(2) if view.drift_um is None else view.drift_um[number]
        shining = next(bright)
        fading = np.exp(-faults.bleaching_rate * number * frame_s)
        swing = np.sin(np.pi * number * frame_s / faults.focus_period_s) ** 2
        psf_um = optics.psf_um * (1 + faults.focus_breathing * swing)
        expected = np.full(shape_px, optics.background_photons)
        relative = fading * (shining & bodies.there(number))
        bodies.draw(expected, number, drift=drift, relative=relative, psf_um=psf_um)
        stray.draw(expected, drift=drift, fading=fading, psf_um=psf_um)
        stray = stray.later(frame_s, rng=rng)
        expected *= light
        expected += hot
        yield FilamentFrame(
            frame=number,
            image=_counted(expected, optics.read_noise, faults.saturation_counts, rng),
            truth=bodies.truth(number, drift=drift, dark=~shining, visits=visits),
        )


def _counted(
    expected: Floats, read_noise: float, most: int, rng: np.random.Generator
) -> NDArray[np.uint16]:
    counts = poisson_counts(expected, rng=rng)
    if read_noise > 0:
        counts += np.float32(read_noise) * rng.standard_normal(counts.shape, dtype=np.float32)
    counts += OFFSET_COUNTS
    return np.clip(np.rint(counts, out=counts), 0, most).astype(np.uint16)


@dataclass(slots=True)
class _Visits:
    """Which visit to the field each filament is on."""

    track: Ints  # (n,)
    last: Ints  # (n,) frame in which it was seen
    next: int

    @classmethod
    def none(cls, n: int) -> _Visits:
        return cls(np.full(n, -1), np.full(n, -2), 0)

    def seen(self, who: Ints, frame: int) -> Ints:
        """Track of each of the filaments seen in a frame."""
        new = who[self.last[who] != frame - 1]
        self.track[new] = self.next + np.arange(len(new))
        self.next += len(new)
        self.last[who] = frame
        return self.track[who]


@dataclass(frozen=True, slots=True, kw_only=True)
class _Bodies:
    """Filaments cut into pieces, each with its share of the labels."""

    filaments: Filaments
    optics: FilamentOptics
    shape_px: tuple[int, int]
    offset: Ints  # (n + 1,) rows of the pieces
    light: Floats  # (m,) photons of each piece in one exposure of the first frame

    @classmethod
    def of(
        cls,
        filaments: Filaments,
        *,
        optics: FilamentOptics,
        shape_px: tuple[int, int],
        rng: np.random.Generator,
    ) -> _Bodies:
        pieces = np.ceil(filaments.length_um / (_PIECE_SD * optics.psf_um)).astype(np.int64)
        size = np.repeat(filaments.length_um / pieces, pieces)
        light = optics.photons_per_um * size
        if optics.labels_per_um > 0:
            expected = optics.labels_per_um * size
            light = light * rng.poisson(expected) / expected
        offset = np.concatenate([[0], np.cumsum(pieces)]).astype(np.int64)
        return cls(
            filaments=filaments, optics=optics, shape_px=shape_px, offset=offset, light=light
        )

    def draw(
        self, image: Floats, frame: int, *, drift: Floats, relative: Floats, psf_um: float
    ) -> None:
        """Add the bodies, their light ``relative`` (n,) to that of the first frame."""
        tails, pixel_um = self.filaments.tail_um[:, frame], self.optics.pixel_um
        light = self.light * np.repeat(relative, np.diff(self.offset)) / tails.shape[1]
        for tail in tails.T:
            x, y = self._points(tail, drift)
            add_points(image, x / pixel_um, y / pixel_um, light, psf_um / pixel_um)

    def _points(self, tail: Floats, drift: Floats) -> tuple[Floats, Floats]:
        """Middles of the pieces of all bodies, (m,)."""
        f = self.filaments
        x, y = contour_points(
            f.path_offset,
            f.path_x,
            f.path_y,
            STEP_UM,
            tail,
            f.length_um,
            f.aside_um,
            self.offset,
        )
        return x + drift[0], y + drift[1]

    def there(self, frame: int) -> Bools:
        """Filaments that have landed and not detached, (n,)."""
        return (self.filaments.first_frame <= frame) & (frame < self.filaments.end_frame)

    def truth(self, frame: int, *, drift: Floats, dark: Bools, visits: _Visits) -> FilamentTruth:
        f, psf_um = self.filaments, self.optics.psf_um
        tail = f.tail_um[:, frame]
        x, y = self._points(tail.mean(axis=1), drift)
        inside, whole = (self._inside(x, y, margin) for margin in (0.0, EDGE_SD * psf_um))
        shown = self.there(frame) & np.logical_or.reduceat(inside, self.offset[:-1])
        touching = overlapping(self.offset, shown & ~dark, x, y, OVERLAP_SD * psf_um)
        who = np.flatnonzero(shown)
        places = body_places(
            f.path_offset, f.path_x, f.path_y, STEP_UM, tail, f.length_um, f.aside_um, who
        )
        rows = np.repeat(shown, np.diff(self.offset))
        return FilamentTruth(
            filament=who,
            track=visits.seen(who, frame),
            x_um=places[:, 0] + drift[0],
            y_um=places[:, 1] + drift[1],
            head_x_um=places[:, 2] + drift[0],
            head_y_um=places[:, 3] + drift[1],
            tail_x_um=places[:, 4] + drift[0],
            tail_y_um=places[:, 5] + drift[1],
            heading_rad=places[:, 6],
            length_um=f.length_um[who],
            cut=~np.logical_and.reduceat(whole, self.offset[:-1])[who],
            stuck=f.stuck[who],
            bundled=f.bundle[who] >= 0,
            dark=dark[who],
            overlapped=touching[who],
            contour_offset=np.concatenate([[0], np.cumsum(np.diff(self.offset)[who])]),
            contour_x_um=x[rows],
            contour_y_um=y[rows],
        )

    def _inside(self, x: Floats, y: Floats, margin_um: float) -> Bools:
        """Points inside the field by at least a margin, (m,)."""
        inside = np.ones(len(x), dtype=bool)
        for values, n_pixels in ((x, self.shape_px[1]), (y, self.shape_px[0])):
            middle = (n_pixels - 1) / 2 * self.optics.pixel_um
            inside &= np.abs(values - middle) <= n_pixels / 2 * self.optics.pixel_um - margin_um
        return inside
