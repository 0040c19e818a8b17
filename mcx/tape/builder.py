"""Building a tape: equal instructions are made once, constants fold, and what is trivially simpler is made simpler."""

from __future__ import annotations

from collections.abc import Iterable

from mcx.faults import Place
from mcx.tape.algebra import SIMPLER
from mcx.tape.ops import Op
from mcx.tape.program import Instruction, Leaf, LevelKey, Output, Sum, Tape, Unhit
from mcx.tape.rules import evaluate

COMMUTATIVE = frozenset({Op.ADD, Op.MUL, Op.MIN, Op.MAX, Op.EQ, Op.NE, Op.AND, Op.OR})


class Builder:
    """A tape under construction. Values are known by their numbers; asking twice for one gives the same number.

    An instruction keeps the place that first asked for it.
    """

    def __init__(self) -> None:
        self.instructions: list[Instruction] = []
        self._numbers: dict[tuple, int] = {}
        self._constants: dict[int, float] = {}

    @staticmethod
    def of(tape: Tape) -> Builder:
        """A builder that goes on where a tape ends: its values keep their numbers."""
        builder = Builder()
        builder.instructions = list(tape.instructions)
        for number, step in enumerate(tape.instructions):
            key = (step.op, step.operands) if step.operands else (step.op, step.payload)
            builder._numbers.setdefault(key, number)
            if step.op is Op.CONSTANT:
                builder._constants[number] = step.payload
        return builder

    def number(self, value: int) -> float | None:
        """The number that a value is on every path whatever the leaves, or None."""
        return self._constants.get(value)

    def constant(self, number: float) -> int:
        value = self._once((Op.CONSTANT, float(number)), Op.CONSTANT, (), float(number), None)
        self._constants[value] = float(number)
        return value

    def leaf(self, leaf: Leaf, place: Place | None = None) -> int:
        return self.input(Op.LEAF, leaf, place)

    def input(self, op: Op, payload: Leaf | LevelKey | int, place: Place | None = None) -> int:
        """A value from outside: a leaf, a level, or one dimension of the draws."""
        return self._once((op, payload), op, (), payload, place)

    def emit(self, op: Op, *operands: int, place: Place | None = None) -> int:
        """The value of `op` on earlier values."""
        if op in COMMUTATIVE and operands[0] > operands[1]:
            operands = (operands[1], operands[0])
        key = (op, operands)
        found = self._numbers.get(key)
        if found is None:
            found = self._folded(op, operands)
            if found is None:
                return self._once(key, op, operands, None, place)
            self._numbers[key] = found
        return found

    def keyed(self, op: Op, operands: tuple[int, ...], payload: LevelKey | Unhit, place: Place | None = None) -> int:
        """The value of an operation that has both operands and a payload."""
        return self._once((op, operands, payload), op, operands, payload, place)

    def fold(self, op: Op, values: Iterable[int], place: Place | None = None) -> int:
        """One value out of several (at least one), two by two from the left: sums, products, extremes, and, or."""
        first, *rest = values
        for value in rest:
            first = self.emit(op, first, value, place=place)
        return first

    def copy(self, step: Instruction, operands: tuple[int, ...]) -> int:
        """An instruction of another tape, on operands of this one."""
        if step.op is Op.CONSTANT:
            return self.constant(step.payload)
        if not operands:
            return self.input(step.op, step.payload, step.place)
        if step.payload is not None:
            return self.keyed(step.op, operands, step.payload, step.place)
        return self.emit(step.op, *operands, place=step.place)

    def tape(self, outputs: Iterable[Output], normals: int = 0, uniforms: int = 0, sums: Iterable[Sum] = ()) -> Tape:
        return Tape(tuple(self.instructions), tuple(outputs), normals, uniforms, tuple(sums))

    def _folded(self, op: Op, operands: tuple[int, ...]) -> int | None:
        known = [self._constants.get(value) for value in operands]
        if None not in known:
            return self.constant(float(evaluate(op, *known)))
        simpler = SIMPLER.get(op)
        return simpler(self, *operands) if simpler else None

    def _once(self, key: tuple, op: Op, operands: tuple[int, ...], payload, place: Place | None) -> int:
        found = self._numbers.get(key)
        if found is None:
            found = self._numbers[key] = len(self.instructions)
            self.instructions.append(Instruction(op, operands, payload, place))
        return found
