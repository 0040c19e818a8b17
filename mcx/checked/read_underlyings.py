"""What a market says of an asset or a rate of exchange: level, vol, and what an asset's level gives up as time goes by.

Nothing of that is taken for granted: a yield, dividends, forwards, or the word that it is a total-return index.
"""

from __future__ import annotations

import re

from mcx.checked.curves import MarketReader, correlation
from mcx.checked.market import AssetMarket, Blend, Decrement, Dividend, FxMarket, Quanto
from mcx.checked.reading import check_keys, items_of, one_of, read, value_of
from mcx.checked.strike_vols import priced_curve, read_strike_vols
from mcx.checked.values import amount, asset_name, currency_code
from mcx.faults import Fault
from mcx.text.located import Mapping, Node, Scalar
from mcx.text.scalars import DATE, date, expected, percent, time

LATER = ("borrow", "skew")
UNDERLYINGS = ("price", "total return")
GIVEN_UP = ("yield", "dividends", "forwards")  # what a total-return index does not give up
FX = re.compile("([A-Z]{3}) per ([A-Z]{3})")
FX_WORDS = "a rate of exchange as 'EUR per USD': units of the first for one of the second"


def read_asset(reader: MarketReader, name: Scalar, node: Node) -> AssetMarket | None:
    """One asset; None where anything is wrong with it."""
    faults, what = reader.faults, f"the asset '{name}'"
    before = len(faults)
    value_of(name, asset_name, faults)
    if not isinstance(node, Mapping):
        faults.append(expected("'{spot: ..., currency: ..., yield: ..., vol: ...}'", node))
        return None
    required = ("spot", "vol") if reader.textbook else ("spot", "currency", "vol")
    check_keys(node, ("currency", *GIVEN_UP, "dividend_blend", "underlying", "decrement", "quanto"), required, faults,
               what, LATER)
    kind = one_of(node.get("underlying"), UNDERLYINGS, faults, "an underlying") if "underlying" in node else "price"
    _check_what_is_given_up(node, kind == "total return", faults, what)
    spot = reader.quoted(node.get("spot"), amount) if "spot" in node else None
    smiles = isinstance(node.get("vol"), Mapping) and "strikes" in node.get("vol")
    by_strike = read_strike_vols(reader, node.get("vol"), spot) if smiles else None
    curves = {key: reader.curve(node.get(key), form)
              for key, form in (("vol", "vol"), ("yield", "zero"), ("forwards", "forward"))
              if key in node and not (smiles and key == "vol")}
    currency = read(node, "currency", currency_code, faults) or ""
    dividends = _dividends(reader, node.get("dividends"))
    blend = _blend(reader, node.get("dividend_blend")) if "dividend_blend" in node else None
    decrement = _decrement(reader, node.get("decrement")) if "decrement" in node else None
    quanto = _quanto(reader, node.get("quanto"), currency) if "quanto" in node else None
    if len(faults) > before:
        return None
    return AssetMarket(
        name.text, spot, currency, priced_curve(by_strike) if by_strike else curves["vol"], name.place,
        dividend_yield=curves.get("yield"), forwards=curves.get("forwards"), dividends=dividends, blend=blend,
        total_return=kind == "total return", decrement=decrement, quanto=quanto, by_strike=by_strike)


def read_fx(reader: MarketReader, name: Scalar, node: Node) -> FxMarket | None:
    """One rate of exchange; None where anything is wrong with it."""
    before = len(reader.faults)
    per = value_of(name, _direction, reader.faults)
    if not isinstance(node, Mapping):
        reader.faults.append(expected("'{spot: ..., vol: ...}'", node))
        return None
    check_keys(node, (), ("spot", "vol"), reader.faults, f"the rate '{name}'")
    spot = reader.quoted(node.get("spot"), amount) if "spot" in node else None
    vol = reader.curve(node.get("vol"), "vol") if "vol" in node else None
    return FxMarket(name.text, per, spot, vol, name.place) if len(reader.faults) == before else None


def _check_what_is_given_up(node: Mapping, total_return: bool, faults: list[Fault], what: str) -> None:
    """Exactly one way to say it; a decrement belongs to a total-return index."""
    if total_return:
        faults += [Fault(node.key(key).place, f"'{key}' counts twice: {what} is a total-return index, whose level "
                                              "keeps its dividends") for key in GIVEN_UP if key in node]
    else:
        if "decrement" in node:
            faults.append(Fault(node.key("decrement").place, "a decrement is taken from a total-return index; write "
                                                             "'underlying: total return' as well"))
        elif not set(GIVEN_UP) & set(node.keys()):
            text = f"'yield', 'dividends' or 'forwards' is missing in {what}; write 'yield: 0%' for none"
            faults.append(Fault(node.place, text))
        faults += [Fault(node.key("forwards").place, f"{what} has both '{other}' and 'forwards'; keep one")
                   for other in ("yield", "dividends") if other in node and "forwards" in node]
    if "dividend_blend" in node and "dividends" not in node:
        faults.append(Fault(node.key("dividend_blend").place, f"a blend is for cash dividends, and {what} has none"))


