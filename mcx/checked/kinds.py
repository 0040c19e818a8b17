"""The kinds of value that a formula can have, and how they combine.

A formula gives a number, a flag, one number for each asset or one flag for each asset. With one asset the two
collapse: `spot / initial` is then a plain number, and `worst` of it is itself.
"""

from __future__ import annotations

from enum import Enum


class Kind(Enum):
    """The kind of a formula's value."""

    NUMBER = "a number"
    FLAG = "a flag"
    NUMBERS = "one number for each asset"
    FLAGS = "one flag for each asset"

    @property
    def is_flag(self) -> bool:
        return self in (Kind.FLAG, Kind.FLAGS)

    @property
    def per_asset(self) -> bool:
        return self in (Kind.NUMBERS, Kind.FLAGS)

    @staticmethod
    def of(*, flag: bool, per_asset: bool) -> Kind:
        if flag:
            return Kind.FLAGS if per_asset else Kind.FLAG
        return Kind.NUMBERS if per_asset else Kind.NUMBER
