"""Continuous watching: which extreme of which asset decides a formula, and what is refused.

A formula that rises with one asset's level is lowest at that asset's minimum and highest at its maximum, and a
condition is a formula of 0 and 1: `ever` is its highest value, `always` its lowest. So one rule serves all four kinds
of running value: find the asset, find the direction, read the formula at the extreme.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable
from dataclasses import dataclass, replace

from mcx.checked.formula import Binary, Call, Formula, IfElse, Name, OfAsset, Unary, walk
from mcx.checked.payoff import Running
from mcx.faults import Fault, Place
from mcx.tape.formulas import Formulas, Scene, Unreadable
from mcx.tape.ops import Op
from mcx.tape.program import Tape
from mcx.tape.rules import evaluate

LATER = "which a later version brings"
BOTH_SIDES = f"watched from both sides at once: this needs the joint law of minimum and maximum, {LATER}"
SEVERAL_ASSETS = f"several assets watched at once: this needs their joint law, {LATER}"


@dataclass(frozen=True, slots=True)
class Side:
    """The asset that is watched, and LOW or HIGH."""

    asset: int
    level_op: Op


@dataclass(frozen=True, slots=True)
class Shape:
    """How a formula depends on the levels: the range of its values, the assets, and +1 where it rises with them,
    -1 where it falls, 0 where it is fixed."""

    low: float
    high: float
    assets: frozenset[int] = frozenset()
    direction: int = 0


def watched_side(running: Running, formulas: Formulas) -> Side:
    """Which extreme decides a continuously watched running value; raises Unreadable where it is not that simple."""
    shapes = _Shapes(formulas).of(running.formula)
    assets = frozenset().union(*(shape.assets for shape in shapes))
    if len(assets) > 1:
        raise Unreadable(running.place, SEVERAL_ASSETS)
    if not assets:
        raise Unreadable(running.place, "a continuous watch needs a formula of an asset's level")
    directions = {shape.direction for shape in shapes} - {0}
    if len(directions) > 1:
        raise Unreadable(running.place, BOTH_SIDES)
    rises = 1 in directions
    wants_highest = running.how in ("highest", "ever")
    return Side(next(iter(assets)), Op.HIGH if rises == wants_highest else Op.LOW)


def conflicts(tape: Tape) -> list[Fault]:
    """Watches of the tape whose joint law is not known: overlapping in time, of one asset from both sides or of
    several assets. Whether they are read by the same payment does not matter: the paths are shared."""
    stretches = sorted(
        (step.payload.start, step.payload.time, step.payload.asset, step.op, step.place)
        for step in tape.instructions
        if step.op in (Op.LOW, Op.HIGH)
    )
    faults = []
    latest: dict[tuple[int, Op], tuple[float, Place]] = {}  # until when each side of each asset was watched
    for start, end, asset, op, place in stretches:
        for (other, side), (until, earlier) in latest.items():
            if (other, side) != (asset, op) and start < until:
                text = BOTH_SIDES if other == asset else SEVERAL_ASSETS
                faults.append(Fault(max(place, earlier), text))
        if (asset, op) not in latest or end > latest[asset, op][0]:
            latest[asset, op] = (end, place)
    return sorted(set(faults))


class _Shapes:
    """The shapes of a formula, one or one for each asset, from the numbers of the contract."""

    def __init__(self, formulas: Formulas):
        self.formulas = formulas
        self.assets = len(formulas.contract.assets)

    def of(self, formula: Formula) -> tuple[Shape, ...]:
        if not self._moves(formula):
            return self._fixed(formula)
        match formula:
            case Name(name="spot"):
                return tuple(Shape(0.0, math.inf, frozenset({asset}), 1) for asset in range(self.assets))
            case Name(name=name) if name in self.formulas.lets:
                return self.of(self.formulas.lets[name])
            case Unary(symbol=symbol):
                return _spread(_negative if symbol == "-" else _not, self.of(formula.operand))
            case Binary(symbol=symbol):
                return self._binary(formula, symbol)
            case IfElse():
                condition = self.of(formula.condition)
                if any(shape.assets for shape in condition) or len(condition) > 1:
                    raise Unreadable(formula.place, "a conditional that depends on the level cannot be watched "
                                                    "continuously")
                return self.of(formula.yes if condition[0].low else formula.no)
            case Call():
                return self._call(formula)
            case OfAsset():
                shapes = self.of(formula.operand)
                return shapes if len(shapes) == 1 else (shapes[self.formulas.asset_number(formula)],)
        raise Unreadable(formula.place, "only a formula of today's level can be watched continuously")

    def _moves(self, formula: Formula) -> bool:
        """Whether the formula reads a level."""
        names = [part.name for part in walk(formula) if isinstance(part, Name)]
        lets = self.formulas.lets
        return "spot" in names or any(self._moves(lets[name]) for name in names if name in lets)

    def _fixed(self, formula: Formula) -> tuple[Shape, ...]:
        """The numbers of a part that does not read levels."""
        values = self.formulas.read(formula, Scene(spot=_not_fixed, running=_not_fixed))
        numbers = [self.formulas.fixed(value) for value in values]
        if None in numbers:
            raise Unreadable(formula.place, "a continuous watch compares an asset's level with fixed numbers; this one "
                                            "is still to be fixed")
        return tuple(Shape(number, number) for number in numbers)

    def _binary(self, formula: Binary, symbol: str) -> tuple[Shape, ...]:
        left = self.of(formula.left)
        if symbol in ("and", "or") and len(left) == 1 and not left[0].assets:  # decided: as `given(x) and ...`
            return left if bool(left[0].low) is (symbol == "or") else self.of(formula.right)
        right = self.of(formula.right)
        place = formula.place
        match symbol:
            case "+":
                return _spread(lambda a, b: _rising(place, Op.ADD, a, b), left, right)
            case "-":
                return _spread(lambda a, b: _rising(place, Op.ADD, a, _negative(b)), left, right)
            case "*":
                return _spread(lambda a, b: _product(place, a, b), left, right)
            case "/":
                return _spread(lambda a, b: _product(place, a, _reciprocal(place, b)), left, right)
            case "**":
                return _spread(lambda a, b: _power(place, a, b), left, right)
            case ">" | ">=":
                return _spread(lambda a, b: _condition(place, a, _negative(b)), left, right)
            case "<" | "<=":
                return _spread(lambda a, b: _condition(place, b, _negative(a)), left, right)
            case "and" | "or":
                return _spread(lambda a, b: _condition(place, a, b), left, right)
        raise Unreadable(place, f"'{symbol}' cannot be watched continuously; compare with <, <=, > or >=")

    def _call(self, formula: Call) -> tuple[Shape, ...]:
        place, name = formula.place, formula.function
        arguments = [self.of(argument) for argument in formula.arguments]
        everyone = [shapes if len(shapes) > 1 else shapes * self.assets for shapes in arguments]
        match name:
            case "exp" | "log" | "sqrt":
                op = {"exp": Op.EXP, "log": Op.LOG, "sqrt": Op.SQRT}[name]
                return _spread(lambda a: _rising(place, op, a), arguments[0])
            case "abs":
                return _spread(lambda a: _absolute(place, a), arguments[0])
            case "min" | "max":
                op = Op.MIN if name == "min" else Op.MAX
                return _spread(lambda *parts: _joined(place, op, parts), *arguments)
            case "clip":
                inner = _spread(lambda a, b: _rising(place, Op.MAX, a, b), arguments[0], arguments[1])
                return _spread(lambda a, b: _rising(place, Op.MIN, a, b), inner, arguments[2])
            case "worst" | "best":
                return (_joined(place, Op.MIN if name == "worst" else Op.MAX, everyone[0]),)
            case "ranked":
                low, high = min(part.low for part in everyone[0]), max(part.high for part in everyone[0])
                return (Shape(low, high, *_joint(place, *everyone[0])),)
            case "any" | "all":
                return (replace(_joined(place, Op.ADD, everyone[0]), low=0.0, high=1.0),)
            case "mean":
                return (_joined(place, Op.ADD, everyone[0]),)
            case "basket":
                return (_joined(place, Op.ADD, _spread(lambda a, b: _product(place, a, b), *everyone)),)
        raise Unreadable(place, f"'{name}' cannot be watched continuously")


def _not_fixed(name: Name) -> tuple[int, ...]:
    raise Unreadable(name.place, f"a continuous watch compares an asset's level with fixed numbers; "
                                 f"'{name.name}' is not fixed")


def _spread(rule: Callable[..., Shape], *columns: Iterable[Shape]) -> tuple[Shape, ...]:
    columns = [tuple(column) for column in columns]
    size = max(len(column) for column in columns)
    rows = zip(*(column if len(column) == size else column * size for column in columns), strict=True)
    return tuple(rule(*row) for row in rows)


def _joint(place: Place, *parts: Shape) -> tuple[frozenset[int], int]:
    """Assets and common direction of parts that a rising operation joins."""
    directions = {part.direction for part in parts} - {0}
    assets = frozenset().union(*(part.assets for part in parts))
    if len(directions) > 1:
        raise Unreadable(place, SEVERAL_ASSETS if len(assets) > 1 else BOTH_SIDES)
    return assets, directions.pop() if directions else 0


def _rising(place: Place, op: Op, *parts: Shape) -> Shape:
    """An operation that rises with each of its parts."""
    low, high = (float(evaluate(op, *ends)) for ends in
                 ([part.low for part in parts], [part.high for part in parts]))
    return Shape(low, high, *_joint(place, *parts))


def _joined(place: Place, op: Op, parts: Iterable[Shape]) -> Shape:
    first, *rest = parts
    for part in rest:
        first = _rising(place, op, first, part)
    return first


def _negative(part: Shape) -> Shape:
    return Shape(-part.high, -part.low, part.assets, -part.direction)


def _not(part: Shape) -> Shape:
    return Shape(1.0 - part.high, 1.0 - part.low, part.assets, -part.direction)


def _condition(place: Place, *parts: Shape) -> Shape:
    """A flag that turns from 0 to 1 as its parts rise."""
    return Shape(0.0, 1.0, *_joint(place, *parts))


def _product(place: Place, a: Shape, b: Shape) -> Shape:
    for fixed, other in ((a, b), (b, a)):
        if not fixed.assets:
            ends = sorted((_times(fixed.low, other.low), _times(fixed.low, other.high)))
            return Shape(*ends, other.assets, other.direction * int(math.copysign(1.0, fixed.low)))
    if a.high <= 0.0:
        return _negative(_product(place, _negative(a), b))
    if b.high <= 0.0:
        return _negative(_product(place, a, _negative(b)))
    if min(a.low, b.low) < 0.0:
        raise Unreadable(place, "a product whose sign is not known cannot be watched continuously")
    return Shape(_times(a.low, b.low), _times(a.high, b.high), *_joint(place, a, b))


def _times(a: float, b: float) -> float:
    return 0.0 if a == 0.0 or b == 0.0 else a * b


def _reciprocal(place: Place, part: Shape) -> Shape:
    if part.low < 0.0 < part.high or (part.low == part.high == 0.0):
        raise Unreadable(place, "a division by what may be zero cannot be watched continuously")
    low = 1.0 / part.high if part.high else -math.inf
    high = 1.0 / part.low if part.low else math.inf
    return Shape(low, high, part.assets, -part.direction)


def _power(place: Place, base: Shape, exponent: Shape) -> Shape:
    if exponent.assets or base.low < 0.0:
        raise Unreadable(place, "only a fixed power of a positive value can be watched continuously")
    value = exponent.low
    ends = [float(evaluate(Op.POW, end, value)) for end in (base.low, base.high)]
    direction = base.direction * (1 if value > 0 else -1 if value < 0 else 0)
    return Shape(min(ends), max(ends), base.assets, direction)


def _absolute(place: Place, part: Shape) -> Shape:
    if part.low < 0.0 < part.high:
        raise Unreadable(place, BOTH_SIDES)
    return _negative(part) if part.low < 0.0 else part
