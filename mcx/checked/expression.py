"""Formulas: from their text to typed trees.

Python's own parser gives the syntax tree; here a white list of its nodes becomes `formula.py`'s, each with its kind and
its place, and nothing is ever evaluated as Python. Every kind rule of the grammar is in this file.
"""

from __future__ import annotations

import ast
import math
from collections.abc import Mapping, Set
from dataclasses import dataclass, field

from mcx.checked.bare_conditional import bare_conditional
from mcx.checked.formula import (
    Binary,
    Call,
    ChoiceIs,
    Formula,
    Given,
    IfElse,
    Name,
    Number,
    OfAsset,
    Previous,
    Unary,
    walk,
)
from mcx.checked.formula_syntax import DEEPEST, Written, parsed, too_deep
from mcx.checked.kinds import Kind
from mcx.checked.reading import listed, offered
from mcx.faults import Fault, Place, did_you_mean
from mcx.text.located import Node
from mcx.text.scalars import NUMBER, scaled

CALLS: dict[str, tuple[str, int, int | None]] = {  # how it is written; fewest and most arguments
    "min": ("min(a, b, ...)", 2, None),
    "max": ("max(a, b, ...)", 2, None),
    "abs": ("abs(x)", 1, 1),
    "exp": ("exp(x)", 1, 1),
    "log": ("log(x)", 1, 1),
    "sqrt": ("sqrt(x)", 1, 1),
    "clip": ("clip(x, low, high)", 3, 3),
    "worst": ("worst(x)", 1, 1),
    "best": ("best(x)", 1, 1),
    "mean": ("mean(x)", 1, 1),
    "basket": ("basket(x, weights)", 2, 2),
    "ranked": ("ranked(x, k)", 2, 2),
    "any": ("any(flags)", 1, 1),
    "all": ("all(flags)", 1, 1),
    "of": ("of(x, asset)", 2, 2),
    "previous": ("previous(x, first)", 2, 2),
    "given": ("given(term)", 1, 1),
}
OVER_ASSETS = ("worst", "best", "mean", "basket", "ranked", "any", "all")
OF_FLAGS = ("any", "all")
DATE_NAMES = ("nth", "n_dates", "years", "period")
WORDS = ("true", "false", "and", "or", "not", "if", "else")
BUILT_IN = frozenset((*CALLS, *DATE_NAMES, "spot", *WORDS))

ARITHMETIC = {ast.Add: "+", ast.Sub: "-", ast.Mult: "*", ast.Div: "/", ast.Pow: "**"}
COMPARISONS = {ast.Lt: "<", ast.LtE: "<=", ast.Gt: ">", ast.GtE: ">=", ast.Eq: "==", ast.NotEq: "!="}
HIGHEST_POWER = 64


@dataclass(frozen=True, slots=True)
class Scope:
    """What a formula may speak of.

    `names` are the names that have a value, with its kind; `choices` the choice terms with their words; `optional` the
    terms that `given` may ask about; `asset_terms` and `asset_names` what `of` may name (`asset_names` None where the
    contract is not known yet); `single` whether there is one asset only. `barred` tells of names and functions that
    exist but have no value here, and why; `broken` are names whose own definition is at fault, so that a formula that
    uses them is left without a further word.
    """

    names: Mapping[str, Kind]
    choices: Mapping[str, tuple[str, ...]] = field(default_factory=dict)
    optional: tuple[str, ...] = ()
    asset_terms: tuple[str, ...] = ()
    asset_names: tuple[str, ...] | None = None
    single: bool = False
    barred: Mapping[str, str] = field(default_factory=dict)
    broken: Set[str] = frozenset()


def read_formula(node: Node, scope: Scope, faults: list[Fault]) -> Formula | None:
    """The typed tree of a formula; None where anything is wrong with it, or with a name that it uses."""
    found = parsed(node)
    if isinstance(found, Fault):
        faults.append(found)
        return None
    tree, written = found
    reader = _Reader(written, scope)
    formula = reader.read(tree)
    faults += reader.faults
    return None if reader.faults else formula


