"""Unrolling: small contracts on given levels, against results worked out by hand."""

from __future__ import annotations

import math

import numpy as np
import pytest

from mcx.dates.dated_contract import DatedContract
from mcx.tape.formulas import figure
from mcx.tape.interpret import interpret, outputs
from mcx.tape.ops import Op
from mcx.tape.program import Leaf, LeafKind, LevelKey
from mcx.tape.unroll import Unrolled, unroll
from mcx.tape.verify import problems
from tape.made import end, event, figures, formula, made, pay, running, set_to, word

RATE = 0.05


def results(dated: DatedContract, levels: dict) -> dict[str, np.ndarray]:
    """Every output on given levels: `levels[asset][time]`, and `low` or `high` with (asset, start, time)."""
    unrolled = unroll(dated, nodes=())
    assert unrolled.faults == ()
    assert problems(unrolled.observed) == [] and problems(unrolled.tape) == []

    def leaf_value(leaf: Leaf) -> float:
        return math.exp(-RATE * leaf.end) if leaf.kind is LeafKind.DISCOUNT else figure(dated.contract, leaf)

    read = {}
    for step in unrolled.observed.instructions:
        key = step.payload
        if step.op is Op.LEVEL:
            read[step.op, key] = levels[key.asset][key.time]
        elif isinstance(key, LevelKey):
            read[step.op, key] = levels[step.op.name.lower()][key.asset, key.start, key.time]
    tape = unrolled.observed
    return outputs(tape, interpret(tape, [leaf_value(leaf) for leaf in tape.leaves], levels=read))


def texts(unrolled: Unrolled) -> list[str]:
    return [fault.text for fault in unrolled.faults]


def discounted(*payments: tuple[float, float]) -> float:
    """The value of (amount, time) payments."""
    return sum(amount * math.exp(-RATE * time) for amount, time in payments)


def read_once(what: str, spot: dict | None = None, **contract) -> np.ndarray:
    """What a formula reads at time 1 on spot 100 (or 100, 50, 80 for three assets)."""
    dated = made({"expiry": (1.0,)}, [event("expiry", pay(what))], **contract)
    spots = spot or dict(enumerate((100.0, 50.0, 80.0)))
    return results(dated, {asset: {1.0: level} for asset, level in spots.items()})["price"] * math.exp(RATE)


@pytest.mark.parametrize(
    ("what", "value"),
    [
        ("spot", 100.0),
        ("max(spot - 90, 0) * 2 + 1", 21.0),
        ("-spot ** 0.5 / 4", -2.5),
        ("abs(60 - spot) + log(exp(2)) + sqrt(9)", 45.0),
        ("clip(spot, 0, 70)", 70.0),
        ("clip(spot, 120, 130)", 120.0),
        ("clip(spot, 120, 70)", 70.0),  # bounds that cross: the upper one holds
        ("min(spot, 3, 2)", 2.0),
        ("1 if spot >= 100 else 2", 1.0),
        ("1 if spot > 100 else 2", 2.0),
        ("5 if spot == 100 and not spot != 100 else 6", 5.0),
        ("worst(spot)", 100.0),
        ("nth + 10 * n_dates + years + period", 13.0),
    ],
)
def test_formulas_of_one_asset(what: str, value: float):
    """Arithmetic, functions, comparisons and the names of a date."""
    assert read_once(what) == pytest.approx(value)


@pytest.mark.parametrize(
    ("what", "value"),
    [
        ("worst(spot)", 50.0),
        ("best(spot / initial)", 2.0),
        ("mean(spot)", 230.0 / 3.0),
        ("basket(spot, weights)", 50.0 + 15.0 + 16.0),
        ("basket(1, 2)", 6.0),
        ("ranked(spot, 1)", 50.0),
        ("ranked(spot, 2)", 80.0),
        ("ranked(spot, rank)", 100.0),
        ("of(spot, south)", 50.0),
        ("of(spot, chosen)", 80.0),
        ("1 if any(spot > 90) else 0", 1.0),
        ("1 if all(spot > 60) else 0", 0.0),
        ("mean(spot if spot > 60 else 0)", 60.0),
    ],
)
def test_formulas_over_assets(what: str, value: float):
    """Operations go asset by asset until one of them gathers the assets."""
    terms = {"initial": figures((50.0, 50.0, 80.0)), "weights": figures((0.5, 0.3, 0.2)), "rank": figures(3.0),
             "chosen": word("west")}
    assert read_once(what, assets=("north", "south", "west"), terms=terms) == pytest.approx(value)


