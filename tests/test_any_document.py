"""Whatever is in a file, there is an answer or a list of faults with their places: never a traceback, never half of
both. Shipped examples are changed byte by byte and word by word; some documents are made up."""

from __future__ import annotations

import random
import re
from functools import cache
from pathlib import Path

import pytest
from front_door import EXAMPLES, PLACED, mcx
from hypothesis import given, settings
from hypothesis import strategies as st

SMALL = ("european", "digital", "asian", "barrier", "cliquet", "touch", "reverse_convertible", "harbour_lantern",
         "bonus", "range_accrual", "lookback", "exchange_option", "shark_fin")
DEFINED = {name: EXAMPLES.parent / f"{name}.yaml"
           for name in ("european", "asian", "barrier", "cliquet", "autocall", "touch")}
REFUSED = re.compile(r"'.*' is not a finite number on path \d+ ")  # sound documents, a payoff that divides by 0
WORDS = re.compile(rb"[A-Za-z_][A-Za-z_.]*|[0-9][0-9.]*|\s+|.", re.DOTALL)
SPICE = (
    b"", b"0", b"-1", b"1e308", b".nan", b".inf", b"true", b"null", b"~", b"[]", b"{}", b"[", b"]", b"{", b"}", b":",
    b"-", b"\n", b"  ", b"\t", b"#", b"'", b'"', b"&a", b"*a", b"!!float", b"|", b">", b"%", b"%YAML 1.1", b"---",
    b"...", b"1y", b"0y", b"10000y", b"-1y", b"2027-02-30", b"0001-01-01", b"9999-12-31", b"1 business day", b"1e9",
    b"99999999999999999999", b"spot", b"performance", b"__class__", b"lambda", b"1 if 2", b"**", b"previous(spot)",
    b"once", b"observations.last", b"\x00", b"\xff", b"\xef\xbb\xbf", "\u00e9\u2028\U0001f600".encode(), b"100", b"70%",
    b"1800%", b"25 bp", b"EUR", b"USD", b"harbour", b"lantern", b"until", b"every", b"count", b"continuous", b"expiry",
    b"fixings", b"quanto", b"dividends",
)

thoroughly = settings(max_examples=2 * settings.default.max_examples)


def hold(data: bytes, command: str = "price") -> None:
    """The bytes as a file: 0 and an answer, or 2 and nothing but faults, each with its place."""
    wishes = ("--paths", 64) if command == "price" else ()
    outcome = mcx(command, "-", *wishes, stdin=data)
    if outcome.code == 0:
        assert outcome.out and not outcome.err
        return
    assert outcome.code == 2 and outcome.err and not outcome.out, outcome
    for line in outcome.err.splitlines():
        assert PLACED.match(line) or REFUSED.match(line), outcome.err


@cache
def bytes_of(name: str) -> bytes:
    """An example with its market; behind its definition as the user's own where the name begins with 'own'."""
    if name.startswith("own "):
        name = name.removeprefix("own ")
        return DEFINED[name].read_bytes() + b"---\n" + (EXAMPLES / f"{name}.yaml").read_bytes()
    return (EXAMPLES / f"{name}.yaml").read_bytes()


documents = st.sampled_from([*SMALL, *(f"own {name}" for name in DEFINED)]).map(bytes_of)


@thoroughly
@given(documents, st.data())
def test_bytes_changed(whole: bytes, data: st.DataObject):
    """A few bytes replaced, left out or put in, or the file cut short."""
    changed = bytearray(whole)
    for _ in range(data.draw(st.integers(1, 3))):
        where = data.draw(st.integers(0, max(len(changed) - 2, 0)))
        byte = data.draw(st.one_of(st.integers(32, 126), st.integers(0, 255), st.sampled_from(b"\n:-{}[]'\"%#")))
        match data.draw(st.sampled_from(["replace", "leave out", "put in", "cut"])):
            case "replace":
                changed[where] = byte
            case "leave out":
                del changed[where + 1:where + 2]
            case "put in":
                changed.insert(where, byte)
            case "cut":
                del changed[max(where, 1):]
    hold(bytes(changed))


@thoroughly
@given(documents, st.data())
def test_words_changed(whole: bytes, data: st.DataObject):
    """Words, numbers and signs replaced by others of the file or by troublemakers, doubled, left out or swapped."""
    words = WORDS.findall(whole)
    for _ in range(data.draw(st.integers(1, 3))):
        where = data.draw(st.integers(0, len(words) - 1))
        other = data.draw(st.integers(0, len(words) - 1))
        match data.draw(st.sampled_from(["spice", "other", "leave out", "double", "swap"])):
            case "spice":
                words[where] = data.draw(st.sampled_from(SPICE))
            case "other":
                words[where] = words[other]
            case "leave out":
                words[where] = b""
            case "double":
                words[where] *= 2
            case "swap":
                words[where], words[other] = words[other], words[where]
    hold(b"".join(words), data.draw(st.sampled_from(["price", "price", "readback"])))


@thoroughly
@given(documents, st.data())
def test_lines_changed(whole: bytes, data: st.DataObject):
    """Lines left out, doubled, moved, or indented otherwise: keys missing, repeated, in other maps."""
    lines = whole.splitlines(keepends=True)
    for _ in range(data.draw(st.integers(1, 3))):
        where = data.draw(st.integers(0, len(lines) - 1))
        match data.draw(st.sampled_from(["leave out", "double", "move", "indent"])):
            case "leave out":
                lines[where] = b""
            case "double":
                lines.insert(where, lines[where])
            case "move":
                lines.insert(data.draw(st.integers(0, len(lines) - 1)), lines.pop(where))
            case "indent":
                lines[where] = data.draw(st.sampled_from([b" ", b"  ", b"    ", b"- ", b"\t"])) + lines[where].lstrip()
    hold(b"".join(lines))


@given(st.binary(max_size=200) | st.text(max_size=200).map(lambda text: text.encode("utf-8", "surrogatepass")))
def test_any_bytes(data: bytes):
    """No document at all."""
    hold(data)


scalars = st.one_of(st.none(), st.booleans(), st.integers(), st.floats(), st.text(max_size=8),
                    st.sampled_from([word.decode("utf-8", "replace") for word in SPICE]))
keys = st.one_of(st.text(max_size=5), st.sampled_from(
    "contract market payoff quote terms assets currency units notional rates funding spot vol yield correlation events "
    "at pay if then else end set running let about type default optional harbour EUR calendar settlement start"
    .split()))
trees = st.recursive(
    scalars, lambda inner: st.lists(inner, max_size=4) | st.dictionaries(keys, inner, max_size=5), max_leaves=20)


@given(st.lists(trees, min_size=1, max_size=3))
def test_any_values(values: list):
    """YAML of any shape."""
    import yaml

    hold(yaml.safe_dump_all(values, allow_unicode=True).encode("utf-8", "surrogatepass"))


@pytest.mark.parametrize("example", sorted(EXAMPLES.glob("*.yaml")), ids=lambda path: path.stem)
def test_every_example_cut_at_random(example: Path):
    """A file of which only the beginning arrived."""
    whole = example.read_bytes()
    dice = random.Random(example.stem)
    for _ in range(3):
        hold(whole[: dice.randrange(len(whole))])
