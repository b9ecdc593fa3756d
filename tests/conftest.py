"""Browser tests run where Chromium is; elsewhere they are left out, and the run says so.

And the results of a finished run, for what is made of results.
"""

from __future__ import annotations

import importlib.util
import os
import shutil

import hypothesis
import numpy as np
import pytest
from scipy import stats

from glidefit.quantities import QUANTITIES
from glidefit.results import (
    ChamberResult,
    ConditionResult,
    Counts,
    Drift,
    Estimate,
    LevelSpread,
    RecordingResult,
    SettingRow,
    StudyResult,
    TrackResult,
)

# How long an example takes says more of the machine than of the code.
hypothesis.settings.register_profile("glidefit", deadline=None)
hypothesis.settings.load_profile("glidefit")

_HAS_BROWSER = bool(shutil.which("chromium")) and bool(importlib.util.find_spec("playwright"))
_left_out = 0


def pytest_collection_modifyitems(config, items):
    if _HAS_BROWSER:
        return
    if os.environ.get("GLIDEFIT_BROWSER") == "required":
        raise pytest.UsageError("browser tests are required, but Chromium or playwright is missing")
    browser = [item for item in items if item.get_closest_marker("browser")]
    global _left_out
    _left_out = len(browser)
    config.hook.pytest_deselected(items=browser)
    items[:] = [item for item in items if not item.get_closest_marker("browser")]


def pytest_terminal_summary(terminalreporter):
    if _left_out:
        terminalreporter.write_line(
            f"{_left_out} browser tests left out: they need Chromium and playwright"
        )


FILMED = {  # name: speed, rotational diffusion, motile fraction, days
    "wild type": (0.8, 0.03, 0.85, 3),
    "loop mutant": (0.5, 0.02, 0.75, 3),
    "long neck": (0.82, 0.05, 0.8, 3),
    "wild type, quantum dots": (0.8, 0.03, 0.9, 1),
}
FRAMES, FILAMENTS, STUCK = 60, 16, 2
SPREADS = {  # SD between days and chambers, error of the mean from tracks; relative
    "speed_um_s": (0.05, 0.03, 0.006),
    "rotational_diffusion_rad2_s": (0.10, 0.08, 0.08),
    "motile_fraction": (0.04, 0.03, 0.02),
}


def _finished_condition(name, rng):
    *means, n_days = FILMED[name]
    days = [f"2026-03-{d + 2:02d}" for d in range(n_days)]
    truth = dict(zip(SPREADS, means, strict=True))
    values = {
        key: truth[key]
        * (1 + day * rng.standard_normal((n_days, 1)) + chamber * rng.standard_normal((n_days, 2)))
        for key, (day, chamber, _) in SPREADS.items()
    }
    chambers, tracks, recordings = [], [], []
    for d, day in enumerate(days):
        for c, chamber in enumerate(("c1", "c2")):
            recording = f"{name}_{day}_{chamber}"
            own = {key: float(values[key][d, c]) for key in SPREADS}
            chambers.append(
                ChamberResult(
                    day=day,
                    chamber=chamber,
                    tracks_kept=FILAMENTS - STUCK,
                    frames_kept=FRAMES * (FILAMENTS - STUCK),
                    frame_speed_um_s=own["speed_um_s"],
                    **own,
                )
            )
            recordings.append(_finished_recording(recording, name, day, chamber))
            tracks += [
                TrackResult(
                    recording=recording,
                    day=day,
                    chamber=chamber,
                    track=str(t),
                    kept=t >= STUCK,
                    set_aside_reason="" if t >= STUCK else "stuck",
                    n_positions=FRAMES,
                    duration_s=0.5 * (FRAMES - 1),
                    net_advance_um=10.0,
                    path_um=12.0,
                    speed_um_s=own["speed_um_s"],
                )
                for t in range(FILAMENTS)
            ]
    n = len(chambers)
    condition = ConditionResult(
        condition=name,
        slug=name.replace(", ", "-").replace(" ", "-"),
        control=name == "wild type",
        model="active",
        counts=Counts(
            days=n_days,
            chambers=n,
            recordings=n,
            tracks_seen=n * FILAMENTS,
            tracks_kept=n * (FILAMENTS - STUCK),
            set_aside={"stuck": n * STUCK},
            frames_seen=n * FILAMENTS * FRAMES,
            frames_kept=n * (FILAMENTS - STUCK) * FRAMES,
            frames_set_aside={"stuck": n * STUCK * FRAMES},
        ),
        estimates=_finished_estimates(values),
        problems=(),
        msd=(),
        heading_correlation=(),
        chambers=tuple(chambers),
        tracks=tuple(tracks),
        drawn=(),
        time_points=(),
        spread=tuple(
            LevelSpread(quantity=key, level="tracks", units=len(tracks), relative_error=error)
            for key, (_, _, error) in SPREADS.items()
        ),
        generalises="",
        longest_lag_s=5.0,
        heading_diffusion_rad2_s=means[1],
        methods="",
    )
    return condition, recordings


def _finished_estimates(values):
    """Mean of day means, and Student's t over days, or over the chambers of one day."""
    found = {key: Estimate() for key in QUANTITIES}
    for key, table in values.items():
        units = table.mean(axis=1) if len(table) > 1 else table[0]
        half = stats.t.ppf(0.975, len(units) - 1) * stats.sem(units)
        mean = float(units.mean())
        found[key] = Estimate(value=mean, low=mean - half, high=mean + half)
    speed = found["speed_um_s"].value
    return found | {
        "localization_error_um": Estimate(value=0.03),
        "translational_diffusion_um2_s": Estimate(value=0.003),
        "speed_spread_um_s": Estimate(value=0.08 * speed),
    }


def _finished_recording(recording, condition, day, chamber):
    return RecordingResult(
        recording=recording,
        condition=condition,
        day=day,
        chamber=chamber,
        kind="track table",
        shape="filament",
        sha256="ab" * 32,
        n_frames=FRAMES,
        frame_s=0.5,
        frame_s_source="sheet",
        pixel_um=float("nan"),
        pixel_um_source="",
        exposure_s=0.1,
        exposure_source="sheet",
        field_um=(60.0, 60.0),
        localization_error_um=0.031,
        smallest_speed_um_s=0.01,
        drift=Drift(
            measured=False,
            subtracted=False,
            n_objects=0,
            speed_um_s=float("nan"),
            largest_um=0.0,
            note="",
        ),
        tracks_seen=FILAMENTS,
        tracks_kept=FILAMENTS - STUCK,
        set_aside={"stuck": STUCK},
        problems=(),
    )


@pytest.fixture(scope="session")
def finished_study():
    """Three conditions of three days × two chambers and one of a single day, without curves."""
    rng = np.random.default_rng(15)
    made = [_finished_condition(name, rng) for name in FILMED]
    return StudyResult(
        name="assay",
        conditions=tuple(condition for condition, _ in made),
        comparisons=(),
        recordings=tuple(r for _, recordings in made for r in recordings),
        settings=(
            SettingRow(
                key="interval.resamples", value="400", unit="", source="option", help="Resamples."
            ),
        ),
        problems=(),
        seed=1,
        version="0.1.0",
        sheet_sha256="cd" * 32,
    )


@pytest.fixture(scope="session")
def finished_run(finished_study, tmp_path_factory):
    """The folder of that run; not to be written to."""
    from glidefit.writing.json_files import results_text

    folder = tmp_path_factory.mktemp("reports") / "assay"
    folder.mkdir()
    (folder / "results.json").write_text(results_text(finished_study), encoding="utf-8")
    return folder