def test_an_impossible_rank_is_a_fault():
    """The rank must be one of the assets' places."""
    dated = made({"expiry": (1.0,)}, [event("expiry", pay("ranked(spot, 3)"))], assets=("north", "south"))
    assert texts(unroll(dated, nodes=())) == ["the rank must be a whole number from 1 (the worst) to 2"]


def test_terms_are_leaves_and_choices_fold():
    """Numeric terms stay inputs of the tape; a choice, a flag or `given` leaves no trace."""
    terms = {"strike": figures(100.0), "side": word("put"), "capped": word("false")}
    amount = "max(spot - strike, 0) if side == 'call' else max(strike - spot, 0) + (cap if given(cap) else 0)"
    dated = made({"expiry": (1.0,)}, [event("expiry", pay(f"{amount} if not capped else 1"))], terms=terms)
    tape = unroll(dated, nodes=()).observed
    assert str(tape).splitlines()[:6] == [
        "v0 = constant 0.0",
        "v1 = constant 1.0",
        "v2 = leaf term strike",
        "v3 = level of 0 at 1",
        "v4 = v2 - v3",
        "v5 = max(v0, v4)",
    ]
    assert not any(step.op is Op.SELECT for step in tape.instructions)


def test_a_term_that_is_not_given_is_a_fault_where_it_is_read():
    """Reading it is refused, with its place; behind `given` it is not read."""
    optional = made({"expiry": (1.0,)}, [event("expiry", pay("cap"), condition="given(cap) and spot > cap"),
                                         event("expiry", pay("1"))])
    assert unroll(optional, nodes=()).faults == ()
    amount = pay("spot + cap")
    (fault,) = unroll(made({"expiry": (1.0,)}, [event("expiry", amount)]), nodes=()).faults
    assert fault.place == amount.amount.right.place and "'cap' is not given" in fault.text


def test_per_date_terms_take_the_entry_of_their_date():
    """A step-down barrier is read by date, also through another schedule's date; elsewhere it is a fault."""
    dates = {"observations": (0.5, 1.0), "expiry": (1.0,), "other": (0.7,)}
    terms = {"barrier": figures(90.0, 80.0, per_date=True)}
    per = {"barrier": "observations"}
    dated = made(dates, [event("observations", pay("barrier")), event("expiry", pay("barrier * 10"))], terms=terms,
                 per=per)
    assert results(dated, {})["price"] == pytest.approx(discounted((90.0, 0.5), (80.0, 1.0), (800.0, 1.0)))
    wrong = made(dates, [event("other", pay("barrier"))], terms=terms, per=per)
    assert "one value for each date of 'observations'" in texts(unroll(wrong, nodes=()))[0]


PATH = {0: {0.0: 100.0, 0.5: 80.0, 1.0: 120.0, 1.5: 90.0}}
DATES = {"all": (0.0, 0.5, 1.0, 1.5), "expiry": (1.5,)}


