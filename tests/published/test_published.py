"""The machine against published values: contracts on the shipped definitions, judged in standard errors."""

from __future__ import annotations

import hashlib
from functools import cache
from math import sqrt

import numpy as np
import pytest
from helpers import Estimate, Ready, check, prepare
from published.cases import GROUPS, Case, all_cases, cases_of
from published.contracts import documents

DRAWS = 2**25  # numbers drawn for each case: as many paths as they make
SHARP = 5e-3  # error over value; most cases reach a tenth of that
RARE = {  # values that plain sampling sees little of: rare payments, or large ones that all but cancel
    "haug-gap": 0.5,
    "cerny-kyriakou-10-120": 0.05,
    "fusai-meucci-250-110": 0.01,
    "mcdonald-geometric-call-1000": 0.01,
    "mcdonald-geometric-put-1000": 0.01,
    "mcdonald-geometric-strike-call-1000": 0.01,
    "mcdonald-geometric-strike-put-1000": 0.01,
    "ghs-64-10-55": 0.01,
    "digital-knock-in-85-96-25": 0.1,
    "digital-knock-in-90-106-25": 0.1,
    "digital-knock-in-90-96-25": 0.01,
    "digital-knock-in-85-96-100": 0.01,
    "digital-knock-in-90-106-100": 0.01,
}


def seed_for(case: Case) -> int:
    """A seed of its own for each case, so that the cases are independent trials."""
    return int.from_bytes(hashlib.sha256(f"published: {case.id}".encode()).digest()[:7], "big")


def paths_for(ready: Ready) -> int:
    """A power of two, between 2^16 and 2^23, so that cases take about as long."""
    return 2 ** min(max((DRAWS // max(ready.program.draws, 1)).bit_length() - 1, 16), 23)


@cache
def price(case_id: str) -> Estimate:
    """The price of a case, run once for all tests."""
    case = next(case for case in all_cases() if case.id == case_id)
    ready = prepare(documents(case))
    return ready.price(paths_for(ready), seed_for(case))


@pytest.mark.parametrize("case", all_cases(), ids=str)
def test_price_is_the_published_value(case: Case):
    """The price is within four standard errors of the value recomputed to twelve digits."""
    check(price(case.id), case.recomputed, RARE.get(case.id, SHARP))


def test_all_cases_together_scatter_as_their_errors_say():
    """Over all cases the squared distances in standard errors add up to a chi-square variable: errors that were
    too large or too small by a fifth, which no single case shows, would stand out."""
    z = [(estimate.mean - case.recomputed) / estimate.error
         for case in all_cases() if (estimate := price(case.id)).error > 0.0]
    assert abs(np.sum(np.square(z)) - len(z)) < 4 * sqrt(2 * len(z))
    assert abs(np.sum(z)) < 4 * sqrt(len(z))


@pytest.mark.parametrize("case", all_cases(), ids=str)
def test_printed_value_is_the_recomputed_one(case: Case):
    """The figure as printed agrees with the recomputation in all the digits that it is said to have."""
    assert abs(case.value - case.recomputed) <= case.slack


@pytest.mark.parametrize("group", GROUPS)
def test_every_case_names_its_source(group: str):
    """No figure without a source, and without saying whether it was read or recalled."""
    for case in cases_of(group):
        assert case.source and case.seen in ("seen", "memory", "recomputed"), case.id
