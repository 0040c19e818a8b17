"""Variance reduction: every method one small file behind one contract.

Comes in: a contract ready to run, and names of methods. Goes out: a `Scheme`, the program that is run in its place and
how it draws. Read `scheme.py` first, then `catalogue.py`.
"""
