"""One function for each verb: files and wishes in, a frozen result out.

The only module that knows every layer. `InputError` is raised once, with every fault of all documents; `RequestError`
for options without meaning; `Refusal` for what cannot be computed rightly. What is heavy is imported inside the verbs,
after the documents are known to be sound.
"""

from __future__ import annotations

import os
from collections.abc import Callable, Iterable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING

from mcx.checked.load import Request, checked_request
from mcx.dates.dated_contract import DatedContract
from mcx.dates.dating import date_on
from mcx.faults import Fault, InputError, Place, RequestError, did_you_mean
from mcx.text.documents import read_documents
from mcx.text.located import Document

if TYPE_CHECKING:
    from mcx.checked.market import Market
    from mcx.estimators.greeks import Wish
    from mcx.estimators.plan import Precision
    from mcx.estimators.ready import Ready
    from mcx.report.greek_results import GreeksResult, GreeksTable
    from mcx.report.method_results import MethodsResult, MethodsTable
    from mcx.report.results import Definition, Library, PriceResult, PriceTable, Readback, ReadbackTable, Replay
    from mcx.report.state_results import CalendarView
    from mcx.report.verify_results import VerifyResult, VerifyTable

File = str | Path
Progress = Callable[[int, int, float], None]  # paths done, paths planned, standard error so far (unit of the price)
METHOD_SECONDS = 1.0  # for each choice of methods, where nothing is asked
LARGEST_SEED = (1 << 64) - 1
CONTRACT_BEGINS = "a document that begins 'contract: TITLE'"
QUOTE_BEGINS = "a document that begins 'quote: DEALER'"
MARKET_BEGINS = "a document that begins 'market: DATE'"


def price(
    *files: File,
    paths: int | None = None,
    within: str | float | None = None,
    seconds: float | None = None,
    seed: int | None = None,
    threads: int | None = None,
    reduction: str = "none",
    record: File | None = None,
    progress: Progress | None = None,
    notice: Callable[[str], None] | None = None,
) -> PriceResult | PriceTable:
    """The value of every contract in the files on the market in them: one result, or a table of several.

    At most one of `paths`, `within` (a 95 % half-width: '2bp' or '0.02%' of the notional, '0.01' money per unit) and
    `seconds` decides the number of paths; without any it is 2^20. `seed` None is 1. `threads` None takes all; it
    changes no digit. `reduction` lists methods of variance reduction, parted by commas ('antithetic,controls'), or is
    'none', or 'auto' for the choice of a short pilot. `record` names a file to write a valuation record to. `notice` is
    called with a sentence when kernels must be compiled, or a run will take long. Raises InputError, RequestError,
    Refusal.
    """
    from mcx.estimators.plan import DEFAULT_SEED, check_fits, precision
    from mcx.estimators.reduction.names import wished

    asked = precision(paths, within, seconds)
    seed = DEFAULT_SEED if seed is None else _seed(seed)
    threads = _threads(threads)
    methods = wished(reduction)
    if record is not None:
        from mcx.report.record import check_free

        check_free(record)
    made, dated = _dated(files, with_market=True)
    for each in made.contracts:
        check_fits(asked, notional=each.notional is not None, title=each.title)
    every = len(dated)
    table = _price(made, dated, [asked] * every, [seed] * every, [methods] * every, threads, progress, notice)
    if record is not None and not table.interrupted:
        from mcx.report.record import make_record, write_record

        write_record(record, make_record(_sources(made), [each.to_dict() for each in table.prices]))
    return table.prices[0] if len(made.contracts) == 1 else table


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
    progress: Progress | None = None,
    notice: Callable[[str], None] | None = None,
) -> GreeksResult | GreeksTable:
    """How the value of every contract in the files moves with the market in them: one result, or a table of several.

    `estimator` is 'auto', 'pathwise', 'likelihood' or 'mixed'. `bump` (0.01 or '1%') adds a revaluation on the same
    random numbers for comparison: spots and forwards moved by that share, vols and correlations by that much, rates,
    yields and funding by a tenth of it. `assets` limits the sensitivities, and what moves, to some assets. `spot_moves`
    asks for a ladder of moves of all spots together, `vol_moves` for a grid of both. The other arguments
    are those of `price`; `within` is about the price. Raises InputError, RequestError, Refusal.
    """
    from mcx.estimators.batches import check_paths
    from mcx.estimators.plan import DEFAULT_SEED, check_fits, precision
    from mcx.estimators.wishes import wish_of

    asked = precision(paths, within, seconds)
    check_paths(asked.paths)
    wish = wish_of(estimator, bump, assets, spot_moves, vol_moves)
    seed = DEFAULT_SEED if seed is None else _seed(seed)
    threads = _threads(threads)
    _reduction(reduction)
    if record is not None:
        from mcx.report.record import check_free

        check_free(record)
    made, dated = _dated(files, with_market=True)
    for each in made.contracts:
        check_fits(asked, notional=each.notional is not None, title=each.title)
        for name in wish.assets:
            if name not in each.assets:
                raise RequestError(f"'{each.title}' has no asset '{name}'{did_you_mean(name, each.assets)}")
    count = len(dated)
    table = _greeks(made, dated, [wish] * count, [asked] * count, [seed] * count, threads, progress, notice)
    if record is not None and not table.interrupted:
        from mcx.report.record import make_record, write_record

        write_record(record, make_record(_sources(made), [each.to_dict() for each in table.contracts], "greeks"))
    return table.contracts[0] if len(made.contracts) == 1 else table


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
    progress: Progress | None = None,
    notice: Callable[[str], None] | None = None,
) -> VerifyResult | VerifyTable:
    """Whether the quotes in the files can be right: one result, or a table of several with their ranking.

    `solve` names a numeric term of the contract, whose values at the quote are found, or at `target` ('99.5%', or money
    per unit). The other arguments are those of `price`; `within` is about the price. Raises InputError, RequestError,
    Refusal.
    """
    from mcx.estimators.batches import check_paths
    from mcx.estimators.plan import DEFAULT_SEED, check_fits, precision
    from mcx.estimators.wishes import target_of

    asked = precision(paths, within, seconds)
    check_paths(asked.paths)
    wish = solve, target_of(target)
    if target is not None and not solve:
        raise RequestError("'target' is a price to solve a term for; name the term with 'solve'")
    seed = DEFAULT_SEED if seed is None else _seed(seed)
    threads = _threads(threads)
    _reduction(reduction)
    if record is not None:
        from mcx.report.record import check_free

        check_free(record)
    made, dated = _dated(files, with_market=True, with_quote=True)
    for each in made.contracts:
        check_fits(asked, notional=each.notional is not None, title=each.title)
    count = len(made.quotes)
    results = _verify(made, dated, [wish] * count, [asked] * count, [seed] * count, threads, progress, notice)
    if record is not None:
        from mcx.report.record import make_record, write_record

        write_record(record, make_record(_sources(made), [each.to_dict() for each in results], "verify"))
    if count == 1:
        return results[0]
    from mcx.report.verify_summary import verify_table

    return verify_table(results)


