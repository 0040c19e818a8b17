"""The life of a trade: history by fixings against the same state written in by hand, day by day; continuity through
observation dates; values of the future, with what was paid, are a martingale over simulated histories."""

from __future__ import annotations

from dataclasses import replace
from datetime import date, timedelta
from math import exp, log, pi, sqrt

import numpy as np
import pytest
from front_door import EXAMPLES
from helpers import Ready, prepare, ready_of, request_of
from scipy.special import ndtr, ndtri

import mcx
from mcx.checked.load import Request

SEED, PATHS = 20261201, 4096
RATE, YIELD, VOL, SPREAD = 0.021, 0.024, 0.2, 0.008
HEAD = """currency: EUR
notional: 100
assets: [harbour]
start: 2026-12-01
settlement: 5 business days
calendar: {holidays: none, roll: following}
"""
AUTOCALL = f"""contract: note
{HEAD}payoff: autocall
terms:
  initial: 100
  observations: {{from: 2027-03-01, until: 2028-12-01, every: 3 months}}
  first_call: 2027-06-01
  call_barrier: 102%
  coupon_barrier: 90%
  coupon: 2.5%
  memory: true
  knock_in: 70%
  watched: {{from: 2027-03-01, until: 2028-12-01, every: 3 months}}
  strike: 100%
---
"""
TAIL = f"""contract: tail
{HEAD}payoff: capital_protection
terms:
  initial: 100
  weights: 100%
  averaging: [2027-03-01, 2027-06-01, 2027-09-01, 2027-12-01]
  protection: 90%
  participation: 100%
  strike: 95%
---
"""


def market(today: date, spot: float, fixings: dict[str, float] | None = None, vol: float = VOL) -> str:
    """A flat market on a day; only fixings up to that day."""
    known = {day: level for day, level in (fixings or {}).items() if day <= str(today)}
    lines = ", ".join(f"{day}: {level!r}" for day, level in known.items())
    return (f"market: {today}\nrates: {{EUR: {RATE:.4%}}}\nfunding: {{EUR: {SPREAD:.4%}}}\n"
            f"assets: {{harbour: {{spot: {spot!r}, currency: EUR, yield: {YIELD:.4%}, vol: {vol:.8%}}}}}\n"
            + (f"fixings: {{harbour: {{{lines}}}}}\n" if known else ""))


def exact(text: str) -> float:
    """The price on a seed."""
    return prepare(text).price(PATHS, SEED).mean


def on(request: Request, today: date, spot: float, fixings: dict[str, float] | None = None) -> Ready:
    """The only contract of a request on another day of its flat market, with the fixings up to that day."""
    known = {date.fromisoformat(day): level for day, level in (fixings or {}).items() if day <= str(today)}
    asset = request.market.assets["harbour"]
    asset = replace(asset, spot=replace(asset.spot, value=spot))
    seen = replace(request.market, valuation=today, assets={"harbour": asset}, fixings={"harbour": known})
    return ready_of(replace(request, market=seen))


# The state written in by hand

HISTORY = {"2027-03-01": 88.4, "2027-06-01": 97.2, "2027-09-01": 84.9, "2027-12-01": 83.1, "2028-03-01": 80.2}
BY_HAND = """payoff: by_hand
terms:
  observations: {type: dates}
  missed: {type: percent}
  touched: {type: flag}
let:
  performance: spot / 100
running:
  hit: {ever: performance < 70%, at: observations}
  owing: {start: missed}
events:
  - at: observations
    if: performance >= 90%
    then:
      - pay: 2.5% + owing
      - set: {owing: 0}
    else:
      - set: {owing: owing + 2.5%}
  - at: observations
    if: performance >= 102%
    then:
      - pay: 1
      - end
  - at: observations.last
    pay: 1
  - at: observations.last
    if: hit or touched
    then:
      - pay: min(performance - 1, 0)
---
"""


OBSERVED = [date(2027, 3, 1), date(2027, 6, 1), date(2027, 9, 1), date(2027, 12, 1), date(2028, 3, 1), date(2028, 6, 1),
            date(2028, 9, 1), date(2028, 12, 1)]


