"""A sheet with a filament video, from the file to tracks, tables and pages."""

from __future__ import annotations

import csv

import numpy as np
import pytest

from glidefit.assay import Recording
from glidefit.errors import InputError
from glidefit.kernels.filament_optics import FilamentOptics
from glidefit.kernels.filament_population import FilamentLaw, make_filament_video
from glidefit.kernels.simulation import FrameTiming
from glidefit.pipeline.check import look
from glidefit.pipeline.prepare import Task, prepare
from glidefit.pipeline.track import track_videos
from glidefit.settings import Settings, resolve
from glidefit.writing.recordings import write_video

PIXEL, FRAME_S = 0.13, 0.5


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    folder = tmp_path_factory.mktemp("films")
    video = make_filament_video(
        seed=3,
        shape_px=(256, 256),
        timing=FrameTiming(frame_s=FRAME_S, n_frames=15, exposure_s=0.05),
        law=FilamentLaw(in_field=6.0, length_um=5.0, length_spread=0.3),
        optics=FilamentOptics.with_signal_to_noise(5.0, pixel_um=PIXEL),
        speed_um_s=0.8,
    )
    frames = [f.image for f in video.frames()]
    for name, images in (("a", frames), ("dark", [1000 - f for f in frames])):
        write_video(
            folder / f"{name}.ome.tif",
            iter([i.astype(np.uint16) for i in images]),
            n_frames=15,
            pixel_um=PIXEL,
            frame_s=FRAME_S,
            exposure_s=0.05,
        )
    head = "recording,condition,day,chamber,shape\r\n"
    text = head + "a.ome.tif,x,d1,c1,filament\r\n"
    (folder / "assay.csv").write_text(text, encoding="utf-8")
    return folder


def task(path, **detect):
    recording = Recording(
        name=path.name,
        path=path,
        condition="x",
        day="d1",
        chamber="c1",
        where="assay.csv, row 2",
        shape="filament",
    )
    settings = Settings.model_validate({"detect": detect})
    return Task(recording=recording, settings=settings)


def test_prepared_filaments(folder):
    prepared = prepare(task(folder / "a.ome.tif"))
    clean = prepared.clean.clean
    assert prepared.result.kind == "video"
    assert prepared.result.shape == "filament"
    assert clean.kept.sum() >= 4
    assert clean.tracks.length_um is not None
    assert np.all(clean.tracks.flag[np.isin(clean.tracks.index, np.flatnonzero(clean.kept))] == "")
    assert 0.6 < clean.typical_speed_um_s < 1.0


def test_dark_filaments_are_followed_alike(folder):
    bright = prepare(task(folder / "a.ome.tif")).clean.clean.tracks
    dark = prepare(task(folder / "dark.ome.tif", contrast="dark")).clean.clean.tracks
    np.testing.assert_allclose(dark.x_um, bright.x_um, atol=1e-4)


def test_check_looks_at_filaments(folder):
    seen = look(task(folder / "a.ome.tif"))
    assert seen.seen.endswith("filaments a frame")
    assert float(seen.seen.split()[0]) > 3
    assert 0.6 < seen.quick_speed_um_s < 1.0


def test_tracked_tables_have_heading_length_and_flag(folder, tmp_path):
    done = track_videos(
        (folder / "assay.csv",), tmp_path / "tracked", settings=resolve(), workers=1
    )
    assert done.n_tracks >= 5
    table = next((tmp_path / "tracked" / "tracks").glob("*.csv"))
    rows = list(csv.DictReader(table.read_text(encoding="utf-8").splitlines()))
    assert set(rows[0]) >= {"heading_rad", "length_um", "flag"}
    assert {row["flag"] for row in rows} >= {"", "cut by the edge"}


def test_a_video_of_noise_says_that_there_is_nothing(tmp_path):
    rng = np.random.default_rng(1)
    path = tmp_path / "noise.ome.tif"
    frames = (rng.poisson(20, (128, 128)).astype(np.uint16) for _ in range(5))
    write_video(path, frames, n_frames=5, pixel_um=PIXEL, frame_s=FRAME_S, exposure_s=0.05)
    with pytest.raises(InputError, match="no filament stands out of the noise"):
        prepare(task(path))
    assert any("no filament stands out" in note for note in look(task(path)).notes)