def _dividends(reader: MarketReader, node: Node | None) -> tuple[Dividend, ...]:
    """Dividends in order of time, each ex date once."""
    written = "dividends by ex date, as '[{ex: 2027-05-03, cash: 4.0}, {ex: 2028-05-02, share: 1.5%}]'"
    found: dict[float, Dividend] = {}
    items = items_of(node, reader.faults, written)
    if node is not None and not items and not reader.faults:
        reader.faults.append(expected(written, node, "there is none; write 'yield: 0%'"))
    for item in items:
        if not isinstance(item, Mapping):
            reader.faults.append(expected("'{ex: 2027-05-03, cash: 4.0}'", item))
            continue
        one = _dividend(reader, item)
        if one is not None and one.time in found:
            reader.faults.append(Fault(one.place, f"a second dividend on {one.label}; one may have both cash and "
                                                  "share"))
        elif one is not None:
            found[one.time] = one
    return tuple(found[when] for when in sorted(found))


def _dividend(reader: MarketReader, node: Mapping) -> Dividend | None:
    before = len(reader.faults)
    check_keys(node, ("cash", "share"), ("ex",), reader.faults, "the dividend")
    if "ex" in node and not {"cash", "share"} & set(node.keys()):
        reader.faults.append(Fault(node.place, "the dividend has neither 'cash' nor 'share'"))
    when = read(node, "ex", time if reader.textbook else date, reader.faults)
    cash = reader.quoted(node.get("cash"), amount) if "cash" in node else None
    share = reader.quoted(node.get("share"), _share) if "share" in node else None
    if len(reader.faults) > before or (reader.valuation is None and not reader.textbook):
        return None
    years = when if reader.textbook else (when - reader.valuation).days / 365
    return Dividend(years, node.get("ex").text, node.get("ex").place, cash, share)


def _share(node: Node) -> float | Fault:
    """A part of the level, with its unit."""
    value = percent(node)
    if not isinstance(value, Fault) and not 0 < value < 1:
        return expected("a share above 0% and below 100%", node)
    return value


def _blend(reader: MarketReader, node: Node) -> Blend | None:
    if not isinstance(node, Mapping):
        reader.faults.append(expected("'{cash_until: 1y, share_from: 3y}'", node))
        return None
    if not check_keys(node, (), ("cash_until", "share_from"), reader.faults, "the blend of dividends"):
        return None
    ends = [_time(reader, node.get(key)) for key in ("cash_until", "share_from")]
    if None in ends:
        return None
    if ends[1] <= ends[0]:
        reader.faults.append(expected("a date or tenor after 'cash_until'", node.get("share_from")))
    return Blend(*ends, node.place)


def _time(reader: MarketReader, node: Node) -> float | None:
    if isinstance(node, Scalar) and DATE.fullmatch(node.text) and reader.valuation:  # it may be over already
        day = value_of(node, date, reader.faults)
        return None if day is None else (day - reader.valuation).days / 365
    if isinstance(node, Scalar):
        return reader.time(node)
    reader.faults.append(expected("a tenor or date", node))
    return None


def _decrement(reader: MarketReader, node: Node) -> Decrement | None:
    """A percentage a year, or points a year."""
    if isinstance(node, Scalar) and node.text.endswith(" points"):
        quoted = reader.quoted(Scalar(node.text.removesuffix(" points"), node.place), amount)
        return None if quoted is None else Decrement(quoted, points=True)
    if isinstance(node, Scalar) and not node.text.endswith(("%", "bp")):
        reader.faults.append(expected("a decrement a year, as '5%' or '50 points'", node))
        return None
    quoted = reader.quoted(node, _share)
    return None if quoted is None else Decrement(quoted, points=False)


def _direction(node: Node) -> tuple[str, str] | Fault:
    """The two currencies of a rate of exchange."""
    found = FX.fullmatch(node.text) if isinstance(node, Scalar) else None
    return (found[1], found[2]) if found and found[1] != found[2] else expected(FX_WORDS, node)


def _quanto(reader: MarketReader, node: Node, currency: str) -> Quanto | None:
    """Vol and correlation of the rate of exchange, whose direction must be said: the sign hangs on it."""
    if not isinstance(node, Mapping):
        reader.faults.append(expected("'{fx_vol: 9%, fx_correlation: -20%, fx: EUR per USD}'", node))
        return None
    if not check_keys(node, (), ("fx_vol", "fx_correlation", "fx"), reader.faults, "the quanto"):
        return None
    vol = reader.curve(node.get("fx_vol"), "vol")
    with_asset = reader.quoted(node.get("fx_correlation"), correlation)
    per = read(node, "fx", _direction, reader.faults)
    if per and currency and currency not in per:
        reader.faults.append(expected(f"a rate of exchange with {currency}, the asset's currency", node.get("fx")))
    if vol is None or with_asset is None or per is None:
        return None
    return Quanto(vol, with_asset, per, node.place)
