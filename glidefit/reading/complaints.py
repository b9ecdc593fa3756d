"""What can be wrong with a video, in words that are safe to print."""

from __future__ import annotations

from pathlib import Path

from glidefit.errors import InputError


def shown(text: str) -> str:
    """Text from a file on one line, without characters that would command a terminal."""
    return "".join(c if c.isprintable() else "\ufffd" for c in " ".join(text.split()))


def damaged(where: Path | str, found: str) -> InputError:
    """The error of a file that is cut off or broken."""
    return InputError(
        str(where),
        shown(found),
        expected="a complete video",
        remedy="Copy the file again from where it was recorded and compare the sizes.",
    )


def undecodable(where: Path | str, said: object) -> InputError:
    """The error of a frame or header that a library could not read, with what it said."""
    words = shown(str(said)) or type(said).__name__
    return InputError(
        str(where),
        f"it cannot be decoded ({words:.200})",
        expected="a complete video in a common compression",
        remedy="Copy the file again from where it was recorded; if that does not help, export it"
        " as OME-TIFF without compression.",
    )


def contradictory(where: Path | str, found: str) -> InputError:
    """The error of a file whose metadata do not fit its frames, or each other."""
    return InputError(
        str(where),
        shown(found),
        expected="metadata that fit the frames",
        remedy="Open the file in the program that wrote it, check that all frames are there, and"
        " save it again as OME-TIFF.",
    )


def colour(path: Path, n_values: int) -> InputError:
    """The error of a video with several values a pixel."""
    return InputError(
        str(path),
        f"colour frames, {n_values} values per pixel",
        expected="grey frames, one value per pixel",
        remedy="Save the channel that shows the filaments on its own, as greyscale.",
    )
