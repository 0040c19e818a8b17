"""YAML as mcx reads it: what becomes of the text, where every part stands, and what is refused at which place."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from mcx.text.located import Mapping, Scalar, Sequence
from mcx.text.yaml12 import NODE_LIMIT, SIZE_LIMIT, read_yaml


def faults_of(text: str | bytes) -> list[str]:
    _, faults = read_yaml(text.encode() if isinstance(text, str) else text, "f.yaml")
    return [str(fault) for fault in faults]


def sound(text: str) -> Mapping:
    """The one document of a text that must be without fault."""
    (node,), faults = read_yaml(text.encode(), "f.yaml")
    assert faults == []
    return node


def test_nodes_keep_their_places():
    """Keys, values, lists and mappings know their line and column."""
    node = sound("a: 1\nb:\n  - x\n  - {c: d}\n")
    assert isinstance(node, Mapping) and not node.flow
    assert [str(key.place) for key, _ in node.entries] == ["f.yaml:1:1", "f.yaml:2:1"]
    items = node.get("b")
    assert isinstance(items, Sequence) and len(items) == 2
    inner = items.items[1]
    assert isinstance(inner, Mapping) and inner.flow
    assert str(inner.place) == "f.yaml:4:5"
    assert str(inner.get("c").place) == "f.yaml:4:9"


@pytest.mark.parametrize("text", ["on", "yes", "no", "off", "null", "~", "12:30", "010", "0x1f", "2026-12-01", ".inf"])
def test_plain_values_stay_text(text):
    """Nothing changes its type behind the user's back: plain values are the text that was written."""
    value = sound(f"key: {text}\n").get("key")
    assert isinstance(value, Scalar)
    assert (value.text, value.quoted) == (text, False)


def test_quotes_and_absent_values():
    """Quoted texts say so; a key with nothing behind has an absent value, which an empty quoted text is not."""
    node = sound("a: '70%'\nb: \"x\"\nc:\nd: ''\n")
    assert node.get("a").quoted and node.get("b").quoted
    assert node.get("c").absent and not node.get("d").absent


@pytest.mark.parametrize(
    ("text", "letter", "place"),
    [
        ("a: max(x, y)\n", "y", "f.yaml:1:11"),
        ("a: max(x,\n    y) + 1\n", "y", "f.yaml:2:5"),
        ("a: >-\n  max(x,\n  y)\n", "y", "f.yaml:3:3"),
        ("a: |\n  max(x,\n    y)\n", "y", "f.yaml:3:5"),
        ("a: 'max(x, y)'\n", "y", "f.yaml:1:12"),
        ("a: 'b == ''c'' and y'\n", "y", "f.yaml:1:20"),
        ('a: "\\x41 + y"\n', "y", "f.yaml:1:12"),
        ('a: "max(x,\n  y)"\n', "y", "f.yaml:2:3"),
        ("a: &name max(x, y)\n", "y", "f.yaml:1:17"),
    ],
)
def test_places_inside_a_text(text, letter, place):
    """A character of a value is found in the file, also where lines are folded or quotes doubled."""
    value = sound(text).get("a")
    assert str(value.at(value.text.index(letter))) == place


def test_several_documents():
    """Each document of the stream is a node; nothing between two separators is none."""
    nodes, faults = read_yaml(b"---\n---\na: 1\n---\nb: 2\n---\n", "f.yaml")
    assert faults == []
    assert [node.keys() for node in nodes] == [("a",), ("b",)]


def test_aliases_stand_for_their_node():
    """An alias is the node that it names, at the place where that stands."""
    node = sound("a: &x [1, 2]\nb: *x\n")
    assert node.get("b") is node.get("a")


@pytest.mark.parametrize(
    ("text", "fault"),
    [
        ("a: 1\nb: 2\na: 3\n", "3:1: the key 'a' stands here a second time; the first is at line 1, column 1"),
        ("a: !!python/object/apply:os.system [x]\n",
         "1:4: the tag '!!python/object/apply:os.system' is not read; write the plain value"),
        ("a: !foo 3\n", "1:4: the tag '!foo' is not read; write the plain value"),
        ("<<: {a: 1}\n", "1:1: the merge key '<<' is not read; write the keys out"),
        ("? [a]\n: b\n", "1:3: a key must be a single word, not a list or a mapping"),
        ("? \n: b\n", "1:2: a key is missing before ':'"),
        ("a: *x\n", "1:4: '*x' names nothing; expected '&x' at a value above"),
        ("a: &x [*x]\n", "1:8: '*x' stands inside the value that it names"),
        ("%YAML 1.1\n---\na: 1\n", "1:1: '%YAML 1.1' is not read; this file is read as YAML 1.2"),
        ('a: "\\u0007"\n', "1:4: the escape for U+0007 is not read; expected printable text"),
        ("", "1:1: the file is empty; expected a payoff, contract, market or quote"),
        ("# nothing but this\n", "1:1: the file is empty; expected a payoff, contract, market or quote"),
    ],
)
def test_what_yaml_allows_and_we_refuse(text, fault):
    """Repeated keys, tags, merge keys, keys that are no scalars and circles are each refused at their place."""
    assert faults_of(text) == ["f.yaml:" + fault]


