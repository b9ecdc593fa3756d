"""Filaments followed from frame to frame: known ones where they should be, then what is left."""

from __future__ import annotations

import math
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import linear_sum_assignment

from glidefit.kernels import contours, ridges
from glidefit.steps.filaments.body import Body, Seen, born
from glidefit.steps.filaments.measuring import (
    HIDDEN,
    Scene,
    expected,
    measure_expected,
    measure_traced,
)

Floats = NDArray[np.float64]

# A seed of a new filament, over the threshold; strength at which a ridge has faded, over noise.
_SEED, _FADED = 0.9, 2.0
# Significance of a new filament along all of its contour, over the threshold.
_WHOLE = 1.6
_LONGEST_TRACE = 4000
# How much stronger a seed's direction must be than any other, to be traced before the rest.
_ALONE = 0.45
# Steps in a row without a ridge.
_BLIND = 7
# Half the width of what a filament owns, in widths of its profile.
_OWNED = 2.5
# Largest cost of a link between a filament and a curve.
_LARGEST_COST = 16.0
# A body is given up after so many doubts; a dark stretch of so many pixels is one.
_DOUBTED, _DARK = 3, 6
# A filament may be hidden for so many frames, and for as long as it takes to pass.
_HIDDEN_FRAMES = 10
# Ends are together within so many pixels and to this cosine.
_END_TO_END, _STRAIGHT = 6.0, 0.93
# Curves that are followed up in one frame.
_MOST_CURVES = 3000
# Lying on another filament by this share for so many frames, a filament is the same one.
_SAME, _SAME_FRAMES = 0.75, 3


@dataclass(slots=True, kw_only=True)
class Following:
    """All filaments so far."""

    max_step_px: float  # farthest that one moves in a frame
    max_gap: int
    threshold: float
    bodies: list[Body] = field(default_factory=list)  # that may still be seen
    ended: list[Body] = field(default_factory=list)
    born: int = 0
    crowded: int = 0  # frames with more curves than are followed up
    touching: dict[tuple[int, int], int] = field(default_factory=dict)  # pairs end to end, frames
    usual_light: float = 0.0
    usual_step: float = float("nan")


def follow(state: Following, frame: int, scene: Scene) -> None:
    """One frame more."""
    known = [b for b in state.bodies if b.moving_known]
    seen = _known_ones(scene, known, frame)
    for body, (now, moved) in seen:
        body.take(frame, now, moved)
        body.hidden = body.hidden + 1 if now.flag == HIDDEN else 0
        _own(scene, body)
    _give_up_hidden(state, [b for b, _ in seen])
    seen = [(b, s) for b, s in seen if b in state.bodies]
    _drop_doubles(state, scene, [b for b, _ in seen])
    curves = _new_curves(state, scene)
    waiting = [b for b in state.bodies if b.frame < frame]
    linked = _link(state, waiting, curves, frame)
    for body, curve, moved in linked:
        body.take(frame, curve, moved)
        if not curve.cut:
            body.learn_length(curve.length)
    used = {id(curve) for _, curve, _ in linked}
    new = [curve for curve in curves if id(curve) not in used]
    _doubt(state, scene, [b for b, _ in seen], new)
    for curve in new:
        state.bodies.append(born(state.born, frame, curve))
        state.born += 1
    _join(state, frame)
    _retire(state, frame)
    _learn(state)


def _known_ones(
    scene: Scene, known: list[Body], frame: int
) -> list[tuple[Body, tuple[Seen, float | None]]]:
    """Where bodies are that were seen before; those near each other are measured in turns."""
    ahead = [expected(b, frame) for b in known]
    near = _near_others([a for a, _ in ahead], 8.0)
    found: dict[int, tuple[Seen, float | None]] = {}
    for k in np.flatnonzero(near):
        scene.draw(ahead[k][0], known[k].light, 1.0)
    drawn = {int(k): ahead[k][0] for k in np.flatnonzero(near)}
    for _ in range(2):
        for k in np.flatnonzero(near):
            body, (place, step) = known[k], ahead[k]
            if k in drawn:
                scene.draw(drawn.pop(int(k)), body.light, -1.0)
            disagreed, lengths, length = body.disagreed, body.lengths, body.length
            one = measure_expected(scene, body, place, step, joint=True)
            if one is None:
                found.pop(int(k), None)
                continue
            if int(k) in found:  # counted in the first turn already
                body.disagreed, body.lengths, body.length = disagreed, lengths, length
            found[int(k)] = one
            drawn[int(k)] = one[0]
            scene.draw(one[0], body.light, 1.0)
    for k in np.flatnonzero(~near):
        one = measure_expected(scene, known[k], *ahead[k], joint=False)
        if one is not None:
            found[int(k)] = one
    return [(known[k], found[k]) for k in sorted(found)]


