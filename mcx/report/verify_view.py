"""The terminal view of `mcx verify`."""

from __future__ import annotations

from collections.abc import Iterable, Iterator

from mcx.estimators.verify import MODEL
from mcx.report.model_view import show_model
from mcx.report.price_scale import Scale
from mcx.report.terminal import Page, decimals, fixed
from mcx.report.verify_results import (
    NO_EFFECT,
    NONE_THERE,
    Gap,
    ImpliedInput,
    Ranked,
    SolvedTerm,
    VerifyResult,
    VerifyTable,
    WorstCorner,
)

ANSWERS = {True: "yes", False: "no", None: ""}
NO_NUMBER = {NONE_THERE: "", NO_EFFECT: "moves nothing"}
LONGEST_NOTE = 240
MOST_PAYMENTS = 12  # listed one by one; more are in --json
RANKED = ("", "dealer", "bid", "middle", "ask", "gap", "left", "held", "implied funding")
LEFT = RANKED.index("left")
TAKEN_OFF = "taken off"
MONEY = "where the money is"
IN_PERCENT = ("vol", "yield", "rates", "funding", "correlation")


def show_verifications(table: VerifyTable, page: Page) -> None:
    """Several quotes: how they rank, then each."""
    scales = {each.contract: Scale(each) for each in table.quotes}
    for contract, scale in scales.items():
        of = f" of {contract}" if len(scales) > 1 else ""
        page.heading(f"quotes{of} on one footing, the highest first, {scale.unit}")
        rows = [RANKED, *rank_rows((each for each in table.ranking if each.contract == contract), scale)]
        open_gaps = any(row[LEFT] for row in rows[1:])
        heads, *rows = rows if open_gaps else [row[:LEFT] + row[LEFT + 1:] for row in rows]
        page.table(heads, rows, words=2)
        if open_gaps:
            page.line("  left: of the gap, with each strike at its own vol")
    for each in table.quotes:
        page.line()
        show_verification(each, page)
    if table.not_verified:
        page.line()
        page.line(f"interrupted: without a verdict are {', '.join(table.not_verified)}", style="bold")


def show_verification(result: VerifyResult, page: Page) -> None:
    """The verdict first, then what it rests on."""
    scale = Scale(result)
    places = scale.places(result.standard_error)
    quote, gap = result.quote, result.gap
    page.line(result.verdict, style="bold")
    page.items(result.leads)
    page.named((
        ("contract", f"{result.contract} ({result.payoff})"),
        ("quote", f"{quote.dealer}, {quote.at}, {quote.side}, {quote.accrual}, {quote.commitment}"),
        ("on our footing", f"{scale.show(result.mid, places)} {scale.unit}"),
        ("our price", f"{scale.show(result.price, places)} {scale.unit}, standard error "
                      f"{scale.show(result.standard_error, places)}; valued on {result.valuation or 'time 0'}"),
        ("gap", f"{scale.show(gap.price, places)} {scale.unit}, standard error "
                f"{scale.show(gap.standard_error, places)}, {fixed(gap.value, 2)} {result.currency} (quote less our "
                f"price)"),
        *rest_row(gap, scale, places),
        ("paths", f"{result.paths:,}, the page in {result.seconds:.1f} s; seed {result.seed}"),
    ))
    page.heading("the quote on our footing")
    page.table(("step", "", "quote"), (
        (line.step, line.text, footed(line.quote, line.standard_error, scale, result, number))
        for number, line in enumerate(result.footing)), words=2)
    page.heading(f"what may hold {'the gap' if gap.rest is None else 'what is left of the gap'}, each by itself")
    page.table(("", "half-width", "holds it"), band_rows(result, scale, places), last=1)
    if gap.z is not None and gap.rest is None:
        page.line(f"  sampling error: the gap is z = {gap.z:+.1f} standard errors")
    elif gap.rest is not None and gap.standard_error > 0.0:
        page.line(f"  sampling error: what is left is z = {gap.rest / gap.standard_error:+.1f} standard errors")
    if result.worst_corner is not None:
        page.line(f"  {corner(result.worst_corner, gap, scale, places)}")
    if result.model_bracket:
        show_model(result.model_bracket, scale, result.standard_error, page)
    if result.inputs:
        page.heading("what each input's half-width does to the price")
        page.table(("input", "", "half-width", scale.unit, "error", ""), (
            (each.input, each.asset, _move(each.half_width), scale.show(each.change, places),
             scale.show(each.standard_error, places), each.note) for each in result.inputs), words=2, last=1)
    page.heading("what would have to be true, each input alone")
    page.table(("input", "", "value", "error", "move", "inside its doubt"), map(implied_row, result.implied), words=2,
               last=1)
    page.items(nowhere(result.implied))
    _joint(result, page)
    _readings(result, scale, places, page)
    _money(result, scale, places, page)
    if result.solved:
        first = result.solved[0]
        page.heading(f"the {first.term} at which the contract is worth {scale.show(first.target, places)} {scale.unit}")
        page.items(solved(each, scale) for each in result.solved)
    for title, texts in (("warnings", result.warnings), ("assumptions", result.assumptions),
                         ("not in the model", result.limits), ("read it with care", result.cautions)):
        if texts:
            page.heading(title)
            page.items(texts)


