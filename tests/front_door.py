"""The command line inside the test's own process, through the same door as a real one, and small files for it."""

from __future__ import annotations

import json
import re
from dataclasses import dataclass
from pathlib import Path

from click.testing import CliRunner

from mcx.cli import main

EXAMPLES = Path(__file__).resolve().parent.parent / "payoffs" / "examples"
SEED = 0x428A2F98D728AE22
PLACED = re.compile(r"\S.*?:[1-9]\d*:[1-9]\d*: \S")  # file:line:column: what is wrong

CALL = """contract: Call
currency: EUR
units: 1
assets: [harbour]
payoff: european
terms: {side: call, strike: 100, expiry: 1y}
"""
MARKET = """---
market: 0y
rates: {EUR: 4%}
assets:
  harbour: {spot: 100, currency: EUR, yield: 1.5%, vol: 22%}
"""


@dataclass(frozen=True)
class Outcome:
    """What a command left behind."""

    code: int
    out: str
    err: str

    @property
    def json(self) -> dict:
        """Standard output as the one JSON object that it must be; NaN and Infinity are none."""
        found = json.loads(self.out, parse_constant=_no_number)
        assert isinstance(found, dict)
        return found


def _no_number(text: str) -> None:
    raise AssertionError(f"{text} in JSON")


def mcx(*arguments: object, stdin: bytes = b"") -> Outcome:
    """Runs a command; anything but an orderly end comes through as an exception, and so as a failed test."""
    code = 0
    with CliRunner().isolation(input=stdin) as (out, err, _):
        try:
            main([str(argument) for argument in arguments])
        except SystemExit as end:
            code = end.code
        found = out.getvalue().decode(), err.getvalue().decode()
    return Outcome(code, *found)


def refused(outcome: Outcome, *said: str) -> None:
    """The command ended with 2, wrote nothing to standard output and said all of this."""
    assert (outcome.code, outcome.out) == (2, "")
    assert "Traceback" not in outcome.err
    for text in said:
        assert text in outcome.err


def written(folder: Path, text: str, name: str = "case.yaml") -> Path:
    """A file with a text."""
    file = folder / name
    file.write_text(text, encoding="utf-8")
    return file
