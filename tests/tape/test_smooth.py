"""Which conditions make a payment jump: single formulas, the library, random payoffs against a search for jumps."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from helpers import Ready, ready_of
from hypothesis import assume, given, settings
from made import event, figures, made, pay, running, set_to
from random_payoffs import contracts
from strategies import inputs_for, tapes

from mcx.checked.load import checked_request, load
from mcx.dates.dating import date_contract
from mcx.leaves.market_map import MarketMap
from mcx.tape.interpret import interpret
from mcx.tape.program import LeafKind, Tape
from mcx.tape.smooth import Jump, jumps, payments
from mcx.tape.unroll import unroll
from mcx.text.documents import parse_documents

EXAMPLES = Path(__file__).resolve().parents[2] / "payoffs" / "examples"
DATES = {"all": (0.5, 1.0), "end": (1.0,)}
TERMS = {"strike": figures(100.0), "higher": figures(110.0), "same": figures(100.0)}
ROUGH = {LeafKind.LOG_SPOT: 4.6, LeafKind.FORWARD: 100.0, LeafKind.DRIFT: 0.01, LeafKind.FACTOR: 0.2,
         LeafKind.VARIANCE: 0.04, LeafKind.DISCOUNT: 0.95}


def leaf_values(tape: Tape) -> np.ndarray:
    """Numbers of ordinary size; the terms of TERMS."""
    return np.array([TERMS[leaf.name].rows[0][0] if leaf.kind is LeafKind.TERM else ROUGH[leaf.kind]
                     for leaf in tape.leaves])


def kinds(found: tuple[Jump, ...]) -> list[str]:
    return [jump.kind for jump in found]


def price_jumps(*events, watches=(), assets=("north",), watched=None) -> tuple[Jump, ...]:
    """What makes the price of a made-up contract jump."""
    dated = made(DATES, events, watches, TERMS, assets=assets, watched=watched)
    unrolled = unroll(dated, nodes=())
    assert not unrolled.faults
    tape = unrolled.tape
    (found,) = jumps(tape, leaf_values(tape), [tape.outputs[0].value])
    return found


SMOOTH = [
    "max(spot - strike, 0)",
    "spot - strike if spot > strike else 0",
    "0 if spot <= strike else spot - strike",
    "2 * (spot / strike - 1) if spot / strike > 1 else 0",
    "spot - strike if spot > same else 0",
    "max(spot - strike, 0) if spot > strike else 0",
    "min(spot, higher) - strike if spot > strike else 0",
    "(spot - strike) * spot if spot > strike else 0",
    "(spot - strike) / spot if spot > strike else 0",
    "abs(spot - strike) if spot > strike else 3 * (strike - spot)",
    "spot - strike if spot > strike and spot - strike > 0 else 0",
    "(1 if spot > strike else 0) * (spot - strike)",
    "(spot if spot > strike else strike) + (spot if spot < higher else higher)",
    "spot if not spot < strike else strike",
    "(spot - strike if spot > strike else 0) ** 2",
    "exp(spot / strike - 1 if spot > strike else 0)",
    "log(spot) * sqrt(spot) / spot",
    "strike / spot",
    "spot ** 0.5",
    "sqrt((spot - strike) ** 2 + (spot - higher) ** 2)",
    "sqrt(min(3 * log(spot / strike) ** 2 / 2, 0.04))",
    "max(spot - strike, 0) ** 1.5",
    "log(max(spot - strike, 1))",
]
JUMPING = [
    "1 if spot > strike else 0",
    "spot - higher if spot > strike else 0",
    "spot - strike if spot < strike + 1 else 0",
    "spot if spot > strike else 0",
    "higher if spot == strike else strike",
    "max(spot - higher, 0) if spot > strike or spot < strike / 2 else 1",
    "(spot - strike if spot > strike else 0) + (50 if spot > higher else 0)",
    "exp(1 if spot > strike else 0)",
    "(1 if spot > strike else 0) * (spot - higher)",
    "max(spot, 105) if spot > strike else strike",
]


@pytest.mark.parametrize("formula", SMOOTH)
def test_a_formula_without_jumps(formula: str):
    """What is the same on both sides of its conditions has no jump, and a search for one finds none."""
    one = event("end", pay(formula))
    assert price_jumps(one) == ()
    assert largest_jump_of(one) < 1e-4


@pytest.mark.parametrize("formula", JUMPING)
def test_a_formula_with_jumps(formula: str):
    """A condition at which the amount changes is named, with its place."""
    found = price_jumps(event("end", pay(formula)))
    assert "condition" in kinds(found)
    assert all(jump.place is not None for jump in found)


@pytest.mark.parametrize("formula", ["1 / (spot - strike)", "(spot - strike) / abs(spot - strike)",
                                     "(spot - strike) ** -1"])
def test_a_division_by_what_may_be_zero_is_a_jump(formula: str):
    """A sign can be written as a division."""
    assert kinds(price_jumps(event("end", pay(formula)))) == ["division"]


@pytest.mark.parametrize("formula", ["sqrt(max(spot - strike, 0))", "abs(spot - strike) ** 0.1",
                                     "sqrt(abs(spot - strike))", "log(abs(spot - strike))",
                                     "((spot - strike) ** 2) ** 0.25"])
def test_a_root_or_log_of_what_may_be_zero_has_no_bounded_slope(formula: str):
    """It does not jump, or not by a finite amount; its slopes path by path have no finite variance."""
    assert kinds(price_jumps(event("end", pay(formula)))) == ["root"]


@pytest.mark.parametrize("moved", [99.9999, 100.0, 100.0001])
def test_what_is_decided_today_holds_in_the_analysis(moved: float):
    """Today's level is so near the strike that the small moves of the analysis would turn the condition: the payment
    is that of the branch that is taken."""
    today = running("above_today", "latest", "spot >= strike", "now")
    digital = event("end", pay("(1 if spot > higher else 0) if above_today else spot"))
    dated = made({"now": (0.0,), "end": (1.0,)}, [digital], [today], TERMS)
    tape = unroll(dated, nodes=()).tape
    values = np.array([moved if leaf.kind is LeafKind.FORWARD else value
                       for leaf, value in zip(tape.leaves, leaf_values(tape), strict=True)])
    (found,) = jumps(tape, values, [tape.outputs[0].value])
    assert kinds(found) == (["condition"] if moved >= 100.0 else [])


def test_the_place_is_that_of_the_comparison():
    """Only the condition at fault is named, and once for all dates."""
    harmless, guilty = pay("spot - strike if spot > strike else 0"), pay("1 if spot > higher else 0")
    (found,) = price_jumps(event("all", harmless, guilty))
    assert found.place == guilty.amount.condition.place


def test_conditions_of_events():
    """An event's condition counts like a conditional in the amount: harmless where the amounts agree."""
    assert price_jumps(event("end", pay("spot - strike"), condition="spot > strike")) == ()
    both = event("end", pay("spot"), condition="spot > strike", otherwise=(pay("strike"),))
    assert price_jumps(both) == ()
    different = event("end", pay("spot"), condition="spot > strike", otherwise=(pay("higher"),))
    assert kinds(price_jumps(different)) == ["condition"]


