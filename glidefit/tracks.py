"""Tracks: the paths of tracers, one array a column, valid from birth."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    import pandas as pd

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True, slots=True, kw_only=True)
class Tracks:
    """Tracks of one recording, sorted by track, then frame.

    Track ``k`` owns the rows ``offsets[k]:offsets[k + 1]`` of every column.

    Parameters
    ----------
    label : (m,) array of str
        Name of each track, as its source had it.
    offsets : (m + 1,) array of int
        First row of each track, and the number of rows.
    frame : (n,) array of int
        From 0, strictly increasing within a track; a missing frame is a gap.
    time_s : (n,) array
        Start of the exposure in s, strictly increasing within a track.
    x_um, y_um : (n,) arrays
        Positions in µm; x to the right, y down.
    heading_rad : (n,) array or None
        Direction of the body, where the source knows it.
    length_um : (n,) array or None
        Contour length, where the source knows it.
    flag : (n,) array of str or None
        Why a position is not to be trusted, "" for one that is; where the source knows it.
    """

    label: NDArray[np.str_]
    offsets: Ints
    frame: Ints
    time_s: Floats
    x_um: Floats
    y_um: Floats
    heading_rad: Floats | None = None
    length_um: Floats | None = None
    flag: NDArray[np.str_] | None = None

    def __post_init__(self) -> None:
        n = len(self.frame)
        if (
            len(self.offsets) != len(self.label) + 1
            or self.offsets[0] != 0
            or self.offsets[-1] != n
        ):
            raise ValueError(f"offsets do not cut {n} rows into {len(self.label)} tracks")
        if np.any(np.diff(self.offsets) < 1):
            raise ValueError("a track without a position")
        for name in ("time_s", "x_um", "y_um"):
            column = getattr(self, name)
            if len(column) != n:
                raise ValueError(f"{name} has {len(column)} rows, frame has {n}")
            if not np.all(np.isfinite(column)):
                raise ValueError(f"{name} holds a value that is not finite")
        inside = np.ones(max(n - 1, 0), dtype=bool)
        inside[self.offsets[1:-1] - 1] = False
        for name in ("frame", "time_s"):
            if np.any(np.diff(getattr(self, name))[inside] <= 0):
                raise ValueError(f"{name} does not increase within a track")

    @property
    def n_tracks(self) -> int:
        """Number of tracks."""
        return len(self.label)

    @property
    def n_positions(self) -> Ints:
        """Number of positions of each track, (m,)."""
        return np.diff(self.offsets)

    @property
    def index(self) -> Ints:
        """Index of the track of each row, (n,)."""
        return np.repeat(np.arange(self.n_tracks), self.n_positions)

    def rows(self, k: int) -> slice:
        """Rows of track k."""
        return slice(int(self.offsets[k]), int(self.offsets[k + 1]))

    def select(self, chosen: NDArray[np.bool_]) -> Tracks:
        """The tracks for which ``chosen`` (m,) is true, in the same order."""
        keep = np.repeat(chosen, self.n_positions)
        counts = self.n_positions[chosen]
        return Tracks(
            label=self.label[chosen],
            offsets=np.concatenate([[0], np.cumsum(counts)]).astype(np.int64),
            frame=self.frame[keep],
            time_s=self.time_s[keep],
            x_um=self.x_um[keep],
            y_um=self.y_um[keep],
            heading_rad=None if self.heading_rad is None else self.heading_rad[keep],
            length_um=None if self.length_um is None else self.length_um[keep],
            flag=None if self.flag is None else self.flag[keep],
        )

    def positions(self, chosen: NDArray[np.bool_]) -> Tracks:
        """The positions for which ``chosen`` (n,) is true; tracks without one are left out."""
        counts = np.bincount(self.index[chosen], minlength=self.n_tracks)

        def cut(column: Any) -> Any:
            return None if column is None else column[chosen]

        return Tracks(
            label=self.label[counts > 0],
            offsets=np.concatenate([[0], np.cumsum(counts[counts > 0])]).astype(np.int64),
            frame=self.frame[chosen],
            time_s=self.time_s[chosen],
            x_um=self.x_um[chosen],
            y_um=self.y_um[chosen],
            heading_rad=cut(self.heading_rad),
            length_um=cut(self.length_um),
            flag=cut(self.flag),
        )

    def joined(self, other: Tracks) -> Tracks:
        """These positions and others of the same tracks, which must not share a frame."""
        import pandas as pd

        table = pd.concat([self.to_frame(), other.to_frame()], ignore_index=True)
        return Tracks.from_frame(table)

    def moved(self, x_um: Floats, y_um: Floats) -> Tracks:
        """The same tracks at other positions (n,), as after subtracting drift."""
        return Tracks(
            label=self.label,
            offsets=self.offsets,
            frame=self.frame,
            time_s=self.time_s,
            x_um=x_um,
            y_um=y_um,
            heading_rad=self.heading_rad,
            length_um=self.length_um,
            flag=self.flag,
        )

    def to_frame(self) -> pd.DataFrame:
        """The columns of a track table: track, frame, time_s, x_um, y_um and what else is known."""
        import pandas as pd

        columns: dict[str, Any] = {
            "track": np.repeat(self.label, self.n_positions),
            "frame": self.frame,
            "time_s": self.time_s,
            "x_um": self.x_um,
            "y_um": self.y_um,
        }
        if self.heading_rad is not None:
            columns["heading_rad"] = self.heading_rad
        if self.length_um is not None:
            columns["length_um"] = self.length_um
        if self.flag is not None:
            columns["flag"] = self.flag
        return pd.DataFrame(columns)

    @classmethod
    def from_frame(cls, table: pd.DataFrame) -> Tracks:
        """Tracks from columns track, frame, time_s, x_um, y_um (heading_rad, length_um), any order.

        Raises
        ------
        ValueError
            For a repeated frame within a track or a value that is not finite.
        """
        labels = table["track"].astype(str).to_numpy()
        names, first, index = np.unique(labels, return_index=True, return_inverse=True)
        rank = np.empty(len(names), dtype=np.int64)
        rank[np.argsort(first, kind="stable")] = np.arange(len(names))
        frame = table["frame"].to_numpy(dtype=np.int64)
        order = np.lexsort((frame, rank[index]))
        counts = np.bincount(rank[index], minlength=len(names))

        def column(name: str) -> Floats:
            return table[name].to_numpy(dtype=np.float64)[order]

        return cls(
            label=names[np.argsort(first, kind="stable")].astype(np.str_),
            offsets=np.concatenate([[0], np.cumsum(counts)]).astype(np.int64),
            frame=frame[order],
            time_s=column("time_s"),
            x_um=column("x_um"),
            y_um=column("y_um"),
            heading_rad=column("heading_rad") if "heading_rad" in table else None,
            length_um=column("length_um") if "length_um" in table else None,
            flag=table["flag"].astype(str).to_numpy()[order].astype(np.str_)
            if "flag" in table
            else None,
        )


@dataclass(frozen=True, slots=True, kw_only=True)
class Detections:
    """Spots of one recording before they are joined into tracks, sorted by frame.

    Parameters
    ----------
    frame : (n,) array of int
        From 0, not decreasing.
    x_um, y_um : (n,) arrays
        Positions in µm; x to the right, y down.
    brightness : (n,) array
        Light of the spot above its background, in counts.
    precision_um : (n,) array
        Standard deviation of each coordinate in µm, as the noise of the frame gives it, > 0.
    n_frames : int
        Frames looked at, with and without spots.
    noise : (n_frames,) array
        Standard deviation of a pixel of empty background, in counts.
    background : (n_frames,) array
        Median of each frame, in counts.
    """

    frame: Ints
    x_um: Floats
    y_um: Floats
    brightness: Floats
    precision_um: Floats
    n_frames: int
    noise: Floats
    background: Floats

    def __post_init__(self) -> None:
        n = len(self.frame)
        for name in ("x_um", "y_um", "brightness", "precision_um"):
            column = getattr(self, name)
            if len(column) != n:
                raise ValueError(f"{name} has {len(column)} rows, frame has {n}")
            if not np.all(np.isfinite(column)):
                raise ValueError(f"{name} holds a value that is not finite")
        if np.any(self.precision_um <= 0):
            raise ValueError("precision_um must be > 0")
        if n and (self.frame[0] < 0 or self.frame[-1] >= self.n_frames):
            raise ValueError(f"frame is outside 0 to {self.n_frames - 1}")
        if np.any(np.diff(self.frame) < 0):
            raise ValueError("frame decreases")
        for name in ("noise", "background"):
            if len(getattr(self, name)) != self.n_frames:
                raise ValueError(f"{name} needs one value for each of {self.n_frames} frames")

    @property
    def offsets(self) -> Ints:
        """Frame f owns the rows ``offsets[f]:offsets[f + 1]``, (n_frames + 1,)."""
        return np.searchsorted(self.frame, np.arange(self.n_frames + 1)).astype(np.int64)
