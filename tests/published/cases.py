"""The published cases as records."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from pathlib import Path

import yaml

GROUPS = ("european", "digital", "asian", "barrier", "double_barrier", "at_hit", "lookback", "multi_asset", "cliquet")


@dataclass(frozen=True)
class Case:
    """One published figure: `value` as printed, good to `digits` decimals, `recomputed` to twelve digits."""

    id: str
    group: str
    source: str
    seen: str
    contract: dict
    formula: str
    value: float
    digits: int
    recomputed: float
    agreement: str = ""
    note: str = ""
    quantity: str = ""  # what it is, where it is not the price
    checked_by: str = ""

    def __str__(self) -> str:
        return self.id

    @property
    def slack(self) -> float:
        """How far the printed value may be from the recomputed one: half a unit of its last good digit, one and a
        half where the printed last digit is known to be one off, and the rounding of the recomputation itself."""
        return (1.5 if self.agreement == "last digit" else 0.5) * 10.0**-self.digits + 5e-12 * abs(self.recomputed)


@cache
def cases_of(group: str) -> tuple[Case, ...]:
    """The cases of one file, `contract` without its description in words."""
    text = (Path(__file__).parent / f"{group}.yaml").read_text(encoding="utf-8")
    found = []
    for entry in yaml.safe_load(text):
        entry["contract"] = {key: value for key, value in entry["contract"].items() if key != "what"}
        found.append(Case(group=group, **entry))
    return tuple(found)


def all_cases() -> tuple[Case, ...]:
    """Every case, in the order of `GROUPS` and of the files."""
    return tuple(case for group in GROUPS for case in cases_of(group))
