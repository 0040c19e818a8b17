"""Leaves sorted into groups that are worked out together: found once, used for many markets."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np

from mcx.tape.program import Leaf, LeafKind


@dataclass(frozen=True, slots=True)
class Group:
    """Leaves of one kind, and of one asset where the kind is about one (else -1), with their positions and times."""

    kind: LeafKind
    asset: int
    leaves: tuple[Leaf, ...]
    positions: np.ndarray
    starts: np.ndarray
    ends: np.ndarray


@dataclass(frozen=True, slots=True)
class Factors:
    """FACTOR leaves of all steps in which the same assets move: leaf k is entry (`rows[k]`, `columns[k]`) of the
    factor of step `steps[k]`, which goes from `starts[steps[k]]` to `ends[steps[k]]`."""

    assets: tuple[int, ...]
    starts: np.ndarray
    ends: np.ndarray
    positions: np.ndarray
    steps: np.ndarray
    rows: np.ndarray
    columns: np.ndarray


@dataclass(frozen=True, slots=True)
class Grouped:
    """All leaves of a tape, in groups; `size` is how many there are."""

    groups: tuple[Group, ...]
    factors: tuple[Factors, ...]
    size: int


def grouped(leaves: Iterable[Leaf]) -> Grouped:
    """The leaves in groups; positions are those in the order given."""
    groups: dict[tuple[LeafKind, int], list[tuple[int, Leaf]]] = {}
    steps: dict[tuple[float, float], list[tuple[int, Leaf]]] = {}
    size = 0
    for position, leaf in enumerate(leaves):
        size += 1
        if leaf.kind is LeafKind.FACTOR:
            steps.setdefault((leaf.start, leaf.end), []).append((position, leaf))
        else:
            groups.setdefault((leaf.kind, leaf.asset), []).append((position, leaf))
    return Grouped(tuple(_group(*key, entries) for key, entries in groups.items()), tuple(_factors(steps)), size)


def _group(kind: LeafKind, asset: int, entries: list[tuple[int, Leaf]]) -> Group:
    positions, leaves = zip(*entries, strict=True)
    starts, ends = (np.array([getattr(leaf, name) for leaf in leaves]) for name in ("start", "end"))
    return Group(kind, asset, leaves, np.array(positions), starts, ends)


def _factors(steps: dict[tuple[float, float], list[tuple[int, Leaf]]]) -> Iterable[Factors]:
    alike: dict[tuple[int, ...], list[tuple[float, float]]] = {}
    for step, entries in steps.items():
        moving = {asset for _, leaf in entries for asset in (leaf.asset, leaf.other)}
        alike.setdefault(tuple(sorted(moving)), []).append(step)
    for assets, spans in alike.items():
        row = {asset: number for number, asset in enumerate(assets)}
        found = np.array([(position, number, row[leaf.asset], row[leaf.other])
                          for number, span in enumerate(spans) for position, leaf in steps[span]])
        yield Factors(assets, *np.array(spans).T, *found.T)
