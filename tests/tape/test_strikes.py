"""Which levels a price refers to, on the shipped examples and where formulas hide them; puts whose derivative is a jump."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from helpers import request_of

from mcx.checked.load import Request, load
from mcx.dates.dating import date_on
from mcx.estimators.ready import prepare
from mcx.tape.jump_put import jump_put
from mcx.tape.pieces import pieces
from mcx.tape.program import Tape
from mcx.tape.registers import uniform_values
from mcx.tape.strikes import Strike, price_alone, strikes, values_at

EXAMPLES = Path(__file__).resolve().parents[2] / "payoffs" / "examples"
MARKET = """---
market: 0y
rates: {EUR: 3%}
assets:
  harbour: {spot: 100, yield: 2%, vol: 20%}
  lantern: {spot: 50, yield: 2%, vol: 20%}
correlation: {harbour/lantern: 50%}
"""


def tape_of(request: Request, title: str = "") -> tuple[Tape, list[float | None], list[float]]:
    contract = next(each for each in request.contracts if title in each.title)
    dated, faults = date_on(contract, request.market)
    assert not faults
    ready, faults = prepare(dated, request.market)
    assert not faults
    tape = price_alone(ready.unrolled.observed)
    spots = [ready.market.forward(name, 0.0) for name in contract.assets]
    return tape, uniform_values(tape, ready.market.values(tape.leaves)), spots


def of_formula(pay: str, more: str = "", assets: str = "[harbour]") -> tuple[Tape, list[float | None], list[float]]:
    """A payoff of one formula, with levels on four dates."""
    text = (f"payoff: formula\nabout: One formula.\nterms:\n  dates: {{type: dates}}\n{more}events:\n"
            f"  - at: dates.last\n    pay: {pay}\n---\ncontract: Case\ncurrency: EUR\nunits: 1\nassets: {assets}\n"
            f"payoff: formula\nterms: {{dates: {{count: 4, until: 1y}}}}\n")
    return tape_of(request_of(text + MARKET))


def found(pay: str, more: str = "", assets: str = "[harbour]") -> list[tuple[tuple[tuple[int, float], ...], bool]]:
    return [(one.levels, one.forward_start) for one in strikes(*of_formula(pay, more, assets))]


AVERAGE = "running:\n  average: {average: spot, at: dates}\n"
COUNT = "running:\n  days: {total: spot > 80, at: dates}\n"
STEP = "running:\n  step:\n    latest: spot / previous(spot, 100)\n    at: dates\n"


@pytest.mark.parametrize(("pay", "more", "levels"), [
    ("max(spot - 90, 0)", "", [90.0]),
    ("log(spot) if log(spot) > 4.5 else 0", "", [90.0171313]),
    ("1 if spot ** 2 < 4900 else 0", "", [70.0]),
    ("1 if 100 / spot > 1.25 else 0", "", [80.0]),
    ("clip(spot / 100, 0.8, 1.2)", "", [80.0, 120.0]),
    ("abs(spot - 95)", "", [95.0]),
    ("1 if 85 < spot <= 115 else 0", "", [85.0, 115.0]),
    ("max(average - 101, 0)", AVERAGE, [101.0]),
    ("0.01 * days", COUNT, [80.0]),
    ("1 if days > 2 else 0", COUNT, [80.0]),
    ("spot", "", []),
    ("1 if spot > 1000000 else 0", "", []),
])
def test_levels_of_formulas(pay, more, levels):
    """Whatever the formula does to a level, and once each however often it is compared."""
    here = found(pay, more)
    assert [level for (((_, level),), _) in here] == pytest.approx(levels, rel=1e-9)
    assert not any(forward_start for _, forward_start in here)


@pytest.mark.parametrize(("pay", "levels"), [
    ("max(worst(spot / of_start) - 0.9, 0)", (90.0, 36.0)),
    ("max(mean(spot / of_start) - 0.9, 0)", (90.0, 36.0)),
    ("1 if best(spot / of_start) < 0.6 else 0", (60.0, 24.0)),
    ("1 if basket(spot / of_start, of_start / 140) < 1.1 else 0", (110.0, 44.0)),
])
def test_each_asset_at_its_share(pay, levels):
    """Of several assets each at the same share of what it is divided by, here not its spot."""
    text = (f"payoff: formula\nabout: One formula.\nterms:\n  of_start: {{type: level}}\n  end: {{type: date}}\nevents:\n"
            f"  - at: end\n    pay: {pay}\n---\ncontract: Case\ncurrency: EUR\nunits: 1\nassets: [harbour, lantern]\n"
            "payoff: formula\nterms: {of_start: {harbour: 100, lantern: 40}, end: 1y}\n")
    (one,) = [each for each in strikes(*tape_of(request_of(text + MARKET)))]
    assert one.levels == ((0, pytest.approx(levels[0])), (1, pytest.approx(levels[1])))


def test_returns_are_shares_of_a_spot_to_come():
    """From the second date on; the first return is from a number, and so has a level."""
    here = found("max(step - 1.05, 0)", STEP)
    assert here == [(((0, 105.0),), True)]
    assert found("max(spot - average, 0)", AVERAGE) == [(((0, 100.0),), True)]


@pytest.mark.parametrize(("file", "title", "levels"), [
    ("harbour_lantern", "", [2526.3, 2947.35, 3789.45, 3999.975, 4210.5]),
    ("barrier", "watched continuously, rebate 3 at the hit", [90.0, 100.0]),
    ("capital_protection", "with a cap", [4180.2, 5643.27]),
    ("double_barrier", "knock-out call, watched weekly", [80.0, 100.0, 130.0]),
    ("snowball_autocall", "Lantern snowball", [480.66, 640.88, 680.935, 720.99, 761.045, 801.1]),
    ("range_accrual", "", [3845.784, 4598.22]),
    ("variance_swap", "Harbour variance swap", []),
])
def test_levels_of_examples(file, title, levels):
    """The levels that the files themselves state."""
    tape, known, spots = tape_of(load([EXAMPLES / f"{file}.yaml"]), title)
    here = [one for one in strikes(tape, known, spots) if not one.forward_start]
    assert [one.levels[0][1] for one in here] == pytest.approx(levels, rel=1e-9)


def test_conditions_that_only_report_are_left_out():
    """A named event on which no payment hangs refers to no level of the price."""
    text = ("payoff: formula\nabout: One formula.\nterms:\n  end: {type: date}\nrunning:\n  seen: {start: 0}\n"
            "events:\n  - at: end\n    name: high\n    if: spot > 130\n    then:\n      - set: {seen: 1}\n  - at: end\n    pay: max(spot - 90, 0)\n---\n"
            "contract: Case\ncurrency: EUR\nunits: 1\nassets: [harbour]\npayoff: formula\nterms: {end: 1y}\n")
    assert [one.levels for one in strikes(*tape_of(request_of(text + MARKET)))] == [((0, 90.0),)]


def jump_at(pay: str, more: str = "") -> list[tuple[float, Tape | None]]:
    tape, known, spots = of_formula(pay, more)
    return [(one.levels[0][1], jump_put(tape, known, one, 1.0, spots)) for one in strikes(tape, known, spots)]


def put_of(tape: Tape, level: float) -> float:
    """What the put pays at a level, undiscounted."""
    discount = np.exp(-0.03)
    leaves = [discount for _ in tape.leaves]
    value = values_at(tape, uniform_values(tape, leaves), lambda key: np.array(level))[tape.outputs[0].value]
    return float(value) / discount


@pytest.mark.parametrize(("pay", "jump"), [
    ("2 if spot < 80 else 0", 2.0),
    ("2 if spot > 80 else 0", -2.0),
    ("(spot / 100 - 1) if spot < 80 else 0", -0.2),
    ("3 if 40 / spot > 0.5 else 1", 2.0),
    ("(3 if spot < 80 else 1) + (5 if spot >= 80 else 4)", 1.0),
])
def test_the_put_of_a_jump(pay, jump):
    """Its pay-off is the jump times what the level lacks, in shares of it: near the level, to first order where what is
    compared is no straight line."""
    ((level, tape),) = jump_at(pay)
    assert level == pytest.approx(80.0)
    assert put_of(tape, 81.0) == 0.0
    assert put_of(tape, 79.99) == pytest.approx(jump * 0.01 / 80, rel=1e-3)


@pytest.mark.parametrize(("pay", "more"), [
    ("max(80 - spot, 0)", ""), ("max(80 - average, 0)", AVERAGE), ("1 if average < 80 else 0", AVERAGE),
    ("max(spot - 80, 0) if spot > 80 else 0", ""),
])
def test_no_put_without_a_jump_at_a_level_of_the_last_date(pay, more):
    """A kink is no jump; an average and a count are no level of the last date."""
    assert [tape for _, tape in jump_at(pay, more)] == [None]


def test_the_last_of_many_days_jumps_by_its_own_part():
    """Of a count only the last date's level is corrected: whatever the days before it were."""
    ((level, tape),) = jump_at("10 * days", COUNT)
    assert level == pytest.approx(80.0)
    assert put_of(tape, 79.9) == pytest.approx(-10.0 * 0.1 / 80)


