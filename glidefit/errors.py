"""The errors a user can cause, each with where, what was found, what was expected, what to do."""

from __future__ import annotations

from collections.abc import Iterable
from functools import partial
from typing import Any


class GlidefitError(Exception):
    """An error whose text is written for the user; commands print it without a traceback."""

    exit_code = 3


class InputError(GlidefitError):
    """Something in the user's files is wrong.

    Parameters
    ----------
    where : str
        File, and row, column, frame or track where there is one.
    found : str
        What is there.
    expected : str
        What should be there, with its unit.
    remedy : str
        What to do about it.
    """

    exit_code = 3

    def __init__(self, where: str, found: str, *, expected: str, remedy: str) -> None:
        self.where, self.found, self.expected, self.remedy = where, found, expected, remedy
        super().__init__(f"{where}: {found}; expected {expected}. {remedy}")

    def __reduce__(self) -> tuple[Any, ...]:
        """Rebuild from its parts, as when a worker process hands it back."""
        again = partial(InputError, expected=self.expected, remedy=self.remedy)
        return again, (self.where, self.found)


class InputErrors(GlidefitError):  # noqa: N818
    """All that is wrong with the input, listed at once."""

    exit_code = 3

    def __init__(self, errors: Iterable[InputError]) -> None:
        self.errors = tuple(errors)
        super().__init__("\n".join(str(error) for error in self.errors))

    def __reduce__(self) -> tuple[Any, ...]:
        """Rebuild from its parts, as when a worker process hands it back."""
        return InputErrors, (self.errors,)


def input_errors(results: Iterable[object]) -> list[InputError]:
    """What is wrong with the input among results of which each may be an error.

    Raises
    ------
    GlidefitError
        If one of them is an error of another kind.
    """
    errors: list[InputError] = []
    for result in results:
        if isinstance(result, InputError):
            errors.append(result)
        elif isinstance(result, InputErrors):
            errors += result.errors
        elif isinstance(result, GlidefitError):
            raise result
    return errors


class NothingLeft(GlidefitError):  # noqa: N818  (the state is the name a user knows)
    """Cleaning left no track to fit; the text names the rule and by how much it failed."""

    exit_code = 4


class OutputError(GlidefitError):
    """The output folder cannot be used; nothing in it was changed."""

    exit_code = 3
