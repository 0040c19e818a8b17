"""What is said of time: long runs are announced, by a table and not by the clock."""

from __future__ import annotations

import pytest
from front_door import CALL, MARKET
from helpers import request_of

from mcx.dates.dating import date_contract
from mcx.estimators.pace import LONG, announce, pace
from mcx.estimators.plan import duration
from mcx.estimators.ready import prepare
from mcx.machine.sizes import cost
from mcx.tape.program import Program


def program(text: str) -> Program:
    request = request_of(text + MARKET)
    return prepare(date_contract(request.contracts[0], request.market.valuation)[0], request.market)[0].program


def test_a_path_of_several_programs_on_several_threads():
    """The costs of the table, in seconds, shared by the threads."""
    one = program(CALL)
    other = program(CALL.replace("european", "lookback").replace(
        "strike: 100, expiry: 1y", "strike_type: fixed, strike: 100, watched: {count: 12, until: 1y}, expiry: 1y"))
    assert cost(other) > 3.0 * cost(one)
    assert pace([one, other], 2) == pytest.approx(1e-9 * (cost(one) + cost(other)) / 2, rel=1e-14)
    assert pace([one], 1) == pytest.approx(2.0 * pace([one], 2), rel=1e-14)


def test_only_long_runs_are_announced():
    """Ten minutes are not, more are; without anybody to tell nothing happens."""
    told: list[str] = []
    announce(int(LONG * 1000), 1e-3, told.append)
    assert told == []
    announce(2**40, 1e-7, told.append)
    assert told == ["1,099,511,627,776 paths will take about 31 hours; Ctrl-C gives the estimate so far"]
    announce(2**40, 1e-7, None)


@pytest.mark.parametrize(("seconds", "words"), [
    (0.5, "0.5 seconds"), (119.0, "120 seconds"), (120.0, "2 minutes"), (7199.0, "120 minutes"), (7200.0, "2 hours"),
    (86400.0 * 3.21, "3.2 days"), (365.25 * 86400.0 * 12345.0, "12,000 years"),
])
def test_durations(seconds: float, words: str):
    """Two digits, in a unit that there are two of."""
    assert duration(seconds) == words
