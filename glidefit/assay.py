"""The assay sheet as records: what was filmed, one recording a row."""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass
from pathlib import Path


@dataclass(frozen=True, slots=True, kw_only=True)
class Recording:
    """One row of the assay sheet.

    Numbers that the sheet leaves open are None; the file may know them.
    """

    name: str  # as the sheet has it, the identity of the recording
    path: Path  # absolute
    condition: str
    day: str
    chamber: str
    shape: str = "filament"  # or "spot"
    pixel_um: float | None = None
    frame_s: float | None = None
    exposure_s: float | None = None
    control: bool = False
    preparation: str = ""
    field: str = ""
    minutes: float | None = None  # after the start in the chamber, of its first frame
    start_time: str = ""  # clock time as written
    first_frame: int | None = None
    last_frame: int | None = None
    channel: int | None = None
    position: int | None = None
    numbers: dict[str, float] = dataclasses.field(
        default_factory=dict
    )  # numeric columns with a unit suffix
    labels: dict[str, str] = dataclasses.field(default_factory=dict)  # every other column
    where: str = ""  # "assay.csv, row 3"

    @property
    def is_video(self) -> bool:
        """True for a video, false for a table of tracks."""
        return self.path.suffix.lower() not in {".csv", ".parquet", ".pq"}


@dataclass(frozen=True, slots=True, kw_only=True)
class Assay:
    """An assay sheet: its name and its recordings, in its own order."""

    name: str
    path: Path
    recordings: tuple[Recording, ...]

    @property
    def conditions(self) -> tuple[str, ...]:
        """Names of the conditions, the control first, then as they appear."""
        names = dict.fromkeys(r.condition for r in self.recordings)
        controls = {r.condition for r in self.recordings if r.control}
        return tuple(sorted(names, key=lambda name: name not in controls))
