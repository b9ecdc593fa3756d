"""A filament in one frame: from where it should be to where it is."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from glidefit.kernels import contours, ridges
from glidefit.steps.filaments.body import Body, Seen

Floats = NDArray[np.float64]

CUT = "cut by the edge"
HIDDEN = "hidden in a crossing"

# Bodies bend so little: one over the variance of the heading per pixel of contour.
_STIFFNESS = 60.0
# Pixels beyond an end that are looked at.
_MARGIN = 7.0
# So far an end may be from where it should be, in pixels and in steps.
_SLACK, _SLACK_STEPS = 3.0, 0.4
# While little is known of a body it may grow by so many pixels at an end.
_GROWTH = 14.0
# An end is trusted to this standard deviation.
_TRUSTED_SD = 1.5
# What is shorter than so many widths is located like a spot.
_SPOT = 5.0
# A body that leaves the field is followed until so few pixels are left.
_SHORTEST = 1
# Share of a body's usual light below which it is gone.
_FAINTEST = 0.35


@dataclass(slots=True, kw_only=True)
class Scene:
    """A prepared frame, what filaments shine in it, and who owns which pixel."""

    frame: ridges.RidgeFrame
    scale: ridges.LineScale
    others: NDArray[np.float32]  # light of filaments that are near each other
    owner: NDArray[np.int32]
    threshold: float  # multiples of the noise
    exposed_share: float = 0.0  # of the frame interval

    @property
    def profile(self) -> float:
        """Width of a profile sampled between pixels."""
        return contours.profile_width(self.scale.width_px)

    def noise(self, x: float, y: float) -> float:
        """Of a pixel there."""
        rows, columns = self.frame.noise.shape
        h, w = self.frame.contrast.shape
        i = min(max(int(y * rows / h), 0), rows - 1)
        j = min(max(int(x * columns / w), 0), columns - 1)
        return float(self.frame.noise[i, j])

    def outside(self, x: float, y: float) -> bool:
        """So near the edge that a body ending there may go on beyond it."""
        h, w = self.frame.contrast.shape
        m = 2.0 * self.scale.width_px
        return not (m <= x <= w - 1 - m and m <= y <= h - 1 - m)

    def draw(self, seen: Seen, light: float, sign: float) -> None:
        """Add a filament's light, or take it away again."""
        contours.draw(
            self.others, seen.x, seen.y, seen.tail, seen.head, light, self.scale.width_px, sign
        )


