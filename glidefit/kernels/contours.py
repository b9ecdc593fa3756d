"""The contour of a filament: its centreline across, its ends along, its light, its picture.

Curves are (n,) arrays x, y in pixels, a pixel apart from tail to head; a place on a curve is a
number from 0 to n - 1, which is also the way along it in pixels.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit
from numpy.typing import NDArray

from glidefit.kernels.ridges import bilinear

Floats = NDArray[np.float64]

# Interpolation between pixels widens a profile by so much variance.
_BLUR = 0.17
# Nothing is known of a filament's light farther than this from its neighbours along it.
_ROUNDS = 3
# A fit moves no point farther than this in one round.
_STEP = 1.0
# The light of labels varies along a filament by this share from place to place, and by these over
# the length of a window, usually and where little of the filament lies in it.
_SPECKLE, _ALIKE, _SPECKLE_OF_SHORT = 0.2, 0.1, 0.3
# A filament is dark nowhere for so many pixels.
_GAP = 6.0
# How far inside and outside an end is looked to find it.
_INSIDE, _OUTSIDE = 8, 6


def profile_width(width_px: float) -> float:
    """Standard deviation of a line's profile as it is sampled between pixels."""
    return math.sqrt(width_px**2 + _BLUR)


@njit(cache=True)
def respaced(x, y):  # type: ignore[no-untyped-def]
    """The curve with points a pixel apart, and the way along the old points, (n,)."""
    n = len(x)
    way = np.zeros(n)
    for i in range(1, n):
        way[i] = way[i - 1] + math.hypot(x[i] - x[i - 1], y[i] - y[i - 1])
    m = max(2, int(way[-1]) + 1)
    new_x, new_y = np.empty(m), np.empty(m)
    j = 0
    for k in range(m):
        place = min(float(k), way[-1]) if k < m - 1 or way[-1] < 1 else float(k)
        while j < n - 2 and way[j + 1] < place:
            j += 1
        gap = way[j + 1] - way[j]
        t = (place - way[j]) / gap if gap > 1e-9 else 0.0
        new_x[k] = x[j] + t * (x[j + 1] - x[j])
        new_y[k] = y[j] + t * (y[j + 1] - y[j])
    return new_x, new_y, way


@njit(cache=True)
def at(values, place):  # type: ignore[no-untyped-def]
    """Value at a place on a curve; straight on beyond its ends."""
    n = len(values)
    i = min(max(math.floor(place), 0), n - 2)
    return values[i] + (place - i) * (values[i + 1] - values[i])


@njit(cache=True)
def direction(x, y, place, half):  # type: ignore[no-untyped-def]
    """Direction of the curve at a place in rad, from the chord over ``half`` on both sides."""
    n = len(x)
    a = min(max(place - half, 0.0), n - 1.0)
    b = min(max(place + half, 0.0), n - 1.0)
    if b - a < 1e-6:
        a, b = 0.0, n - 1.0
    return math.atan2(at(y, b) - at(y, a), at(x, b) - at(x, a))


@njit(cache=True)
def _normals(x, y):  # type: ignore[no-untyped-def]
    n = len(x)
    nx, ny = np.empty(n), np.empty(n)
    for i in range(n):
        a, b = max(i - 2, 0), min(i + 2, n - 1)
        dx, dy = x[b] - x[a], y[b] - y[a]
        length = max(math.hypot(dx, dy), 1e-9)
        nx[i], ny[i] = -dy / length, dx / length
    return nx, ny


@njit(cache=True)
def _read(image, others, joint, x, y, nx, ny, width, noise, amplitude, shift, weight, gradient):  # type: ignore[no-untyped-def]
    """Across every point of a curve: amplitude, amplitude × offset, and their weights."""
    h, w = image.shape
    half = math.ceil(2.5 * width)
    g, dg = np.empty(2 * half + 1), np.empty(2 * half + 1)
    gg, dd = 0.0, 0.0
    for k in range(-half, half + 1):
        g[k + half] = math.exp(-(k**2) / (2 * width**2))
        dg[k + half] = k / width**2 * g[k + half]
        gg += g[k + half] ** 2
        dd += dg[k + half] ** 2
    for i in range(len(x)):
        a, b, foreign = 0.0, 0.0, 0.0
        if not (-0.5 <= x[i] <= w - 0.5 and -0.5 <= y[i] <= h - 0.5):
            amplitude[i], shift[i], weight[i], gradient[i] = 0.0, 0.0, 0.0, 0.0
            continue
        for k in range(-half, half + 1):
            u, v = x[i] + k * nx[i], y[i] + k * ny[i]
            value = bilinear(image, u, v)
            if joint:
                theirs = bilinear(others, u, v)
                value -= theirs
                foreign += g[k + half] * theirs
            a += g[k + half] * value
            b += dg[k + half] * value
        amplitude[i], shift[i] = a / gg, b / dd
        # What others shine here is known but roughly.
        doubt = noise**2 + (0.4 * max(foreign, 0.0) / gg) ** 2
        weight[i], gradient[i] = gg / doubt, dd / doubt


