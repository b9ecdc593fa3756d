"""Tracks with the time and exposure of their frames, and rough values of how they glide."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from glidefit.kernels.likelihood import Clock, FilteredTracks, filter_tracks
from glidefit.kernels.passive import diffusing_log_density
from glidefit.kernels.pausing import filter_pausing_tracks

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

PARAMETERS = (
    "speed",
    "rotational_diffusion",
    "longitudinal_diffusion",
    "localization_variance",
    "speed_variance",
    "turning_rate",
    "turning_rate_variance",
    "sideways_diffusion",
    "error_variance_along",
    "stop_rate",
    "go_rate",
    "diffusion",
)


@dataclass(frozen=True, slots=True, kw_only=True)
class GlidingData:
    """Tracks and what is known of how they were filmed; columns as in `filter_tracks`."""

    time_s: Floats
    x: Floats
    y: Floats
    offsets: Ints
    exposure_s: float = 0.0
    clock: Clock = "per_time"
    relative_error: Floats | None = None

    def filtered(self, values: Mapping[str, float]) -> FilteredTracks:
        """The tracks under parameters named as in `PARAMETERS`; those left out are 0.

        They pause if there is a stop rate, and have no propulsion if there is a diffusion.
        """
        return self._filtered(values, innovations=True)

    def log_density(self, values: Mapping[str, float]) -> Floats:
        """Only that of `filtered`, in less time."""
        return self._filtered(values, innovations=False).log_density

    def log_likelihood(self, values: Mapping[str, float]) -> Floats:
        """Of each track."""
        return np.add.reduceat(self.log_density(values), self.offsets[:-1])

    def _filtered(self, values: Mapping[str, float], *, innovations: bool) -> FilteredTracks:
        if "diffusion" in values:
            return self._diffusing(values)
        pauses: dict[str, Any] = {}
        if "stop_rate" in values:
            pauses = {name: values[name] for name in ("stop_rate", "go_rate")}
            pauses["innovations"] = innovations
        return (filter_pausing_tracks if pauses else filter_tracks)(
            self.time_s,
            self.x,
            self.y,
            self.offsets,
            **pauses,
            speed=values["speed"],
            rotational_diffusion=values["rotational_diffusion"],
            localization_error=float(np.sqrt(values["localization_variance"])),
            longitudinal_diffusion=values.get("longitudinal_diffusion", 0.0),
            sideways_diffusion=values.get("sideways_diffusion", 0.0),
            error_variance_along=values.get("error_variance_along", 0.0),
            speed_spread=float(np.sqrt(values.get("speed_variance", 0.0))),
            turning_rate=values.get("turning_rate", 0.0),
            turning_rate_spread=float(np.sqrt(values.get("turning_rate_variance", 0.0))),
            exposure_s=self.exposure_s,
            clock=self.clock,
            relative_error=self.relative_error,
        )

    def _diffusing(self, values: Mapping[str, float]) -> FilteredTracks:
        error = np.full(len(self.x), values["localization_variance"])
        if self.relative_error is not None:
            error *= self.relative_error**2
        innovation = np.empty((len(self.x), 2))
        columns = self.time_s, self.x, self.y, self.offsets
        density = diffusing_log_density(
            *columns, error, values["diffusion"], self.exposure_s, innovation
        )
        density[~np.isfinite(density)] = -np.inf
        m = len(self.offsets) - 1
        none = np.full(m, np.nan)
        return FilteredTracks(
            log_likelihood=np.add.reduceat(density, self.offsets[:-1]) if m else np.empty(0),
            log_density=density,
            innovation=innovation,
            heading_sd=none,
            speed_mean=none,
            speed_sd=none,
            turning_rate_mean=none,
            turning_rate_sd=none,
        )

    def some(self, n_positions: int) -> GlidingData:
        """Tracks taken evenly from all of them, until they have about so many positions."""
        m = len(self.offsets) - 1
        every = max(1, min(m, int(self.offsets[-1]) // n_positions))
        chosen = np.arange(0, m, every)
        sizes = np.diff(self.offsets)[chosen]
        starts = np.cumsum(sizes) - sizes
        rows = np.repeat(self.offsets[:-1][chosen] - starts, sizes) + np.arange(sizes.sum())
        relative = None if self.relative_error is None else self.relative_error[rows]
        return GlidingData(
            time_s=self.time_s[rows],
            x=self.x[rows],
            y=self.y[rows],
            offsets=np.append(starts, sizes.sum()),
            exposure_s=self.exposure_s,
            clock=self.clock,
            relative_error=relative,
        )


def first_guess(data: GlidingData) -> dict[str, float]:
    """Rough values of all parameters, from chords that stand out of the noise."""
    track = np.repeat(np.arange(len(data.offsets) - 1), np.diff(data.offsets))
    z = data.x + 1j * data.y
    lag, longest = 1, max(1, (int(np.diff(data.offsets).max()) - 1) // 2)
    bend = z[2:] - 2 * z[1:-1] + z[:-2]
    noise = float(np.mean(np.abs(bend[track[2:] == track[:-2]]) ** 2)) / 12
    while True:
        inside = track[2 * lag :] == track[: -2 * lag]
        one, two = (z[lag:-lag] - z[: -2 * lag])[inside], (z[2 * lag :] - z[lag:-lag])[inside]
        square = float(np.mean(np.abs(one) ** 2))
        if square > 100 * noise or 2 * lag > longest:
            break
        lag *= 2
    wait = float(np.mean((data.time_s[lag:-lag] - data.time_s[: -2 * lag])[inside]))
    cosine = float(np.mean((one.conj() * two).real)) / square if square > 0 else np.nan
    speed = np.sqrt(square) / wait
    diffusion = -np.log(np.clip(cosine, 0.05, 1 - 1e-4)) / wait
    return {
        "speed": float(speed),
        "rotational_diffusion": float(diffusion),
        "longitudinal_diffusion": 0.3 * noise * lag / wait,
        "localization_variance": 0.5 * noise,
        "speed_variance": float((0.1 * speed) ** 2),
        "turning_rate": float(np.mean(np.angle(one.conj() * two))) / wait,
        "turning_rate_variance": float(diffusion / wait / lag),
        "sideways_diffusion": 0.1 * noise * lag / wait,
        "error_variance_along": 0.2 * noise,
        "stop_rate": 0.1 / wait,
        "go_rate": 0.3 / wait,
        "diffusion": square / wait / 4,
    }