def by_hand(today: date, fixings: dict[str, float], touched: bool = False) -> str:
    """A new contract with the dates that are left and the state that the fixings have made of the old one."""
    missed = 0.0
    for day in OBSERVED:
        if day <= today and str(day) in fixings:
            missed = 0.0 if fixings[str(day)] >= 90 else missed + 0.025
    left = ", ".join(str(day) for day in OBSERVED if day > today)
    return BY_HAND + (f"contract: new\n{HEAD}payoff: by_hand\nterms:\n  observations: [{left}]\n"
                      f"  missed: {missed:.4%}\n  touched: {str(touched).lower()}\n---\n".replace(
                          "start: 2026-12-01", f"start: {today}"))


def weekdays(first: date, last: date) -> list[date]:
    days = (first + timedelta(days=k) for k in range((last - first).days + 1))
    return [day for day in days if day.weekday() < 5]


@pytest.mark.parametrize(("low", "days"), [(80.2, weekdays(date(2027, 3, 1), date(2028, 3, 31))),
                                           (69.5, weekdays(date(2027, 8, 23), date(2027, 12, 3)))])
def test_day_by_day_along_a_history_the_value_is_that_of_a_new_contract_with_its_state(low: float, days: list[date]):
    """Every business day, on the same numbers to the last digits: missed coupons, a touched barrier. The coupon
    observed on 2027-06-01 is paid five business days later and owed until then."""
    history = {**HISTORY, "2027-09-01": low}
    old = request_of(AUTOCALL + market(date(2026, 12, 1), 100.0))
    for day in days:
        if day == days[0] or day in OBSERVED:
            touched = low < 70 and day >= date(2027, 9, 1)
            new = request_of(by_hand(day, history, touched) + market(day, 100.0))
        spot = 85.0 + (day.toordinal() * 7919 % 13)
        found = on(old, day, spot, history)
        due = (date(2027, 6, 8) - day).days / 365
        owed = 0.05 * exp(-(RATE + SPREAD) * due) if date(2027, 6, 1) <= day <= date(2027, 6, 8) else 0.0
        fresh = on(new, day, spot).price(64, SEED).mean
        assert found.price(64, SEED).mean == pytest.approx(fresh + owed, rel=1e-12), day
        assert ("owed" in found.names) == bool(owed)


def test_day_by_day_an_average_is_what_its_fixings_leave_of_it():
    """Every day of the averaging, on the same numbers: the note with its fixings is one of fewer dates whose payment
    holds their sum."""
    own = ("payoff: rest\nterms: {averaging: {type: dates}, fixed: {type: number}}\nrunning:\n"
           "  sum: {total: spot, at: averaging}\nevents:\n  - at: averaging.last\n"
           "    pay: 90% + max((sum + fixed) / 400 - 95%, 0)\n---\n")
    dates = OBSERVED[:4]
    old = request_of(TAIL + market(date(2026, 12, 1), 100.0))
    for day in weekdays(date(2026, 12, 2), date(2027, 11, 30)):
        if day == date(2026, 12, 2) or day in dates:
            fixed = sum(HISTORY[str(each)] for each in dates if each <= day)
            left = ", ".join(str(each) for each in dates if each > day)
            terms = f"terms: {{averaging: [{left}], fixed: {fixed!r}}}\n---\n"
            new = request_of(own + f"contract: new\n{HEAD}payoff: rest\n{terms}" + market(day, 100.0))
        spot = 85.0 + (day.toordinal() * 7919 % 13)
        prices = [on(old, day, spot, HISTORY).price(64, SEED).mean, on(new, day, spot).price(64, SEED).mean]
        assert prices[0] == pytest.approx(prices[1], rel=1e-12), day