@njit(cache=True)
def _running_mean(values, weight, half):  # type: ignore[no-untyped-def]
    n = len(values)
    out = np.empty(n)
    for i in range(n):
        total, norm = 0.0, 1e-12
        for j in range(max(0, i - half), min(n, i + half + 1)):
            total += weight[j] * values[j]
            norm += weight[j]
        out[i] = total / norm
    return out


@njit(cache=True)
def _smooth_offsets(weight, target, x, y, nx, ny, stiffness):  # type: ignore[no-untyped-def]
    """Offsets d that minimise Σ weight (target - d)² + stiffness Σ |second difference of x + dn|².

    Pentadiagonal, by a banded Cholesky factor.
    """
    n = len(x)
    d0, d1, d2, b = np.zeros(n), np.zeros(n), np.zeros(n), np.zeros(n)
    for i in range(n):
        d0[i] = weight[i] + 1e-9 * stiffness
        b[i] = weight[i] * target[i]
    for i in range(1, n - 1):
        cx = x[i - 1] - 2 * x[i] + x[i + 1]
        cy = y[i - 1] - 2 * y[i] + y[i + 1]
        bend = cx * nx[i] + cy * ny[i]
        d0[i - 1] += stiffness
        d0[i] += 4 * stiffness
        d0[i + 1] += stiffness
        d1[i - 1] -= 2 * stiffness
        d1[i] -= 2 * stiffness
        d2[i - 1] += stiffness
        b[i - 1] -= stiffness * bend
        b[i] += 2 * stiffness * bend
        b[i + 1] -= stiffness * bend
    # d0, d1, d2 become the factor L D Lᵀ.
    for i in range(n):
        if i >= 1:
            d0[i] -= d1[i - 1] ** 2 * d0[i - 1]
        if i >= 2:
            d0[i] -= d2[i - 2] ** 2 * d0[i - 2]
        if i + 1 < n:
            if i >= 1:
                d1[i] -= d1[i - 1] * d2[i - 1] * d0[i - 1]
            d1[i] /= d0[i]
        if i + 2 < n:
            d2[i] /= d0[i]
    for i in range(n):
        if i >= 1:
            b[i] -= d1[i - 1] * b[i - 1]
        if i >= 2:
            b[i] -= d2[i - 2] * b[i - 2]
    for i in range(n):
        b[i] /= d0[i]
    for i in range(n - 1, -1, -1):
        if i + 1 < n:
            b[i] -= d1[i] * b[i + 1]
        if i + 2 < n:
            b[i] -= d2[i] * b[i + 2]
    return b


@njit(cache=True)
def fit_centreline(image, others, joint, x, y, tail, head, width, noise, stiffness, usual):  # type: ignore[no-untyped-def]
    """Move a curve across itself onto the middle of the light; its ends go straight on.

    Weighted least squares of the offsets that matched filters see across, with a price on
    curvature, so that a filament is straight where nothing is known.

    Parameters
    ----------
    image : (h, w) array
        Contrast.
    others : (h, w) array
        Light of other filaments, subtracted if ``joint``.
    x, y : (n,) arrays
        The curve, longer than the filament.
    tail, head : float
        Where on it the filament is believed to be.
    width, noise : float
        Of the sampled profile; of a pixel.
    stiffness : float
        Over the variance of the heading per pixel of contour.
    usual : float
        Amplitude of this filament if it is known, else 0.

    Returns
    -------
    x, y : (m,) arrays
    tail, head : float
        The same places on the new curve.
    amplitude, weight : (m,) arrays
        Light along the new curve, in counts at the centre of the line, and its inverse variance.
    """
    for turn in range(_ROUNDS + 1):
        n = len(x)
        nx, ny = _normals(x, y)
        amplitude, shift, weight, gradient = np.empty(n), np.empty(n), np.empty(n), np.empty(n)
        _read(image, others, joint, x, y, nx, ny, width, noise, amplitude, shift, weight, gradient)
        if turn == _ROUNDS:
            break
        light = _running_mean(amplitude, weight, 4)
        information, target = np.zeros(n), np.zeros(n)
        for i in range(n):
            if i < tail - 1 or i > head + 1:
                continue
            a = light[i]
            if usual > 0:
                a = min(max(a, 0.3 * usual), 2 * usual)
            if a <= 0:
                continue
            information[i] = gradient[i] * a * a
            target[i] = min(max(shift[i] / a, -1.5 * width), 1.5 * width)
        d = _smooth_offsets(information, target, x, y, nx, ny, stiffness)
        moved_x, moved_y = np.empty(n), np.empty(n)
        for i in range(n):
            c = min(max(d[i], -_STEP * 2), _STEP * 2)
            moved_x[i], moved_y[i] = x[i] + c * nx[i], y[i] + c * ny[i]
        x, y, way = respaced(moved_x, moved_y)
        tail, head = at(way, tail), at(way, head)
    return x, y, tail, head, amplitude, weight


