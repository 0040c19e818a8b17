"""The schemas against the loader: every shipped document is right for both, and what is broken in shape is wrong for
both. An editor's view of a document is made here from its nodes, by the core schema of YAML 1.2."""

from __future__ import annotations

import json
import re
from collections.abc import Iterator
from dataclasses import replace
from functools import cache
from pathlib import Path

import pytest
from jsonschema import Draft7Validator

import front_door
import mcx
from test_blank import assets_for, filled
from test_wrong_input import SLIPS as TOLD
from test_wrong_input import slipped
from mcx.checked.library import shipped_names, shipped_text
from mcx.checked.load import checked_request
from mcx.faults import Place
from mcx.report.schemas.shapes import core_value
from mcx.text.documents import parse_documents
from mcx.text.located import Document, Mapping, Node, Scalar, Sequence

FOLDER = Path(__file__).parents[2] / "payoffs" / "examples"
EXAMPLES = sorted(FOLDER.glob("*.yaml"))


@cache
def validator(name: str | None = None) -> Draft7Validator:
    return Draft7Validator(mcx.schema(name))


def seen(node: Node) -> object:
    """A node as an editor holds it."""
    match node:
        case Scalar():
            return core_value(node)
        case Sequence():
            return [seen(item) for item in node]
        case Mapping():
            return {key.text: seen(value) for key, value in node.entries}


def documents(text: str) -> list[object]:
    found, faults = parse_documents(text.encode(), "test.yaml")
    assert not faults
    return [seen(document.body) for document in found]


def complaints(text: str, name: str | None = None) -> list[str]:
    return [error.message for document in documents(text) for error in validator(name).iter_errors(document)]


@pytest.mark.parametrize("name", [None, *shipped_names()])
def test_a_schema_is_one(name: str | None):
    """Each is a sound schema of draft 7, and every reference in it leads somewhere."""
    schema = mcx.schema(name)
    Draft7Validator.check_schema(schema)
    told = json.dumps(schema)
    named = {piece.split('"')[0] for piece in told.split('"#/definitions/')[1:]}
    assert named <= set(schema["definitions"])


@pytest.mark.parametrize("file", EXAMPLES, ids=lambda file: file.stem)
def test_examples_are_right(file: Path):
    """Every shipped contract and market, by the schema of all and by that of its own definition."""
    for document in documents(file.read_text(encoding="utf-8")):
        for name in {None, document.get("payoff")}:
            assert not [error.message for error in validator(name).iter_errors(document)]


@pytest.mark.parametrize("name", shipped_names())
def test_definitions_are_right(name: str):
    """Every shipped definition."""
    assert not complaints(shipped_text(name))


def test_corners_are_right():
    """The contracts, markets and definitions that the tests use for the grammar's corners."""
    for file in sorted((Path(__file__).parents[1] / "corners").glob("*.yaml")):
        assert not complaints(file.read_text(encoding="utf-8")), file.name


@pytest.mark.parametrize("name", shipped_names())
@pytest.mark.parametrize("with_optional", [False, True])
def test_blanks_are_right_once_filled_in(name: str, with_optional: bool):
    """By the schema of all and by that of the definition; an empty blank is marked at what stands empty."""
    text = filled(name, with_optional)
    assert not complaints(text) and not complaints(text, name)
    assert complaints(mcx.blank(name, ("alder", "birch", "cedar")[:len(assets_for(name))]), name)


SHAPELY = {  # of the slips that `mcx price` tells, those of shape: keys, words and units, wherever terms are not one's own
    "unknown key", "missing key", "key of a later version", "negative spot", "negative vol", "not finite"}
NO_YAML = {"cut at a comma", "repeated key", "repeated term"}  # no document at all, which an editor says by itself


def test_slips_of_shape_are_marked():
    """Of every slip that the loader is tested with, those of shape are marked and no other: names, formulas, dates, terms
    of a definition of one's own and how numbers fit together are for the loader."""
    marked = {slip for slip in TOLD if slip not in NO_YAML and complaints(slipped(slip))}
    assert marked == SHAPELY and NO_YAML < TOLD.keys()


