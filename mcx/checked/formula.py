"""The typed tree of a formula: what `expression.py` makes of its text and the tape is built from.

Every node has its kind and its place. Trees hold no strings to compare: a comparison of a choice term with a word is
a `ChoiceIs`, so that it folds away once the contract is known.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import TypeAlias

from mcx.checked.kinds import Kind
from mcx.faults import Place


@dataclass(frozen=True, slots=True)
class Number:
    """A literal: `1.5`, `70%` (0.7), `25 bp` (0.0025), `true` and `false` (kind FLAG, 1.0 and 0.0)."""

    value: float
    place: Place
    kind: Kind = Kind.NUMBER


@dataclass(frozen=True, slots=True)
class Name:
    """A term, a `let` name, a running value, or `spot`, `nth`, `n_dates`, `years`, `period`."""

    name: str
    place: Place
    kind: Kind


@dataclass(frozen=True, slots=True)
class ChoiceIs:
    """A `choice` term compared with one of its words; `negated` for `!=`."""

    term: str
    word: str
    negated: bool
    place: Place
    kind: Kind = Kind.FLAG


@dataclass(frozen=True, slots=True)
class Given:
    """`given(term)`: whether an optional term was stated."""

    term: str
    place: Place
    kind: Kind = Kind.FLAG


@dataclass(frozen=True, slots=True)
class Unary:
    """`-x` or `not x`; `symbol` is '-' or 'not'."""

    symbol: str
    operand: Formula
    place: Place
    kind: Kind


@dataclass(frozen=True, slots=True)
class Binary:
    """`+ - * / **`, one comparison `< <= > >= == !=`, or `and`, `or`. A chained comparison is an `and` of two."""

    symbol: str
    left: Formula
    right: Formula
    place: Place
    kind: Kind


@dataclass(frozen=True, slots=True)
class IfElse:
    """`yes if condition else no`, elementwise over assets."""

    condition: Formula
    yes: Formula
    no: Formula
    place: Place
    kind: Kind


@dataclass(frozen=True, slots=True)
class Call:
    """`min max abs exp log sqrt clip` elementwise; `worst best mean basket ranked any all` over the assets."""

    function: str
    arguments: tuple[Formula, ...]
    place: Place
    kind: Kind


@dataclass(frozen=True, slots=True)
class OfAsset:
    """`of(x, asset)`: the entry of one asset. `asset` names an asset of the contract or an `asset` term."""

    operand: Formula
    asset: str
    place: Place
    kind: Kind


@dataclass(frozen=True, slots=True)
class Previous:
    """`previous(x, first)`: x on the previous date of this schedule, `first` on its first date."""

    operand: Formula
    first: Formula
    place: Place
    kind: Kind


Formula: TypeAlias = (
    Number | Name | ChoiceIs | Given | Unary | Binary | IfElse | Call | OfAsset | Previous
)


def children(formula: Formula) -> tuple[Formula, ...]:
    """The direct parts of a formula, left to right."""
    match formula:
        case Unary(operand=x) | OfAsset(operand=x):
            return (x,)
        case Binary(left=a, right=b) | Previous(operand=a, first=b):
            return (a, b)
        case IfElse(condition=c, yes=a, no=b):
            return (c, a, b)
        case Call(arguments=parts):
            return parts
        case _:
            return ()


def walk(formula: Formula) -> Iterator[Formula]:
    """The formula and all its parts, parents first."""
    yield formula
    for part in children(formula):
        yield from walk(part)
