"""`mcx verify`."""

from __future__ import annotations

from collections.abc import Sequence
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
    plain_only,
    sampling_of,
)
from mcx.checked.load import Request
from mcx.faults import RequestError

if TYPE_CHECKING:
    from mcx.estimators.ready import Ready
    from mcx.report.verify_results import VerifyResult, VerifyTable


def verify(
    *files: File,
    solve: str = "",
    target: str | float | None = None,
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
) -> VerifyResult | VerifyTable:
    """Whether the quotes in the files can be right: one result, or a table of several with their ranking.

    `solve` names a numeric term of the contract, whose values at the quote are found, or at `target` ('99.5%', or money
    per unit). The other arguments are those of `price`; `within` is about the price. Raises InputError, RequestError,
    Refusal.
    """
    from mcx.estimators.batches import check_paths
    from mcx.estimators.wishes import check_target, target_of

    sampling = plain_only(sampling_of(paths, within, seconds, seed, reduction))
    check_paths(sampling.precision.paths)
    wish = solve, target_of(target)
    if target is not None and not solve:
        raise RequestError("'target' is a price to solve a term for; name the term with 'solve'")
    means = means_of(threads, progress, notice)
    wanted = outputs_of(record, report, picture)
    made, dated = read_request(files, with_market=True, with_quote=True)
    check_sampling(sampling, made.contracts)
    for each in made.contracts:
        check_target(target, notional=each.notional is not None, title=each.title)
    count = len(made.quotes)
    check_one(wanted, count, "quote")
    contracts = made_ready(made, dated, apart=True)
    results = verify_all(made, contracts, [wish] * count, [sampling] * count, means)
    missing = [f"{quote.who} on {quote.about}" for quote in made.quotes[len(results):]]
    wanted = replace(wanted, record=None) if missing else wanted
    write_outputs("verify", files, made, contracts, results, wanted)
    if count == 1:
        return results[0]
    from mcx.report.verify_summary import verify_table

    return verify_table(results, missing)


def verify_all(
    made: Request,
    contracts: Sequence[Ready],
    wishes: Sequence[tuple[str, float | None]],
    samplings: Sequence[Sampling],
    means: Means,
) -> list[VerifyResult]:
    """Every quote against its contract; the quotes of one contract share its paths. After an interruption those so far;
    raises KeyboardInterrupt if that is none."""
    from mcx.estimators.finite import finite
    from mcx.estimators.verify import Bench
    from mcx.report.verify_summary import verify_result

    ready = {each.dated.contract.title: each for each in contracts}
    benches: dict[tuple[str, Sampling], Bench] = {}
    results = []
    for quote, wish, sampling in zip(made.quotes, wishes, samplings, strict=True):
        key = quote.about, sampling
        try:
            with finite(ready[quote.about]):
                if key not in benches:
                    benches[key] = Bench(ready[quote.about], made.market, sampling.precision, seed=sampling.seed,
                                         threads=means.threads, progress=means.progress, notice=means.notice)
                found = benches[key].verify(quote, *wish)
        except KeyboardInterrupt:
            if not results:
                raise
            break
        results.append(verify_result(ready[quote.about], made.market, found, *wish))
    return results
