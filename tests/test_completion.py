"""Completion at the prompt: click's own, through our door."""

from __future__ import annotations

import os
import subprocess
import sys

import pytest

CODE = "from mcx.cli import main; main()"


@pytest.mark.parametrize(("typed", "offered"), [
    ("mcx pay", ["payoffs"]), ("mcx payoffs --sch", ["--schema"]), ("mcx price --red", ["--reduction"]),
    ("mcx payoffs cap", ["capital_protection"]), ("mcx price --reduction an", ["antithetic"]),
    ("mcx price --reduction controls,sobol-", ["controls,sobol-bridge", "controls,sobol-components"])])
def test_words_are_completed(typed: str, offered: list[str]):
    """The shell asks with the words so far and is given what can follow."""
    assert completed(typed) == [("plain", word) for word in offered]


def test_files_are_left_to_the_shell():
    """Without a word of ours it would offer none, and the commands live on names of files."""
    assert completed("mcx price harb") == [("file", "harb")]


def completed(typed: str) -> list[tuple[str, str]]:
    asked = {"_MCX_COMPLETE": "bash_complete", "COMP_WORDS": typed, "COMP_CWORD": str(typed.count(" "))}
    done = subprocess.run([sys.executable, "-c", CODE], env=os.environ | asked, capture_output=True, text=True)
    assert (done.returncode, done.stderr) == (0, "")
    return [tuple(line.split(",", 1)) for line in done.stdout.split()]
