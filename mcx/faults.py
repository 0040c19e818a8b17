"""Faults in what the user wrote, as values, and the errors that carry them to the door.

Every stage that reads a document returns what it could make of it and the faults it found; nothing is raised until
`InputError`, once, with all of them in order of place.
"""

from __future__ import annotations

import difflib
from collections.abc import Iterable
from dataclasses import dataclass


@dataclass(frozen=True, slots=True, order=True)
class Place:
    """A position in a file: name as the user gave it, line and column counted from 1."""

    file: str
    line: int
    column: int

    def __str__(self) -> str:
        return f"{self.file}:{self.line}:{self.column}"

    def right(self, columns: int) -> Place:
        """The place `columns` further to the right on the same line."""
        return Place(self.file, self.line, self.column + columns)


@dataclass(frozen=True, slots=True, order=True)
class Fault:
    """One thing wrong in a document: where, what is wrong, and what was expected.

    Ordered by place, so that a list of faults sorts as the file reads.
    """

    place: Place
    text: str

    def __str__(self) -> str:
        return f"{self.place}: {self.text}"


class InputError(ValueError):
    """The documents are wrong. `faults` holds every fault found, in order of place."""

    def __init__(self, faults: Iterable[Fault]):
        self.faults: tuple[Fault, ...] = tuple(sorted(set(faults)))
        super().__init__("\n".join(str(fault) for fault in self.faults))


class RequestError(ValueError):
    """The request is wrong, not a document: an option out of range, a file that is not there."""


class Refusal(ValueError):
    """The question is well put but this tool cannot answer it rightly; the text says why."""


def did_you_mean(word: str, known: Iterable[str]) -> str:
    """'; did you mean 'strike'?' for a near miss, else the empty string."""
    near = nearest(word, known)
    return f"; did you mean '{near}'?" if near else ""


def nearest(word: str, known: Iterable[str]) -> str:
    """The near miss among what is known, or ''."""
    return next(iter(difflib.get_close_matches(word, list(known), n=1, cutoff=0.6)), "")