def test_payments_are_judged_one_by_one():
    """Two payments that jump by opposite amounts jump each; their sum does not."""
    both = event("end", pay("spot"), condition="spot > strike", otherwise=(pay("strike"),))
    tape = unroll(made(DATES, [both], (), TERMS), nodes=()).tape
    price = tape.outputs[0].value
    parts = payments(tape, price)
    whole, *each = jumps(tape, leaf_values(tape), [price, *parts])
    assert len(parts) == 2 and whole == () and [len(one) for one in each] == [1, 1]


def test_memory_and_endings():
    """What an earlier condition remembers jumps, unless it does not matter when the condition turns."""
    hit = running("hit", "ever", "spot < strike", "all")
    knocked = "min(spot, higher) if hit and spot < higher else higher"
    (found,) = price_jumps(event("end", pay(knocked)), watches=[hit])
    assert found.place == hit.formula.place
    counted = running("times", "set", start="0")
    found = price_jumps(event("all", set_to(times="times + 1"), condition="spot > strike"),
                        event("end", pay("times * strike")), watches=[counted])
    assert kinds(found) == ["condition"]
    lowest = running("low", "lowest", "spot", "all")
    assert price_jumps(event("end", pay("spot - low")), watches=[lowest]) == ()
    average = running("mean_level", "average", "spot", "all")
    assert price_jumps(event("end", pay("mean_level - strike"), condition="mean_level > strike"),
                       watches=[average]) == ()


def test_continuous_watching():
    """A knock-in watched continuously is a jump, a lookback is none."""
    watch, span = running("hit", "ever", "spot <= strike"), {"hit": (0.0, 1.0), "low": (0.0, 1.0)}
    assert kinds(price_jumps(event("end", pay("spot if hit else higher")), watches=[watch], watched=span)) \
        == ["condition"]
    lookback = running("low", "lowest", "spot")
    assert price_jumps(event("end", pay("spot - low")), watches=[lookback], watched=span) == ()


def test_several_assets():
    """The worst of two is continuous; who is the worst is not."""
    two = ("north", "south")
    assert price_jumps(event("end", pay("worst(spot) - strike if worst(spot) > strike else 0")), assets=two) == ()
    better = "of(spot, north) if of(spot, north) > of(spot, south) else of(spot, south)"
    assert price_jumps(event("end", pay(better)), assets=two) == ()
    other = "of(spot, north) if of(spot, south) > of(spot, north) + 1 else of(spot, south)"
    assert kinds(price_jumps(event("end", pay(other)), assets=two)) == ["condition"]


