"""The schema of a contract: its frame, and the terms of the definition that it names."""

from __future__ import annotations

from collections.abc import Iterable, Iterator

from mcx.checked.conversions import CONVERSIONS
from mcx.checked.day_count_names import DAY_COUNTS
from mcx.checked.payoff import MONEY, MULTIPLES, Deliver, Payoff, Term
from mcx.checked.read_contract import CALENDAR_KEYS, OPEN, PAST, REQUIRED, ROLLS, uses_period
from mcx.checked.read_history import FACTS, WATCHABLE
from mcx.checked.read_terms import BOUNDS
from mcx.checked.term_values import DATED_TYPES, MOST_STEPS, OBSERVED, ONE_OF_MANY, SOME_OF_MANY
from mcx.report.schemas.shapes import (
    CURRENCY,
    DATE,
    NAME,
    TIME,
    Schema,
    absent,
    amount,
    by_name,
    core_value,
    either,
    line,
    listed,
    mapping,
    number,
    percent,
    refer,
    text,
    words,
)
from mcx.text.located import Scalar

NUMERIC = {"number": number, "percent": percent, "level": amount}
WITH_DAYS = (*DATED_TYPES, "level")
DATED = ("start", "settlement", "calendar")


def contract(payoffs: Iterable[Payoff], only: bool) -> Schema:
    """Contracts on these definitions; with `only` on no others."""
    payoffs = list(payoffs)
    name: Schema = words(each.name for each in payoffs) if only else line("the name of a definition")
    rules: list[Schema] = [{"oneOf": [{"required": ["notional"]}, {"required": ["units"]}]}]
    rules += [{"if": {"properties": {"payoff": {"const": each.name}}, "required": ["payoff"]}, "then": _on(each)}
              for each in payoffs]
    return mapping({
        "contract": line("the title"),
        "denomination": amount() | {"description": "nominal amount of one note, where shares are delivered"},
        "currency": text(CURRENCY, "as EUR: what the contract pays in"),
        "notional": amount() | {"description": "payments are multiples of it"},
        "units": amount() | {"description": "payments are money per unit"},
        "assets": listed({"type": ["string", "number"], "pattern": NAME}) | {"uniqueItems": True},
        "start": text(f"^{DATE}$", "the date from which periods and years count"),
        "day_count": words(DAY_COUNTS),
        "settlement": text("^[0-9]{1,3} +business days?$", "lag of payments, as 2 business days"),
        "calendar": refer("calendar"),
        "payment_calendar": refer("calendar"),
        "conversion": by_name(words(CONVERSIONS), least=0),
        "payoff": name,
        "terms": {"type": "object"},
        "happened": refer("what happened"),
        "disruption": _by_date(either(text(f"^{DATE}$"), amount()), NAME),
        "adjustments": _by_date(amount(), NAME),
    }, REQUIRED) | {"allOf": rules}


def definitions() -> dict[str, Schema]:
    """What the schema of a contract refers to."""
    day = text(f"^({DATE}|{TIME})$")
    written = text(f"^{DATE}$")
    return {
        "calendar": mapping({
            "holidays": either(line("as ECB or XNYS, or none for weekends only"), listed(line())),
            "roll": words(ROLLS),
            "open": words(OPEN),
            "extra_holidays": listed(text(f"^{DATE}$"), least=0),
        }, ("holidays", "roll")) | {
            "if": {"properties": {"holidays": {"type": "array", "minItems": 2}}},
            "then": {"required": ["open"]}, "else": absent("open")},
        "day": day,
        "what happened": _by_date({"type": ["boolean", "number", "string"]}),
        "step": text("^[0-9]{0,4}[1-9][0-9]{0,4} +(business day|day|week|month|year)s?$"),
        "ends on a date": {"properties": {"until": written}},
        "has a date": _anywhere(written, refer("has a date")),
        "has a time": _anywhere(text(f"^{TIME}$"), refer("has a time")),
    }


def _by_date(value: Schema, names: str = "") -> Schema:
    """Values by name and by date."""
    return by_name(by_name(value, f"^{DATE}$"), names, least=0)


def _anywhere(day: Schema, again: Schema) -> Schema:
    """A value in which such a day is written out, or the dates on which a level is observed; `again` names this."""
    inside = {"type": "array", "contains": day}
    rule = either(*({"properties": {key: day}, "required": [key]} for key in ("from", "until")),
                  *({"properties": {key: again}, "required": [key]} for key in OBSERVED),
                  {"properties": {"continuous": inside}, "required": ["continuous"]})
    return either(day, inside, {"type": "object"} | rule)


