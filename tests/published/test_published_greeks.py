"""Sensitivities against published values, and single paths of the estimators against their exact mean and deviation."""

from __future__ import annotations

from functools import cache
from math import sqrt

import closed_forms as forms
import numpy as np
import pytest

from greek_tools import bend, greeks, ready, slope
from helpers import Estimate, check, document
from mcx.estimators.batches import Batches
from mcx.estimators.estimate import Estimate as PriceEstimate
from mcx.estimators.methods import methods
from mcx.leaves.jacobian import inputs
from mcx.machine.run import draws
from mcx.tape.interpret import interpret
from published.cases import Case, cases_of
from published.contracts import documents

PATHS, SEED = 1 << 18, 0x5BE0CD19137E2179
GREEKS = {  # what is published: our name and the factor from our unit to the published one
    "delta": ("delta", lambda c: 1.0),
    "gamma": ("gamma", lambda c: 100.0 / c["spot"]),
    "vega": ("vega", lambda c: 100.0),
    "rho": ("rho", lambda c: 1e4),
    "theta": ("theta", lambda c: 365.0),
}
FORMS = {"delta": ("spot", slope), "gamma": ("spot", bend), "vega": ("vol", slope), "rho": ("rate", slope)}


def value_of(case: Case):
    """The closed form of a case, and its parameters."""
    at = {key: case.contract[key] for key in ("spot", "maturity", "rate", "dividend_yield", "vol")}
    return lambda **now: forms.european(case.contract["kind"], strike=case.contract["strike"], **now), at


@pytest.mark.parametrize("case", cases_of("greeks"), ids=str)
def test_published_greek(case: Case):
    """Within four standard errors of the value recomputed to twelve digits; a theta of one day against that day's."""
    name, factor = GREEKS[case.quantity]
    found = greeks(documents(case), PATHS, SEED)
    estimate = next(found[key] for key in found if key[0] == name)
    truth = case.recomputed
    if name == "theta":
        form, at = value_of(case)
        truth = 365.0 * (form(**at | {"maturity": at["maturity"] - 1 / 365}) - form(**at))
        assert truth == pytest.approx(case.recomputed, rel=0.05)
    scale = factor(case.contract)
    check(Estimate(scale * estimate.mean, scale * estimate.error), truth, 0.02)


@pytest.mark.parametrize("case", cases_of("greeks"), ids=str)
def test_printed_greek_is_the_recomputed_one(case: Case):
    """The figure as printed agrees with the recomputation, and so do the tests' own derivatives of the closed form."""
    assert abs(case.value - case.recomputed) <= case.slack
    if case.quantity in FORMS:
        by, derivative = FORMS[case.quantity]
        assert derivative(*value_of(case), by) == pytest.approx(case.recomputed, rel=1e-8)


@cache
def paths(spot: float, payoff: str, estimator: str) -> dict[str, np.ndarray]:
    """Delta, vega and gamma on single paths, without controls: the likelihood ratio's F times the score, and so on.

    The benchmark's gamma is the pathwise derivative of the likelihood ratio's delta, F' S z - F z over S^2 s sqrt(T).
    The package takes the likelihood ratio of the pathwise delta, (F' S z / s sqrt(T) - F' S) / S^2, and has the
    difference of the two as a control.
    """
    terms = {"side": "call", "strike": 100, "expiry": "0.2y"}
    if payoff == "digital":
        terms |= {"pays": "cash", "amount": 1}
    text = document(payoff, **terms) + (f"---\nmarket: 0y\nrates: {{EUR: 10%}}\nassets:\n"
                                        f"  harbour: {{spot: {spot}, currency: EUR, yield: 3%, vol: 25%}}\n")
    made, market = ready(text)
    method = next(each for each in methods(made, market, estimator).valid if each.name.startswith(estimator))
    bound = method.on(market)
    drawn = draws(bound.program, seed=SEED, numbers=np.arange(PATHS)).T
    values = interpret(method.made.tape, bound.values, drawn)
    products = [np.prod([np.broadcast_to(values[k], PATHS) for k in part.factors], axis=0)
                for part in method.made.tape.sums]

    class EachPath:
        def sums(self, _):
            return Batches(np.ones(PATHS), np.array(products).T), PriceEstimate(0.0, 0.0, PATHS)

    found = bound.derivatives(EachPath())
    at = {number.kind: column for column, number in enumerate(inputs(market, made.dated.contract))}
    return {"price": found.base.means[:, 0], "delta": found.first[:, at["spot"]], "vega": found.first[:, at["vol"]],
            "gamma": found.second[:, 0], "gamma as the slope of a score": found.second[:, 0] - found.controls[:, 0, 4]}


ESTIMATORS = {  # as the cases call them: the payoff, what is derived, by which estimator
    "price": ("european", "price", "pathwise"),
    "delta PW": ("european", "delta", "pathwise"),
    "delta LR": ("european", "delta", "likelihood"),
    "vega PW": ("european", "vega", "pathwise"),
    "vega LR": ("european", "vega", "likelihood"),
    "gamma LR": ("european", "gamma", "likelihood"),
    "gamma PW-LR": ("european", "gamma as the slope of a score", "pathwise"),
    "digital delta LR": ("digital", "delta", "likelihood"),
}


@pytest.mark.parametrize("case", cases_of("estimators"), ids=str)
def test_one_path_has_the_exact_law(case: Case):
    """Mean and standard deviation of one path are the exact ones, within four errors of their own."""
    payoff, what, estimator = ESTIMATORS[case.contract["estimator"]]
    found = paths(case.contract["spot"], payoff, estimator)[what]
    if case.formula == "estimator_mean":
        check(Estimate(found.mean(), found.std() / sqrt(PATHS)), case.recomputed, 0.05)
    else:
        squares = (found - found.mean()) ** 2
        error = squares.std() / sqrt(PATHS) / (2.0 * found.std())
        check(Estimate(found.std(), error), case.recomputed, 0.05)
