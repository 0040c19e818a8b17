"""Estimators: block sums to numbers with errors.

In: a dated contract, a market and how precise the answer should be. Out: estimates. Read `estimate.py`, then
`price.py`.
"""
