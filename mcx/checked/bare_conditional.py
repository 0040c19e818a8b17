"""A conditional beside an operator without brackets: `n + 1 if c else 0` is read wrongly by people, so it is refused.

Python reads the operator first, `(n + 1) if c else 0`; many read `n + (1 if c else 0)`. The message prints both.
"""

from __future__ import annotations

import ast

from mcx.checked.formula_syntax import Written

JOINTS = {ast.Add: "+", ast.Sub: "-", ast.Mult: "*", ast.Div: "/", ast.Pow: "**", ast.And: "and", ast.Or: "or",
          ast.Lt: "<", ast.LtE: "<=", ast.Gt: ">", ast.GtE: ">=", ast.Eq: "==", ast.NotEq: "!="}


def bare_conditional(node: ast.IfExp, written: Written) -> str:
    """What to say of a conditional with an operator right beside it, '' if all is well."""
    start, end = written.start(node), written.end(node)
    yes, no = node.body, node.orelse
    # A bracketed branch begins after its conditional does, and ends before it.
    left = _is_operator(yes) and written.start(yes) == start
    right = _is_operator(no) and written.end(no) == end and not _is_not(no)
    if not (left or right):
        return ""
    text = written.text
    middle = text[written.end(yes) : written.start(no)]
    first = (f"({written.of(yes)})" if left else text[start : written.end(yes)]) + middle
    first += f"({written.of(no)})" if right else text[written.start(no) : end]
    opens = _last_operand(yes, written) if left else start
    closes = _first_operand(no, written) if right else end
    second = f"{text[start:opens]}({text[opens:closes]}){text[closes:end]}"
    return f"a conditional beside an operator needs brackets; write '{first}' or '{second}'"


def _is_not(node: ast.expr) -> bool:
    return isinstance(node, ast.UnaryOp) and isinstance(node.op, ast.Not)


def _is_operator(node: ast.expr) -> bool:
    return isinstance(node, ast.BinOp | ast.BoolOp | ast.Compare) or _is_not(node)


def _operands(node: ast.expr) -> tuple[list[ast.expr], list[ast.AST]]:
    match node:
        case ast.BinOp():
            return [node.left, node.right], [node.op]
        case ast.BoolOp():
            return node.values, [node.op] * (len(node.values) - 1)
        case ast.Compare():
            return [node.left, *node.comparators], node.ops
    return [], []


def _last_operand(node: ast.expr, written: Written) -> int:
    """Where the last operand begins, its brackets included: there the other reading opens its bracket."""
    while True:
        if _is_not(node):
            inner, opens = node.operand, written.start(node) + len("not")
        else:
            operands, joints = _operands(node)
            inner = operands[-1]
            opens = _after_joint(written, operands[-2], inner, joints[-1])
        opens += len(written.text[opens:]) - len(written.text[opens:].lstrip())
        if not _is_operator(inner) or written.end(inner) != written.end(node):  # the latter: in brackets
            return opens
        node = inner


def _first_operand(node: ast.expr, written: Written) -> int:
    """Where the first operand ends, its brackets included."""
    while True:
        operands, joints = _operands(node)
        inner = operands[0]
        symbol = JOINTS.get(type(joints[0]), "")
        closes = written.text.find(symbol, written.end(inner))
        closes = len(written.text[:closes].rstrip())
        if not _is_operator(inner) or _is_not(inner) or written.start(inner) != written.start(node):
            return closes
        node = inner


def _after_joint(written: Written, before: ast.expr, after: ast.expr, joint: ast.AST) -> int:
    symbol = JOINTS.get(type(joint), "")
    return written.text.find(symbol, written.end(before)) + len(symbol)
