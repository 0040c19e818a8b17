"""A contract, a market and a quote to fill in for a definition: what is to be written is left empty, with a word about
it.

Loaded as it is, the text gives a fault for every blank and for nothing else.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from itertools import combinations

from mcx.checked.curves import STRIKES_WRITTEN
from mcx.checked.dealer_quote import OF_NOTIONAL, OF_UNITS
from mcx.checked.payoff import MONEY, MULTIPLES, Deliver, Payoff, Term
from mcx.checked.read_contract import uses_period
from mcx.report.wording import figure

WIDTH = 34  # where the words about a blank begin
BOUNDS = (("above", "above"), ("below", "below"), ("at_least", "at least"), ("at_most", "at most"))
SIZES = {
    MONEY: ("units", "", "a number; payments are money per unit"),
    MULTIPLES: ("notional", "", "an amount; payments are multiples of it"),
    "": ("notional", "", "an amount; for payments in money per unit write 'units:' instead"),
}
OPTIONAL = (  # of a quote
    ("bid_offer", "the whole width, in the unit of the price"), ("spot", "level of each asset that it was made at"),
    ("size", "how much it is good for"), ("fees", "what is in it beyond the dealer's own price, in its unit"),
    ("issue_price", "as 100%, for the day-one margin"), ("tolerance", "a gap that nobody asks about, as 25 bp"),
)
WRITTEN = {
    "number": "a number",
    "percent": "as 70% or 25 bp",
    "level": "in the asset's currency",
    "date": "as 2027-11-16",
    "dates": "as {from: 2027-02-16, until: 2029-11-16, every: 3 months}, or a list",
    "watch": "a date, dates, another term's as observations.last, or {continuous: [2026-12-01, 2027-12-01]}",
    "flag": "true or false",
}


def blank(payoff: Payoff, assets: Sequence[str]) -> str:
    """The three documents as YAML text."""
    return "\n".join((*_contract(payoff, assets), "---", *_market(assets), "---", *_quote(payoff))) + "\n"


def _line(key: str, value: str = "", about: str = "", indent: int = 0) -> str:
    written = f"{' ' * indent}{key}:{' ' + value if value else ''}"
    return f"{written:<{WIDTH}} # {about}" if about else written


def _contract(payoff: Payoff, assets: Sequence[str]) -> Iterator[str]:
    yield f"# A contract on the definition '{payoff.name}'. Fill in what stands empty."
    yield f"contract: New {payoff.name.replace('_', ' ')} on {' and '.join(assets)}"
    yield _line("currency", about="as EUR")
    yield _line(*SIZES[payoff.pays])
    if any(isinstance(action, Deliver) for event in payoff.events for action in (*event.then, *event.otherwise)):
        yield _line("denomination", about="nominal amount of one note: only whole shares of it are delivered")
    yield f"assets: [{', '.join(assets)}]"
    yield _line("start", about="date from which periods and years count")
    if uses_period(payoff):
        yield _line("day_count", about="as 30/360 or Actual/360")
    yield _line("settlement", about="lag of payments, as 2 business days")
    yield "calendar:"
    yield _line("holidays", about="as ECB or XNYS, or none for weekends only", indent=2)
    yield _line("roll", about="following, modified following or preceding", indent=2)
    yield f"payoff: {payoff.name}"
    yield "terms:"
    for term in payoff.terms:
        yield from _term(term, assets)


def _term(term: Term, assets: Sequence[str]) -> Iterator[str]:
    about = _about(term)
    if term.optional or term.default is not None:
        yield _line(f"# {term.name}", about=f"optional; {about}", indent=2)
    elif len(assets) > 1 and (term.type == "level" or term.per == "assets"):
        yield _line(term.name, about=about, indent=2)
        for asset in assets:
            yield _line(asset, indent=4)
    else:
        yield _line(term.name, about=about, indent=2)


def _about(term: Term) -> str:
    """What a term is, how it is written, and its bounds."""
    written = " or ".join(term.choices) if term.type == "choice" else WRITTEN.get(term.type, "one of the assets")
    if term.per and term.per != "assets" and term.type != "dates":
        written += f", or a list for the dates of {term.per}"
    elif term.type == "dates" and term.per:
        written += f"; one for each of {term.per}"
    limits = [(word, getattr(term, key)) for key, word in BOUNDS]
    bounds = [f"{word} {figure(limit, term.type)}" for word, limit in limits if limit is not None]
    listed = ", ".join((written, *bounds))
    return f"{term.about} ({listed})" if term.about else listed


def _market(assets: Sequence[str]) -> Iterator[str]:
    yield _line("market", about="the valuation date, as 2026-12-01")
    yield _line("rates", about="by currency: {EUR: 2.1%} or {EUR: {1m: 2.0%, 1y: 2.1%, 3y: 2.35%}}")
    yield _line("funding", about="by currency, the issuer's spread: {EUR: 80 bp}, or {EUR: 0 bp} for none")
    yield "assets:"
    for asset in assets:
        yield f"  {asset}:"
        yield _line("spot", about="today's level", indent=4)
        yield _line("currency", about="as EUR", indent=4)
        yield _line("yield", about="as 2.4% or {1y: 2.4%, 3y: 2.2%}; or 'dividends', 'forwards', 'underlying: total "
                                   "return'", indent=4)
        yield _line("vol", about="as 18% or {3m: 17%, 1y: 18%, 3y: 19%}; by strike, for the model bracket: "
                                 f"{STRIKES_WRITTEN[1:-1]}", indent=4)
    if len(assets) > 1:
        yield "correlation:"
        for first, second in combinations(assets, 2):
            yield _line(f"{first}/{second}", about="as 65%", indent=2)


def _quote(payoff: Payoff) -> Iterator[str]:
    units, prices = (OF_UNITS, "as 12.35") if payoff.pays == MONEY else (OF_NOTIONAL, "as 98.35%, or money")
    yield "# A dealer's quote, for 'mcx verify'. Leave this document out where there is none."
    yield _line("quote", about="who says it")
    yield _line("at", about="date and time, as 2026-12-01 16:30")
    yield _line("side", about="bid, ask or mid; two-way, with 'bid' and 'ask' in place of 'price'")
    yield _line("unit", about=f"{', '.join(units[:-1])} or {units[-1]}")
    yield _line("price", about=f"in that unit, {prices}")
    yield _line("accrual", about="dirty; or clean, with 'accrued' beside it")
    yield _line("commitment", about="firm or indicative")
    for key, about in OPTIONAL:
        yield _line(f"# {key}", about=f"optional; {about}")
