"""The text of a formula and its Python syntax tree, or the one fault that keeps it from having one.

Units are blanked out before Python's parser reads the text (`70%` becomes `70 `), so that every column stays, and what
formulas do not know is refused by name before Python could read some other meaning into it.
"""

from __future__ import annotations

import ast
import re
import warnings
from dataclasses import dataclass

from mcx.faults import Fault, Place
from mcx.text.located import Node, Scalar
from mcx.text.scalars import DIGITS, expected, shortened

LONGEST = 2000  # characters
DEEPEST = 50  # levels of brackets, or of the tree

STRING = re.compile(r"'[^']*'|\"[^\"]*\"")
NAME = re.compile(r"(?<![\w.])[A-Za-z_]\w*")
UNIT = re.compile(
    rf"(?<![\w.]){DIGITS}(?:[eE][+-]?[0-9]+)?(?P<unit>\s*bp\b|\s*%(?!\s*(?:[\d.(]|(?!(?:if|else|and|or)\b)[A-Za-z_])))"
)
NOT_KNOWN = "is not part of formulas"
TRAPS: tuple[tuple[re.Pattern[str], str], ...] = tuple(
    (re.compile(pattern), words)
    for pattern, words in (
        (r"#", "a comment inside a formula; put it on its own line above"),
        (r"\blambda\b", "functions cannot be defined in a formula"),
        (r"\b(?:for|async)\b", "a formula has no loops; operations go over all assets by themselves"),
        (r"\b(?:in|is)\b", "'{found}' " + NOT_KNOWN + "; compare with '==', joined by 'or'"),
        (r"\b(?:await|yield|del|import|from|return|def|class|with|while|pass|raise|try|assert|global)\b",
         "'{found}' " + NOT_KNOWN),
        (r"\b[A-Za-z]{1,2}(?=['\"])", "a text is written plainly, as 'call'"),
        (r":=", "':=' " + NOT_KNOWN + "; name a value under 'let'"),
        (r"&&?", "'{found}' " + NOT_KNOWN + "; write 'and'"),
        (r"\|\|?", "'{found}' " + NOT_KNOWN + "; write 'or'"),
        (r"[!~](?!=)", "'{found}' " + NOT_KNOWN + "; write 'not'"),
        (r"\^", "'^' " + NOT_KNOWN + "; a power is written '**'"),
        (r"//", "'//' " + NOT_KNOWN + "; a division is written '/'"),
        (r"%", "'%' stands only behind a number, as in '70%'; there is no remainder"),
        (r"<>", "'<>' " + NOT_KNOWN + "; write '!='"),
        (r"=<", "'=<' " + NOT_KNOWN + "; write '<='"),
        (r"=>", "'=>' " + NOT_KNOWN + "; write '>='"),
        (r"(?<![<>=!])=(?!=)", "'=' " + NOT_KNOWN + "; equality is written '==', and arguments have no names"),
        (r"\?", "'?' " + NOT_KNOWN + "; write 'a if condition else b'"),
        (r"[\[\]]", "lists and subscripts in '[ ]' are not part of formulas"),
        (r"[{}]", "'{{ }}' " + NOT_KNOWN),
        (r"<<|>>|[^\w\s.,()+*/<>=!'\"-]|[^\x00-\x7f]", "'{found}' " + NOT_KNOWN),
    )
)
BEYOND_PYTHON: tuple[tuple[str, str], ...] = (  # what Python's parser says, what we say
    ("expected 'else'", "a conditional needs its 'else': 'a if condition else b'"),
    ("forgot a comma", "an operator or a comma is missing here"),
    ("leading zeros", "write the number without leading zeros"),
    ("literal", "a number runs into a name here; an operator is missing"),
)