@pytest.mark.parametrize(
    ("how", "what", "start", "value"),
    [
        ("average", "spot", "", 97.5),
        ("average", "spot", "110", 100.0),
        ("total", "spot", "", 390.0),
        ("total", "spot > 95", "", 2.0),
        ("product", "spot / 100", "", 0.8 * 1.2 * 0.9),
        ("lowest", "spot", "", 80.0),
        ("lowest", "spot", "70", 70.0),
        ("highest", "spot", "", 120.0),
        ("ever", "spot > 115", "", 1.0),
        ("ever", "spot > 120", "", 0.0),
        ("always", "spot >= 80", "", 1.0),
        ("always", "spot > 80", "", 0.0),
        ("latest", "spot", "70", 90.0),
        ("total", "previous(spot, 3)", "", 3.0 + 100.0 + 80.0 + 120.0),
        ("total", "previous(previous(spot, 1), 2)", "", 2.0 + 1.0 + 100.0 + 80.0),
        ("total", "previous(spot, 3) if nth > 2 else 0", "", 80.0 + 120.0),
    ],
)
def test_running_values(how: str, what: str, start: str, value: float):
    """Each kind of running value on four dates, with and without an earlier value."""
    paid = "1 if x else 0" if how in ("ever", "always") else "x"
    dated = made(DATES, [event("expiry", pay(paid))], [running("x", how, what, "all", start)])
    assert results(dated, PATH)["price"] == pytest.approx(discounted((value, 1.5)))


def test_running_values_see_those_above_already_updated():
    """On one date running values are updated in file order, before the events."""
    values = [running("low", "lowest", "spot", "all"), running("drops", "total", "spot == low", "all")]
    dated = made(DATES, [event("expiry", pay("drops"))], values)
    assert results(dated, PATH)["price"] == pytest.approx(discounted((2.0, 1.5)))


def test_a_running_value_read_too_early_is_a_fault():
    """Before its first date it has no value."""
    low = running("x", "lowest", "spot", "late")
    dated = made({"late": (1.0,), "early": (0.5,)}, [event("early", pay("x"))], [low])
    assert texts(unroll(dated, nodes=())) == ["'x' is read before its first date"]


def test_running_values_may_hold_one_number_for_each_asset():
    """The lowest level of each asset, then the best of them."""
    dated = made({"all": (0.5, 1.0)}, [event("all", pay("best(low)"), part="last")],
                 [running("low", "lowest", "spot", "all")], assets=("north", "south"))
    levels = {0: {0.5: 100.0, 1.0: 90.0}, 1: {0.5: 70.0, 1.0: 95.0}}
    assert results(dated, levels)["price"] == pytest.approx(discounted((90.0, 1.0)))


def test_memory_coupons():
    """Missed coupons are counted by `set` and paid with the next one; `set` reads all before it writes."""
    coupon = event("all", pay("1 + missed"), set_to(missed="0", seen="missed"), condition="spot >= 100",
                   otherwise=(set_to(missed="missed + 1"),), name="coupon paid")
    values = [running("missed", "set", start="0"), running("seen", "set", start="0")]
    dated = made(DATES, [coupon, event("expiry", pay("100 * missed + 10 * seen"))], values)
    found = results(dated, PATH)
    assert found["price"] == pytest.approx(discounted((1.0, 0.0), (2.0, 1.0), (110.0, 1.5)))
    assert found["condition: coupon paid"] == 1.0
    days = [f"condition: coupon paid @ {day}" for day in ("0y", "0.5y", "1y", "1.5y")]
    assert [found[day] for day in days] == [1.0, 0.0, 1.0, 0.0]


CALL = event("all", pay("1", leg="redemption"), end(), pay("77"), condition="spot > 110", name="called")


def test_end_stops_everything_after_it():
    """After `end` nothing is owed: actions behind it, later events of the day, later days. Conditions stop too."""
    events = [event("all", pay("10", leg="coupon")), CALL, event("all", pay("1000", leg="late"), name="late")]
    found = results(made(DATES, events), PATH)
    assert found["leg: coupon"] == pytest.approx(discounted((10.0, 0.0), (10.0, 0.5), (10.0, 1.0)))
    assert found["leg: redemption"] == pytest.approx(discounted((1.0, 1.0)))
    assert found["leg: late"] == pytest.approx(discounted((1000.0, 0.0), (1000.0, 0.5)))
    assert found["price"] == pytest.approx(sum(found[f"leg: {leg}"] for leg in ("coupon", "redemption", "late")))
    assert [found[f"end @ {day}"] for day in ("0y", "0.5y", "1y", "1.5y")] == [0.0, 0.0, 1.0, 0.0]
    assert found["condition: late @ 1y"] == 0.0 and found["condition: late"] == 1.0