# Shapes broken one by one: each mapping loses a key or gets one more, each value becomes one of another shape. What the
# schema refuses, the loader must refuse (an editor may not cry wolf); and where only the shape is broken, the reverse.

PLACE = Place("test.yaml", 1, 1)
ODD = Mapping(((Scalar("odd", PLACE), Scalar("1", PLACE)),), PLACE)
WRONG = {"a mapping": ODD, "a list": Sequence((ODD,), PLACE), "odd text": Scalar("n+o value", PLACE),
         "nothing": Scalar("", PLACE)}
BROKEN = {"contract": ("autocall", "seasoned_asian_tail"),
          "quote": ("quoted_note",),
          "market": ("dividends_and_currencies",), "payoff": ("autocall",)}

MEANING = re.compile("there is no|no '.*' here|is not expected here|can be 'per'|behind 'from'|goes by asset|"
                     "no funding|the market has no|no correlation|rate of exchange|needs 'quanto|is not a choice|"
                     "is no word of|"
                     "'given' asks about|is no asset of|the reference spots")


def meant(where: str, faults: list[str]) -> bool:
    """Whether faults are about names; the terms of a reading are values of a definition's own, free to the schema."""
    return any(MEANING.search(fault) for fault in faults) or ".readings" in where and ".terms" in where


def broken(node: Node, path: str = "") -> Iterator[tuple[str, str, Node]]:
    """Where, what was done, and the node with it."""
    if isinstance(node, Mapping):
        for number, (key, value) in enumerate(node.entries):
            rest = node.entries[:number], node.entries[number + 1:]
            yield f"{path}.{key}", "lost", Mapping((*rest[0], *rest[1]), node.place)
            for where, what, inner in broken(value, f"{path}.{key}"):
                yield where, what, Mapping((*rest[0], (key, inner), *rest[1]), node.place)
        more = (Scalar("od/d key", PLACE), Scalar("1", PLACE))
        yield path, "one more", Mapping((*node.entries, more), node.place)
    elif isinstance(node, Sequence):
        for number in range(min(len(node), 2)):
            rest = node.items[:number], node.items[number + 1:]
            for where, what, inner in broken(node.items[number], f"{path}[{number}]"):
                yield where, what, Sequence((*rest[0], inner, *rest[1]), node.place)
    if path:
        for what, wrong in WRONG.items():
            yield path, what, wrong


def broken_documents(kind: str) -> Iterator[tuple[str, str, list[Document], Node]]:
    """Broken documents of a kind, each among the documents that it needs to be loaded."""
    for name in BROKEN[kind]:
        text = shipped_text(name) if kind == "payoff" else (FOLDER / f"{name}.yaml").read_text(encoding="utf-8")
        found = parse_documents(text.encode(), "test.yaml")[0]
        number = next(number for number, each in enumerate(found) if each.kind == kind)
        for where, what, body in broken(found[number].body):
            if where not in [f".{kind}"] or what != "lost":  # without it, it is another kind of document
                made = [*found[:number], replace(found[number], body=body), *found[number + 1:]]
                yield name + where, what, made, body


@pytest.mark.parametrize("kind", BROKEN)
def test_broken_shapes_are_wrong(kind: str):
    """Schema and loader agree about shapes; what only the loader refuses is a matter of names that do not meet."""
    both = 0
    for where, what, made, body in broken_documents(kind):
        marked = not validator().is_valid(seen(body))
        faults = [fault.text for fault in checked_request(made)[1]]
        assert faults or not marked, f"{where}: {what} loads, but the schema refuses it"
        assert marked or not faults or meant(where, faults), f"{where}: {what}: {faults}"
        both += marked
    assert both > 30


BY_STRIKE = """market: 2026-12-01
rates: {EUR: 2%}
assets: {harbour: {spot: 100, currency: EUR, yield: 0%, vol: {strikes: {80%: 25%, 100%: 20%}, priced_at: spot}}}
"""


