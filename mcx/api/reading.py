"""`mcx readback`."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING

from mcx.api.request import read_request
from mcx.api.sampling import File
from mcx.checked.load import Request
from mcx.dates.dated_contract import DatedContract
from mcx.faults import InputError, RequestError

if TYPE_CHECKING:
    from mcx.checked.market import Market
    from mcx.report.results import Readback, ReadbackTable
    from mcx.report.state_results import CalendarView


def readback(*files: File, path: File | None = None, calendar: bool = False) -> Readback | ReadbackTable | CalendarView:
    """What every contract in the files says, in sentences and dates; with a market also what that says on the dates,
    and what has become of the contract by its valuation date.

    `path` names a file of levels (YAML by asset and date, or CSV) that is run through the one contract in the files.
    `calendar` gives in place of all that one list of the fixings, decisions and payments to come of all contracts.
    Raises InputError, RequestError.
    """
    from mcx.report.readback import readback as read_back
    from mcx.report.results import ReadbackTable

    made, dated = read_request(files, with_market=False)
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