def test_averages_so_far():
    """Fixings of an average against the same numbers written in as an earlier average."""
    asian = """contract: a
currency: EUR
units: 1
assets: [harbour]
start: 2026-12-01
settlement: 5 business days
calendar: {holidays: none, roll: following}
payoff: asian
terms: {side: call, average_type: TYPE, strike_type: fixed, strike: 95, averaging: [AVERAGING], expiry: 2027-12-01MORE}
---
"""
    dates = ("2027-03-01", "2027-06-01", "2027-09-01", "2027-12-01")
    for kind, mean in (("arithmetic", (88.4 + 97.2) / 2), ("geometric", sqrt(88.4 * 97.2))):
        today = date(2027, 7, 5)
        old = asian.replace("TYPE", kind).replace("AVERAGING", ", ".join(dates)).replace("MORE", "")
        new = asian.replace("TYPE", kind).replace("AVERAGING", ", ".join(dates[2:])).replace(
            "MORE", f", earlier_average: {mean!r}, earlier_count: 2")
        assert exact(old + market(today, 96.0, HISTORY)) == pytest.approx(
            exact(new + market(today, 96.0)), rel=1e-12)


# Continuity through each observation date


@pytest.mark.parametrize("observed", [date(2027, 3, 1), date(2027, 6, 1), date(2027, 9, 1), date(2027, 12, 1)])
@pytest.mark.parametrize("contract", [AUTOCALL, TAIL])
def test_value_is_continuous_through_an_observation(contract: str, observed: date):
    """Without vol to speak of the level moves by its forward alone: the value the day before, on the day with and
    without its fixing, and the day after differ by a day's interest, nothing else."""
    def spot(day: date) -> float:
        return 97.3 * exp((RATE - YIELD) * (day - date(2026, 12, 1)).days / 365)

    history = {str(day): spot(day) for day in (date(2027, 3, 1), date(2027, 6, 1), date(2027, 9, 1), date(2027, 12, 1))}

    def value(day: date, fixed: bool) -> float:
        known = {when: level for when, level in history.items() if when < str(day) or (fixed and when == str(day))}
        return exact(contract + market(day, spot(day), known, vol=1e-8))

    before, after = observed - timedelta(days=1), observed + timedelta(days=1)
    values = [value(before, True) * exp((RATE + SPREAD) / 365), value(observed, False), value(observed, True),
              value(after, True) * exp(-(RATE + SPREAD) / 365)]
    assert values == pytest.approx([values[0]] * 4, rel=1e-9)


@pytest.mark.parametrize("spot", [91.0, 97.3, 101.5])
@pytest.mark.parametrize("contract", [AUTOCALL, TAIL])
def test_the_fixing_of_the_day_changes_nothing_but_what_is_known(contract: str, spot: float):
    """With its vol: on the day with a fixing at the spot and without it the value is the same on the same numbers, and
    the value the day before is the mean of the values over the fixing to come, near a coupon barrier and the call as
    elsewhere, on 128 strata of that day's move. The day after nothing but a day's time has gone."""
    today = date(2027, 9, 1)
    early = {day: level for day, level in HISTORY.items() if day < str(today)}
    request = request_of(contract + market(date(2026, 12, 1), 100.0))
    on_the_day, fixed = (on(request, today, spot, each) for each in (early, early | {str(today): spot}))
    assert on_the_day.price(PATHS, SEED).mean == pytest.approx(fixed.price(PATHS, SEED).mean, rel=1e-12)
    before = on(request, today - timedelta(days=1), spot, early).price(1 << 16, SEED)
    moves = ndtri((np.arange(128) + np.random.default_rng(7).random(128)) / 128)
    found = []
    for number, move in enumerate(moves):
        level = spot * exp((RATE - YIELD - VOL**2 / 2) / 365 + VOL * sqrt(1 / 365) * move)
        then = on(request, today, level, early | {str(today): level})
        found.append(then.price(256, SEED + number).mean * exp(-(RATE + SPREAD) / 365))
    error = np.std(np.diff(found), ddof=1) / sqrt(2 * len(found))  # of neighbours: the strata hardly differ
    assert abs(np.mean(found) - before.mean) < 4 * sqrt(error**2 + before.error**2)
    assert error < 1e-3
    after = on(request, today + timedelta(days=1), spot, early | {str(today): spot})
    paid = [each.amount for each in after.unrolled.state.payments if each.day.date == today]
    assert abs(after.price(PATHS, SEED).mean - fixed.price(PATHS, SEED).mean) < 2e-3
    assert len(paid) == (contract is AUTOCALL and spot >= 90)