@dataclass(frozen=True, slots=True)
class Written:
    """A formula as it stands in the file: its text, where each part stands, and the units behind its numbers."""

    scalar: Scalar
    text: str  # without the blanks before it, line ends turned into blanks
    lead: int  # how many blanks were before it
    units: dict[int, str]  # by the offset at which the number begins

    def offset(self, column: int) -> int:
        """The offset in the text of a column of the syntax tree, which counts bytes."""
        return column if self.text.isascii() else len(self.text.encode()[:column].decode(errors="ignore"))

    def place(self, offset: int) -> Place:
        return self.scalar.at(self.lead + offset)

    def start(self, node: ast.expr) -> int:
        return self.offset(node.col_offset)

    def end(self, node: ast.expr) -> int:
        return self.offset(node.end_col_offset)

    def at(self, node: ast.expr) -> Place:
        """The place in the file of a part of the syntax tree."""
        return self.place(self.start(node))

    def of(self, node: ast.expr) -> str:
        """A part of the syntax tree as it was written."""
        return self.text[self.start(node) : self.end(node)]


def names_in(node: Node | None) -> list[str]:
    """The names that the text of a formula mentions, in order, each once; () for what is no text."""
    text = STRING.sub("", node.text[:LONGEST]) if isinstance(node, Scalar) else ""
    return list(dict.fromkeys(NAME.findall(text)))


def parsed(node: Node) -> tuple[ast.expr, Written] | Fault:
    """The syntax tree of a formula with its text, or what is wrong with it."""
    if not isinstance(node, Scalar) or not node.text.strip():
        return expected("a formula", node)
    if len(node.text) > LONGEST:
        return Fault(node.place, f"the formula has {len(node.text):,} characters; at most {LONGEST:,} are read; "
                                 "name parts of it under 'let'")
    lead = len(node.text) - len(node.text.lstrip())
    text = re.sub(r"\s", " ", node.text.strip())
    written = Written(node, text, lead, {})
    plain = STRING.sub(lambda found: "'" + "_" * (len(found.group()) - 2) + "'", text)
    for found in UNIT.finditer(plain):
        written.units[found.start()] = found["unit"].strip()
    for begin, end in reversed([found.span("unit") for found in UNIT.finditer(plain)]):
        blank = " " * (end - begin)
        plain, text = plain[:begin] + blank + plain[end:], text[:begin] + blank + text[end:]
    wrong = _trap(plain, written) or _wrong_brackets(plain, written)
    if wrong:
        return wrong
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            return ast.parse(text, mode="eval").body, written
    except SyntaxError as error:
        return _syntax_fault(error, written)
    except (ValueError, MemoryError, RecursionError):
        return too_deep(written.place(0))


def too_deep(place: Place) -> Fault:
    return Fault(place, f"more than {DEEPEST} operations stand inside one another; name parts of it under 'let'")


def _trap(plain: str, written: Written) -> Fault | None:
    """The first thing in the text that formulas do not know."""
    if "\\" in written.text:
        return Fault(written.place(written.text.index("\\")), f"a backslash {NOT_KNOWN}")
    found = [(match.start(), number, words.format(found=match.group()))
             for number, (pattern, words) in enumerate(TRAPS) if (match := pattern.search(plain))]
    if not found:
        quote = re.search("['\"]", re.sub("'_*'", lambda whole: " " * len(whole.group()), plain))
        return Fault(written.place(quote.start()), "the quote that opens here is not closed") if quote else None
    offset, _, words = min(found)
    return Fault(written.place(offset), words)


def _wrong_brackets(plain: str, written: Written) -> Fault | None:
    opened: list[int] = []
    for offset, character in enumerate(plain):
        if character == "(":
            opened.append(offset)
            if len(opened) > DEEPEST:
                return too_deep(written.place(offset))
        elif character == ")":
            if not opened:
                return Fault(written.place(offset), "this bracket closes nothing")
            opened.pop()
    return Fault(written.place(opened[-1]), "this bracket is never closed") if opened else None


def _syntax_fault(error: SyntaxError, written: Written) -> Fault:
    offset = min(error.offset - 1 if error.offset else len(written.text), len(written.text))
    message = error.msg or ""
    for said, words in BEYOND_PYTHON:
        if said in message:
            return Fault(written.place(offset), words)
    rest = re.match(r"\w+|\S", written.text[offset:])
    if rest is None:
        return Fault(written.place(offset), "the formula ends too early")
    return Fault(written.place(offset), f"'{shortened(rest.group())}' is not expected here")
