"""The contract between a method of variance reduction and the rest.

A method takes a `Draft` and hands back another: it may add controls to the contract's own tape (while that still reads
levels), rewrite the tape that reads normals, or change how draws are made. The machine needs nothing new: whatever a
method does ends up as outputs of a tape and as flags of the draw stage. All methods work on one draft, in the order of
the catalogue, so that they combine by themselves.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from enum import IntEnum

from mcx.estimators.ready import Ready
from mcx.machine.draw_plan import PLAIN, DrawPlan
from mcx.machine.run import Notice
from mcx.tape.program import Program, Tape


class Inapplicable(Exception):
    """A method has nothing to offer on a contract; the text says why."""


class Stage(IntEnum):
    """What a method changes; drafts go through the stages in this order."""

    LEVELS = 0  # the contract's tape, which reads levels
    NORMALS = 1  # the tape, which reads normals and uniforms
    DRAWS = 2  # how draws are made


@dataclass(frozen=True, slots=True)
class Case:
    """A contract, and how pilots of it are run; `most`: what the pilot of a method may cost, in nanoseconds of
    `machine/sizes.py`."""

    ready: Ready
    seed: int
    threads: int | None = None
    notice: Notice | None = None
    most: float = math.inf

    @property
    def title(self) -> str:
        return self.ready.dated.contract.title


@dataclass(frozen=True, slots=True)
class Control:
    """An output of the draft's tape whose mean is known.

    must   it takes part whether it helps alone or not
    asked  it is what a method is for; where none of these helps the method has nothing to offer
    """

    name: str
    mean: float
    must: bool = False
    asked: bool = True


@dataclass(frozen=True, slots=True)
class Draft:
    """A way to sample a contract, under way.

    tape      the contract's outputs, in its order, then one output for each control
    controls  the controls, in the order of the tape's last outputs
    plan      how draws are made
    each      how many paths of the contract one path of the tape is
    notes     what a method found, for the reader
    """

    tape: Tape
    controls: tuple[Control, ...] = ()
    plan: DrawPlan = PLAIN
    each: int = 1
    notes: tuple[str, ...] = ()

    def noted(self, *notes: str) -> Draft:
        return replace(self, notes=(*self.notes, *notes))


@dataclass(frozen=True, slots=True)
class Method:
    """A method of variance reduction. `excludes`: names of methods that it cannot go with, and why."""

    name: str
    about: str
    stage: Stage
    change: Callable[[Case, Draft], Draft]  # raises Inapplicable
    excludes: tuple[tuple[str, str], ...] = ()


@dataclass(frozen=True, slots=True)
class Scheme:
    """A contract as it is sampled: the outputs of the program are those of the contract, in its order.

    names     of the methods, in the order of the catalogue; empty: plain sampling
    each      how many paths of the contract one path of the program is
    fit_paths  how many paths of a stream of their own gave the coefficients of controls
    notes     what the methods found, for the reader
    """

    names: tuple[str, ...]
    program: Program
    plan: DrawPlan = PLAIN
    each: int = 1
    fit_paths: int = 0
    notes: tuple[str, ...] = ()

    def noted(self, *notes: str) -> Scheme:
        return replace(self, notes=(*self.notes, *notes))

    @property
    def label(self) -> str:
        """The methods as they are written in a request."""
        return ",".join(self.names) or "none"

    @property
    def batch(self) -> int:
        """How many paths of the program give one independent mean, where draws are not made of scrambles."""
        return self.plan.strata or 1