# A martingale over histories


@pytest.mark.parametrize(("contract", "dates"), [
    (AUTOCALL, ("2027-03-01", "2027-06-01", "2027-09-01")), (TAIL, ("2027-03-01", "2027-06-01", "2027-09-01"))])
def test_value_and_what_was_paid_is_a_martingale(contract: str, dates: tuple[str, ...]):
    """Today's value is the mean, over simulated histories up to a later day, of the value then and what was paid
    until then, both discounted."""
    start, then = date(2026, 12, 1), date(2027, 9, 20)
    days = [date.fromisoformat(each) for each in dates]
    times = [(day - start).days / 365 for day in (*days, then)]
    normals = np.random.default_rng(7).standard_normal((240, len(times)))
    steps = np.diff([0.0, *times])
    logs = np.log(100.0) + np.cumsum((RATE - YIELD - VOL**2 / 2) * steps + VOL * np.sqrt(steps) * normals, axis=1)
    found = []
    request = request_of(contract + market(start, 100.0))
    for number, levels in enumerate(np.exp(logs)):
        history = dict(zip(dates, map(float, levels), strict=False))
        ready = on(request, then, float(levels[-1]), history)
        value = ready.price(512, SEED + number).mean * exp(-(RATE + SPREAD) * times[-1])
        found.append(value + paid_before(ready, start))
    mean, error = np.mean(found), np.std(found, ddof=1) / sqrt(len(found))
    today = prepare(contract + market(start, 100.0)).price(1 << 16, SEED)
    assert abs(mean - today.mean) < 4 * sqrt(error**2 + today.error**2)
    assert error < 0.015


def test_it_is_a_martingale_under_cash_dividends_and_a_quanto():
    """What is left of the spot without its dividends is lognormal and drifts under the measure of the contract's
    currency; the level is that and the dividends still to come, at the growth in the asset's own."""
    start, then = date(2026, 12, 1), date(2027, 9, 20)
    own, pull, exes = 0.04, -0.8 * VOL * 0.09, (date(2027, 5, 10), date(2027, 11, 10))

    def to_come(day: date) -> float:
        return sum(2.5 * exp(-own * (ex - day).days / 365) for ex in exes if ex > day)

    asset = (f"currency: USD, dividends: [{', '.join(f'{{ex: {ex}, cash: 2.5}}' for ex in exes)}], "
             "quanto: {fx_vol: 9%, fx_correlation: -80%, fx: EUR per USD}")
    now, later = (request_of(TAIL + market(day, 100.0).replace(f"currency: EUR, yield: {YIELD:.4%}", asset).replace(
        f"EUR: {RATE:.4%}}}\nfunding", f"EUR: {RATE:.4%}, USD: 4%}}\nfunding")) for day in (start, then))
    days = [*OBSERVED[:3], then]
    times = np.array([(day - start).days / 365 for day in days])
    steps = np.diff([0.0, *times])
    normals = np.random.default_rng(11).standard_normal((480, len(times)))
    logs = np.cumsum((own - pull - VOL**2 / 2) * steps + VOL * np.sqrt(steps) * normals, axis=1)
    found = []
    for number, path in enumerate((100.0 - to_come(start)) * np.exp(logs)):
        levels = [float(left) + to_come(day) for left, day in zip(path, days, strict=True)]
        history = {str(day): level for day, level in zip(days[:3], levels, strict=False)}
        value = on(later, then, levels[-1], history).price(256, SEED + number).mean
        found.append(value * exp(-(RATE + SPREAD) * times[-1]))
    today = ready_of(now).price(1 << 16, SEED)
    moved = np.exp(logs - (own - pull) * times) - 1.0  # of mean zero, so that they sharpen the mean as controls
    (mean, *slopes), *_ = np.linalg.lstsq(np.column_stack([np.ones(len(found)), moved]), found, rcond=None)
    left_over = found - mean - moved @ slopes
    error = np.std(left_over, ddof=5) / sqrt(len(found))
    assert abs(mean - today.mean) < 4 * sqrt(error**2 + today.error**2)
    assert error < 0.002


