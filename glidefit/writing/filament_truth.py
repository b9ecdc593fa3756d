"""The truth of a simulated film of filaments as a table."""

from __future__ import annotations

from collections.abc import Iterator

from glidefit.kernels.filament_truth import FilamentTruth

_LENGTHS = ("x_um", "y_um", "head_x_um", "head_y_um", "tail_x_um", "tail_y_um", "length_um")
FLAGS = ("cut", "stuck", "bundled", "dark", "overlapped")
HEADER = ",".join(("track", "frame", "time_s", *_LENGTHS, "heading_rad", "flags")) + "\r\n"


def filament_truth_rows(truth: FilamentTruth, *, frame: int, frame_s: float) -> Iterator[str]:
    """A line of CSV for each filament of a frame, lengths to 0.1 nm; flags as words."""
    for row, track in enumerate(truth.track):
        lengths = ",".join(f"{getattr(truth, name)[row]:.4f}" for name in _LENGTHS)
        flags = " ".join(name for name in FLAGS if getattr(truth, name)[row])
        heading = truth.heading_rad[row]
        yield f"{track},{frame},{frame * frame_s:.10g},{lengths},{heading:.5f},{flags}\r\n"
