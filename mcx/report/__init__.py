"""Report: results for people and for machines.

In: estimates and contracts. Out: frozen results with `to_dict()`, tables, sentences and records. Read `results.py`
first: the JSON keys are documented there and nowhere else.
"""
