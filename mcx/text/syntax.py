"""What is wrong with text that is not YAML, in plain words and at the place where the reader would look."""

from __future__ import annotations

import re

import yaml

from mcx.faults import Fault
from mcx.text.source import Source

# What the parser says (a pattern), what we say, and whether we say it where the trouble began rather than where the
# parser noticed.
MESSAGES: tuple[tuple[str, str, bool], ...] = (
    (r"found character '\\t'", "a tab cannot stand here; indent with spaces", False),
    (r"found character '(?P<found>.*)' that cannot start",
     "a value cannot begin with '{found}'; put it in quotes", False),
    (r"mapping values are not allowed",
     "a ':' is not expected here: check the indentation, or put the text in quotes", False),
    (r"could not find expected ':'", "expected ':' and a value after this key", True),
    (r"found unexpected end of stream", "the quote that opens here is never closed", True),
    (r"found unexpected document separator", "the quote that opens here is not closed before '---'", True),
    (r"found unknown escape character",
     "this backslash escape is not known; in single quotes a backslash is itself", False),
    (r"expected escape sequence of", "this backslash escape is cut short", False),
    (r"(block )?sequence entries are not allowed", "a list entry '- ' cannot begin here; begin a new line", False),
    (r"mapping keys are not allowed", "a key cannot begin here; begin a new line", False),
    (r"expected ',' or '\}'",
     "expected ',' or '}}' here; in {{ }} a formula or a text with commas, quotes or colons needs quotes", False),
    (r"expected ',' or '\]'",
     "expected ',' or ']' here; in [ ] a formula or a text with commas, quotes or colons needs quotes", False),
    (r"expected <block end>, but found '<block mapping start>'",
     "this line is indented further than its neighbours above", False),
    (r"expected <block end>", "this does not fit what stands above: check the indentation and the quotes", False),
    (r"expected the node content", "a value is missing here", False),
    (r"expected '<document start>'", "this does not belong to the document above: check the indentation", False),
    (r"found undefined tag handle", "this tag is not read; write the plain value", False),
    (r"found duplicate anchor", "this anchor stands here a second time", False),
    (r"expected alphabetic or numeric character, but found", "a name is expected after '&', '*' or '%'", False),
    (r"expected (a single document|chomping|indentation)|expected a comment or a line break",
     "this is not expected after '|' or '>'; begin the text on the next line", False),
    (r"found (incompatible YAML document|duplicate YAML directive)", "this %YAML line is not read", False),
)


def syntax_fault(error: yaml.MarkedYAMLError, source: Source) -> Fault:
    """The parser's error as a fault."""
    problem = error.problem or ""
    for pattern, words, where_it_began in MESSAGES:
        if found := re.match(pattern, problem):
            mark = error.context_mark if where_it_began and error.context_mark else error.problem_mark
            return Fault(source.place(mark), words.format(**found.groupdict()))
    mark = error.problem_mark or error.context_mark
    return Fault(source.place(mark), "this is not valid YAML: check quotes, colons and indentation")