def band_rows(result: VerifyResult, scale: Scale, places: int) -> Iterator[tuple[str, str, str]]:
    """Each band and whether it holds the gap; of what is left of it the model bracket is taken off already."""
    for band in result.bands:
        taken_off = band.name == MODEL and result.gap.rest is not None
        yield (band.name, "not stated" if band.half_width is None else scale.show(band.half_width, places),
               TAKEN_OFF if taken_off else ANSWERS[band.holds])


def rest_row(gap: Gap, scale: Scale, places: int) -> Iterator[tuple[str, str]]:
    """What each strike at its own vol leaves of the gap, where that is the price."""
    if gap.rest is not None:
        yield "left of it", (f"{scale.show(gap.rest, places)} {scale.unit}, with each strike at its own vol, which "
                             "needs no model of levels")


def rank_rows(ranking: Iterable[Ranked], scale: Scale) -> Iterator[tuple[str, ...]]:
    """Quotes on one footing, each with the funding at which our price is the quote."""
    for each in ranking:
        funding = ("" if each.funding is None else
                   f"{1e4 * each.funding:,.1f} ± {1e4 * each.funding_standard_error:,.1f} bp")
        yield (str(each.rank), each.dealer, _or_none(each.bid, scale), scale.show(each.mid, 4),
               _or_none(each.ask, scale), scale.show(each.gap, 4), _or_none(each.rest, scale),
               ANSWERS[each.explained], funding)


def corner(worst: WorstCorner, gap: Gap, scale: Scale, places: int) -> str:
    """What is said of the worst corner of the inputs."""
    far = "" if worst.share == 1.0 else f" (at {worst.share:.3g} of them: there is no such market further out)"
    return (f"worst corner, every input at the end of its half-width{far}: {scale.show(worst.price, places)} "
            f"{scale.unit}, which {'reaches' if worst.reaches else 'does not reach'} "
            f"{'the quote' if gap.rest is None else 'as far as what is left of the gap'}; never the band")


def _or_none(number: float | None, scale: Scale) -> str:
    return "" if number is None else scale.show(number, 4)


def footed(number: float, error: float, scale: Scale, result: VerifyResult, step: int) -> str:
    """The quote after a step: the first one is still in the quote's own unit."""
    if step == 0 and result.quote.unit != "percent of notional":
        return fixed(number, 4)
    return f"{scale.show(number, 4)}{f' ± {scale.show(error, 4)}' if error else ''}"


def _move(share: float) -> str:
    return f"{100.0 * share:.4g} %"


def implied_row(each: ImpliedInput) -> tuple[str, ...]:
    """Where an input alone makes the model meet the quote, as words."""
    if each.value is None:
        return each.input, each.asset, "none", "", "", NO_NUMBER[each.note]
    if each.input in IN_PERCENT:
        error, number = 100.0 * each.standard_error, 100.0 * each.value
        sign = " %"
    else:
        error, number, sign = each.standard_error, each.value, ""
    places = decimals(error, 2, 2)
    value = f"{fixed(number, places)}{sign}" if each.measure == "level" else signed(each.value, places)
    where = f"{value} at {each.tenor}" if each.tenor else value
    inside = {True: "yes", False: "no", None: "not stated"}[each.plausible]
    return each.input, each.asset, where, f"{fixed(error, places)}{sign}", signed(each.move, 2), inside


def nowhere(implied: Iterable[ImpliedInput]) -> Iterator[str]:
    """Which inputs move the price and cannot meet the quote alone, with the range that was looked through."""
    ranges: dict[tuple[str, str], list[str]] = {}
    for each in implied:
        if each.value is None and not NO_NUMBER[each.note]:
            name = " ".join(filter(None, (each.input, each.asset)))
            ranges.setdefault((signed(each.low), signed(each.high)), []).append(name)
    for (low, high), names in ranges.items():
        yield f"{', '.join(names)}: no move from {low} to {high} meets the quote"


def signed(move: float, places: int = 1) -> str:
    return f"{100.0 * move:+,.{places}f} %"


