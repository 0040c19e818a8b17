"""Single values that contracts and markets share: amounts of money, currency codes, names of assets."""

from __future__ import annotations

import re

from mcx.faults import Fault
from mcx.text.located import Node, Scalar
from mcx.text.scalars import expected, number

CURRENCY = re.compile("[A-Z]{3}")
ASSET = re.compile(r"\w[\w.&-]*")  # no spaces: what stands beside a forgotten comma is no name


def amount(node: Node) -> float | Fault:
    """A positive amount of money, never a percentage."""
    value = number(node)
    if not isinstance(value, Fault):
        if node.text.endswith(("%", "bp")):
            return expected("an amount of money", node, "write it without a unit")
        if value <= 0:
            return expected("an amount above 0", node)
    return value


def currency_code(node: Node) -> str | Fault:
    """Three capital letters, as in ISO 4217."""
    if isinstance(node, Scalar) and CURRENCY.fullmatch(node.text):
        return node.text
    return expected("a currency code of three capital letters, as 'EUR'", node)


def asset_name(node: Node) -> str | Fault:
    """The name of an asset; no slash, which parts a pair."""
    if isinstance(node, Scalar) and ASSET.fullmatch(node.text):
        return node.text
    return expected("the name of an asset, of letters, digits and . _ - &", node)
