"""From a `market:` document to a `Market`: everything observed on the valuation date, each number as it was
stated.

Curves and single numbers are read in `curves.py`, assets and rates of exchange in
`read_underlyings.py`. What needs a contract to be judged (is every asset there, does the correlation matrix
hold) is checked in `load.py`.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from typing import TypeVar

from mcx.checked.curves import MarketReader, correlation, valuation_of
from mcx.checked.fixings import file_of, read_fixings
from mcx.checked.market import Curve, FxMarket, Market, Quoted
from mcx.checked.read_underlyings import read_asset, read_fx
from mcx.checked.reading import check_keys, mapping_of, text_of, value_of
from mcx.checked.values import currency_code
from mcx.faults import Fault, Place, nearest
from mcx.text.located import Document, Mapping, Node, Scalar
from mcx.text.scalars import expected, percent

T = TypeVar("T")

KEYS = ("funding", "fx", "correlation", "fixings", "uncertainty", "source", "as_of")
LATER = ("borrow",)
UNCERTAIN = ("rates", "funding", "spot", "yield", "forwards", "vol", "correlation")


def read_market(document: Document, table: Document | None = None) -> tuple[Market, list[Fault]]:
    """The market that a document says, without what is at fault in it; and what is wrong. `table` is the CSV file of
    fixings that it names."""
    body, faults = document.body, []
    valuation, textbook = valuation_of(body.get("market"), faults)
    reader = MarketReader(valuation, textbook, faults)
    check_keys(body, KEYS, ("market", "rates", "assets"), faults, "the market", LATER)
    rates = _by_currency(reader, body.get("rates"), "rates by currency, as '{EUR: 2.1%}'", factors=True)
    funding = _by_currency(reader, body.get("funding"), "funding spreads by currency, as '{EUR: 80 bp}'")
    named = mapping_of(body.get("assets"), faults, "assets by name") or Mapping((), body.place)
    assets = _each(named, lambda name, node: read_asset(reader, name, node))
    rates_of_exchange = mapping_of(body.get("fx"), faults,
                                   "rates of exchange, as '{EUR per USD: {spot: ..., vol: ...}}'")
    fx = _each(rates_of_exchange or Mapping((), body.place), lambda name, node: read_fx(reader, name, node))
    if "assets" in body and not named.entries:
        faults.append(expected("assets by name", body.get("assets"), "there is none"))
    _check_rates_of_exchange(fx.values(), named, faults)
    if textbook and "fixings" in body:
        faults.append(Fault(body.key("fixings").place, "fixings have dates; a textbook market has none"))
    before = len(faults)
    fixings = read_fixings(body.get("fixings"), table, (*named.keys(), *fx), faults)
    market = Market(
        valuation=valuation, rates=rates, funding=funding, assets=assets,
        correlation=_correlations(reader, body.get("correlation"), (*named.keys(), *fx)),
        uncertainty=_uncertainty(reader, body.get("uncertainty")), place=body.get("market").place,
        source=text_of(body, "source", faults), as_of=text_of(body, "as_of", faults), keys=body.keys(),
        fx=fx, fixings=fixings, fixings_sound=len(faults) == before and (table is not None or not file_of(document)),
        fixings_place=Place(table.file, 1, 1) if table else (body.key("fixings") or body.get("market")).place,
    )
    return market, faults


def _check_rates_of_exchange(rates: Iterable[FxMarket], assets: Mapping, faults: list[Fault]) -> None:
    """Each pair of currencies once, whichever way it is quoted; no name that an asset has."""
    first: dict[frozenset[str], FxMarket] = {}
    for rate in rates:
        known = first.setdefault(frozenset(rate.per), rate)
        if known is not rate:
            text = f"'{rate.name}' is '{known.name}' the other way round, which stands at {known.place}; keep one"
            faults.append(Fault(rate.place, text))
        if rate.name in assets:
            faults.append(Fault(assets.key(rate.name).place, f"'{rate.name}' is the name of a rate of exchange"))


def _each(mapping: Mapping, parse: Callable[[Scalar, Node], T | None]) -> dict[str, T]:
    """What `parse` makes of each entry, those left out for which it gives None."""
    found = {key.text: parse(key, node) for key, node in mapping.entries}
    return {name: value for name, value in found.items() if value is not None}


def _by_currency(
    reader: MarketReader, node: Node | None, what: str, factors: bool = False
) -> dict[str, Curve]:
    """A curve of zero rates, or spreads to them, for each currency."""
    mapping = mapping_of(node, reader.faults, what)
    if mapping is None:
        return {}
    if not mapping.entries:
        reader.faults.append(expected(what, mapping, "there is none"))

    def curve(key: Scalar, value: Node) -> Curve | None:
        value_of(key, currency_code, reader.faults)
        return reader.curve(value, "zero", factors)

    return _each(mapping, curve)


def _correlations(
    reader: MarketReader, node: Node | None, assets: Iterable[str]
) -> dict[tuple[str, str], Quoted]:
    """Each pair of assets once."""
    faults, assets = reader.faults, tuple(assets)
    mapping = mapping_of(node, faults, "correlations by pair, as '{harbour/lantern: 65%}'")
    found: dict[tuple[str, str], Quoted] = {}
    for key, value in mapping.entries if mapping else ():
        quoted = reader.quoted(value, correlation)
        names = tuple(part.strip() for part in key.text.split("/"))
        if len(names) != 2:
            faults.append(expected("a pair of assets, as 'harbour/lantern'", key))
            continue
        unknown = [name for name in names if name not in assets]
        for name in unknown:
            faults.append(Fault(key.place, f"'{name}' is no asset of the market{_pair_meant(names, assets)}"))
        if names[0] == names[1] and not unknown:
            faults.append(expected("two different assets", key))
        elif names in found or names[::-1] in found:
            faults.append(Fault(key.place,
                                f"the correlation of '{names[0]}' and '{names[1]}' is given twice"))
        elif quoted is not None:
            found[names] = quoted
    return found


def _pair_meant(names: tuple[str, ...], assets: Iterable[str]) -> str:
    """"; did you mean 'harbour/lantern'?" where each name is an asset or near one, else the empty string."""
    meant: list[str] = []
    for name, other in zip(names, names[::-1], strict=True):
        others = (each for each in assets if each not in (other, *meant))
        meant.append(name if name in assets else nearest(name, others))
    return f"; did you mean '{'/'.join(meant)}'?" if all(meant) else ""


def _uncertainty(reader: MarketReader, node: Node | None) -> dict[str, Quoted]:
    """90 % half-widths for all numbers of a kind."""
    mapping = mapping_of(node, reader.faults, "half-widths by kind of number, as '{vol: 1.5%}'")
    if mapping is None:
        return {}
    check_keys(mapping, UNCERTAIN, (), reader.faults, "the uncertainty", LATER)

    def half_width(key: Scalar, value: Node) -> Quoted | None:
        quoted = reader.quoted(value, percent)
        if quoted is not None and quoted.value < 0:
            reader.faults.append(expected("a half-width of 0 or more", value))
        return quoted

    return _each(mapping, half_width)
