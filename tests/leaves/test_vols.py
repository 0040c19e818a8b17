"""Vols by tenor and the integrals of their products."""

from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.integrate import quad

from leaves.test_curves import curve
from mcx.leaves.vols import VolCurve, covariance_integral, vol_curve


def test_total_variance_is_linear_between_the_points():
    """Before the first point and after the last the vol is flat, between them total variance is linear."""
    vols = vol_curve(curve("vol", {1.0: 0.2, 3.0: 0.3}))
    assert vols.vol_to(0.4) == pytest.approx(0.2)
    assert vols.total_variance(2.0) == pytest.approx((0.04 + 0.27) / 2)
    assert vols.vol_to(3.0) == pytest.approx(0.3)
    assert vols.vol_to(10.0) == pytest.approx(0.3)


def test_a_flat_vol_is_the_same_everywhere():
    """A single number serves all tenors."""
    vols = vol_curve(curve("vol", {0.0: 0.25}))
    assert vols.vol_to(0.0) == 0.25 and vols.vol_to(4.0) == pytest.approx(0.25)


def test_a_vol_that_falls_as_fast_as_it_may_leaves_no_variance():
    """Where total variance does not rise the instantaneous vol is zero."""
    vols = vol_curve(curve("vol", {1.0: 0.2, 4.0: 0.1}))
    assert covariance_integral(vols, vols, 1.0, 4.0) == pytest.approx(0.0, abs=1e-18)


@st.composite
def vol_curves(draw: st.DrawFn) -> VolCurve:
    times = sorted(draw(st.lists(st.floats(0.05, 3.0), max_size=4, unique=True)))
    vols = draw(st.lists(st.floats(0.0, 0.8), min_size=len(times) + 1, max_size=len(times) + 1))
    return VolCurve((0.0, *times), tuple(vols))


@given(vol_curves(), vol_curves(), st.floats(0.0, 2.0), st.floats(0.01, 3.0))
def test_integrals_are_exact(a: VolCurve, b: VolCurve, start: float, span: float):
    """The sum over pieces is the integral that quadrature finds, split at the points."""
    end = start + span
    cuts = sorted({start, end, *(t for t in (*a.times, *b.times) if start < t < end)})
    by_quadrature = sum(quad(lambda t: a.at(t) * b.at(t), t0, math.nextafter(t1, t0))[0]
                        for t0, t1 in zip(cuts, cuts[1:]))
    assert covariance_integral(a, b, start, end) == pytest.approx(by_quadrature, abs=1e-12)


def test_integrals_add_up():
    """Two steps in a row have together the variance of the one step."""
    a, b = vol_curve(curve("vol", {0.5: 0.2, 2.0: 0.3})), vol_curve(curve("vol", {1.0: 0.4}))
    whole = covariance_integral(a, b, 0.0, 3.0)
    assert covariance_integral(a, b, 0.0, 0.7) + covariance_integral(a, b, 0.7, 3.0) == pytest.approx(whole)