class _Reader:
    """Reads one formula. A part that is at fault, or built on a broken name, is None and silences what uses it."""

    def __init__(self, written: Written, scope: Scope):
        self.written, self.scope = written, scope
        self.faults: list[Fault] = []
        self.depth = 0
        self.in_previous = False

    def read(self, node: ast.expr) -> Formula | None:
        if self.depth >= DEEPEST:
            if not any(fault == too_deep(fault.place) for fault in self.faults):
                self.faults.append(too_deep(self.written.at(node)))
            return None
        self.depth += 1
        try:
            return self._read(node)
        finally:
            self.depth -= 1

    def _read(self, node: ast.expr) -> Formula | None:
        match node:
            case ast.Constant():
                return self._constant(node)
            case ast.Name():
                return self._name(node)
            case ast.UnaryOp():
                return self._unary(node)
            case ast.BinOp():
                return self._arithmetic(node)
            case ast.BoolOp():
                return self._logic(node)
            case ast.Compare():
                return self._comparison(node)
            case ast.IfExp():
                return self._conditional(node)
            case ast.Call():
                return self._call(node)
            case ast.Attribute():
                return self._wrong(node, f"'{self.written.of(node)}': names with a dot are not part of formulas")
            case ast.Tuple():
                return self._wrong(node, "a comma stands only between the arguments of a function")
            case ast.Starred():
                return self._wrong(node, "'*' before an argument is not part of formulas")
        return self._wrong(node, f"'{self.written.of(node)}' is not part of formulas")

    # What was found, and whether it is of the kind that is needed

    def _wrong(self, node: ast.expr, text: str) -> None:
        self.faults.append(Fault(self.written.at(node), text))

    def _number(self, node: ast.expr) -> Formula | None:
        """A part that must be a number, or one for each asset."""
        part = self.read(node)
        if part is not None and part.kind.is_flag:
            words = self.written.of(node)
            hint = f"; write '(1 if {words} else 0)'" if len(words) <= 30 else "; write '(1 if ... else 0)'"
            return self._wrong(node, f"expected a number, found {part.kind.value}{hint}")
        return part

    def _flag(self, node: ast.expr) -> Formula | None:
        """A part that must be a flag, or one for each asset."""
        part = self.read(node)
        if part is not None and not part.kind.is_flag:
            return self._wrong(node, f"expected a flag, such as a comparison, found {part.kind.value}")
        return part

    # Constants and names

    def _constant(self, node: ast.Constant) -> Formula | None:
        place, text = self.written.at(node), self.written.of(node)
        if isinstance(node.value, str):
            return self._wrong(node, "a text stands only in a comparison with a choice, as in \"side == 'call'\"")
        if isinstance(node.value, bool):
            return self._wrong(node, f"write '{text.lower()}' instead of '{text}'")
        found = NUMBER.fullmatch(text)
        if node.value is None or not found:
            return self._wrong(node, f"expected a number such as '1.5', found '{text}'")
        _, digits, exponent, _ = found.groups()
        value = scaled(digits, int(exponent or 0), self.written.units.get(self.written.start(node)))
        if not math.isfinite(value):
            return self._wrong(node, f"expected a finite number, found '{text}'")
        return Number(value, place)

    def _name(self, node: ast.Name) -> Formula | None:
        name, scope, place = node.id, self.scope, self.written.at(node)
        if name in ("true", "false"):
            return Number(float(name == "true"), place, Kind.FLAG)
        if name in scope.names and name not in scope.broken:
            return Name(name, place, scope.names[name])
        if name in scope.broken:
            return None
        if name in scope.barred:
            return self._wrong(node, scope.barred[name])
        if name in scope.choices:
            words = listed(scope.choices[name], "or")
            return self._wrong(node, f"the choice '{name}' has no value of its own; compare it with {words}")
        if name in scope.asset_terms:
            return self._wrong(node, f"'{name}' names an asset; its level is 'of(spot, {name})'")
        if name in CALLS:
            return self._wrong(node, f"'{name}' is a function; expected {CALLS[name][0]}")
        known = (*scope.names, *scope.choices, *scope.asset_terms, *CALLS, "true", "false")
        return self._wrong(node, f"there is no '{name}' here{did_you_mean(name, known)}")

    # Operators

    def _unary(self, node: ast.UnaryOp) -> Formula | None:
        if isinstance(node.op, ast.Not):
            operand, symbol = self._flag(node.operand), "not"
        else:
            operand, symbol = self._number(node.operand), "-"
        if operand is None or isinstance(node.op, ast.UAdd):
            return operand
        return Unary(symbol, operand, self.written.at(node), operand.kind)

    def _arithmetic(self, node: ast.BinOp) -> Formula | None:
        symbol = ARITHMETIC.get(type(node.op))
        if symbol is None:
            return self._wrong(node, f"'{self.written.of(node)}' is not part of formulas")
        left, right = self._number(node.left), self._number(node.right)
        if left is None or right is None:
            return None
        if symbol == "**" and not self._sound_power(node, left, right):
            return None
        return self._binary(symbol, left, right, self.written.at(node), flag=False)

    def _sound_power(self, node: ast.BinOp, base: Formula, exponent: Formula) -> bool:
        """Whether a power is of a size that somebody can mean."""
        plain = exponent.operand if isinstance(exponent, Unary) else exponent
        if isinstance(plain, Number) and plain.value > HIGHEST_POWER:
            self._wrong(node.right, f"the power is beyond {HIGHEST_POWER}")
            return False
        fixed = all(not isinstance(part, Name) for part in walk(base))
        if _has_power(exponent) or (fixed and _has_power(base)):
            self._wrong(node, "a power of a power is not part of formulas; name the inner one under 'let'")
            return False
        return True

    def _logic(self, node: ast.BoolOp) -> Formula | None:
        symbol = "and" if isinstance(node.op, ast.And) else "or"
        parts = [self._flag(value) for value in node.values]
        if None in parts:
            return None
        joined = parts[0]
        for part in parts[1:]:
            joined = self._binary(symbol, joined, part, self.written.at(node), flag=True)
        return joined

    def _comparison(self, node: ast.Compare) -> Formula | None:
        operands = [node.left, *node.comparators]
        if any(isinstance(operand, ast.Constant) and isinstance(operand.value, str) for operand in operands):
            return self._choice_is(node, operands)
        parts = [self.read(operand) for operand in operands]
        for operand, part in zip(operands, parts, strict=True):
            if part is not None and part.kind.is_flag:
                return self._compared_flag(operand)
        if None in parts:
            return None
        place = self.written.at(node)
        pairs = zip(parts, node.ops, parts[1:], strict=False)
        joined, *later = [self._binary(COMPARISONS[type(op)], left, right, place, flag=True)
                          for left, op, right in pairs]
        for one in later:
            joined = self._binary("and", joined, one, place, flag=True)
        return joined

    def _compared_flag(self, node: ast.expr) -> None:
        words = self.written.of(node)
        hint = f"write '{words}' or 'not {words}' alone" if words.isidentifier() else "join them by 'and', 'or', 'not'"
        return self._wrong(node, f"flags are not compared; {hint}")

    def _choice_is(self, node: ast.Compare, operands: list[ast.expr]) -> Formula | None:
        """A choice compared with one of its words."""
        texts = [operand for operand in operands if isinstance(operand, ast.Constant)]
        names = [operand for operand in operands if isinstance(operand, ast.Name)]
        if len(texts) != 1 or len(names) != 1 or len(operands) != 2 or not isinstance(node.ops[0], ast.Eq | ast.NotEq):
            return self._wrong(node, "a text is compared with one choice by '==' or '!=', as in \"side == 'call'\"")
        name, word = names[0].id, texts[0].value
        words = self.scope.choices.get(name)
        if name in self.scope.broken or words == ():
            return None
        if words is None:
            known = did_you_mean(name, self.scope.choices) if name not in self.scope.names else ""
            return self._wrong(names[0], f"'{name}' is not a choice, and only a choice is compared with a text{known}")
        if word not in words:
            return self._wrong(texts[0], f"'{word}' is no word of the choice '{name}'{offered(word, words)}")
        return ChoiceIs(name, word, isinstance(node.ops[0], ast.NotEq), self.written.at(node))

    def _conditional(self, node: ast.IfExp) -> Formula | None:
        if text := bare_conditional(node, self.written):
            self._wrong(node, text)
        condition = self._flag(node.test)
        yes, no = self.read(node.body), self.read(node.orelse)
        if condition is None or yes is None or no is None:
            return None
        if yes.kind.is_flag != no.kind.is_flag:
            return self._wrong(node, f"the branches of a conditional are of different kinds: {yes.kind.value} and "
                                     f"{no.kind.value}")
        per_asset = any(part.kind.per_asset for part in (condition, yes, no))
        kind = Kind.of(flag=yes.kind.is_flag, per_asset=per_asset)
        return IfElse(condition, yes, no, self.written.at(node), kind)

    def _binary(self, symbol: str, left: Formula, right: Formula, place: Place, *, flag: bool) -> Binary:
        per_asset = left.kind.per_asset or right.kind.per_asset
        return Binary(symbol, left, right, place, Kind.of(flag=flag, per_asset=per_asset))

    # Calls

    def _call(self, node: ast.Call) -> Formula | None:
        name = node.func.id if isinstance(node.func, ast.Name) else ""
        if name not in CALLS:
            called = self.written.of(node.func)
            hint = offered(called, CALLS)
            if name in self.scope.names or name in self.scope.choices:
                hint = "; an operator is missing before the bracket" if name in self.scope.names else ""
            return self._wrong(node, f"'{called}' is not a function of formulas{hint}")
        how, fewest, most = CALLS[name]
        if node.keywords:
            return self._wrong(node, f"arguments have no names; expected {how}")
        count = len(node.args)
        if count < fewest or (most is not None and count > most):
            found = "1 argument" if count == 1 else f"{count or 'no'} arguments"
            return self._wrong(node, f"expected {how}, found {found}")
        if name in self.scope.barred:
            return self._wrong(node, self.scope.barred[name])
        match name:
            case "given":
                return self._given(node)
            case "of":
                return self._of(node)
            case "previous":
                return self._previous(node)
        parts = [self._flag(part) if name in OF_FLAGS else self._number(part) for part in node.args]
        if None in parts:
            return None
        if name in OVER_ASSETS:
            return self._over_assets(node, name, tuple(parts))
        per_asset = any(part.kind.per_asset for part in parts)
        return Call(name, tuple(parts), self.written.at(node), Kind.of(flag=False, per_asset=per_asset))

    def _over_assets(self, node: ast.Call, name: str, parts: tuple[Formula, ...]) -> Formula | None:
        kind = Kind.FLAG if name in OF_FLAGS else Kind.NUMBER
        if not self._one_for_each(node.args[0], parts[0]):
            return None
        if name == "ranked":
            rank = parts[1]
            whole = not isinstance(rank, Number) or (rank.value >= 1 and rank.value == int(rank.value))
            if rank.kind.per_asset or not whole:
                return self._wrong(node.args[1], "the rank must be a whole number from 1, the worst")
        return Call(name, parts, self.written.at(node), kind)

    def _one_for_each(self, node: ast.expr, part: Formula) -> bool:
        """Whether a part has one value for each asset, as functions over the assets need."""
        if part.kind.per_asset or self.scope.single:
            return True
        wanted = Kind.of(flag=part.kind.is_flag, per_asset=True)
        self._wrong(node, f"expected {wanted.value}, found {part.kind.value}")
        return False

    def _of(self, node: ast.Call) -> Formula | None:
        part, asset, scope = self.read(node.args[0]), node.args[1], self.scope
        if not isinstance(asset, ast.Name):
            return self._wrong(asset, "expected an asset, by its name or by an 'asset' term")
        if asset.id in scope.broken:
            return None
        known = (*scope.asset_terms, *(scope.asset_names or ()))
        if asset.id not in known and (scope.asset_names is not None or asset.id in (*scope.names, *scope.choices)):
            return self._wrong(asset, f"'{asset.id}' is not an asset{offered(asset.id, known)}")
        if part is None or not self._one_for_each(node.args[0], part):
            return None
        kind = Kind.of(flag=part.kind.is_flag, per_asset=False)
        return OfAsset(part, asset.id, self.written.at(node), kind)

    def _previous(self, node: ast.Call) -> Formula | None:
        if self.in_previous:
            return self._wrong(node, "'previous' cannot stand inside 'previous'; carry the value as a running value")
        self.in_previous = True
        part, first = map(self.read, node.args)
        self.in_previous = False
        if part is None or first is None:
            return None
        if part.kind.is_flag != first.kind.is_flag:
            return self._wrong(node.args[1], f"expected {part.kind.value} as before, found {first.kind.value}")
        per_asset = part.kind.per_asset or first.kind.per_asset
        kind = Kind.of(flag=part.kind.is_flag, per_asset=per_asset)
        return Previous(part, first, self.written.at(node), kind)

    def _given(self, node: ast.Call) -> Formula | None:
        term, scope = node.args[0], self.scope
        if isinstance(term, ast.Name) and term.id in scope.optional:
            return Given(term.id, self.written.at(node))
        if isinstance(term, ast.Name) and term.id in scope.broken:
            return None
        words = self.written.of(term)
        hint = offered(words, scope.optional)
        return self._wrong(term, f"'given' asks about an optional term, and '{words}' is not one{hint}")


def _has_power(formula: Formula) -> bool:
    return any(isinstance(part, Binary) and part.symbol == "**" for part in walk(formula))
