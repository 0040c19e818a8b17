"""The kernel gives what the interpreter gives."""

from __future__ import annotations

import numpy as np
from hypothesis import given, settings
from strategies import inputs_for, tapes

from mcx.machine.run import Stream, draws, values_by_path
from mcx.tape.interpret import interpret
from mcx.tape.program import Tape
from mcx.tape.registers import lower

SEED, PATHS = 6620133847715590231, 64


@settings(max_examples=300)  # generated tapes are much alike, so that fifty are too few
@given(tapes())
def test_kernel_and_interpreter_agree(tape: Tape):
    """On the kernel's own draws, a random tape has the same outputs by the interpreter and by the kernel, on every
    path on which all its values are finite."""
    leaves, _, _ = inputs_for(tape, 1, seed=4400917265833)
    program = lower(tape, leaves)
    drawn = draws(program, seed=SEED, stream=Stream.MAIN, numbers=np.arange(PATHS)).T
    values = interpret(tape, leaves, drawn[: tape.normals], drawn[tape.normals :])
    finite = np.all([np.isfinite(np.broadcast_to(value, PATHS)) for value in values], axis=0)
    found = values_by_path(program, seed=SEED, paths=PATHS)
    for output, result in zip(tape.outputs, found, strict=True):
        expected = np.broadcast_to(values[output.value], PATHS)
        scale = np.max(np.abs(expected[finite]), initial=1.0)
        np.testing.assert_allclose(result[finite], expected[finite], rtol=1e-9, atol=1e-9 * scale)
