"""Scrambled Sobol' points in place of random numbers, in the order of a bridge or of principal components."""

from __future__ import annotations

from dataclasses import replace

from mcx.estimators.nets import SCRAMBLES, Net, Order, may_end, net_draws
from mcx.estimators.reduction.scheme import Case, Draft, Inapplicable, Method, Stage
from mcx.machine.directions import most_coordinates

_ONE_SOURCE = "a path's draws come from one source"


def _on(order: Order):
    def change(case: Case, draft: Draft) -> Draft:
        draws = draft.tape.normals + draft.tape.uniforms
        if not draws:
            raise Inapplicable("nothing is drawn: every path is the same")
        if draws > most_coordinates():
            raise Inapplicable(f"a path draws {draws:,} numbers, and scrambled points have at most "
                               f"{most_coordinates():,} coordinates")
        ready = case.ready
        plan = net_draws(Net(1, SCRAMBLES), order, ready.market, ready.unrolled.grid, may_end(ready.unrolled.observed))
        return replace(draft, plan=plan)

    return change


BRIDGE = Method("sobol-bridge", "scrambled Sobol' points in the order of a Brownian bridge", Stage.DRAWS,
                _on(Order.BRIDGE), (("sobol-components", _ONE_SOURCE), ("stratified", _ONE_SOURCE)))
COMPONENTS = Method("sobol-components", "scrambled Sobol' points in the order of principal components", Stage.DRAWS,
                    _on(Order.COMPONENTS), (("sobol-bridge", _ONE_SOURCE), ("stratified", _ONE_SOURCE)))
