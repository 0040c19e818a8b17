"""From a `quote:` document to a `DealerQuote`: a counterparty's price, as it was said.

What puts it on one footing with our own value is done in `estimators/footing.py`; here nothing is converted.
"""

from __future__ import annotations

import re
from collections.abc import Iterable
from dataclasses import dataclass, field

from mcx.checked.contract import Contract
from mcx.checked.reading import check_keys, listed, one_of, read, text_of
from mcx.checked.values import amount
from mcx.faults import Fault, Place, did_you_mean
from mcx.text.located import Document, Mapping, Node, Scalar
from mcx.text.scalars import date, expected, number, percent, word

SIDES = ("bid", "ask", "mid", "two-way")
PERCENT, PER_DENOMINATION, CASH, PER_UNIT = "percent of notional", "per denomination", "cash", "per unit"
OF_NOTIONAL, OF_UNITS = (PERCENT, PER_DENOMINATION, CASH), (PER_UNIT, CASH)
ACCRUALS = ("clean", "dirty")
COMMITMENTS = ("firm", "indicative")
REQUIRED = ("quote", "at", "side", "unit", "accrual", "commitment")
KEYS = ("for", "price", "bid", "ask", "bid_offer", "accrued", "denomination", "spot", "size", "fees", "issue_price",
        "tolerance", "source")
ZONE = r" [A-Z]{2,5}| [+-][0-9]{2}:[0-9]{2}"
MOMENT = re.compile(rf"([0-9]{{4}}-[0-9]{{2}}-[0-9]{{2}})(?: (?:[01][0-9]|2[0-3]):[0-5][0-9](?:{ZONE})?)?")
TEXTBOOK = "0y"


@dataclass(frozen=True, slots=True)
class DealerQuote:
    """What a dealer said. Prices, `bid_offer`, `accrued` and `fees` are in the quote's own unit (98% is 0.98); `bid`
    and `ask` are stated for a two-way quote, else `price`. `bid_offer` is the whole width. `fees` are what the dealer
    has put into the price beyond his own. `issue_price` and `tolerance` are in the unit of the contract's price.

    `about` is the title of the contract, '' where the files hold one only; `date` is '' in textbook quotes.
    """

    who: str
    place: Place
    at: str
    date: str
    side: str
    unit: str
    clean: bool
    firm: bool
    price: float | None = None
    bid: float | None = None
    ask: float | None = None
    bid_offer: float | None = None
    accrued: float | None = None
    denomination: float | None = None
    spot: dict[str, float] = field(default_factory=dict)
    size: float | None = None
    fees: float | None = None
    issue_price: float | None = None
    tolerance: float | None = None
    about: str = ""
    source: str = ""

    @property
    def mid(self) -> float:
        """The middle where both sides are known, else what was said."""
        return self.price if self.price is not None else 0.5 * (self.bid + self.ask)

    @property
    def width(self) -> float | None:
        """Ask less bid, None where it was not said."""
        return self.bid_offer if self.bid is None else self.ask - self.bid


def read_quote(
    document: Document, contracts: Iterable[tuple[str, Contract | None]]
) -> tuple[DealerQuote | None, list[Fault]]:
    """The quote that a document says, None where something in it is wrong; and what is wrong. `contracts` are all that
    stand in the files, by title, None where one could not be read."""
    faults: list[Fault] = []
    body = document.body
    check_keys(body, KEYS, REQUIRED, faults, "the quote")
    known = dict(contracts)
    about = _about(body, known, faults)
    contract = known.get(about)
    unit = _unit(body, contract, faults)
    side = one_of(body.get("side"), SIDES, faults, "a side") if "side" in body else None
    at = read(body, "at", _moment, faults)
    words = {key: one_of(body.get(key), known_words, faults, what) for key, known_words, what in
             (("accrual", ACCRUALS, "how accrued coupons count"), ("commitment", COMMITMENTS, "how binding it is"))
             if key in body}
    parse = percent if unit == PERCENT else _money
    own = percent if contract is None or contract.notional is not None else _money
    prices = {key: read(body, key, parse, faults) for key in ("price", "bid", "ask", "bid_offer", "accrued", "fees")}
    others = {key: read(body, key, own, faults) for key in ("issue_price", "tolerance")}
    amounts = {key: read(body, key, amount, faults) for key in ("denomination", "size")}
    spot = _spots(body.get("spot"), contract, faults)
    who, source = text_of(body, "quote", faults), text_of(body, "source", faults)
    _together(body, side, unit, words.get("accrual"), prices, faults)
    _sizes({**prices, **others}, body, faults)
    if faults:
        return None, faults
    day = "" if at == TEXTBOOK else at[:10]
    quote = DealerQuote(
        who, body.get("quote").place, at, day, side, unit, words["accrual"] == "clean", words["commitment"] == "firm",
        spot=spot, about=about, source=source, **prices, **others, **amounts)
    return quote, faults


