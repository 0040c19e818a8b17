"""What stands beside a number: warnings about the run, assumptions, limits of the model as far as they touch it."""

from __future__ import annotations

from pathlib import Path

import pytest
from front_door import CALL, EXAMPLES, MARKET, SEED, written

import mcx as package
from mcx.estimators.estimate import Estimate
from mcx.estimators.plan import Plan
from mcx.estimators.price import Valuation
from mcx.report.cautions import warnings
from mcx.report.results import Martingale
from mcx.tape.ops import Op
from mcx.tape.program import Instruction, Output, Tape

DIGITAL = CALL.replace("european", "digital").replace("strike: 100", "pays: cash, amount: 1, strike: 100")


def run(values: dict[str, Estimate] | None = None, plan: Plan | None = None, stages: tuple = (),
        interrupted: bool = False, z: float = 0.0, met: bool | None = None, op: Op = Op.NORMAL) -> list[str]:
    """The warnings of a made-up valuation: its price, and conditions by name."""
    found = {"price": Estimate(1.0, 0.01, 10_000), **(values or {})}
    outputs = tuple(Output(name, 0, kind="price" if name == "price" else "condition", subject=name) for name in found)
    tape = Tape((Instruction(op, (), 0),), outputs, 1, 0)
    valuation = Valuation(outputs, tuple(found.values()), stages, plan or Plan(10_000, 0, "10,000 paths"), SEED, 1.0,
                          interrupted, ready=None)
    return list(warnings(valuation, tape, (Martingale("harbour", "1y", 1.0, 0.01, z),), met))


def test_nothing_to_warn_of():
    """A plain run."""
    stages = Estimate(1.01, 0.02, 2500), Estimate(1.0, 0.01, 10_000)
    assert run({"hit": Estimate(0.2, 0.004, 10_000)}, stages=stages) == []


def test_interrupted():
    """How far it came, and no complaint about a precision that it had no chance to reach."""
    plan = Plan(40_000, 0, "within 1 bp", target=1e-4)
    assert run(plan=plan, interrupted=True, met=False) == [
        "interrupted after 10,000 of 40,000 paths; the estimate is that of the paths so far"]


def test_precision_missed():
    """Said with both numbers; nothing where it is met or was not asked for."""
    plan = Plan(10_000, 16_384, "within 1 bp", target=1e-4)
    assert run(plan=plan, met=False) == [
        "the precision asked for was not reached: the 95 % half-width is 0.0196, asked for was 0.0001"]
    assert run(plan=plan, met=True) == run(met=None) == []


def test_warnings_of_the_plan_come_along():
    """What the pilot could not see."""
    assert run(plan=Plan(64, 64, "", warnings=("rare",))) == ["rare"]


@pytest.mark.parametrize(("count", "said"), [
    (0, "no path met 'hit': what depends on it is poorly known, and so is the error"),
    (99, "only 99 of 10,000 paths met 'hit': what depends on it is poorly known, and so is the error")])
def test_rare_conditions(count: int, said: str):
    """Below a hundred paths, unless the terms alone decide the condition."""
    rare = {"hit": Estimate(count / 10_000, 0.0, 10_000)}
    assert run(rare) == [said]
    assert run(rare, op=Op.CONSTANT) == []
    assert run({"hit": Estimate(0.01, 0.0, 10_000)}) == []


def test_martingale_test_fails():
    """Beyond four errors, with how often chance does that: once in 15,787 runs at exactly four."""
    assert run(z=-3.9) == []
    (said,) = run(z=-4.0001)
    assert said.startswith("the mean of harbour is 4.0 standard errors from its forward: this happens by chance once "
                           "in 15,7")


def test_price_jumps():
    """The second half moved it by more than its own error allows: a few paths weigh heavily."""
    half, whole = Estimate(0.9, 0.0141421356, 5000), Estimate(1.0, 0.01, 10_000)
    (said,) = run(stages=(half, whole))
    assert said.startswith("the price moved by 10.0 standard errors between half and all of the paths")
    assert run(stages=(Estimate(0.97, 0.0141421356, 5000), whole)) == run(stages=(whole,)) == []
    assert run(stages=(Estimate(1.0, 0.0, 5000), Estimate(1.0, 0.0, 10_000))) == []


def said(tmp_path: Path, text: str, key: str) -> str:
    return "\n".join(getattr(package.price(written(tmp_path, text), paths=64), key))


def test_curves_that_end_before_the_contract(tmp_path: Path):
    """Each curve that a contract outlives is named, with what is held; flat quotes end nowhere."""
    assert "end at" not in said(tmp_path, CALL + MARKET, "assumptions")
    market = MARKET.replace("EUR: 4%", "EUR: {3m: 4%, 6m: 4%}").replace("vol: 22%", "vol: {6m: 22%}").replace(
        "yield: 1.5%", "yield: {1m: 1%, 9m: 1.5%}")
    found = said(tmp_path, CALL + market, "assumptions")
    for words in ("the rates of EUR end at 6m; the last forward rate is held to 1y",
                  "the vols of harbour end at 6m; the last vol is held to 1y",
                  "the yields of harbour end at 9m; the last forward yield is held to 1y"):
        assert words in found
    assert "end at" not in said(tmp_path, CALL + market.replace("6m", "1y").replace("9m", "2y"), "assumptions")


def test_limits_touch_the_contract(tmp_path: Path):
    """Thresholds, forward vols, correlations and the issuer only where the contract hangs on them."""
    plain = said(tmp_path, CALL + MARKET, "limits")
    assert "no skew, no stochastic vol, no jumps" in plain
    assert not any(words in plain for words in ("bracket", "forward skew", "correlation", "issuer"))
    cliquet = "\n".join(package.price(EXAMPLES / "cliquet.yaml", paths=64).to_dict()["prices"][0]["limits"])
    assert "forward vol and forward skew" in cliquet
    note = "\n".join(package.price(EXAMPLES / "harbour_lantern.yaml", paths=64).limits)
    for words in ("have vols of their own", "one fixed correlation", "promise of the issuer"):
        assert words in note


def test_a_digital_turns_at_its_strike(tmp_path: Path):
    """Its payment jumps at a level: the vol there is another under skew."""
    assert "bracket" in said(tmp_path, DIGITAL + MARKET, "limits")


def test_cautions_are_always_there(tmp_path: Path):
    """Sampling only, the legal terms prevail, no advice; of probabilities only where some are shown."""
    plain = said(tmp_path, CALL + MARKET, "cautions")
    for words in ("the error covers sampling only", "the legal terms and the calculation agent's determinations "
                  "prevail", "licensed professional under local rules; not advice"):
        assert words in plain
    assert "not forecasts" not in plain
    assert "not forecasts" in "\n".join(package.price(EXAMPLES / "harbour_lantern.yaml", paths=64).cautions)


def test_assumptions_of_the_documents_come_along(tmp_path: Path):
    """No funding stated for an option; a shipped definition replaced by one's own."""
    own = (EXAMPLES.parent / "european.yaml").read_text(encoding="utf-8").replace("Call or put", "A call or a put")
    found = said(tmp_path, f"{CALL}---\n{own}{MARKET}", "assumptions")
    assert "no issuer funding spread" in found
    assert "the shipped definition of that name is not used" in found
