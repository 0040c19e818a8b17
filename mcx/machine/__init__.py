"""The machine: plain arrays in, block sums out. It sees operations and registers, never a contract or market.

In: a `Program`, a seed and a number of paths. Out: `BlockSums`. Read `run.py` first, then `prepare.py` (what
the kernel is given), `forward.py` (the kernel) and `blocks.py` (what drives it).
"""