@pytest.mark.parametrize(("level", "life"), [(120.0, 1.0 + 0.02), (100.0, 1.5 + 0.02)])
def test_life_runs_to_the_payment(level: float, life: float):
    """The life ends when the ending's own payment is made, or with the last payment of all."""
    dated = made(DATES, [CALL, event("expiry", pay("1"))], lag=0.02)
    assert results(dated, {0: PATH[0] | {1.0: level}})["life"] == pytest.approx(life)


def test_life_is_that_of_the_ending_s_own_payment():
    """Another amount of the same day that is due later does not lengthen it; without a payment of its own it does."""
    dates, coupon = {"first": (0.5,), "expiry": (2.0,)}, event("first", pay("1", due="expiry"))
    own = made(dates, [coupon, event("first", pay("1"), end())])
    bare = made(dates, [coupon, event("first", end())])
    assert results(own, {})["life"] == 0.5 and results(bare, {})["life"] == 2.0


def test_an_unconditional_end_drops_the_rest():
    """What comes after it is not on the tape at all."""
    events = [event("first", pay("1"), end()), event("expiry", pay("spot"))]
    unrolled = unroll(made({"first": (0.5,), "expiry": (1.0,)}, events), nodes=())
    assert unrolled.grid.times == (0.0,)
    assert [output.name for output in unrolled.tape.outputs] == ["price", "leg: payment", "end @ 0.5y", "life"]


def test_payments_are_discounted_from_when_they_are_due():
    """A payment fixed early and due at expiry is discounted from expiry, and still paid after an end."""
    events = [event("first", pay("spot", due="expiry")), event("first", pay("0"), end()), event("expiry", pay("9"))]
    dated = made({"first": (0.5,), "expiry": (2.0,)}, events)
    assert results(dated, {0: {0.5: 80.0}})["price"] == pytest.approx(discounted((80.0, 2.0)))


def test_parts_are_sorted_where_any_is_stated():
    """Legs with a part go to it, the others are unsorted; without any part there is no such output."""
    events = [event("expiry", pay("1", "redemption", "bond")), event("expiry", pay("0.2", "bonus"))]
    found = results(made(DATES, events), PATH)
    assert found["part: bond"] == pytest.approx(discounted((1.0, 1.5)))
    assert found["part: unsorted"] == pytest.approx(discounted((0.2, 1.5)))
    assert not any(name.startswith("part") for name in results(made(DATES, [CALL]), PATH))


def test_what_stands_below_a_certain_end_is_not_reached():
    """It may read what has no value there, since nobody asks."""
    dated = made({"t": (1.0, 2.0), "late": (2.0,)}, [event("t", end()), event("t", pay("1"), condition="average > 1")],
                 [running("average", "average", "spot", "late")])
    assert unroll(dated, nodes=()).faults == ()


def test_an_event_in_both_branches_ends_whatever_happens():
    """`end` on both sides of a condition ends everywhere."""
    both = event("all", pay("1"), end(), condition="spot > 100", otherwise=(pay("2"), end()), part="first")
    found = results(made(DATES, [both, event("expiry", pay("50"))]), PATH)
    assert found["price"] == pytest.approx(2.0) and found["end @ 0y"] == 1.0


def test_many_ends_are_grouped_by_year():
    """More than 64 dates are reported by year, each year's flag the union of its dates'."""
    days = tuple(k / 100.0 for k in range(1, 201))
    unrolled = unroll(made({"all": days}, [CALL, event("all", pay("1"), part="last")]), nodes=())
    names = [output.name for output in unrolled.observed.outputs]
    assert [name for name in names if name.startswith("end")] == ["end @ 0y to 1y", "end @ 1y to 2y", "end @ 2y to 3y"]
    assert [name for name in names if name.startswith("condition")] == ["condition: called"]


