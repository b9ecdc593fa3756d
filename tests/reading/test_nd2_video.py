"""ND2 files, against a stand-in for the optional package: no such file can be written here."""

import sys
from collections import namedtuple
from types import ModuleType, SimpleNamespace

import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal

from glidefit.errors import InputError
from glidefit.reading.video import read_facts, read_frames

Voxel = namedtuple("Voxel", "x y z")
RNG = np.random.default_rng(2)
FRAMES = RNG.integers(1, 2**16, (2, 4, 2, 6, 5), dtype=np.uint16)  # field, time, channel, y, x


class StandIn:
    """As the class of the package: what it has in a file of 2 fields, 4 times, 2 channels."""

    frames = FRAMES
    pixel = Voxel(0.11, 0.11, 1.0)
    is_rgb = False

    def __init__(self, path):
        if not path.read_bytes().startswith(b"\xda\xce\xbe\x0a"):
            raise OSError("not recognized as an ND2 file")

    def __enter__(self):
        return self

    def __exit__(self, *error):
        return None

    @property
    def dtype(self):
        return self.frames.dtype

    @property
    def sizes(self):
        return {k: n for k, n in zip("PTCYX", self.frames.shape, strict=True) if n != 1}

    @property
    def loop_indices(self):
        fields, times = self.frames.shape[:2]
        return tuple({"P": p, "T": t} for p in range(fields) for t in range(times))

    def voxel_size(self):
        return self.pixel

    def frame_metadata(self, k):
        times = [SimpleNamespace(time=SimpleNamespace(relativeTimeMs=250.0 * k))] * 2
        return SimpleNamespace(channels=times)

    def read_frame(self, k):
        return self.frames.reshape(-1, *self.frames.shape[2:])[k].squeeze()


@pytest.fixture
def path(tmp_path, monkeypatch):
    module = ModuleType("nd2")
    module.ND2File = type("ND2File", (StandIn,), {})
    monkeypatch.setitem(sys.modules, "nd2", module)
    (tmp_path / "film.nd2").write_bytes(b"\xda\xce\xbe\x0a")
    return tmp_path / "film.nd2"


def error_of(path, **choice):
    with pytest.raises(InputError) as error:
        read_facts(path, **choice)
    return str(error.value)


def test_facts_and_frames_of_a_channel_and_position(path):
    facts = read_facts(path, channel=1, position=1)
    assert (facts.n_frames, facts.height_px, facts.width_px, facts.dtype) == (4, 6, 5, "uint16")
    assert facts.pixel_um == 0.11
    assert_allclose(facts.times_s, [0, 0.25, 0.5, 0.75], rtol=1e-12)
    assert (facts.frame_s, facts.exposure_s) == (0.25, None)
    frames = list(read_frames(path, channel=1, position=1, first=1))
    assert_array_equal(np.array(frames), FRAMES[1, 1:, 1])


def test_a_channel_and_a_position_must_be_chosen(path):
    assert "2 positions; expected one position to analyse" in error_of(path)
    assert "2 channels; expected one channel to analyse" in error_of(path, position=0)


def test_one_channel_and_one_position_need_no_choice(path):
    sys.modules["nd2"].ND2File.frames = FRAMES[:1, :, :1]
    assert_array_equal(np.array(list(read_frames(path))), FRAMES[0, :, 0])


def test_a_scale_of_one_is_that_of_a_file_without(path):
    sys.modules["nd2"].ND2File.pixel = Voxel(1.0, 1.0, 1.0)
    assert read_facts(path, channel=0, position=0).pixel_um is None


def test_a_frame_of_zeros_is_a_missing_frame(path):
    frames = FRAMES.copy()
    frames[0, 2] = 0
    sys.modules["nd2"].ND2File.frames = frames
    with pytest.raises(InputError) as error:
        list(read_frames(path, channel=0, position=0))
    assert str(error.value) == (
        f"{path}, frame 2: this frame is missing; expected a complete video. Copy the file again"
        " from where it was recorded and compare the sizes."
    )


def test_a_frame_that_cannot_be_decoded_is_named(path, monkeypatch):
    def broken(self, k):
        raise ValueError("incorrect header check")

    monkeypatch.setattr(sys.modules["nd2"].ND2File, "read_frame", broken)
    assert f"{path}, frame 0: it cannot be decoded (incorrect header check); " in error_of(
        path, channel=0, position=0
    )


def test_a_file_that_is_no_nd2_is_named(path):
    path.write_bytes(b"other")
    assert error_of(path).startswith(
        f"{path}: it cannot be decoded (not recognized as an ND2 file); expected a complete video"
    )


def test_colour_is_refused(path):
    sys.modules["nd2"].ND2File.is_rgb = True
    assert "colour frames, 3 values per pixel" in error_of(path)


def test_without_the_package_the_command_that_installs_it_is_told(tmp_path, monkeypatch):
    monkeypatch.setitem(sys.modules, "nd2", None)
    (tmp_path / "film.nd2").write_bytes(b"\xda\xce\xbe\x0a")
    assert error_of(tmp_path / "film.nd2") == (
        f"{tmp_path}/film.nd2: an ND2 file, and the package that reads it is not installed;"
        " expected the optional package nd2. Install it with: pip install 'glidefit[nd2]'. Or"
        " export the recording as OME-TIFF."
    )
