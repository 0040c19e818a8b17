"""The terminal view of `mcx price`."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

from mcx.report.greek_results import GreeksResult
from mcx.report.model_view import model_line, show_model
from mcx.report.price_scale import Scale
from mcx.report.results import Amount, Condition, PriceResult, PriceTable
from mcx.report.terminal import Page, decimals, fixed

COLUMNS = 4  # conditions beside one another in the table by date
PROBABILITIES = "probabilities (risk-neutral, not a forecast)"
HEDGED = "what a hedger is left with (standard deviation)"
HEDGE_NOTE = "deltas regressed on what is known on each date; under the pricing measure, without costs"


def headline(result: PriceResult) -> str:
    """'98.33 % ± 0.02 % (sampling error only)': the price and the half-width of its 95 % interval."""
    scale = Scale(result)
    half = (result.interval95[1] - result.interval95[0]) / 2.0
    places = scale.places(half, digits=1)
    price, error = (f"{scale.show(number, places)} {scale.unit}" for number in (result.price, half))
    return f"{price} ± {error if scale.percent else scale.show(half, places)} (sampling error only)"


def show_price(result: PriceResult, page: Page) -> None:
    """Everything that a price says, the number first."""
    scale = Scale(result)
    if result.interrupted:
        page.line("interrupted: the estimate so far", style="bold")
    page.line(headline(result), style="bold")
    page.line("± is the half-width of the 95 % interval")
    page.named(facts(result, scale))
    page.heading("legs")
    page.table(("leg", scale.unit, "standard error", result.currency), amounts(result.legs, result, scale))
    if result.parts:
        page.heading("parts")
        page.table(("part", scale.unit, "standard error", result.currency), amounts(result.parts, result, scale))
    if result.owed:
        page.heading("owed already (part of the value)")
        page.table(owed_heads(result, scale), owed_rows(result, scale), words=3)
    if result.hedge:
        _hedge(result, scale, page)
    if result.conditions or result.ends:
        page.heading(PROBABILITIES)
        _probabilities(result, page)
    if result.model_bracket:
        show_model(result.model_bracket, scale, result.standard_error, page)
    _checks(result, scale, page)
    for title, texts in (("warnings", result.warnings), ("assumptions", result.assumptions or ("none",)),
                         ("not in the model", result.limits), ("read it with care", result.cautions)):
        if texts:
            page.heading(title)
            page.items(texts)


def facts(result: PriceResult, scale: Scale) -> Iterator[tuple[str, str]]:
    """What stands below the headline: names with what is said of them."""
    places = scale.places(result.standard_error)
    low, high = (scale.show(end, places) for end in result.interval95)
    money = max(decimals(result.value_standard_error, 2, 0), 2) if result.value_standard_error else 2
    size = f"{result.notional:,.15g} {result.currency} notional" if scale.percent else f"{result.units:,.15g} units"
    yield "contract", f"{result.contract} ({result.payoff})"
    yield "valued on", result.valuation or "time 0"
    yield "value", (f"{fixed(result.value, min(money, 2))} {result.currency} for {size}, standard error "
                    f"{fixed(result.value_standard_error, min(money, 2))}")
    if result.accrued:
        clean, accrued = (scale.show(number, places) for number in (result.clean, result.accrued))
        yield "clean value", f"{clean}{scale.sign} and {accrued}{scale.sign} accrued; the value above is dirty"
    if result.ended:
        yield "ended on", result.ended
    yield "standard error", f"{scale.show(result.standard_error, places)}{scale.sign}"
    yield "95 % interval", f"{low} to {high}{scale.sign}"
    if result.bracket:
        yield "bounds", bounds(result, scale)
    if result.model_bracket:
        yield "model bracket", model_line(result.model_bracket, scale, result.standard_error)
    yield "paths", f"{result.paths:,} in {result.seconds:.2f} s; asked for: {result.planned.asked}"
    yield "seed", f"{result.seed}; variance reduction: {result.reduction}"
    for number, note in enumerate(result.reduction_notes):
        yield "" if number else "variance reduction", note
    life = decimals(result.expected_life_standard_error, 2, 2)
    yield "expected life", f"{fixed(result.expected_life, min(life, 4))} years (risk-neutral)"


def bounds(result: PriceResult | GreeksResult, scale: Scale) -> str:
    """What is said of a price between bounds."""
    bracket = result.bracket
    places = scale.places(max(bracket.width, result.standard_error))
    low, high, width, target = (scale.show(number, places) for number in
                                (bracket.lower, bracket.upper, bracket.width, bracket.target))
    close = "closer than" if bracket.reached else "not closer than"
    return (f"{low} to {high}{scale.sign}: the price is the middle; how several assets are watched together is known "
            f"between bounds only, {width}{scale.sign} apart, {close} the {target}{scale.sign} aimed at, with "
            f"{bracket.steps} steps instead of {bracket.unrefined} ({bracket.cost:.1f} times the cost of a path)")


def amounts(amounts: Sequence[Amount], result: PriceResult, scale: Scale) -> Iterator[tuple[str, ...]]:
    """Legs or parts as rows, with their sum."""
    places = scale.places(result.standard_error)
    for each in amounts:
        yield (each.name, scale.show(each.price, places), scale.show(each.standard_error, places), fixed(each.value, 2))
    if len(amounts) > 1:
        price, error = (scale.show(number, places) for number in (result.price, result.standard_error))
        yield ("sum", price, error, fixed(result.value, 2))


def owed_heads(result: PriceResult, scale: Scale) -> tuple[str, ...]:
    return "paid on", "leg", "fixed on", scale.unit, result.currency, "present value"


def owed_rows(result: PriceResult, scale: Scale) -> Iterator[tuple[str, ...]]:
    """What is settled and not yet paid."""
    for each in result.owed:
        yield (each.date, each.leg, each.observed, scale.show(each.amount, max(scale.fewest, 4)), fixed(each.value, 2),
               fixed(each.present_value, 2))


def hedge_rows(result: PriceResult, scale: Scale) -> Iterator[tuple[str, ...]]:
    """What is left of a hedge by the number of its dates."""
    places = scale.places(max(each.standard_error for each in result.hedge))
    for each in result.hedge:
        yield (f"{each.dates} date{'' if each.dates == 1 else 's'}", scale.show(each.deviation, places),
               scale.show(each.standard_error, places))


def _hedge(result: PriceResult, scale: Scale, page: Page) -> None:
    page.heading(HEDGED)
    page.table(("traded on", scale.unit, "standard error"), hedge_rows(result, scale))
    page.line(f"  {HEDGE_NOTE}")


def _probabilities(result: PriceResult, page: Page) -> None:
    """Conditions ever and by date, with the ends; as many columns as fit."""
    for first in range(0, max(len(result.conditions), 1), COLUMNS):
        shown = result.conditions[first:first + COLUMNS]
        with_ends = bool(result.ends) and first == 0
        heads = ["", *(condition.name for condition in shown), *(["ends here"] if with_ends else [])]
        page.table(heads, by_date(shown, result if with_ends else None))
    errors = [condition.standard_error for condition in result.conditions]
    errors += [each.standard_error for condition in result.conditions for each in condition.dates]
    errors += [end.standard_error for end in result.ends]
    page.line(f"  standard errors of at most {fixed(100.0 * max(errors), 3)} %")


def by_date(conditions: Sequence[Condition], result: PriceResult | None) -> Iterator[list[str]]:
    """Rows of probabilities: ever, on each date, and how often the contract did not end early."""
    ends = {end.date: end.probability for end in result.ends} if result else {}
    columns = [{each.date: each.probability for each in condition.dates} for condition in conditions]
    row = ["ever", *(_chance(condition.probability) for condition in conditions)]
    yield row + ([_chance(1.0 - result.reached_maturity.probability)] if result else [])
    for date in sorted({date for column in (*columns, ends) for date in column}, key=_in_time):
        row = [date, *(_chance(column.get(date)) for column in columns)]
        yield row + ([_chance(ends.get(date))] if result else [])
    if result:
        yield ["not ended early", *("" for _ in conditions), _chance(result.reached_maturity.probability)]


def _in_time(date: str) -> tuple[float, str]:
    """Dates in order as they are, times such as '0.25y' by their number."""
    head = date.split(" ")[0]
    return (float(head[:-1]), "") if head.endswith("y") else (0.0, date)


def _chance(probability: float | None) -> str:
    return "" if probability is None else fixed(100.0 * probability, 2, "%")


def _checks(result: PriceResult, scale: Scale, page: Page) -> None:
    if result.checks.martingale:
        page.heading("check: mean level over forward")
        page.table(("asset", "on", "ratio", "standard error", "z"), (
            (test.asset, test.date, f"{test.mean_over_forward:.6f}", f"{test.standard_error:.6f}", f"{test.z:+.2f}")
            for test in result.checks.martingale), words=2)
    page.heading("check: price as paths are added")
    places = scale.places(result.standard_error)
    page.table(("paths", scale.unit, "standard error"), (
        (f"{stage.paths:,}", scale.show(stage.price, places), scale.show(stage.standard_error, places))
        for stage in result.checks.convergence), words=0)


def show_prices(table: PriceTable, page: Page) -> None:
    """Several contracts: one line each, then what is particular to some, then what holds for all."""
    if table.interrupted:
        page.line("interrupted: the estimates so far", style="bold")
    page.table(("contract", "unit", "price", "± 95 %", "currency", "value"), map(_row, table.prices))
    page.line("± is the half-width of the 95 % interval, sampling error only; legs, probabilities and checks: one "
              "contract at a time, or --json")
    for each in table.prices:
        if each.bracket:
            page.line(f"{each.contract}: {bounds(each, Scale(each))}")
        if each.model_bracket:
            line = model_line(each.model_bracket, Scale(each), each.standard_error)
            page.line(f"{each.contract}: model bracket {line}")
    if table.not_valued:
        page.line(f"not valued: {', '.join(table.not_valued)}")
    first = table.prices[0]
    page.named((
        ("valued on", first.valuation or "time 0"),
        ("paths", ", ".join(dict.fromkeys(f"{each.paths:,}" for each in table.prices))
         + f"; asked for: {first.planned.asked}"),
        ("seed", f"{first.seed}; variance reduction: {first.reduction}"),
    ))
    for title, key in (("warnings", "warnings"), ("assumptions", "assumptions"), ("not in the model", "limits"),
                       ("read it with care", "cautions")):
        said: dict[str, list[str]] = {}
        for each in table.prices:
            for text in getattr(each, key):
                said.setdefault(text, []).append(each.contract)
        if said:
            page.heading(title)
            everyone = len(table.prices)
            page.items(text if len(who) == everyone else f"{', '.join(who)}: {text}" for text, who in said.items())


def _row(result: PriceResult) -> tuple[str, ...]:
    scale = Scale(result)
    half = (result.interval95[1] - result.interval95[0]) / 2.0
    places = scale.places(half, digits=1)
    name = f"{result.contract} (interrupted)" if result.interrupted else result.contract
    return (name, "%" if scale.percent else "per unit", scale.show(result.price, places), scale.show(half, places),
            result.currency, fixed(result.value, 2))
