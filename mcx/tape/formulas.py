"""From a formula's tree to values of the tape, at one date.

A formula gives one value, or one for each asset; both are a tuple of value numbers here, of length 1 or the number of
assets, and operations spread the short one over the long one. Numeric terms become leaves; choices, flags, `given`,
`nth` and the like are known and fold away, and of a conditional that is known only the branch taken is read.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass, field
from typing import TypeAlias

from mcx.checked.contract import Contract, Figures, LevelFixing, Word
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
from mcx.dates.dated_contract import Day, Occasion
from mcx.faults import Fault, Place
from mcx.tape.builder import Builder
from mcx.tape.ops import Op
from mcx.tape.program import Leaf, LeafKind, Tape
from mcx.tape.rules import evaluate

Values: TypeAlias = tuple[int, ...]


class Unreadable(Exception):
    """A formula asks for what is not known there. Never leaves the tape's builder: it becomes a fault."""

    def __init__(self, place: Place, text: str):
        self.fault = Fault(place, text)
        super().__init__(text)


class Lacking(Unreadable):
    """A formula asks for the number of a level term whose fixings are not all known; `levels` are those that are not,
    by asset and day. No fault of its own: what a tape reads and no fixing gives is found at its end."""

    def __init__(self, place: Place, text: str, levels: Iterable[tuple[int, Day]]):
        super().__init__(place, text)
        self.levels = tuple(levels)


@dataclass(frozen=True, slots=True)
class Scene:
    """What names mean while one formula is read: the spots, the date, the running values, and what each `previous`
    of this running value or event remembers (by identity of its node; None on the first date).

    At the moment of a hit there is no date: `moment` gives the years from the start as a value of the tape, `part` is
    which part of the stretch has passed, and `known` are the levels of single assets."""

    spot: Callable[[Name], Values]
    running: Callable[[Name], Values]
    occasion: Occasion | None = None
    remembered: dict[int, Values] | None = None
    moment: Callable[[], int] | None = None
    part: int | None = None
    known: dict[int, int] = field(default_factory=dict)


ARITHMETIC = {"+": Op.ADD, "-": Op.SUB, "*": Op.MUL, "/": Op.DIV, "**": Op.POW}
COMPARISONS = {"<": Op.LT, "<=": Op.LE, "==": Op.EQ, "!=": Op.NE}
MIRRORED = {">": Op.LT, ">=": Op.LE}  # a > b is b < a
ONE_BY_ONE = {"abs": Op.ABS, "exp": Op.EXP, "log": Op.LOG, "sqrt": Op.SQRT}
FOLDED = {"min": Op.MIN, "max": Op.MAX}
OVER_ASSETS = {"worst": Op.MIN, "best": Op.MAX, "any": Op.OR, "all": Op.AND}
DATE_NAMES = ("nth", "n_dates", "years", "period")