def methods(
    *files: File,
    paths: int | None = None,
    seconds: float | None = None,
    seed: int | None = None,
    threads: int | None = None,
    picture: File | None = None,
    notice: Callable[[str], None] | None = None,
) -> MethodsResult | MethodsTable:
    """Which variance reduction pays on every contract in the files: one result, or a table of several.

    Every choice of methods that applies runs for `seconds` (1 without), or for `paths`. `picture` names a file, .png or
    .svg, to draw the error against time in, for one contract. Raises InputError, RequestError, Refusal.
    """
    from mcx.estimators.plan import DEFAULT_SEED, precision

    asked = precision(paths, None, seconds if paths is not None or seconds is not None else METHOD_SECONDS)
    seed = DEFAULT_SEED if seed is None else _seed(seed)
    threads = _threads(threads)
    if picture is not None:
        from mcx.report.picture import check_picture

        check_picture(picture)
    made, dated = _dated(files, with_market=True)
    if picture is not None and len(dated) > 1:
        raise RequestError(f"a picture shows one contract; the files hold {len(dated)}")
    from mcx.estimators.finite import finite
    from mcx.estimators.reduction.comparison import compare
    from mcx.estimators.reduction.scheme import Case
    from mcx.report.method_results import MethodsTable
    from mcx.report.method_summary import methods_result

    results = []
    for ready in _ready(made, dated):
        with finite(ready):
            found, refused = compare(Case(ready, seed, threads, notice), asked.seconds, asked.paths)
        results.append(methods_result(ready, found, refused, seed, asked.words))
    if picture is not None:
        from mcx.report.picture import draw_methods

        draw_methods(results[0], picture)
    return results[0] if len(results) == 1 else MethodsTable(tuple(results))


