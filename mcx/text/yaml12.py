"""YAML to located nodes, safely and in the 1.2 sense: every plain value stays text until someone asks what it means.

The nodes are built from the parser's event stream with a stack of our own, so nothing here recurses and every bound
(size, nesting, nodes after aliases are expanded) is checked as the events come. Tags, merge keys and keys that are
not scalars are refused; aliases stand for the node that they name.
"""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import dataclass, field

import yaml

from mcx.faults import Fault, Place
from mcx.text.cut_formulas import mended_entries, mended_items
from mcx.text.located import Mapping, Node, Scalar, Sequence
from mcx.text.source import LINE_END, Source, decoded, forbidden_character
from mcx.text.syntax import syntax_fault

SIZE_LIMIT = 1 << 20
NESTING_LIMIT = 50
NODE_LIMIT = 100_000

PROPERTIES = re.compile(r"(?:[&!]\S*\s*)*")
TAG = re.compile(r"![^\s,\[\]{}]*")
ESCAPE = re.compile(r"\\(?:x..|u.{4}|U.{8}|.)|''")


class Stop(Exception):
    """A bound is broken and reading ends here. Never leaves this module: it becomes a fault."""

    def __init__(self, fault: Fault):
        self.fault = fault
        super().__init__(fault.text)


@dataclass(frozen=True, slots=True)
class Built:
    """A finished node with what it weighs once aliases are expanded: how many nodes, and how deep."""

    node: Node
    nodes: int
    depth: int


@dataclass(slots=True)
class Open:
    """A list or mapping whose end has not come yet."""

    mapping: bool
    place: Place
    flow: bool
    anchor: str | None
    parts: list[Built] = field(default_factory=list)


def read_yaml(data: bytes, file: str) -> tuple[list[Node], list[Fault]]:
    """One node for each document of the stream that holds anything, and every fault found on the way.

    After a syntax error or a broken bound there is one fault for it and reading ends; the documents before it are
    returned.
    """
    if len(data) > SIZE_LIMIT:
        return [], [too_large(file, len(data))]
    text = decoded(data, file)
    if isinstance(text, Fault):
        return [], [text]
    source = Source(text, file)
    builder = Builder(source)
    try:
        for event in events(source):
            builder.take(event)
    except Stop as stop:
        builder.faults.append(stop.fault)
    if not builder.documents and not builder.faults:
        return [], [Fault(Place(file, 1, 1), "the file is empty; expected a payoff, contract, market or quote")]
    return builder.documents, builder.faults


def too_large(file: str, size: int | None) -> Fault:
    """The fault of a file above the limit; `size` in bytes, None where it is not known."""
    limit = f"{SIZE_LIMIT:,} bytes (1 MiB)"
    has = f"more than {limit}, the most that is read" if size is None else f"{size:,} bytes; at most {limit} are read"
    return Fault(Place(file, 1, 1), f"the input has {has}")


def events(source: Source) -> Iterator[yaml.Event]:
    """The parser's events; its errors become one `Stop`."""
    loader = yaml.SafeLoader(source.text)
    try:
        while loader.check_event():
            yield loader.get_event()
    except yaml.MarkedYAMLError as error:
        raise Stop(syntax_fault(error, source)) from None
    except (yaml.YAMLError, ValueError, OverflowError):  # such as an escape beyond the last character
        raise Stop(Fault(source.place(loader.get_mark()), "this cannot be read as YAML")) from None
    finally:
        loader.dispose()


