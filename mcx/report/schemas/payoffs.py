"""The schema of a definition. Formulas are text to a schema, and whether names mean anything is for the loader."""

from __future__ import annotations

from mcx.checked.payoff import MONEY, MULTIPLES
from mcx.checked.read_events import ACTIONS, KINDS_OF_LEG, OF_DELIVER, OF_PAY, PARTS
from mcx.checked.read_payoff import HOWS, KEYS, WATCHABLE
from mcx.checked.read_readings import CHANGES, MOVES, OF_EVENT
from mcx.checked.read_terms import BOUNDS, NUMERIC, TYPES
from mcx.report.schemas.shapes import (
    Schema,
    absent,
    by_name,
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

NAME = "^[A-Za-z_][A-Za-z0-9_]*$"


def payoff() -> Schema:
    """A definition: typed terms, names for formulas, running values and events."""
    keys = {
        "payoff": text("^[a-z][a-z0-9_]*$", "the name, in lower-case letters, digits and _"),
        "about": line("what it is, in a sentence or two"),
        "assets": either({"type": "integer", "minimum": 1, "maximum": 99}, text("^[1-9][0-9]? or more$")),
        "pays": words((MONEY, MULTIPLES)),
        "terms": by_name(refer("term"), NAME, least=0),
        "let": by_name(refer("formula"), NAME, least=0),
        "running": by_name(refer("running"), NAME, least=0),
        "events": listed(refer("event")),
        "readings": listed(refer("reading"), least=0),
    }
    assert set(keys) == {*KEYS, "payoff", "events"}, "a key of definitions has no shape"
    return mapping(keys, ("payoff", "events"))


def definitions() -> dict[str, Schema]:
    """What the schema of a definition refers to."""
    return {
        "formula": line(),
        "term": _term(),
        "at": text(rf"^\w+(\.({'|'.join(PARTS)}))?$"),
        "hit": mapping({"once": text(NAME, "a running flag")}, ("once",)),
        "running": _running(),
        "event": _event(),
        "action": _action(),
        "reading": _reading(),
    }


def _term() -> Schema:
    """A typed blank; some keys go with some types only."""
    term = mapping({
        "type": words(TYPES), "about": line(), "optional": {"type": "boolean"}, "default": {}, "per": line(),
        "of": listed(line(), 2), **{bound: number() for bound in BOUNDS},
    }, ("type",))
    fits = {"choice": {"required": ["of"]} | absent("per", *BOUNDS), "dates": absent("of", *BOUNDS),
            "percent": {"properties": {bound: percent() for bound in BOUNDS} | {"of": False}},
            "number": absent("of"), "level": absent("of")}
    others = {kind: absent("of", "per", *BOUNDS) for kind in TYPES if kind not in fits}
    assert set(NUMERIC) <= set(fits)
    rules = [{"if": {"properties": {"type": {"const": kind}}}, "then": rule} for kind, rule in (fits | others).items()]
    sides = [{"not": {"required": list(pair)}} for pair in (("above", "at_least"), ("below", "at_most"))]
    optional = {"if": {"properties": {"optional": {"const": True}}, "required": ["optional"]},
                "then": absent("default")}
    return term | {"allOf": [*rules, *sides, optional]}


def _running() -> Schema:
    """Observed on dates, or with a start that events change; extremes and flags may be watched continuously."""
    formula = refer("formula")
    watch = mapping({"continuous": listed(refer("at"), 2, 2)}, ("continuous",))
    keys = mapping({**{how: formula for how in HOWS}, "at": either(refer("at"), watch), "start": formula})
    on_dates = {"properties": {"at": refer("at")}, "required": ["at"]}
    shapes: list[Schema] = [
        {"required": [how, "at"]} | absent(*(other for other in HOWS if other != how))
        | ({} if how in WATCHABLE else {"allOf": [on_dates]}) for how in HOWS]
    return keys | {"anyOf": [*shapes, {"required": ["start"]} | absent("at", *HOWS)]}


def _of_an_action() -> dict[str, Schema]:
    return {"pay": refer("formula"), "deliver": refer("formula"), "of": refer("formula"),
            "set": by_name(refer("formula"), NAME), "end": {"type": "null"}, "as": line(), "part": words(KINDS_OF_LEG),
            "due": line("a date term, or same day")}


def _one_action() -> Schema:
    """Exactly one of the actions; what belongs to a payment stands beside one."""
    return {"oneOf": [{"required": [action]} for action in ACTIONS],
            "dependencies": {**dict.fromkeys(OF_PAY, {"anyOf": [{"required": ["pay"]}, {"required": ["deliver"]}]}),
                             "of": ["deliver"]}}


def _action() -> Schema:
    return either({"const": "end"}, mapping(_of_an_action()) | _one_action())


def _event() -> Schema:
    """One action, or a condition with what happens where it holds and where it does not."""
    actions = listed(refer("action"))
    keys = mapping({
        "at": either(refer("at"), refer("hit")), "from": line(), "until": line(),
        "name": line("of the condition, in every report"),
        "if": refer("formula"), "then": actions, "else": actions, **_of_an_action(),
    }, ("at",))
    return keys | {"if": {"required": ["if"]}, "then": {"required": ["then"]} | absent(*ACTIONS, *OF_DELIVER),
                   "else": absent("then", "else") | _one_action()}


def _reading() -> Schema:
    """Another reading: what it changes of the definition, and of an event its keys or its place."""
    keys = _event()["properties"]
    change = mapping({**{key: keys[key] for key in OF_EVENT}, **{move: line("the name of an event") for move in MOVES}})
    shapes: dict[str, Schema] = {
        "terms": by_name({}, NAME), "later": by_name(text("^[1-9][0-9]{0,4} +business days?$"), NAME),
        "let": by_name(refer("formula"), NAME), "running": by_name(refer("running"), NAME), "events": by_name(change),
    }
    assert set(shapes) == set(CHANGES), "a change of readings has no shape"
    return mapping({"name": line(), "about": line(), **shapes}, ("name", "about")) | {
        "anyOf": [{"required": [key]} for key in CHANGES]}
