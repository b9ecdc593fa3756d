"""Where bodies on laid paths are, how they shine into pixels, and which of them overlap; compiled.

Contours are flat: points of filament i are rows ``offset[i]`` to ``offset[i + 1]``.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numba import njit
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

COMPILED: dict[str, Any] = {"cache": True, "error_model": "numpy"}
DRAWN_SD = 5.0  # half-width of the drawn window; what is outside is below 1e-6 of a point


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def on_path(
    px: Floats, py: Floats, step: float, place: float, aside: float
) -> tuple[float, float, float, float]:
    """Point at an arc length of a polyline of equal steps, ``aside`` to its right; direction."""
    last = len(px) - 2
    at = min(max(int(place / step), 0), last)
    part = place / step - at
    dx, dy = (px[at + 1] - px[at]) / step, (py[at + 1] - py[at]) / step
    x = px[at] + part * step * dx - aside * dy
    y = py[at] + part * step * dy + aside * dx
    return x, y, dx, dy


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def contour_points(
    path_offset: Ints,
    path_x: Floats,
    path_y: Floats,
    step: float,
    tail: Floats,
    length: Floats,
    aside: Floats,
    offset: Ints,
) -> tuple[Floats, Floats]:
    """Middles of the equal pieces of each contour, tail to head, (m,)."""
    x, y = np.empty(offset[-1]), np.empty(offset[-1])
    for i in range(len(length)):
        px = path_x[path_offset[i] : path_offset[i + 1]]
        py = path_y[path_offset[i] : path_offset[i + 1]]
        n = offset[i + 1] - offset[i]
        for j in range(n):
            place = tail[i] + (j + 0.5) * length[i] / n
            x[offset[i] + j], y[offset[i] + j], _, _ = on_path(px, py, step, place, aside[i])
    return x, y


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def body_places(
    path_offset: Ints,
    path_x: Floats,
    path_y: Floats,
    step: float,
    tail: Floats,
    length: Floats,
    aside: Floats,
    who: Ints,
) -> Floats:
    """Midpoint, head, tail (x, y each) and heading at the midpoint of filaments ``who``, (w, 7).

    Means over the k exposed parts of ``tail`` (n, k); the heading is that of the mean direction.
    """
    places = np.zeros((len(who), 7))
    n_parts = tail.shape[1]
    for row, i in enumerate(who):
        px = path_x[path_offset[i] : path_offset[i + 1]]
        py = path_y[path_offset[i] : path_offset[i + 1]]
        along, across = 0.0, 0.0
        for part in range(n_parts):
            for column, share in enumerate((0.5, 1.0, 0.0)):
                place = tail[i, part] + share * length[i]
                x, y, dx, dy = on_path(px, py, step, place, aside[i])
                places[row, 2 * column] += x / n_parts
                places[row, 2 * column + 1] += y / n_parts
                if column == 0:
                    along, across = along + dx, across + dy
        places[row, 6] = math.atan2(across, along)
    return places


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def add_points(
    image: Floats, x_px: Floats, y_px: Floats, photons: Floats, spread_px: float
) -> None:
    """Add Gaussian points, each integrated over the pixels, to an image (rows, columns)."""
    height, width = image.shape
    half = math.ceil(DRAWN_SD * spread_px) + 1
    n = 2 * half + 1
    scale = 1 / (math.sqrt(2.0) * spread_px)
    x_share, y_share = np.empty(n), np.empty(n)
    for i in range(len(x_px)):
        light = photons[i]
        if light == 0:
            continue
        left, top = round(x_px[i]) - half, round(y_px[i]) - half
        if left >= width or top >= height or left + n <= 0 or top + n <= 0:
            continue
        below_x = math.erf((left - 0.5 - x_px[i]) * scale)
        below_y = math.erf((top - 0.5 - y_px[i]) * scale)
        for k in range(n):
            above = math.erf((left + k + 0.5 - x_px[i]) * scale)
            x_share[k] = (above - below_x) / 2
            below_x = above
            above = math.erf((top + k + 0.5 - y_px[i]) * scale)
            y_share[k] = (above - below_y) / 2 * light
            below_y = above
        first, last = max(0, -left), min(n, width - left)
        for r in range(max(0, -top), min(n, height - top)):
            share = y_share[r]
            for c in range(first, last):
                image[top + r, left + c] += share * x_share[c]


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def overlapping(offset: Ints, shown: Bools, x: Floats, y: Floats, reach: float) -> Bools:
    """Filaments with a point within ``reach`` of a point of another shown one, (n,)."""
    n = len(shown)
    box = np.empty((n, 4))
    for i in range(n):
        if shown[i]:
            own_x, own_y = x[offset[i] : offset[i + 1]], y[offset[i] : offset[i + 1]]
            box[i] = np.array([own_x.min(), own_x.max(), own_y.min(), own_y.max()])
    found = np.zeros(n, dtype=np.bool_)
    for i in range(n):
        for j in range(i + 1, n):
            if not (shown[i] and shown[j]) or (found[i] and found[j]):
                continue
            apart = max(box[i, 0] - box[j, 1], box[j, 0] - box[i, 1])
            apart = max(apart, box[i, 2] - box[j, 3], box[j, 2] - box[i, 3])
            if apart <= reach and _touch(offset, x, y, i, j, box[j], reach):
                found[i] = found[j] = True
    return found


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def _touch(offset: Ints, x: Floats, y: Floats, i: int, j: int, box: Floats, reach: float) -> bool:
    """Whether a point of i is within reach of one of j, which lies in ``box``."""
    for a in range(offset[i], offset[i + 1]):
        if x[a] < box[0] - reach or x[a] > box[1] + reach:
            continue
        if y[a] < box[2] - reach or y[a] > box[3] + reach:
            continue
        for b in range(offset[j], offset[j + 1]):
            if (x[a] - x[b]) ** 2 + (y[a] - y[b]) ** 2 <= reach * reach:
                return True
    return False
