"""Does speed or motile fraction change within recordings, or with time in the chamber?"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from glidefit.kernels import resampling
from glidefit.results import TimePoint

# A change is a problem when its 99 % interval over chambers excludes zero and it is at least
# this large, relative to the mean.
_LEVEL, _LEAST = 0.99, 0.05
_CAUSES = "photodamage, warming, or ATP running out"


def ageing(points: Sequence[TimePoint]) -> list[str]:
    """Problems in plain words: changes in time that the headline numbers average over."""
    out = []
    for name, word in (("speed_um_s", "Speed"), ("motile_fraction", "Motile fraction")):
        within = _by_chamber(points, name, "time_s")
        if text := _change(within, word, f"from the start to the end of a recording ({_CAUSES})"):
            out.append(text)
        across = _by_chamber(points, name, "minutes")
        if text := _change(across, word, f"over the time that a chamber was filmed ({_CAUSES})"):
            out.append(text)
    return out


def _by_chamber(points: Sequence[TimePoint], name: str, clock: str) -> list[float]:
    """Relative change along the clock in every chamber: least-squares slope times its span.

    Along ``time_s`` each recording is fitted by itself and the chamber is their mean; along
    ``minutes`` the recordings of a chamber are fitted together, if there are several.
    """
    chambers: dict[tuple[str, str], list[TimePoint]] = {}
    for point in points:
        chambers.setdefault((point.day, point.chamber), []).append(point)
    out = []
    for them in chambers.values():
        recordings = list(dict.fromkeys(p.recording for p in them))
        if clock == "time_s":
            sets = [[p for p in them if p.recording == name_] for name_ in recordings]
        else:
            sets = [them] if len(recordings) > 1 else []
        changes = [c for c in (_relative_change(s, name, clock) for s in sets) if np.isfinite(c)]
        if changes:
            out.append(float(np.mean(changes)))
    return out


def _relative_change(points: Sequence[TimePoint], name: str, clock: str) -> float:
    t = np.array([getattr(p, clock) for p in points])
    y = np.array([getattr(p, name) for p in points])
    there = np.isfinite(t) & np.isfinite(y)
    if there.sum() < 3 or np.ptp(t[there]) == 0 or not y[there].mean() > 0:
        return float("nan")
    slope = np.polyfit(t[there], y[there], 1)[0]
    return float(slope * np.ptp(t[there]) / y[there].mean())


def _change(changes: list[float], word: str, when: str) -> str:
    if len(changes) < 2:
        return ""
    mean = float(np.mean(changes))
    low, high = resampling.student_interval(np.array(changes), level=_LEVEL)
    if low <= 0 <= high or abs(mean) < _LEAST:
        return ""
    verb = "falls" if mean < 0 else "rises"
    return f"{word} {verb} by {abs(mean):.0%} {when}; the headline numbers average over it."
