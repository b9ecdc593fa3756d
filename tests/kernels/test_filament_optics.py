"""Brightness of filaments and short bodies from their signal to noise."""

from __future__ import annotations

import pytest

from glidefit.kernels.filament_optics import FilamentOptics, FilmFaults
from glidefit.kernels.synthetic_frames import SpotOptics


def test_signal_to_noise_is_that_asked_for():
    optics = FilamentOptics.with_signal_to_noise(4.0)
    # peak² = 16 (peak + 20 + 1.6²), solved by hand.
    assert optics.peak_photons == pytest.approx(8 + (64 + 16 * 22.56) ** 0.5, rel=1e-12)
    assert optics.signal_to_noise == pytest.approx(4.0, rel=1e-12)


def test_a_short_body_is_as_bright_as_a_spot():
    body = FilamentOptics.with_signal_to_noise(5.0, body_um=0.01, labels_per_um=0)
    spot = SpotOptics.with_signal_to_noise(
        5.0, psf_um=0.13, pixel_um=0.13, background_photons=20, read_noise=1.6
    )
    assert body.photons_per_um * 0.01 == pytest.approx(spot.photons, rel=1e-12)
    assert body.signal_to_noise == pytest.approx(5.0, rel=1e-12)


def test_darkness_has_no_signal():
    dark = FilamentOptics(photons_per_um=0, background_photons=0, read_noise=0)
    assert dark.signal_to_noise == 0.0


@pytest.mark.parametrize(
    ("changes", "said"),
    [
        ({"psf_um": 0.0}, "psf_um"),
        ({"photons_per_um": -1.0}, "must be >= 0"),
        ({"labels_per_um": -1.0}, "labels_per_um"),
    ],
)
def test_impossible_optics(changes, said):
    with pytest.raises(ValueError, match=said):
        FilamentOptics(**({"photons_per_um": 1.0} | changes))


@pytest.mark.parametrize(
    ("changes", "said"),
    [
        ({"unevenness": 2.0}, "unevenness"),
        ({"debris": -1.0}, "debris"),
        ({"focus_period_s": 0.0}, "focus_period_s"),
        ({"saturation_counts": 70_000}, "saturation_counts"),
    ],
)
def test_impossible_faults(changes, said):
    with pytest.raises(ValueError, match=said):
        FilmFaults(**changes)
