"""Results as plain data: every field, full precision, nothing that JSON does not know."""

from __future__ import annotations

import json
import math
from dataclasses import fields, is_dataclass

import pytest
from front_door import EXAMPLES, SEED

import mcx as package
from mcx.report import results
from mcx.report.results import Likelihood, Martingale, Result, plain

RECORDS = [each for each in vars(results).values() if is_dataclass(each) and isinstance(each, type)]


def strict(value: object) -> object:
    """There and back through JSON that knows no NaN."""
    return json.loads(json.dumps(value, allow_nan=False))


@pytest.mark.parametrize("record", RECORDS, ids=lambda record: record.__name__)
def test_records_are_frozen_and_say_what_they_are(record: type):
    """Nobody changes a result; each has its docstring and can say itself."""
    assert record.__dataclass_params__.frozen and issubclass(record, Result)
    assert not record.__doc__.startswith(record.__name__)  # a docstring of its own


def test_every_digit_survives():
    """Numbers come back from JSON with the same bits, lists as lists."""
    result = package.price(EXAMPLES / "autocall.yaml", paths=200, seed=SEED)
    found = strict(result.to_dict())
    for stored, price in zip(found["prices"], result.prices, strict=True):
        assert list(stored) == [field.name for field in fields(price)]
        assert (stored["price"], stored["standard_error"]) == (price.price, price.standard_error)
        assert [leg["price"] for leg in stored["legs"]] == [leg.price for leg in price.legs]
        assert stored["interval95"] == list(price.interval95)
    assert found == result.to_dict()


@pytest.mark.parametrize("make", [
    lambda: package.price(EXAMPLES / "harbour_lantern.yaml", paths=64),
    lambda: package.readback(EXAMPLES / "cliquet.yaml"),
    lambda: package.readback(EXAMPLES / "harbour_lantern.yaml"), package.payoffs, lambda: package.definition("touch")])
def test_every_verb_gives_plain_data(make):
    """What `to_dict` gives is what JSON gives back."""
    result = make()
    assert strict(result.to_dict()) == result.to_dict()


def test_numbers_that_are_none():
    """An infinite distance of an exact estimate is null, also inside."""
    test = Martingale("harbour", "1y", 1.0, 0.0, math.inf)
    assert test.to_dict()["z"] is None
    assert plain({"a": (test, math.nan, 1.5, True, "x", None)}) == {"a": [test.to_dict(), None, 1.5, True, "x", None]}


def test_numpy_scalars_become_floats():
    """A float that is numpy's is a plain one in the dict."""
    import numpy as np

    found = Likelihood("", np.float64(0.25), 0.1).to_dict()["probability"]
    assert type(found) is float and found == 0.25


def test_units_agree():
    """Value is price times size, probabilities add up, errors scale along."""
    result = package.price(EXAMPLES / "harbour_lantern.yaml", paths=1000, seed=SEED)
    assert result.unit == "notional" and result.units is None
    assert result.value == pytest.approx(result.price * result.notional, rel=1e-15)
    assert result.value_standard_error == pytest.approx(result.standard_error * result.notional, rel=1e-15)
    assert sum(end.probability for end in result.ends) + result.reached_maturity.probability == pytest.approx(1.0)
    for condition in result.conditions:
        assert all(each.probability <= condition.probability + 1e-15 for each in condition.dates)
        assert 0.0 <= condition.probability <= 1.0
    for amount in (*result.legs, *result.parts):
        assert amount.value == pytest.approx(amount.price * result.notional, rel=1e-15)
    low, high = result.interval95
    assert high - low == pytest.approx(2 * 1.959963984540054 * result.standard_error, rel=1e-12)