def _on(payoff: Payoff) -> Schema:
    """What a definition asks of a contract: its terms, its assets, the size, and dates or times throughout."""
    fewest, most = payoff.assets
    assets: Schema = {"minItems": fewest} | ({} if most is None else {"maxItems": most})
    needed = [term.name for term in payoff.terms if not term.optional and term.default is None]
    terms = mapping({term.name: _term(term, payoff) for term in payoff.terms}, needed)
    dated = [*DATED, *(["day_count"] if uses_period(payoff) else [])]
    size = {MONEY: absent("notional"), MULTIPLES: absent("units")}.get(payoff.pays, {})
    whole = {"if": {"required": ["notional"]}, "then": {"required": ["denomination"]}, "else": absent("denomination")}
    delivers = any(isinstance(pay, Deliver) for pay in payoff.payments())
    rules = [*([size] if size else []), whole if delivers else absent("denomination"),
             {"properties": {"happened": {"properties": dict(_happened(payoff)), "additionalProperties": False}}}]
    if any(term.type in WITH_DAYS for term in payoff.terms):
        times = {"properties": {"terms": {"allOf": [_some(payoff, "has a time"),
                                                    {"not": _some(payoff, "has a date")}]}}}
        rules.append({"if": times, "then": absent(*CALENDAR_KEYS, *PAST), "else": {"required": dated}})
        rules.append({"not": {"properties": {"terms": {"allOf": [_some(payoff, "has a time"),
                                                                 _some(payoff, "has a date")]}}}})
    return {"properties": {"assets": assets, "terms": terms}, "allOf": rules}


def _happened(payoff: Payoff) -> Iterator[tuple[str, Schema]]:
    """Running values of which a contract may say what they have been."""
    for each in payoff.running:
        if each.how in WATCHABLE:
            yield each.name, by_name({"type": "boolean"} if each.how in FACTS else number(), f"^{DATE}$")


def _some(payoff: Payoff, what: str) -> Schema:
    """Terms of which one has such a day."""
    return either(*({"properties": {term.name: refer(what)}, "required": [term.name]}
                    for term in payoff.terms if term.type in WITH_DAYS))


def _term(term: Term, payoff: Payoff) -> Schema:
    """A term's value, with its word about it and its default."""
    said: Schema = {"description": term.about} if term.about else {}
    if isinstance(term.default, Scalar):
        said["default"] = core_value(term.default)
    return said | _value(term, payoff)


def _value(term: Term, payoff: Payoff) -> Schema:
    match term.type:
        case "choice":
            return words(term.choices)
        case "flag":
            return {"type": "boolean"}
        case "asset":
            return {"type": ["string", "number"]}
        case "date":
            return _day(payoff)
        case "dates" | "watch":
            return _days(payoff, continuous=term.type == "watch")
    bounds = {key: limit for key in BOUNDS if (limit := getattr(term, key)) is not None}
    one = NUMERIC[term.type](bounds)
    row = either(one, by_name(one, NAME), listed(one)) if term.type == "level" or term.per == "assets" else one
    row = either(*row["anyOf"], *_observed(payoff)) if term.type == "level" else row
    return either(row, listed(row)) if term.per not in ("", "assets") else row


def _day(payoff: Payoff) -> Schema:
    return either(refer("day"), text(_named(payoff, ONE_OF_MANY, many=False)))


def _observed(payoff: Payoff) -> Iterator[Schema]:
    """A level that is observed: on a date, or an average or extreme over several."""
    for how in OBSERVED:
        yield mapping({how: _day(payoff) if how == "fixing" else _days(payoff, continuous=False)}, (how,))


def _days(payoff: Payoff, continuous: bool) -> Schema:
    """Dates as a list, by a rule, or those of another term; continuously where that may be."""
    day = _day(payoff)
    rule = mapping({
        "from": day, "until": day, "every": refer("step"), "end_of_month": {"type": "boolean"},
        "count": {"type": "integer", "minimum": 1, "maximum": MOST_STEPS},
    }, ("until",)) | {"oneOf": [{"required": ["every"]}, {"required": ["count"]}], "if": refer("ends on a date"),
                      "then": {"required": ["from"]}}
    shapes = [refer("day"), text(_named(payoff, SOME_OF_MANY, many=True)), listed(day), rule]
    if continuous:
        shapes.append(mapping({"continuous": listed(day, 2, 2)}, ("continuous",)))
    return either(*shapes)


def _named(payoff: Payoff, parts: Iterable[str], many: bool) -> str:
    """The pattern of references to date terms: a single date has no parts; one of many dates needs its part."""
    single = [term.name for term in payoff.terms if term.type == "date"]
    several = [term.name for term in payoff.terms if term.type in DATED_TYPES and term.type != "date"]
    found = [f"({'|'.join(single)})"] if single else []
    found += [rf"({'|'.join(several)})(\.({'|'.join(parts)})){'?' if many else ''}"] if several else []
    return f"^({'|'.join(found)})$"
