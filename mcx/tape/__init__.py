"""The tape: a contract as a straight line of array instructions, its one meaning.

In: a `DatedContract`. Out: a `Tape`, and the `Program` that the kernels read. Read `ops.py` and `program.py` first,
then `unroll.py` (from contract to tape) and `interpret.py` (what an instruction means).
"""
