"""Located values: the tree that a YAML document is, every node with its place, nothing interpreted yet.

A scalar keeps its text and whether it was quoted; what the text means (a number, a date, a formula) is decided by the
checker that knows what it expects. So no value changes type behind the user's back: `on`, `1e3`, `2026-12-01` are text.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import TypeAlias

from mcx.faults import Place


@dataclass(frozen=True, slots=True)
class Scalar:
    """A text. `quoted` texts are never numbers; an empty plain text is an absent value (`key:` with nothing behind).

    `pieces` is for texts that do not stand in the file as they read (folded over lines, with escapes): the offsets at
    which a stretch begins that stands there letter by letter, each with its place.
    """

    text: str
    place: Place
    quoted: bool = False
    pieces: tuple[tuple[int, Place], ...] = ()

    def __str__(self) -> str:
        return self.text

    @property
    def absent(self) -> bool:
        """Whether nothing was written: `key:` with nothing behind."""
        return not self.text and not self.quoted

    def at(self, offset: int) -> Place:
        """The place in the file of the character at `offset` of the text."""
        for start, place in reversed(self.pieces):
            if start <= offset:
                return place.right(offset - start)
        return self.place.right(offset + self.quoted)


@dataclass(frozen=True, slots=True)
class Sequence:
    """A list of nodes; `flow` when written in brackets."""

    items: tuple[Node, ...]
    place: Place
    flow: bool = False

    def __iter__(self) -> Iterator[Node]:
        return iter(self.items)

    def __len__(self) -> int:
        return len(self.items)


@dataclass(frozen=True, slots=True)
class Mapping:
    """Keys and values in file order, no key twice; `flow` when written in braces."""

    entries: tuple[tuple[Scalar, Node], ...]
    place: Place
    flow: bool = False

    def get(self, key: str) -> Node | None:
        """The value under `key`, or None."""
        return next((value for name, value in self.entries if name.text == key), None)

    def key(self, key: str) -> Scalar | None:
        """The key itself, for its place, or None."""
        return next((name for name, _ in self.entries if name.text == key), None)

    def keys(self) -> tuple[str, ...]:
        return tuple(name.text for name, _ in self.entries)

    def __contains__(self, key: str) -> bool:
        return any(name.text == key for name, _ in self.entries)


Node: TypeAlias = Scalar | Sequence | Mapping


@dataclass(frozen=True, slots=True)
class Document:
    """One YAML document: its kind, told by its keys, its top mapping, and the file's text for the record."""

    kind: str  # payoff, contract, market or quote; fixings for a CSV file
    body: Mapping
    file: str
    text: str
