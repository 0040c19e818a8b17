"""Every shipped definition and example: it loads, is dated, prices, and the second implementation agrees.

A new file in `payoffs/` or `payoffs/examples/` is picked up by itself.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from drawn import reference_results
from helpers import Ready, ready_of

from mcx.checked.load import load
from mcx.checked.payoff import Payoff

PAYOFFS = Path(__file__).resolve().parent.parent / "payoffs"
EXAMPLES = sorted((PAYOFFS / "examples").glob("*.yaml"))
SEED, PATHS = 0x71374491B5C0FBCF, 64


def ready(example: Path) -> list[Ready]:
    """Every contract of an example file."""
    request = load([example])
    return [ready_of(request, number) for number in range(len(request.contracts))]


def used(payoff: Payoff) -> str:
    return payoff.name


@pytest.mark.parametrize("definition", sorted(PAYOFFS.glob("*.yaml")), ids=lambda path: path.stem)
def test_definition_is_named_like_its_file_and_has_an_example(definition: Path):
    """A definition is found by its file's name, says what it is, and at least one example uses it."""
    users = [contract.payoff for example in EXAMPLES for contract in load([example]).contracts
             if contract.payoff.name == definition.stem]
    assert users
    assert users[0].about
    assert users[0].place.file.endswith(definition.name)


@pytest.mark.parametrize("example", EXAMPLES, ids=lambda path: path.stem)
def test_example_has_a_price(example: Path):
    """Each contract of an example has a finite price with a finite error, and its legs add up to it."""
    for contract in ready(example):
        found = contract.estimates(4096, SEED)
        assert np.isfinite([found["price"].mean, found["price"].error]).all()
        legs = [estimate.mean for name, estimate in found.items() if name.startswith("leg: ")]
        assert found["price"].mean == pytest.approx(sum(legs), rel=1e-12, abs=1e-15)


@pytest.mark.parametrize("example", EXAMPLES, ids=lambda path: path.stem)
def test_second_implementation_agrees(example: Path):
    """On the same draws the plain walk and the machine agree path by path: every leg, every named condition."""
    for contract in ready(example):
        values = contract.by_path(PATHS, SEED)
        results = reference_results(contract, range(PATHS), SEED)
        title = contract.dated.contract.title
        for output in contract.unrolled.tape.outputs:
            if output.kind == "leg":
                plain = [result.legs.get(output.subject, 0.0) for result in results]
            elif output.kind == "condition" and not output.day:
                plain = [float(output.subject in result.met) for result in results]
            elif output.kind == "price":
                plain = [result.price for result in results]
            else:
                continue
            np.testing.assert_allclose(values[output.name], plain, rtol=1e-10, atol=1e-13,
                                       err_msg=f"{title}: {output.name}")
        paid = {leg for result in results for leg in result.legs}
        assert paid <= {output.subject for output in contract.unrolled.tape.outputs if output.kind == "leg"}
