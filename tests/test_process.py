"""Real processes: what only a process of its own can show."""

from __future__ import annotations

import json
import os
import pty
import select
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest
from front_door import CALL, EXAMPLES, MARKET, written

import mcx as package

ROOT = Path(__file__).resolve().parent.parent
NOTE = EXAMPLES / "harbour_lantern.yaml"
COMMAND = [sys.executable, "-m", "mcx"]
HEAVY = ("numpy", "numba", "scipy", "rich", "holidays")
PATIENCE = 120.0  # seconds after which a process counts as hanging; no time is asserted


def environment(**more: str) -> dict[str, str]:
    """This process's, with the checkout found from every folder; kernels come from the run's own cache."""
    found = {name: value for name, value in os.environ.items() if name not in ("COLUMNS", "LINES", "FORCE_COLOR")}
    return {**found, "PYTHONPATH": str(ROOT), "TERM": "xterm", **more}


def mcx(*arguments: object, cwd: Path, **more: str) -> subprocess.CompletedProcess:
    """A command in a folder."""
    return subprocess.run([*COMMAND, *map(str, arguments)], cwd=cwd, env=environment(**more), capture_output=True,
                          timeout=PATIENCE, text=True, encoding="utf-8")


@pytest.fixture(scope="module", autouse=True)
def kernels_there(tmp_path_factory: pytest.TempPathFactory) -> None:
    """The kernels are compiled before anything is looked at."""
    assert mcx("price", NOTE, "--paths", 64, cwd=tmp_path_factory.mktemp("warm")).returncode == 0


@pytest.mark.parametrize("arguments", [
    ["--help"], ["price", "--help"], ["payoffs", "european"], ["price", "none.yaml"]])
def test_quick_answers_load_nothing_heavy(arguments: list[str], tmp_path: Path):
    """Help, a definition and a fault come without numpy or numba."""
    code = f"""import sys
from mcx.cli import main
try:
    main({arguments!r})
except SystemExit:
    pass
print(sorted(set({HEAVY!r}) & set(sys.modules)), file=sys.stderr)"""
    done = subprocess.run([sys.executable, "-c", code], cwd=tmp_path, env=environment(), capture_output=True, text=True,
                          timeout=PATIENCE)
    assert done.stderr.splitlines()[-1] == "[]"


def test_from_any_folder(tmp_path: Path):
    """A name relative to the folder, a definition of the library, a record beside it; streams clean."""
    written(tmp_path, CALL + MARKET)
    done = mcx("price", "case.yaml", "--paths", 1000, "--json", "--record", "r.json", cwd=tmp_path)
    assert (done.returncode, done.stderr) == (0, "")
    assert json.loads(done.stdout)["contract"] == "Call"
    record = json.loads((tmp_path / "r.json").read_text(encoding="utf-8"))
    assert [each["file"] for each in record["inputs"]] == ["case.yaml", "payoffs/european.yaml"]
    again = mcx("replay", tmp_path / "r.json", "--threads", 1, cwd=ROOT)
    assert again.returncode == 0 and again.stdout.startswith("identical\n")


def test_faults_of_a_process(tmp_path: Path):
    """Code 2, faults on standard error, nothing on standard output."""
    written(tmp_path, CALL.replace("side", "sied") + MARKET)
    done = mcx("price", "case.yaml", cwd=tmp_path)
    assert (done.returncode, done.stdout) == (2, "") and done.stderr.startswith("case.yaml:6:9: ")


def test_terminals_without_our_letters(tmp_path: Path):
    """'±' is replaced where it cannot be written."""
    done = mcx("price", NOTE, "--paths", 64, cwd=tmp_path, PYTHONIOENCODING="ascii")
    assert done.returncode == 0 and " % ? " in done.stdout.splitlines()[0]


def test_a_pipe_sees_no_progress_and_no_colours(tmp_path: Path):
    """Silent on standard error, plain text on standard output."""
    done = mcx("price", NOTE, "--paths", 200_000, cwd=tmp_path)
    assert (done.returncode, done.stderr) == (0, "")
    assert "\x1b" not in done.stdout


def on_a_terminal(arguments: list[object], cwd: Path, press_at: bytes = b"") -> tuple[int, str, str]:
    """A command whose standard error is a terminal: its code, its output and all that the terminal was sent.

    As soon as the terminal shows `press_at`, the process gets what Ctrl-C sends.
    """
    leader, follower = pty.openpty()
    process = subprocess.Popen([*COMMAND, *map(str, arguments)], cwd=cwd, env=environment(), stdout=subprocess.PIPE,
                               stderr=follower)
    os.close(follower)
    shown, deadline = b"", time.monotonic() + PATIENCE
    try:
        while time.monotonic() < deadline:
            if leader in select.select([leader], [], [], 0.2)[0]:
                shown += os.read(leader, 65536)
            if press_at and press_at in shown:
                process.send_signal(signal.SIGINT)
                press_at = b""
    except OSError:  # the other end is closed: the process has ended
        pass
    out = process.communicate(timeout=PATIENCE)[0]
    os.close(leader)
    return process.returncode, out.decode(), shown.decode()


def test_a_terminal_sees_progress(tmp_path: Path):
    """Paths done and paths planned while it works; standard output holds the answer alone."""
    code, out, shown = on_a_terminal(["price", NOTE, "--paths", 1_000_000, "--json"], tmp_path)
    assert code == 0 and json.loads(out)["paths"] == 1_000_000
    assert "of 1,000,000 paths" in shown and "standard error" in shown


def test_ctrl_c_gives_the_estimate_so_far(tmp_path: Path):
    """Code 130 and a price of the paths done; that price is the one of a run of so many paths."""
    command = ["price", NOTE, "--paths", 10**12, "--json"]
    code, out, shown = on_a_terminal(command, tmp_path, press_at=b"of 1,000,000,000,000 paths")
    found = json.loads(out)
    assert code == 130 and "Traceback" not in shown
    assert found["interrupted"] and 2 <= found["paths"] < 10**12
    assert found["warnings"][0].startswith(f"interrupted after {found['paths']:,} of 1,000,000,000,000 paths")
    if found["paths"] < 10**7:
        assert package.price(NOTE, paths=found["paths"]).price == found["price"]


def piped(reader: str, cwd: Path, *arguments: object) -> tuple[int, str]:
    """The exit code and the complaints of a command whose output goes to a shell's `reader`."""
    line = f'{" ".join(COMMAND)} "$@" | {reader}; exit "${{PIPESTATUS[0]}}"'
    done = subprocess.run(["bash", "-c", line, "bash", *map(str, arguments)], cwd=cwd, env=environment(), text=True,
                          capture_output=True, timeout=PATIENCE)
    return done.returncode, done.stderr


@pytest.mark.parametrize("arguments", [("readback", NOTE), ("payoffs", "--json"), ("--help",)])
def test_a_reader_that_goes_away(tmp_path: Path, arguments: tuple):
    """`mcx … | true` ends in silence."""
    assert piped("true", tmp_path, *arguments) == (0, "")


def test_a_full_disk(tmp_path: Path):
    """A sentence and code 2."""
    if not Path("/dev/full").exists():
        pytest.skip("no device that is always full")
    for arguments in (["readback", str(NOTE)], ["payoffs", "autocall"]):
        with open("/dev/full", "wb") as full:
            done = subprocess.run([*COMMAND, *arguments], cwd=tmp_path, env=environment(), stdout=full,
                                  stderr=subprocess.PIPE, timeout=PATIENCE)
        assert done.returncode == 2
        assert done.stderr.decode().lower() == "the answer cannot be written: no space left on device\n"
