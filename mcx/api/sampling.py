"""What the sampling verbs are asked for alike: how much, from which seed, by which methods, on how many processors."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

from mcx.faults import RequestError

if TYPE_CHECKING:
    from mcx.checked.contract import Contract
    from mcx.estimators.plan import Precision

File = str | Path
Progress = Callable[[int, int, float], None]  # paths done, paths planned, standard error so far (unit of the price)
Notice = Callable[[str], None]
LARGEST_SEED = (1 << 64) - 1


@dataclass(frozen=True, slots=True)
class Sampling:
    """What decides the digits of a sampled number."""

    precision: Precision
    seed: int
    reduction: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class Means:
    """What the work is done with and who is told of it; changes no digit."""

    threads: int | None = None
    progress: Progress | None = None
    notice: Notice | None = None


def sampling_of(
    paths: int | None, within: str | float | None, seconds: float | None, seed: int | None, reduction: str = "none"
) -> Sampling:
    """The wishes of a verb, checked; raises RequestError."""
    from mcx.estimators.plan import DEFAULT_SEED, precision
    from mcx.estimators.reduction.names import wished

    asked = precision(paths, within, seconds)
    return Sampling(asked, DEFAULT_SEED if seed is None else checked_seed(seed), wished(reduction))


def check_sampling(sampling: Sampling, contracts: Iterable[Contract]) -> None:
    """Raises RequestError where what was asked for has no meaning for one of the contracts."""
    from mcx.estimators.plan import check_fits

    for each in contracts:
        check_fits(sampling.precision, notional=each.notional is not None, title=each.title)


def checked_seed(seed: object) -> int:
    """Raises RequestError for what is no seed."""
    if isinstance(seed, bool) or not hasattr(seed, "__index__") or not 0 <= seed <= LARGEST_SEED:
        raise RequestError(f"'seed' is a whole number from 0 to {LARGEST_SEED}, not {seed!r}")
    return int(seed)


def means_of(threads: object, progress: Progress | None = None, notice: Notice | None = None) -> Means:
    """Raises RequestError for a number of threads that the machine does not have."""
    if threads is None:
        return Means(None, progress, notice)
    most = len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1
    if isinstance(threads, bool) or not hasattr(threads, "__index__") or not 1 <= threads <= most:
        raise RequestError(f"'threads' is from 1 to {most}, the processors at hand, not {threads!r}")
    return Means(int(threads), progress, notice)


def plain_only(sampling: Sampling) -> Sampling:
    """Raises RequestError where methods of variance reduction are asked for that a verb does not take."""
    if sampling.reduction:
        raise RequestError(f"the variance reduction of 'verify' is 'none', not {','.join(sampling.reduction)!r}: what it "
                           f"compares is revalued on plain paths")
    return sampling
