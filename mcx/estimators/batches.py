"""Batch means: sums over 64 fixed parts of a run, and the estimates of anything linear in them.

Paths are spread over the parts by their numbers, so that two runs with one seed hold the same paths in the same parts:
what is a difference of runs, or a sum of many sums, has its error from how the parts differ (L. Schmeiser, "Batch size
effects in the analysis of simulation output", 1982). That needs no covariances and stays right after any chain rule.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from mcx.estimators.estimate import Estimate, estimates
from mcx.faults import RequestError
from mcx.machine.run import Notice, Stream, run
from mcx.machine.sizes import BATCHES, GROUP
from mcx.tape.program import Program

FEWEST_PATHS = BATCHES * GROUP  # so that every part has a whole group


@dataclass(frozen=True, slots=True)
class Batches:
    """paths (64,) of each part; means (64, quantities) over the paths of each part."""

    paths: np.ndarray
    means: np.ndarray

    def through(self, matrix: np.ndarray) -> Batches:
        """Linear combinations of the quantities: matrix (quantities, results)."""
        return Batches(self.paths, self.means @ matrix)

    def estimates(self) -> tuple[Estimate, ...]:
        """The mean of each quantity over all paths, with its error."""
        total = int(self.paths.sum())
        share = self.paths / total
        mean = share @ self.means
        parts = len(share)
        error = np.sqrt(((share[:, None] * (self.means - mean)) ** 2).sum(axis=0) * parts / (parts - 1))
        return tuple(Estimate(float(m), float(e), total) for m, e in zip(mean, error, strict=True))

    def estimate(self, weights: np.ndarray) -> Estimate:
        """One linear combination of the quantities."""
        return self.through(np.reshape(weights, (-1, 1))).estimates()[0]


@dataclass(frozen=True, slots=True)
class Sampling:
    """Which paths: the same for every program that is compared with another."""

    seed: int
    paths: int
    stream: int = Stream.MAIN
    threads: int | None = None
    progress: Callable[[int, float, float], None] | None = None
    notice: Notice | None = None

    def sums(self, program: Program) -> tuple[Batches, Estimate]:
        """The means of all sums that a program takes, and its first output, the price, with the error of single paths.

        After an interruption those of the paths so far, fewer than asked for. Raises NonFinitePath and NonFiniteSum of
        `machine.run`, and KeyboardInterrupt where the interruption came before every part had paths.
        """
        found = run(program, seed=self.seed, paths=self.paths, stream=self.stream, threads=self.threads,
                    progress=self.progress, notice=self.notice)
        if found.interrupted and not found.batch_paths.all():
            raise KeyboardInterrupt
        price = estimates(found.paths, found.mean[:1], found.m2[:1])[0]
        return Batches(found.batch_paths, found.sums / found.batch_paths[:, None]), price


def check_paths(paths: int | None) -> None:
    """Raises RequestError for too few paths to have batches of."""
    if paths is not None and paths < FEWEST_PATHS:
        raise RequestError(f"'greeks' and 'verify' need at least {FEWEST_PATHS:,} paths, since their errors come from "
                           f"{BATCHES} parts of the run; asked for were {paths:,}")
