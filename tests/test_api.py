"""The Python calls: what they return, what they raise, and that importing the package loads nothing."""

from __future__ import annotations

import dataclasses
from pathlib import Path

import numpy as np
import pytest
from front_door import CALL, EXAMPLES, MARKET, SEED, written

import mcx
from mcx import InputError, Refusal, RequestError

NOTE = EXAMPLES / "harbour_lantern.yaml"
OWN = "payoff: own\nabout: made up\nterms: {expiry: {type: date}}\nevents:\n  - at: expiry\n    pay: spot\n"


@pytest.fixture
def call(tmp_path: Path) -> Path:
    return written(tmp_path, CALL + MARKET)


def test_names():
    """Everything that is promised is there, and nothing else; help lists it."""
    assert all(getattr(mcx, name) is not None for name in mcx.__all__)
    assert dir(mcx) == sorted(mcx.__all__)
    with pytest.raises(AttributeError, match="no attribute 'prize'"):
        _ = mcx.prize


def test_a_price_is_the_black_formula(call: Path):
    """Black and Scholes (1973), Merton (1973), by scipy; files as text or as paths."""
    from closed_forms import european

    truth = european("call", spot=100.0, strike=100.0, maturity=1.0, rate=0.04, dividend_yield=0.015, vol=0.22)
    result = mcx.price(str(call), paths=1 << 18, seed=SEED)
    assert isinstance(result, mcx.PriceResult)
    assert abs(result.price - truth) < 4 * result.standard_error < 0.2
    assert result == dataclasses.replace(mcx.price(call, paths=1 << 18, seed=SEED), seconds=result.seconds)


def test_results_are_frozen(call: Path):
    """Nobody changes a number afterwards."""
    with pytest.raises(dataclasses.FrozenInstanceError):
        mcx.price(call, paths=64).price = 1.0


def test_one_contract_or_several(call: Path):
    """A result, or a table of results in the order of the files, each as it is alone."""
    table = mcx.price(EXAMPLES / "autocall.yaml", paths=500, seed=SEED)
    assert isinstance(table, mcx.PriceTable) and not table.interrupted
    assert isinstance(mcx.readback(NOTE), mcx.Readback)
    assert isinstance(mcx.readback(EXAMPLES / "autocall.yaml"), mcx.ReadbackTable)
    both = mcx.price(call, written(call.parent, CALL.replace("Call", "Other"), "other.yaml"), paths=500, seed=SEED)
    assert both.prices[0].price == both.prices[1].price == mcx.price(call, paths=500, seed=SEED).price


def test_numpy_integers_are_numbers(call: Path):
    """Paths, seed and threads may come from an array."""
    found = mcx.price(call, paths=np.int32(500), seed=np.uint64(SEED), threads=np.int8(1))
    assert found.price == mcx.price(call, paths=500, seed=SEED).price and type(found.seed) is int


@pytest.mark.parametrize("wishes", [
    {"paths": 1.5}, {"paths": True}, {"within": []}, {"seconds": "1"}, {"seed": 1.0}, {"seed": True}, {"seed": -1},
    {"threads": 0}, {"threads": True}, {"threads": 1.0}, {"reduction": "antithetic,antithetic"}, {"reduction": None}, {"reduction": "none,antithetic"},
    {"paths": 10, "within": "1bp"}, {"record": "none/there.json"}])
def test_wrong_requests(call: Path, wishes: dict):
    """A RequestError with a sentence, before anything is read or drawn."""
    with pytest.raises(RequestError) as found:
        mcx.price(call, **wishes)
    assert str(found.value) and "\n" not in str(found.value)


def test_no_files():
    """Nothing to read."""
    for verb in (mcx.price, mcx.readback):
        with pytest.raises(RequestError, match="no files are given"):
            verb()


def test_a_list_is_no_file():
    """Files are arguments, one for each."""
    for verb in (mcx.price, mcx.readback):
        with pytest.raises(RequestError, match="one argument for each, found .'note.yaml', 'market.yaml'."):
            verb(["note.yaml", "market.yaml"])


