"""What a page is made of."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Facts:
    """Names with what is said of them."""

    title: str
    rows: tuple[tuple[str, str], ...]
    kind: str = "facts"


@dataclass(frozen=True, slots=True)
class Table:
    """Rows below heads; the first `words` columns hold words, and those from `tail` on. `wide` ones take the whole
    width of a page."""

    title: str
    heads: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]
    words: int = 1
    tail: int = 99
    note: str = ""
    wide: bool = False
    kind: str = "table"


@dataclass(frozen=True, slots=True)
class Picture:
    """An SVG with its own text alternative, and a line below it."""

    title: str
    svg: str
    note: str = ""
    wide: bool = False
    kind: str = "picture"


@dataclass(frozen=True, slots=True)
class Notes:
    """Sentences, or (by its kind 'command') words for a prompt, which are never broken at a hyphen."""

    title: str
    items: tuple[str, ...]
    kind: str = "notes"


@dataclass(frozen=True, slots=True)
class Sheet:
    """One contract's part of a page: the answer in large letters, then blocks."""

    title: str
    answer: str
    below: str
    blocks: tuple[Facts | Table | Picture | Notes, ...]

    @property
    def pictures(self) -> list[tuple[str, str]]:
        """Titles and SVGs."""
        return [(block.title, block.svg) for block in self.blocks if isinstance(block, Picture)]


LEFT_OUT = "more with --json: {}"


def cut(rows: Sequence[tuple[str, ...]], most: int) -> tuple[tuple[tuple[str, ...], ...], str]:
    """No more rows than a printed page has room for, and a word about those left out."""
    left = len(rows) - most
    return tuple(map(tuple, rows[:most])), LEFT_OUT.format(left) if left > 0 else ""


def few(texts: Sequence[str], most: int) -> tuple[str, ...]:
    """The same for sentences; the word about the rest is the last of them."""
    return (*texts[:most], *([LEFT_OUT.format(len(texts) - most)] if len(texts) > most else []))


def notes(*named: tuple[str, Sequence[str]]) -> tuple[Notes, ...]:
    """Those of the lists that hold anything."""
    return tuple(Notes(title, tuple(items)) for title, items in named if items)
