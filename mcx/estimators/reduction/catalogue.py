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
from mcx.tape.program import Tape

METHODS: tuple[Method, ...] = (CONTROLS, HEDGE, IMPORTANCE, ANTITHETIC, STRATIFIED, BRIDGE, COMPONENTS)
BY_NAME = {method.name: method for method in METHODS}


def conflict(names: Sequence[str]) -> str:
    """Why these methods cannot go together; '' where they can."""
    for name in names:
        for other, reason in BY_NAME[name].excludes:
            if other in names:
                return f"'{name}' and '{other}' cannot go together: {reason}"
    return ""


def scheme_of(case: Case, names: Sequence[str], known: dict[tuple[str, ...], Scheme] | None = None) -> Scheme:
    """The contract as these methods sample it. Raises RequestError for methods that cannot go together and Refusal for
    one that does not apply to this contract, with the reason.

    How draws are made has no part in the coefficients of controls, so that what differs in nothing else is fitted once:
    it is kept in `known` where that is given.
    """
    if why := conflict(names):
        raise RequestError(why)
    known = {} if known is None else known
    fitting = tuple(name for name in names if BY_NAME[name].stage is not Stage.DRAWS)
    if fitting not in known:
        known[fitting] = _fitted(case, fitting)
    scheme = known[fitting]
    draft = Draft(Tape((), (), scheme.program.normals, scheme.program.uniforms))
    for name in names:
        if name not in fitting:
            draft = _changed(BY_NAME[name], case, draft)
    return replace(scheme, names=tuple(names), plan=draft.plan)


def _fitted(case: Case, names: tuple[str, ...]) -> Scheme:
    """The tape as these methods make it, its controls fitted."""
    if not names:
        return Scheme((), case.ready.program)
    unrolled = case.ready.unrolled
    draft = Draft(unrolled.observed)
    for stage in (Stage.LEVELS, Stage.NORMALS):
        for name in names:
            if BY_NAME[name].stage is stage:
                draft = _changed(BY_NAME[name], case, draft)
        if stage is Stage.LEVELS:
            draft = replace(draft, tape=_expanded(case, draft) if draft.controls else unrolled.tape)
    try:
        return fitted(case, names, draft)
    except Inapplicable as reason:
        raise Refusal(f"'{case.title}': no '{','.join(names)}', since {reason}") from None


def _expanded(case: Case, draft: Draft) -> Tape:
    """The draft's tape as one that reads normals, its controls last: the distances between bounds come before them."""
    tape, own = case.ready.expanded(draft.tape), len(case.ready.unrolled.observed.outputs)
    controls = slice(own, own + len(draft.controls))
    outputs = (*tape.outputs[:own], *tape.outputs[controls.stop :], *tape.outputs[controls])
    assert len(outputs) == len(case.ready.unrolled.tape.outputs) + len(draft.controls), "a control lies between bounds"
    return replace(tape, outputs=outputs)


def _changed(method: Method, case: Case, draft: Draft) -> Draft:
    try:
        return method.change(case, draft)
    except Inapplicable as reason:
        raise Refusal(f"'{case.title}': no '{method.name}', since {reason}") from None