@njit(cache=True)
def lit_interval(amplitude, weight, tail_low, tail_high, head_low, head_high, usual):  # type: ignore[no-untyped-def]
    """Roughly where on a curve the light begins and ends, each within its window.

    A lit point counts for, a dark one against the filament being there: from the inner side of
    each window on, the sum of ``weight (amplitude usual - 0.45 usual²)`` is made largest. A dark
    stretch of ``_GAP`` pixels ends the filament, whatever shines beyond it.
    """
    tail = _lit_end(amplitude, weight, tail_high, tail_low, usual, -1)
    head = _lit_end(amplitude, weight, head_low, head_high, usual, 1)
    return tail, max(head, tail + 0.5)


@njit(cache=True)
def _lit_end(amplitude, weight, start, stop, usual, way):  # type: ignore[no-untyped-def]
    n = len(amplitude)
    i = math.floor(start) if way < 0 else math.ceil(start)
    last = max(math.ceil(stop), 0) if way < 0 else min(math.floor(stop), n - 1)
    total, best, end = 0.0, 0.0, i - 0.5 * way
    while (i - last) * way <= 0:
        if 0 <= i < n and weight[i] > 0:
            total += weight[i] * usual * (amplitude[i] - 0.45 * usual)
            if total > best:
                best, end = total, i + 0.5 * way
            elif best - total > 0.45 * _GAP * weight[i] * usual * usual:
                break
        i += way
    return end


@njit(cache=True)
def _edge_cost(amplitude, weight, first, last, tail, head, blur, usual, shared, alike):  # type: ignore[no-untyped-def]
    """Minus twice the log-likelihood of the light near an end, up to a constant.

    ``shared[k]`` is the relative covariance of the labels' light at k pixels' distance, so that
    the dark pixels beyond the end, which no label disturbs, count for more than those within.
    """
    n = last - first + 1
    scale = 1 / (math.sqrt(2.0) * blur)
    m, z = np.empty(n), np.empty(n)
    for i in range(n):
        place = first + i
        m[i] = usual * 0.5 * (math.erf((head - place) * scale) - math.erf((tail - place) * scale))
    factor = np.empty((n, n))
    cost = 0.0
    for i in range(n):
        rest = amplitude[first + i] - m[i]
        for j in range(i + 1):
            value = m[i] * m[j] * (shared[i - j] + alike)
            if i == j:
                value += 1 / max(weight[first + i], 1e-12)
            for k in range(j):
                value -= factor[i, k] * factor[j, k]
            if i == j:
                factor[i, i] = math.sqrt(max(value, 1e-300))
            else:
                factor[i, j] = value / factor[j, j]
                rest -= factor[i, j] * z[j]
        z[i] = rest / factor[i, i]
        cost += z[i] * z[i] + 2 * math.log(factor[i, i])
    return cost