def readback(*files: File, path: File | None = None, calendar: bool = False) -> Readback | ReadbackTable | CalendarView:
    """What every contract in the files says, in sentences and dates; with a market also what that says on the dates,
    and what has become of the contract by its valuation date.

    `path` names a file of levels (YAML by asset and date, or CSV) that is run through the one contract in the files.
    `calendar` gives in place of all that one list of the fixings, decisions and payments to come of all contracts.
    Raises InputError, RequestError.
    """
    from mcx.report.readback import readback as read_back
    from mcx.report.results import ReadbackTable

    made, dated = _dated(files, with_market=False)
    if path is not None and calendar:
        raise RequestError("levels are run through one contract; a calendar lists what comes next of all")
    if path is not None and len(dated) > 1:
        raise RequestError(f"levels can be run through one contract at a time; the files hold {len(dated)}")
    if made.market is not None:
        _check_dividends(made.market, dated)
    given = None if path is None else _on_levels(dated[0], path)
    if path is None and made.market is not None:
        _check_fixings(dated)
    if calendar:
        return _calendar(made, dated)
    found = tuple(read_back(each, made.market, given) for each in dated)
    return found[0] if len(found) == 1 else ReadbackTable(found)


def payoffs() -> Library:
    """Every definition of the library."""
    from mcx.checked.library import shipped_names
    from mcx.report.results import Library

    return Library(tuple(definition(name) for name in shipped_names()))


def definition(name: str) -> Definition:
    """One definition of the library; raises RequestError for an unknown name."""
    from mcx.checked.library import shipped_text
    from mcx.report.results import Definition

    payoff = _shipped(name)
    fewest, most = payoff.assets
    number = f"{fewest}" if most == fewest else f"{fewest} or more" if most is None else f"{fewest} to {most}"
    return Definition(name, payoff.about, number, shipped_text(name))


def blank(name: str, assets: Sequence[str]) -> str:
    """Contract, market and quote to fill in for a definition, as YAML; raises RequestError for what does not fit."""
    from mcx.checked.values import ASSET
    from mcx.report.blank import blank as fill_in

    payoff = _shipped(name)
    wrong = [asset for asset in assets if not ASSET.fullmatch(asset)]
    if wrong or not assets:
        raise RequestError(f"the assets are names of letters, digits and . _ - &, parted by commas; not "
                           f"'{wrong[0] if wrong else ''}'")
    if len(set(assets)) < len(assets):
        raise RequestError("an asset is named twice")
    fewest, most = payoff.assets
    if len(assets) < fewest or (most is not None and len(assets) > most):
        wanted = f"{fewest}" if most == fewest else f"{fewest} or more"
        raise RequestError(f"'{name}' takes {wanted} asset{'' if wanted == '1' else 's'}, not {len(assets)}")
    return fill_in(payoff, assets)


def replay(
    file: File,
    *,
    threads: int | None = None,
    progress: Progress | None = None,
    notice: Callable[[str], None] | None = None,
) -> Replay:
    """Whether a valuation record reproduces from the texts in it; raises RequestError for what is no whole record."""
    from mcx.estimators.plan import precision
    from mcx.estimators.reduction.names import NONE, wished
    from mcx.report.record import compare, documents_of, environment, read_record

    threads = _threads(threads)
    stored = read_record(file)
    made, faults = checked_request(*documents_of(stored))
    dated = _all_dated(made, faults)
    runs = stored["request"]
    verb = stored.get("verb", "price")
    there = len(made.quotes) if verb == "verify" else len(dated)
    if made.market is None or len(runs) != there:
        what = "quotes" if verb == "verify" else "contracts"
        raise RequestError(f"{file}: the record has {len(runs)} requests for the {there} {what} in its inputs")
    asked = [precision(each["paths"], None, None) for each in runs]
    seeds = [_seed(each["seed"]) for each in runs]
    brackets = [each.get("bracket") for each in stored["results"]]
    pieces = [bracket and bracket["pieces"] for bracket in brackets]
    if verb == "verify":
        wishes = [(each["solve"], each["target"]) for each in runs]
        results = _verify(made, dated, wishes, asked, seeds, threads, progress, notice)
    elif verb == "greeks":
        from mcx.estimators.wishes import wish_of

        keys = ("estimator", "bump", "assets", "spot_moves", "vol_moves")
        wishes = [wish_of(*(each[key] for key in keys)) for each in runs]
        results = _whole(_greeks(made, dated, wishes, asked, seeds, threads, progress, notice, pieces)).contracts
    else:
        reductions = [wished(each.get("reduction", NONE)) for each in runs]
        results = _whole(_price(made, dated, asked, seeds, reductions, threads, progress, notice, pieces)).prices
    return compare(stored, [each.to_dict() for each in results], environment())


def _whole(table):
    """A table of results, if nothing interrupted it; raises KeyboardInterrupt."""
    if table.interrupted:
        raise KeyboardInterrupt
    return table


