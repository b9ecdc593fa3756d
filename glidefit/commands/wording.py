"""How commands speak: counts, and the text of an error."""

from __future__ import annotations

from glidefit.errors import GlidefitError, InputErrors


def counted(n: int, word: str) -> str:
    """A number with its word: "1 track", "2 tracks"."""
    return f"{n} {word}" if n == 1 else f"{n} {word}s"


def told(error: GlidefitError) -> str:
    """What a user reads: one paragraph, or one line for each of several errors."""
    if not isinstance(error, InputErrors) or len(error.errors) == 1:
        return f"Error: {printable(str(error))}"
    lines = [f"- {printable(str(one))}" for one in error.errors]
    return "\n".join([f"{len(lines)} errors:", *lines])


def printable(text: str) -> str:
    """Without characters by which text from a file could command the terminal."""
    return "".join(c if c.isprintable() or c == "\n" else "\ufffd" for c in text)
