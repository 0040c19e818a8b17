"""The text of one file: decoding it, and going between positions and places."""

from __future__ import annotations

import re
from bisect import bisect_right
from dataclasses import dataclass
from functools import cached_property

import yaml

from mcx.faults import Fault, Place

# What YAML does not allow, and the line ends of other worlds (by which editors do not count lines).
FORBIDDEN = re.compile("[^\t\n\r\x20-\x7e\xa0-\u2027\u202a-\ud7ff\ue000-\ufefe\uff00-\ufffd\U00010000-\U0010ffff]")
LINE_END = re.compile("\r\n|\r|\n")
UTF16_MARKS = (b"\xff\xfe", b"\xfe\xff")


@dataclass(frozen=True)
class Source:
    """A file's name and its text, decoded."""

    text: str
    file: str

    @cached_property
    def lines(self) -> list[str]:
        """The lines, counted as the parser counts them."""
        return LINE_END.split(self.text)

    @cached_property
    def starts(self) -> list[int]:
        """The position at which each line begins."""
        return [0, *(found.end() for found in LINE_END.finditer(self.text))]

    def place(self, mark: yaml.Mark) -> Place:
        """The place of a mark of the parser, which counts from 0."""
        return Place(self.file, mark.line + 1, mark.column + 1)

    def place_of(self, position: int) -> Place:
        """The place of a position in the text."""
        line = bisect_right(self.starts, position)
        return Place(self.file, line, position - self.starts[line - 1] + 1)

    def position(self, place: Place) -> int:
        """The position in the text of a place."""
        return self.starts[place.line - 1] + place.column - 1


def decoded(data: bytes, file: str) -> str | Fault:
    """The text of a file, which must be UTF-8 (a byte order mark is allowed) and hold no control characters."""
    if data.startswith(UTF16_MARKS):
        return Fault(Place(file, 1, 1), "the file is UTF-16 or UTF-32; expected UTF-8")
    try:
        text = data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        offset = error.start + 3 * data.startswith(b"\xef\xbb\xbf")
        before = data[:offset].decode("utf-8-sig", "replace")
        wrong = f"byte 0x{data[offset]:02x} at offset {offset} is not UTF-8; expected a text file in UTF-8"
        return Fault(place_after(before, file), wrong)
    if wrong := forbidden_character(text):
        position, name = wrong
        hint = "; is this a text file?" if name == "U+0000" else "; expected printable text"
        return Fault(place_after(text[:position], file), f"the character {name} is not allowed in a document{hint}")
    return text


def forbidden_character(text: str) -> tuple[int, str] | None:
    """Position and name (U+0007) of the first character that documents may not hold."""
    found = FORBIDDEN.search(text)
    return (found.start(), f"U+{ord(found.group()):04X}") if found else None


def place_after(before: str, file: str) -> Place:
    """The place of the character that follows the text `before`."""
    lines = LINE_END.split(before)
    return Place(file, len(lines), len(lines[-1]) + 1)
