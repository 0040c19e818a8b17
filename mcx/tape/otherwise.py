"""A contract and its other readings on one tape, over the union of their dates.

All read the same paths, so what a reading adds or takes is known path by path. What two readings have in common is on
the tape once; a reading that says what the contract says comes out as the same value and is left away.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass

from mcx.dates.dated_contract import DatedContract
from mcx.dates.otherwise import DatedOtherwise
from mcx.faults import Fault
from mcx.tape.builder import Builder
from mcx.tape.ops import Op
from mcx.tape.passes import drop_dead_code
from mcx.tape.program import Output, Tape
from mcx.tape.steps import PLAIN, Grid, Makeup, expand_levels
from mcx.tape.unroll import unknown_laws, walked
from mcx.tape.watching import conflicts


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
    dated: DatedContract, others: Iterable[DatedOtherwise], *, nodes: Sequence[float], makeup: Makeup = PLAIN
) -> UnrolledOtherwise:
    """One tape of a contract that can be unrolled by itself and of its other readings; `nodes` and `makeup` as for
    `unroll`.

    The extremes of a watch that another reading does not have are drawn beside its own: each output has its own law
    right, whether or not their joint law is known.
    """
    builder = Builder()
    price = walked(dated, builder).outputs[0]
    outputs, found, same, refused = [price], [], [], []
    for other in others:
        value, faults = (None, other.faults) if other.dated is None else _price(other.dated, builder, makeup)
        if faults:
            refused.append(DatedOtherwise(other.reading, None, tuple(sorted(set(faults)))))
        elif value == price.value:
            same.append(other)
        else:
            found.append(other)
            outputs.append(Output.of("reading", value, other.reading.name))
            outputs.append(Output.of("difference", builder.emit(Op.SUB, value, price.value), other.reading.name))
    tape, grid = expand_levels(drop_dead_code(builder.tape(outputs)), nodes, makeup)
    return UnrolledOtherwise(tape, grid, tuple(found), tuple(same), tuple(refused))


def _price(dated: DatedContract, builder: Builder, makeup: Makeup) -> tuple[int, Sequence[Fault]]:
    """The price of one reading as a value of the tape, and why it cannot be simulated."""
    walk = walked(dated, builder)
    price = walk.outputs[0]
    alone = drop_dead_code(builder.tape([price]))
    faults = walk.faults or conflicts(alone) or unknown_laws(alone, makeup)
    return price.value, [*faults, *walk.observations.unstated.values(), *walk.observations.missing(alone)]
