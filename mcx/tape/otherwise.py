"""A contract and its other readings on one tape, over the union of their dates.

All read the same paths, so what a reading adds or takes is known path by path. What two readings have in common is on
the tape once; a reading that says what the contract says comes out as the same value and is left away.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, replace

from mcx.dates.dated_contract import DatedContract
from mcx.dates.otherwise import DatedOtherwise
from mcx.faults import Fault
from mcx.tape.builder import Builder
from mcx.tape.formulas import fixed_values
from mcx.tape.ops import Op
from mcx.tape.passes import drop_dead_code
from mcx.tape.program import LevelKey, Output, Tape
from mcx.tape.steps import PLAIN, Grid, Makeup, expand_levels
from mcx.tape.unroll import unknown_laws, walked
from mcx.tape.watching import conflicts
from mcx.tape.weights import weigh


@dataclass(frozen=True, slots=True)
class UnrolledOtherwise:
    """A contract and its readings as one tape.

    tape     outputs: the price; then for each reading 'reading: NAME', its price, and 'difference: NAME', its price
             less the contract's
    grid     the simulated times and assets of all of them
    readings the readings on the tape, in the order of their outputs
    same     those that say of this contract what it says already
    refused  those that cannot be simulated or cannot be read in this contract, with the faults
    """

    tape: Tape
    grid: Grid
    readings: tuple[DatedOtherwise, ...]
    same: tuple[DatedOtherwise, ...]
    refused: tuple[DatedOtherwise, ...]


def unroll_otherwise(
    dated: DatedContract, others: Iterable[DatedOtherwise], *, nodes: Sequence[float], makeup: Makeup = PLAIN,
    pieces: int = 1, everything_drawn: bool = False,
) -> UnrolledOtherwise:
    """One tape of a contract that can be unrolled by itself and of its other readings; all else as for
    `unroll`.

    The extremes of a watch that another reading does not have are drawn beside its own: each output has its own law
    right, whether or not their joint law is known.
    """
    builder = Builder()
    others = tuple(others)
    price = walked(dated, builder, nodes).outputs[0]
    outputs, found, same, refused = [price], [], [], []
    for other in others:
        value, faults = (None, other.faults) if other.dated is None else _price(other.dated, builder, nodes, makeup)
        if faults:
            refused.append(DatedOtherwise(other.reading, None, tuple(sorted(set(faults)))))
        elif value == price.value:
            same.append(other)
        else:
            found.append(other)
            outputs.append(Output.of("reading", value, other.reading.name))
            outputs.append(Output.of("difference", builder.emit(Op.SUB, value, price.value), other.reading.name))
    together = drop_dead_code(builder.tape(outputs))

    def weighed(outputs: Sequence[Output]) -> Tape:
        tape = drop_dead_code(replace(together, outputs=tuple(outputs)))
        return weigh(tape, fixed_values(tape, dated.contract), everything_drawn, makeup.leaders).tape

    weighted = weighed(together.outputs)
    wanted = [output for output in weighted.outputs if output.kind != "gap"]
    if unsure := _without_law(weighted, wanted, found, lambda k: weighed([together.outputs[0], together.outputs[k]])):
        kept = [other for other in others if other.reading not in {fault.reading for fault in unsure}]
        left = unroll_otherwise(dated, kept, nodes=nodes, makeup=makeup, pieces=pieces,
                                everything_drawn=everything_drawn)
        return replace(left, refused=(*left.refused, *unsure))
    if any(step.op is Op.MOMENT for step in weighted.instructions):  # its stretch is one step of the union of the dates
        times = {time for step in weighted.instructions if isinstance(step.payload, LevelKey)
                 for time in (step.payload.start, step.payload.time) if time > 0}
        if not times <= set(nodes):
            return unroll_otherwise(dated, others, nodes=sorted({*nodes, *times}), makeup=makeup, pieces=pieces,
                                    everything_drawn=everything_drawn)
    tape, grid = expand_levels(drop_dead_code(replace(weighted, outputs=tuple(wanted))), nodes, makeup, pieces)
    return UnrolledOtherwise(tape, grid, tuple(found), tuple(same), tuple(refused))


def _without_law(
    tape: Tape, outputs: Sequence[Output], found: Sequence[DatedOtherwise], beside: Callable[[int], Tape]
) -> tuple[DatedOtherwise, ...]:
    """The readings that have no law beside the others, though they have one alone: what enters by its chances alone may
    have to be drawn beside what others draw. Where the contract's own law is lost, those beside which alone it is
    (`beside` gives the tape of the contract and one other output), or all."""

    def faults(tape: Tape, output: Output) -> tuple[Fault, ...]:
        return tuple(conflicts(drop_dead_code(replace(tape, outputs=(output,)))))

    if lost := faults(tape, outputs[0]):
        pairs = [beside(number) for number in range(1, len(outputs), 2)]
        wrong = [(other, faults(pair, pair.outputs[0])) for other, pair in zip(found, pairs, strict=True)]
        wrong = wrong if any(each for _, each in wrong) else [(other, lost) for other in found]
    else:
        wrong = [(other, faults(tape, output)) for other, output in zip(found, outputs[1::2], strict=True)]
    return tuple(DatedOtherwise(other.reading, None, each) for other, each in wrong if each)


def _price(
    dated: DatedContract, builder: Builder, nodes: Sequence[float], makeup: Makeup
) -> tuple[int, Sequence[Fault]]:
    """The price of one reading as a value of the tape, and why it cannot be simulated."""
    walk = walked(dated, builder, nodes)
    price = walk.outputs[0]
    alone = drop_dead_code(builder.tape([price]))
    faults = (walk.faults or unknown_laws(alone, makeup)
              or conflicts(weigh(alone, fixed_values(alone, dated.contract), leaders=makeup.leaders).tape))
    return price.value, [*faults, *walk.observations.unstated.values(), *walk.observations.missing(alone)]