def _about(body: Mapping, contracts: dict[str, Contract | None], faults: list[Fault]) -> str:
    """The title of the contract that the quote is for."""
    stated = read(body, "for", word, faults)
    if stated is None:
        if len(contracts) > 1 and "for" not in body:
            faults.append(Fault(body.place, f"the files hold {len(contracts)} contracts; say which one the quote is "
                                            f"for, as 'for: {next(iter(contracts))}'"))
        return next(iter(contracts), "")
    if contracts and stated not in contracts:
        near = did_you_mean(stated, contracts) or f"; there is {listed(contracts)}"
        faults.append(Fault(body.get("for").place, f"no contract has the title '{stated}'{near}"))
    return stated


def _unit(body: Mapping, contract: Contract | None, faults: list[Fault]) -> str | None:
    if "unit" not in body:
        return None
    fits = dict.fromkeys((*OF_NOTIONAL, *OF_UNITS)) if contract is None else \
        OF_NOTIONAL if contract.notional is not None else OF_UNITS
    return one_of(body.get("unit"), tuple(fits), faults, "the unit of the price")


def _money(node: Node) -> float | Fault:
    value = number(node)
    if not isinstance(value, Fault) and node.text.endswith(("%", "bp")):
        return expected("an amount of money", node, f"with '%' the unit is '{PERCENT}'")
    return value


def _moment(node: Node) -> str | Fault:
    """A date, or a date and time, with a zone or without; `0y` beside textbook contracts."""
    text = " ".join(node.text.split()) if isinstance(node, Scalar) else ""
    found = MOMENT.fullmatch(text)
    if text == TEXTBOOK:
        return text
    if not found:
        return expected("a date and time such as '2026-12-01 16:30', or a date", node)
    day = date(Scalar(found[1], node.place))
    return day if isinstance(day, Fault) else text


def _spots(node: Node | None, contract: Contract | None, faults: list[Fault]) -> dict[str, float]:
    """Reference levels by asset, or one number where there is one asset."""
    if node is None:
        return {}
    assets = contract.assets if contract else ()
    if not isinstance(node, Mapping):
        level = amount(node)
        if isinstance(level, Fault):
            faults.append(level)
        elif len(assets) > 1:
            faults.append(expected(f"a reference level by asset, as '{{{assets[0]}: {node}}}'", node))
        return {assets[0]: level} if assets and not isinstance(level, Fault) else {}
    if assets:
        check_keys(node, assets, (), faults, "the reference spots")
    return {key.text: level for key, _ in node.entries if (level := read(node, key.text, amount, faults)) is not None}


def _together(body: Mapping, side: str | None, unit: str | None, accrual: str | None, prices: dict[str, float | None],
              faults: list[Fault]) -> None:
    """What must stand beside something else, and what must not."""
    def needs(wanted: str, why: str) -> None:
        if wanted not in body:
            faults.append(Fault(body.place, f"'{wanted}' is missing in the quote: {why}"))

    def spare(key: str, why: str) -> None:
        if key in body:
            faults.append(Fault(body.key(key).place, f"'{key}' does not go with {why}"))

    if side == "two-way":
        needs("bid", "a two-way quote has a bid and an ask")
        needs("ask", "a two-way quote has a bid and an ask")
        spare("price", "a two-way quote; write 'bid' and 'ask'")
        spare("bid_offer", "a two-way quote, which shows its width itself")
        low, high = prices["bid"], prices["ask"]
        if low is not None and high is not None and low > high:
            faults.append(Fault(body.get("bid").place, "the bid is above the ask"))
    elif side is not None:
        needs("price", f"what is the {side}?")
        for key in ("bid", "ask"):
            spare(key, f"the side '{side}'; write 'price'")
    if side == "mid":
        spare("fees", "a mid: fees are taken off a bid or put on an ask; say which side this is")
    if accrual == "clean":
        needs("accrued", "a clean price leaves it out; state it in the unit of the price, '0%' where there is none")
    elif accrual == "dirty":
        spare("accrued", "a dirty price, which holds it already")
    if unit == PER_DENOMINATION:
        needs("denomination", "the price is for one denomination")
    elif unit is not None:
        spare("denomination", f"the unit '{unit}'")


def _sizes(values: dict[str, float | None], body: Mapping, faults: list[Fault]) -> None:
    for key in ("bid_offer", "fees", "tolerance"):
        if values[key] is not None and values[key] < 0.0:
            faults.append(expected("a number of 0 or more", body.get(key)))
    if values["issue_price"] is not None and values["issue_price"] <= 0.0:
        faults.append(expected("a price above 0", body.get("issue_price")))
