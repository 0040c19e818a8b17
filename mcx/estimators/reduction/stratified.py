"""Stratified terminal value: the end of the first asset's path in 64 parts of equal probability, one path in each.

Paths are made in the order of a Brownian bridge, so that the first coordinate is the path's end. The 64 paths of a
group share out its range; groups are independent of one another, and the error is that of their means.
"""

from __future__ import annotations

from dataclasses import replace

from mcx.estimators.nets import clock
from mcx.estimators.reduction.scheme import Case, Draft, Inapplicable, Method, Stage
from mcx.machine.orders import bridge
from mcx.machine.sizes import GROUP


def change(case: Case, draft: Draft) -> Draft:
    variances = clock(case.ready.market, case.ready.unrolled.grid)
    if not variances.size:
        raise Inapplicable("no level of a known law is read after today")
    return replace(draft, plan=replace(draft.plan, order=bridge(variances), strata=GROUP))


STRATIFIED = Method("stratified", "the end of the first asset's path in 64 strata", Stage.DRAWS, change)