def _dated(files: Sequence[File], *, with_market: bool, with_quote: bool = False) -> tuple[Request, list[DatedContract]]:
    """The documents of the files and their contracts with every date, all sound."""
    if not files:
        raise RequestError("no files are given")
    documents, unread = read_documents(files)
    made, faults = checked_request(documents, unread)
    kinds = {document.kind for document in made.documents}
    names = ", ".join(map(str, files))
    wanted = [("contract", CONTRACT_BEGINS), ("market", MARKET_BEGINS), ("quote", QUOTE_BEGINS)]
    missing = wanted[: 1 + with_market + with_quote]
    for kind, begins in missing:
        if kind not in kinds and not unread:  # else it may stand in what could not be read
            faults.append(Fault(Place(str(files[0]), 1, 1), f"no {kind} in {names}; expected {begins}"))
    return made, _all_dated(made, faults)


def _all_dated(made: Request, faults: Iterable[Fault]) -> list[DatedContract]:
    """Every contract of a request with its dates; raises InputError with all faults."""
    faults, dated = list(faults), []
    for contract in made.contracts:
        found, wrong = date_on(contract, made.market)
        faults += wrong
        if found is not None:
            dated.append(found)
    if faults:
        raise InputError([*faults, *_refused(dated)])
    return dated


def _refused(dated: Iterable[DatedContract]) -> list[Fault]:
    """Continuous watches that cannot be simulated and fixings that are missing, so that they are told beside the faults
    of the documents."""
    watched = [each for each in dated if each.watches or each.begun]
    if not watched:
        return []
    from mcx.tape.unroll import unroll

    return [fault for each in watched for fault in unroll(each, nodes=()).faults
            if each.history.sound or fault.place != each.history.place]  # what was misspelt is not missing as well


def _check_fixings(dated: Iterable[DatedContract]) -> None:
    """Raises InputError with every fixing that is missing. What else the tape refuses, the readback says."""
    from mcx.tape.unroll import unroll

    faults = [fault for each in dated if each.begun for fault in unroll(each, nodes=()).faults]
    if faults:
        raise InputError(faults)


def _calendar(made: Request, dated: Sequence[DatedContract]) -> CalendarView:
    """What comes next of every contract; what is known of the past needs a market."""
    from mcx.report.calendar import calendar
    from mcx.tape.unroll import unroll

    states = [unroll(each, nodes=()).state if made.market else None for each in dated]
    return calendar(zip(dated, states, strict=True))


def _check_dividends(market: Market, dated: Iterable[DatedContract]) -> None:
    """Raises InputError where cash dividends are worth as much as the spot."""
    from mcx.leaves.market_map import MarketMap

    faults = [fault for each in dated for fault in MarketMap.of(market, each).faults()]
    if faults:
        raise InputError(faults)


def _price(
    made: Request,
    dated: Sequence[DatedContract],
    asked: Sequence[Precision],
    seeds: Sequence[int],
    reductions: Sequence[tuple[str, ...]],
    threads: int | None,
    progress: Progress | None,
    notice: Callable[[str], None] | None,
    pieces: Sequence[int | None] | None = None,
) -> PriceTable:
    """Every contract valued; after an interruption those so far. Raises KeyboardInterrupt if that is none. `pieces`
    prescribe how fine the steps are where a price lies between bounds."""
    from mcx.estimators.finite import finite
    from mcx.estimators.price import value
    from mcx.report.results import PriceTable
    from mcx.report.summary import price_result

    results = []
    pieces = pieces or [None] * len(dated)
    for ready, wish, seed, reduction, number in zip(_ready(made, dated), asked, seeds, reductions, pieces, strict=True):
        try:
            with finite(ready):
                valuation = value(ready, wish, seed=seed, reduction=reduction, threads=threads, pieces=number,
                                  progress=progress, notice=notice)
        except KeyboardInterrupt:
            if not results:
                raise
            break
        results.append(price_result(valuation.ready, made.market, valuation))
        if valuation.interrupted:
            break
    return PriceTable(tuple(results), tuple(each.contract.title for each in dated[len(results):]))


