"""Words on pages: what a user wrote made safe to show, counts, short forms of long names."""

from __future__ import annotations

import re
from collections.abc import Iterable

# Controls, lone surrogates, what turns the direction of the text around it, noncharacters:
# they would break the page or make it lie, so they are shown as a replacement sign.
_UNSAFE = re.compile(
    "[\x00-\x08\x0b\x0c\x0e-\x1f\x7f-\x9f\u202a-\u202e\u2066-\u2069\ud800-\udfff\ufdd0-\ufdef\ufffe\uffff]"
)
_PLURALS = {"day": "days", "filament-frame": "filament-frames"}


def visible(text: str) -> str:
    """The text with every character that cannot be shown as it is replaced by U+FFFD."""
    return _UNSAFE.sub("\ufffd", text)


def named(text: str) -> str:
    """A name made visible, or words saying that there is none."""
    return visible(text).strip() or "(no name)"


def shortened(text: str, *, width: int) -> str:
    """A text of at most ``width`` (>= 3) characters; a long one loses its middle.

    Names of conditions tend to differ at their ends, so both ends are kept.
    """
    text = " ".join(visible(text).split())
    if len(text) <= width:
        return text
    head = (width - 1) // 2
    return f"{text[:head]}…{text[len(text) - (width - 1 - head) :]}"


def short_names(names: Iterable[str], *, width: int) -> list[str]:
    """Short forms of names, still distinct: equal ones are numbered."""
    used: set[str] = set()
    short: list[str] = []
    for name in names:
        text, n = shortened(named(name), width=width), 1
        while text in used:
            n += 1
            mark = f" ({n})"
            text = shortened(named(name), width=width - len(mark)) + mark
        used.add(text)
        short.append(text)
    return short


def counted(number: int, noun: str) -> str:
    """A number with its noun: "1 track", "1,200 tracks"."""
    plural = _PLURALS.get(noun, f"{noun}s")
    return f"{number:,} {noun if number == 1 else plural}"


def sentence(text: str) -> str:
    """A remark as a sentence: a capital first, a full stop last."""
    text = text.strip()
    if not text:
        return ""
    return text[:1].upper() + text[1:] + ("" if text[-1] in ".!?" else ".")


def joined(parts: Iterable[str]) -> str:
    """Parts as a list in a sentence: "a, b and c"."""
    *head, last = list(parts) or [""]
    return f"{', '.join(head)} and {last}" if head else last
