"""What is said when input cannot be used, and what is said when it can but should be looked at."""

from __future__ import annotations

import difflib
from collections.abc import Iterable
from dataclasses import dataclass


class InputError(ValueError):
    """Input that cannot be used; nothing is written.

    Parameters
    ----------
    *lines : str
        One line for each thing that is wrong: where, what was expected, what came, the remedy.

    Examples
    --------
    >>> InputError("a.yaml:3:1: title: expected text", "a.yaml:4:1: coil: missing").lines[1]
    'a.yaml:4:1: coil: missing'
    """

    def __init__(self, *lines: str) -> None:
        super().__init__("\n".join(lines))
        self.lines: tuple[str, ...] = lines


class ItemError(InputError):
    """Items of a batch that cannot be used, each with its index, so that a caller can say where it stood.

    Parameters
    ----------
    problems : iterable of (int, str)
        Index into the batch and the reason.
    """

    def __init__(self, problems: Iterable[tuple[int, str]]) -> None:
        self.problems: tuple[tuple[int, str], ...] = tuple(problems)
        super().__init__(*(f"item {index}: {reason}" for index, reason in self.problems))


@dataclass(frozen=True)
class Finding:
    """Something that a careful person looks at before going on; it stops nothing by itself."""

    subject: str
    message: str

    def __str__(self) -> str:
        return f"{self.subject}: {self.message}"


def did_you_mean(word: str, known: Iterable[str]) -> str:
    """Return ``"; did you mean 'x'?"`` for the closest known word, or nothing.

    Examples
    --------
    >>> did_you_mean("standof_mm", ["standoff_mm", "coil"])
    "; did you mean 'standoff_mm'?"
    """
    close = difflib.get_close_matches(word, list(known), n=1, cutoff=0.6)
    return f"; did you mean {close[0]!r}?" if close else ""
