"""One filament as it is followed: its contour, where it is going, what was seen of it."""

from __future__ import annotations

import math
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from glidefit.kernels import contours

Floats = NDArray[np.float64]

# Weight of the newest frame in the speed, and in what changes slowly.
_NEW_SPEED, _NEW_LENGTH = 0.3, 0.1
_NEW_LIGHT = 0.1
# Frames after which the length is known.
KNOWN_AFTER = 4


@dataclass(slots=True, kw_only=True)
class Seen:
    """A filament in one frame; lengths in pixels."""

    x: Floats  # the curve, with a margin beyond both ends
    y: Floats
    tail: float  # places on it
    head: float
    tail_sd: float
    head_sd: float
    light: float  # mean amplitude in counts
    significance: float
    share: float  # of the body that other filaments do not hide
    tail_cut: bool
    head_cut: bool
    flag: str = ""
    gap: float = 0.0  # longest dark stretch of the contour
    shown: float | None = None  # place that stands for the midpoint if that is outside the field

    @property
    def length(self) -> float:
        """Length of the contour."""
        return self.head - self.tail

    @property
    def middle(self) -> float:
        """Place of the midpoint."""
        return 0.5 * (self.tail + self.head)

    @property
    def cut(self) -> bool:
        """An end is outside the field."""
        return self.tail_cut or self.head_cut

    def point(self, place: float) -> tuple[float, float]:
        """Pixel coordinates of a place."""
        return float(contours.at(self.x, place)), float(contours.at(self.y, place))

    def reversed(self) -> Seen:
        """With head and tail exchanged."""
        last = len(self.x) - 1
        return Seen(
            x=self.x[::-1].copy(),
            y=self.y[::-1].copy(),
            tail=last - self.head,
            head=last - self.tail,
            tail_sd=self.head_sd,
            head_sd=self.tail_sd,
            light=self.light,
            significance=self.significance,
            share=self.share,
            tail_cut=self.head_cut,
            head_cut=self.tail_cut,
            flag=self.flag,
            gap=self.gap,
            shown=None if self.shown is None else last - self.shown,
        )


@dataclass(slots=True, kw_only=True)
class Row:
    """What is kept of a filament in one frame."""

    frame: int
    x_px: float
    y_px: float
    heading: float
    length_px: float
    flag: str
    speed_px: float  # along the contour since the last frame, NaN if unknown
    contour: NDArray[np.float32]  # (m, 2) from tail to head
    light: float
    end_sd: tuple[float, float]


@dataclass(slots=True, kw_only=True)
class Body:
    """A filament that is followed; pixels and frames."""

    number: int
    frame: int  # in which it was last seen
    seen: Seen  # as it was there
    speed: float = float("nan")  # pixels a frame towards the head; NaN if never seen twice
    light: float
    length: float
    lengths: int = 0  # frames that the length comes from
    disagreed: int = 0  # frames in a row in which the ends did not fit the length
    doubled: int = 0  # frames in a row in which it lay on another one
    hidden: int = 0  # frames in a row in which its place could not be trusted
    doubts: int = 0  # frames in which something spoke against its contour, less those in which not
    travelled: float = 0.0
    rows: list[Row] = field(default_factory=list)

    @property
    def moving_known(self) -> bool:
        """Seen at least twice, so that its next place can be told."""
        return not math.isnan(self.speed)

    @property
    def length_known(self) -> bool:
        """Seen whole in enough frames."""
        return self.lengths >= KNOWN_AFTER

    def take(self, frame: int, seen: Seen, moved: float | None) -> None:
        """Go on as it was seen, after it moved by so many pixels along its contour."""
        frames = frame - self.frame
        if moved is not None:
            speed = moved / frames
            weight = _NEW_SPEED if self.moving_known else 1.0
            self.speed = speed if weight == 1.0 else self.speed + weight * (speed - self.speed)
            self.travelled += moved
        elif self.moving_known:
            self.travelled += self.speed * frames
        if seen.share > 0.7:
            self.light += _NEW_LIGHT * (seen.light - self.light)
        self.seen, self.frame = seen, frame
        self.rows.append(_row(frame, seen, None if moved is None else moved / frames))

    def join(self, other: Body, before: bool, against: bool) -> None:
        """Take in another body that goes on from the head, or lies before the tail.

        Only frames in which both were seen can be believed.
        """
        theirs = {row.frame: row for row in other.rows}
        rows = []
        for row in self.rows:
            if row.frame not in theirs:
                continue
            piece = theirs[row.frame].contour
            piece = piece[::-1] if against else piece
            parts = [piece, row.contour] if before else [row.contour, piece]
            rows.append(_joined_row(row, np.concatenate(parts)))
        self.rows = rows
        their = other.seen.reversed() if against else other.seen
        first, last = (their, self.seen) if before else (self.seen, their)
        self.seen = _joined_seen(first, last)
        self.light = 0.5 * (self.light + other.light)
        self.length, self.lengths = self.seen.length, 0 if self.seen.cut else 1
        self.doubts = self.disagreed = self.doubled = 0

    def learn_length(self, length: float) -> None:
        """One more measurement of the whole length."""
        self.lengths += 1
        self.length += max(1 / self.lengths, _NEW_LENGTH) * (length - self.length)


