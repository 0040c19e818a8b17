"""The terms of a definition: typed blanks that a contract fills in."""

from __future__ import annotations

import keyword
import re
from collections.abc import Callable

from mcx.checked.expression import BUILT_IN
from mcx.checked.payoff import Term
from mcx.checked.reading import check_keys, items_of, mapping_of, offered, one_of, read, text_of, value_of
from mcx.faults import Fault
from mcx.text.located import Mapping, Node, Scalar, Sequence
from mcx.text.scalars import expected, flag, number, percent, shortened, word

TYPES = ("number", "percent", "level", "date", "dates", "watch", "choice", "flag", "asset")
NUMERIC = ("number", "percent", "level")
BOUNDS = ("above", "below", "at_least", "at_most")
MOST = 500  # terms, names or events
NAME = re.compile(r"[A-Za-z_][A-Za-z0-9_]*")


def read_terms(node: Node | None, faults: list[Fault]) -> tuple[Term, ...]:
    """The terms in file order; a term at fault is there all the same where its type is known."""
    mapping = mapping_of(node, faults, "terms, each as 'NAME: {type: TYPE}'")
    entries = mapping.entries if mapping else ()
    if not few_enough(mapping, "terms", faults):
        return ()
    schedules = [name.text for name, value in entries
                 if isinstance(value, Mapping) and str(value.get("type") or "") == "dates"]
    terms = [_term(name, value, schedules, faults) for name, value in entries]
    return tuple(term for term in terms if term is not None)


def few_enough(node: Mapping | Sequence | None, what: str, faults: list[Fault]) -> bool:
    """Whether a part of a definition is of a size that somebody can have written."""
    count = 0 if node is None else len(node.items if isinstance(node, Sequence) else node.entries)
    if count > MOST:
        faults.append(Fault(node.place, f"the payoff has {count:,} {what}; at most {MOST} are read"))
    return count <= MOST


def sound_name(key: Scalar, faults: list[Fault]) -> bool:
    """Whether a name can be used in formulas."""
    name = shortened(key.text)
    if key.text in BUILT_IN:
        faults.append(Fault(key.place, f"'{name}' is a word of the grammar; take another name"))
    elif not NAME.fullmatch(key.text) or keyword.iskeyword(key.text):
        faults.append(expected("a name of letters, digits and '_' that is no word of Python", key))
    else:
        return True
    return False


def _term(key: Scalar, node: Node, schedules: list[str], faults: list[Fault]) -> Term | None:
    sound_name(key, faults)
    name = shortened(key.text)
    if not isinstance(node, Mapping):
        faults.append(expected(f"the type of the term, as '{name}: {{type: level}}'", node))
        return None
    type_ = node.get("type")
    what = f"the term '{name}'"
    kind = None if type_ is None else one_of(type_, TYPES, faults, "a type")
    check_keys(node, ("about", "optional", "default", "per", "of", *BOUNDS), ("type",), faults, what)
    if kind is None:
        return None
    _refuse_keys(node, kind, faults)
    bounds = _bounds(node, kind, faults)
    # Where it cannot be read it was meant to be optional: else every `given` of the term would be at fault as well.
    optional = "optional" in node and read(node, "optional", flag, faults) is not False
    if optional and "default" in node:
        faults.append(Fault(node.key("default").place, f"{what} is optional and has a default; keep one of the two"))
    term = Term(
        name=key.text, type=kind, place=key.place, about=text_of(node, "about", faults),
        per=_per(key, node, kind, schedules, faults), optional=optional, default=node.get("default"),
        choices=_choices(node, what, faults) if kind == "choice" else (), **bounds,
    )
    _check_default(term, faults)
    return term


def _refuse_keys(node: Mapping, kind: str, faults: list[Fault]) -> None:
    """Keys that do not go with the type."""
    fits: dict[str, tuple[str, ...]] = {"of": ("choice",), "per": (*NUMERIC, "dates")} | dict.fromkeys(BOUNDS, NUMERIC)
    for key, types in fits.items():
        if key in node and kind not in types:
            faults.append(Fault(node.key(key).place, f"'{key}' does not go with the type '{kind}'"))


def _choices(node: Mapping, what: str, faults: list[Fault]) -> tuple[str, ...]:
    if "of" not in node:
        faults.append(Fault(node.place, f"'of' is missing in {what}: the list of its words"))
        return ()
    items = items_of(node.get("of"), faults, "a list of words, as '[call, put]'")
    if isinstance(node.get("of"), Sequence) and len(items) < 2:
        faults.append(Fault(node.get("of").place, "a choice needs two words or more"))
    words: dict[str, None] = {}
    for item in items:
        text = value_of(item, word, faults)
        if text in words:
            faults.append(Fault(item.place, f"the word '{shortened(text)}' stands twice"))
        elif text is not None:
            words[text] = None
    return tuple(words)


def _per(key: Scalar, node: Mapping, kind: str, schedules: list[str], faults: list[Fault]) -> str:
    per = read(node, "per", word, faults)
    if per is None or kind not in (*NUMERIC, "dates"):
        return ""
    known = [name for name in schedules if name != key.text] + (["assets"] if kind in NUMERIC else [])
    if per not in known:
        faults.append(Fault(node.get("per").place,
                            f"'{shortened(per)}' is not what a term can be 'per'{offered(per, known)}"))
        return ""
    return per


def _bounds(node: Mapping, kind: str, faults: list[Fault]) -> dict[str, float | None]:
    if kind not in NUMERIC:
        return {}
    bounds = {key: read(node, key, percent if kind == "percent" else number, faults) for key in BOUNDS}
    for strict, other in (("above", "at_least"), ("below", "at_most")):
        if strict in node and other in node:
            faults.append(Fault(node.key(other).place, f"'{other}' and '{strict}' bound the same side; keep one"))
    stated = {key: value for key, value in bounds.items() if value is not None}
    low = max((value for key, value in stated.items() if key in ("above", "at_least")), default=None)
    high = min((value for key, value in stated.items() if key in ("below", "at_most")), default=None)
    closed = "above" not in stated and "below" not in stated
    if low is not None and high is not None and (low > high or (low == high and not closed)):
        faults.append(Fault(node.place, "no number keeps these bounds"))
    return bounds


def _check_default(term: Term, faults: list[Fault]) -> None:
    """A default must be a value that a contract could state."""
    node = term.default
    if node is None:
        return
    if term.type == "asset":
        faults.append(Fault(node.place, "an asset has no default: every contract names its own"))
    elif term.type == "choice":
        one_of(node, term.choices, faults, "a word of the choice")
    elif term.type == "flag":
        value_of(node, flag, faults)
    elif term.type in NUMERIC and (isinstance(node, Scalar) or not term.per):
        parse: Callable[[Node], float | Fault] = percent if term.type == "percent" else number
        value = value_of(node, parse, faults)
        if value is not None and not _within(term, value):
            faults.append(Fault(node.place, f"the default '{node}' breaks the bounds of '{term.name}'"))


def _within(term: Term, value: float) -> bool:
    return (
        (term.above is None or value > term.above)
        and (term.below is None or value < term.below)
        and (term.at_least is None or value >= term.at_least)
        and (term.at_most is None or value <= term.at_most)
        and (term.type != "level" or value > 0)
    )
