"""Where a contract turns: which sums of products of levels are compared with a number, or with one another.

Each value of the contract's tape is followed as what it may be: a few alternatives (a minimum may be either side),
each a sum of products of powers of levels, or of their logs. Where two are compared, or the larger or smaller is
taken, their difference says what a control should turn at. Only candidates are found here: what is lost, because there
are too many alternatives or terms, costs variance and no correctness.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import TypeAlias

from mcx.tape.ops import OPS, Op
from mcx.tape.program import LevelKey, Tape

Day: TypeAlias = tuple[int, float]  # number of the asset, time
Product: TypeAlias = tuple[tuple[Day, float], ...]  # powers of levels, sorted; () is 1
MOST_ALTERNATIVES = 6
MOST_TERMS = 400
NOTHING = 1e-12


@dataclass(frozen=True, slots=True)
class Terms:
    """A sum of products of levels, each times a number."""

    of: Mapping[Product, float]

    @property
    def constant(self) -> float:
        return self.of.get((), 0.0)

    @property
    def varying(self) -> dict[Product, float]:
        return {product: factor for product, factor in self.of.items() if product}


@dataclass(frozen=True, slots=True)
class Logs:
    """A sum of logs of levels, each times a number, and a number."""

    of: Mapping[Day, float]
    constant: float = 0.0


Form: TypeAlias = Terms | Logs


@dataclass(frozen=True, slots=True)
class Turn:
    """Where `above` less `below`, both sums with factors above 0, less `strike` changes sign; `jumps`: at a
    comparison, else where the larger or smaller is taken. One of `below` and `strike` is nothing."""

    above: tuple[tuple[Product, float], ...]
    below: tuple[tuple[Product, float], ...]
    strike: float
    jumps: bool


def turns(tape: Tape, known: Sequence[float | None], level: Callable[[LevelKey], Terms | None]) -> tuple[Turn, ...]:
    """Every place where the tape turns, once; `known`: what is the same on every path, by value; `level`: what a level
    is made of, None where that is no sum of products."""
    found: dict[Turn, None] = {}
    forms: list[tuple[Form, ...]] = []
    for number, step in enumerate(tape.instructions):
        operands = [forms[k] for k in step.operands]
        if step.op in (Op.LT, Op.LE, Op.EQ, Op.MIN, Op.MAX):
            found.update(dict.fromkeys(_between(*operands, jumps=step.op not in (Op.MIN, Op.MAX))))
        if known[number] is not None:
            forms.append((Terms({(): known[number]}),))
        elif step.op is Op.LEVEL:
            forms.append(_distinct([level(step.payload)]))
        elif OPS[step.op].flag:
            forms.append((Terms({}), Terms({(): 1.0})))
        else:
            rule = _RULES.get(step.op)
            forms.append(_distinct(rule(*operands)) if rule and all(operands) else ())
    return tuple(found)


def _distinct(forms: Iterable[Form | None]) -> tuple[Form, ...]:
    kept: list[Form] = []
    for form in forms:
        if form is not None and len(form.of) <= MOST_TERMS and form not in kept:
            kept.append(form)
        if len(kept) == MOST_ALTERNATIVES:
            break
    return tuple(kept)


def _between(one: Iterable[Form], other: Iterable[Form], jumps: bool) -> Iterable[Turn]:
    for a in one:
        for b in other:
            if isinstance(a, Logs) or isinstance(b, Logs):
                difference = _log_difference(a, b)
            else:
                difference = _sum(a, b, -1.0)
            turn = _turn(difference, jumps) if difference else None
            if turn:
                yield turn


def _turn(difference: Terms, jumps: bool) -> Turn | None:
    above = {product: factor for product, factor in difference.varying.items() if factor > 0.0}
    below = {product: -factor for product, factor in difference.varying.items() if factor < 0.0}
    strike = -difference.constant
    if not above or (below and strike < 0.0):
        above, below, strike = below, above, -strike
    if not above or (below and strike != 0.0) or (not below and strike <= 0.0):
        return None
    scale = sum(above.values())  # the same place, however its formula was scaled
    parts = (tuple(sorted((product, factor / scale) for product, factor in side.items())) for side in (above, below))
    return Turn(*parts, strike / scale, jumps)


def _sum(a: Form, b: Form, sign: float = 1.0) -> Form | None:
    if type(a) is not type(b):
        for form, constant, front in ((a, b, 1.0), (b, a, sign)):
            if isinstance(form, Logs) and not constant.varying:
                back = sign if form is a else 1.0
                return Logs({day: front * factor for day, factor in form.of.items()},
                            front * form.constant + back * constant.constant)
        return None
    merged = dict(a.of)
    for key, factor in b.of.items():
        total = merged.get(key, 0.0) + sign * factor
        if abs(total) <= NOTHING * abs(factor):
            merged.pop(key, None)
        else:
            merged[key] = total
    if isinstance(a, Logs):
        return Logs(merged, a.constant + sign * b.constant)
    return Terms(merged)


def _scaled(form: Form, factor: float) -> Form:
    made = {key: factor * each for key, each in form.of.items()} if factor else {}
    return Logs(made, factor * form.constant) if isinstance(form, Logs) else Terms(made)


def _times(a: Form, b: Form) -> Form | None:
    for form, other in ((a, b), (b, a)):
        if isinstance(form, Terms) and not form.varying:
            return _scaled(other, form.constant)
    if isinstance(a, Logs) or isinstance(b, Logs) or len(a.of) * len(b.of) > MOST_TERMS:
        return None
    made: dict[Product, float] = {}
    for p, x in a.of.items():
        for q, y in b.of.items():
            product = _joined(p, q)
            made[product] = made.get(product, 0.0) + x * y
    return Terms(made)


def _joined(p: Product, q: Product) -> Product:
    powers = dict(p)
    for day, power in q:
        powers[day] = powers.get(day, 0.0) + power
    return tuple(sorted((day, power) for day, power in powers.items() if abs(power) > NOTHING))


def _powered(form: Form, exponent: float) -> Form | None:
    if isinstance(form, Logs) or len(form.of) != 1:
        return None
    ((product, factor),) = form.of.items()
    if factor <= 0.0:
        return None
    return Terms({tuple((day, power * exponent) for day, power in product): factor**exponent})


def _log(form: Form) -> Form | None:
    if isinstance(form, Logs) or len(form.of) != 1:
        return None
    ((product, factor),) = form.of.items()
    return Logs(dict(product), math.log(factor)) if factor > 0.0 else None


def _exp(form: Form) -> Form | None:
    if not isinstance(form, Logs):
        return None
    product = tuple(sorted((day, power) for day, power in form.of.items() if abs(power) > NOTHING))
    return Terms({product: math.exp(form.constant)})


def _log_difference(a: Form, b: Form) -> Terms | None:
    """The difference of the exponentials, which changes sign where that of two sums of logs does."""
    sides = [_exp(form if isinstance(form, Logs) else Logs({}, form.constant)) for form in (a, b)
             if isinstance(form, Logs) or not form.varying]
    return _sum(*sides, -1.0) if len(sides) == 2 else None


def _each(rule: Callable[..., Form | None]) -> Callable[..., list[Form | None]]:
    def over(*operands: Sequence[Form]) -> list[Form | None]:
        if len(operands) == 1:
            return [rule(a) for a in operands[0]]
        return [rule(a, b) for a in operands[0] for b in operands[1]]

    return over


def _power(base: Form, exponent: Form) -> Form | None:
    fixed = isinstance(exponent, Terms) and not exponent.varying
    return _powered(base, exponent.constant) if fixed else None


def _quotient(a: Form, b: Form) -> Form | None:
    inverse = _powered(b, -1.0)
    return _times(a, inverse) if inverse else _scaled(a, 1.0 / b.constant) if _is_negative(b) else None


def _is_negative(form: Form) -> bool:
    return isinstance(form, Terms) and not form.varying and form.constant < 0.0


_RULES: dict[Op, Callable[..., Iterable[Form | None]]] = {
    Op.ADD: _each(_sum),
    Op.SUB: _each(lambda a, b: _sum(a, b, -1.0)),
    Op.NEG: _each(lambda a: _scaled(a, -1.0)),
    Op.MUL: _each(_times),
    Op.DIV: _each(_quotient),
    Op.POW: _each(_power),
    Op.LOG: _each(_log),
    Op.EXP: _each(_exp),
    Op.MIN: lambda a, b: (*a, *b),
    Op.MAX: lambda a, b: (*a, *b),
    Op.SELECT: lambda c, a, b: (*a, *b),
}
