"""What the readers of documents share: keys of a mapping, and values that are of one kind or a fault.

A reader collects: every helper appends what is wrong to `faults` and returns None for it, so that one pass over a
document finds everything.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence as Words
from typing import TypeVar

from mcx.faults import Fault, did_you_mean
from mcx.text.located import Mapping, Node, Scalar, Sequence
from mcx.text.scalars import expected, shortened, word

T = TypeVar("T")


def check_keys(
    mapping: Mapping,
    allowed: Iterable[str],
    required: Iterable[str],
    faults: list[Fault],
    what: str,
    later: Iterable[str] = (),
) -> bool:
    """Unknown, missing and later keys of a mapping, which messages call `what` ("the contract"); True if all is well.

    `allowed` need not repeat the required keys. `later` are keys of a later version, refused by name. For an unknown
    key one is offered that does not stand there already, else all that are missing, else all there are.
    """
    before = len(faults)
    required, later = tuple(required), tuple(later)
    known = dict.fromkeys((*required, *allowed))
    free = [key for key in known if key not in mapping]
    missing = [key for key in required if key not in mapping]
    meant = set()  # a key that was misspelt is not missing as well
    for key, _ in mapping.entries:
        if key.text in known:
            continue
        if key.text in later:
            faults.append(later_version(key, f"'{key.text}' is a key"))
            continue
        near = did_you_mean(key.text, free) or offered("", missing or known)
        meant |= {name for name in required if near == f"; did you mean '{name}'?"}
        faults.append(Fault(key.place, f"'{shortened(key.text)}' is not a key of {what}{near}"))
    for key in required:
        if key not in mapping and key not in meant:
            faults.append(Fault(mapping.place, f"'{key}' is missing in {what}"))
    return len(faults) == before


def later_version(node: Node, subject: str) -> Fault:
    """The fault of what a later version will know: refused by name, never ignored."""
    return Fault(node.place, f"{subject} of a later version and is refused rather than ignored")


def read(mapping: Mapping, key: str, parse: Callable[[Node], T | Fault], faults: list[Fault]) -> T | None:
    """The value under a key as `parse` (of `text.scalars`) reads it; None if the key is absent or the value wrong."""
    node = mapping.get(key)
    return None if node is None else value_of(node, parse, faults)


def value_of(node: Node, parse: Callable[[Node], T | Fault], faults: list[Fault]) -> T | None:
    """A node as `parse` reads it; None, and a fault, if it cannot."""
    value = parse(node)
    if isinstance(value, Fault):
        faults.append(value)
        return None
    return value


def one_of(node: Node, words: Words[str], faults: list[Fault], what: str) -> str | None:
    """The text of a node if it is one of the words; `what` ("a type") is for the message."""
    if isinstance(node, Scalar) and node.text in words:
        return node.text
    near = did_you_mean(node.text, words) if isinstance(node, Scalar) else ""
    faults.append(expected(f"{what}: {listed(words, 'or')}", node, near.removeprefix("; ")))
    return None


def mapping_of(node: Node | None, faults: list[Fault], what: str) -> Mapping | None:
    """The node if it is a mapping; None without a fault where nothing was given at all."""
    if node is None or isinstance(node, Mapping):
        return node
    faults.append(expected(what, node))
    return None


def items_of(node: Node | None, faults: list[Fault], what: str) -> tuple[Node, ...]:
    """The items of a list; () without a fault where nothing was given at all."""
    if node is None:
        return ()
    if isinstance(node, Sequence):
        return node.items
    faults.append(expected(what, node))
    return ()


def text_of(mapping: Mapping, key: str, faults: list[Fault]) -> str:
    """The line of text under a key, or ''."""
    return read(mapping, key, word, faults) or ""


def offered(word: str, known: Iterable[str]) -> str:
    """The near miss among what is known, else all of it: "; did you mean 'a'?" or "; expected 'a', 'b' or 'c'"."""
    known = tuple(known)
    return did_you_mean(word, known) or (f"; expected {listed(known, 'or')}" if known else "")


def listed(words: Iterable[str], joint: str = "and") -> str:
    """'a', 'b' and 'c'."""
    quoted = [f"'{each}'" for each in words]
    return quoted[0] if len(quoted) == 1 else f"{', '.join(quoted[:-1])} {joint} {quoted[-1]}"
