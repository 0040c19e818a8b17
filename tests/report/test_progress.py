"""Progress on a terminal: one bar, from the first batch to the last, for one contract after the other."""

from __future__ import annotations

import io
import sys

import pytest

from mcx.machine.run import COMPILING
from mcx.report.progress import Bar


class Terminal(io.StringIO):
    """A stream that says it is a terminal."""

    def isatty(self) -> bool:
        return True


def terminal_for(monkeypatch: pytest.MonkeyPatch) -> Terminal:
    """Standard error as a terminal, for the rest of a test."""
    for name in ("NO_COLOR", "FORCE_COLOR", "TTY_COMPATIBLE"):
        monkeypatch.delenv(name, raising=False)
    monkeypatch.setenv("TERM", "xterm")
    monkeypatch.setenv("COLUMNS", "120")
    monkeypatch.setattr(sys, "stderr", Terminal())
    return sys.stderr


def test_paths_and_error_are_shown(monkeypatch: pytest.MonkeyPatch):
    """And the next contract begins anew; in the end the line is wiped."""
    terminal = terminal_for(monkeypatch)
    with Bar() as bar:
        bar.progress(1000, 4000, 0.0123456)
        bar._shown.refresh()
        first = terminal.getvalue()
        bar.progress(4000, 4000, 0.006)
        bar.progress(50, 200, 0.5)
        bar._shown.refresh()
    assert "1,000 of 4,000 paths" in first and "standard error 0.0123" in first
    assert "50 of 200 paths" in terminal.getvalue()
    assert "\x1b[2K" in terminal.getvalue()  # a line wiped


def test_notices_stay(monkeypatch: pytest.MonkeyPatch):
    """A sentence about compiling is printed above the bar."""
    terminal = terminal_for(monkeypatch)
    with Bar() as bar:
        bar.notice("compiling the kernels once for this machine")
        bar.progress(64, 64, 0.1)
    assert "compiling the kernels once for this machine\n" in terminal.getvalue().replace("\r", "")


def test_a_command_shows_it_only_there(monkeypatch: pytest.MonkeyPatch):
    """Where standard error is no terminal there is no progress, and no word but of what takes very long."""
    from mcx.cli import _progress

    terminal_for(monkeypatch)
    with _progress() as (progress, notice):
        assert progress is not None and notice is not None
    monkeypatch.setattr(sys, "stderr", io.StringIO())
    with _progress() as (progress, notice):
        assert progress is None
        notice(COMPILING)
        assert sys.stderr.getvalue() == ""
        notice("1,000,000,000,000 paths will take about 4 hours")
    assert sys.stderr.getvalue() == "1,000,000,000,000 paths will take about 4 hours\n"
