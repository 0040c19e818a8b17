"""The tape: a straight line of instructions in single-assignment form, and the plain arrays that kernels read.

`Tape` is the one meaning of a contract. Instruction i defines value i; operands are numbers of earlier values. Outputs
are named values: the price, each leg, each condition. `Program` is a tape made ready for the kernel.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field, replace
from enum import Enum

import numpy as np

from mcx.faults import Place
from mcx.tape.ops import ANY, OPS, Op


class LeafKind(Enum):
    """What a scalar input of the tape is; the numbers that go with it are in `Leaf`."""

    LOG_SPOT = "log of the spot"  # asset; last (0: all of it): without the cash dividends up to then
    DRIFT = "drift of the log over a step"  # asset, start, end
    FACTOR = "covariance factor of a step"  # asset, other (the asset whose normal it multiplies), start, end
    VARIANCE = "variance of the log over a step"  # asset, start, end; other (-1: none): of the sum of both logs
    FORWARD = "forward of an asset"  # asset, end
    JUMP = "log of what a dividend leaves"  # asset, end: its ex date
    ESCROW = "cash dividends still to come"  # asset, end, last
    MEAN_ESCROW = "mean of the cash dividends to come over a step"  # asset, start, end, last
    DISCOUNT = "funded discount factor"  # end: when the amount is paid
    LENGTH = "length of a step in years"  # start, end
    TERM = "a numeric term of the contract"  # name, asset (-1: one for all), index (-1: one for all dates)


@dataclass(frozen=True, slots=True)
class Leaf:
    """The key of a scalar input. Times are years from the valuation date; unused fields keep their defaults."""

    kind: LeafKind
    asset: int = -1
    other: int = -1
    start: float = 0.0
    end: float = 0.0
    name: str = ""
    index: int = -1
    last: float = 0.0  # when the contract reads a level for the last time: cash dividends up to then are escrowed

    def __str__(self) -> str:
        shown = [self.kind.name.lower()]
        if self.name:
            shown.append(self.name + (f"[{self.index}]" if self.index >= 0 else ""))
        shown += [f"of {self.asset}"] if self.asset >= 0 else []
        shown += [f"by {self.other}"] if self.other >= 0 else []
        if self.kind not in (LeafKind.LOG_SPOT, LeafKind.TERM):
            shown.append(f"at {self.end:.10g}" if self.start == 0.0 else f"from {self.start:.10g} to {self.end:.10g}")
        return " ".join(shown)


@dataclass(frozen=True, slots=True)
class LevelKey:
    """Which level an input of the contract's tape reads: an asset at a time (LOW, HIGH: over the step ending there)."""

    asset: int
    time: float
    start: float = 0.0  # LOW and HIGH: where the watched stretch begins

    def __str__(self) -> str:
        since = f" since {self.start:.10g}" if self.start else ""
        return f"of {self.asset} at {self.time:.10g}{since}"


@dataclass(frozen=True, slots=True)
class Barrier:
    """A side of an asset that is watched over a stretch: LOW or HIGH, and the key of the extreme."""

    op: Op
    key: LevelKey

    @property
    def order(self) -> tuple:
        return self.key.start, self.key.time, self.key.asset, self.op


class Bound(Enum):
    """Which number stands for the chance that no barrier of several assets is reached within a step, of which only
    the assets' own chances are known: M. Frechet's bounds (1951), or the chance itself where one asset is watched, or
    several that move as one."""

    EXACT = "exact"
    LOWER = "lower"  # max(0, sum of the chances - (assets - 1))
    UPPER = "upper"  # the smallest of the chances


@dataclass(frozen=True, slots=True)
class Unhit:
    """What an UNHIT is about: barriers, each at the level that the operand in its place gives."""

    barriers: tuple[Barrier, ...]
    bound: Bound

    def __str__(self) -> str:
        shown = [f"{one.op.name.lower()} {one.key}" for one in self.barriers]
        return f"{', '.join(shown)} ({self.bound.value})"


@dataclass(frozen=True, slots=True)
class Instruction:
    """One operation. `payload` is the number of a CONSTANT, the Leaf of a LEAF, the LevelKey of LEVEL, LOW, HIGH and
    MOMENT, the Unhit of an UNHIT, the dimension of NORMAL and UNIFORM; `place` is the line of the contract or payoff
    it came from, where known."""

    op: Op
    operands: tuple[int, ...] = ()
    payload: float | Leaf | LevelKey | Unhit | int | None = None
    place: Place | None = None


