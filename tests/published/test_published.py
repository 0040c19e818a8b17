"""The machine against published values: contracts on the shipped definitions, judged in standard errors."""

from __future__ import annotations

import pytest
from helpers import Ready, check, prepare
from published.cases import GROUPS, Case, all_cases, cases_of
from published.contracts import documents

SEED = 0xD6FE9B1A4C72E583
WORK = 2**25  # draws for each case: as many paths as they make
SHARP = 5e-3


def paths_for(ready: Ready) -> int:
    """A power of two, between 2^16 and 2^24, so that every case takes about as long."""
    return 2 ** min(max((WORK // max(ready.program.draws, 1)).bit_length() - 1, 16), 24)


@pytest.mark.parametrize("case", all_cases(), ids=str)
def test_price_is_the_published_value(case: Case):
    """The price is within four standard errors of the value recomputed to twelve digits."""
    ready = prepare(documents(case))
    check(ready.price(paths_for(ready), SEED), case.recomputed, SHARP)


@pytest.mark.parametrize("case", all_cases(), ids=str)
def test_printed_value_is_the_recomputed_one(case: Case):
    """The figure as printed agrees with the recomputation in all the digits that it is said to have."""
    assert abs(case.value - case.recomputed) <= case.slack * (1 + 1e-9)


@pytest.mark.parametrize("group", GROUPS)
def test_every_case_names_its_source(group: str):
    """No figure without a source, and without saying whether it was read or recalled."""
    for case in cases_of(group):
        assert case.source and case.seen in ("seen", "memory", "recomputed"), case.id