def _near_others(bodies: list[Seen], margin: float) -> NDArray[np.bool_]:
    """Whose surrounding box touches that of another."""
    if not bodies:
        return np.zeros(0, dtype=np.bool_)
    box = np.array([[b.x.min(), b.x.max(), b.y.min(), b.y.max()] for b in bodies])
    box += [-margin / 2, margin / 2, -margin / 2, margin / 2]
    touch = (
        (box[:, None, 0] <= box[None, :, 1])
        & (box[None, :, 0] <= box[:, None, 1])
        & (box[:, None, 2] <= box[None, :, 3])
        & (box[None, :, 2] <= box[:, None, 3])
    )
    return np.asarray(touch.sum(axis=1) > 1)


def _own(scene: Scene, body: Body) -> None:
    seen = body.seen
    first, last = max(math.floor(seen.tail - 2), 0), math.ceil(seen.head + 3)
    x, y = seen.x[first:last], seen.y[first:last]
    ridges.own(scene.owner, x, y, _OWNED * scene.profile, body.number + 1)


def _give_up_hidden(state: Following, bodies: list[Body]) -> None:
    """A filament that never comes out from under others ends where it was last seen."""
    for body in bodies:
        passing = body.length / max(abs(body.speed), 0.5)
        if body.hidden > _HIDDEN_FRAMES + passing:
            del body.rows[-body.hidden :]
            state.bodies.remove(body)
            if body.rows:
                state.ended.append(body)


def _drop_doubles(state: Following, scene: Scene, bodies: list[Body]) -> None:
    """A filament that keeps lying on another, older one is the same."""
    h, w = scene.owner.shape
    for body in sorted(bodies, key=lambda b: b.number):
        ridges.own(
            scene.owner, body.seen.x[_inner(body)], body.seen.y[_inner(body)], 1.0, body.number + 1
        )
    for body in bodies:
        inner = _inner(body)
        j = np.clip(np.rint(body.seen.x[inner]), 0, w - 1).astype(np.int64)
        i = np.clip(np.rint(body.seen.y[inner]), 0, h - 1).astype(np.int64)
        owners = scene.owner[i, j]
        other = owners[(owners != body.number + 1) & (owners != 0)]
        doubled = len(other) > 0 and bool(np.bincount(other).max() > _SAME * len(owners))
        body.doubled = body.doubled + 1 if doubled else 0
    twice = [b for b in bodies if b.doubled >= _SAME_FRAMES]
    for body in twice:
        del body.rows[-_SAME_FRAMES:]
        state.bodies.remove(body)
        if body.rows:
            state.ended.append(body)


def _doubt(state: Following, scene: Scene, bodies: list[Body], new: list[Seen]) -> None:
    """Give up bodies whose contour keeps being contradicted.

    A dark stretch parts a body; and a curve that begins where nothing began before, in the middle
    of a body, is the rest of a filament that was joined to another's.
    """
    spoken = {b.number for b in bodies if b.seen.gap >= _DARK}
    h, w = scene.owner.shape
    by_number = {b.number: b for b in bodies}
    for curve in new:
        for place, out, cut in (
            (curve.tail, -1.0, curve.tail_cut), (curve.head, 1.0, curve.head_cut)
        ):  # fmt: skip
            if cut:
                continue
            for beyond in (3.0, 6.0, 9.0):
                x, y = curve.point(place + out * beyond)
                i, j = round(y), round(x)
                if not (0 <= i < h and 0 <= j < w) or scene.owner[i, j] <= 0:
                    continue
                other = by_number.get(int(scene.owner[i, j]) - 1)
                if other is not None:
                    at = contours.project(other.seen.x, other.seen.y, x, y)[0]
                    if other.seen.tail + 8 < at < other.seen.head - 8:
                        spoken.add(other.number)
                break
    for body in bodies:
        body.doubts = body.doubts + 1 if body.number in spoken else max(body.doubts - 1, 0)
        if body.doubts >= _DOUBTED and body in state.bodies:
            state.bodies.remove(body)
            state.ended.append(body)