def _greeks(
    made: Request,
    dated: Sequence[DatedContract],
    wishes: Sequence[Wish],
    asked: Sequence[Precision],
    seeds: Sequence[int],
    threads: int | None,
    progress: Progress | None,
    notice: Callable[[str], None] | None,
    pieces: Sequence[int | None] | None = None,
) -> GreeksTable:
    """The sensitivities of every contract; after an interruption those so far. `pieces` as for prices."""
    from mcx.estimators.finite import finite
    from mcx.estimators.greeks import sensitivities
    from mcx.report.greek_results import GreeksTable
    from mcx.report.greek_summary import greeks_result

    results = []
    pieces = pieces or [None] * len(dated)
    for ready, wish, precision, seed, number in zip(_ready(made, dated), wishes, asked, seeds, pieces, strict=True):
        try:
            with finite(ready):
                found = sensitivities(ready, made.market, wish, precision, seed=seed, threads=threads, pieces=number,
                                      progress=progress, notice=notice)
        except KeyboardInterrupt:
            if not results:
                raise
            break
        results.append(greeks_result(found.ready, made.market, wish, found))
        if found.interrupted:
            break
    return GreeksTable(tuple(results), tuple(each.contract.title for each in dated[len(results):]))


def _verify(
    made: Request,
    dated: Sequence[DatedContract],
    wishes: Sequence[tuple[str, float | None]],
    asked: Sequence[Precision],
    seeds: Sequence[int],
    threads: int | None,
    progress: Progress | None,
    notice: Callable[[str], None] | None,
) -> list[VerifyResult]:
    """Every quote against its contract; the quotes of one contract share its paths."""
    from mcx.estimators.finite import finite
    from mcx.estimators.verify import Bench
    from mcx.report.verify_summary import verify_result

    ready = {each.dated.contract.title: each for each in _ready(made, dated, apart=True)}
    benches: dict[tuple, Bench] = {}
    results = []
    for quote, wish, precision, seed in zip(made.quotes, wishes, asked, seeds, strict=True):
        key = quote.about, precision, seed
        with finite(ready[quote.about]):
            if key not in benches:
                benches[key] = Bench(ready[quote.about], made.market, precision, seed=seed, threads=threads,
                                     progress=progress, notice=notice)
            found = benches[key].verify(quote, *wish)
        results.append(verify_result(ready[quote.about], made.market, found, *wish))
    return results


def _ready(made: Request, dated: Sequence[DatedContract], apart: bool = False) -> list[Ready]:
    """Every contract as a program on the market (`apart`: see `prepare`); raises InputError with all that the tape refuses."""
    from mcx.estimators.ready import prepare

    found = [prepare(each, made.market, apart) for each in dated]
    faults = [fault for _, wrong in found for fault in wrong]
    if faults:
        raise InputError(faults)
    return [ready for ready, _ in found]


def _on_levels(dated: DatedContract, path: File):
    """The payments of a contract on the levels of a file."""
    from mcx.report.given_path import run_levels
    from mcx.report.levels import read_levels
    from mcx.tape.unroll import unroll

    file = str(path)
    try:
        data = Path(file).read_bytes()
    except (OSError, ValueError) as error:
        raise RequestError(f"{file}: the levels cannot be read: {getattr(error, 'strerror', None) or error}") from None
    levels, faults = read_levels(data, file, dated)
    unrolled = unroll(dated, nodes=(), given=True)
    faults += unrolled.faults
    if not faults:
        found, faults = run_levels(dated, unrolled.observed, levels, file)
    if faults:
        raise InputError(faults)
    return found


def _sources(made: Request) -> tuple[Document, ...]:
    """Every document of a request, the definitions of the library that it used included."""
    return tuple(dict.fromkeys((*made.documents, *made.payoffs)))


def _shipped(name: str):
    """A definition of the library, checked."""
    from mcx.checked.library import shipped, shipped_names
    from mcx.checked.read_payoff import read_payoff

    if name not in shipped_names():
        near = did_you_mean(name, shipped_names()) or "; 'mcx payoffs' lists those there are"
        raise RequestError(f"there is no payoff '{name}' in the library{near}")
    payoff, faults = read_payoff(shipped(name))
    if faults:
        raise InputError(faults)
    return payoff


def _seed(seed: object) -> int:
    if isinstance(seed, bool) or not hasattr(seed, "__index__") or not 0 <= seed <= LARGEST_SEED:
        raise RequestError(f"'seed' is a whole number from 0 to {LARGEST_SEED}, not {seed!r}")
    return int(seed)


def _threads(threads: object) -> int | None:
    if threads is None:
        return None
    most = len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1
    if isinstance(threads, bool) or not hasattr(threads, "__index__") or not 1 <= threads <= most:
        raise RequestError(f"'threads' is from 1 to {most}, the processors at hand, not {threads!r}")
    return int(threads)


def _reduction(reduction: str) -> None:
    from mcx.estimators.reduction.names import wished

    if wished(reduction):
        raise RequestError(f"the variance reduction of sensitivities is 'none', not {reduction!r}: their estimators "
                           f"choose their own controls")