@njit(cache=True)
def _one_end(amplitude, weight, tail, head, blur, usual, is_head):  # type: ignore[no-untyped-def]
    """The place of one end, and its standard deviation, with the other end held."""
    n = len(amplitude)
    start = head if is_head else tail
    if is_head:
        first, last = int(max(start - _INSIDE, tail - 3)), int(start + _OUTSIDE)
    else:
        first, last = int(start - _OUTSIDE), int(min(start + _INSIDE, head + 3)) + 1
    first, last = max(first, 0), min(last, n - 1)
    if last - first < 3:
        return start, 3.0
    shared = np.empty(last - first + 1)
    for k in range(len(shared)):
        shared[k] = _SPECKLE**2 * math.exp(-(k**2) / (4 * blur**2))
    alike = _ALIKE**2 if head - tail > _INSIDE else _SPECKLE_OF_SHORT**2
    reach = 6
    step = 0.5
    cost = np.empty(2 * reach + 1)
    best = 0
    for k in range(2 * reach + 1):
        place = start + (k - reach) * step
        t, h = (tail, max(place, tail + 0.05)) if is_head else (min(place, head - 0.05), head)
        cost[k] = _edge_cost(amplitude, weight, first, last, t, h, blur, usual, shared, alike)
        if cost[k] < cost[best]:
            best = k
    middle = start + (best - reach) * step
    if best == 0 or best == 2 * reach:
        return middle, 3.0
    lowest, curve, shift = cost[best], 0.0, 0.0
    sides = np.empty(2)
    for k in range(2):
        place = middle + (k - 0.5) * step
        t, h = (tail, max(place, tail + 0.05)) if is_head else (min(place, head - 0.05), head)
        sides[k] = _edge_cost(amplitude, weight, first, last, t, h, blur, usual, shared, alike)
    curve = sides[0] - 2 * lowest + sides[1]
    if curve > 1e-9:
        shift = min(max(0.5 * (sides[0] - sides[1]) / curve, -1.0), 1.0)
    # How far the cost must be left to rise by 1 is more honest than its curvature at the bottom.
    low, high = best, best
    while low > 0 and cost[low] < lowest + 1:
        low -= 1
    while high < 2 * reach and cost[high] < lowest + 1:
        high += 1
    deviation = 0.25 * (high - low) * step
    if curve > 1e-9:
        deviation = max(math.sqrt(2.0 / curve) * 0.5 * step, deviation if high - low > 2 else 0.0)
    return middle + shift * 0.5 * step, min(deviation, 3.0)


@njit(cache=True)
def fit_ends(amplitude, weight, tail, head, tail_blur, head_blur, usual):  # type: ignore[no-untyped-def]
    """Both ends of a filament on its curve to a fraction of the spread.

    The light along it is a step blurred at both ends, with the noise of the pixels and, where it is
    lit, the scatter of the labels; each end in turn is moved to where that is likeliest.

    Returns
    -------
    tail, head, tail_sd, head_sd : float
        Places and standard deviations in pixels.
    """
    tail_sd, head_sd = 3.0, 3.0
    for _ in range(2 if head - tail < 2 * _INSIDE else 1):
        head, head_sd = _one_end(amplitude, weight, tail, head, head_blur, usual, True)
        tail, tail_sd = _one_end(amplitude, weight, tail, head, tail_blur, usual, False)
    return tail, head, tail_sd, head_sd


@njit(cache=True)
def spot_middle(image, others, x, y, width):  # type: ignore[no-untyped-def]
    """The place near a point where a Gaussian of this width matches the light best.

    Newton steps to where the light, weighted by the Gaussian, is balanced.
    """
    h, w = image.shape
    r = math.ceil(2.5 * width)
    start_x, start_y = x, y
    for _ in range(8):
        total, sx, sy = 0.0, 0.0, 0.0
        for v in range(max(int(y) - r, 0), min(int(y) + r + 2, h)):
            for u in range(max(int(x) - r, 0), min(int(x) + r + 2, w)):
                weight = math.exp(-((u - x) ** 2 + (v - y) ** 2) / (2 * width**2))
                light = weight * (image[v, u] - others[v, u])
                total += light
                sx += light * (u - x)
                sy += light * (v - y)
        if total <= 0:
            return start_x, start_y
        # Where the light is a Gaussian of the same width, its balance is half of the way.
        x += 2 * min(max(sx / total, -0.5), 0.5)
        y += 2 * min(max(sy / total, -0.5), 0.5)
        if abs(x - start_x) > 3 * width or abs(y - start_y) > 3 * width:
            return start_x, start_y
    return x, y


@njit(cache=True)
def light_between(amplitude, weight, tail, head):  # type: ignore[no-untyped-def]
    """Mean amplitude between two places, its significance, and the share that could be seen."""
    total, norm, count, seen = 0.0, 0.0, 0, 0
    heaviest = 0.0
    for i in range(len(weight)):
        heaviest = max(heaviest, weight[i])
    for i in range(max(math.ceil(tail), 0), min(int(head), len(amplitude) - 1) + 1):
        if weight[i] <= 0:  # outside the frame
            continue
        total += weight[i] * amplitude[i]
        norm += weight[i]
        count += 1
        seen += 1 if weight[i] > 0.25 * heaviest else 0
    if norm <= 0 or count == 0:
        return 0.0, 0.0, 0.0
    return total / norm, total / math.sqrt(norm), seen / count