def born(number: int, frame: int, seen: Seen) -> Body:
    """A filament seen for the first time."""
    body = Body(number=number, frame=frame, seen=seen, light=seen.light, length=seen.length)
    if not seen.cut:
        body.lengths = 1
    body.rows.append(_row(frame, seen, None))
    return body


def _row(frame: int, seen: Seen, speed: float | None) -> Row:
    middle = seen.middle if seen.shown is None else seen.shown
    x, y = seen.point(middle)
    half = min(max(4.0, 0.1 * seen.length), 8.0)
    places = np.linspace(seen.tail, seen.head, max(2, math.ceil(seen.length / 4) + 1))
    index = np.arange(len(seen.x))
    contour = np.stack([np.interp(places, index, seen.x), np.interp(places, index, seen.y)], axis=1)
    return Row(
        frame=frame,
        x_px=x,
        y_px=y,
        heading=float(contours.direction(seen.x, seen.y, middle, half)),
        length_px=seen.length,
        flag=seen.flag,
        speed_px=float("nan") if speed is None else speed,
        contour=contour.astype(np.float32),
        light=seen.light,
        end_sd=(seen.tail_sd, seen.head_sd),
    )


def _joined_row(row: Row, contour: NDArray[np.float32]) -> Row:
    way = np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(contour, axis=0).T))])
    places = 0.5 * way[-1] + np.array([-4.0, 0.0, 4.0])
    x, y = (np.interp(places, way, contour[:, k]) for k in (0, 1))
    return Row(
        frame=row.frame,
        x_px=float(x[1]),
        y_px=float(y[1]),
        heading=math.atan2(y[2] - y[0], x[2] - x[0]),
        length_px=float(way[-1]),
        flag=row.flag,
        speed_px=row.speed_px,
        contour=contour,
        light=row.light,
        end_sd=row.end_sd,
    )


def _joined_seen(first: Seen, last: Seen) -> Seen:
    """One curve through both, the second going on from the first."""
    i, j = math.floor(first.head), math.ceil(last.tail)
    x = np.concatenate([first.x[:i], last.x[max(j, 0) + 1 :]])
    y = np.concatenate([first.y[:i], last.y[max(j, 0) + 1 :]])
    x, y, way = contours.respaced(x, y)
    past = len(last.x) - 1 - last.head
    return Seen(
        x=x,
        y=y,
        tail=first.tail,
        head=float(way[-1]) - past,
        tail_sd=first.tail_sd,
        head_sd=last.head_sd,
        light=0.5 * (first.light + last.light),
        significance=first.significance + last.significance,
        share=min(first.share, last.share),
        tail_cut=first.tail_cut,
        head_cut=last.head_cut,
        flag=first.flag or last.flag,
    )