def measure_traced(scene: Scene, x: Floats, y: Floats, *, usual: float) -> Seen | None:
    """A filament along a traced curve; None if too little light stands there."""
    n = len(x)
    if n < 2:
        return None
    x, y, shift = contours.extended(x, y, 0.0, n - 1.0, _MARGIN, _MARGIN)
    tail, head = -shift, n - 1.0 - shift
    noise = scene.noise(x[len(x) // 2], y[len(y) // 2])
    x, y, tail, head, amplitude, weight = contours.fit_centreline(
        scene.frame.contrast, scene.others, True, x, y, tail, head, scene.profile, noise,
        _STIFFNESS, 0.0,
    )  # fmt: skip
    light, _, _ = contours.light_between(amplitude, weight, tail, head)
    if light <= 0:
        return None
    expected = max(light, 0.7 * usual) if head - tail < 8 else light
    low, high = -2.0, float(len(x))
    tail, head = contours.lit_interval(
        amplitude, weight, low, 0.5 * (tail + head), 0.5 * (tail + head), high, expected
    )
    return _finished(scene, x, y, tail, head, amplitude, weight, expected, 0.0)


def _finished(
    scene: Scene,
    x: Floats,
    y: Floats,
    tail: float,
    head: float,
    amplitude: Floats,
    weight: Floats,
    usual: float,
    speed: float,
) -> Seen:
    # An end that moves during the exposure is drawn out.
    blur = math.hypot(scene.profile, scene.exposed_share * speed / math.sqrt(12))
    tail, head, tail_sd, head_sd = contours.fit_ends(
        amplitude, weight, tail, head, blur, blur, usual
    )
    if head - tail < _SPOT * scene.scale.width_px:
        x, y = _centred(scene, x, y, tail, head)
    light, significance, share = contours.light_between(amplitude, weight, tail, head)
    ends = [(contours.at(x, p), contours.at(y, p)) for p in (tail, head)]
    tail_cut, head_cut = (scene.outside(*end) for end in ends)
    return Seen(
        x=x,
        y=y,
        tail=tail,
        head=head,
        tail_sd=tail_sd,
        head_sd=head_sd,
        light=light,
        significance=significance,
        share=share,
        tail_cut=tail_cut,
        head_cut=head_cut,
        flag=CUT if tail_cut or head_cut else "",
        gap=contours.dark_stretch(amplitude, weight, tail, head, usual)[0],
    )


def _centred(scene: Scene, x: Floats, y: Floats, tail: float, head: float) -> tuple[Floats, Floats]:
    """The curve moved so that its midpoint is that of the light, as for a spot."""
    middle = 0.5 * (tail + head)
    px, py = float(contours.at(x, middle)), float(contours.at(y, middle))
    width = math.hypot(scene.scale.width_px, max(head - tail, 0.0) / math.sqrt(12))
    new_x, new_y = contours.spot_middle(scene.frame.contrast, scene.others, px, py, width)
    return x + (new_x - px), y + (new_y - py)


def _shown(scene: Scene, seen: Seen) -> float | None:
    """Middle of what is inside the frame, if the midpoint is not."""
    h, w = scene.frame.contrast.shape
    places = np.linspace(seen.tail, seen.head, max(2, math.ceil(seen.length) + 1))
    x, y = np.array([seen.point(p) for p in (*places, seen.middle)]).T
    inside = (x >= 0) & (x <= w - 1) & (y >= 0) & (y <= h - 1)
    if inside[-1] or not inside[:-1].any():
        return None
    return float(np.median(places[inside[:-1]]))


def expected(body: Body, frame: int) -> tuple[Seen, float]:
    """A body moved on along its own contour and straight on at its leading end.

    Returns
    -------
    Seen
        Its curve reaches as far as its ends may be.
    float
        How far it should have moved, in pixels.
    """
    step = body.speed * (frame - body.frame)
    old = body.seen
    slack = _SLACK + _SLACK_STEPS * abs(step) + _MARGIN
    if not body.length_known:
        slack += _GROWTH
    tail, head = old.tail + step, old.head + step
    if body.length_known:
        # A part that was outside the field, or hidden, is where the length says.
        if old.head_cut and not old.tail_cut:
            head = tail + max(body.length, head - tail)
        elif old.tail_cut and not old.head_cut:
            tail = head - max(body.length, head - tail)
    before, after = slack + max(step, 0.0), slack + max(-step, 0.0)
    x, y, shift = contours.extended(old.x, old.y, tail, head, before, after)
    return (
        Seen(
            x=x,
            y=y,
            tail=tail - shift,
            head=head - shift,
            tail_sd=old.tail_sd,
            head_sd=old.head_sd,
            light=body.light,
            significance=0.0,
            share=1.0,
            tail_cut=False,
            head_cut=False,
        ),
        step,
    )


def measure_expected(
    scene: Scene, body: Body, ahead: Seen, step: float, *, joint: bool
) -> tuple[Seen, float | None] | None:
    """A known body where it should be; None if its light is not there.

    Returns
    -------
    Seen
    float or None
        How far it has moved along its contour in pixels; None if no end could tell.
    """
    noise = scene.noise(*ahead.point(ahead.middle))
    x, y, tail, head, amplitude, weight = contours.fit_centreline(
        scene.frame.contrast, scene.others, joint, ahead.x, ahead.y, ahead.tail, ahead.head,
        scene.profile, noise, _STIFFNESS, body.light,
    )  # fmt: skip
    slack = _SLACK + _SLACK_STEPS * abs(step)
    back, forth = slack + max(step, 0.0), slack + max(-step, 0.0)
    more = 0.0 if body.length_known else _GROWTH
    rough_tail, rough_head = contours.lit_interval(
        amplitude, weight, tail - back - more, min(tail + forth, head), max(head - back, tail),
        head + forth + more, body.light,
    )  # fmt: skip
    seen = _finished(scene, x, y, rough_tail, rough_head, amplitude, weight, body.light, body.speed)
    if seen.significance == 0.0 or _visible(weight, seen) < _SHORTEST:
        return None
    if seen.share > 0.5 and (
        seen.significance < 0.8 * scene.threshold or seen.light < _FAINTEST * body.light
    ):
        return None
    if seen.share <= 0.5 and seen.significance < 0.5 * scene.threshold and seen.share > 0.2:
        return None
    return _settled(scene, body, seen, tail, head, step, weight)


def _settled(
    scene: Scene, body: Body, seen: Seen, tail: float, head: float, step: float, weight: Floats
) -> tuple[Seen, float | None]:
    """Ends that agree with the length where it is known, and how far they moved."""
    tail_ok = _clear(weight, seen.tail, seen.tail_sd) and not seen.tail_cut
    head_ok = _clear(weight, seen.head, seen.head_sd) and not seen.head_cut
    tail_off, head_off = seen.tail - tail, seen.head - head
    if body.length_known and not seen.cut:
        off = seen.length - body.length
        tolerance = max(2.5, 4 * math.hypot(seen.tail_sd, seen.head_sd))
        if abs(off) > tolerance and tail_ok and head_ok:
            body.disagreed += 1
            if body.disagreed > 4:
                body.lengths, body.disagreed = 0, 0
            elif abs(tail_off) > abs(head_off):
                tail_ok = False
            else:
                head_ok = False
        else:
            body.disagreed = 0
        if not tail_ok and not head_ok:
            seen.tail, seen.head, seen.flag = tail, head, HIDDEN
        elif not tail_ok:
            seen.tail = seen.head - body.length
        elif not head_ok:
            seen.head = seen.tail + body.length
    elif not seen.cut and not (tail_ok and head_ok):
        seen.flag = HIDDEN if seen.share < 0.8 else ""
    ends = [seen.point(seen.tail), seen.point(seen.head)]
    seen.tail_cut = seen.tail_cut or scene.outside(*ends[0])
    seen.head_cut = seen.head_cut or scene.outside(*ends[1])
    if seen.cut:
        seen.flag = CUT
        if body.length_known and tail_ok and not seen.tail_cut:
            seen.head = seen.tail + body.length
        elif body.length_known and head_ok and not seen.head_cut:
            seen.tail = seen.head - body.length
        seen.shown = _shown(scene, seen)
    offs = [o for o, ok in ((tail_off, tail_ok), (head_off, head_ok)) if ok]
    if tail_ok and head_ok and not seen.flag:
        body.learn_length(seen.length)
    moved = step + sum(offs) / len(offs) if offs else None
    return seen, moved


def _visible(weight: Floats, seen: Seen) -> int:
    """Pixels of the contour that are inside the frame."""
    first, last = max(math.ceil(seen.tail), 0), max(math.floor(seen.head) + 1, 0)
    return int(np.count_nonzero(weight[first:last]))


def _clear(weight: Floats, place: float, deviation: float) -> bool:
    """An end that is well defined and has no other filament over it."""
    if deviation > _TRUSTED_SD:
        return False
    first, last = max(int(place) - 2, 0), min(int(place) + 4, len(weight))
    if last <= first:
        return False
    return float(weight[first:last].min()) > 0.3 * float(weight.max())
