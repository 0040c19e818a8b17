"""`mcx methods` and `--reduction` through the front door: tables, JSON, picture, records and their replay."""

from __future__ import annotations

import json
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from xml.etree import ElementTree

import closed_forms as forms
import pytest
from front_door import CALL, EXAMPLES, MARKET, SEED, mcx, refused, written

import mcx as package
from mcx.estimators.reduction.sample import Sampled, Sampler
from mcx.report.method_view import method_row

METHOD_KEYS = {"method", "price", "standard_error", "paths", "seconds", "variance_ratio", "cost_ratio", "efficiency", "z",
               "seconds_to_1bp"}
AVERAGE = """contract: Average
currency: EUR
units: 1
assets: [harbour]
payoff: asian
terms:
  side: call
  average_type: arithmetic
  strike_type: fixed
  strike: 100
  averaging: {count: 4, until: 1y}
  expiry: 1y
"""


@pytest.fixture
def average(tmp_path: Path) -> Path:
    return written(tmp_path, AVERAGE + MARKET)


def test_json_has_every_choice(average: Path):
    """Sorted by efficiency, plain sampling among them at 1, estimates that agree, and a reason for each that is
    missing."""
    found = mcx("methods", average, "--paths", 20_000, "--seed", SEED, "--json").json
    lines = {line["method"]: line for line in found["methods"]}
    assert all(METHOD_KEYS <= line.keys() for line in lines.values())
    assert {"none", "antithetic", "controls", "sobol-bridge", "controls,antithetic", "hedge"} <= lines.keys()
    order = [line["efficiency"] for line in found["methods"]]
    assert order == sorted(order, reverse=True)
    plain = lines["none"]
    assert (plain["variance_ratio"], plain["cost_ratio"], plain["variance_ratio_error"]) == (1.0, 1.0, 0.0)
    assert all(abs(line["z"]) < 4.5 and line["paths"] >= 20_000 for line in lines.values())
    for line in lines.values():
        ratio = plain["standard_error"] ** 2 * plain["paths"] / (line["standard_error"] ** 2 * line["paths"])
        assert line["variance_ratio"] == pytest.approx(ratio, rel=1e-9)
        assert line["efficiency"] == pytest.approx(ratio / line["cost_ratio"], rel=1e-9) and line["cost_ratio"] > 0.0
        half = 1e-4 * abs(plain["price"])
        assert line["paths_to_1bp"] == pytest.approx(line["paths"] * (1.96 * line["standard_error"] / half) ** 2, rel=0.1)
    assert lines["controls"]["variance_ratio"] > 100
    assert all(each["reason"] for each in found["not_applied"])
    assert found["closed_form"] is None


def test_a_closed_form_is_found(tmp_path: Path):
    """A call that its own control makes exact: the others are measured against it."""
    found = mcx("methods", written(tmp_path, CALL + MARKET), "--paths", 5000, "--json").json
    truth = forms.european("call", 100.0, 100.0, 1.0, 0.04, 0.015, 0.22)
    assert found["closed_form"] == pytest.approx(truth, rel=1e-10)
    exact = [line for line in found["methods"] if line["efficiency"] is None]
    assert exact and exact[0] is found["methods"][0]
    assert all(abs(line["z_closed_form"]) < 4.5 for line in found["methods"])


def test_the_table_reads(average: Path):
    """What a reader looks for is there."""
    out = mcx("methods", average, "--seconds", "0.02").out
    for text in ("the most efficient first", "variance ratio", "sobol-bridge", "geometric average", "to 1 bp"):
        assert text in out


def test_no_run_is_shorter_than_a_path(average: Path):
    """What a fraction of a path would do says so; a price of 0 has no basis points."""
    line = package.methods(average, paths=4096).methods[0]
    cells = [list(method_row(replace(line, paths_to_1bp=paths, seconds_to_1bp=2.5), 1.0, False))[-1]
             for paths in (12.0, 0.2, 0.0)]
    assert cells == ["2.5", "one path", ""]


@pytest.mark.parametrize("suffix", ["png", "svg"])
def test_the_picture_is_one(average: Path, tmp_path: Path, suffix: str):
    """A file of its kind; the lines are named in it."""
    file = tmp_path / f"error.{suffix}"
    mcx("methods", average, "--paths", 9000, "--picture", file)
    data = file.read_bytes()
    if suffix == "png":
        assert data.startswith(b"\x89PNG") and len(data) > 10_000
    else:
        assert ElementTree.fromstring(data).tag.endswith("svg") and len(data) > 10_000


@pytest.mark.parametrize(("options", "said"), [
    (("--picture", "error.pdf"), ".png or .svg"), (("--picture", "nowhere/error.png"), "there is no folder"),
    (("--paths", "1"), "one path has no error"), (("--paths", "100", "--seconds", "1"), "cannot both decide")])
def test_wrong_requests(average: Path, options: tuple, said: str):
    refused(mcx("methods", average, *options), said)


@pytest.mark.parametrize("reduction", ["auto", "antithetic", "controls,sobol-components", "stratified", "importance",
                                       "controls,antithetic", "hedge"])
def test_a_record_replays(average: Path, tmp_path: Path, reduction: str):
    """To the last bit, from the methods that the record names; other threads, the same digits."""
    record = tmp_path / "r.json"
    found = mcx("price", average, "--paths", 5000, "--reduction", reduction, "--record", record, "--json").json
    asked = json.loads(record.read_text())["request"][0]["reduction"]
    assert asked == found["reduction"] and (reduction == "auto" or set(asked.split(",")) == set(reduction.split(",")))
    replayed = mcx("replay", record, "--threads", 1, "--json")
    assert replayed.code == 0 and replayed.json["identical"] and replayed.json["largest_difference"] == 0.0


