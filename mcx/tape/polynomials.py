"""Values of the tape as polynomials, to show that two of them are equal where a condition turns.

A value is a polynomial in atoms: values that are not taken apart (a level, a minimum, a flag). Its coefficients are the
numbers that leaves give. A flag is 0 or 1, so a power of it is itself.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from typing import TypeAlias

from mcx.tape.ops import OPS, Op
from mcx.tape.program import Instruction

Monomial: TypeAlias = tuple[int, ...]  # sorted atoms; atom k is value k, atom -1 - k its reciprocal
Polynomial: TypeAlias = dict[Monomial, float]

MOST_TERMS = 64  # a longer polynomial is an atom itself
HIGHEST_DEGREE = 4
NOTHING = 1e-9  # of the terms that cancel


def collected(terms: Iterable[tuple[Monomial, float]]) -> Polynomial:
    """The sum of terms, without those that cancel."""
    totals: dict[Monomial, float] = {}
    sizes: dict[Monomial, float] = {}
    for monomial, coefficient in terms:
        totals[monomial] = totals.get(monomial, 0.0) + coefficient
        sizes[monomial] = sizes.get(monomial, 0.0) + abs(coefficient)
    return {monomial: total for monomial, total in totals.items() if abs(total) > NOTHING * sizes[monomial]}


def scaled(p: Polynomial, factor: float) -> Polynomial:
    return {monomial: factor * coefficient for monomial, coefficient in p.items()} if factor else {}


def total(p: Polynomial, q: Polynomial, sign: float = 1.0) -> Polynomial:
    return collected([*p.items(), *((monomial, sign * coefficient) for monomial, coefficient in q.items())])


class Polynomials:
    """The polynomial of each value of a tape, for one set of leaf values."""

    def __init__(self, instructions: Sequence[Instruction], known: Sequence[float | None]):
        """known: for each value the number that it is on every path, or None (`registers.uniform_values`)."""
        self.instructions = instructions
        self._of: list[Polynomial] = []
        for number, step in enumerate(instructions):
            uniform = known[number]
            made = {(): uniform} if uniform is not None else self._made(step)
            self._of.append(self.atom(number) if made is None or len(made) > MOST_TERMS else made)

    def __getitem__(self, value: int) -> Polynomial:
        return self._of[value]

    def atom(self, number: int) -> Polynomial:
        return {(number,): 1.0}

    def product(self, p: Polynomial, q: Polynomial) -> Polynomial | None:
        """None where it is too long or of too high a degree."""
        if len(p) * len(q) > MOST_TERMS * 2:
            return None
        terms = [(self._times(a, b), x * y) for a, x in p.items() for b, y in q.items()]
        return None if any(len(monomial) > HIGHEST_DEGREE for monomial, _ in terms) else collected(terms)

    def on_boundary(self, p: Polynomial, boundary: Polynomial) -> Polynomial:
        """The polynomial where `boundary` is 0: empty if it is shown to be 0 there."""
        p = self._reduced(p, boundary)
        for atom in {atom for monomial in p for atom in monomial if atom >= 0}:
            step = self.instructions[atom]
            if step.op in (Op.MIN, Op.MAX):
                one, other = (self[k] for k in step.operands)
                above = self._reduced(total(one, other, -1.0), boundary)
                if not set(above) - {()}:  # their difference is a number there
                    first = (above.get((), 0.0) > 0.0) is (step.op is Op.MAX)
                    p = self._reduced(self._replaced(p, atom, one if first else other), boundary)
            elif step.op is Op.ABS and not self._reduced(self[step.operands[0]], boundary):
                p = self._replaced(p, atom, {})
        return p

    def _made(self, step: Instruction) -> Polynomial | None:
        """The polynomial of an operation; None: an atom."""
        rule = RULES.get(step.op)
        return rule(self, *step.operands) if rule else None

    def _times(self, a: Monomial, b: Monomial) -> Monomial:
        merged = sorted((*a, *b))
        for atom in set(a) & set(b):
            if atom >= 0 and OPS[self.instructions[atom].op].flag:
                merged.remove(atom)
        for atom in set(a) | set(b):
            while atom in merged and -1 - atom in merged:
                merged.remove(atom)
                merged.remove(-1 - atom)
        return tuple(merged)

    def _reduced(self, p: Polynomial, boundary: Polynomial) -> Polynomial:
        if not p or not boundary:
            return p
        atoms = [atom for monomial in boundary for atom in monomial]
        alone = [m[0] for m in boundary if len(m) == 1 and m[0] >= 0 and atoms.count(m[0]) == 1
                 and -1 - m[0] not in atoms]
        if alone:
            latest = max(alone)
            rest = {m: -coefficient / boundary[latest,] for m, coefficient in boundary.items() if m != (latest,)}
            p = self._replaced(p, latest, rest)
            if len(rest) == 1:  # then its reciprocal is known too
                ((monomial, coefficient),) = rest.items()
                inverse = {tuple(sorted(-1 - other for other in monomial)): 1.0 / coefficient}
                p = self._replaced(p, -1 - latest, inverse)
            return p
        leading = max(boundary, key=lambda monomial: (len(monomial), monomial))
        return total(p, boundary, -p.get(leading, 0.0) / boundary[leading])

    def _replaced(self, p: Polynomial, atom: int, by: Polynomial) -> Polynomial:
        """The polynomial with another in the place of an atom; what grows too long stays as it is."""
        if not any(atom in monomial for monomial in p):
            return p
        terms: list[tuple[Monomial, float]] = []
        for monomial, coefficient in p.items():
            made: Polynomial | None = {tuple(other for other in monomial if other != atom): coefficient}
            for _ in range(monomial.count(atom)):
                made = made and self.product(made, by)
            terms += [(monomial, coefficient)] if made is None else made.items()
        return collected(terms)


def _quotient(of: Polynomials, a: int, b: int) -> Polynomial | None:
    if set(of[b]) == {()}:
        return scaled(of[a], 1.0 / of[b][()]) if of[b][()] else None
    return of.product(of[a], {(-1 - b,): 1.0})


RULES: dict[Op, Callable[..., Polynomial | None]] = {
    Op.ADD: lambda of, a, b: total(of[a], of[b]),
    Op.SUB: lambda of, a, b: total(of[a], of[b], -1.0),
    Op.NEG: lambda of, a: scaled(of[a], -1.0),
    Op.MUL: lambda of, a, b: of.product(of[a], of[b]),
    Op.DIV: _quotient,
    Op.NOT: lambda of, a: total({(): 1.0}, of[a], -1.0),
}
