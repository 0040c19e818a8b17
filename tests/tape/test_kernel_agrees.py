"""The kernel gives what the interpreter gives."""

from __future__ import annotations

from collections import Counter

import numpy as np
from hypothesis import given
from strategies import inputs_for, random_tape, tapes

from mcx.machine.forms import Form
from mcx.machine.prepare import prepare
from mcx.machine.run import Stream, draws, values_by_path
from mcx.tape.interpret import interpret
from mcx.tape.program import Program, Tape
from mcx.tape.registers import lower

SEED, PATHS, MOST = 6620133847715590231, 64, 120


def program_of(tape: Tape) -> tuple[Program, np.ndarray]:
    """The program and its leaf values."""
    leaves, _, _ = inputs_for(tape, 1, seed=4400917265833)
    return lower(tape, leaves), leaves


@given(tapes(most=MOST))
def test_kernel_and_interpreter_agree(tape: Tape):
    """On the kernel's own draws, a random tape has the same outputs by the interpreter and by the kernel, on every
    path on which all its values are finite."""
    program, leaves = program_of(tape)
    drawn = draws(program, seed=SEED, stream=Stream.MAIN, numbers=np.arange(PATHS)).T
    values = interpret(tape, leaves, drawn[: tape.normals], drawn[tape.normals :])
    finite = np.all([np.isfinite(np.broadcast_to(value, PATHS)) for value in values], axis=0)
    found = values_by_path(program, seed=SEED, paths=PATHS)
    for output, result in zip(tape.outputs, found, strict=True):
        expected = np.broadcast_to(values[output.value], PATHS)
        scale = np.max(np.abs(expected[finite]), initial=1.0)
        np.testing.assert_allclose(result[finite], expected[finite], rtol=1e-9, atol=1e-9 * scale)


def test_random_tapes_run_every_loop_of_the_kernel():
    """Fifty random tapes have every form of operands, in several of them: what the test above tries is the kernel. The
    range of a bridge is searched for, to fewer digits, and has tests of its own."""
    seen = Counter(form for seed in range(50) for form in set(prepare(program_of(random_tape(seed, most=MOST))[0]).code[:, 0]))
    assert {form.name for form in Form if seen[form] < 5} == {"BRIDGE_RANGE_RRRR"}
