"""Where each number of a fit stands among the columns of the evidence."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from glidefit.kernels import msd_fit
from glidefit.steps.fit.intervals import Interval

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

SCALARS = (
    *msd_fit.PARAMETERS,
    "speed_variance",
    "frame_speed",
    "heading_diffusion",
    "msd_speed",  # the second opinion
    "msd_rotational_diffusion",
    "turning_rate",  # of circling paths
    "turning_rate_variance",
    "sideways_diffusion",  # where a person frees it
    "error_variance_along",
    "stop_rate",  # of pausing filaments
    "go_rate",
    "diffusion",  # without propulsion
    "squared_speed",
)
COLUMN = {name: i for i, name in enumerate(SCALARS)}


@dataclass(frozen=True, slots=True, kw_only=True)
class CurveColumns:
    """Where the points of one frame interval stand; measured and fitted curves."""

    frame_s: float
    lag_s: Floats
    fitted: Bools
    msd: slice
    model: slice
    heading_lag_s: Floats
    heading_fitted: Bools
    heading: slice
    heading_model: slice


def curve_columns(intervals: Sequence[Interval], longest: float) -> tuple[CurveColumns, ...]:
    """Columns of the curves of every frame interval, one after the other behind the scalars."""
    place, columns = len(SCALARS), []

    def taken(n: int) -> slice:
        nonlocal place
        place += n
        return slice(place - n, place)

    for interval in intervals:
        n, k = len(interval.lag_s), len(interval.heading_lags)
        heading_lag = interval.heading_lags.astype(np.float64) * interval.frame_s
        columns.append(
            CurveColumns(
                frame_s=interval.frame_s,
                lag_s=interval.lag_s,
                fitted=interval.lag_s <= longest * (1 + 1e-9),
                msd=taken(n),
                model=taken(n),
                heading_lag_s=heading_lag,
                heading_fitted=heading_lag <= longest * (1 + 1e-9),
                heading=taken(k),
                heading_model=taken(k),
            )
        )
    return tuple(columns)
