"""Every shipped definition and example: it loads, is dated, prices, and the second implementation agrees.

A new file in `payoffs/` or `payoffs/examples/` is picked up by itself.
"""

from __future__ import annotations

from functools import cache
from pathlib import Path

import numpy as np
import pytest
from drawn import reference_results
from helpers import Ready, prepare, ready_of
from hypothesis import given, settings
from random_payoffs import contracts
from reference import Result

import mcx
from mcx.checked.load import Request, load
from mcx.tape.program import Output

PAYOFFS = Path(__file__).resolve().parent.parent / "payoffs"
EXAMPLES = sorted((PAYOFFS / "examples").glob("*.yaml"))
CORNERS = sorted((Path(__file__).parent / "corners").glob("*.yaml"))
SEED, PATHS = 0x71374491B5C0FBCF, 64


@cache
def request_of(example: Path) -> Request:
    """The checked documents of an example file."""
    return load([example])


@cache
def ready(example: Path) -> list[Ready]:
    """Every contract of an example file, ready to run."""
    request = request_of(example)
    return [ready_of(request, number) for number in range(len(request.contracts))]


@cache
def drawn(example: Path) -> list[Ready]:
    """Every contract of an example file with the flags of its continuous watches drawn on each path; without those
    that are priced between bounds, since several assets have no law to draw from."""
    request = request_of(example)
    return [ready_of(request, number, everything_drawn=True) for number in range(len(request.contracts))
            if not ready(example)[number].unrolled.bracketed]


@pytest.mark.parametrize("definition", sorted(PAYOFFS.glob("*.yaml")), ids=lambda path: path.stem)
def test_definition_is_named_like_its_file_and_has_an_example(definition: Path):
    """A definition is found by its file's name, says what it is, and at least one example uses it."""
    users = [contract.payoff for example in EXAMPLES for contract in request_of(example).contracts
             if contract.payoff.name == definition.stem]
    assert users
    assert users[0].about
    assert users[0].place.file.endswith(definition.name)


def plainly(output: Output, result: Result) -> float | None:
    """What the reference found for an output of the tape; None for those that it has nothing to say of."""
    if " to " in output.day:  # between which dates a hit came
        return None
    match output.kind:
        case "price":
            return result.price
        case "leg":
            return result.leg(output.subject)
        case "part":
            return result.part(output.subject)
        case "condition":
            return float(result.held(output.subject, output.day))
        case "life":
            return result.life
        case "end":
            day = result.ended
            return float(day is not None and output.day in (str(day), str(day.date)[:4]))
    return None


def hold_against_reference(contract: Ready, paths: int) -> None:
    """On the same draws the plain walk and the machine agree path by path: legs, conditions, ends, life, price."""
    values = contract.by_path(paths, SEED)
    results = reference_results(contract, range(paths), SEED)
    outputs = contract.unrolled.tape.outputs
    for output in outputs:
        plain = [plainly(output, result) for result in results]
        if None not in plain:
            np.testing.assert_allclose(values[output.name], plain, rtol=1e-10, atol=1e-12,
                                       err_msg=f"{contract.dated.contract.title}: {output.name}")
    legs = {output.subject for output in outputs if output.kind == "leg"}
    assert {payment.leg for result in results for payment in result.payments} <= legs


@pytest.mark.parametrize("example", [*EXAMPLES, *CORNERS], ids=lambda path: path.stem)
def test_second_implementation_agrees(example: Path):
    """Every contract of every example, and of the files that visit the grammar's corners."""
    for contract in drawn(example):
        hold_against_reference(contract, PATHS)


@settings(max_examples=3 * settings.default.max_examples)
@given(contracts())
def test_second_implementation_agrees_on_payoffs_made_up(text: str):
    """Payoffs of random formulas, running values and events mean the same to both."""
    hold_against_reference(prepare(text, everything_drawn=True), 16)


def test_levels_exactly_at_a_number():
    """At the start the level is the spot to the last digit: `<=` and `<` differ there, and a barrier at the spot is
    touched."""
    (exactly,) = ready(Path(__file__).parent / "corners" / "edges.yaml")
    found = {name: value.mean for name, value in exactly.estimates(64, SEED).items() if name.startswith("leg: ")}
    assert found == {"leg: at or below": 1, "leg: below": 0, "leg: at or above": 1, "leg: above": 0, "leg: equal": 1,
                     "leg: other": 0, "leg: touched": 1}


@pytest.mark.parametrize("example", EXAMPLES, ids=lambda path: path.stem)
def test_example_through_the_front_door(example: Path):
    """The public verbs take each example: a finite price, the machine's on that seed, to which the legs add up and
    whose martingale tests hold; and a readback with sentences and dates."""
    results, readbacks = mcx.price(example, paths=4096, seed=SEED), mcx.readback(example)
    prices = getattr(results, "prices", (results,))
    texts = getattr(readbacks, "readbacks", (readbacks,))
    assert len(prices) == len(texts) == len(ready(example))
    for result, text, contract in zip(prices, texts, ready(example), strict=True):
        assert np.isfinite([result.price, result.standard_error, result.value]).all()
        assert result.price == contract.price(4096, SEED).mean
        assert result.price == pytest.approx(sum(leg.price for leg in result.legs), rel=1e-12, abs=1e-15)
        assert all(abs(test.z) < 4 for test in result.checks.martingale)
        assert text.events and text.dates and all(line.text for line in text.events)
