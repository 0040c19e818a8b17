"""Formulas that YAML cut at a comma inside `{ }` or `[ ]`: noticing them, saying so, and mending them; and numbers
that it cut at a decimal comma inside `{ }`.

`{pay: max(a, b)}` is, to YAML, the key `pay` with the value `max(a`, and a second key `b)` without a value. A bracket
left open in a plain value with fitting ends behind it gives it away.
"""

from __future__ import annotations

import re

from mcx.faults import Fault
from mcx.text.located import Mapping, Node, Scalar
from mcx.text.source import Source


WHOLE = re.compile("[+-]?[0-9]+")
DIGITS = re.compile(r"[0-9]+(\.[0-9]+)?\s*(%|bp)?")
MOST_PIECES = 50
LONGEST_LINE = 300


def mended_entries(
    pairs: list[tuple[Node, Node]], source: Source, faults: list[Fault]
) -> list[tuple[Node, Node]]:
    """The entries of a mapping in braces, with formulas that were cut put together again and a fault for each."""
    mended: list[tuple[Node, Node]] = []
    cuts: list[Scalar] = []
    at = 0
    while at < len(pairs):
        key, value = pairs[at]
        last = _digits_behind(pairs, at, source)
        if last > at:  # whoever reads the number says what to write
            value = _joined(value, pairs[last][0], source)
        elif _cut_off(value):
            last = _closing(value, at, [later if _absent(nothing) else None for later, nothing in pairs])
            if last > at:
                value = _joined(value, pairs[last][0], source)
                cuts.append(value)
        mended.append((key, value))
        at = last + 1
    _report(cuts, "{ }", source, faults)
    return mended


def mended_items(nodes: list[Node], source: Source, faults: list[Fault]) -> list[Node]:
    """The items of a list in brackets, mended likewise; `[pay: max(a, b)]` is a mapping of one entry and `b)`."""
    mended: list[Node] = []
    cuts: list[Scalar] = []
    at = 0
    while at < len(nodes):
        node = nodes[at]
        pair = node.entries[0] if isinstance(node, Mapping) and node.flow and len(node.entries) == 1 else None
        value = pair[1] if pair else node
        last = _closing(value, at, nodes) if _cut_off(value) else at
        if last > at:
            whole = _joined(value, nodes[last], source)
            cuts.append(whole)
            node = Mapping(((pair[0], whole),), node.place, flow=True) if pair else whole
        mended.append(node)
        at = last + 1
    _report(cuts, "[ ]", source, faults)
    return mended


def _digits_behind(pairs: list[tuple[Node, Node]], at: int, source: Source) -> int:
    """The index of the last piece of a number cut at its commas, as in `{vol: 17,5%}` with no blank behind them; `at`
    if it was not cut."""
    last, piece = at, pairs[at][1]
    if not (isinstance(piece, Scalar) and WHOLE.fullmatch(piece.text)) or piece.quoted:
        return at
    for number in range(at + 1, len(pairs)):
        digits, nothing = pairs[number]
        if not (_absent(nothing) and isinstance(digits, Scalar) and DIGITS.fullmatch(digits.text)) or digits.quoted:
            break
        comma = source.position(piece.at(len(piece.text)))
        if source.text[comma] != "," or source.position(digits.place) != comma + 1:
            break
        last, piece = number, digits
    return last


def _absent(node: Node) -> bool:
    return isinstance(node, Scalar) and node.absent


def _cut_off(node: Node) -> bool:
    """Whether a plain value leaves a bracket open."""
    return isinstance(node, Scalar) and not node.quoted and _open_brackets(node.text) > 0


def _closing(value: Scalar, at: int, pieces: list[Node | None]) -> int:
    """The index of the piece that closes the brackets of the value at index `at`, or `at` itself if none does."""
    depth = _open_brackets(value.text)
    for number in range(at + 1, min(len(pieces), at + 1 + MOST_PIECES)):
        piece = pieces[number]
        if not isinstance(piece, Scalar) or piece.quoted:
            return at
        depth += _open_brackets(piece.text)
        if depth == 0:
            return number
    return at


def _open_brackets(text: str) -> int:
    return text.count("(") - text.count(")")


def _joined(first: Scalar, last: Scalar, source: Source) -> Scalar:
    """The formula from the first piece to the last, as it stands in the file."""
    written = source.text[source.position(first.place) : source.position(last.at(len(last.text)))]
    return Scalar(" ".join(written.split()) if "\n" in written else written, first.place)


def _report(cuts: list[Scalar], brackets: str, source: Source, faults: list[Fault]) -> None:
    """One fault for each formula that was cut; the corrected line mends all that stand on it."""
    corrected: dict[int, str] = {}
    for formula in reversed(cuts):  # from the right, so that columns stay
        number, start = formula.place.line, formula.place.column - 1
        line = corrected.get(number, source.lines[number - 1])
        if line.startswith(formula.text, start) and len(line) <= LONGEST_LINE:
            corrected[number] = line[:start] + in_quotes(formula.text) + line[start + len(formula.text) :]
    for formula in cuts:
        line = corrected.get(formula.place.line, in_quotes(formula.text)).strip()
        faults.append(Fault(formula.place, f"a formula inside {brackets} was cut at its comma; quote it: {line}"))


def in_quotes(text: str) -> str:
    """The text as a quoted YAML value: in single quotes unless it holds some itself."""
    return f'"{text}"' if "'" in text and '"' not in text else "'" + text.replace("'", "''") + "'"
