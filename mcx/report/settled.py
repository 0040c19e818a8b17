"""A formula as one contract leaves it: choices, flags and `given` decided, and with one asset nothing 'over assets'.

The readback speaks of the contract, not of all that its definition could have been.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace

from mcx.checked.contract import Contract, Word
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
    walk,
)
from mcx.checked.kinds import Kind
from mcx.checked.payoff import Action, Assign, Deliver, Event, Pay
from mcx.faults import Place

SAME_FOR_ONE = ("worst", "best", "mean", "any", "all", "ranked")


class Settled:
    """The formulas of one contract with everything decided that its terms decide.

    `lets` and `running` hold, in file order, only what some event of the contract reads in the end.
    """

    def __init__(self, contract: Contract):
        self.contract = contract
        payoff = contract.payoff
        self._lets = {let.name: let.formula for let in payoff.lets}
        self._running = {running.name: running for running in payoff.running}
        wanted = self._reached(payoff.events)
        self.lets = {let.name: self.formula(let.formula) for let in payoff.lets if let.name in wanted}
        self.running = tuple(running for running in payoff.running if running.name in wanted)

    def formula(self, formula: Formula) -> Formula:
        """The formula without what is decided; a Number of kind FLAG where all of it is."""
        match formula:
            case ChoiceIs(term=term, word=word, negated=negated) if term in self.contract.terms:
                return _flag((self.contract.terms[term].text == word) is not negated, formula.place)
            case Given(term=term):
                return _flag(term in self.contract.terms, formula.place)
            case Name(name=name):
                return self._name(formula, name)
            case Unary(symbol="not"):
                operand = self.formula(formula.operand)
                known = _known(operand)
                return replace(formula, operand=operand) if known is None else _flag(not known, formula.place)
            case Unary():
                return replace(formula, operand=self.formula(formula.operand))
            case Binary():
                return self._binary(formula)
            case IfElse():
                condition = self.formula(formula.condition)
                known = _known(condition)
                if known is not None:
                    return self.formula(formula.yes if known else formula.no)
                yes, no = self.formula(formula.yes), self.formula(formula.no)
                return replace(formula, condition=condition, yes=yes, no=no)
            case Call():
                return self._call(formula)
            case OfAsset():
                operand = self.formula(formula.operand)
                return operand if self._alone else replace(formula, operand=operand)
            case Previous():
                return replace(formula, operand=self.formula(formula.operand), first=self.formula(formula.first))
        return formula

    def side(self, event: Event) -> bool | None:
        """Whether the event's condition always or never holds in this contract; None where the path decides."""
        return True if event.condition is None else _known(self.formula(event.condition))

    def actions(self, event: Event) -> tuple[Action, ...]:
        """The actions that this contract can reach."""
        side = self.side(event)
        return (*(event.then if side is not False else ()), *(event.otherwise if side is not True else ()))

    def names(self, *formulas: Formula | None) -> Iterator[str]:
        """The names that settled formulas read, those inside `let` names too; some twice."""
        for formula in formulas:
            for part in walk(self.formula(formula)) if formula is not None else ():
                if isinstance(part, Name):
                    yield part.name
                    if part.name in self._lets:
                        yield from self.names(self._lets[part.name])
                elif isinstance(part, OfAsset):
                    yield part.asset

    @property
    def _alone(self) -> bool:
        return len(self.contract.assets) == 1

    def _name(self, formula: Name, name: str) -> Formula:
        stated = self.contract.terms.get(name)
        if isinstance(stated, Word) and formula.kind.is_flag:
            return _flag(stated.text == "true", formula.place)
        if name in self._lets and formula.kind.is_flag:
            inner = self.formula(self._lets[name])
            return formula if _known(inner) is None else inner
        return formula

    def _binary(self, formula: Binary) -> Formula:
        left, right = self.formula(formula.left), self.formula(formula.right)
        if formula.symbol in ("and", "or"):
            decides = formula.symbol == "or"
            for known, other in ((_known(left), right), (_known(right), left)):
                if known is not None:
                    return _flag(decides, formula.place) if known is decides else other
        return replace(formula, left=left, right=right)

    def _call(self, formula: Call) -> Formula:
        arguments = tuple(self.formula(argument) for argument in formula.arguments)
        if self._alone and formula.function in SAME_FOR_ONE:
            return arguments[0]
        if self._alone and formula.function == "basket":
            return Binary("*", arguments[1], arguments[0], formula.place, Kind.NUMBER)
        return replace(formula, arguments=arguments)

    def _reached(self, events: tuple[Event, ...]) -> set[str]:
        """Everything that the events read in the end, through `let` names and running values."""
        found: set[str] = set()
        waiting: list[str] = []
        for event in events:
            waiting += [event.at.name] if event.at.part == "once" else []
            waiting += self.names(event.condition if self.side(event) is None else None)
            for action in self.actions(event):
                waiting += self.names(*right_sides(action)) if not isinstance(action, Assign) else ()
        while waiting:
            name = waiting.pop()
            if name in found:
                continue
            found.add(name)
            running = self._running.get(name)
            if running:
                waiting += self.names(running.formula, running.start, *_assigned(events, name))
        return found


def right_sides(action: Action) -> tuple[Formula, ...]:
    """The formulas of an action."""
    match action:
        case Deliver(amount=amount, which=which):
            return (amount,) if which is None else (amount, which)
        case Pay():
            return (action.amount,)
        case Assign():
            return tuple(right for _, right in action.values)
    return ()


def _assigned(events: tuple[Event, ...], name: str) -> list[Formula]:
    """What events set a running value to, and the conditions that decide it."""
    found: list[Formula] = []
    for event in events:
        rights = [right for action in (*event.then, *event.otherwise) if isinstance(action, Assign)
                  for target, right in action.values if target == name]
        found += rights + ([event.condition] if rights and event.condition is not None else [])
    return found


def _known(formula: Formula) -> bool | None:
    return bool(formula.value) if isinstance(formula, Number) and formula.kind.is_flag else None


def _flag(holds: bool, place: Place) -> Number:
    return Number(float(holds), place, Kind.FLAG)
