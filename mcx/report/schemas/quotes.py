"""The schema of a dealer's quote."""

from __future__ import annotations

from mcx.checked.dealer_quote import (
    ACCRUALS,
    COMMITMENTS,
    KEYS,
    MOMENT,
    OF_NOTIONAL,
    OF_UNITS,
    PER_DENOMINATION,
    PERCENT,
    REQUIRED,
    SIDES,
    TEXTBOOK,
)
from mcx.report.schemas.shapes import NAME, Schema, absent, amount, by_name, either, line, mapping, percent, text, words

TWO_WAY = "two-way"
IN_ITS_UNIT = ("price", "bid", "ask", "bid_offer", "accrued", "fees")


def quote() -> Schema:
    """What a dealer said; the unit decides how its numbers are written, the side which of them stand."""
    keys: dict[str, Schema] = {
        "quote": line("who quotes"),
        "at": text(f"^({MOMENT.pattern}|{TEXTBOOK})$", "a date, or a date and time, as 2026-12-01 16:30"),
        "side": words(SIDES),
        "unit": words(dict.fromkeys((*OF_NOTIONAL, *OF_UNITS))),
        "accrual": words(ACCRUALS),
        "commitment": words(COMMITMENTS),
        "for": line("the title of the contract, where the files hold several"),
        "spot": either(amount(), by_name(amount(), NAME, least=0)),
        "source": line(),
        **dict.fromkeys(IN_ITS_UNIT, {}),
        **{key: amount() for key in ("denomination", "size")},
        **{key: either(percent(), {"type": "number"}) for key in ("issue_price", "tolerance")},
    }
    assert set(keys) == {*KEYS, *REQUIRED}, "a key of quotes has no shape"
    return mapping(keys, REQUIRED) | {"allOf": [
        _where("unit", PERCENT, _all(percent()), _all({"type": "number"})),
        _where("side", TWO_WAY, {"required": ["bid", "ask"]} | absent("price", "bid_offer"),
               {"required": ["price"]} | absent("bid", "ask")),
        _where("side", "mid", absent("fees"), {}),
        _where("accrual", "clean", {"required": ["accrued"]}, absent("accrued")),
        _where("unit", PER_DENOMINATION, {"required": ["denomination"]}, absent("denomination")),
    ]}


def _all(number: Schema) -> Schema:
    """The numbers that are in the quote's own unit."""
    return {"properties": dict.fromkeys(IN_ITS_UNIT, number)}


def _where(key: str, word: str, then: Schema, otherwise: Schema) -> Schema:
    return {"if": {"properties": {key: {"const": word}}, "required": [key]}, "then": then, "else": otherwise}