def test_what_does_not_apply_says_why(tmp_path: Path):
    """A reason, and exit code 2."""
    file = written(tmp_path, CALL.replace("european", "touch").replace(
        "{side: call, strike: 100, expiry: 1y}",
        "{kind: no touch, direction: up, barrier: 110, cash: 1, watched: {continuous: [0y, 1y]}, expiry: 1y}") + MARKET)
    refused(mcx("price", file, "--reduction", "stratified,sobol-bridge"), "cannot go together")
    near = written(tmp_path, CALL.replace("european", "digital").replace(
        "side: call, strike: 100", "side: put, pays: cash, amount: 1, strike: 104") + MARKET, "near.yaml")
    refused(mcx("price", near, "--reduction", "importance"), "no 'importance', since the contract pays most where")
    rare = written(tmp_path, CALL.replace("strike: 100", "strike: 2000") + MARKET, "rare.yaml")
    refused(mcx("price", rare, "--reduction", "controls"), "no 'controls', since of 262,144 pilot paths only 0 differ")


def test_a_choice_that_needs_more_paths_says_so(average: Path):
    """The others run: pairs of points are two paths each."""
    found = mcx("methods", average, "--paths", 2048, "--json").json
    assert "sobol-bridge" in {each["method"] for each in found["methods"]}
    assert {each["method"]: each["reason"] for each in found["not_applied"]}["antithetic,sobol-bridge"] == (
        "it takes 4,096 paths or more, and 2,048 were asked for")


def test_a_hedger_is_told_what_is_left(average: Path):
    """The more dates, the less risk; the price is the same."""
    found = package.price(average, paths=20_000, reduction="hedge")
    plain = package.price(average, paths=20_000)
    assert [line.dates for line in found.hedge] == [0, 1, 2, 4] and plain.hedge == ()
    left = [line.deviation for line in found.hedge]
    assert left == sorted(left, reverse=True) and left[-1] < 0.5 * left[0]
    assert abs(found.price - plain.price) < 4 * plain.standard_error
    assert "what a hedger is left with" in mcx("price", average, "--paths", 5000, "--reduction", "hedge").out


@pytest.fixture
def pressed(monkeypatch: pytest.MonkeyPatch) -> Callable[[str], None]:
    """Has an interruption come in the first run of the choice of these methods: half of its paths are there then."""

    def at(label: str) -> None:
        sample = Sampler.sample

        def cut(sampler: Sampler, wanted: int, **how: object) -> Sampled:
            found = sample(sampler, wanted, **how)
            return replace(found, interrupted=sampler.scheme.label == label)

        monkeypatch.setattr(Sampler, "sample", cut)

    return at


def test_an_interruption_leaves_the_choices_so_far(average: Path, pressed: Callable):
    """Those that were whole, none of half its paths; what is missing is named, and the exit code is 130."""
    pressed("sobol-components")
    outcome = mcx("methods", average, "--paths", 4096, "--json")
    assert outcome.code == 130 and outcome.json["interrupted"]
    assert {line["method"] for line in outcome.json["methods"]} == {"none", "sobol-bridge"}
    (said,) = [caution for caution in outcome.json["cautions"] if caution.startswith("interrupted")]
    assert said.startswith("interrupted: not compared are sobol-components, controls,") and "controls + hedge" in said
    assert "interrupted: not compared are sobol-components" in mcx("methods", average, "--paths", 4096).out


def test_an_interruption_before_the_first_choice(average: Path, pressed: Callable):
    pressed("none")
    outcome = mcx("methods", average, "--paths", 4096)
    assert (outcome.code, outcome.out, outcome.err.strip()) == (130, "", "interrupted before there was an estimate")


def test_an_interruption_between_contracts(average: Path, tmp_path: Path, pressed: Callable):
    """The contract that was reached, and the title of the other."""
    (tmp_path / "two").mkdir()
    both = written(tmp_path / "two", AVERAGE + "---\n" + AVERAGE.replace("Average\n", "Another\n") + MARKET)
    pressed("antithetic")
    outcome = mcx("methods", both, "--paths", 4096, "--json")
    assert outcome.code == 130 and outcome.json["not_compared"] == ["Another"]
    assert [each["contract"] for each in outcome.json["contracts"]] == ["Average"]
    assert mcx("methods", both, "--paths", 4096).out.rstrip().endswith("interrupted: not compared are Another")


def test_what_is_sure_stays_sure_where_paths_carry_weights():
    """Probabilities of importance sampling: that a memory note pays a coupon at all is nearly sure, not more."""
    result = package.price(EXAMPLES / "harbour_lantern.yaml", paths=1 << 14, seed=SEED, reduction="importance")
    chances = [one for each in result.conditions for one in (each, *each.dates)]
    assert chances and all(-1e-12 <= one.probability <= 1.0 + 1e-12 for one in chances)
    plain = package.price(EXAMPLES / "harbour_lantern.yaml", paths=1 << 14, seed=SEED + 1)
    error = (result.expected_life_standard_error**2 + plain.expected_life_standard_error**2) ** 0.5
    assert abs(result.expected_life - plain.expected_life) < 4 * error