def test_it_is_a_martingale_where_the_contract_states_what_it_hit():
    """A barrier watched all the time: what lies before the later day is drawn by the law of a bridge, and stated."""
    start, then, level = date(2026, 12, 1), date(2027, 9, 20), 80.0
    contract = ("contract: watched\n" + HEAD.replace("settlement", "HAPPENEDday_count: Actual/360\nsettlement")
                + "payoff: barrier_reverse_convertible\nterms: {initial: 100, strike: 100%, knock_in: 80%, coupon: 6%, "
                "watched: {continuous: [2026-12-01, final]}, coupon_dates: [2027-06-01, 2027-12-01], "
                "final: 2027-12-01, maturity: final}\n---\n")
    stated = {hit: request_of(contract.replace("HAPPENED", f"happened: {{hit: {{{then}: {hit}}}}}\n")
                              + market(then, 100.0)) for hit in ("true", "false")}
    time = (then - start).days / 365
    rng = np.random.default_rng(5)
    logs = (RATE - YIELD - VOL**2 / 2) * time + VOL * sqrt(time) * rng.standard_normal(240)
    found = []
    for number, (log_level, uniform) in enumerate(zip(logs, rng.random(240), strict=True)):
        above, ends = log(100.0 / level), log_level + log(100.0 / level)
        hit = ends <= 0.0 or uniform < exp(-2 * above * ends / (VOL**2 * time))
        ready = on(stated["true" if hit else "false"], then, 100.0 * exp(log_level))
        value = ready.price(256, SEED + number).mean * exp(-(RATE + SPREAD) * time)
        found.append(value + paid_before(ready, start))
    today = prepare(contract.replace("HAPPENED", "") + market(start, 100.0)).price(1 << 16, SEED)
    error = np.std(found, ddof=1) / sqrt(len(found))
    assert abs(np.mean(found) - today.mean) < 4 * sqrt(error**2 + today.error**2)
    assert error < 0.01


def paid_before(ready: Ready, start: date) -> float:
    """What a contract has paid before the valuation date, discounted to its start."""
    return sum(each.amount * exp(-(RATE + SPREAD) * (each.due.date - start).days / 365)
               for each in ready.unrolled.state.payments if not each.owed)


# The end


def test_a_called_note_is_worth_what_is_owed_and_then_nothing():
    """Called on 2027-06-01: the redemption and the coupon until their payment date, that day included; then nothing."""
    history = {"2027-03-01": 95.0, "2027-06-01": 104.0}
    for day, owed in ((date(2027, 6, 1), 1.025), (date(2027, 6, 8), 1.025), (date(2027, 6, 9), 0.0),
                      (date(2028, 12, 24), 0.0)):
        found = prepare(AUTOCALL + market(day, 77.0, history))
        due = (date(2027, 6, 8) - day).days / 365
        assert found.price(64, SEED).mean == pytest.approx(owed * exp(-(RATE + SPREAD) * due), rel=1e-14)
        assert found.unrolled.grid.assets == ()  # nothing is simulated
        assert str(found.unrolled.state.ended) == "2027-06-01"


@pytest.mark.parametrize(("today", "said"), [(date(2027, 12, 8), False), (date(2027, 12, 9), True)])
def test_after_its_last_payment_a_contract_is_worth_nothing(tmp_path, today: date, said: bool):
    """All is fixed, all is paid, and the result says so; on the day of the payment it is still owed."""
    file = tmp_path / "case.yaml"
    file.write_text(TAIL + market(today, 77.0, HISTORY))
    found = mcx.price(file, paths=64)
    assert (found.price == 0.0) == said
    assert ("all dates of the contract have passed, the last of them on 2027-12-08: it is worth nothing any more"
            in found.assumptions) == said


# Sensitivities under fixings


def lines(folder, text: str, paths: int = 1 << 12) -> dict[tuple[str, str, str], float]:
    """Every sensitivity by name, asset and tenor."""
    file = folder / "case.yaml"
    file.write_text(text)
    return {(each.name, each.asset, each.tenor): each for each in mcx.greeks(file, paths=paths, seed=SEED).greeks}