@dataclass(frozen=True, slots=True)
class Output:
    """A named result of the tape. `flag` outputs are 0 or 1 on each path.

    `kind` is price, leg, part, owed, condition, end, life, level, or gap: by how much the upper bound of the output that
    `subject` names lies above the lower one. Else `subject` is the leg's, part's, event's or asset's name;
    `day` the date or span of dates that a condition or an end is about ('' for all dates). The name is made of them.
    """

    name: str
    value: int
    flag: bool = False
    kind: str = ""
    subject: str = ""
    day: str = ""

    @staticmethod
    def of(kind: str, value: int, subject: str = "", day: str = "", flag: bool = False) -> Output:
        name = f"{kind}: {subject}" if subject else kind
        return Output(f"{name} @ {day}" if day else name, value, flag, kind, subject, day)

    def at(self, value: int) -> Output:
        """The same output where a pass has put its value."""
        return replace(self, value=value)


@dataclass(frozen=True, slots=True)
class Sum:
    """`left * right` on each path (right None: `left` alone), of which only the sum over many paths is wanted.

    `uniform` is the value of the tape, the same on every path, that this is a derivative with respect to; -1: of none.
    """

    left: int
    right: int | None = None
    uniform: int = -1

    @property
    def factors(self) -> tuple[int, ...]:
        return (self.left,) if self.right is None else (self.left, self.right)


@dataclass(frozen=True, slots=True)
class Tape:
    """Instructions, outputs, sums, and how many normals and uniforms the draws must supply for each path."""

    instructions: tuple[Instruction, ...]
    outputs: tuple[Output, ...]
    normals: int = 0
    uniforms: int = 0
    sums: tuple[Sum, ...] = ()

    @property
    def leaves(self) -> tuple[Leaf, ...]:
        """The scalar inputs in order of first appearance: the order of every array of leaf values and adjoints."""
        return tuple(dict.fromkeys(step.payload for step in self.instructions if step.op is Op.LEAF))

    def __str__(self) -> str:
        lines = []
        for number, step in enumerate(self.instructions):
            shown = OPS[step.op].form.format(*(f"v{k}" for k in step.operands))
            if OPS[step.op].arity == ANY:
                shown += f" of {', '.join(f'v{k}' for k in step.operands)}"
            if step.payload is not None:
                shown += f" {step.payload}"
            lines.append(f"v{number} = {shown}")
        lines += [f"{output.name} -> v{output.value}" for output in self.outputs]
        for wanted in self.sums:
            by = f"by v{wanted.uniform} " if wanted.uniform >= 0 else ""
            lines.append(f"sum {by}-> " + " * ".join(f"v{k}" for k in wanted.factors))
        return "\n".join(lines)


ALONE = np.iinfo(np.int32).max


def spot_leaf(leaves: Iterable[Leaf], asset: int) -> Leaf:
    """The LOG_SPOT leaf of an asset among a tape's, whatever cash dividends it leaves out; the plain one where there is
    none."""
    return next((leaf for leaf in leaves if leaf.kind is LeafKind.LOG_SPOT and leaf.asset == asset),
                Leaf(LeafKind.LOG_SPOT, asset=asset))


@dataclass(frozen=True, slots=True)
class Program:
    """A tape as the kernel reads it, for one set of leaf values.

    Rows 0 .. draws-1 of the register file hold the draws (normals first, then uniforms); rows draws .. rows-1 are
    work registers. An operand k >= 0 is row k; k < 0 is `scalars[-1 - k]`.

    code      (instructions, 6) int32: op, destination row, operands a, b, c, d (unused: 0); of a LOOKUP what it counts,
              its first entry and its last, between which its entries stand in `scalars`
    scalars   (scalars,) float64: values that are the same on every path
    outputs   (outputs,) int32: operand number of each output
    sums      (sums, 3) int32: of two operands whose product is summed over the paths, the first; the second, or
              ALONE where the first is summed alone; and how many instructions have run when it is: not later, since
              a register may be needed again
    """

    code: np.ndarray
    scalars: np.ndarray
    outputs: np.ndarray
    normals: int
    uniforms: int
    rows: int
    sums: np.ndarray = field(default_factory=lambda: np.empty((0, 3), dtype=np.int32))

    @property
    def draws(self) -> int:
        return self.normals + self.uniforms
