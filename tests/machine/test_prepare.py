"""From program to kernel code: forms, joined drifts, rows that are read and written."""

from __future__ import annotations

import numpy as np
import pytest
from made_programs import asian, on_rows, program

from mcx.machine.forms import FORMS, Form, kinds
from mcx.machine.prepare import KernelCode, prepare
from mcx.tape.ops import OPS, Op
from mcx.tape.rules import RULES

X, Y, Z = 0, 1, 2  # rows that hold values
A, B, C, D = 3, 4, 5, 6  # rows to work in
ROWS = np.random.default_rng(6201183340).normal(size=(3, 64))


def forms_of(code: KernelCode) -> list[Form]:
    return [Form(form) for form in code.code[:, 0]]


def test_every_form_belongs_to_an_operation_or_is_known_to_stand_alone():
    """A form is named after its operation and kinds of operands; some are the machine's own."""
    named = {form for forms in FORMS.values() for form in forms}
    assert set(Form) - named == {Form.FILL_S, Form.DRIFT_STEP_RSSR, Form.SUM_R, Form.SUM_RR, Form.CLEAR_RRS,
                                 Form.CORRIDOR_RRSS, Form.IMAGE_RRSS, Form.FAR_RRRS, Form.INSIDE_RRRS}
    for op, forms in FORMS.items():
        assert all(len(kinds(form)) == OPS[op].arity for form in forms if op is not Op.LOOKUP)


def test_drift_and_step_become_one():
    """x + m read by one step only is not computed by itself."""
    code = prepare(program([(Op.ADD, A, X, -1), (Op.STEP, B, A, -2, Z)], rows=7, outputs=[B], scalars=[0.5, 2.0]))
    assert forms_of(code) == [Form.DRIFT_STEP_RSSR]
    assert forms_of(prepare(asian(3))).count(Form.DRIFT_STEP_RSSR) == 2


@pytest.mark.parametrize(
    ("lines", "outputs"),
    [
        ([(Op.ADD, A, X, -1), (Op.STEP, B, A, -2, Z), (Op.ADD, C, A, B)], [C]),  # the sum is read again
        ([(Op.ADD, A, X, -1), (Op.STEP, B, A, -2, Z)], [A, B]),  # it is an output
        ([(Op.ADD, A, X, -1), (Op.STEP, B, X, -2, A)], [B]),  # it moves the step instead of being moved
        ([(Op.ADD, A, X, -1), (Op.STEP, B, A, -2, A)], [B]),  # both
        ([(Op.ADD, A, X, Y), (Op.STEP, B, A, -2, Z)], [B]),  # no scalar is added
        ([(Op.ADD, A, X, -1), (Op.STEP, B, A, Y, Z)], [B]),  # the factor is no scalar
    ],
)
def test_drift_that_must_stand_alone_stays(lines: list[tuple[int, ...]], outputs: list[int]):
    """A sum that somebody else needs, or that is no drift, is computed, and the values are right."""
    made = program(lines, rows=7, outputs=outputs, scalars=[0.5, 2.0])
    assert Form.DRIFT_STEP_RSSR not in forms_of(prepare(made))
    rows = [*ROWS, *(np.empty(64) for _ in range(4))]
    for op, to, *operands in lines:
        values = [rows[k] if k >= 0 else (0.5, 2.0)[-1 - k] for k in operands]
        rows[to] = values[0] + (values[1] * values[2] if op == Op.STEP else values[1])
    np.testing.assert_allclose(on_rows(made, ROWS), [rows[output] for output in outputs], rtol=1e-14)


def test_a_step_into_the_row_it_started_from():
    """The joined instruction may write the row of x, and later instructions find the result there."""
    lines = [(Op.ADD, A, X, -1), (Op.STEP, X, A, -2, Z), (Op.ADD, A, X, -1), (Op.STEP, X, A, -2, Y), (Op.MUL, X, X, X)]
    made = program(lines, rows=4, outputs=[X], scalars=[0.5, 2.0])
    expected = (ROWS[X] + 1.0 + 2.0 * ROWS[Z] + 2.0 * ROWS[Y]) ** 2
    np.testing.assert_allclose(on_rows(made, ROWS)[0], expected, rtol=1e-13)


def test_no_instruction_writes_a_row_it_reads():
    """However a program reuses its rows, the kernel's loops read and write different ones."""
    rng = np.random.default_rng(55801290347)
    ops = [op for op in RULES if op is not Op.LOOKUP]
    for _ in range(30):
        lines = []
        for op in rng.choice(ops, 40):
            operands = rng.integers(-3, 5, OPS[Op(op)].arity)
            lines.append((op, rng.integers(0, 5), *operands))
        code = prepare(program(lines, rows=5, outputs=[0, 1, 2, 3, 4], scalars=[0.5, 2.0, 3.0]))
        for form, to, *operands in code.code.tolist():
            read = [row for row, kind in zip(operands, kinds(Form(form)), strict=False) if kind == "R"]
            assert to not in read
            assert 0 <= to < code.rows and all(0 <= row < code.rows for row in read)


def test_scalar_outputs_keep_rows_of_their_own():
    """An output that is the same on every path is still there at the end, also twice and beside others."""
    made = program([(Op.ADD, A, X, -1)], rows=7, outputs=[-2, A, -1, -2], scalars=[0.5, 2.0])
    np.testing.assert_allclose(on_rows(made, ROWS), [[2.0] * 64, ROWS[X] + 0.5, [0.5] * 64, [2.0] * 64])
