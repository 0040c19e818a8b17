"""The machine against published values: contracts on the shipped definitions, judged in standard errors."""

from __future__ import annotations

import hashlib
from functools import cache
from math import floor, log10, sqrt

import numpy as np
import pytest
from helpers import Estimate, Ready, check, prepare
from published.cases import GROUPS, Case, all_cases, cases_of
from published.contracts import documents

AIM, SHARP = 0.4, 0.5  # standard errors aimed at and asked for, in units of the value's third digit
PILOT, FEWEST = 2**14, 2**16
MOST_PATHS, MOST_DRAWS = 2**26, 2**28
DULL = {  # units of the third digit, where that many draws do not do: rare payments, long walks, or amounts that cancel
    "haug-gap": 60.0,
    "digital-knock-in-85-96-25": 12.0,
    "digital-knock-in-90-106-25": 2.0,
    "digital-knock-in-90-106-100": 1.5,
    "digital-knock-in-90-96-25": 1.5,
    "digital-knock-in-85-96-100": 1.5,
    "cerny-kyriakou-10-120": 2.0,
    "cerny-kyriakou-10-110": 1.0,
    "cerny-kyriakou-30-100": 1.0,
    "cerny-kyriakou-50-120": 1.0,
    "bgk-up-out-50-115": 1.5,
    "fusai-meucci-250-100": 1.0,
    "mcdonald-geometric-call-1000": 1.0,
    "mcdonald-geometric-put-1000": 1.0,
    "mcdonald-geometric-strike-call-1000": 1.5,
    "mcdonald-geometric-strike-put-1000": 1.0,
}


def seed_for(case: Case, what: str = "published") -> int:
    """A seed of its own for each case, so that the cases are independent trials."""
    return int.from_bytes(hashlib.sha256(f"{what}: {case.id}".encode()).digest()[:7], "big")


def third_digit(value: float) -> float:
    """One unit of the third significant digit."""
    return 10.0 ** (floor(log10(abs(value))) - 2)


def paths_for(ready: Ready, case: Case) -> int:
    """As many paths as the spread of a pilot asks for, within bounds."""
    pilot = ready.price(PILOT, seed_for(case, "pilot"))
    wanted = PILOT * (pilot.error / (AIM * third_digit(case.recomputed))) ** 2
    return int(min(max(wanted, FEWEST), MOST_DRAWS / max(ready.program.draws, 1), MOST_PATHS))


@cache
def price(case_id: str) -> Estimate:
    """The price of a case, run once for all tests."""
    case = next(case for case in all_cases() if case.id == case_id)
    ready = prepare(documents(case))
    return ready.price(paths_for(ready, case), seed_for(case))


@pytest.mark.parametrize("case", all_cases(), ids=str)
def test_price_is_the_published_value(case: Case):
    """The price is within four standard errors of the value recomputed to twelve digits, and the error is small enough
    to see a mistake in the third digit."""
    units = DULL.get(case.id, SHARP)
    check(price(case.id), case.recomputed, sharp=units * third_digit(case.recomputed) / abs(case.recomputed))


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
