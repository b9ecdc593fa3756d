"""Filaments of a video: found, followed through crossings, measured."""

from glidefit.steps.filaments.tracking import FilamentTracks, track_filaments

__all__ = ["FilamentTracks", "track_filaments"]
