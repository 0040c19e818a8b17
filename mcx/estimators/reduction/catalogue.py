"""The methods there are, and the scheme that a list of them makes of a contract."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

from mcx.estimators.reduction.antithetic import ANTITHETIC
from mcx.estimators.reduction.controls import CONTROLS
from mcx.estimators.reduction.fit import fitted
from mcx.estimators.reduction.hedge import HEDGE
from mcx.estimators.reduction.importance import IMPORTANCE
from mcx.estimators.reduction.points import BRIDGE, COMPONENTS
from mcx.estimators.reduction.scheme import Case, Draft, Inapplicable, Method, Scheme, Stage
from mcx.estimators.reduction.stratified import STRATIFIED
from mcx.faults import Refusal, RequestError

METHODS: tuple[Method, ...] = (CONTROLS, HEDGE, IMPORTANCE, ANTITHETIC, STRATIFIED, BRIDGE, COMPONENTS)
BY_NAME = {method.name: method for method in METHODS}


def conflict(names: Sequence[str]) -> str:
    """Why these methods cannot go together; '' where they can."""
    for name in names:
        for other, reason in BY_NAME[name].excludes:
            if other in names:
                return f"'{name}' and '{other}' cannot go together: {reason}"
    return ""


def scheme_of(case: Case, names: Sequence[str]) -> Scheme:
    """The contract as these methods sample it. Raises RequestError for methods that cannot go together and Refusal for
    one that does not apply to this contract, with the reason."""
    if not names:
        return Scheme((), case.ready.program)
    if why := conflict(names):
        raise RequestError(why)
    methods = [BY_NAME[name] for name in names]
    unrolled = case.ready.unrolled
    draft = Draft(unrolled.observed)
    for method in methods:
        if method.stage is Stage.LEVELS:
            draft = _changed(method, case, draft)
    tape = case.ready.expanded(draft.tape) if draft.controls else unrolled.tape
    draft = replace(draft, tape=tape)
    for method in sorted(methods, key=lambda method: method.stage):
        if method.stage is not Stage.LEVELS:
            draft = _changed(method, case, draft)
    try:
        return fitted(case, tuple(names), draft)
    except Inapplicable as reason:
        raise Refusal(f"'{case.title}': no '{','.join(names)}', since {reason}") from None


def _changed(method: Method, case: Case, draft: Draft) -> Draft:
    try:
        return method.change(case, draft)
    except Inapplicable as reason:
        raise Refusal(f"'{case.title}': no '{method.name}', since {reason}") from None
