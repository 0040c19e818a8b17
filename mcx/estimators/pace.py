"""How long a run will take, from the fixed table of costs: for sentences, never for digits."""

from __future__ import annotations

from collections.abc import Callable, Iterable

from mcx.estimators.plan import duration
from mcx.machine.run import available_threads
from mcx.machine.sizes import cost
from mcx.tape.program import Program

LONG = 600.0  # seconds: what takes longer is announced


def pace(programs: Iterable[Program], threads: int | None) -> float:
    """Seconds for one path of all the programs, with every thread at work."""
    return 1e-9 * sum(map(cost, programs)) / (threads or available_threads())


def announce(paths: int, pace: float, notice: Callable[[str], None] | None) -> None:
    """Tells of a run that will take long, before it starts."""
    if notice and paths * pace > LONG:
        notice(f"{paths:,} paths will take about {duration(paths * pace)}; Ctrl-C gives the estimate so far")