def _joint(result: VerifyResult, page: Page) -> None:
    page.heading("smallest joint move")
    joint = result.joint
    if joint is None:
        page.line("  none found: no uncertainty is stated, or the inputs do not reach the quote together")
        return
    page.line(f"  {joint.half_widths:.2f} half-widths in all (root of squares; 1 is the edge of the input band)")
    page.table(("input", "", "half-widths", "move"), (
        (each.input, each.asset, f"{each.half_widths:+.2f}", signed(each.move, 2)) for each in joint.moves), words=2)


def _readings(result: VerifyResult, scale: Scale, places: int, page: Page) -> None:
    page.heading("other readings of the contract")
    if not result.readings:
        page.line("  the definition lists none")
        return
    shown = [each for each in result.readings if each.price is not None and not each.note]
    page.table(("reading", scale.unit, "difference", "error", "gap left", "closes it"), (
        (each.reading, scale.show(each.price, places), scale.show(each.difference, places),
         scale.show(each.difference_standard_error, places), scale.show(each.left, places),
         "yes" if each.closes_gap else "")
        for each in shown), last=1)
    if result.compared != result.price:
        page.line("  at the spots that the quote states, as is the gap that is left")
    page.items(f"{each.reading}: {each.about}" for each in shown if each.closes_gap)
    unlike = [each for each in result.readings if each not in shown]
    page.items(f"{each.reading}: {_short(each.note)}" for each in unlike)


def _short(note: str) -> str:
    """A note that names many dates, cut; it stands whole in --json."""
    return note if len(note) <= LONGEST_NOTE else f"{note[:LONGEST_NOTE].rsplit(' ', 1)[0]} … (whole in --json)"


def money_rows(result: VerifyResult, scale: Scale, places: int) -> Iterator[tuple[str, str, str]]:
    """Where the value lies, with errors."""
    money, margin = result.money, result.margin
    yield ("bond floor: the payments are worth no less than",
           "none" if money.bond_floor is None else scale.show(money.bond_floor, places), "")
    if money.ceiling is not None:
        yield "the payments are worth no more than", scale.show(money.ceiling, places), ""
    for part in money.parts or money.legs:
        yield part.name, scale.show(part.price, places), scale.show(part.standard_error, places)
    yield "our price", scale.show(result.price, places), scale.show(result.standard_error, places)
    if money.funding is not None:
        yield ("of which the issuer's funding spread", scale.show(money.funding, places),
               scale.show(money.funding_standard_error, places))
    if margin is not None:
        yield "issue price", scale.show(margin.issue_price, places), ""
        name = "issue price less our price (it has begun)" if margin.begun else "day-one margin"
        yield name, scale.show(margin.price, places), scale.show(margin.standard_error, places)
        if not margin.begun:
            yield ("  for each year of expected life", scale.show(margin.per_year, places),
                   scale.show(margin.per_year_standard_error, places))


def _money(result: VerifyResult, scale: Scale, places: int, page: Page) -> None:
    money, margin = result.money, result.margin
    page.heading(MONEY)
    page.table(("", scale.unit, "error"), money_rows(result, scale, places))
    if margin is not None:
        name = "difference" if margin.begun else "margin"
        page.line(f"  the {name} is {fixed(margin.value, 2)} {result.currency} for the whole trade, "
                  f"{100.0 * margin.share:.2f} % of the issue price; expected life {result.expected_life:.2f} years")
    if 0 < len(money.payments) <= MOST_PAYMENTS:
        page.table(("payment", "decided", "paid", "least", "most"), (
            (each.leg, each.decided, each.paid, "none" if each.least is None else scale.show(each.least, 2),
             "none" if each.most is None else scale.show(each.most, 2)) for each in money.payments), words=3)
    elif money.payments:
        page.line(f"  least and most of each of the {len(money.payments)} payments: --json")


def solved(each: SolvedTerm, scale: Scale) -> str:
    """Where a term meets the target, in the unit in which a contract writes it."""
    factor, sign, step = (100.0, " %", "1 %") if each.percent else (1.0, "", "0.01")
    low, high = (round(factor * end, 6) for end in (each.low, each.high))  # the end of a range without its end is 0
    looked = f"looked for from {low:.6g}{sign} to {high:.6g}{sign}"
    stated = f"stated is {factor * each.stated:.6g}{sign}"
    if each.value is None:
        return f"{each.note} ({looked}; {stated})"
    value, error = factor * each.value, factor * each.standard_error
    places = decimals(error, 2, 2 if each.percent else 4)
    slope = scale.show(0.01 * each.slope, 4)
    along = "; its other numbers move along" if each.together else ""
    return (f"{fixed(value, places)}{sign} ± {fixed(error, places)}{sign} (standard error), {stated}; "
            f"the price moves by {slope} {scale.unit} for {step} of it; {looked}{along}")
