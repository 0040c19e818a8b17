"""The machine: plain arrays in, block sums out. It sees operations and registers, never a contract or a market.

In: a `Program`, a seed and a number of paths. Out: `BlockSums`. Read `run.py` first, then `forward.py` (the kernel).
"""
