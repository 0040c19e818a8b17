"""Checked documents: located values to frozen, typed objects.

In: `Document`s. Out: `Payoff`, `Contract` and `Market`, and every fault found. Read `payoff.py`, `contract.py` and
`market.py` first (the objects), then `formula.py` and `expression.py` (formulas), and `load.py` for the way through.
"""
