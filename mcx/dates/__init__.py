"""Dates: when things happen.

In: a `Contract` and the valuation date. Out: a `DatedContract`, with every observation and payment on its day, and the
faults that only dates can show. Read `dated_contract.py` first, then `dating.py`.
"""
