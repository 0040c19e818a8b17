"""Continuous watching: a formula at its highest or lowest over a stretch of time, from the extremes of the levels.

A formula that rises with one asset's level is lowest at that asset's minimum and highest at its maximum, and a
condition is a formula of 0 and 1: `ever` is its highest value, `always` its lowest. The highest of several parts is
the highest of each part's highest, whichever assets and sides they look at; what needs several levels at one moment
in any other way has no such answer and is refused.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable
from dataclasses import dataclass, replace

from mcx.checked.formula import Binary, Call, Formula, IfElse, Name, OfAsset, Unary, walk
from mcx.faults import Fault, Place
from mcx.tape.formulas import Formulas, Lacking, Scene, Unreadable, Values
from mcx.tape.ops import Op
from mcx.tape.program import Barrier, Tape
from mcx.tape.rules import evaluate

BOTH_SIDES = ("watched from both sides at once: only joined by 'or' under 'ever', by 'and' under 'always' does each "
              "side have its own extreme")
SEVERAL_ASSETS = ("several assets watched at once: the highest of what they are together at one moment is no formula "
                  "of their own extremes; the worst or best of them, 'any' and 'all' may be")
JOINTLY_DRAWN = ("several assets watched at once, and their extremes decide more than what is paid (they are compared "
                 "with something that is not fixed, or a formula that is no sum of payments): their joint law is not "
                 "known; watch them on dates")
HIGHEST = {"highest": True, "ever": True, "lowest": False, "always": False}
RISING = {"exp": Op.EXP, "log": Op.LOG, "sqrt": Op.SQRT}
JOINS = {"best": (Op.MAX, True), "worst": (Op.MIN, False), "any": (Op.OR, True), "all": (Op.AND, False),
         "max": (Op.MAX, True), "min": (Op.MIN, False)}


@dataclass(frozen=True, slots=True)
class Shape:
    """How a formula depends on the levels: the range of its values, the assets, and +1 where it rises with them,
    -1 where it falls, 0 where it is fixed."""

    low: float
    high: float
    assets: frozenset[int] = frozenset()
    direction: int = 0


class Extremes:
    """Reads formulas at their highest or lowest. `extreme(asset, op)` gives the value of the LOW or HIGH so far."""

    def __init__(self, formulas: Formulas, extreme: Callable[[int, Op], int]):
        self.formulas, self.extreme = formulas, extreme
        self.shapes = _Shapes(formulas)

    def read(self, formula: Formula, highest: bool) -> Values:
        """The values of a formula at their highest, or lowest; raises Unreadable where extremes do not say it."""
        if not self.shapes.moves(formula):
            return self.formulas.read(formula, Scene(spot=_not_fixed, running=_not_fixed))
        try:
            shapes = self.shapes.of(formula)
        except Lacking:
            raise
        except Unreadable as trouble:
            return self._apart(formula, highest, trouble)
        if all(len(shape.assets) == 1 for shape in shapes):
            return self._simple(formula, shapes, highest)
        return self._apart(formula, highest, Unreadable(formula.place, SEVERAL_ASSETS))

    def _simple(self, formula: Formula, shapes: tuple[Shape, ...], highest: bool) -> Values:
        """A formula of one asset that rises or falls, or one such for each asset: read at the extremes."""
        found = [self.extreme(*shape.assets, Op.HIGH if (shape.direction > 0) is highest else Op.LOW)
                 for shape in shapes]
        spots = tuple(found) if len(found) > 1 else tuple(found) * len(self.formulas.contract.assets)
        return self.formulas.read(formula, Scene(spot=lambda _: spots, running=_not_fixed))

    def _apart(self, formula: Formula, highest: bool, trouble: Unreadable) -> Values:
        """A formula whose parts have extremes of their own."""
        spread, place = self.formulas.spread, formula.place
        match formula:
            case Name(name=name) if name in self.formulas.lets:
                return self.read(self.formulas.lets[name], highest)
            case Unary(symbol=symbol, operand=operand):
                return spread(Op.NEG if symbol == "-" else Op.NOT, self.read(operand, not highest), place=place)
            case Binary():
                return self._binary(formula, highest, trouble)
            case IfElse():
                known = self.shapes.decided(formula)
                return self.read(formula.yes if known else formula.no, highest)
            case Call():
                return self._call(formula, highest, trouble)
            case OfAsset(operand=operand):
                values = self.read(operand, highest)
                return values if len(values) == 1 else (values[self.formulas.asset_number(formula)],)
        raise trouble

    def _binary(self, formula: Binary, highest: bool, trouble: Unreadable) -> Values:
        left, right, place, symbol = formula.left, formula.right, formula.place, formula.symbol
        moving = [self.shapes.moves(part) for part in (left, right)]
        if symbol in ("and", "or"):
            if not moving[0] and self.shapes.settles(left, symbol):
                return self.read(left, highest)
            if all(moving) and (symbol == "or") is not highest:
                raise trouble
            parts = self.read(left, highest), self.read(right, highest)
            return self.formulas.spread(Op.OR if symbol == "or" else Op.AND, *parts, place=place)
        if all(moving):
            raise trouble
        if symbol in (">", ">="):
            left, right, moving, symbol = right, left, moving[::-1], symbol.replace(">", "<")
        match symbol:
            case "<" | "<=":
                op, falls = Op.LT if symbol == "<" else Op.LE, moving[0]
            case "+":
                op, falls = Op.ADD, False
            case "-":
                op, falls = Op.SUB, moving[1]
            case "*" | "/" if symbol == "*" or moving[0]:
                op, falls = Op.MUL if symbol == "*" else Op.DIV, self.shapes.sign(right if moving[0] else left) < 0
            case _:
                raise trouble
        parts = [self.read(part, highest is not (falls and moves)) for part, moves in zip((left, right), moving)]
        return self.formulas.spread(op, *parts, place=place)

    def _call(self, formula: Call, highest: bool, trouble: Unreadable) -> Values:
        name, place, spread = formula.function, formula.place, self.formulas.spread
        first, *others = formula.arguments
        moving = [argument for argument in formula.arguments if self.shapes.moves(argument)]
        if name in RISING:
            return spread(RISING[name], self.read(first, highest), place=place)
        if name == "abs" and highest:
            return spread(Op.MAX, self.read(first, True), spread(Op.NEG, self.read(first, False)), place=place)
        if name == "clip" and moving == [first]:
            low, high = (self.read(other, highest) for other in others)
            return spread(Op.MIN, spread(Op.MAX, self.read(first, highest), low, place=place), high, place=place)
        if name in JOINS:
            op, wanted = JOINS[name]
            over_assets = name not in ("min", "max")
            if wanted is not highest and (over_assets or len(moving) > 1):
                raise trouble
            parts = [self.read(argument, highest) for argument in formula.arguments]
            if over_assets:
                return (self.formulas.builder.fold(op, parts[0], place),)
            joined = parts[0]
            for part in parts[1:]:
                joined = spread(op, joined, part, place=place)
            return joined
        raise trouble


def conflicts(tape: Tape) -> list[Fault]:
    """Extremes of different assets that would have to be drawn for one time: their joint law is not known."""
    places: dict[Barrier, Place] = {}
    for step in tape.instructions:
        if step.op in (Op.LOW, Op.HIGH):
            places.setdefault(Barrier(step.op, step.payload), step.place)
    faults = []
    latest: dict[int, tuple[float, Place]] = {}  # until when each asset was watched
    for one in sorted(places, key=lambda barrier: barrier.order):
        asset, place = one.key.asset, places[one]
        faults += [Fault(max(place, earlier), JOINTLY_DRAWN) for other, (until, earlier) in latest.items()
                   if other != asset and one.key.start < until]
        if asset not in latest or one.key.time > latest[asset][0]:
            latest[asset] = (one.key.time, place)
    return sorted(set(faults))


class _Shapes:
    """The shapes of a formula, one or one for each asset, from the numbers of the contract."""

    def __init__(self, formulas: Formulas):
        self.formulas = formulas
        self.assets = len(formulas.contract.assets)

    def of(self, formula: Formula) -> tuple[Shape, ...]:
        if not self.moves(formula):
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
                return self.of(formula.yes if self.decided(formula) else formula.no)
            case Call():
                return self._call(formula)
            case OfAsset():
                shapes = self.of(formula.operand)
                return shapes if len(shapes) == 1 else (shapes[self.formulas.asset_number(formula)],)
        raise Unreadable(formula.place, "only a formula of today's level can be watched continuously")

    def moves(self, formula: Formula) -> bool:
        """Whether the formula reads a level."""
        names = [part.name for part in walk(formula) if isinstance(part, Name)]
        lets = self.formulas.lets
        return "spot" in names or any(self.moves(lets[name]) for name in names if name in lets)

    def decided(self, formula: IfElse) -> bool:
        """Which branch a conditional takes whatever the levels are."""
        condition = self.of(formula.condition)
        if any(shape.assets for shape in condition) or len(condition) > 1:
            raise Unreadable(formula.place, "a conditional that depends on the level cannot be watched continuously")
        return bool(condition[0].low)

    def settles(self, left: Formula, symbol: str) -> bool:
        """Whether the first part of an `and` or `or` decides it, as in `given(x) and ...`."""
        shapes = self.of(left)
        return len(shapes) == 1 and not shapes[0].assets and bool(shapes[0].low) is (symbol == "or")

    def sign(self, formula: Formula) -> int:
        """The sign of a part that is fixed; raises Unreadable where it differs between assets."""
        signs = {1 if shape.low >= 0.0 else -1 for shape in self.of(formula)}
        if len(signs) > 1:
            raise Unreadable(formula.place, "factors of different signs cannot be watched continuously")
        return signs.pop()

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
        if symbol in ("and", "or") and len(left) == 1 and not left[0].assets:
            return left if self.settles(formula.left, symbol) else self.of(formula.right)
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
