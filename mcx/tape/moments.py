"""Moments of hits beside other watches: what has a law.

A moment is drawn given both ends of its stretch and that its own level is reached, one normal and one uniform serving
all. So its mean is right where nothing but levels on dates and its own flag goes with it. Together with another level
that may be reached in the same stretch of time, or with the moment of another hit, it would need their joint law, which
is not known. Sums do no harm: each part has its mean.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass

from mcx.faults import Fault
from mcx.tape.ops import Op
from mcx.tape.program import Instruction

TOGETHER = ("the moment of this hit, kept by 'set', decides what is paid together with another level that is watched "
            "at that time or with the moment of another hit: how they go together is not known; use each in payments "
            "of its own, or watch one of them on dates")
SUMS = frozenset({Op.ADD, Op.SUB, Op.NEG, Op.NOT})
PRODUCTS = frozenset({Op.MUL, Op.AND, Op.OR})

Span = tuple[float, float]


@dataclass(frozen=True, slots=True)
class Reads:
    """What a value depends on, each with the time that it spans: `moments` by the watch that waits for them; `extremes`
    by side, asset and the watch whose own flag they decide, '' where they enter in any other way."""

    moments: tuple[tuple[str, Span], ...] = ()
    extremes: tuple[tuple[tuple[Op, int, str], Span], ...] = ()

    def owned(self, watch: str) -> Reads:
        """The same as the flag of a watch."""
        return Reads(self.moments, _joined(((op, asset, watch), span) for (op, asset, _), span in self.extremes))


NOTHING = Reads()


def moments_without_law(
    instructions: Sequence[Instruction], outputs: Iterable[int], flags: Mapping[int, str], moments: Mapping[int, str]
) -> Iterator[Fault]:
    """Moments of a tape under construction that decide an output together with what they have no joint law with.
    `flags` and `moments` say of which watches values are the flag, and the moment of its turning."""
    needed = bytearray(len(instructions))
    for value in outputs:
        needed[value] = 1
    for number in range(len(instructions) - 1, -1, -1):
        if needed[number]:
            for operand in instructions[number].operands:
                needed[operand] = 1
    found, places = [NOTHING] * len(instructions), {moments[k]: instructions[k].place for k in moments}
    wrong: set[str] = set()
    for number, step in enumerate(instructions):
        if needed[number]:
            operands = [found[k] for k in step.operands]
            wrong |= {watch for one, other in _together(step.op, operands) for watch in _clashes(one, other)}
            reads = _read(number, step, operands, moments)
            found[number] = reads.owned(flags[number]) if number in flags else reads
    yield from (Fault(places[watch], TOGETHER) for watch in sorted(wrong))


def _read(number: int, step: Instruction, operands: Sequence[Reads], moments: Mapping[int, str]) -> Reads:
    if step.op in (Op.LOW, Op.HIGH):
        return Reads(extremes=(((step.op, step.payload.asset, ""), (step.payload.start, step.payload.time)),))
    if number in moments:
        return Reads(((moments[number], (step.payload.start, step.payload.time)),))
    different = list(dict.fromkeys(each for each in operands if each is not NOTHING))
    return different[0] if len(different) == 1 else _union(different) if different else NOTHING


def _union(parts: Iterable[Reads]) -> Reads:
    parts = tuple(parts)
    return Reads(_joined(pair for part in parts for pair in part.moments),
                 _joined(pair for part in parts for pair in part.extremes))


def _joined(pairs: Iterable[tuple]) -> tuple[tuple, ...]:
    """Each key once, from its earliest time to its latest."""
    spans: dict = {}
    for key, (start, end) in pairs:
        first, last = spans.get(key, (start, end))
        spans[key] = min(first, start), max(last, end)
    return tuple(spans.items())


def _together(op: Op, operands: Sequence[Reads]) -> Iterator[tuple[Reads, Reads]]:
    """The pairs of which an operation needs more than the mean of either."""
    if op in SUMS or not any(operand.moments for operand in operands):
        return
    if op in PRODUCTS:
        yield tuple(operands)
    elif op is Op.SELECT:
        yield from ((operands[0], operand) for operand in operands[1:])
    else:
        yield _union(operands), _union(operands)


def _clashes(one: Reads, other: Reads) -> Iterator[str]:
    """The watches whose moments need a law beside the other value."""
    for mine, theirs in ((one, other), (other, one)):
        for watch, (start, end) in mine.moments:
            if any(name != watch for name, _ in theirs.moments) or any(
                    name != watch and first < end and start < last for (_, _, name), (first, last) in theirs.extremes):
                yield watch
