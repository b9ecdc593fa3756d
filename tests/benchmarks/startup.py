"""Start of the program over bare Python, all in one run and in turn.

    python tests/benchmarks/startup.py [--repeats 15]

Wall time is what a person waits; processor time is the same on a machine that is busy otherwise.
"""

from __future__ import annotations

import argparse
import os
import statistics
import subprocess
import sys
import time

CASES = {
    "python -c pass": ["-c", "pass"],
    "glidefit --help": ["-m", "glidefit", "--help"],
    "glidefit simulate --help": ["-m", "glidefit", "simulate", "--help"],
    "glidefit run --help": ["-m", "glidefit", "run", "--help"],
}


def measured(arguments: list[str]) -> tuple[float, float]:
    """Wall and processor time of one process in s."""
    before, start = os.times(), time.perf_counter()
    subprocess.run([sys.executable, *arguments], check=True, stdout=subprocess.DEVNULL)
    wall, after = time.perf_counter() - start, os.times()
    used = after.children_user - before.children_user
    return wall, used + after.children_system - before.children_system


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.split("\n")[0])
    parser.add_argument("--repeats", type=int, default=15)
    repeats = parser.parse_args().repeats
    times: dict[str, list[tuple[float, float]]] = {name: [] for name in CASES}
    for _ in range(repeats):
        for name, arguments in CASES.items():
            times[name].append(measured(arguments))
    bare = [statistics.median(column) for column in zip(*times["python -c pass"], strict=True)]
    print(f"median of {repeats}          wall s  over bare  ratio    processor s  over bare  ratio")
    for name, values in times.items():
        middles = map(statistics.median, zip(*values, strict=True))
        columns = [
            f" {middle:8.3f} {middle - base:10.3f} {middle / base:6.1f}   "
            for middle, base in zip(middles, bare, strict=True)
        ]
        print(f"{name:25}" + "".join(columns))


if __name__ == "__main__":
    main()