def test_the_last_level_of_each_asset_is_an_output():
    """For the martingale test: asset, time and the output's name; an asset read today only has none."""
    events = [event("fixings", pay("of(spot, north)")), event("now", pay("of(spot, south)"))]
    dated = made({"fixings": (0.5, 1.0), "now": (0.0,)}, events, assets=("north", "south"))
    unrolled = unroll(dated, nodes=())
    assert unrolled.levels == {"level: north": (0, 1.0)}
    assert unrolled.grid.assets == (0,)


def test_dates_before_the_valuation_are_a_fault():
    """A past date needs a fixing."""
    dated = made({"all": (-0.5, 1.0)}, [event("all", pay("spot"))])
    assert texts(unroll(dated, nodes=())) == ["observed on -0.5y, before the valuation date"]


WATCHED = {"x": (0.0, 1.0)}


@pytest.mark.parametrize(
    ("how", "what", "side", "extreme", "value"),
    [
        ("lowest", "spot", "low", 70.0, 70.0),
        ("highest", "spot / initial", "high", 130.0, 1.3),
        ("lowest", "initial / spot", "high", 130.0, 100.0 / 130.0),
        ("highest", "-log(spot)", "low", 70.0, -math.log(70.0)),
        ("lowest", "(spot - initial) * 2 - 1", "low", 70.0, -61.0),
        ("lowest", "max(spot, 80)", "low", 70.0, 80.0),
        ("highest", "1 / (spot * spot)", "low", 70.0, 1.0 / 4900.0),
        ("ever", "spot < 80", "low", 70.0, 1.0),
        ("ever", "spot < 70", "low", 70.0, 0.0),
        ("ever", "spot <= 70", "low", 70.0, 1.0),
        ("ever", "140 <= spot", "high", 140.0, 1.0),
        ("ever", "not spot > 80", "low", 70.0, 1.0),
        ("always", "spot > 70", "low", 70.0, 0.0),
        ("always", "spot / initial >= 0.7", "low", 70.0, 1.0),
        ("always", "worst(spot) < 140 and best(spot) < 120", "high", 119.0, 1.0),
        ("ever", "spot < barrier if side == 'down' else spot > barrier", "low", 70.0, 1.0),
    ],
)
def test_continuous_watches_read_the_deciding_extreme(how: str, what: str, side: str, extreme: float, value: float):
    """Whatever rises or falls with one asset's level is decided by its minimum or its maximum."""
    paid = "1 if x else 0" if how in ("ever", "always") else "x"
    terms = {"initial": figures(100.0), "barrier": figures(90.0), "side": word("down")}
    dated = made({"expiry": (1.0,)}, [event("expiry", pay(paid))], [running("x", how, what, "expiry")], terms=terms,
                 watched=WATCHED)
    found = results(dated, {side: {(0, 0.0, 1.0): extreme}, 0: {1.0: 100.0}})
    assert found["price"] == pytest.approx(discounted((value, 1.0)))
    (note,) = unroll(dated, nodes=()).watches
    assert (note.asset, note.side, note.law) == ("north", side, "exact")


def test_a_watch_read_inside_its_window_covers_up_to_that_day():
    """Pieces between the days of reading, none past the end; on the first day the level itself."""
    dates = {"asked": (0.25, 0.5, 1.0, 2.0)}
    dated = made(dates, [event("asked", pay("x"))], [running("x", "lowest", "spot", "asked", start="95")],
                 watched={"x": (0.25, 1.0)})
    levels = {"low": {(0, 0.25, 0.5): 90.0, (0, 0.5, 1.0): 80.0}, 0: {0.25: 92.0, 1.0: 85.0}}
    found = results(dated, levels)
    assert found["price"] == pytest.approx(discounted((92.0, 0.25), (90.0, 0.5), (80.0, 1.0), (80.0, 2.0)))


