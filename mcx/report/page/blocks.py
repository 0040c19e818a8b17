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
    """Rows below heads; the first `words` columns hold words, and those from `tail` on."""

    title: str
    heads: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]
    words: int = 1
    tail: int = 99
    note: str = ""
    kind: str = "table"


@dataclass(frozen=True, slots=True)
class Picture:
    """An SVG with its own text alternative, and a line below it."""

    title: str
    svg: str
    note: str = ""
    kind: str = "picture"


@dataclass(frozen=True, slots=True)
class Notes:
    """Sentences."""

    title: str
    items: tuple[str, ...]
    kind: str = "notes"


@dataclass(frozen=True, slots=True)
class Sheet:
    """One contract's part of a page: the answer in large letters, then blocks; wide ones take the whole width."""

    title: str
    answer: str
    below: str
    blocks: tuple[Facts | Table | Picture | Notes, ...]


def cut(rows: Sequence[tuple[str, ...]], most: int) -> tuple[tuple[tuple[str, ...], ...], str]:
    """No more rows than a printed page has room for, and a word about those left out."""
    left = len(rows) - most
    return tuple(map(tuple, rows[:most])), f"more with --json: {left}" if left > 0 else ""


def notes(*named: tuple[str, Sequence[str]]) -> tuple[Notes, ...]:
    """Those of the lists that hold anything."""
    return tuple(Notes(title, tuple(items)) for title, items in named if items)
