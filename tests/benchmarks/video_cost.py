"""Processor time a frame and memory of `glidefit track`, and of the script, on the same files."""

from __future__ import annotations

import os
import statistics
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np
from numba import njit
from video_cases import PIXEL_UM, Case

from glidefit.writing.recordings import sheet_text, write_video

FEW, MANY = 40, 160  # frames
RADIUS = 6  # of the Gaussian pass, 4 × 1.5 pixels
IMPORTS = (
    "import glidefit.commands.main, glidefit.commands.track_command, glidefit.pipeline.track, "
    "glidefit.steps.detect, glidefit.steps.link, tifffile, pandas, trackpy"
)


@njit(cache=True)
def gaussian_pass(image: np.ndarray, weight: np.ndarray, between: np.ndarray) -> np.ndarray:
    """One separable pass along rows, then columns, edges repeated."""
    height, width = image.shape
    out = np.empty_like(image)
    radius = len(weight) // 2
    for r in range(height):
        for c in range(radius, width - radius):
            total = np.float32(0)
            for k in range(len(weight)):
                total += weight[k] * image[r, c + k - radius]
            between[r, c] = total
        for c in list(range(radius)) + list(range(width - radius, width)):
            total = np.float32(0)
            for k in range(len(weight)):
                total += weight[k] * image[r, min(max(c + k - radius, 0), width - 1)]
            between[r, c] = total
    for r in range(height):
        out[r] = 0
        for k in range(len(weight)):
            row = min(max(r + k - radius, 0), height - 1)
            for c in range(width):
                out[r, c] += weight[k] * between[row, c]
    return out


def pass_s(side_px: int) -> float:
    """Processor time of one Gaussian pass of σ = 1.5 pixels."""
    offset = np.arange(-RADIUS, RADIUS + 1)
    weight = np.exp(-(offset**2) / (2 * 1.5**2)).astype(np.float32)
    weight /= weight.sum()
    image = np.random.default_rng(1).normal(100, 5, (side_px, side_px)).astype(np.float32)
    between = np.empty_like(image)
    gaussian_pass(image, weight, between)
    times = []
    for _ in range(15):
        begun = time.process_time()
        gaussian_pass(image, weight, between)
        times.append(time.process_time() - begun)
    return statistics.median(times)


def print_costs(*, side_px: int, repeats: int = 3) -> None:
    """Marginal processor time between 40 and 160 frames, and peak memory."""
    print(f"processor time and memory, {side_px} × {side_px}, {FEW} and {MANY} frames")
    idle_mb = child(["-c", IMPORTS], Path.cwd())[1]
    with tempfile.TemporaryDirectory() as name:
        for kind in ("filaments", "spots"):
            folder = Path(name) / kind
            folder.mkdir()
            for n in (FEW, MANY):
                write(folder / f"{n}.ome.tif", kind, n_frames=n, side_px=side_px)
                row = {
                    "recording": f"{n}.ome.tif",
                    "condition": "a",
                    "day": "2026-03-02",
                    "chamber": "c1",
                    "shape": kind.removesuffix("s"),
                }
                (folder / f"{n}.csv").write_text(sheet_text([row]), encoding="utf-8", newline="")
            for who in ("script", "glidefit"):
                cost = marginal(who, kind, folder, repeats=repeats)
                passes = cost[0] / pass_s(side_px)
                print(
                    f"  {kind:10s} {who:9s} {1e3 * cost[0]:6.0f} ms a frame, {passes:5.1f} "
                    f"Gaussian passes; memory {cost[2] - cost[1]:+.0f} MB from {FEW} to {MANY} "
                    f"frames, {cost[2] - idle_mb:+.0f} MB over the imports",
                    flush=True,
                )


def write(path: Path, kind: str, *, n_frames: int, side_px: int) -> None:
    """A film of 40 bodies in 1024 × 1024 pixels at SNR 4."""
    case = Case(name=kind, side_px=side_px, n_frames=n_frames, spots=kind == "spots")
    write_video(
        path,
        (frame.image for frame in case.video.frames()),
        n_frames=n_frames,
        pixel_um=PIXEL_UM,
        frame_s=case.frame_s,
        exposure_s=case.exposure_s,
    )


def marginal(who: str, kind: str, folder: Path, *, repeats: int) -> tuple[float, float, float]:
    """Seconds a frame, peak memory in MB with few and with many frames; medians."""
    commands = {
        "script": lambda n: [
            str(Path(__file__).with_name("video_trackers.py")),
            kind,
            f"{n}.ome.tif",
        ],
        "glidefit": lambda n: [
            *("-m", "glidefit", "track", f"{n}.csv", "--out", f"tracks{n}", "--workers", "1")
        ],
    }
    child(commands[who](FEW), folder)  # compiles
    runs = [[child(commands[who](n), folder) for n in (FEW, MANY)] for _ in range(repeats)]
    seconds = [(many[0] - few[0]) / (MANY - FEW) for few, many in runs]
    memory = [statistics.median(run[k][1] for run in runs) for k in (0, 1)]
    return statistics.median(seconds), memory[0], memory[1]


def child(arguments: list[str], folder: Path) -> tuple[float, float]:
    """Processor time in s and peak memory in MB of a process of its own."""
    environment = {**os.environ, "OPENBLAS_NUM_THREADS": "1", "NUMBA_NUM_THREADS": "1"}
    process = subprocess.Popen(
        [sys.executable, *arguments], cwd=folder, env=environment, stdout=subprocess.DEVNULL
    )
    _, status, usage = os.wait4(process.pid, 0)
    process.returncode = os.waitstatus_to_exitcode(status)
    if process.returncode:
        raise RuntimeError(f"{' '.join(arguments)} ended with {process.returncode}")
    return usage.ru_utime + usage.ru_stime, usage.ru_maxrss / 1024
