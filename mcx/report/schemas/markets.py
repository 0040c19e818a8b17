"""The schema of a market: numbers with their units, alone or with what is said of them, and curves of them."""

from __future__ import annotations

from mcx.checked.curves import COMPOUNDING, MOST_DISCOUNT
from mcx.checked.day_count_names import DAY_COUNTS
from mcx.checked.read_market import KEYS, UNCERTAIN
from mcx.checked.read_underlyings import GIVEN_UP, UNDERLYINGS
from mcx.checked.strike_vols import FEWEST, SPOT
from mcx.report.schemas.shapes import (
    CURRENCY,
    DATE,
    NAME,
    TENOR,
    TIME,
    Schema,
    absent,
    amount,
    by_name,
    either,
    line,
    mapping,
    percent,
    refer,
    text,
    words,
)
from mcx.text.scalars import DIGITS

STRIKE = rf"{DIGITS}([eE][+-]?[0-9]{{1,5}})?"
NODE = f"^({DATE}|{TENOR})$"
RATE_OF_EXCHANGE = "^[A-Z]{3} per [A-Z]{3}$"
NO_LESS = {"at_least": 0.0}
SHARE = percent({"above": 0.0})


def market() -> Schema:
    """Everything observed on a valuation date; in textbook markets assets need no currency."""
    keys = {
        "market": text(f"^({DATE}|0y)$", "the valuation date, or 0y for contracts that use times"),
        "rates": by_name(refer("rates"), CURRENCY) | {"description": "zero rates by currency"},
        "funding": by_name(refer("zero curve"), CURRENCY) | {"description": "the issuer's spread by currency"},
        "fx": by_name(mapping({"spot": refer("level"), "vol": refer("vol curve")}, ("spot", "vol")), RATE_OF_EXCHANGE,
                      least=0),
        "assets": by_name(refer("asset"), NAME),
        "correlation": by_name(refer("correlation"), "^[^/]+/[^/]+$", least=0),
        "fixings": either(text(r"\.[cC][sS][vV]$"), by_name(by_name(amount(), f"^{DATE}$", least=0), least=0)),
        "uncertainty": mapping({key: refer("half-width") for key in UNCERTAIN}),
        "source": line("where the numbers come from"),
        "as_of": line("when they were observed"),
    }
    assert set(keys) == {*KEYS, "market", "rates", "assets"}, "a key of markets has no shape"
    dated = {"properties": {"assets": {"additionalProperties": {"required": ["currency"]}}}}
    return mapping(keys, ("market", "rates", "assets")) | {
        "if": {"properties": {"market": {"const": "0y"}}}, "then": absent("fixings"), "else": dated}


def definitions() -> dict[str, Schema]:
    """What the schema of a market refers to."""
    zero, factor = percent(), {"type": "number", "exclusiveMinimum": 0, "maximum": MOST_DISCOUNT}
    return {
        "level": _quoted(amount()),
        "correlation": _quoted(percent()),
        "half-width": _quoted(percent(NO_LESS)),
        "zero curve": _curve(zero),
        "vol curve": _curve(percent({"above": 0.0})),
        "rates": either(
            _curve(zero),
            mapping({"discount_factors": _nodes(factor)}, ("discount_factors",)),
            mapping({"zero_rates": refer("zero curve"), "compounding": words(COMPOUNDING),
                     "day_count": words(DAY_COUNTS)}, ("zero_rates", "compounding"))),
        "asset": _asset(),
    }


def _quoted(one: Schema) -> Schema:
    """A number, alone or with how uncertain it is, where it is from and when it was seen."""
    width = either({"type": "number", "minimum": 0}, percent(NO_LESS))
    return either(one, mapping({"value": one, "uncertain": width, "source": line(), "as_of": line()}, ("value",)))


def _nodes(one: Schema) -> Schema:
    return by_name(_quoted(one), NODE)


def _curve(one: Schema) -> Schema:
    """One number, or numbers by tenor or date."""
    return either(_quoted(one), _nodes(one))


def _by_strike() -> Schema:
    """A curve of vols for each strike, and the strike whose vols price a contract."""
    priced_at = either(amount(), text(rf"^\+?{STRIKE}\s*%$"), words((SPOT,)))
    strikes = by_name(refer("vol curve"), rf"^\+?{STRIKE}(\s*%)?$", least=FEWEST)
    return mapping({"strikes": strikes, "priced_at": priced_at}, ("strikes", "priced_at"))


def _asset() -> Schema:
    """Spot and vol, and exactly one way to say what the level gives up as time goes by."""
    time = text(f"^({DATE}|{TIME})$")
    dividend = mapping({"ex": time, "cash": refer("level"), "share": _quoted(SHARE)}, ("ex",)) | {
        "anyOf": [{"required": ["cash"]}, {"required": ["share"]}]}
    node = text(NODE)
    asset = mapping({
        "spot": refer("level"),
        "currency": text(CURRENCY),
        "vol": either(refer("vol curve"), _by_strike()),
        "yield": refer("zero curve"),
        "forwards": _nodes(amount()),
        "dividends": {"type": "array", "minItems": 1, "items": dividend},
        "dividend_blend": mapping({"cash_until": node, "share_from": node}, ("cash_until", "share_from")),
        "underlying": words(UNDERLYINGS),
        "decrement": either(_quoted(SHARE), text(r"^\+?[0-9.]+(e[+-]?[0-9]+)? points$")),
        "quanto": mapping({"fx_vol": refer("vol curve"), "fx_correlation": refer("correlation"),
                           "fx": text(RATE_OF_EXCHANGE)}, ("fx_vol", "fx_correlation", "fx")),
    }, ("spot", "vol"))
    kept = {"properties": {"underlying": {"const": "total return"}}, "required": ["underlying"]}
    given_up = absent("decrement") | {"anyOf": [{"required": [key]} for key in GIVEN_UP]}
    one_way = {"if": {"required": ["forwards"]}, "then": absent("yield", "dividends")}
    return asset | {
        "dependencies": {"dividend_blend": ["dividends"]},
        "if": kept, "then": absent(*GIVEN_UP), "else": {"allOf": [given_up, one_way]}}