LIBRARY = {
    "european": set(), "asian": set(), "lookback": set(), "basket_option": set(), "cliquet": set(), "airbag": set(),
    "reverse_convertible": set(), "variance_swap": set(), "exchange_option": set(), "capital_protection": set(),
    "digital": {"digital"}, "barrier": {"barrier"}, "autocall": {"autocall"}, "touch": {"touch"},
    "barrier_reverse_convertible": {"barrier_reverse_convertible"}, "range_accrual": {"range_accrual"},
    "snowball_autocall": {"snowball_autocall"}, "bonus": {"bonus"}, "shark_fin": {"shark_fin"},
}


@pytest.mark.parametrize("name", LIBRARY)
def test_the_library(name: str):
    """Digitals, barriers and autocalls jump, at a line of their definition; Asians, lookbacks and the like do not."""
    request = load([EXAMPLES / f"{name}.yaml"])
    for number, contract in enumerate(request.contracts):
        ready = ready_of(request, number)
        (found,) = price_jumps_of(ready, MarketMap(ready.market, contract).values(ready.unrolled.tape.leaves))
        assert {Path(jump.place.file).stem for jump in found} == LIBRARY[name]


# A search for jumps


def price_jumps_of(ready: Ready, leaves: np.ndarray) -> tuple[tuple[Jump, ...], ...]:
    tape = ready.unrolled.tape
    return jumps(tape, leaves, [output.value for output in tape.outputs if output.kind == "price"])


def largest_jump(tape: Tape, leaves: np.ndarray, value: int, seed: int, walks: int = 24) -> float:
    """The largest jump of a value along straight walks through the draws, relative to its size on the walk.

    Of a step of the walk the half with the larger change is halved again, until nothing but a jump is left.
    """
    draws = np.random.default_rng(seed)
    z0, z1 = draws.normal(0.0, 1.5, (2, tape.normals, walks))
    u0, u1 = draws.uniform(0.01, 0.99, (2, tape.uniforms, walks))

    def at(share: np.ndarray) -> np.ndarray:
        """The value at shares (walks, points) of the way."""
        flat = [(start[..., None] * (1.0 - share) + end[..., None] * share).reshape(len(start), share.size)
                for start, end in ((z0, z1), (u0, u1))]
        found = interpret(tape, leaves, *flat)[value]
        return np.broadcast_to(found, share.size).reshape(share.shape)

    points = np.broadcast_to(np.linspace(0.0, 1.0, 401), (walks, 401))
    along = at(points)
    scale = 1.0 + np.max(np.abs(np.where(np.isfinite(along), along, 0.0)), axis=1)
    change = np.abs(np.diff(along, axis=1))
    which = np.argsort(-np.where(np.isfinite(change), change, 0.0), axis=1)[:, :5]
    low, high = np.take_along_axis(points, which, 1), np.take_along_axis(points, which + 1, 1)
    at_low, at_high = np.take_along_axis(along, which, 1), np.take_along_axis(along, which + 1, 1)
    for _ in range(30):
        middle = 0.5 * (low + high)
        between = at(middle)
        left = np.abs(between - at_low) >= np.abs(at_high - between)
        low, high = np.where(left, low, middle), np.where(left, middle, high)
        at_low, at_high = np.where(left, at_low, between), np.where(left, between, at_high)
    left_over = np.abs(at_high - at_low) / scale[:, None]
    return float(np.max(np.where(np.isfinite(left_over), left_over, 0.0)))


def largest_jump_of(*events) -> float:
    tape = unroll(made(DATES, events, (), TERMS), nodes=()).tape
    return largest_jump(tape, leaf_values(tape), tape.outputs[0].value, seed=4417)


def test_the_search_finds_jumps():
    """It finds those of the formulas above that jump, except where only one point does."""
    for formula in JUMPING:
        if "==" not in formula:
            assert largest_jump_of(event("end", pay(formula))) > 1e-4, formula


@given(tapes())
def test_random_tapes_that_are_called_smooth_are(tape: Tape):
    """No jump is found in a value of a random tape that is said to have none."""
    leaves = inputs_for(tape, 1, seed=33701)[0]
    for output, found in zip(tape.outputs, jumps(tape, leaves, [o.value for o in tape.outputs]), strict=True):
        if not found:
            assert largest_jump(tape, leaves, output.value, seed=7731, walks=3) < 1e-4


@settings(max_examples=20)
@given(contracts())
def test_random_payoffs_that_are_called_smooth_are(text: str):
    """No jump is found in a payment of a random contract that is said to have none."""
    documents, faults = parse_documents(text.encode(), "made.yaml")
    request, wrong = checked_request(documents, faults)
    assume(not wrong)
    contract = request.contracts[0]
    market = MarketMap(request.market, contract)
    unrolled = unroll(date_contract(contract, request.market.valuation)[0], nodes=market.nodes())
    assume(not unrolled.faults)
    tape = unrolled.tape
    leaves = market.values(tape.leaves)
    parts = payments(tape, tape.outputs[0].value)
    for part, found in zip(parts, jumps(tape, leaves, parts), strict=True):
        if not found:
            assert largest_jump(tape, leaves, part, seed=90217, walks=3) < 1e-4
