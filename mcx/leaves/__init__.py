"""Leaves: the numbers that the market gives to the tape's inputs.

In: a `Market` and the `Leaf` keys of a tape. Out: one number for each leaf: drifts, covariance factors, discount
factors. Read `market_map.py` first.
"""
