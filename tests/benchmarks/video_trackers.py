"""What is compared on simulated films: glidefit, and a practitioner's plain script.

A tracker takes an iterator of images and a case and gives `Followed`; to compare another one, add
a function.
"""

from __future__ import annotations

import sys
from collections.abc import Iterable, Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from video_cases import PIXEL_UM, Case

from glidefit.kernels.tracking_scores import FoundPositions
from glidefit.settings import Settings

Floats = NDArray[np.float64]
Images = Iterable[NDArray[np.uint16]]


@dataclass(frozen=True, slots=True, kw_only=True)
class Followed:
    """Positions of tracks, and what else a tracker knows of them: n rows."""

    positions: FoundPositions
    length_um: Floats | None = None  # (n,)
    head_x_um: Floats | None = None
    head_y_um: Floats | None = None
    speed_um_s: dict[int, float] | None = None  # of each track


# ---- the script ----


def script(images: Images, case: Case) -> Followed | None:
    """Smooth, threshold by the triangle in the histogram, label, centroid, trackpy link.

    None if the linker gives up.
    """
    import pandas as pd
    import trackpy

    trackpy.quiet()
    tables = []
    for number, image in enumerate(images):
        x, y = spots_of(image) if case.spots else blobs_of(image)
        tables.append(pd.DataFrame({"x": x * PIXEL_UM, "y": y * PIXEL_UM, "frame": number}))
    table = pd.concat(tables, ignore_index=True)
    reach_um = max(2 * case.speed_um_s * case.frame_s, 0.5)
    try:
        table = trackpy.link(table, reach_um, memory=2)
    except trackpy.SubnetOversizeException:
        return None
    table = table.sort_values(["particle", "frame"])
    columns = {name: table[name].to_numpy() for name in ("particle", "frame", "x", "y")}
    return Followed(
        positions=FoundPositions(
            track=columns["particle"], frame=columns["frame"], x=columns["x"], y=columns["y"]
        ),
        speed_um_s=frame_to_frame_speeds(*columns.values(), frame_s=case.frame_s),
    )


def blobs_of(image: NDArray[np.uint16], *, least_px: int = 30) -> tuple[Floats, Floats]:
    """Centroids of the bright blobs of 0.5 µm² or more, in pixels."""
    from scipy import ndimage

    smooth = ndimage.gaussian_filter(image.astype(float), 1.0)
    mask = smooth > triangle_threshold(smooth)
    label, n = ndimage.label(mask, structure=np.ones((3, 3)))
    size = ndimage.sum_labels(mask, label, np.arange(1, n + 1))
    large = np.flatnonzero(size >= least_px) + 1
    row, column = np.array(ndimage.center_of_mass(mask, label, large)).reshape(-1, 2).T
    return column, row


def triangle_threshold(image: Floats) -> float:
    """Where the histogram is farthest below the line from its peak to its bright end.

    Zack, Rogers & Latt, J. Histochem. Cytochem. 25, 741 (1977), from memory.
    """
    count, edges = np.histogram(image, 256)
    peak, end = int(count.argmax()), int(np.flatnonzero(count)[-1])
    if end == peak:
        return float(edges[-1])
    along = np.linspace(0, 1, end - peak + 1)
    below = (1 - along) - count[peak : end + 1] / count[peak]
    return float((edges[:-1] + edges[1:])[peak + int(below.argmax())] / 2)


def spots_of(image: NDArray[np.uint16]) -> tuple[Floats, Floats]:
    """Spots by trackpy, those kept whose mass is above the triangle threshold of all masses."""
    import trackpy

    table = trackpy.locate(image, 7, engine="numba")
    table = table[table["mass"] > triangle_threshold(table["mass"].to_numpy())]
    return table["x"].to_numpy(), table["y"].to_numpy()


def frame_to_frame_speeds(
    track: NDArray[np.int64], frame: NDArray[np.int64], x: Floats, y: Floats, *, frame_s: float
) -> dict[int, float]:
    """Mean displacement from frame to frame over the time between; rows by track, then frame."""
    same = np.diff(track) == 0
    speed = np.hypot(np.diff(x), np.diff(y)) / (np.where(same, np.diff(frame), 1) * frame_s)
    return {
        int(t): float(speed[same & (track[1:] == t)].mean()) for t in np.unique(track[1:][same])
    }


# ---- glidefit ----


def glidefit(images: Images, case: Case) -> Followed | None:
    """glidefit with its default settings; None where it cannot follow such bodies."""
    settings = Settings()
    if case.spots:
        from glidefit.steps.detect import detect_spots
        from glidefit.steps.link import link

        found = detect_spots(images, pixel_um=PIXEL_UM, settings=settings.detect, where="film")
        tracks, _ = link(found, times_s=case.times_s, settings=settings.link, where="film")
        head = None
    else:
        try:
            done = filament_tracks(images, case)
        except ImportError:
            return None
        tracks = done.tracks
        head = done.contour_um[done.contour_offsets[1:] - 1].astype(float)
    return Followed(
        positions=FoundPositions(
            track=tracks.index, frame=tracks.frame, x=tracks.x_um, y=tracks.y_um
        ),
        length_um=tracks.length_um,
        head_x_um=None if head is None else head[:, 0],
        head_y_um=None if head is None else head[:, 1],
        speed_um_s=fitted_speeds(tracks, case, resting=None if case.spots else done.specks),
    )


def filament_tracks(images: Images, case: Case):
    """Tracks and contours of the filaments, with default settings."""
    from glidefit.steps import filaments

    settings = Settings()
    return filaments.track_filaments(
        images,
        pixel_um=PIXEL_UM,
        times_s=case.times_s,
        detect=settings.detect,
        link=settings.link,
        where="film",
    )


def cleaned(tracks, case: Case, *, chamber: str = "c1", resting=None):
    """Tracks as the fit takes them, from a chamber of their own."""
    from glidefit.evidence import CleanRecording
    from glidefit.steps.clean import clean

    return CleanRecording(
        recording=chamber,
        condition="filmed",
        day="2026-03-02",
        chamber=chamber,
        field="f1",
        clean=clean(
            tracks,
            frame_s=case.frame_s,
            settings=Settings().clean,
            where="film",
            resting=resting,
        ),
        frame_s=case.frame_s,
        exposure_s=case.exposure_s,
        field_um=case.field_um,
        minutes=float("nan"),
    )


def fitted_speeds(tracks, case: Case, *, resting=None) -> dict[int, float]:
    """Speed of each kept track by the likelihood of all."""
    from glidefit.steps.fit import fit

    recording = cleaned(tracks, case, resting=resting)
    kept = np.flatnonzero(recording.clean.kept)
    if len(kept) == 0:
        return {}
    speeds, _ = fit([recording], settings=Settings().fit).track_speeds[recording.recording]
    return dict(zip(kept.tolist(), speeds.tolist(), strict=True))


def images_of(path: str) -> Iterator[NDArray[np.uint16]]:
    """Pages of a TIFF, one at a time."""
    import tifffile

    with tifffile.TiffFile(path) as file:
        for page in file.pages:
            yield page.asarray()


if __name__ == "__main__":  # for the cost of the script: its kind of bodies, and a file
    kind, path = sys.argv[1:]
    script(images_of(path), Case(name=path, spots=kind == "spots"))
