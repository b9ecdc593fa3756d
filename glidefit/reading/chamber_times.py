"""Clock times of an assay sheet, as minutes after the first start in a chamber."""

from __future__ import annotations

import datetime
import re
from collections.abc import Mapping, Sequence

from glidefit.errors import InputError

_CLOCK = re.compile(r"(\d{1,2}):(\d{2})(?::(\d{2}(?:\.\d+)?))?", re.ASCII)
_LONGEST_MINUTES = 12 * 60.0

# What a time counts from decides which times can be compared.
_Time = tuple[str, float]  # "clock", "date" or "zone"; minutes


def minutes_from_start(
    rows: Sequence[Mapping[str, str]], where: Sequence[str]
) -> tuple[list[float | None], list[InputError]]:
    """Minutes of each row's start_time after the earliest one in its chamber of its day.

    Parameters
    ----------
    rows : sequence of mappings
        Texts of the columns day, chamber and start_time.
    where : sequence of str
        Where each row stands, for messages.

    Returns
    -------
    minutes : list of float or None
        None for a row without a start_time.
    errors : list of InputError
        Unreadable times, and times of one chamber that cannot be compared.
    """
    errors: list[InputError] = []
    chambers: dict[tuple[str, str], list[int]] = {}
    times: list[_Time | None] = []
    for i, row in enumerate(rows):
        text = row.get("start_time", "")
        time = parse_start_time(text)
        times.append(time)
        chamber = (row.get("day", ""), row.get("chamber", ""))
        if time is not None and all(chamber):
            chambers.setdefault(chamber, []).append(i)
        elif time is None and text:
            errors.append(_unreadable(text, where[i]))
    minutes: list[float | None] = [None] * len(rows)
    for members in chambers.values():
        first = min(members, key=lambda i: times[i] or ("", 0.0))
        for i in members:
            time, start = times[i], times[first]
            assert time is not None
            assert start is not None
            minutes[i] = time[1] - start[1]
            if time[0] != start[0]:
                errors.append(_mixed(rows[i], rows[first], where[i]))
            elif time[0] == "clock" and time[1] - start[1] > _LONGEST_MINUTES:
                errors.append(_past_midnight(rows[i], rows[first], where[i]))
    return minutes, errors


def parse_start_time(text: str) -> tuple[str, float] | None:
    """Kind ("clock", "date", "zone") and minutes of a start time; None if it is not one."""
    if clock := _CLOCK.fullmatch(text):
        hours, minutes, seconds = int(clock[1]), int(clock[2]), float(clock[3] or 0)
        within = hours < 24 and minutes < 60 and seconds < 60
        return ("clock", 60.0 * hours + minutes + seconds / 60) if within else None
    if "T" not in text and " " not in text:
        return None
    try:
        moment = datetime.datetime.fromisoformat(text)
    except ValueError:
        return None
    origin = datetime.datetime(2000, 1, 1, tzinfo=moment.tzinfo and datetime.UTC)
    kind = "date" if moment.tzinfo is None else "zone"
    return kind, (moment - origin).total_seconds() / 60


def _unreadable(text: str, where: str) -> InputError:
    return InputError(
        where,
        f"the start_time {text!r} is not a time",
        expected="HH:MM, HH:MM:SS or an ISO 8601 date and time",
        remedy="For example 14:05 or 2024-05-31T14:05.",
    )


def _mixed(row: Mapping[str, str], first: Mapping[str, str], where: str) -> InputError:
    return InputError(
        where,
        f"the start_time {row['start_time']!r} cannot be compared with {first['start_time']!r} "
        f"in the same chamber {row.get('chamber', '')!r}",
        expected="times of one chamber in one form",
        remedy="Write all with the date or all without, all with the time zone or all without.",
    )


def _past_midnight(row: Mapping[str, str], first: Mapping[str, str], where: str) -> InputError:
    return InputError(
        where,
        f"the start_time {row['start_time']!r} is more than 12 hours after "
        f"{first['start_time']!r} in the same chamber {row.get('chamber', '')!r}",
        expected="times of one chamber on one day",
        remedy="If the chamber was filmed past midnight, write all its times with their dates.",
    )