def _join(state: Following, frame: int) -> None:
    """Two bodies that go on one behind the other, end to end, are one filament."""
    here = [b for b in state.bodies if b.frame == frame and len(b.rows) >= 2 and b.moving_known]
    touching: dict[tuple[int, int], int] = {}
    for a, b in _with_ends_together(here):
        turned = _end_to_end(a, b)
        if turned is None:
            continue
        count = state.touching.get((a.number, b.number), 0) + 1
        touching[a.number, b.number] = count
        if count >= _SAME_FRAMES and a in state.bodies and b in state.bodies:
            a.join(b, *turned)
            state.bodies.remove(b)
    state.touching = touching


def _with_ends_together(bodies: list[Body]) -> list[tuple[Body, Body]]:
    """Pairs of bodies of which two ends are near each other."""
    if not bodies:
        return []
    ends = np.array([[b.seen.point(p) for p in (b.seen.tail, b.seen.head)] for b in bodies])
    x, y = ends[..., 0].ravel(), ends[..., 1].ravel()
    near = np.hypot(x[:, None] - x, y[:, None] - y) <= _END_TO_END + 2
    pairs = near.reshape(len(bodies), 2, len(bodies), 2).any(axis=(1, 3))
    return [(bodies[i], bodies[j]) for i, j in zip(*np.nonzero(np.triu(pairs, 1)), strict=True)]


def _end_to_end(a: Body, b: Body) -> tuple[bool, bool] | None:
    """Whether b goes on from a's head, or if turned round from its tail; None if it does not.

    Returns
    -------
    tuple of bool
        The first is whether b lies before a's tail, the second whether b runs the other way.
    """
    p, q = a.seen, b.seen
    for before in (False, True):
        if (p.tail_cut if before else p.head_cut) or abs(a.speed) < 1e-9:
            continue
        end = p.point(p.tail if before else p.head)
        for against in (False, True):
            near = q.head if before != against else q.tail
            if q.head_cut if before != against else q.tail_cut:
                continue
            other = q.point(near)
            if math.hypot(end[0] - other[0], end[1] - other[1]) > _END_TO_END + 2:
                continue
            way = contours.direction(p.x, p.y, p.tail + 5 if before else p.head - 5, 5.0)
            their = contours.direction(q.x, q.y, near + (5 if near == q.tail else -5), 5.0)
            their += math.pi * against
            if math.cos(way - their) < _STRAIGHT:
                continue
            out = -1.0 if before else 1.0
            dx, dy = other[0] - end[0], other[1] - end[1]
            along = out * (dx * math.cos(way) + dy * math.sin(way))
            across = abs(dy * math.cos(way) - dx * math.sin(way))
            speed = b.speed * (-1 if against else 1)
            if (
                -4 <= along <= _END_TO_END
                and across <= 1.5 + 0.15 * abs(along)
                and abs(speed - a.speed) <= 0.5 + 0.15 * abs(a.speed)
            ):
                return before, against
    return None


def _inner(body: Body) -> slice:
    return slice(max(math.ceil(body.seen.tail), 0), max(math.floor(body.seen.head) + 1, 1))


def _new_curves(state: Following, scene: Scene) -> list[Seen]:
    """Curves of light that no known filament explains, strongest first."""
    scale, frame = scene.scale, scene.frame
    seeds = ridges.find_seeds(frame.strength, scene.owner, _SEED * state.threshold)
    curves: list[Seen] = []
    tried = 0
    # Where two lines cross the light is strongest and its direction means nothing.
    queue = [(int(row), int(column), False) for row, column in seeds]
    for row, column, late in queue:
        if scene.owner[row, column] != 0:
            continue
        angle, alone = ridges.ridge_direction(
            frame.smooth, float(column), float(row), scale.reach_px
        )
        if alone < _ALONE and not late:
            queue.append((row, column, True))
            continue
        tried += 1
        if tried > _MOST_CURVES:
            state.crowded += 1
            break
        x, y = _traced(scene, float(column), float(row), angle)
        seen = measure_traced(scene, x, y, usual=state.usual_light)
        if seen is None or seen.significance < _WHOLE * state.threshold:
            ridges.own(scene.owner, x, y, 1.5, -1)
            continue
        curves.append(seen)
        inner = slice(max(math.floor(seen.tail - 1), 0), math.ceil(seen.head + 2))
        ridges.own(scene.owner, seen.x[inner], seen.y[inner], _OWNED * scene.profile, -1)
    return curves


