"""`mcx price`."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import TYPE_CHECKING

from mcx.api.outputs import check_one, outputs_of, write_outputs
from mcx.api.request import made_ready, read_request
from mcx.api.sampling import File, Means, Notice, Progress, Sampling, check_sampling, means_of, sampling_of
from mcx.checked.load import Request

if TYPE_CHECKING:
    from mcx.estimators.ready import Ready
    from mcx.report.results import PriceResult, PriceTable


def price(
    *files: File,
    paths: int | None = None,
    within: str | float | None = None,
    seconds: float | None = None,
    seed: int | None = None,
    threads: int | None = None,
    reduction: str = "none",
    record: File | None = None,
    report: File | None = None,
    picture: File | None = None,
    progress: Progress | None = None,
    notice: Notice | None = None,
) -> PriceResult | PriceTable:
    """The value of every contract in the files on the market in them: one result, or a table of several.

    At most one of `paths`, `within` (a 95 % half-width: '2bp' or '0.02%' of the notional, '0.01' money per unit) and
    `seconds` decides the number of paths; without any it is 2^20. `seed` None is 1. `threads` None takes all; it
    changes no digit. `reduction` lists methods of variance reduction, parted by commas ('antithetic,controls'), or is
    'none', or 'auto' for the choice of a short pilot. `record` names a file to write a valuation record to, `report`
    one for a page of HTML, `picture` one (.png or .svg) for the pictures of that page, one below the other, of one
    contract. `notice` is called with a sentence when kernels must be compiled, or a run will take long. Raises
    InputError, RequestError, Refusal.
    """
    sampling = sampling_of(paths, within, seconds, seed, reduction)
    means = means_of(threads, progress, notice)
    wanted = outputs_of(record, report, picture)
    made, dated = read_request(files, with_market=True)
    check_sampling(sampling, made.contracts)
    check_one(wanted, len(dated), "contract")
    contracts = made_ready(made, dated)
    table = price_all(made, contracts, [sampling] * len(dated), means)
    wanted = replace(wanted, record=None) if table.interrupted else wanted
    write_outputs("price", files, made, contracts, table.prices, wanted)
    return table.prices[0] if len(made.contracts) == 1 else table


def price_all(
    made: Request,
    contracts: Sequence[Ready],
    samplings: Sequence[Sampling],
    means: Means,
    pieces: Sequence[int | None] | None = None,
) -> PriceTable:
    """Every contract valued; after an interruption those so far. Raises KeyboardInterrupt if that is none. `pieces`
    prescribe how fine the steps are where a price lies between bounds."""
    from mcx.estimators.finite import finite
    from mcx.estimators.price import value
    from mcx.report.results import PriceTable
    from mcx.report.summary import price_result

    results = []
    for ready, sampling, number in zip(contracts, samplings, pieces or [None] * len(contracts), strict=True):
        try:
            with finite(ready):
                valuation = value(ready, sampling.precision, seed=sampling.seed, reduction=sampling.reduction,
                                  pieces=number, threads=means.threads, progress=means.progress, notice=means.notice)
        except KeyboardInterrupt:
            if not results:
                raise
            break
        results.append(price_result(valuation.ready, made.market, valuation))
        if valuation.interrupted:
            break
    return PriceTable(tuple(results), tuple(each.dated.contract.title for each in contracts[len(results):]))
