"""`mcx greeks`."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import replace
from typing import TYPE_CHECKING

from mcx.api.outputs import check_one, outputs_of, write_outputs
from mcx.api.request import made_ready, read_request
from mcx.api.sampling import (
    File,
    Means,
    Notice,
    Progress,
    Sampling,
    check_sampling,
    means_of,
    sampling_of,
)
from mcx.checked.contract import Contract
from mcx.checked.load import Request
from mcx.faults import RequestError, did_you_mean

if TYPE_CHECKING:
    from mcx.estimators.greeks import Wish
    from mcx.estimators.ready import Ready
    from mcx.report.greek_results import GreeksResult, GreeksTable


def greeks(
    *files: File,
    estimator: str = "auto",
    bump: str | float | None = None,
    assets: str | Sequence[str] = (),
    spot_moves: str | Sequence[str | float] = (),
    vol_moves: str | Sequence[str | float] = (),
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
) -> GreeksResult | GreeksTable:
    """How the value of every contract in the files moves with the market in them: one result, or a table of several.

    `estimator` is 'auto', 'pathwise', 'likelihood' or 'mixed'. `bump` (0.01 or '1%') adds a revaluation on the same
    random numbers for comparison: spots and forwards moved by that share, vols and correlations by that much, rates,
    yields and funding by a tenth of it. `assets` limits the sensitivities, and what moves, to some assets. `spot_moves`
    asks for a ladder of moves of all spots together, `vol_moves` for a grid of both. The other arguments
    are those of `price`; `within` is about the price, `reduction` what changes how paths are drawn. Raises InputError,
    RequestError, Refusal.
    """
    from mcx.estimators.batches import check_paths
    from mcx.estimators.drawn import check_draws
    from mcx.estimators.wishes import wish_of

    sampling = sampling_of(paths, within, seconds, seed, reduction)
    check_draws(sampling.reduction)
    check_paths(sampling.precision.paths)
    wish = wish_of(estimator, bump, assets, spot_moves, vol_moves)
    means = means_of(threads, progress, notice)
    wanted = outputs_of(record, report, picture)
    made, dated = read_request(files, with_market=True)
    check_sampling(sampling, made.contracts)
    _check_assets(wish, made.contracts)
    check_one(wanted, len(dated), "contract")
    contracts = made_ready(made, dated)
    table = greeks_of_all(made, contracts, [wish] * len(dated), [sampling] * len(dated), means)
    wanted = replace(wanted, record=None) if table.interrupted else wanted
    write_outputs("greeks", files, made, contracts, table.contracts, wanted)
    return table.contracts[0] if len(made.contracts) == 1 else table


def _check_assets(wish: Wish, contracts: Iterable[Contract]) -> None:
    for each in contracts:
        for name in wish.assets:
            if name not in each.assets:
                raise RequestError(f"'{each.title}' has no asset '{name}'{did_you_mean(name, each.assets)}")


def greeks_of_all(
    made: Request,
    contracts: Sequence[Ready],
    wishes: Sequence[Wish],
    samplings: Sequence[Sampling],
    means: Means,
    pieces: Sequence[int | None] | None = None,
) -> GreeksTable:
    """The sensitivities of every contract; after an interruption those so far. `pieces` as for prices."""
    from mcx.estimators.finite import finite
    from mcx.estimators.greeks import sensitivities
    from mcx.report.greek_results import GreeksTable
    from mcx.report.greek_summary import greeks_result

    results = []
    pieces = pieces or [None] * len(contracts)
    for ready, wish, sampling, number in zip(contracts, wishes, samplings, pieces, strict=True):
        try:
            with finite(ready):
                found = sensitivities(ready, made.market, wish, sampling.precision, seed=sampling.seed, pieces=number,
                                      reduction=sampling.reduction, threads=means.threads,
                                      progress=means.progress, notice=means.notice)
        except KeyboardInterrupt:
            if not results:
                raise
            break
        results.append(greeks_result(found.ready, made.market, wish, found))
        if found.interrupted:
            break
    return GreeksTable(tuple(results), tuple(each.dated.contract.title for each in contracts[len(results):]))