def test_sensitivities_with_history_are_those_of_a_new_contract_with_its_state(tmp_path):
    """On the same numbers, likelihood ratios with their controls: fixings are constants to both."""
    today = date(2027, 10, 4)
    old = lines(tmp_path, AUTOCALL + market(today, 93.0, HISTORY))
    new = lines(tmp_path, by_hand(today, HISTORY) + market(today, 93.0))
    assert old.keys() == new.keys()
    for key, found in old.items():
        assert found.value == pytest.approx(new[key].value, rel=1e-9, abs=1e-12), key
        assert found.standard_error == pytest.approx(new[key].standard_error, rel=1e-9, abs=1e-12), key


def test_sensitivities_of_an_average_with_one_fixing_to_come(tmp_path):
    """It is a fourth of a call: delta, vega, rho and funding by Black's formula."""
    today, spot = date(2027, 9, 20), 104.0
    time = (date(2027, 12, 1) - today).days / 365
    due = (date(2027, 12, 8) - today).days / 365
    strike = 4 * 95.0 - sum(HISTORY[day] for day in ("2027-03-01", "2027-06-01", "2027-09-01"))
    forward, df = spot * exp((RATE - YIELD) * time), exp(-(RATE + SPREAD) * due)
    deviation = VOL * sqrt(time)
    d1 = log(forward / strike) / deviation + deviation / 2
    value = df * (forward * ndtr(d1) - strike * ndtr(d1 - deviation)) / 4
    found = lines(tmp_path, TAIL + market(today, spot, HISTORY), 1 << 17)
    bond = df * 90
    by_forward = df * ndtr(d1) / 4
    for key, truth in {
        ("delta", "harbour", ""): by_forward * forward / spot,
        ("vega", "harbour", ""): 0.01 * df * forward * sqrt(time) * exp(-d1 * d1 / 2) / sqrt(2 * pi) / 4,
        ("rho", "EUR", ""): 1e-4 * (by_forward * forward * time - due * (value + bond)),
        ("funding", "EUR", ""): -1e-4 * due * (value + bond),
    }.items():
        assert abs(found[key].value - truth) < 4 * found[key].standard_error + 1e-12, key
        assert found[key].standard_error < 0.02 * abs(truth), key


def test_locked_returns_of_a_cliquet():
    """Returns of the past are locked by fixings: the same with the levels written into one payment."""
    head = AUTOCALL.split("payoff:")[0].replace("note", "c")
    own = ("payoff: locked\nterms: {resets: {type: dates}}\nrunning:\n  returns:\n    total: \"clip(spot / "
           "previous(spot, 100) - 1, -2%, 3%)\"\n    at: resets\nevents:\n  - {at: resets.last, pay: \"max(returns, "
           "0)\"}\n---\n")
    old = own + head + "payoff: locked\nterms: {resets: [2027-03-01, 2027-06-01, 2027-09-01]}\n---\n"
    today = date(2027, 7, 1)
    locked = sum(min(max(each, -0.02), 0.03) for each in (88.4 / 100 - 1, 97.2 / 88.4 - 1))
    new = own.replace("locked", "fresh").replace("previous(spot, 100)", "97.2").replace(
        "max(returns, 0)", f"max(returns + ({locked!r}), 0)") + head.replace("start: 2026-12-01", f"start: {today}") + (
        "payoff: fresh\nterms: {resets: [2027-09-01]}\n---\n")
    assert exact(old + market(today, 96.0, HISTORY)) == pytest.approx(exact(new + market(today, 96.0)), rel=1e-12)


@pytest.mark.parametrize(("day", "owed"), [(date(2027, 6, 3), 102.5), (date(2027, 7, 1), 0.0)])
def test_sensitivities_of_a_note_that_was_called(tmp_path, day: date, owed: float):
    """What is owed hangs on rates and funding alone; what is worth nothing on nothing."""
    history = {"2027-03-01": 95.0, "2027-06-01": 104.0}
    found = lines(tmp_path, AUTOCALL + market(day, 77.0, history))
    due = (date(2027, 6, 8) - day).days / 365
    by_rate = -1e-4 * due * owed * exp(-(RATE + SPREAD) * due)
    for key, value in found.items():
        truth = by_rate if key[0] in ("rho", "funding") else 0.0
        if key[0] != "theta":
            assert value.value == pytest.approx(truth, rel=1e-9, abs=1e-12), key
    assert ("delta", "harbour", "") in found


