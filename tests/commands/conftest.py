"""A folder to work in, the command line, and one small simulated study for all tests."""

from __future__ import annotations

import os
import shutil
import subprocess
import sys
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest

from glidefit.commands.main import main
from glidefit.pipeline.simulate import simulate

RECIPE = """
[[part]]
name = "tables"
seed = 7
field_um = [60.0, 60.0]
frame_s = 0.5
n_frames = 40
exposure_s = 0.1
days = 2
chambers_per_day = 1
filaments_in_field = 14.0
stuck_fraction = 0.15
conditions = [
    { name = "control", control = true, speed_um_s = 0.8, rotational_diffusion_rad2_s = 0.01 },
    { name = "mutant", speed_um_s = 0.5, rotational_diffusion_rad2_s = 0.02 },
]

[[part]]
name = "videos"
chamber_prefix = "q"
seed = 7
field_um = [20.0, 20.0]
pixel_um = 0.16
frame_s = 0.5
n_frames = 12
exposure_s = 0.1
exposed_steps = 3
days = 1
chambers_per_day = 2
filaments_in_field = 12.0
video = { signal_to_noise = 10.0 }
conditions = [
    { name = "dots", speed_um_s = 0.8, rotational_diffusion_rad2_s = 0.008 },
]
"""
SHEET = "recording,condition,day,chamber,frame_s,exposure_s"


@dataclass(frozen=True)
class Said:
    """What a command left on the screen."""

    code: int
    out: str
    err: str


class Desk:
    """A folder in which a user works; the current one."""

    def __init__(self, folder, monkeypatch, capsys):
        self.folder, self._monkeypatch, self._capsys = folder, monkeypatch, capsys
        monkeypatch.chdir(folder)

    def glidefit(self, *args):
        """Run a command inside this process, as the installed program would."""
        self._monkeypatch.setattr(sys, "argv", ["glidefit", *map(str, args)])
        self._capsys.readouterr()
        code = 0
        try:
            main()
        except SystemExit as stop:
            code = stop.code
        out, err = self._capsys.readouterr()
        assert "Traceback" not in out + err
        return Said(code, out, err)

    def write(self, name, text):
        path = self.folder / name
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_text(text, encoding="utf-8")
        return name

    def table(self, name, *, speed=0.8, seed=1, n_tracks=6, n_frames=20, change=None):
        """Tracks of simple gliders; ``change`` replaces lines by number, 1 is the header."""
        rng = np.random.default_rng(seed)
        lines = ["track,frame,x_um,y_um"]
        for track in range(1, n_tracks + 1):
            heading = rng.uniform(0, 2 * np.pi) + np.cumsum(rng.normal(0, 0.08, n_frames))
            steps = 0.5 * speed * np.stack([np.cos(heading), np.sin(heading)])
            x, y = rng.uniform(0, 40, (2, 1)) + np.cumsum(steps, 1)
            x, y = rng.normal([x, y], 0.03)
            lines += [f"{track},{k},{x[k]:.4f},{y[k]:.4f}" for k in range(n_frames)]
        for number, line in (change or {}).items():
            lines[number - 1] = line
        return self.write(name, "\n".join(lines) + "\n")

    def sheet(self, *rows, name="assay.csv", header=SHEET):
        return self.write(name, "\n".join([header, *rows]) + "\n")

    def two_conditions(self):
        """A sheet of two small tables."""
        self.table("a.csv")
        self.table("b.csv", seed=2, speed=0.5)
        return self.sheet("a.csv,wild type,d1,c1,0.5,0.1", "b.csv,mutant,d1,c2,0.5,0.1")

    def files(self, folder="."):
        """Every file below a folder with its bytes."""
        root = self.folder / folder
        return {
            p.relative_to(root).as_posix(): p.read_bytes()
            for p in sorted(root.rglob("*"))
            if p.is_file()
        }


@pytest.fixture
def desk(tmp_path, monkeypatch, capsys):
    return Desk(tmp_path, monkeypatch, capsys)


@pytest.fixture(scope="session")
def simulated(tmp_path_factory):
    """assay.csv of four tables and two videos; tables.csv and videos.csv have one kind each."""
    folder = tmp_path_factory.mktemp("simulated")
    recipe = folder / "recipe.toml"
    recipe.write_text(RECIPE, encoding="utf-8")
    simulate(recipe, folder / "study")
    head, *rows = (folder / "study/assay.csv").read_text(encoding="utf-8").splitlines()
    for kind in ("tables", "videos"):
        chosen = [row for row in rows if ("videos/" in row) == (kind == "videos")]
        text = "\n".join([head, *chosen]) + "\n"
        (folder / f"study/{kind}.csv").write_text(text, encoding="utf-8")
    return folder / "study"


@pytest.fixture
def study(simulated, desk):
    """A copy of the simulated study as the folder ``study`` of the desk."""
    shutil.copytree(simulated, desk.folder / "study")
    return "study"


@pytest.fixture
def process(tmp_path):
    """Run Python code, or with ``program=True`` the program, as a process of its own."""

    def call(*args, program=False, cwd=tmp_path):
        command = [sys.executable, "-m", "glidefit", *args]
        if not program:
            command = [sys.executable, "-c", *args]
        done = subprocess.run(
            command,
            cwd=Path(cwd),
            capture_output=True,
            text=True,
            env=os.environ | {"OPENBLAS_NUM_THREADS": "1"},
            check=False,
            timeout=600,
        )
        return Said(done.returncode, done.stdout, done.stderr)

    return call


@pytest.fixture
def sheet(desk):
    return desk.two_conditions()


@pytest.fixture(scope="session")
def finished(tmp_path_factory):
    """Place of a finished run of ``sheet``, made by the first test that needs it."""
    return tmp_path_factory.mktemp("finished") / "assay"


@pytest.fixture
def report(desk, sheet, finished):
    """The report of an earlier run."""
    if not finished.exists():
        assert desk.glidefit("run", sheet, "--out", finished).code == 0
    shutil.copytree(finished, desk.folder / "reports/assay")
    return "reports/assay"