def test_broken_vols_by_strike_are_wrong():
    """Schema and loader agree about them too: also where strikes are levels, and where one is no strike."""
    both = 0
    for text in (BY_STRIKE, BY_STRIKE.replace("80%:", "80:").replace("100%:", "110.5:"),
                 BY_STRIKE.replace("80%:", "low:"), BY_STRIKE.replace("80%:", "-80%:"),
                 BY_STRIKE.replace("80%:", "80 bp:"), BY_STRIKE.replace("priced_at: spot", "priced_at: 90%"),
                 BY_STRIKE.replace("priced_at: spot", "priced_at: forward")):
        (document,) = parse_documents(text.encode(), "test.yaml")[0]
        for where, what, body in [("whole", "as it is", document.body), *broken(document.body)]:
            if where == "whole" or ".vol" in where:
                marked = not validator().is_valid(seen(body))
                faults = [fault.text for fault in checked_request([replace(document, body=body)])[1]]
                assert marked == bool(faults), f"{where}: {what}: {faults}"
                both += marked
    assert both > 30


SLIPS = {  # one slip of an analyst's each, in one line of a contract or market
    "coupon: 3.9%": ("coupon: 3.9", "is not valid"),
    "knock_in: 65%": ("knock_in: -65%", "is not valid"),
    "memory: false": ("memory: no", "is not of type 'boolean'"),
    "initial: 4180.2": ("initial: 0", "is not valid"),
    "settlement: 5 business days": ("settlement: 5 days", "does not match"),
    "roll: modified following": ("roll: modified", "is not one of"),
    "notional: 1000000": ("notional: 1000000\nunits: 3", "valid under each of"),
    "strike: 100%": ("strikes: 100%", "'strikes' was unexpected"),
    "yield: 2.4%": ("yield: 2.4", "is not valid"),
    "start: 2026-12-01": ("start: 01.12.2026", "does not match"),
}


@pytest.mark.parametrize("right", SLIPS)
def test_slips_are_marked(right: str):
    """A slip in a line is marked, and the loader refuses it as well."""
    text = (FOLDER / "autocall.yaml").read_text(encoding="utf-8")
    wrong, said = SLIPS[right]
    slipped = text.replace(right, wrong, 1)
    assert slipped != text and not complaints(text)
    assert any(said in message for message in complaints(slipped))
    assert checked_request(*parse_documents(slipped.encode(), "test.yaml"))[1]


def test_a_schema_of_one_definition_knows_no_other():
    """The schema of a definition refuses a contract on another, which the schema of all takes."""
    text = (FOLDER / "european.yaml").read_text(encoding="utf-8")
    assert complaints(text, "autocall") and not complaints(text)


def test_a_definition_of_ones_own():
    """A contract on a definition that the library does not have: its terms are free."""
    text = (FOLDER / "european.yaml").read_text(encoding="utf-8").replace("payoff: european", "payoff: mine")
    assert not complaints(text)


def test_terms_say_what_they_are():
    """The words about a term, its bounds and its default come from the definition."""
    rules = mcx.schema("asian")["definitions"]["contract"]["allOf"]
    terms = next(rule for rule in rules if "then" in rule)["then"]["properties"]["terms"]["properties"]
    definition = mcx.definition("asian").text
    assert terms["averaging"]["description"] in definition and terms["side"]["enum"] == ["call", "put"]
    assert terms["earlier_count"]["anyOf"][0]["minimum"] == 1


def test_the_command():
    """One JSON object on standard output, with a NAME or without; nonsense is refused with exit code 2."""
    for arguments in (("asian",), ()):
        found = front_door.mcx("payoffs", *arguments, "--schema")
        assert found.code == 0 and json.loads(found.out) == mcx.schema(*arguments)
    front_door.refused(front_door.mcx("payoffs", "asiann", "--schema"), "did you mean 'asian'")
    front_door.refused(front_door.mcx("payoffs", "asian", "--blank", "--assets", "a", "--schema"), "one at a time")
