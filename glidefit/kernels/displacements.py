"""Displacements, turns and elapsed times of tracks, summed per track and lag.

Tracks are laid on a grid, one row a track, one column a frame after its first position, NaN where
there is no position. Pairs with a missing end are left out, and what is returned is always a sum
and the count it goes with, so that tracks, recordings and chambers can be added up.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Sums = tuple[Floats, Floats]
OfGrids = Callable[..., Sums]

# Cells of one grid, 8 MB a column of doubles.
_CELLS_OF_A_GRID = 1_000_000


def frame_spans(frame: Ints, offsets: Ints) -> Ints:
    """Frames from the first to the last position of each track, both included.

    Parameters
    ----------
    frame : (n,) array of int
        Strictly increasing within a track.
    offsets : (m + 1,) array of int
        Track k owns the rows ``offsets[k]:offsets[k + 1]``, at least one.

    Returns
    -------
    (m,) array of int
    """
    spans: Ints = frame[offsets[1:] - 1] - frame[offsets[:-1]] + 1
    return spans


def dense_grid(frame: Ints, offsets: Ints, column: Floats, *, tracks: Ints | None = None) -> Floats:
    """One column of a track table as a grid, one row a track.

    Parameters
    ----------
    frame, offsets
        As in `frame_spans`.
    column : (n,) array
    tracks : (m',) array of int, optional
        The tracks wanted, in this order; all if left out.

    Returns
    -------
    (m', w) array
        Cell (k, j) is the value at the frame j after the first of track k, or NaN; w is the
        longest span among these tracks.
    """
    if tracks is None:
        tracks = np.arange(len(offsets) - 1)
    sizes = np.diff(offsets)[tracks]
    before = np.cumsum(sizes) - sizes
    rows = np.repeat(offsets[:-1][tracks] - before, sizes) + np.arange(sizes.sum())
    since = frame[rows] - np.repeat(frame[offsets[:-1][tracks]], sizes)
    grid = np.full((len(tracks), int(since.max(initial=-1)) + 1), np.nan)
    grid[np.repeat(np.arange(len(tracks)), sizes), since] = column[rows]
    return grid


def grid_groups(frame: Ints, offsets: Ints) -> list[Ints]:
    """Tracks of similar span, group by group, so that their grids hold little but positions.

    In a group no span is over twice another, and a grid of more than one track has at most a
    million cells: one long track among thousands of short ones costs its own row only.

    Parameters
    ----------
    frame, offsets
        As in `frame_spans`.

    Returns
    -------
    list of arrays of int
        Indices of tracks, each track once, spans descending.
    """
    spans = frame_spans(frame, offsets)
    order = np.argsort(-spans, kind="stable")
    descending = -spans[order]
    groups, start = [], 0
    while start < len(order):
        longest = -descending[start]
        similar = int(np.searchsorted(descending, -longest / 2, side="right"))
        stop = min(similar, start + max(1, _CELLS_OF_A_GRID // int(longest)))
        groups.append(order[start:stop])
        start = stop
    return groups


def track_sums(
    frame: Ints,
    offsets: Ints,
    columns: Sequence[Floats],
    *,
    lags: Ints,
    of_grids: OfGrids,
) -> Sums:
    """Sums and counts of a whole track table, by way of one grid a group of `grid_groups`.

    Parameters
    ----------
    frame, offsets
        As in `frame_spans`.
    columns : sequence of (n,) arrays
        Columns to lay on grids: x and y in µm, or the time in s.
    lags : (l,) array of int
        In frames, all >= 1.
    of_grids : callable
        `lag_sums`, `heading_sums` or `lag_times`, called with the grids and ``lags=lags``; a
        field is bound to it with `functools.partial`.

    Returns
    -------
    sums, counts : (m, l) arrays
        Of every track, in the order of the table.
    """
    sums, counts = _empty(len(offsets) - 1, lags)
    for tracks in grid_groups(frame, offsets):
        grids = [dense_grid(frame, offsets, column, tracks=tracks) for column in columns]
        sums[tracks], counts[tracks] = of_grids(*grids, lags=lags)
    return sums, counts


def lag_sums(x: Floats, y: Floats, *, lags: Ints, field: tuple[float, float] | None = None) -> Sums:
    """Squared displacements summed per track and lag.

    ``Σ w |r(i + lag) - r(i)|²`` and ``Σ w`` over the pairs whose two ends are there. Without a
    field w is 1. In a field of W × H a displacement (dx, dy) is seen only if it starts in the part
    of (W - |dx|) (H - |dy|) from which it stays inside, so that far ones are missed more often;
    w = W H / ((W - |dx|) (H - |dy|)) makes up for it.

    Parameters
    ----------
    x, y : (m, w) arrays
        Positions in µm on the grid of `dense_grid`.
    lags : (l,) array of int
        In frames, all >= 1.
    field : (W, H), optional
        Size of the field of view in µm, larger than any displacement.

    Returns
    -------
    sums : (m, l) array
        In µm².
    counts : (m, l) array
        Without unit; 0 where a track has no pair.

    Raises
    ------
    ValueError
        For a lag below 1 or a displacement that does not fit in the field.

    References
    ----------
    The translation correction for edges of spatial statistics (Ohser; Ripley), from memory.
    """
    sums, counts = _empty(len(x), lags)
    for column, lag in _lags_inside(x, lags):
        dx, dy = x[:, lag:] - x[:, :-lag], y[:, lag:] - y[:, :-lag]
        weights = None if field is None else _edge_weights(dx, dy, field)
        sums[:, column], counts[:, column] = _summed(dx * dx + dy * dy, weights)
    return sums, counts


def lag_times(time: Floats, *, lags: Ints) -> Sums:
    """Elapsed times summed per track and lag; over their counts, the mean real lag.

    Parameters
    ----------
    time : (m, w) array
        Time of each position in s on the grid of `dense_grid`.
    lags : (l,) array of int
        In frames, all >= 1.

    Returns
    -------
    sums, counts : (m, l) arrays
        In s, and the number of pairs, those that `lag_sums` finds.

    Raises
    ------
    ValueError
        For a lag below 1.
    """
    sums, counts = _empty(len(time), lags)
    for column, lag in _lags_inside(time, lags):
        sums[:, column], counts[:, column] = _summed(time[:, lag:] - time[:, :-lag], None)
    return sums, counts


def heading_sums(x: Floats, y: Floats, *, lags: Ints) -> Sums:
    """Cosines of turns summed per track and lag.

    ``Σ cos(ψ(i + lag) - ψ(i))`` over the pairs of frame-to-frame displacements that are there,
    ψ(i) the direction from position i to position i + 1; a displacement of 0 has none.

    Parameters
    ----------
    x, y : (m, w) arrays
        Positions on the grid of `dense_grid`, in any one unit.
    lags : (l,) array of int
        In frames, all >= 1.

    Returns
    -------
    sums, counts : (m, l) arrays
        Without unit; the counts are 0 where a track has no pair.

    Raises
    ------
    ValueError
        For a lag below 1.
    """
    dx, dy = np.diff(x, axis=1), np.diff(y, axis=1)
    length = np.hypot(dx, dy)
    length[length == 0] = np.nan
    dx, dy = dx / length, dy / length
    sums, counts = _empty(len(x), lags)
    for column, lag in _lags_inside(dx, lags):
        cosines = dx[:, lag:] * dx[:, :-lag] + dy[:, lag:] * dy[:, :-lag]
        sums[:, column], counts[:, column] = _summed(cosines, None)
    return sums, counts


def _empty(n_tracks: int, lags: Ints) -> Sums:
    if np.any(lags < 1):
        raise ValueError(f"lags must be >= 1 frame, the smallest is {lags.min()}")
    return np.zeros((n_tracks, len(lags))), np.zeros((n_tracks, len(lags)))


def _lags_inside(grid: Floats, lags: Ints) -> Iterator[tuple[int, int]]:
    """Column and lag, for the lags that are shorter than the grid is wide."""
    return ((column, lag) for column, lag in enumerate(lags.tolist()) if lag < grid.shape[1])


def _edge_weights(dx: Floats, dy: Floats, field: tuple[float, float]) -> Floats:
    width, height = field
    open_x, open_y = width - np.abs(dx), height - np.abs(dy)
    if np.any(open_x <= 0) or np.any(open_y <= 0):
        raise ValueError(f"a displacement does not fit in a field of {width:g} × {height:g} µm")
    weights: Floats = width * height / (open_x * open_y)
    return weights


def _summed(terms: Floats, weights: Floats | None) -> tuple[Floats, Floats]:
    """Row sums of weighted terms and of weights, without the terms that are NaN."""
    missing = np.isnan(terms)
    if weights is None:
        weights = np.ones_like(terms)
    else:
        terms = terms * weights
    terms[missing] = 0
    weights[missing] = 0
    return terms.sum(axis=1), weights.sum(axis=1)