class Builder:
    """Takes events one by one and grows the nodes of each document."""

    def __init__(self, source: Source):
        self.source = source
        self.documents: list[Node] = []
        self.faults: list[Fault] = []
        self.open: list[Open] = []
        self.anchors: dict[str, Built] = {}
        self.nodes = 0

    def take(self, event: yaml.Event) -> None:
        place = self.source.place(event.start_mark)
        match event:
            case yaml.DocumentStartEvent():
                self.anchors = {}
                if event.version not in (None, (1, 2)):
                    written = ".".join(map(str, event.version))
                    self.faults.append(Fault(place, f"'%YAML {written}' is not read; this file is read as YAML 1.2"))
            case yaml.ScalarEvent():
                self._refuse_tag(event, place)
                self._finish(Built(self._scalar(event, place), 1, 1), event.anchor)
            case yaml.AliasEvent():
                self._finish(self._alias(event.anchor, place), None)
            case yaml.SequenceStartEvent() | yaml.MappingStartEvent():
                self._refuse_tag(event, place)
                if len(self.open) >= NESTING_LIMIT:
                    raise Stop(self._too_deep(place))
                mapping = isinstance(event, yaml.MappingStartEvent)
                self.open.append(Open(mapping, place, bool(event.flow_style), event.anchor))
            case yaml.SequenceEndEvent() | yaml.MappingEndEvent():
                self._close(self.open.pop())

    def _close(self, ended: Open) -> None:
        nodes = [part.node for part in ended.parts]
        if ended.mapping:
            pairs = list(zip(nodes[::2], nodes[1::2], strict=True))
            if ended.flow:
                pairs = mended_entries(pairs, self.source, self.faults)
            node: Node = Mapping(self._entries(pairs), ended.place, ended.flow)
        else:
            if ended.flow:
                nodes = mended_items(nodes, self.source, self.faults)
            node = Sequence(tuple(nodes), ended.place, ended.flow)
        size = 1 + sum(part.nodes for part in ended.parts)
        depth = 1 + max((part.depth for part in ended.parts), default=0)
        self._finish(Built(node, size, depth), ended.anchor)

    def _finish(self, built: Built, anchor: str | None) -> None:
        self.nodes += 1
        if anchor is not None:
            self.anchors[anchor] = built
        if self.open:
            self.open[-1].parts.append(built)
        elif not (isinstance(built.node, Scalar) and built.node.absent):  # nothing between two '---' is no document
            self.documents.append(built.node)
        if self.nodes > NODE_LIMIT:
            raise Stop(Fault(built.node.place, f"the file holds more than {NODE_LIMIT:,} values"))

    def _alias(self, name: str, place: Place) -> Built:
        if any(waiting.anchor == name for waiting in self.open):
            raise Stop(Fault(place, f"'*{name}' stands inside the value that it names"))
        if name not in self.anchors:
            self.faults.append(Fault(place, f"'*{name}' names nothing; expected '&{name}' at a value above"))
            return Built(Scalar("", place), 1, 1)
        built = self.anchors[name]
        self.nodes += built.nodes
        if self.nodes > NODE_LIMIT:
            raise Stop(Fault(place, f"with '*{name}' expanded the file holds more than {NODE_LIMIT:,} values"))
        if len(self.open) + built.depth > NESTING_LIMIT + 1:
            raise Stop(self._too_deep(place))
        return built

    def _entries(self, pairs: list[tuple[Node, Node]]) -> tuple[tuple[Scalar, Node], ...]:
        kept: dict[str, tuple[Scalar, Node]] = {}
        for key, value in pairs:
            if not isinstance(key, Scalar):
                self.faults.append(Fault(key.place, "a key must be a single word, not a list or a mapping"))
            elif key.absent:
                self.faults.append(Fault(key.place, "a key is missing before ':'"))
            elif key.text == "<<" and not key.quoted:
                self.faults.append(Fault(key.place, "the merge key '<<' is not read; write the keys out"))
            elif key.text in kept:
                first = kept[key.text][0].place
                self.faults.append(Fault(key.place, f"the key '{key.text}' stands here a second time; "
                                                    f"the first is at line {first.line}, column {first.column}"))
            else:
                kept[key.text] = (key, value)
        return tuple(kept.values())

    def _scalar(self, event: yaml.ScalarEvent, place: Place) -> Scalar:
        begin = event.start_mark.index
        if event.anchor or event.tag:
            begin = PROPERTIES.match(self.source.text, begin).end()
            place = self.source.place_of(begin)
        if event.style == '"' and (wrong := forbidden_character(event.value)):
            self.faults.append(Fault(place, f"the escape for {wrong[1]} is not read; expected printable text"))
            return Scalar("", place, quoted=True)
        pieces = self._pieces(event, self.source.text[begin : event.end_mark.index], place)
        return Scalar(event.value, place, bool(event.style), pieces)

    def _pieces(self, event: yaml.ScalarEvent, written: str, place: Place) -> tuple[tuple[int, Place], ...]:
        """Where the stretches of a folded or escaped text stand; () when it stands as it reads."""
        lines = LINE_END.split(written)
        quotes = event.style in ("'", '"')
        escaped = quotes and ESCAPE.search(written[1:-1]) is not None
        if len(lines) == 1 and not escaped:
            return ()
        found, reached = [], 0
        for number, line in enumerate(lines):
            if number == 0 and event.style in ("|", ">"):  # the line of the indicator
                continue
            left = place.column if number == 0 else 1
            for begin, stretch in stretches(line, escaped=escaped, skip=int(quotes and number == 0)):
                offset = event.value.find(stretch, reached)
                if offset >= 0:
                    found.append((offset, Place(place.file, place.line + number, left + begin)))
                    reached = offset + len(stretch)
        return tuple(found)

    def _refuse_tag(self, event: yaml.NodeEvent, place: Place) -> None:
        if event.tag is not None:
            written = TAG.search(self.source.text, event.start_mark.index)
            self.faults.append(Fault(place, f"the tag '{written.group()}' is not read; write the plain value"))

    def _too_deep(self, place: Place) -> Fault:
        return Fault(place, f"values are nested deeper than {NESTING_LIMIT} levels")


def stretches(line: str, *, escaped: bool, skip: int) -> Iterator[tuple[int, str]]:
    """The parts of a source line that stand in the text letter by letter, each with its column from 0."""
    begin = skip
    cuts = [(found.start(), found.end()) for found in ESCAPE.finditer(line, skip)] if escaped else []
    for start, end in [*cuts, (len(line), len(line))]:
        part = line[begin:start]
        stripped = part.strip().rstrip("'\"") if start == len(line) else part.lstrip() if begin == 0 else part
        if stripped:
            yield begin + part.index(stripped), stripped
        begin = end
