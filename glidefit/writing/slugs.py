"""Names of files made from names that a user chose: safe on every system, each one once."""

from __future__ import annotations

import re
import unicodedata
from collections.abc import Iterable

_RESERVED = {"con", "prn", "aux", "nul"} | {f"{p}{n}" for p in ("com", "lpt") for n in range(10)}
_LETTERS = str.maketrans({"µ": "u", "μ": "u", "ß": "ss", "ø": "o", "Ø": "O", "æ": "ae", "Æ": "AE"})
_LONGEST = 60


def slug(name: str) -> str:
    """A file name of a-z, 0-9 and single hyphens, at most 60 characters, never empty.

    Lower case, because some file systems take ``A`` and ``a`` for the same file.
    """
    plain = unicodedata.normalize("NFKD", name.translate(_LETTERS)).translate(_LETTERS)
    ascii_only = plain.encode("ascii", "ignore").decode("ascii").lower()
    text = re.sub(r"[^a-z0-9]+", "-", ascii_only).strip("-")[:_LONGEST].strip("-")
    if not text or text in _RESERVED:
        text = f"unnamed-{text}".strip("-")
    return text


def slugs(names: Iterable[str]) -> dict[str, str]:
    """The slug of each name; a name whose slug is taken gets -2, -3 and so on."""
    found: dict[str, str] = {}
    taken: set[str] = set()
    for name in names:
        if name in found:
            continue
        base = text = slug(name)
        n = 1
        while text in taken:
            n += 1
            mark = f"-{n}"
            text = base[: _LONGEST - len(mark)].rstrip("-") + mark
        taken.add(text)
        found[name] = text
    return found
