"""Paths of filaments in a gliding assay whose truth is known.

Coordinates as everywhere: µm, x to the right, y down; a frame's time is the start of its exposure.
"""

from glidefit.kernels.simulation.field import (
    positions_around,
    seen,
    seen_active,
    stage_drift,
    tracks_of,
)
from glidefit.kernels.simulation.paths import (
    active_paths,
    detached_motion,
    pivoting_paths,
    standing_paths,
    step_lengths,
)
from glidefit.kernels.simulation.records import (
    ExposedPaths,
    FrameTiming,
    Motion,
    PathState,
    SeenPositions,
    SimulatedTracks,
    Turning,
    View,
    turning_scale,
)

__all__ = [
    "ExposedPaths",
    "FrameTiming",
    "Motion",
    "PathState",
    "SeenPositions",
    "SimulatedTracks",
    "Turning",
    "View",
    "active_paths",
    "detached_motion",
    "pivoting_paths",
    "positions_around",
    "seen",
    "seen_active",
    "stage_drift",
    "standing_paths",
    "step_lengths",
    "tracks_of",
    "turning_scale",
]
