"""Contract text: bytes to located values. Knows YAML, nothing of contracts.

In: files. Out: `Document`s whose every node keeps its file, line and column, and a list of faults. Read `located.py`
first (the tree), then `yaml12.py` (how it is built), `scalars.py` (what a text can mean) and `documents.py` (which
document is of which kind).
"""
