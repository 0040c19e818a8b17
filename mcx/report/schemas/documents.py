"""One schema for a file of several documents, since an editor holds each of them against the same one."""

from __future__ import annotations

from collections.abc import Sequence

from mcx.checked.payoff import Payoff
from mcx.report.schemas import contracts, markets, payoffs, quotes
from mcx.report.schemas.shapes import Schema, refer
from mcx.text.documents import TELLING_KEYS

DRAFT = "http://json-schema.org/draft-07/schema#"


def schema(definitions: Sequence[Payoff], title: str, only: bool) -> Schema:
    """The schema of documents: contracts on these definitions (with `only` on no others), markets, quotes and
    definitions. Follows JSON Schema draft 7, which most editors read.
    """
    kinds: Schema = refer("payoff")
    for kind in reversed(TELLING_KEYS):
        kinds = {"if": {"required": [kind]}, "then": refer(kind), "else": kinds}
    return {
        "$schema": DRAFT,
        "title": title,
        "type": "object",
        **kinds,
        "definitions": {
            "contract": contracts.contract(definitions, only),
            "market": markets.market(),
            "quote": quotes.quote(),
            "payoff": payoffs.payoff(),
            **contracts.definitions(),
            **markets.definitions(),
            **payoffs.definitions(),
        },
    }
