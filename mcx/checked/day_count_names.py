"""The names of day counts that documents may use: 2006 ISDA Definitions, section 4.16."""

from __future__ import annotations

import re
from types import MappingProxyType

from mcx.checked.reading import listed
from mcx.faults import Fault, nearest
from mcx.text.located import Node, Scalar
from mcx.text.scalars import expected

# Each name with the one that `dates/day_counts.py` uses.
DAY_COUNTS: MappingProxyType[str, str] = MappingProxyType({
    name: names[0]
    for names in (
        ("Actual/Actual (ISDA)", "Actual/Actual", "Act/Act (ISDA)", "Act/Act"),
        ("Actual/Actual (ICMA)", "Act/Act (ICMA)"),
        ("Actual/365 (Fixed)", "Act/365 (Fixed)", "A/365 (Fixed)", "A/365F"),
        ("Actual/360", "Act/360", "A/360"),
        ("30/360", "360/360", "Bond Basis"),
        ("30E/360", "Eurobond Basis"),
        ("30E/360 (ISDA)",),
    )
    for name in names
})


def day_count_name(node: Node) -> str | Fault:
    """The name of a day count, as `dates/day_counts.py` writes it."""
    if isinstance(node, Scalar) and node.text in DAY_COUNTS:
        return DAY_COUNTS[node.text]
    near = _meant(node.text) if isinstance(node, Scalar) else ""
    names = listed(dict.fromkeys(DAY_COUNTS.values()), "or")
    return expected(f"a day count: {names}", node, near)


def _meant(text: str) -> str:
    """'did you mean …?' for a near miss that counts the same days: no year of 364 days is taken for one of 360."""
    alike = {name.lower(): meant for name, meant in DAY_COUNTS.items() if _numbers(name) == _numbers(text)}
    near = nearest(text.lower(), alike)
    return f"did you mean '{alike[near]}'?" if near else ""


def _numbers(text: str) -> list[str]:
    return re.findall(r"\d+", text)
