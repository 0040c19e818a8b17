"""Which conditions make a value jump: decided by the tape, for each payment by itself.

A derivative taken path by path is the derivative of the price only where the value has no jumps (P. Glasserman, "Monte
Carlo Methods in Financial Engineering", 2003, section 7.2). Sums, products and extremes do not jump; a
comparison does, and so does a division by what may be zero; a root or log of what may be zero has no bounded slope
there, so that a derivative path by path has no finite variance or no mean, and counts alike. A comparison is harmless
for a value that is the same on both sides where the compared numbers are equal: a call's `spot - strike if spot >
strike else 0`. That is shown by algebra, on the polynomials of `polynomials.py`; what is not shown counts as a jump.

For each comparison the change of every value when it turns is followed through the tape: a polynomial, or UNKNOWN. The
leaves have their numbers from the market, moved a little so that nothing is equal by accident; the contract's terms
stay, and so do conditions that are decided today.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from heapq import heappop, heappush

import numpy as np

from mcx.faults import Place
from mcx.tape.ops import OPS, Op
from mcx.tape.polynomials import HIGHEST_DEGREE, Polynomial, Polynomials, scaled, total
from mcx.tape.program import LeafKind, Tape
from mcx.tape.registers import uniform_values

COMPARISONS = frozenset({Op.LT, Op.LE, Op.EQ, Op.NE})
KEEPS_POSITIVE = frozenset({Op.ADD, Op.MUL, Op.DIV, Op.MIN, Op.POW, Op.SQRT})
UNKNOWN = None  # a change that is not followed any further
SETTINGS, MOVE, SEED = 2, 1e-3, 20240229
CONDITION, DIVISION, ROOT = "condition", "division", "root"


@dataclass(frozen=True, slots=True, order=True)
class Jump:
    """Why a value jumps: 'condition', 'division' (by what may be zero; also a power of it) or 'root' (also a log, of
    what may be zero: no jump, but no bounded slope either), and its place, if known.

    `value` is the first value of the tape that does so: the same line makes one on each date.
    """

    value: int
    kind: str = field(compare=False)
    place: Place | None = field(compare=False)


def payments(tape: Tape, value: int) -> tuple[int, ...]:
    """The parts that a value is the sum of, as the tape adds them up: of a price, its payments."""
    parts: list[int] = []
    waiting = [value]
    while waiting:
        number = waiting.pop()
        step = tape.instructions[number]
        if step.op is Op.ADD:
            waiting += reversed(step.operands)
        else:
            parts.append(number)
    return tuple(parts)


def jumps(tape: Tape, leaf_values: Sequence[float] | np.ndarray, values: Iterable[int]) -> tuple[tuple[Jump, ...], ...]:
    """For each of the values what makes it jump, one for each line; nothing for one that has a derivative path by path.

    tape is expanded (`steps.py`); leaf_values (leaves,) in the order of `tape.leaves`.
    """
    values = tuple(values)
    found: list[set[Jump]] = [set() for _ in values]
    draws = np.random.default_rng(SEED)
    flags = uniform_values(tape, leaf_values)  # those decided today hold for the analysis too
    fixed = np.array([leaf.kind is LeafKind.TERM for leaf in tape.leaves], dtype=bool)
    for _ in range(SETTINGS):
        up, by = draws.uniform(-MOVE, MOVE, (2, len(fixed)))
        moved = np.where(fixed, leaf_values, np.asarray(leaf_values) * (1.0 + up) + MOVE * by)
        for jump, hit in _Walk(tape, moved, values, flags).jumps():
            for number in range(len(values)):
                if hit >> number & 1:
                    found[number].add(jump)
    return tuple(_one_for_each_line(each) for each in found)


def _one_for_each_line(found: Iterable[Jump]) -> tuple[Jump, ...]:
    first: dict[tuple[str, Place | None], Jump] = {}
    for jump in sorted(found):
        first.setdefault((jump.kind, jump.place), jump)
    return tuple(first.values())


class _Walk:
    """The tape with one set of leaf values. Sets of the asked values are written as bits of an integer."""

    def __init__(self, tape: Tape, leaf_values: np.ndarray, values: Sequence[int], flags: Sequence[float | None]):
        self.steps = tape.instructions
        self.known = uniform_values(tape, leaf_values, flags)
        self.forms = Polynomials(self.steps, self.known)
        self.asked: dict[int, int] = {}
        for number, value in enumerate(values):
            self.asked[value] = self.asked.get(value, 0) | 1 << number
        self.users = self._users()
        self.differences: dict[tuple[int, int], Polynomial] = {}  # (user, what it reads): by what an unknown change
        # of that is multiplied, where the user is a choice or a product
        self.reached, self.choices = [0] * len(self.steps), [0] * len(self.steps)
        self.at_atom: dict[int, int] = {}  # which choices, as bits, have an atom in their difference
        self._look_ahead()

    def jumps(self) -> Iterable[tuple[Jump, int]]:
        """What jumps, with the asked values (bits) that it makes jump."""
        stepwise, positive = self._stepwise(), self._positive()
        square = self._square(positive)
        for number, step in enumerate(self.steps):
            if self.known[number] is not None or not self.reached[number]:
                continue
            if step.op in COMPARISONS:
                x, y = step.operands
                if not (stepwise[x] and stepwise[y]):
                    boundary = total(self.forms[x], self.forms[y], -1.0)
                    if hit := self._follow(number, {(): 1.0}, boundary):
                        yield Jump(number, CONDITION, step.place), hit
            elif kind := self._without_bound(step.op, step.operands, positive, square):
                yield Jump(number, kind, step.place), self.reached[number]

    def _users(self) -> list[list[int]]:
        """Who reads each value, of those that the asked values depend on and that differ from path to path."""
        needed = bytearray(len(self.steps))
        users: list[list[int]] = [[] for _ in self.steps]
        for value in self.asked:
            needed[value] = 1
        for number in range(len(self.steps) - 1, -1, -1):
            if needed[number] and self.known[number] is None:
                for operand in set(self.steps[number].operands):
                    needed[operand] = 1
                    users[operand].append(number)
        return users

    def _look_ahead(self) -> None:
        """For each value: the asked values that an unknown change of it reaches, and the choices on the way that could
        stop it at some boundary, since their branches are equal there."""
        for number in range(len(self.steps) - 1, -1, -1):
            reached, choices = self.asked.get(number, 0), 0
            for user in self.users[number]:
                difference = self._difference(user, number)
                if difference is UNKNOWN:
                    reached |= self.reached[user]
                    choices |= self.choices[user]
                elif difference:
                    bit = 1 << len(self.differences)
                    self.differences[user, number] = difference
                    for atom in {atom for monomial in difference for atom in monomial}:
                        self.at_atom[self._value(atom)] = self.at_atom.get(self._value(atom), 0) | bit
                        for deeper in self._inside(atom):
                            self.at_atom[deeper] = self.at_atom.get(deeper, 0) | bit
                    reached |= self.reached[user]
                    choices |= self.choices[user] | bit
            self.reached[number], self.choices[number] = reached, choices

    def _difference(self, user: int, number: int) -> Polynomial | None:
        """What an unknown change of a value is multiplied with in the user; UNKNOWN where that is not known."""
        step = self.steps[user]
        if step.op is Op.SELECT and step.operands.count(number) == 1 and step.operands[0] == number:
            return total(self.forms[step.operands[1]], self.forms[step.operands[2]], -1.0)
        if step.op is Op.MUL and step.operands.count(number) == 1:
            return self.forms[step.operands[1 - step.operands.index(number)]]
        return UNKNOWN

    @staticmethod
    def _value(atom: int) -> int:
        return atom if atom >= 0 else -1 - atom

    def _inside(self, atom: int) -> set[int]:
        """The atoms that an extreme may turn into at a boundary."""
        step = self.steps[self._value(atom)]
        if step.op not in (Op.MIN, Op.MAX, Op.ABS):
            return set()
        return {self._value(a) for k in step.operands for monomial in self.forms[k] for a in monomial}

    def _follow(self, source: int, change: Polynomial, boundary: Polynomial) -> int:
        """The asked values that change when a comparison turns."""
        at_boundary = 0
        for atom in {atom for monomial in boundary for atom in monomial}:
            at_boundary |= self.at_atom.get(self._value(atom), 0)
        changes: dict[int, Polynomial | None] = {source: change}
        hit = self.asked.get(source, 0)
        waiting = list(self.users[source])
        waiting.sort()
        seen = set(waiting)
        while waiting:
            number = heappop(waiting)
            found = self._changed(number, changes, boundary)
            if found is not UNKNOWN:
                found = self.forms.on_boundary(found, boundary)
                if not found:
                    continue
                if any(len(monomial) >= HIGHEST_DEGREE for monomial in found):
                    found = UNKNOWN
            changes[number] = found
            if found is UNKNOWN and not self.choices[number] & at_boundary:
                hit |= self.reached[number]
                continue
            hit |= self.asked.get(number, 0)
            for user in self.users[number]:
                if user not in seen:
                    seen.add(user)
                    heappush(waiting, user)
        return hit

    def _changed(
        self, number: int, changes: dict[int, Polynomial | None], boundary: Polynomial
    ) -> Polynomial | None:
        """The change of a value, from those of its operands."""
        step, nothing = self.steps[number], {}
        parts = [changes.get(k, nothing) for k in step.operands]
        moving = [k for k, part in enumerate(parts) if part is UNKNOWN or part]
        if not moving:
            return nothing
        if len(moving) == 1:
            operand = step.operands[moving[0]]
            difference = self._difference(number, operand)
            if difference is not UNKNOWN:
                difference = self.forms.on_boundary(difference, boundary)
                if not difference:
                    return nothing
                return UNKNOWN if parts[moving[0]] is UNKNOWN else self.forms.product(parts[moving[0]], difference)
        if UNKNOWN in parts:
            return UNKNOWN
        match step.op:
            case Op.ADD:
                return total(*parts)
            case Op.SUB:
                return total(*parts, sign=-1.0)
            case Op.NEG | Op.NOT:
                return scaled(parts[0], -1.0)
            case Op.DIV if moving == [0]:
                divisor = self.known[step.operands[1]]
                return scaled(parts[0], 1.0 / divisor) if divisor else UNKNOWN
            case Op.AND if len(moving) == 1:
                return self.forms.product(parts[moving[0]], self.forms[step.operands[1 - moving[0]]])
            case Op.OR if len(moving) == 1:
                other = total({(): 1.0}, self.forms[step.operands[1 - moving[0]]], -1.0)
                return self.forms.product(parts[moving[0]], other)
            case Op.SELECT if 0 not in moving:
                flag = self.forms[step.operands[0]]
                yes = self.forms.product(parts[1], flag)
                no = self.forms.product(parts[2], total({(): 1.0}, flag, -1.0))
                return UNKNOWN if yes is UNKNOWN or no is UNKNOWN else total(yes, no)
        return UNKNOWN

    def _stepwise(self) -> list[bool]:
        """Which values only move in steps: flags, and what is made of them alone."""
        found: list[bool] = []
        for number, step in enumerate(self.steps):
            made = bool(step.operands) and all(found[k] for k in step.operands)
            found.append(self.known[number] is not None or OPS[step.op].flag or made)
        return found

    def _positive(self) -> list[bool]:
        """Which values are above zero on every path."""
        found: list[bool] = []
        for number, step in enumerate(self.steps):
            signs = [found[k] for k in step.operands]
            known = self.known[number]
            match step.op:
                case _ if known is not None:
                    found.append(known > 0.0)
                case Op.EXP:
                    found.append(True)
                case Op.MAX:
                    found.append(any(signs))
                case Op.SELECT:
                    found.append(signs[1] and signs[2])
                case _:
                    found.append(step.op in KEEPS_POSITIVE and (signs[0] if step.op is Op.POW else all(signs)))
        return found

    def _square(self, positive: Sequence[bool]) -> list[bool]:
        """Which values have a root with a bounded slope: squares, what is above zero, and sums of such."""
        found: list[bool] = []
        for number, step in enumerate(self.steps):
            parts = [found[k] for k in step.operands]
            known = self.known[number]
            match step.op:
                case _ if known is not None:
                    found.append(known >= 0.0)
                case Op.MUL:
                    found.append(step.operands[0] == step.operands[1] or all(parts))
                case Op.POW:
                    power = self.known[step.operands[1]]
                    found.append(positive[number] or (power is not None and power >= 2.0))
                case Op.DIV:
                    found.append(parts[0] and positive[step.operands[1]])
                case Op.SELECT:
                    found.append(parts[1] and parts[2])
                case _:
                    found.append(positive[number] or step.op in (Op.ADD, Op.MIN, Op.MAX) and all(parts))
        return found

    def _without_bound(
        self, op: Op, operands: tuple[int, ...], positive: Sequence[bool], square: Sequence[bool]
    ) -> str:
        """Why an operation has no bounded slope: the kind of jump, or ''."""
        x, power = operands[0] if operands else 0, self.known[operands[1]] if op is Op.POW else None
        match op:
            case Op.DIV if self.known[operands[1]] is None and not positive[operands[1]]:
                return DIVISION
            case Op.POW if not positive[x] and not positive[operands[1]]:
                return DIVISION
            case Op.POW if not positive[x] and not (power and (power >= 1.0 or power >= 0.5 and square[x])):
                return ROOT
            case Op.SQRT if not square[x]:
                return ROOT
            case Op.LOG if not positive[x]:
                return ROOT
        return ""
