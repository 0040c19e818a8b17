"""The instructions that the kernel runs: one form for each kind of operands that deserves a loop of its own.

The tape has one MUL; the kernel has a loop for two rows and one for a row and a scalar. `prepare.py` chooses.
"""

from __future__ import annotations

from enum import IntEnum, auto

from mcx.tape.ops import Op


class Form(IntEnum):
    """The operation and the kinds of its operands in order: R a row of the register file, S a scalar."""

    FILL_S = auto()  # the scalar in every lane
    ADD_RR = auto()
    ADD_RS = auto()
    SUB_RR = auto()
    SUB_SR = auto()
    MUL_RR = auto()
    MUL_RS = auto()
    DIV_RR = auto()
    DIV_RS = auto()
    DIV_SR = auto()
    POW_RR = auto()
    MIN_RR = auto()
    MIN_RS = auto()
    MAX_RR = auto()
    MAX_RS = auto()
    ABS_R = auto()
    EXP_R = auto()
    LOG_R = auto()
    SQRT_R = auto()
    LT_RR = auto()
    LT_RS = auto()
    LT_SR = auto()
    LE_RR = auto()
    LE_RS = auto()
    LE_SR = auto()
    EQ_RR = auto()
    EQ_RS = auto()
    NE_RR = auto()
    NE_RS = auto()
    AND_RR = auto()
    OR_RR = auto()
    SELECT_RRR = auto()
    SELECT_RRS = auto()
    SELECT_RSR = auto()
    STEP_RSR = auto()  # x + s z
    STEP_SSR = auto()
    STEP_RRR = auto()
    DRIFT_STEP_RSSR = auto()  # x + m + s z: a step and the drift before it in one loop
    BRIDGE_LOW_RRSR = auto()  # ends x0 and x1, variance, log u
    BRIDGE_HIGH_RRSR = auto()
    CLEAR_RRS = auto()  # 1 - exp(d0 d1 s) where both distances are positive, else 0
    CORRIDOR_RRSS = auto()  # the width and -2 / variance of a step that is short for its width: three images count
    IMAGE_RRSS = auto()  # min((d0 + s)(d1 + s) t, 0): the exponent of an image of the corridor
    FAR_RRRS = auto()  # x + exp(s + t |d0 - d1|), s and t one behind the other: an image that has been mirrored twice
    INSIDE_RRRS = auto()  # max(x, 0) where 0 < d0, d1 < s, else 0
    BRIDGE_CLEAR_RRR = auto()
    BRIDGE_CORRIDOR_RRRR = auto()
    BRIDGE_RANGE_RRRR = auto()
    BRIDGE_MOMENT_RRRR = auto()
    LOOKUP_RSS = auto()  # the entry that x counts of the scalars from the one to the other
    CORRIDOR_BY_START_RRRR = auto()
    CORRIDOR_BY_WIDTH_RRRR = auto()
    CORRIDOR_BY_ENDS_RRRR = auto()
    RANGE_BY_START_RRRR = auto()
    SUM_R = auto()  # over each group of 64 lanes; the destination is the number of a sum
    SUM_RR = auto()  # of the products


def kinds(form: Form) -> str:
    """The kinds of a form's operands: 'RS' for MUL_RS."""
    return form.name.rpartition("_")[2]


FORMS: dict[Op, tuple[Form, ...]] = {
    op: tuple(form for form in Form if form.name.rpartition("_")[0] == op.name) for op in Op
}
