"""The closed forms of the tests against published values: what judges the machine is judged first."""

from __future__ import annotations

import closed_forms as forms
import pytest
from published.cases import Case, all_cases

BY_FORMULA = {
    "european": forms.european,
    "gap_option": forms.gap_option,
    "cash_or_nothing": forms.cash_or_nothing,
    "cash_at_hit": forms.cash_at_hit,
    "asset_or_nothing": forms.asset_or_nothing,
    "supershare": forms.supershare,
    "touch_at_expiry": forms.touch_at_expiry,
    "barrier": forms.barrier_option,
    "lookback_floating": forms.lookback_floating,
    "lookback_fixed": forms.lookback_fixed,
    "exchange": forms.exchange,
    "option_on_extreme_of_two": forms.option_on_extreme_of_two,
    "two_asset_correlation_call": forms.two_asset_correlation_call,
    "two_asset_digital": forms.two_asset_digital,
    "forward_start": forms.forward_start,
    "asian_geometric_discrete": forms.asian_geometric,
    "asian_geometric_strike_discrete": forms.asian_geometric_strike,
}
CASES = [case for case in all_cases() if case.formula in BY_FORMULA]


@pytest.mark.parametrize("case", CASES, ids=str)
def test_closed_form_is_the_published_value(case: Case):
    """Each closed form gives the recomputed value of every published case that it covers, to eleven digits."""
    terms = dict(case.contract)
    if (count := terms.pop("fixings", None)) is not None:
        terms["times"] = [terms["maturity"] * k / count for k in range(1, count + 1)]
    assert BY_FORMULA[case.formula](**terms) == pytest.approx(case.recomputed, rel=3e-11, abs=1e-12)


@pytest.mark.parametrize("formula", sorted(BY_FORMULA))
def test_every_closed_form_has_a_published_case(formula: str):
    """No closed form judges the machine without a published value behind it."""
    assert any(case.formula == formula for case in CASES)
