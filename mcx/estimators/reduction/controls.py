"""Control variates: several at once, found from the tape, with exact means; `fit.py` chooses among them."""

from __future__ import annotations

from dataclasses import replace

from mcx.estimators.reduction.candidates import Market, candidates
from mcx.estimators.reduction.scheme import Case, Draft, Inapplicable, Method, Stage
from mcx.estimators.reduction.watched import watched_candidates
from mcx.tape.ops import Op
from mcx.tape.program import Output


def change(case: Case, draft: Draft) -> Draft:
    market = Market(case.ready)  # the first of its stage: the draft's tape is still the contract's
    if not market.days:
        raise Inapplicable("no level of a known law is read after today")
    watched = watched_candidates(market) if _may_watch(case) else ()
    found = {candidate.value: candidate for candidate in (*candidates(market), *watched)}
    outputs = (*draft.tape.outputs, *(Output.of("control", each.value, each.control.name) for each in found.values()))
    controls = (*draft.controls, *(each.control for each in found.values()))
    return replace(draft, tape=market.builder.tape(outputs), controls=controls)


def _may_watch(case: Case) -> bool:
    """Whether controls may read extremes of their own. Not beside the moment of a hit, whose law wants its step whole,
    nor beside chances that are known between bounds, which are no chances any more where an extreme is drawn."""
    unrolled = case.ready.unrolled
    return not (unrolled.bracketed or any(step.op is Op.MOMENT for step in unrolled.observed.instructions))


CONTROLS = Method("controls", "options with known values beside the contract's own", Stage.LEVELS, change)
