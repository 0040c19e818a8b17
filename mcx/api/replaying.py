"""`mcx replay`."""

from __future__ import annotations

from typing import TYPE_CHECKING

from mcx.api.pricing import price_all
from mcx.api.request import dated_contracts, made_ready
from mcx.api.sampling import File, Notice, Progress, Sampling, checked_seed, means_of
from mcx.api.sensitivities import greeks_of_all
from mcx.api.verifying import verify_all
from mcx.checked.load import checked_request
from mcx.faults import RequestError

if TYPE_CHECKING:
    from mcx.report.greek_results import GreeksTable
    from mcx.report.results import PriceTable, Replay


def replay(
    file: File,
    *,
    threads: int | None = None,
    progress: Progress | None = None,
    notice: Notice | None = None,
) -> Replay:
    """Whether a valuation record reproduces from the texts in it; raises RequestError for what is no whole record."""
    from mcx.estimators.plan import precision
    from mcx.estimators.reduction.names import NONE, wished
    from mcx.report.record import compare, documents_of, environment, read_record

    means = means_of(threads, progress, notice)
    stored = read_record(file)
    made, faults = checked_request(*documents_of(stored))
    dated = dated_contracts(made, faults)
    runs = stored["request"]
    verb = stored.get("verb", "price")
    there = len(made.quotes) if verb == "verify" else len(dated)
    if made.market is None or len(runs) != there:
        what = "quotes" if verb == "verify" else "contracts"
        raise RequestError(f"{file}: the record has {len(runs)} requests for the {there} {what} in its inputs")
    contracts = made_ready(made, dated, apart=verb == "verify")
    samplings = [Sampling(precision(each["paths"], None, None), checked_seed(each["seed"]),
                          wished(each.get("reduction", NONE))) for each in runs]
    brackets = [each.get("bracket") for each in stored["results"]]
    pieces = [bracket and bracket["pieces"] for bracket in brackets]
    if verb == "verify":
        wishes = [(each["solve"], each["target"]) for each in runs]
        results = verify_all(made, contracts, wishes, samplings, means)
        if len(results) < len(runs):
            raise KeyboardInterrupt
    elif verb == "greeks":
        from mcx.estimators.wishes import wish_of

        keys = ("estimator", "bump", "assets", "spot_moves", "vol_moves")
        wishes = [wish_of(*(each[key] for key in keys)) for each in runs]
        sensitivities = greeks_of_all(made, contracts, wishes, samplings, means, pieces)
        _check_whole(sensitivities)
        results = sensitivities.contracts
    else:
        prices = price_all(made, contracts, samplings, means, pieces)
        _check_whole(prices)
        results = prices.prices
    return compare(stored, [each.to_dict() for each in results], environment())


def _check_whole(table: PriceTable | GreeksTable) -> None:
    """Raises KeyboardInterrupt if an interruption left anything out."""
    if table.interrupted:
        raise KeyboardInterrupt
