"""What may be asked about sensitivities."""

from __future__ import annotations

import pytest

from mcx.estimators.wishes import bump_of, estimator_of, moves_of
from mcx.faults import RequestError


def test_sizes_are_read_as_shares():
    """Percent, basis points and plain shares."""
    assert bump_of("1%") == bump_of(0.01) == 0.01 and bump_of("50 bp") == 0.005 and bump_of(None) is None
    assert moves_of(["5%", "-5%", 0], "spot") == (-0.05, 0.0, 0.05)


@pytest.mark.parametrize("size", ["0", "0%", "-1%", "51%", "small", True, "nan"])
def test_a_bump_that_moves_nothing_or_too_far(size: object):
    """One clear message."""
    with pytest.raises(RequestError, match="'bump' is a size above 0"):
        bump_of(size)


@pytest.mark.parametrize(("moves", "what"), [
    (["-100%"], "stays above 0"), (["-1.5"], "stays above 0"), (["1%", "1%"], "named twice"),
    (["up"], "are sizes such"),
    ([k / 1000 for k in range(102)], "at most 101")])
def test_moves_that_make_no_ladder(moves: list, what: str):
    """A spot stays above 0, and each move is named once."""
    with pytest.raises(RequestError, match=what):
        moves_of(moves, "spot")


def test_estimators_have_names():
    """A near miss is told the name."""
    assert estimator_of("mixed") == "mixed"
    with pytest.raises(RequestError, match="did you mean 'pathwise'"):
        estimator_of("pathwize")
