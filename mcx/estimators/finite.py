"""Numbers that are not finite stop a run: the refusal that names the path, so that it can be looked at alone."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager

from mcx.estimators.ready import Ready
from mcx.faults import Refusal
from mcx.machine.run import NonFinitePath, NonFiniteSum

WHY = "a formula divides by 0, overflows or leaves the domain of log, sqrt or a power"


@contextmanager
def finite(ready: Ready) -> Iterator[None]:
    """Runs of a contract's tape inside raise Refusal where a path gives no finite number."""
    try:
        yield
    except NonFinitePath as trouble:
        output = ready.unrolled.tape.outputs[trouble.output if trouble.stream == 0 else 0].name
        raise Refusal(f"'{ready.dated.contract.title}': '{output}' is not a finite number on path {trouble.path} (seed "
                      f"{trouble.seed}, stream {trouble.stream}); {WHY}") from None
    except NonFiniteSum as trouble:
        raise Refusal(f"'{ready.dated.contract.title}': a derivative is not a finite number on one of the 64 paths "
                      f"from {trouble.first_path} on (seed {trouble.seed}, stream {trouble.stream}); {WHY}") from None