def _traced(scene: Scene, x: float, y: float, angle: float) -> tuple[Floats, Floats]:
    smooth, reach = scene.frame.smooth, scene.scale.reach_px
    unit = scene.noise(x, y) * scene.scale.noise_share
    ways = [
        ridges.trace(smooth, scene.owner, x, y, a, reach, unit, _FADED, _LONGEST_TRACE, _BLIND)
        for a in (angle, angle + math.pi)
    ]
    path = np.concatenate([ways[1][::-1], [[x, y]], ways[0]])
    if len(path) < 3:
        c, s = math.cos(angle), math.sin(angle)
        path = np.array([[x - c, y - s], [x, y], [x + c, y + s]])
    new_x, new_y, _ = contours.respaced(path[:, 0].copy(), path[:, 1].copy())
    return new_x, new_y


def _link(
    state: Following, waiting: list[Body], curves: list[Seen], frame: int
) -> list[tuple[Body, Seen, float]]:
    """Which curve a filament goes on as, all chosen together."""
    if not waiting or not curves:
        return []
    cost = np.full((len(waiting), len(curves)), _LARGEST_COST)
    moves: dict[tuple[int, int], tuple[Seen, float]] = {}
    middles = np.array([c.point(c.middle) for c in curves])
    for i, body in enumerate(waiting):
        frames = frame - body.frame
        reach = state.max_step_px * frames + 4.0
        here = np.array(body.seen.point(body.seen.middle))
        for j in np.flatnonzero(np.hypot(*(middles - here).T) < reach + 0.5 * body.length):
            one = _continues(state, body, curves[j], frames, reach)
            if one is not None and one[0] < _LARGEST_COST:
                cost[i, j] = one[0]
                moves[i, int(j)] = one[1], one[2]
    rows, columns = linear_sum_assignment(cost)
    return [
        (waiting[i], *moves[int(i), int(j)])
        for i, j in zip(rows, columns, strict=True)
        if (int(i), int(j)) in moves
    ]


def _continues(
    state: Following, body: Body, curve: Seen, frames: int, reach: float
) -> tuple[float, Seen, float] | None:
    """Cost of a curve as the next picture of a body, the curve from tail to head, its move."""
    old = body.seen
    x, y, shift = contours.extended(old.x, old.y, old.tail, old.head, reach, reach)
    places = np.linspace(curve.tail, curve.head, 7)
    on = np.array([contours.project(x, y, *curve.point(p)) for p in places])
    if on[-1, 0] < on[0, 0]:
        curve = curve.reversed()
        on = on[::-1]
    middle = old.middle - shift
    moved = float(np.median(on[:, 0] - np.linspace(-0.5, 0.5, 7) * curve.length)) - middle
    if curve.cut or old.cut:
        moved = _moved_though_cut(old, curve, on, shift, moved)
    if abs(moved) > reach:
        return None
    beyond = np.maximum(on[:, 0] - (old.head - shift), (old.tail - shift) - on[:, 0])
    tolerance = 1.5 + 0.2 * np.maximum(beyond, 0.0)
    cost = float(np.mean((on[:, 1] / tolerance) ** 2))
    if not (curve.cut or old.cut):
        cost += ((curve.length - body.length) / (2 + 0.15 * body.length)) ** 2
    if body.moving_known:
        ahead = body.speed * frames
        cost += ((moved - ahead) / (2 + 0.4 * abs(ahead))) ** 2
    else:
        usual = state.usual_step if state.usual_step > 0 else state.max_step_px / 3
        cost += (moved / (2 * usual * frames + 2)) ** 2
    return cost, curve, moved


def _moved_though_cut(old: Seen, curve: Seen, on: Floats, shift: float, moved: float) -> float:
    """From the ends that are inside the field in both frames."""
    ends = []
    if not (old.tail_cut or curve.tail_cut):
        ends.append(float(on[0, 0]) - (old.tail - shift))
    if not (old.head_cut or curve.head_cut):
        ends.append(float(on[-1, 0]) - (old.head - shift))
    return sum(ends) / len(ends) if ends else moved


def _retire(state: Following, frame: int) -> None:
    """Filaments that have not been seen for too long."""
    going = []
    for body in state.bodies:
        gap = state.max_gap if len(body.rows) > 1 else min(state.max_gap, 1)
        if frame - body.frame > gap:
            state.ended.append(body)
        else:
            going.append(body)
    state.bodies = going


def _learn(state: Following) -> None:
    sure = [b for b in state.bodies if len(b.rows) >= 3]
    if sure:
        state.usual_light = float(np.median([b.light for b in sure]))
        state.usual_step = float(np.median([abs(b.speed) for b in sure if b.moving_known]))