@pytest.mark.parametrize(
    ("text", "fault"),
    [
        ("a: 1\n\tb: 2\n", "2:1: a tab cannot stand here; indent with spaces"),
        ("a: b: c\n", "1:5: a ':' is not expected here: check the indentation, or put the text in quotes"),
        ("a: 1\n b: 2\n", "2:3: a ':' is not expected here: check the indentation, or put the text in quotes"),
        ("a: 'x\n", "1:4: the quote that opens here is never closed"),
        ("a: @x\n", "1:4: a value cannot begin with '@'; put it in quotes"),
        ("a:\n- b\nc\n", "3:1: expected ':' and a value after this key"),
        ("a: {b: f(a, 'x')}\n", "1:16: expected ',' or '}' here; in { } a formula or a text with commas, quotes or "
                                "colons needs quotes"),
        ("a: [1, 2", "1:9: expected ',' or ']' here; in [ ] a formula or a text with commas, quotes or colons needs "
                     "quotes"),
        ('a: "\\q"\n', "1:6: this backslash escape is not known; in single quotes a backslash is itself"),
        ('a: "\\UFFFFFFFF"\n', "1:7: this cannot be read as YAML"),
    ],
)
def test_syntax_errors_in_plain_words(text, fault):
    """Text that is no YAML gives one fault, in our words, where the reader would look."""
    assert faults_of(text) == ["f.yaml:" + fault]


def test_a_syntax_error_keeps_the_documents_before_it():
    """What stands before the error is read."""
    nodes, faults = read_yaml(b"a: 1\n---\nb: 'x\n", "f.yaml")
    assert [node.keys() for node in nodes] == [("a",)]
    assert len(faults) == 1


@pytest.mark.parametrize(
    ("text", "corrected"),
    [
        ("- {at: expiry, pay: max(a, b)}\n", "- {at: expiry, pay: 'max(a, b)'}"),
        ("- {pay: max(a - 1, 0) if side == 'call' else 0, as: leg}\n",
         "- {pay: \"max(a - 1, 0) if side == 'call' else 0\", as: leg}"),
        ("x: {pay: min(max(a, b), c)}\n", "x: {pay: 'min(max(a, b), c)'}"),
    ],
)
def test_a_formula_cut_at_its_comma_in_braces(text, corrected):
    """YAML ends a value at the comma; the fault says so and prints the line as it should be."""
    column = text.index("m") + 1
    assert faults_of(text) == [f"f.yaml:1:{column}: a formula inside {{ }} was cut at its comma; quote it: {corrected}"]


def test_a_cut_formula_is_mended_for_the_other_checks():
    """After the fault the value is the whole formula, so that nothing else is reported about its pieces."""
    (node,), faults = read_yaml(b"{pay: max(a, b), as: leg}\n", "f.yaml")
    assert len(faults) == 1
    assert [(key.text, value.text) for key, value in node.entries] == [("pay", "max(a, b)"), ("as", "leg")]


def test_two_cut_formulas_on_one_line():
    """Both faults print the line with both formulas quoted."""
    faults = faults_of("{low: min(a, b), high: max(a, b)}\n")
    assert [fault.split(": ")[0] for fault in faults] == ["f.yaml:1:7", "f.yaml:1:24"]
    assert all(fault.endswith("quote it: {low: 'min(a, b)', high: 'max(a, b)'}") for fault in faults)


def test_a_formula_cut_in_a_list():
    """Lists in brackets cut formulas too, alone or behind a key."""
    assert faults_of("x: [max(a, b), 3]\n") == [
        "f.yaml:1:5: a formula inside [ ] was cut at its comma; quote it: x: ['max(a, b)', 3]"]
    assert faults_of("x: [pay: max(a, b), end]\n") == [
        "f.yaml:1:10: a formula inside [ ] was cut at its comma; quote it: x: [pay: 'max(a, b)', end]"]


@pytest.mark.parametrize("text", ["{a: f(x), b: }", "{a: '(', b: }", "{a: (b, c: d)}", "[(a, {b: c}]"])
def test_braces_that_cut_no_formula(text):
    """An open bracket without its end behind it is not called a cut formula."""
    assert not any("was cut" in fault for fault in faults_of(text + "\n"))


