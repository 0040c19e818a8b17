"""Completion at the prompt: click's own, through our door."""

from __future__ import annotations

import os
import subprocess
import sys

import pytest

CODE = "from mcx.cli import main; main()"


@pytest.mark.parametrize(("typed", "offered"), [
    ("mcx pay", ["payoffs"]), ("mcx payoffs --sch", ["--schema"]), ("mcx price --red", ["--reduction"])])
def test_words_are_completed(typed: str, offered: list[str]):
    """The shell asks with the words so far and is given what can follow."""
    asked = {"_MCX_COMPLETE": "bash_complete", "COMP_WORDS": typed, "COMP_CWORD": str(typed.count(" "))}
    done = subprocess.run([sys.executable, "-c", CODE], env=os.environ | asked, capture_output=True, text=True)
    assert (done.returncode, done.stderr) == (0, "")
    assert [line.split(",")[1] for line in done.stdout.split()] == offered