ABROAD = {
    "quanto": "dividends: [{ex: 2027-11-10, cash: 2.5}, {ex: 2028-05-10, cash: 2.5}], "
              "quanto: {fx_vol: 9%, fx_correlation: -20%, fx: EUR per USD}",
    "composite": "dividends: [{ex: 2027-11-10, cash: 2.5}, {ex: 2028-05-10, share: 2%}]",
}


@pytest.mark.parametrize("how", ABROAD)
def test_history_under_cash_dividends_and_other_currencies(tmp_path, how: str):
    """Price and sensitivities are those of the new contract with its state there as well. With a rate of exchange of 1
    on every past day a composite level has the same history."""
    today = date(2027, 10, 4)

    def abroad(text: str) -> str:
        text = text.replace(f"currency: EUR, yield: {YIELD:.4%}", f"currency: USD, {ABROAD[how]}")
        text = text.replace(f"rates: {{EUR: {RATE:.4%}}}", f"rates: {{EUR: {RATE:.4%}, USD: 4%}}")
        if how == "composite":
            rates = ", ".join(f"{day}: 1" for day in HISTORY)
            text = text.replace("payoff: autocall", "conversion: {harbour: composite}\npayoff: autocall").replace(
                "payoff: by_hand\nterms:\n  observations: [", "conversion: {harbour: composite}\npayoff: by_hand\n"
                "terms:\n  observations: [").replace("fixings: {", f"fixings: {{EUR per USD: {{{rates}}}, ")
            text += "fx: {EUR per USD: {spot: 1.02, vol: 8%}}\ncorrelation: {harbour/EUR per USD: 30%}\n"
        return text

    old, new = abroad(AUTOCALL + market(today, 93.0, HISTORY)), abroad(by_hand(today, HISTORY) + market(today, 93.0))
    assert exact(old) == pytest.approx(exact(new), rel=1e-12)
    found, other = lines(tmp_path, old), lines(tmp_path, new)
    assert found.keys() == other.keys() and len(found) > 5
    for key, each in found.items():
        assert each.value == pytest.approx(other[key].value, rel=1e-9, abs=1e-12), key


# The demo trades


def test_day_400_of_a_memory_autocall():
    """The first demo trade: two coupons paid, two missed and in memory, neither called nor knocked in."""
    file = EXAMPLES / "seasoned_autocall.yaml"
    state = mcx.readback(file).state
    assert (date.fromisoformat(state.valuation) - date(2026, 11, 16)).days == 400
    held = {(each.what, each.date): each.happened for each in state.past}
    assert [held["coupon paid", day] for day in ("2027-02-16", "2027-05-17", "2027-08-16", "2027-11-16")] == [
        "yes", "yes", "no", "no"]
    assert held["called", "2027-11-16"] == "no" and state.ended == ""
    assert {each.name: each.text for each in state.running} == {"hit": "no", "missed": "0.038"}
    found = mcx.price(file, paths=1 << 14)
    assert [each.date for each in found.ends][0] == "2028-02-16" and found.owed == ()


def test_a_note_inside_its_averaging_period():
    """The second: its initial level the lowest of three closes, seven of thirteen months fixed, the last of them on the
    valuation date itself."""
    file = EXAMPLES / "seasoned_asian_tail.yaml"
    state = mcx.readback(file).state
    dates = sorted({each.date for each in state.fixings})
    assert len([day for day in dates if day < "2024"]) == 3
    assert len([day for day in dates if day > "2027"]) == 7 and dates[-1] == state.valuation == "2027-12-01"
    text = mcx.price(file, paths=64).assumptions
    assert any("the observation on 2027-12-01, the valuation date, uses that day's fixing" in each for each in text)
