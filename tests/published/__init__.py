"""Published values of options, and the contracts that they are the values of.

In: the YAML files beside this one (copied figures, each with its source). Out: `Case`s, and for each the text of the
contract and market that it describes. Read `README.md`, then `cases.py`.
"""