@njit(cache=True)
def dark_stretch(amplitude, weight, tail, head, usual):  # type: ignore[no-untyped-def]
    """Longest stretch between two places without light, in pixels, and its middle.

    Only what is clearly dark counts: the mean over the stretch is below 0.3 ``usual`` and away
    from it by three times its error. Points that others hide end a stretch.
    """
    first = max(math.ceil(tail) + 2, 0)
    last = min(int(head) - 2, len(amplitude) - 1)
    heaviest = 0.0
    for i in range(len(weight)):
        heaviest = max(heaviest, weight[i])
    longest, middle = 0, 0.0
    i = first
    while i <= last:
        total, norm, k = 0.0, 0.0, i
        while k <= last and weight[k] > 0.4 * heaviest and amplitude[k] < 0.6 * usual:
            total += weight[k] * amplitude[k]
            norm += weight[k]
            k += 1
        if k > i and norm > 0:
            mean = total / norm
            if mean < 0.3 * usual and usual - mean > 3 / math.sqrt(norm) and k - i > longest:
                longest, middle = k - i, 0.5 * (i + k - 1)
        i = max(k, i) + 1
    return longest, middle


@njit(cache=True)
def draw(image, x, y, tail, head, amplitude, width, sign):  # type: ignore[no-untyped-def]
    """Add a filament's light to an image: Gaussians along its contour, ``sign`` times."""
    h, w = image.shape
    r = math.ceil(3 * width)
    norm = sign * amplitude / (math.sqrt(2 * math.pi) * width)
    first, last = math.floor(tail), math.ceil(head)
    gx = np.empty(2 * r + 1)
    for i in range(first, last + 1):
        share = min(head, i + 0.5) - max(tail, i - 0.5)
        if share <= 0:
            continue
        px, py = at(x, float(i)), at(y, float(i))
        j, k = math.floor(px + 0.5), math.floor(py + 0.5)
        if j < -r or k < -r or j >= w + r or k >= h + r:
            continue
        for u in range(-r, r + 1):
            gx[u + r] = math.exp(-((j + u - px) ** 2) / (2 * width**2))
        for v in range(max(0, k - r), min(h, k + r + 1)):
            gy = share * norm * math.exp(-((v - py) ** 2) / (2 * width**2))
            for u in range(max(0, j - r), min(w, j + r + 1)):
                image[v, u] += gy * gx[u - j + r]


@njit(cache=True)
def project(x, y, px, py):  # type: ignore[no-untyped-def]
    """Place on a curve nearest to a point, straight on beyond its ends, and the way across."""
    n = len(x)
    best, k = 1e300, 0
    for i in range(n):
        d = (x[i] - px) ** 2 + (y[i] - py) ** 2
        if d < best:
            best, k = d, i
    place, off = float(k), math.sqrt(best)
    found = 1e300
    for i in range(max(k - 1, 0), min(k + 1, n - 1)):
        dx, dy = x[i + 1] - x[i], y[i + 1] - y[i]
        length = max(dx * dx + dy * dy, 1e-12)
        t = ((px - x[i]) * dx + (py - y[i]) * dy) / length
        t = max(t, 0.0) if i > 0 else t
        t = min(t, 1.0) if i < n - 2 else t
        d = (x[i] + t * dx - px) ** 2 + (y[i] + t * dy - py) ** 2
        if d < found:
            found, place = d, i + t
            side = dx * (py - y[i]) - dy * (px - x[i])
            off = math.copysign(math.sqrt(d), side)
    return place, off


@njit(cache=True)
def extended(x, y, tail, head, before, after):  # type: ignore[no-untyped-def]
    """The part of a curve from ``before`` ahead of the tail to ``after`` past the head.

    Straight on where the curve ends, in the direction of its last pixels.

    Returns
    -------
    x, y : (m,) arrays
    shift : float
        A place on the old curve minus ``shift`` is that on the new one.
    """
    n = len(x)
    first, last = math.floor(tail - before), math.ceil(head + after)
    m = last - first + 1
    new_x, new_y = np.empty(m), np.empty(m)
    reach = min(8.0, n - 1.0)
    a0 = math.atan2(at(y, reach) - y[0], at(x, reach) - x[0])
    a1 = math.atan2(y[-1] - at(y, n - 1 - reach), x[-1] - at(x, n - 1 - reach))
    for k in range(m):
        i = first + k
        if i < 0:
            new_x[k], new_y[k] = x[0] + i * math.cos(a0), y[0] + i * math.sin(a0)
        elif i > n - 1:
            over = i - (n - 1)
            new_x[k], new_y[k] = x[-1] + over * math.cos(a1), y[-1] + over * math.sin(a1)
        else:
            new_x[k], new_y[k] = x[i], y[i]
    return new_x, new_y, float(first)
