"""The tape: a contract as a straight line of array instructions, its one meaning.

In: a `DatedContract`. Out: a `Tape`, and the `Program` that the kernels read. Read `ops.py` and `program.py` first,
then `walk.py` and `unroll.py` (from contract to tape) and `interpret.py` (what an instruction means). Derivatives are
made of the tape as well: `adjoint.py` (path by path), `smooth.py` (where that is valid), `scores.py` (where it is not).
"""
