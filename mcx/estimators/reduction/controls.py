"""Control variates: several at once, found from the tape, with exact means; `fit.py` chooses among them."""

from __future__ import annotations

from dataclasses import replace

from mcx.estimators.reduction.candidates import Market, candidates
from mcx.estimators.reduction.scheme import Case, Draft, Inapplicable, Method, Stage
from mcx.estimators.reduction.watched import watched_candidates
from mcx.tape.program import Output


def change(case: Case, draft: Draft) -> Draft:
    market = Market(case.ready)  # the first of its stage: the draft's tape is still the contract's
    if not market.days:
        raise Inapplicable("no level of a known law is read after today")
    found = {candidate.value: candidate for candidate in (*candidates(market), *watched_candidates(market))}
    outputs = (*draft.tape.outputs, *(Output.of("control", each.value, each.control.name) for each in found.values()))
    controls = (*draft.controls, *(each.control for each in found.values()))
    return replace(draft, tape=market.builder.tape(outputs), controls=controls)


CONTROLS = Method("controls", "options with known values beside the contract's own", Stage.LEVELS, change)
