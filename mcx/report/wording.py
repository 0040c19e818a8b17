"""Words for what a contract says: numbers as the contract writes them, formulas with their comparisons spelled out.

Comparisons are the part that people misread, so `<` and `<=` become 'is below' and 'is at or below'. Arithmetic and
functions stay as in the definition, where the reader can look them up.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence

from mcx.checked.contract import DayList, DayRef, DayRule, Figures, LevelFixing, Period, Stretch, Word
from mcx.checked.formula import (
    Binary,
    Call,
    ChoiceIs,
    Formula,
    Given,
    IfElse,
    Name,
    Number,
    OfAsset,
    Previous,
    Unary,
)
from mcx.checked.payoff import Term
from mcx.dates.dated_contract import DatedContract, Day

COMPARED = {"<": "is below", "<=": "is at or below", ">": "is above", ">=": "is at or above",
            "==": "equals", "!=": "does not equal"}
OPPOSITE = {"<": ">=", "<=": ">", ">": "<=", ">=": "<", "==": "!=", "!=": "=="}
BINDING = {"or": 1, "and": 2, "not": 3, "compare": 4, "+": 5, "-": 5, "*": 6, "/": 6, "negative": 7, "**": 8}
ATOM = 9
MOST_LISTED = 4  # dates written out in one sentence


def counted(count: int, thing: str) -> str:
    """'1 date', '12 dates'."""
    return f"{count:,} {thing}" + ("" if count == 1 else "s")


def joined(words: Iterable[str], joint: str = "and") -> str:
    """'a, b and c'."""
    words = list(words)
    return words[0] if len(words) == 1 else f"{', '.join(words[:-1])} {joint} {words[-1]}" if words else ""


def quoted(name: str) -> str:
    return f"'{name}'"


def figure(number: float, kind: str = "number") -> str:
    """A number as a contract writes it; `kind` is the type of its term."""
    return f"{number * 100:.12g} %" if kind == "percent" else f"{number:.12g}"


def period(stated: Period) -> str:
    """'3 months'."""
    return counted(stated.count, stated.unit)


def days(listed: Sequence[Day]) -> str:
    """Days in one phrase: all of a short list, else how many, the first and the last."""
    if len(listed) <= MOST_LISTED:
        return joined(str(day) for day in listed)
    return f"{counted(len(listed), 'date')} from {listed[0]} to {listed[-1]}"


class Words:
    """Words for the formulas and terms of one dated contract."""

    def __init__(self, dated: DatedContract):
        self.dated, self.contract = dated, dated.contract
        self.terms = {term.name: term for term in self.contract.payoff.terms}

    def formula(self, formula: Formula) -> str:
        """A formula in words."""
        return self._text(formula)[0]

    def term(self, term: Term) -> str:
        """The value of a term; 'not stated' for an optional term that the contract leaves out."""
        value = self.contract.terms.get(term.name)
        listed = self.dated.schedules.get(term.name, ())
        match value:
            case None:
                return "not stated"
            case Word(text=text):
                return text
            case Figures():
                return self.figures(term, value)
            case LevelFixing(how=how):
                return f"the {'level' if how == 'fixing' else f'{how} of the levels'} on {days(listed)}"
            case DayRef(term=named) if named:
                part = f".{value.part}" if value.part else ""
                return f"{days(listed)} ({named}{part})"
            case DayRule(every=every) if every is not None:
                ends = ", at the ends of months" if value.end_of_month else ""
                return f"every {period(every)}{ends}: {days(listed)}"
            case Stretch():
                return f"all the time from {listed[0]} to {listed[-1]}"
            case DayRef() | DayRule() | DayList():
                return days(listed)
        raise TypeError(f"no term value: {value!r}")

    def figures(self, term: Term, value: Figures) -> str:
        """A number, or one for each asset, or one for each date."""
        rows = [self._row(term, row) for row in value.rows]
        if len(set(rows)) == 1:
            return rows[0]
        return f"{'; '.join(rows)} (by date of {term.per})"

    def on_date(self, name: str, position: int) -> str:
        """The entry of a per-date term on one date of its schedule."""
        term, value = self.terms[name], self.contract.terms[name]
        return self._row(term, value.rows[position])

    def _row(self, term: Term, row: Sequence[float]) -> str:
        shown = [figure(number, term.type) for number in row]
        if len(set(shown)) == 1:
            return shown[0]
        return ", ".join(f"{asset} {number}" for asset, number in zip(self.contract.assets, shown, strict=True))

    def _text(self, formula: Formula) -> tuple[str, int]:
        """The words, and how strongly what joins them binds (ATOM where nothing does)."""
        match formula:
            case Number(value=value, kind=kind):
                return (("always" if value else "never") if kind.is_flag else figure(value)), ATOM
            case Name(name=name):
                return name, ATOM
            case ChoiceIs(term=term, word=word, negated=negated):
                return f"{term} is {'not ' if negated else ''}'{word}'", BINDING["compare"]
            case Given(term=term):
                return f"{term} is stated", BINDING["compare"]
            case Unary(symbol="-", operand=operand):
                return f"-{self._inside(operand, BINDING['negative'])}", BINDING["negative"]
            case Unary(operand=Binary(symbol=symbol) as operand) if symbol in COMPARED:
                return self._compared(operand, OPPOSITE[symbol])
            case Unary(operand=operand):
                return f"not {self._inside(operand, BINDING['not'])}", BINDING["not"]
            case Binary(symbol=symbol) if symbol in COMPARED:
                return self._compared(formula, symbol)
            case Binary(symbol=symbol):
                binds = BINDING[symbol]
                right = binds + (symbol in ("-", "/"))  # a - (b - c) keeps its brackets
                left = binds + (symbol == "**")
                return f"{self._inside(formula.left, left)} {symbol} {self._inside(formula.right, right)}", binds
            case IfElse(condition=condition, yes=yes, no=no):
                return f"{self._inside(yes, 1)} if {self.formula(condition)}, else {self._inside(no, 1)}", 0
            case Call(function=function, arguments=arguments):
                return f"{function}({', '.join(map(self.formula, arguments))})", ATOM
            case OfAsset(operand=operand, asset=asset):
                chosen = self.contract.terms.get(asset)
                name = chosen.text if isinstance(chosen, Word) else asset
                return f"{self._inside(operand, ATOM)} of {name}", BINDING["compare"]
            case Previous(operand=operand, first=first):
                before = f"{self._inside(operand, ATOM)} on the date before"
                return f"({before}, at first {self.formula(first)})", ATOM
        raise TypeError(f"no formula: {formula!r}")

    def _inside(self, formula: Formula, binding: int) -> str:
        text, binds = self._text(formula)
        return text if binds >= binding else f"({text})"

    def _compared(self, formula: Binary, symbol: str) -> tuple[str, int]:
        left, right = (self._side(side) for side in (formula.left, formula.right))
        return f"{left} {COMPARED[symbol]} {right}", BINDING["compare"]

    def _side(self, formula: Formula) -> str:
        """One side of a comparison; a plain term is followed by its number, or by how its numbers begin and end."""
        text = self._inside(formula, BINDING["compare"] + 1)
        value = self.contract.terms.get(formula.name) if isinstance(formula, Name) else None
        if not isinstance(value, Figures):
            return text
        rows = [self._row(self.terms[formula.name], row) for row in value.rows]
        return f"{text} ({rows[0]})" if len(set(rows)) == 1 else f"{text} ({rows[0]} to {rows[-1]}, by date)"