class Formulas:
    """Reads the formulas of one contract into one tape; `observed` gives the values of a level term that is observed
    rather than stated."""

    def __init__(self, contract: Contract, builder: Builder, observed: Callable[[str, Place, Occasion | None], Values]):
        self.contract, self.observed = contract, observed
        self.builder = builder
        self.lets = {let.name: let.formula for let in contract.payoff.lets}
        self.running = frozenset(running.name for running in contract.payoff.running)
        self._per = {term.name: term.per for term in contract.payoff.terms}
        self._fixed: dict[int, float | None] = {}

    def read(self, formula: Formula, scene: Scene) -> Values:
        """The values of a formula; raises Unreadable."""
        match formula:
            case Number(value=number):
                return (self.builder.constant(number),)
            case Name():
                return self._name(formula, scene)
            case Binary(symbol="and" | "or"):
                return self._logic(formula, scene)
            case Binary(symbol=symbol):
                left, right = self.read(formula.left, scene), self.read(formula.right, scene)
                if symbol in MIRRORED:
                    return self.spread(MIRRORED[symbol], right, left, place=formula.place)
                return self.spread(ARITHMETIC.get(symbol) or COMPARISONS[symbol], left, right, place=formula.place)
            case Unary(symbol=symbol):
                operand = self.read(formula.operand, scene)
                return self.spread(Op.NEG if symbol == "-" else Op.NOT, operand, place=formula.place)
            case IfElse():
                return self._if_else(formula, scene)
            case Call():
                arguments = [self.read(argument, scene) for argument in formula.arguments]
                return self._call(formula, arguments)
            case OfAsset(operand=Name(name="spot")) if self.asset_number(formula) in scene.known:
                return (scene.known[self.asset_number(formula)],)
            case OfAsset():
                operand = self.read(formula.operand, scene)
                return operand if len(operand) == 1 else (operand[self.asset_number(formula)],)
            case ChoiceIs(term=term, word=word, negated=negated):
                return (self.builder.constant((self._word(term, formula.place) == word) is not negated),)
            case Given(term=term):
                return (self.builder.constant(term in self.contract.terms),)
            case Previous():
                if scene.remembered is None:
                    return self.read(formula.first, scene)
                if id(formula) not in scene.remembered:
                    raise Unreadable(formula.place, "the earlier value was not readable on the date before")
                return scene.remembered[id(formula)]
        raise TypeError(f"no formula: {formula!r}")

    def one(self, formula: Formula, scene: Scene) -> int:
        """The value of a formula that must be one number or flag, not one for each asset."""
        values = self.read(formula, scene)
        if len(values) != 1:
            raise Unreadable(formula.place, "expected one value, not one for each asset")
        return values[0]

    def spread(self, op: Op, *operands: Values, place: Place | None = None) -> Values:
        """An operation on each asset's values; single values serve every asset."""
        if all(len(values) == 1 for values in operands):
            return (self.builder.emit(op, *(values[0] for values in operands), place=place),)
        size = max(len(values) for values in operands)
        columns = [values if len(values) == size else values * size for values in operands]
        return tuple(self.builder.emit(op, *row, place=place) for row in zip(*columns, strict=True))

    def previous_in(self, *formulas: Formula | None) -> Iterator[Previous]:
        """Every `previous` in the formulas, those inside `let` names included."""
        for formula in formulas:
            for part in walk(formula) if formula else ():
                if isinstance(part, Previous):
                    yield part
                elif isinstance(part, Name) and part.name in self.lets:
                    yield from self.previous_in(self.lets[part.name])

    def asset_number(self, formula: OfAsset) -> int:
        """The position of the asset that `of` names, itself or through an `asset` term."""
        name = formula.asset
        if name not in self.contract.assets:
            name = self._word(name, formula.place)
        return self.contract.assets.index(name)

    def fixed(self, value: int) -> float | None:
        """The number that a value is in this contract whatever the market, or None."""
        if value not in self._fixed:
            step = self.builder.instructions[value]
            if step.op is Op.CONSTANT:
                self._fixed[value] = step.payload
            elif step.op is Op.LEAF and step.payload.kind is LeafKind.TERM:
                self._fixed[value] = figure(self.contract, step.payload)
            else:
                operands = [self.fixed(operand) for operand in step.operands]
                known = operands and None not in operands and step.payload is None
                self._fixed[value] = float(evaluate(step.op, *operands)) if known else None
        return self._fixed[value]

    def term(self, name: str, place: Place, occasion: Occasion | None = None) -> Values:
        """The values of a term: leaves for numbers, a constant for a flag."""
        stated = self.contract.terms.get(name)
        if stated is None:
            raise Unreadable(place, f"'{name}' is not given in this contract")
        if isinstance(stated, Word):
            return (self.builder.constant(stated.text == "true"),)
        if isinstance(stated, LevelFixing):
            return self.observed(name, place, occasion)
        if not isinstance(stated, Figures):
            raise Unreadable(place, f"'{name}' is a date, not a number")
        index = -1
        if stated.per_date:
            dates = occasion.dates if occasion else {}
            if self._per[name] not in dates:
                raise Unreadable(place, f"'{name}' has one value for each date of '{self._per[name]}' "
                                        f"and is read on another day")
            index = dates[self._per[name]]
        assets = range(len(self.contract.assets)) if stated.per_asset else (-1,)
        return tuple(self.builder.leaf(Leaf(LeafKind.TERM, asset=asset, name=name, index=index), stated.place)
                     for asset in assets)

    def _name(self, formula: Name, scene: Scene) -> Values:
        name = formula.name
        if name == "spot":
            return scene.spot(formula)
        if name in self.running:
            return scene.running(formula)
        if name in self.lets:
            return self.read(self.lets[name], scene)
        if name == "years" and scene.moment is not None:
            return (scene.moment(),)
        if name not in DATE_NAMES or name in self._per:
            return self.term(name, formula.place, scene.occasion)
        known = getattr(scene.occasion, name) if scene.occasion else math.nan
        if math.isnan(known):
            raise Unreadable(formula.place, f"'{name}' is not known here")
        return (self.builder.constant(known),)

    def _word(self, term: str, place: Place) -> str:
        stated = self.contract.terms.get(term)
        if not isinstance(stated, Word):
            raise Unreadable(place, f"'{term}' is not given in this contract")
        return stated.text

    def _known(self, values: Values) -> bool | None:
        """True or False when a condition is that on every path and for every asset."""
        numbers = {self.builder.number(value) for value in values}
        return bool(numbers.pop()) if len(numbers) == 1 and None not in numbers else None

    def _logic(self, formula: Binary, scene: Scene) -> Values:
        left = self.read(formula.left, scene)
        deciding = formula.symbol == "or"
        if self._known(left) is deciding:  # as in `given(cap) and spot > cap`, where the cap cannot be read
            return left
        op = Op.OR if deciding else Op.AND
        return self.spread(op, left, self.read(formula.right, scene), place=formula.place)

    def _if_else(self, formula: IfElse, scene: Scene) -> Values:
        condition = self.read(formula.condition, scene)
        known = self._known(condition)
        if known is not None:
            return self.read(formula.yes if known else formula.no, scene)
        yes, no = self.read(formula.yes, scene), self.read(formula.no, scene)
        return self.spread(Op.SELECT, condition, yes, no, place=formula.place)

    def _call(self, formula: Call, arguments: list[Values]) -> Values:
        emit, place, name = self.builder.emit, formula.place, formula.function
        if name in ONE_BY_ONE:
            return self.spread(ONE_BY_ONE[name], *arguments, place=place)
        if name in FOLDED:
            first, *rest = arguments
            for values in rest:
                first = self.spread(FOLDED[name], first, values, place=place)
            return first
        if name == "clip":
            x, low, high = arguments
            return self.spread(Op.MIN, self.spread(Op.MAX, x, low, place=place), high, place=place)
        everyone = [values if len(values) > 1 else values * len(self.contract.assets) for values in arguments]
        if name in OVER_ASSETS:
            return (self.builder.fold(OVER_ASSETS[name], everyone[0], place),)
        if name == "mean":
            total = self.builder.fold(Op.ADD, everyone[0], place)
            return (emit(Op.DIV, total, self.builder.constant(len(everyone[0])), place=place),)
        if name == "basket":
            weighted = self.spread(Op.MUL, *everyone, place=place)
            return (self.builder.fold(Op.ADD, weighted, place),)
        if name == "ranked":
            return (self._ranked(formula, list(everyone[0]), arguments[1]),)
        raise TypeError(f"no function: {name}")

    def _ranked(self, formula: Call, values: list[int], rank: Values) -> int:
        """The rank-th lowest by rounds of compare and exchange, counted from the nearer end."""
        known = self.fixed(rank[0])
        if known is None or known != int(known) or not 1 <= known <= len(values):
            place = formula.arguments[1].place
            raise Unreadable(place, f"the rank must be a whole number from 1 (the worst) to {len(values)}")
        from_below = int(known) - 1
        from_above = len(values) - int(known)
        first, second = (Op.MIN, Op.MAX) if from_below <= from_above else (Op.MAX, Op.MIN)
        for _ in range(min(from_below, from_above) + 1):
            chosen, *others = values
            values = []
            for other in others:
                values.append(self.builder.emit(second, chosen, other, place=formula.place))
                chosen = self.builder.emit(first, chosen, other, place=formula.place)
        return chosen


def fixed_values(tape: Tape, contract: Contract) -> list[float | None]:
    """For each value of a tape the number that it is in this contract whatever the market, or None."""
    known: list[float | None] = []
    for step in tape.instructions:
        if step.op is Op.CONSTANT:
            known.append(step.payload)
        elif step.op is Op.LEAF and step.payload.kind is LeafKind.TERM:
            known.append(figure(contract, step.payload))
        else:
            operands = [known[k] for k in step.operands]
            computed = operands and None not in operands and step.payload is None
            known.append(float(evaluate(step.op, *operands)) if computed else None)
    return known


def figure(contract: Contract, leaf: Leaf) -> float:
    """The number behind a TERM or a LENGTH, which no market changes."""
    if leaf.kind is LeafKind.LENGTH:
        return leaf.end - leaf.start
    rows = contract.terms[leaf.name].rows
    return rows[max(leaf.index, 0)][max(leaf.asset, 0)]
