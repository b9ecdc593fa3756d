"""A whole run on track tables, pages included, against importing the libraries it stands on.

    python tests/benchmarks/run_cost.py [--repeats 5]

200 tracks of 200 frames, one condition, two days of one chamber. Both are processes of their own,
in turn, in one run; what is printed is a ratio. The first pair is not counted: compiled functions
and fonts are put away then.
"""

from __future__ import annotations

import argparse
import os
import statistics
import subprocess
import sys
import tempfile
from pathlib import Path

import numpy as np

from glidefit.steps.simulate import ScenarioCondition, clean_tracks
from glidefit.writing.recordings import sheet_text, track_table_text

IMPORTS = "import pandas, scipy.stats, scipy.optimize, lmfit, matplotlib.pyplot"
FRAME_S, EXPOSURE_S, N_FRAMES, TRACKS_A_DAY = 0.5, 0.1, 200, 100
CONDITION = ScenarioCondition(
    name="wild type", control=True, speed_um_s=0.8, rotational_diffusion_rad2_s=0.008
)


def write_assay(folder: Path) -> None:
    rng = np.random.default_rng(1)
    rows = []
    for day in ("2026-03-02", "2026-03-03"):
        tracks = clean_tracks(
            TRACKS_A_DAY,
            N_FRAMES,
            condition=CONDITION,
            frame_s=FRAME_S,
            exposure_s=EXPOSURE_S,
            localization_error_um=0.03,
            speed_spread=0.1,
            rng=rng,
        )
        (folder / f"{day}.csv").write_text(track_table_text(tracks), encoding="utf-8", newline="")
        rows.append(
            {
                "recording": f"{day}.csv",
                "condition": CONDITION.name,
                "day": day,
                "chamber": "c1",
                "frame_s": str(FRAME_S),
                "exposure_s": str(EXPOSURE_S),
            }
        )
    (folder / "assay.csv").write_text(sheet_text(rows), encoding="utf-8", newline="")


def processor_time(arguments: list[str], folder: Path) -> float:
    """Of one process in s: the same on a machine that is busy otherwise."""
    before = os.times()
    subprocess.run([sys.executable, *arguments], cwd=folder, check=True, stdout=subprocess.DEVNULL)
    after = os.times()
    used = after.children_user - before.children_user
    return used + after.children_system - before.children_system


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.split("\n")[0])
    parser.add_argument("--repeats", type=int, default=5)
    repeats = parser.parse_args().repeats
    cases = {
        "imports alone": ["-c", IMPORTS],
        "glidefit run": ["-m", "glidefit", "run", "assay.csv", "--out", "run"],
        "glidefit fit": ["-m", "glidefit", "fit", "assay.csv", "--out", "fit"],
    }
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    times: dict[str, list[float]] = {name: [] for name in cases}
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        write_assay(folder)
        for _ in range(repeats + 1):
            for case, arguments in cases.items():
                times[case].append(processor_time(arguments, folder))
    base = statistics.median(times["imports alone"][1:])
    print(f"{2 * TRACKS_A_DAY} tracks × {N_FRAMES} frames, processor time, median of {repeats}")
    for case, values in times.items():
        middle = statistics.median(values[1:])
        print(f"{case:15} {middle:6.2f} s  {middle / base:5.2f} × the imports")


if __name__ == "__main__":
    main()