@pytest.mark.parametrize(
    ("what", "assets", "words"),
    [
        ("spot < 80 or spot > 120", 1, "the joint law of minimum and maximum"),
        ("abs(spot - 100) > 20", 1, "the joint law of minimum and maximum"),
        ("worst(spot) < 80", 2, "several assets"),
        ("spot < level_then", 1, "'level_then' is not fixed"),
        ("spot == 80", 1, "cannot be watched continuously"),
        ("1 < 2", 1, "needs a formula of an asset's level"),
        ("spot * (spot - 100) < 3", 1, "sign is not known"),
    ],
)
def test_watches_without_a_known_law_are_refused(what: str, assets: int, words: str):
    """Nothing falls back to dates in silence: the refusal says what is missing."""
    values = [running("level_then", "latest", "best(spot)", "now"), running("x", "ever", what, "now")]
    dated = made({"now": (0.0,), "expiry": (1.0,)}, [event("expiry", pay("1 if x else 0"))], values,
                 assets=("north", "south")[:assets], watched=WATCHED)
    (text,) = texts(unroll(dated, nodes=()))
    assert words in text


def watches(*windows: tuple[str, float, float], read: str) -> Unrolled:
    """A contract with several watches of north and south."""
    values = [running(f"x{k}", "ever", what, "expiry") for k, (what, *_) in enumerate(windows)]
    watched = {f"x{k}": (start, until) for k, (_, start, until) in enumerate(windows)}
    return unroll(made({"expiry": (2.0,)}, [event("expiry", pay(read))], values, assets=("north", "south"),
                       watched=watched), nodes=())


def test_two_watches_without_a_joint_law_are_refused_where_they_overlap():
    """Both sides of one asset, or two assets, over one stretch of time; one after the other they are exact."""
    read = "1 if x0 and x1 else 0"
    low, high, other = "of(spot, north) < 80", "of(spot, north) > 120", "of(spot, south) < 80"
    assert "minimum and maximum" in texts(watches((low, 0.0, 1.0), (high, 0.5, 2.0), read=read))[0]
    assert "several assets" in texts(watches((low, 0.0, 1.0), (other, 0.5, 2.0), read=read))[0]
    assert watches((low, 0.0, 1.0), (high, 1.0, 2.0), read=read).faults == ()
    assert watches((low, 0.0, 1.0), ("of(spot, north) < 70", 0.5, 2.0), read=read).faults == ()
    inner = watches((low, 0.0, 1.0), ("of(spot, north) < 70", 0.2, 0.4), (other, 0.6, 0.8),
                    read="1 if (x0 and x1) and x2 else 0")
    assert "several assets" in texts(inner)[0]  # a watch inside another does not end it
    unread = watches((low, 0.0, 1.0), (high, 0.5, 2.0), read="1 if x0 else 0")
    assert unread.faults == () and [note.law for note in unread.watches] == ["exact", "unread"]


def test_faults_are_listed_together_and_once():
    """A fault that shows on every date is one fault; all are reported."""
    dated = made(DATES, [event("all", pay("cap")), event("all", pay("floor"))])
    assert len(unroll(dated, nodes=()).faults) == 2


def test_lets_are_evaluated_anew_where_they_are_used():
    """A `let` reads the level and the running values of the date on which it is used."""
    dated = made(DATES, [event("all", pay("perf"), part="but_first")], lets={"perf": "spot / 100"})
    assert results(dated, PATH)["price"] == pytest.approx(discounted((0.8, 0.5), (1.2, 1.0), (0.9, 1.5)))


def test_formula_places_reach_the_tape():
    """A comparison on the tape knows its line."""
    asked = formula("spot > 100")
    one = event("expiry", pay("1"), condition="spot > 100")
    object.__setattr__(one, "condition", asked)
    tape = unroll(made(DATES, [one]), nodes=()).tape
    assert [step.place for step in tape.instructions if step.op is Op.LT] == [asked.place]
