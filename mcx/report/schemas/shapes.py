"""Single values as a schema sees them: what YAML 1.2 makes of a plain text is a number, a flag or nothing to an editor,
and text in all other cases."""

from __future__ import annotations

import re
from collections.abc import Iterable

from mcx.text.located import Scalar
from mcx.text.scalars import DIGITS

Schema = dict[str, object]

UNSIGNED = rf"{DIGITS}([eE][+-]?[0-9]{{1,5}})?\s*(%|bp)"
WITH_UNIT = rf"^[+-]?{UNSIGNED}$"
POSITIVE_WITH_UNIT = rf"^\+?{UNSIGNED}$"
DATE = "[0-9]{4}-(0[1-9]|1[0-2])-(0[1-9]|[12][0-9]|3[01])"
TIME = rf"{DIGITS}[my]"
TENOR = rf"{DIGITS}[dwmy]"
CURRENCY = "^[A-Z]{3}$"
NAME = r"^[A-Za-z0-9_\u0080-\uffff][A-Za-z0-9_.&\u0080-\uffff-]*$"  # of an asset

CORE_NUMBER = re.compile(r"[-+]?(\.[0-9]+|[0-9]+(\.[0-9]*)?)([eE][-+]?[0-9]+)?")
CORE_WORDS = {"": None, "~": None, "null": None, "Null": None, "NULL": None, "true": True, "True": True, "TRUE": True,
              "false": False, "False": False, "FALSE": False}
BOUNDS = {"above": "exclusiveMinimum", "below": "exclusiveMaximum", "at_least": "minimum", "at_most": "maximum"}


def core_value(scalar: Scalar) -> object:
    """What an editor takes a scalar for: the core schema of YAML 1.2, section 10.3."""
    if scalar.quoted:
        return scalar.text
    if scalar.text in CORE_WORDS:
        return CORE_WORDS[scalar.text]
    return float(scalar.text) if CORE_NUMBER.fullmatch(scalar.text) else scalar.text


def refer(name: str) -> Schema:
    """A definition of the same schema."""
    return {"$ref": f"#/definitions/{name}"}


def text(pattern: str = "", about: str = "") -> Schema:
    found: Schema = {"type": "string"} | ({"pattern": pattern} if pattern else {})
    return found | ({"description": about} if about else {})


def words(of: Iterable[str]) -> Schema:
    return {"enum": list(of)}


def line(about: str = "") -> Schema:
    """A line of text, be it one that looks like a number."""
    found: Schema = {"type": ["string", "number", "boolean"]}
    return found | ({"description": about} if about else {})


def either(*shapes: Schema) -> Schema:
    return {"anyOf": list(shapes)}


def listed(item: Schema, least: int = 1, most: int | None = None) -> Schema:
    return {"type": "array", "items": item, "minItems": least} | ({} if most is None else {"maxItems": most})


def mapping(keys: dict[str, Schema], required: Iterable[str] = ()) -> Schema:
    """A mapping of these keys and no others."""
    return {"type": "object", "properties": keys, "required": list(required), "additionalProperties": False}


def by_name(value: Schema, names: str = "", least: int = 1) -> Schema:
    """A mapping whose keys are names that match a pattern."""
    found: Schema = {"type": "object", "minProperties": least, "additionalProperties": value}
    return found | ({"propertyNames": {"pattern": names}} if names else {})


def absent(*keys: str) -> Schema:
    """None of the keys may stand."""
    return {"properties": dict.fromkeys(keys, False)}


def number(bounds: dict[str, float] | None = None) -> Schema:
    """A plain number within bounds (in the grammar's words), or one with its unit, whose bounds no schema can see."""
    return either({"type": "number"} | _limits(bounds or {}), text(WITH_UNIT))


def percent(bounds: dict[str, float] | None = None) -> Schema:
    """A number with its unit, without a minus where the bounds leave none; or a bare 0 where they do."""
    bounds = bounds or {}
    low = max((bounds[key] for key in ("above", "at_least") if key in bounds), default=None)
    with_unit = text(WITH_UNIT if low is None or low < 0.0 else POSITIVE_WITH_UNIT)
    return either(with_unit, {"const": 0}) if _holds(bounds, 0.0) else with_unit


def amount(bounds: dict[str, float] | None = None) -> Schema:
    """A level or an amount of money: a positive number without a unit."""
    return {"type": "number", "exclusiveMinimum": 0} | _limits(bounds or {})


def _limits(bounds: dict[str, float]) -> Schema:
    return {BOUNDS[key]: limit for key, limit in bounds.items()}


def _holds(bounds: dict[str, float], value: float) -> bool:
    return (value > bounds.get("above", -1.0) and value < bounds.get("below", 1.0)
            and bounds.get("at_least", 0.0) <= value <= bounds.get("at_most", 0.0))
