"""What travels from cleaning to fitting and from fitting to the intervals."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from glidefit.results import Drift
from glidefit.tracks import Tracks

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

KEPT = ""
STUCK, PIVOTING, DETACHED, JUMP, SHORT = "stuck", "pivoting", "detached", "jump", "short"
UNCLEAR = "unclear"  # flagged in all but a few positions
REASONS = (STUCK, PIVOTING, DETACHED, JUMP, SHORT, UNCLEAR)
MIN_POSITIONS = 3  # fewer are no track, but they are counted


@dataclass(frozen=True, slots=True, kw_only=True)
class CleanTracks:
    """The tracks of one recording, drift subtracted, each with its verdict.

    Parameters
    ----------
    tracks : Tracks
        All tracks of the recording.
    reason : (m,) array of str
        "" for a kept track, else why it was set aside.
    decided : (m,) array of bool
        False for a track that says too little of whether it glides.
    gliding_probability : (m,) array
        By likelihood; NaN for a track that is no track or jumps.
    noise_um : float
        Localization error measured on the tracks, per coordinate.
    typical_speed_um_s : float
        Median over the tracks that advance; NaN if none does.
    smallest_speed_um_s : float
        A track of median duration that is slower than this reads as stuck.
    drift : Drift
    drift_x_um, drift_y_um : (n_frames,) arrays
        Subtracted displacement by frame; zeros if none was.
    flagged : Tracks or None
        Positions that are not to be trusted and stand in no other field.
    """

    tracks: Tracks
    reason: NDArray[np.str_]
    decided: Bools
    gliding_probability: Floats
    noise_um: float
    typical_speed_um_s: float
    smallest_speed_um_s: float
    drift: Drift
    drift_x_um: Floats
    drift_y_um: Floats
    flagged: Tracks | None = None

    @property
    def kept(self) -> Bools:
        """True for tracks that enter the fit, (m,)."""
        return np.asarray(self.reason == KEPT)


@dataclass(frozen=True, slots=True, kw_only=True)
class CleanRecording:
    """A cleaned recording with what the fit must know of it."""

    recording: str
    condition: str
    day: str
    chamber: str
    field: str  # recordings of one field of view are one sample
    clean: CleanTracks
    frame_s: float
    exposure_s: float  # as the fit assumes it
    field_um: tuple[float, float]
    minutes: float  # after the start in the chamber; NaN if unknown


@dataclass(frozen=True, slots=True, kw_only=True)
class ChamberEvidence:
    """What one chamber says: values, and how each track moves them.

    Drawing track i once more moves the values by ``influence[i]``, to first order: for a
    likelihood its score over the information, for least squares its estimating function over
    the curvature. One resampler serves both.

    Parameters
    ----------
    values : (p,) array
        NaN where the chamber cannot tell.
    influence : (m, p) array
    recording_of_track : (m,) array of int
        Index of the recording (field of view) within the chamber.
    filaments : (p,) array, optional
        For fractions: how many filaments of equal weight tell each value.
    """

    day: str
    chamber: str
    values: Floats
    influence: Floats
    recording_of_track: Ints
    filaments: Floats | None = None

    def __post_init__(self) -> None:
        if self.influence.shape != (len(self.recording_of_track), len(self.values)):
            raise ValueError(f"influence is {self.influence.shape}")


@dataclass(frozen=True, slots=True, kw_only=True)
class Combined:
    """Values of a condition, and resamples of the level to which they generalise.

    Parameters
    ----------
    value : (p,) array
        Mean of day means of chamber values.
    draws : (b, p) array
        The same from resamples of the highest level that repeats, spread made unbiased for its
        number of units; NaN in columns where no level repeats.
    units : (p,) array of int
        Units of that level that can tell the column.
    covers : str
        "days", "chambers", or "" where nothing repeats.
    level_error : dict of str: (s,) array
        Standard error of the first s values brought by each level alone; NaN where it does not
        repeat.
    level_units : dict of str: int
    by_chamber : (c, s) array, optional
        Those first values of each chamber.
    filaments : (u, p) array, optional
        For fractions: filaments that tell each value, by unit of that level.
    """

    value: Floats
    draws: Floats
    units: Ints
    covers: str
    level_error: dict[str, Floats]
    level_units: dict[str, int]
    by_chamber: Floats | None = None
    filaments: Floats | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class TrackDiffusion:
    """Rotational diffusion of each kept track of a recording, (k,) arrays.

    Parameters
    ----------
    value, low, high : arrays
        Median and 68 % interval of the posterior, in rad²/s; NaN where there is a ``problem``,
        but for the high end of a track that cannot be told from a straight one.
    problem : array of str
        Why there is no value.
    """

    value: Floats
    low: Floats
    high: Floats
    problem: NDArray[np.object_]


@dataclass(frozen=True, slots=True, kw_only=True)
class BorrowedSpread:
    """How far a quantity of one condition scatters, as other conditions of the study tell it.

    Parameters
    ----------
    half_width : float
        Of the interval, on the scale on which it is made.
    df : int
        Degrees of freedom.
    covers : str
        Level to which the interval then generalises: "days" or "chambers".
    sources : tuple of str
        The conditions that it was taken from, without the one it is for.
    method : str
    """

    half_width: float
    df: int
    covers: str
    sources: tuple[str, ...]
    method: str
