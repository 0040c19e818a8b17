"""Which value of a term gives the contract a target price."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

from mcx.checked.contract import Contract, Figures
from mcx.checked.market import Market
from mcx.checked.payoff import Term
from mcx.dates.dated_contract import DatedContract
from mcx.estimators.batches import Sampling
from mcx.estimators.estimate import Estimate
from mcx.estimators.ready import Ready, prepare
from mcx.estimators.roots import Solutions, solutions
from mcx.faults import RequestError, did_you_mean

NUMERIC = ("number", "percent", "level")
REACH = 3.0  # a solution is looked for this many times the stated value away
INSIDE = 1e-9  # how far from a strict bound


@dataclass(frozen=True, slots=True)
class Solved:
    """The values of a term at which the contract meets `target` (in the unit of the price). A term with several numbers
    is moved by a sum, or where they are levels by a share, all alike; `stated` is its first number. The solutions'
    moves are values of that number."""

    term: Term
    target: float
    stated: float
    together: bool
    solutions: Solutions


def numeric_term(contract: Contract, name: str) -> Term:
    """The numeric term of that name; raises RequestError where there is none."""
    known = {term.name: term for term in contract.payoff.terms
             if term.type in NUMERIC and isinstance(contract.terms.get(term.name), Figures)}
    if name not in known:
        near = did_you_mean(name, known) or f"; it has {', '.join(known)}"
        raise RequestError(f"'{contract.title}' states no numeric term '{name}'{near}")
    return known[name]


def solve_term(ready: Ready, market: Market, name: str, target: float, sampling: Sampling) -> Solved:
    """All values of a term that give the target, within its bounds; each value is unrolled anew, with steps as fine."""
    dated, contract = ready.dated, ready.dated.contract
    term = numeric_term(contract, name)
    figures = contract.terms[name]
    stated = figures.rows[0][0]
    low, high = _range(term, figures)

    def at(move: float) -> DatedContract:
        return replace(dated, contract=replace(contract, terms={**contract.terms, name: _moved(term, figures, move)}))

    def distance(move: float, how: Sampling) -> Estimate:
        there, faults = prepare(at(move), market, ready.apart, ready.pieces)
        assert not faults, "a number does not change what can be simulated"
        price = how.sums(replace(there.program, outputs=there.program.outputs[:1]))[1]
        return replace(price, value=price.value - target)

    found = solutions(distance, low - stated, high - stated, sampling)
    values = tuple(replace(each, move=stated + each.move) for each in found.found)
    together = len({value for row in figures.rows for value in row}) > 1
    there = replace(found, found=values, low=stated + found.low, high=stated + found.high)
    return Solved(term, target, stated, together, there)


def _moved(term: Term, figures: Figures, move: float) -> Figures:
    """Every number of a term moved so that the first one moves by `move`."""
    first = figures.rows[0][0]
    by_share = term.type == "level"
    rows = (tuple(value * (1.0 + move / first) if by_share else value + move for value in row) for row in figures.rows)
    return replace(figures, rows=tuple(rows))


def _range(term: Term, figures: Figures) -> tuple[float, float]:
    """Between which values of the first number a solution is looked for: no other leaves its bounds either."""
    values = [value for row in figures.rows for value in row]
    stated, reach = values[0], REACH * max(map(abs, values)) or 1.0
    least, most = stated - reach, stated + reach
    if min(values) >= 0.0:
        least = max(least, stated - min(values))
    if term.type == "level":
        return max(least, 0.05 * stated), most
    lowest = max(_or(term.at_least, -math.inf), _or(term.above, -math.inf) + INSIDE)
    highest = min(_or(term.at_most, math.inf), _or(term.below, math.inf) - INSIDE)
    return max(least, stated + lowest - min(values)), min(most, stated + highest - max(values))


def _or(bound: float | None, otherwise: float) -> float:
    return otherwise if bound is None else bound
