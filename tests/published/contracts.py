"""From a published case to the documents that describe it: a contract on a shipped definition, and its market.

A contract here is a name of a payoff and its terms; payoffs that only textbooks have are in `definitions.yaml`.
"""

from __future__ import annotations

from collections.abc import Callable
from itertools import combinations
from pathlib import Path

from published.cases import Case

DEFINITIONS = Path(__file__).parent / "definitions.yaml"
OWN = ("gap_option", "supershare", "share_on_touch", "digital_knock_in", "correlation_call", "two_asset_digital")

Terms = tuple[str, dict[str, object]]  # the payoff's name and its terms as written


def percent(value: float) -> str:
    return f"{100 * value:.15g}%"


def years(value: float) -> str:
    return f"{value!r}y"


def always_watched(c: dict) -> str:
    return f"{{continuous: [0y, {years(c['maturity'])}]}}"


def dates(c: dict, count: int, with_start: bool = False) -> str:
    """`count` equal steps to maturity, optionally with the start."""
    return f"{{{'from: 0y, ' if with_start else ''}count: {count}, until: {years(c['maturity'])}}}"


def european(c: dict) -> Terms:
    return "european", {"side": c["kind"], "strike": c["strike"]}


def gap_option(c: dict) -> Terms:
    return "gap_option", {"side": c["kind"], "trigger": c["trigger"], "strike": c["strike"]}


def cash_or_nothing(c: dict) -> Terms:
    return "digital", {"side": c["kind"], "pays": "cash", "amount": c["cash"], "strike": c["strike"]}


def asset_or_nothing(c: dict) -> Terms:
    return "digital", {"side": c["kind"], "pays": "asset", "amount": 1, "strike": c["strike"]}


def supershare(c: dict) -> Terms:
    return "supershare", {"lower": c["lower"], "upper": c["upper"]}


def touch_at_expiry(c: dict) -> Terms:
    where = {"direction": c["direction"], "barrier": c["barrier"], "watched": always_watched(c)}
    if c["pays"] == "asset":
        return "share_on_touch", {"touch": c["touch"], **where}
    return "touch", {"kind": "one touch" if c["touch"] == "in" else "no touch", "cash": c["cash"], **where}


def asian(average: str, strike: str) -> Callable[[dict], Terms]:
    def terms(c: dict) -> Terms:
        fixings = dates(c, c["fixings"], c.get("includes_start", False))
        stated = {"side": c["kind"], "average_type": average, "strike_type": strike, "averaging": fixings}
        return "asian", stated | ({"strike": c["strike"]} if strike == "fixed" else {})
    return terms


def barrier(c: dict) -> Terms:
    watched = dates(c, c["monitoring_dates"]) if "monitoring_dates" in c else always_watched(c)
    if c.get("payoff") == "digital":
        return "digital_knock_in", {key: c[key] for key in ("cash", "strike", "barrier")} | {"watched": watched}
    stated = {"side": c["kind"], "watched": watched} | {key: c[key] for key in
                                                        ("direction", "knock", "strike", "barrier")}
    return "barrier", stated | ({"rebate": c["rebate"]} if c.get("rebate") else {})


def barrier_rebate_at_hit(c: dict) -> Terms:
    name, terms = barrier(c | {"rebate": None})
    return name, terms | {"rebate_at_hit": c["rebate"]}


def double_knock_out(c: dict) -> Terms:
    stated = {"side": c["kind"], "knock": "out", "strike": c["strike"]}
    between = {"lower_barrier": c["lower"], "upper_barrier": c["upper"], "watched": always_watched(c)}
    return "double_barrier", stated | between


def cash_at_hit(c: dict) -> Terms:
    return "touch_at_hit", {key: c[key] for key in ("direction", "barrier", "cash")} | {"watched": always_watched(c)}


def lookback_fixed(c: dict) -> Terms:
    return "lookback", {"side": c["kind"], "strike_type": "fixed", "strike": c["strike"], "watched": always_watched(c)}


def lookback_floating(c: dict) -> Terms:
    watched = dates(c, c["monitoring_dates"], True) if "monitoring_dates" in c else always_watched(c)
    stated = {"side": c["kind"], "strike_type": "floating", "watched": watched}
    return "lookback", stated | ({"extreme_so_far": c["extreme_so_far"]} if "extreme_so_far" in c else {})


def exchange(c: dict) -> Terms:
    return "exchange_option", {"receive": "a", "give": "b", "receive_units": 1, "give_units": c.get("quantity_2", 1)}


def on_extreme(c: dict) -> Terms:
    which = "best" if c["extreme"] == "max" else "worst"
    return "rainbow_option", {"side": c["kind"], "which": which, "initial": 1, "strike": percent(c["strike"])}


