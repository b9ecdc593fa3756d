"""How well tracks agree with the truth: found, missed, invented, exchanged.

Per frame, a true object keeps the track it had while that is within the gate; the rest are paired
so that as many as possible pairs are within the gate, and the nearest of these. Found positions
that are left over count as wrong, unless they lie on something that was not to be found.

References
----------
Chenouard et al., Nat. Methods 11, 281 (2014), doi 10.1038/nmeth.2808: precision, recall, Jaccard
index of positions (formulas from memory). Bernardin & Stiefelhagen, EURASIP J. Image Video
Process. (2008), doi 10.1155/2008/246309: MOTA. Ristani et al., ECCV workshops (2016): IDF1, from
memory.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]


@dataclass(frozen=True, slots=True, kw_only=True)
class TruePositions:
    """Where n objects truly are, (n,) arrays, any order; and what may be found without being one.

    An object that is not ``counted`` in a frame is neither missed nor wrongly found there.
    """

    frame: Ints
    track: Ints  # >= 0
    x: Floats
    y: Floats
    counted: Bools
    overlapped: Bools
    blank_frame: Ints  # (m,) points of bodies that do not count
    blank_x: Floats
    blank_y: Floats

    def __post_init__(self) -> None:
        keys = np.stack([self.frame, self.track])
        if np.unique(keys, axis=1).shape[1] < keys.shape[1]:
            raise ValueError("a true track with two positions in a frame")

    @classmethod
    def all_counted(cls, frame: Ints, track: Ints, x: Floats, y: Floats) -> TruePositions:
        """Objects that are all to be found, and none overlapped."""
        return cls(
            frame=frame,
            track=track,
            x=x,
            y=y,
            counted=np.ones(len(frame), dtype=bool),
            overlapped=np.zeros(len(frame), dtype=bool),
            blank_frame=np.empty(0, dtype=np.int64),
            blank_x=np.empty(0),
            blank_y=np.empty(0),
        )


@dataclass(frozen=True, slots=True, kw_only=True)
class FoundPositions:
    """Positions of tracks, (n,) arrays, any order."""

    frame: Ints
    track: Ints  # >= 0
    x: Floats
    y: Floats

    def __post_init__(self) -> None:
        keys = np.stack([self.frame, self.track])
        if np.unique(keys, axis=1).shape[1] < keys.shape[1]:
            raise ValueError("a found track with two positions in a frame")


@dataclass(frozen=True, slots=True, kw_only=True)
class Pairing:
    """Which found position is which true one: rows of both, and which found ones count."""

    true: Ints  # (p,) rows of the truth, all counted
    found: Ints  # (p,) rows of what was found
    found_counted: Bools  # (n found,) false on bodies that do not count
    together_true: Ints  # (t,) tracks of all pairs within the gate, one row a frame and pair
    together_found: Ints


@dataclass(frozen=True, slots=True, kw_only=True)
class TrackingScores:
    """Counts, and what follows from them; NaN where there was nothing to score."""

    n_true: int
    n_found: int
    n_matched: int
    n_true_overlapped: int
    n_matched_overlapped: int
    switches: int
    n_identity: int  # true positives of the identities, IDTP
    rmse: float  # of the distance in the plane

    @property
    def precision(self) -> float:
        """TP / (TP + FP)."""
        return _share(self.n_matched, self.n_found)

    @property
    def recall(self) -> float:
        """TP / (TP + FN)."""
        return _share(self.n_matched, self.n_true)

    @property
    def recall_overlapped(self) -> float:
        """Recall of the objects that overlap others."""
        return _share(self.n_matched_overlapped, self.n_true_overlapped)

    @property
    def jaccard(self) -> float:
        """TP / (TP + FN + FP)."""
        return _share(self.n_matched, self.n_true + self.n_found - self.n_matched)

    @property
    def mota(self) -> float:
        """1 - (FN + FP + switches) / true positions; it may be negative."""
        wrong = self.n_true + self.n_found - 2 * self.n_matched + self.switches
        return 1 - _share(wrong, self.n_true)

    @property
    def idf1(self) -> float:
        """2 IDTP / (2 IDTP + IDFP + IDFN)."""
        return _share(2 * self.n_identity, self.n_true + self.n_found)


def score_tracks(truth: TruePositions, found: FoundPositions, *, gate: float) -> TrackingScores:
    """Scores of tracks; a position counts as right within ``gate`` of the true one."""
    return scores_of(truth, found, pairing(truth, found, gate=gate))


def scores_of(truth: TruePositions, found: FoundPositions, pairs: Pairing) -> TrackingScores:
    """Scores of tracks whose pairing with the truth is known."""
    distance2 = (truth.x[pairs.true] - found.x[pairs.found]) ** 2
    distance2 += (truth.y[pairs.true] - found.y[pairs.found]) ** 2
    return TrackingScores(
        n_true=int(truth.counted.sum()),
        n_found=int(pairs.found_counted.sum()),
        n_matched=len(pairs.true),
        n_true_overlapped=int((truth.counted & truth.overlapped).sum()),
        n_matched_overlapped=int(truth.overlapped[pairs.true].sum()),
        switches=_switches(truth.track[pairs.true], found.track[pairs.found]),
        n_identity=identity_matches(pairs.together_true, pairs.together_found),
        rmse=float(np.sqrt(distance2.mean())) if len(distance2) else float("nan"),
    )


def pairing(truth: TruePositions, found: FoundPositions, *, gate: float) -> Pairing:
    """Pair true and found positions frame by frame, in the order of the frames."""
    from scipy.spatial.distance import cdist

    followed: dict[int, int] = {}
    pairs: list[tuple[Ints, Ints]] = []
    together: list[tuple[Ints, Ints]] = []
    found_counted = np.ones(len(found.frame), dtype=bool)
    for frame in np.unique(np.concatenate([truth.frame[truth.counted], found.frame])):
        a = np.flatnonzero((truth.frame == frame) & truth.counted)
        b = np.flatnonzero(found.frame == frame)
        distance = cdist(_points(truth.x[a], truth.y[a]), _points(found.x[b], found.y[b]))
        last = np.array([followed.get(int(t), -1) for t in truth.track[a]], dtype=np.int64)
        i, j = _frame_pairs(distance, kept=last[:, None] == found.track[b], gate=gate)
        followed.update(zip(truth.track[a[i]].tolist(), found.track[b[j]].tolist(), strict=True))
        pairs.append((a[i], b[j]))
        left = np.setdiff1d(b, b[j])
        found_counted[left[_on_blank(truth, found, left, frame=frame, gate=gate)]] = False
        i, j = np.nonzero((distance <= gate) & found_counted[b])
        together.append((truth.track[a[i]], found.track[b[j]]))
    none = np.empty(0, dtype=np.int64)
    return Pairing(
        true=np.concatenate([none, *(i for i, _ in pairs)]),
        found=np.concatenate([none, *(j for _, j in pairs)]),
        found_counted=found_counted,
        together_true=np.concatenate([none, *(i for i, _ in together)]),
        together_found=np.concatenate([none, *(j for _, j in together)]),
    )


def _points(x: Floats, y: Floats) -> Floats:
    return np.stack([x, y], axis=1)


def _frame_pairs(distance: Floats, *, kept: Bools, gate: float) -> tuple[Ints, Ints]:
    """Pairs within the gate: those kept from before first, then as many as possible, near ones."""
    from scipy.optimize import linear_sum_assignment

    near = distance <= gate
    i, j = np.nonzero(near & kept)
    rows, columns = (
        np.setdiff1d(np.arange(n), used) for n, used in zip(near.shape, (i, j), strict=True)
    )
    rest = np.ix_(rows, columns)
    # One more pair is worth more than any saving of distance.
    gain = np.where(near[rest], gate * (1 + min(near.shape)) - distance[rest], 0.0)
    k, m = linear_sum_assignment(-gain)
    chosen = near[rest][k, m]
    return np.concatenate([i, rows[k[chosen]]]), np.concatenate([j, columns[m[chosen]]])


def _on_blank(
    truth: TruePositions, found: FoundPositions, rows: Ints, *, frame: int, gate: float
) -> Bools:
    """Which found positions lie within the gate of a body that does not count."""
    from scipy.spatial import cKDTree

    first, last = np.searchsorted(truth.blank_frame, [frame, frame + 1])
    if first == last or len(rows) == 0:
        return np.zeros(len(rows), dtype=bool)
    tree = cKDTree(_points(truth.blank_x[first:last], truth.blank_y[first:last]))
    nearest, _ = tree.query(_points(found.x[rows], found.y[rows]))
    return np.asarray(nearest) <= gate


def _switches(true_track: Ints, found_track: Ints) -> int:
    """How often a true object goes on under another track; rows in the order of the frames."""
    order = np.argsort(true_track, kind="stable")
    same = np.diff(true_track[order]) == 0
    return int((same & (np.diff(found_track[order]) != 0)).sum())


def identity_matches(true_track: Ints, found_track: Ints) -> int:
    """Most rows in which true and found tracks, each in one pair at most, are together."""
    from scipy.optimize import linear_sum_assignment

    if len(true_track) == 0:
        return 0
    _, row = np.unique(true_track, return_inverse=True)
    _, column = np.unique(found_track, return_inverse=True)
    count = np.zeros((row.max() + 1, column.max() + 1))
    np.add.at(count, (row, column), 1.0)
    return int(count[linear_sum_assignment(-count)].sum())


def _share(part: int, whole: int) -> float:
    return part / whole if whole else float("nan")
