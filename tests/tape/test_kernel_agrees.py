"""The kernel gives what the interpreter gives."""

from __future__ import annotations

from collections import Counter
from dataclasses import replace

import numpy as np
from hypothesis import given
from hypothesis import strategies as st
from strategies import inputs_for, random_tape, tapes

from mcx.machine.forms import Form
from mcx.machine.prepare import prepare
from mcx.machine.run import Stream, draws, run, values_by_path
from mcx.tape.interpret import interpret
from mcx.tape.ops import Op
from mcx.tape.passes import drop_dead_code
from mcx.tape.program import Output, Program, Sum, Tape
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


@given(tapes(), st.data())
def test_sums_agree(tape: Tape, data: st.DataObject):
    """The sums of any values of a random tape, and of products of two, are those over the interpreter's values, also
    once dead code is gone."""
    value = st.integers(0, len(tape.instructions) - 1)
    sums = data.draw(st.lists(st.builds(Sum, value, st.none() | value), min_size=1, max_size=6))
    first = next(number for number, step in enumerate(tape.instructions) if step.op is Op.NORMAL)
    tape = drop_dead_code(replace(tape, outputs=(Output("z", first),), sums=tuple(sums)))
    leaves = inputs_for(tape, 1, seed=4400917265833)[0]
    program = lower(tape, leaves)
    drawn = draws(program, seed=SEED, stream=Stream.MAIN, numbers=np.arange(PATHS)).T
    values = interpret(tape, leaves, drawn[: tape.normals], drawn[tape.normals :])
    expected = [np.prod([np.broadcast_to(values[k], PATHS) for k in part.factors], axis=0) for part in tape.sums]
    if np.isfinite(expected).all():
        found = run(program, seed=SEED, paths=PATHS).sums[0]
        scale = np.abs(expected).sum(axis=1).max(initial=1.0)
        np.testing.assert_allclose(found, np.sum(expected, axis=1), rtol=1e-9, atol=1e-9 * scale)


def test_random_tapes_run_every_loop_of_the_kernel():
    """Fifty random tapes have every form of operands, in several of them: what the test above tries is the kernel. Sums
    have a test of their own."""
    seen: Counter = Counter()
    for seed in range(50):
        seen.update(set(prepare(program_of(random_tape(seed, most=MOST))[0]).code[:, 0]))
    assert {form for form in Form if seen[form] < 5} == {Form.SUM_R, Form.SUM_RR}