@pytest.mark.parametrize(("text", "values"), [
    ("{vol: 17,5%}", {"vol": "17,5%"}),
    ("{1y: 2,0 %, 2y: -2,15%, 3y: 3}", {"1y": "2,0 %", "2y": "-2,15%", "3y": "3"}),
    ("{notional: 1,000,000.50, units: 1}", {"notional": "1,000,000.50", "units": "1"}),
    ("{a: 1, 5}", {"a": "1", "5": ""}),  # a blank behind the comma: two entries
    ("{a: 1,5: 2}", {"a": "1", "5": "2"}),
    ("{a: x,5}", {"a": "x", "5": ""}),
    ("{a: '1',5}", {"a": "1", "5": ""}),
])
def test_numbers_with_commas_in_braces(text, values):
    """A number cut at a decimal comma or between thousands is put together again, for its reader to refuse."""
    (node,), faults = read_yaml(text.encode(), "f.yaml")
    assert faults == []
    assert {key.text: value.text for key, value in node.entries} == values


def test_an_alias_bomb_is_refused():
    """Nodes are counted with aliases expanded, before anybody walks them."""
    lines = ["a0: &a0 [x, x, x, x, x, x, x, x, x, x]"]
    lines += [f"a{k}: &a{k} [{', '.join([f'*a{k - 1}'] * 10)}]" for k in range(1, 10)]
    (fault,) = faults_of("\n".join(lines))
    assert fault.startswith("f.yaml:5:") and f"holds more than {NODE_LIMIT:,} values" in fault


def test_aliases_count_for_the_depth():
    """A chain of aliases cannot build what brackets may not."""
    lines = ["a0: &a0 [x]"] + [f"a{k}: &a{k} [*a{k - 1}]" for k in range(1, 80)]
    (fault,) = faults_of("\n".join(lines))
    assert "nested deeper than 50 levels" in fault


@pytest.mark.parametrize("text", ["[" * 1000, "- " * 1000, "{a: " * 1000, "? " * 1000])
def test_nesting_a_thousand_deep(text):
    """Depth beyond the bound is one fault, and reading ends there."""
    (fault,) = faults_of(text)
    assert fault.endswith(": values are nested deeper than 50 levels")


def test_fifty_levels_are_read_and_fifty_one_are_not():
    """The bound is the one that the message states."""
    assert faults_of("[" * 50 + "]" * 50) == []
    assert faults_of("[" * 51 + "]" * 51) == ["f.yaml:1:51: values are nested deeper than 50 levels"]


def test_size():
    """Input above the limit is not parsed; the fault says how large it is and the limit."""
    assert faults_of(b" " * 10_000_000) == [
        "f.yaml:1:1: the input has 10,000,000 bytes; at most 1,048,576 bytes (1 MiB) are read"]
    assert faults_of(b"a: 1" + b" " * (SIZE_LIMIT - 4)) == []


@pytest.mark.parametrize(
    ("data", "fault"),
    [
        (b"\xff\xfea\x00", "1:1: the file is UTF-16 or UTF-32; expected UTF-8"),
        (b"a: 1\nb: caf\xe9\n", "2:7: byte 0xe9 at offset 11 is not UTF-8; expected a text file in UTF-8"),
        (b"\xef\xbb\xbfa: \xff", "1:4: byte 0xff at offset 6 is not UTF-8; expected a text file in UTF-8"),
        (b"a: 1\nb: \x00", "2:4: the character U+0000 is not allowed in a document; is this a text file?"),
        (b"a: \x1b[31m", "1:4: the character U+001B is not allowed in a document; expected printable text"),
        ("a: x\u2028b: y".encode(), "1:5: the character U+2028 is not allowed in a document; expected printable text"),
    ],
)
def test_encodings_and_binary_files(data, fault):
    """Only UTF-8 text without control characters is read; the fault gives the byte or the character."""
    assert faults_of(data) == ["f.yaml:" + fault]


def test_byte_order_mark_and_line_ends():
    """A byte order mark at the start is allowed, and lines may end as on any system."""
    (node,), faults = read_yaml("\ufeffa: 1\r\nb: 2\rc: 3\n".encode(), "f.yaml")
    assert faults == []
    assert [str(key.place) for key, _ in node.entries] == ["f.yaml:1:1", "f.yaml:2:1", "f.yaml:3:1"]


ODD = st.text(alphabet=st.sampled_from("ab1 \n\t:-,[]{}()'\"&*!%|>?#@`~\\.<=é"), max_size=80)


@given(st.one_of(st.binary(max_size=200), ODD.map(str.encode), st.text(max_size=80).map(lambda t: t.encode("utf-8", "replace"))))
def test_no_input_raises(data):
    """Whatever the bytes are, reading returns nodes or faults, and every fault lies inside the file."""
    nodes, faults = read_yaml(data, "f.yaml")
    assert nodes or faults
    lines = data.decode("utf-8", "replace").replace("\r\n", "\n").replace("\r", "\n").split("\n")
    for fault in faults:
        assert 1 <= fault.place.line <= len(lines) + 1
        assert fault.place.column >= 1