def correlation_call(c: dict) -> Terms:
    return "correlation_call", {"first": "a", "second": "b", "strike_1": c["strike_1"], "strike_2": c["strike_2"]}


def two_asset_digital(c: dict) -> Terms:
    return "two_asset_digital", {"strikes": f"{{a: {c['strike_1']}, b: {c['strike_2']}}}", "cash": c["cash"]}


def basket_alike(c: dict) -> Terms:
    weights = ", ".join(f"{name}: {1 / c['assets']!r}" for name in names(c))
    return "basket_option", {"side": c["kind"], "initial": 1, "weights": f"{{{weights}}}",
                             "strike": percent(c["strike"])}


def forward_start(c: dict) -> Terms:
    return "forward_start", {"side": c["kind"], "pays": "money", "strike": percent(c["strike_ratio"]),
                             "strike_date": years(c["start"])}


def cliquet(c: dict) -> Terms:
    bounds = {key: percent(c[key]) for key in ("local_floor", "local_cap", "global_floor")}
    return "cliquet", {"initial": 100, "observations": dates(c, c["periods"]), "returns": "added", "redemption": "0%",
                       **bounds}


TERMS: dict[str, Callable[[dict], Terms]] = {
    "european": european,
    "gap_option": gap_option,
    "cash_or_nothing": cash_or_nothing,
    "asset_or_nothing": asset_or_nothing,
    "supershare": supershare,
    "touch_at_expiry": touch_at_expiry,
    "asian_arithmetic_discrete": asian("arithmetic", "fixed"),
    "asian_geometric_discrete": asian("geometric", "fixed"),
    "asian_geometric_strike_discrete": asian("geometric", "floating"),
    "barrier": barrier,
    "barrier_discrete": barrier,
    "barrier_rebate_at_hit": barrier_rebate_at_hit,
    "double_knock_out": double_knock_out,
    "cash_at_hit": cash_at_hit,
    "lookback_fixed": lookback_fixed,
    "lookback_floating": lookback_floating,
    "lookback_discrete": lookback_floating,
    "exchange": exchange,
    "option_on_extreme_of_two": on_extreme,
    "option_on_extreme_equicorrelated": on_extreme,
    "two_asset_correlation_call": correlation_call,
    "two_asset_digital": two_asset_digital,
    "basket_alike": basket_alike,
    "forward_start": forward_start,
    "cliquet_global": cliquet,
}


def names(c: dict) -> list[str]:
    """The assets: a, b, … or one stock."""
    count = c.get("assets", 2 if "spot_1" in c else 1)
    return ["stock"] if count == 1 else [chr(ord("a") + k) for k in range(count)]


def market_text(c: dict) -> str:
    """The market of a case; a rate that the case does not name does not matter to it."""
    lines = ["market: 0y", f"rates: {{USD: {percent(c.get('rate', 0.1))}}}", "funding: {USD: 0 bp}", "assets:"]
    for number, name in enumerate(names(c), start=1):
        own = number if "spot_1" in c else ""
        spot, carried, vol = (c.get(f"{key}_{own}" if own else key) for key in
                              ("spot", "yield" if own else "dividend_yield", "vol"))
        lines.append(f"  {name}: {{spot: {100 if spot is None else spot}, currency: USD, "
                     f"yield: {percent(carried)}, vol: {percent(vol)}}}")
    if len(names(c)) > 1:
        pairs = ", ".join(f"{one}/{other}: {percent(c['correlation'])}" for one, other in combinations(names(c), 2))
        lines.append(f"correlation: {{{pairs}}}")
    return "\n".join(lines) + "\n"


def contract_text(case: Case) -> str:
    """The contract of a case, one unit (a notional of 1 where the payoff is a percentage)."""
    c = case.contract
    payoff, terms = TERMS[case.formula](c)
    if "observations" not in terms and payoff != "touch_at_hit":
        terms = terms | {"expiry": years(c["maturity"])}
    size = "notional: 1" if "notional" in c else "units: 1"
    lines = [f"contract: {case.id}", "currency: USD", size, f"assets: [{', '.join(names(c))}]",
             f"payoff: {payoff}", "terms:"]
    return "\n".join([*lines, *(f"  {name}: {value}" for name, value in terms.items())]) + "\n"


def documents(case: Case) -> str:
    """One file: the contract, its market, and the definitions where the payoff is not a shipped one."""
    own = DEFINITIONS.read_text(encoding="utf-8") + "---\n" if TERMS[case.formula](case.contract)[0] in OWN else ""
    return f"{own}{contract_text(case)}---\n{market_text(case.contract)}"