def test_faults_come_as_values(tmp_path: Path):
    """Each with its place, sorted as the files read; the text has one line for each."""
    with pytest.raises(InputError) as found:
        mcx.price(written(tmp_path, CALL.replace("strike: 100", "strike: -1").replace("EUR", "EURO") + MARKET))
    faults = found.value.faults
    assert list(faults) == sorted(faults) and len(faults) >= 2
    assert str(found.value).splitlines() == [str(fault) for fault in faults]
    assert {(fault.place.line, fault.place.column) for fault in faults} >= {(2, 11), (6, 29)}


def test_all_three_are_value_errors():
    """One `except ValueError` catches what a user can mend."""
    assert all(issubclass(error, ValueError) for error in (InputError, RequestError, Refusal))


def test_a_half_width_needs_the_right_unit(call: Path):
    """Of the first contract that does not fit, by its title."""
    with pytest.raises(RequestError, match="'Call' has no notional to take basis points of"):
        mcx.price(call, within="2bp")
    with pytest.raises(RequestError, match="'Harbour and Lantern memory autocall 2029' is priced in parts"):
        mcx.price(NOTE, within=0.01)


def test_progress_and_notice_are_called(call: Path, monkeypatch: pytest.MonkeyPatch):
    """Paths done and planned and the error; the sentence about compiling only where kernels are missing."""
    from mcx.machine import jit

    told, said = [], []
    result = mcx.price(call, paths=1000, progress=lambda *news: told.append(news), notice=said.append)
    assert told[-1] == (1000, 1000, pytest.approx(result.standard_error)) and said == []
    monkeypatch.setattr(jit, "is_cold", lambda entry: True)
    mcx.price(call, paths=1000, notice=said.append)
    assert len(said) == 1 and said[0].startswith("compiling the kernels once")


def test_the_library():
    """Every definition with its text; one by name; unknown names with a near one."""
    library = mcx.payoffs()
    assert isinstance(library, mcx.Library)
    assert [each.name for each in library.payoffs] == sorted(path.stem for path in EXAMPLES.parent.glob("*.yaml"))
    assert mcx.definition("exchange_option").assets == "2" and mcx.definition("basket_option").assets == "2 or more"
    with pytest.raises(RequestError, match="did you mean 'lookback'"):
        mcx.definition("lookbak")


def test_a_definition_of_ones_own(tmp_path: Path):
    """Beside the contract, in any order; unused ones are checked too."""
    own = OWN.replace("own", "half").replace("spot", "spot / 2")
    contract = CALL.replace("european", "half").replace("{side: call, strike: 100, expiry: 1y}", "{expiry: 1y}")
    definition = written(tmp_path, own, "half.yaml")
    result = mcx.price(written(tmp_path, contract + MARKET), definition, paths=100_000, seed=SEED)
    assert abs(result.price - 50.0 * np.exp(-0.015)) < 4 * result.standard_error  # a half of the forward, discounted
    with pytest.raises(InputError, match=r"half\.yaml:6:10: "):
        mcx.price(written(tmp_path, CALL + MARKET), written(tmp_path, own.replace("spot / 2", "sopt"), "half.yaml"))


def test_a_refusal_names_the_path(tmp_path: Path):
    """A payoff that is not finite: contract, output, path, seed and stream, in one sentence."""
    own = OWN.replace("own", "root").replace("spot", "sqrt(spot - 60)")
    contract = CALL.replace("european", "root").replace("{side: call, strike: 100, expiry: 1y}", "{expiry: 1y}")
    said = r"^'Call': 'price' is not a finite number on path \d+ \(seed 7, stream 0\); "
    with pytest.raises(Refusal, match=said) as found:
        mcx.price(written(tmp_path, f"{contract}---\n{own}{MARKET}"), paths=100_000, seed=7)
    assert "\n" not in str(found.value)