def test_pieces():
    """What a price pays as a function of its level, straight between breaks, with its jump."""
    tape, known, spots = of_formula("((spot - 100) if spot < 80 else 0) + max(spot - 110, 0)")
    (piece,), whole = pieces(tape, known, strikes(tape, known, spots))
    discount = np.exp(-0.03)
    assert whole
    assert piece.breaks == (80.0, 110.0)
    assert np.array(piece.below) / discount == pytest.approx([-20.0, 0.0], abs=1e-9)
    assert np.array(piece.above) / discount == pytest.approx([0.0, 0.0], abs=1e-9)
    assert np.array(piece.slopes) / discount == pytest.approx([1.0, 0.0, 1.0], abs=1e-9)


@pytest.mark.parametrize(("pay", "more"), [("max(spot - 90, 0) ** 2", ""), ("max(average - 90, 0)", AVERAGE)])
def test_what_is_no_piece(pay, more):
    """A curved payment, and one of several levels."""
    tape, known, spots = of_formula(pay, more)
    assert pieces(tape, known, strikes(tape, known, spots)) == ((), False)


def test_each_level_once():
    tape, known, spots = of_formula("max(spot - 90, 0) + (1 if spot < 90 else 0) + max(spot, 90)")
    (one,) = strikes(tape, known, spots)
    assert isinstance(one, Strike)
    assert len(one.turns) == 3
