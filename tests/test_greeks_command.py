"""`mcx greeks` through its doors: command line, Python, records; ladders and grids."""

from __future__ import annotations

import json
import signal
from pathlib import Path

import pytest
from front_door import CALL, EXAMPLES, MARKET, SEED, mcx, refused, written

import mcx as package
from mcx.faults import RequestError

PATHS = 4096
ASKED = ("--paths", PATHS, "--seed", SEED)
KEYS = {"name", "asset", "tenor", "value", "standard_error", "unit", "estimator"}
TOUCH = """contract: One touch
currency: EUR
units: 1
assets: [harbour]
payoff: touch
terms: {kind: one touch, direction: up, barrier: 101, cash: 1, watched: {from: 0y, count: 4, until: 1y}, expiry: 1y}
"""
FORWARD = """---
payoff: forward
about: The level less a strike.
assets: 1
terms:
  strike: {type: level}
  expiry: {type: date}
events:
  - at: expiry
    pay: spot - strike
"""


@pytest.fixture
def call(tmp_path: Path) -> Path:
    """A textbook call with its market."""
    return written(tmp_path, CALL + MARKET)


def rows(result: dict) -> dict[tuple, dict]:
    return {(each["name"], each["asset"], each["tenor"]): each for each in result["greeks"]}


def test_every_greek_says_its_unit_its_error_and_its_estimator(call: Path):
    """The documented keys, units of the trade, one line for each number of the market."""
    found = mcx("greeks", call, *ASKED, "--json").json
    assert all(KEYS <= each.keys() for each in found["greeks"])
    units = {key[0]: each["unit"] for key, each in rows(found).items()}
    assert units == {"delta": "EUR per 1 of spot", "delta for 1 %": "EUR", "vega": "EUR per vol point",
                     "yield": "EUR per bp", "rho": "EUR per bp", "gamma": "EUR per 1 of spot, for 1 %",
                     "theta": "EUR per calendar day"}
    assert package.greeks(call, paths=PATHS, seed=SEED).to_dict() | {"seconds": 0} == found | {"seconds": 0}


def test_the_price_is_that_of_mcx_price(call: Path):
    """The same paths, so the same price."""
    greeks, price = (mcx(command, call, *ASKED, "--json").json for command in ("greeks", "price"))
    assert greeks["price"] == pytest.approx(price["price"], rel=1e-14)
    assert greeks["standard_error"] == pytest.approx(price["standard_error"], rel=1e-12)


def test_threads_change_no_digit(call: Path):
    """One seed, one answer."""
    one, two = (mcx("greeks", call, *ASKED, "--threads", threads, "--json").json for threads in (1, 2))
    assert one | {"seconds": 0} == two | {"seconds": 0}


def test_a_note_is_in_percent_and_in_currency():
    """Delta per 1 of spot is for the whole notional; a move of 1 % is in percent of it."""
    result = package.greeks(EXAMPLES / "airbag.yaml", paths=PATHS, seed=SEED).to_dict()
    per_one, percent = (rows(result)[name, "lantern", ""] for name in ("delta", "delta for 1 %"))
    assert percent["unit"] == "% of notional"
    assert percent["value"] == pytest.approx(100 * per_one["value"] * 0.01 * 801.1 / result["notional"], rel=1e-12)


def test_the_terminal_says_what_a_reader_needs(call: Path):
    """Values with errors, the estimator, conventions and limits; within 80 columns."""
    outcome = mcx("greeks", call, *ASKED, "--bump", "1%", "--ladder", "--spot-moves=-1%,0,1%")
    assert (outcome.code, outcome.err) == (0, "")
    words = " ".join(outcome.out.split())
    for said in ("delta harbour", "EUR per 1 of spot", "pathwise", "sampling error only",
                 "biased by the size of the move", "moved by ±1 %", "spots moved together",
                 "forwards move with its spot", "a calendar day on", "no skew",
                 "licensed professional"):
        assert said in words, said
    assert max(map(len, outcome.out.splitlines())) <= 80


def test_several_contracts():
    """One result after the other; in JSON under `contracts`."""
    found = mcx("greeks", EXAMPLES / "european.yaml", *ASKED, "--json").json
    assert [each["contract"] for each in found["contracts"]] == [
        "Harbour call at 100, one year", "Harbour put at 95, one year"]
    assert "Harbour put at 95" in mcx("greeks", EXAMPLES / "european.yaml", *ASKED).out


def test_put_call_parity(tmp_path: Path):
    """Call less put is a forward, in every Greek, on the same paths: the forward's own estimate, to rounding; its gamma
    and vega are nothing."""
    text = CALL + CALL.replace("contract: Call", "---\ncontract: Put").replace("side: call", "side: put")
    forward = CALL.replace("contract: Call", "---\ncontract: Forward").replace("european", "forward")
    forward = forward.replace("side: call, ", "") + FORWARD
    file = written(tmp_path, text + forward + MARKET)
    for estimator in ("pathwise", "likelihood"):
        outcome = mcx("greeks", file, "--paths", 1 << 16, "--seed", SEED, "--estimator", estimator, "--json")
        call, put, ahead = map(rows, outcome.json["contracts"])
        for key in call:
            gap = call[key]["value"] - put[key]["value"] - ahead[key]["value"]
            error = sum(each[key]["standard_error"] ** 2 for each in (call, put, ahead)) ** 0.5
            assert abs(gap) < 4 * error + 1e-12, (estimator, key)


def test_a_ladder_is_priced_where_it_stands(call: Path, tmp_path: Path):
    """A rung is the price at that spot on the same paths, with the delta there."""
    asked = (*ASKED, "--estimator", "pathwise")  # the others' coefficients come from the market as it stands
    found = mcx("greeks", call, *asked, "--ladder", "--spot-moves", "2%,-5%,0", "--json").json["ladder"]
    assert [rung["spot_move"] for rung in found] == [-0.05, 0.0, 0.02]
    moved = written(tmp_path, CALL + MARKET.replace("spot: 100", "spot: 102"), "moved.yaml")
    there = mcx("greeks", moved, *asked, "--json").json
    assert found[2]["price"] == pytest.approx(there["price"], rel=1e-13)
    assert found[2]["deltas"][0]["value"] == pytest.approx(rows(there)["delta", "harbour", ""]["value"], rel=1e-10)
    assert found[1]["change"] == 0.0 and found[1]["change_standard_error"] == 0.0
    assert found[2]["change"] == pytest.approx(found[2]["value"] - found[1]["value"], rel=1e-10)
    assert found[2]["change_standard_error"] < 0.1 * found[2]["standard_error"]
    assert len(mcx("greeks", call, *ASKED, "--ladder", "--json").json["ladder"]) == 11


def test_a_ladder_marks_jumps(tmp_path: Path):
    """Where today's level passes the barrier the price jumps, and the line of the condition is told."""
    file = written(tmp_path, TOUCH + MARKET)
    rungs = mcx("greeks", file, *ASKED, "--ladder", "--spot-moves", "-2%,0,2%,4%", "--json").json["ladder"]
    marked = [len(rung["jumps"]) for rung in rungs]
    assert marked == [0, 1, 0, 0] and "touch.yaml" in rungs[1]["jumps"][0]
    assert rungs[3]["standard_error"] == 0.0, "touched already"
    assert "jump above" in mcx("greeks", file, *ASKED, "--ladder", "--spot-moves", "-2%,0,2%,4%").out


@pytest.mark.parametrize(("barrier", "near"), [(100.5, True), (99.5, True), (103, False)])
def test_a_condition_that_is_about_to_turn_is_told(tmp_path: Path, barrier: float, near: bool):
    """Today's level is within 1 % of the barrier: no sensitivity shows the jump, so a warning does."""
    file = written(tmp_path, TOUCH.replace("barrier: 101", f"barrier: {barrier}") + MARKET)
    warnings = mcx("greeks", file, *ASKED, "--json").json["warnings"]
    assert any("touch.yaml" in text and "turns where spots move by 1%" in text for text in warnings) == near


def test_a_grid_of_spots_and_vols(call: Path):
    """Every pair of moves; a vol that would not be above 0 has no price but a reason."""
    result = mcx("greeks", call, *ASKED, "--grid", "--spot-moves", "-1%,1%", "--vol-moves", "-22%,0,3%", "--json").json
    assert len(result["grid"]) == 6 and len(result["ladder"]) == 2
    for point in result["grid"]:
        if point["vol_move"] == -0.22:
            assert point["price"] is None and "a vol of harbour would not be above 0" in point["refused"]
        else:
            assert point["price"] > 0.0 and point["refused"] == ""
    by = {(point["spot_move"], point["vol_move"]): point["price"] for point in result["grid"]}
    assert by[0.01, 0.03] > by[0.01, 0.0] > by[-0.01, 0.0]
    assert "none" in mcx("greeks", call, *ASKED, "--grid", "--spot-moves", "-1%", "--vol-moves", "-22%,0").out


def test_only_some_assets():
    """The lines of other assets are left out, and a ladder moves only those asked for."""
    found = mcx("greeks", EXAMPLES / "exchange_option.yaml", *ASKED, "--asset", "quarry", "--ladder", "--json").json
    assert {each["asset"] for each in found["greeks"] if each["name"] in ("delta", "vega", "gamma")} == {"quarry"}
    assert all([delta["asset"] for delta in rung["deltas"]] == ["quarry"] for rung in found["ladder"])


def test_a_bump_that_no_market_allows(tmp_path: Path):
    """Vols and correlations that cannot move so far are left out of the comparison, and named."""
    file = written(tmp_path, CALL + MARKET.replace("vol: 22%", "vol: {6m: 22%, 1y: 15.6%}"))
    found = mcx("greeks", file, *ASKED, "--bump", "1%", "--json").json
    assert any("no revaluation for the vol of harbour at 6m" in warning for warning in found["warnings"])
    assert ("vega", "6m") not in {(each["name"], each["tenor"]) for each in found["comparison"]}
    assert ("delta", "") in {(each["name"], each["tenor"]) for each in found["comparison"]}


def test_below_twice_its_error_is_not_resolved(tmp_path: Path):
    """The digital's vega where it changes sign."""
    text = CALL.replace("european", "digital").replace("strike: 100", "strike: 104.9, pays: cash, amount: 1")
    found = mcx("greeks", written(tmp_path, text + MARKET), *ASKED, "--json").json
    vega = rows(found)["vega", "harbour", ""]
    assert abs(vega["value"]) < 2 * vega["standard_error"] and vega["resolved"] is False
    assert any("not resolved at this number of paths" in warning for warning in found["warnings"])
    assert "not resolved" in mcx("greeks", written(tmp_path, text + MARKET), *ASKED).out


@pytest.mark.parametrize(("options", "said"), [
    (("--asset", "harbor"), "has no asset 'harbor'; did you mean 'harbour'?"),
    (("--estimator", "magic"), "there is no estimator 'magic'"),
    (("--estimator", ""), "there is no estimator ''"),
    (("--bump", "0"), "'bump' is a size above 0"),
    (("--ladder", "--spot-moves", "-100%"), "stays above 0"),
    (("--ladder", "--spot-moves", ""), "the spot moves are sizes such as"),
    (("--spot-moves", "1%"), "goes with '--ladder'"),
    (("--ladder", "--vol-moves", "1%"), "'--vol-moves' with '--grid'"),
    (("--paths", "4095"), "at least 4,096 paths"),
    (("--reduction", "magic"), "variance reduction"),
    (("--within", "1bp"), "no notional"),
])
def test_wrong_requests(call: Path, options: tuple, said: str):
    """One clear message and exit code 2."""
    refused(mcx("greeks", call, *options), said)


def test_an_estimator_that_is_not_valid_is_refused():
    """With the reason and the line, and nothing on standard output."""
    refused(mcx("greeks", EXAMPLES / "digital.yaml", "--paths", PATHS, "--estimator", "pathwise"),
            "no pathwise estimate, since the payoff jumps at", "digital.yaml:")


def test_a_record_reproduces(tmp_path: Path):
    """Everything that was asked for is in it, and comes out again to the last bit."""
    record = tmp_path / "greeks.json"
    outcome = mcx("greeks", EXAMPLES / "european.yaml", *ASKED, "--bump", "1%", "--asset", "harbour", "--grid",
                  "--spot-moves", "-1%,1%", "--vol-moves", "0,1%", "--record", record)
    assert outcome.code == 0
    found = mcx("replay", record, "--json")
    assert found.code == 0 and found.json["identical"] and found.json["largest_difference"] == 0.0
    stored = json.loads(record.read_text(encoding="utf-8"))
    assert stored["verb"] == "greeks" and stored["request"][0]["spot_moves"] == [-0.01, 0.01]


def test_a_changed_record_is_told_by_the_name_of_the_greek(tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    """A replay that finds another vega names it."""
    from mcx.report import record as records

    file = tmp_path / "greeks.json"
    assert mcx("greeks", EXAMPLES / "airbag.yaml", *ASKED, "--record", file).code == 0
    stored = json.loads(file.read_text(encoding="utf-8"))
    stored.pop("sha256")
    vega = next(each for each in stored["results"][0]["greeks"] if (each["name"], each["tenor"]) == ("vega", "3y"))
    vega["value"] *= 1.0 + 1e-9
    file.write_text(json.dumps({**stored, "sha256": records._checksum(stored)}), encoding="utf-8")
    found = mcx("replay", file, "--json")
    assert found.code == 1 and found.json["first_difference"].endswith("greeks[vega lantern 3y].value")


@pytest.fixture
def pressed(monkeypatch: pytest.MonkeyPatch):
    """Ctrl-C once so many batches of 128 paths are done, those of the pilot included."""
    from mcx.machine.blocks import Crew

    monkeypatch.setattr("mcx.machine.run.batch_for", lambda code, lanes: 128)

    def after(batches: int) -> None:
        done, run = [0], Crew.run

        def counted(crew, *given):
            done[0] += 1
            if done[0] == batches + 1:
                signal.raise_signal(signal.SIGINT)
            return run(crew, *given)

        monkeypatch.setattr(Crew, "run", counted)

    return after


PILOT = 128  # batches


def test_interrupted_with_the_estimates_so_far(call: Path, pressed, tmp_path: Path):
    """Code 130, the numbers of a run of that length; what had not begun is left out, and no record is written."""
    short = mcx("greeks", call, "--paths", 40 * 128, "--estimator", "pathwise", "--json").json
    pressed(PILOT + 40)
    outcome = mcx("greeks", call, "--paths", 10_000, "--estimator", "pathwise", "--json", "--record",
                  tmp_path / "r.json")
    assert outcome.code == 130 and outcome.json["interrupted"] and outcome.json["paths"] == 40 * 128
    assert outcome.err == "interrupted: no record was written\n" and not (tmp_path / "r.json").exists()
    assert any("interrupted after 5,120 of 10,000 paths" in warning for warning in outcome.json["warnings"])
    found, expected = rows(outcome.json), rows(short)
    assert found.keys() == expected.keys() - {("theta", "", "1 day")}
    for key, each in found.items():
        assert each == expected[key]


def test_interrupted_between_contracts(tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    """The contract that is whole, and the title of the one that had not begun."""
    from mcx.estimators import greeks

    both = written(tmp_path, CALL + "---\n" + CALL.replace("contract: Call", "contract: Another") + MARKET, "both.yaml")
    whole = greeks.sensitivities

    def pressed_at_another(ready, *given, **more):
        if ready.dated.contract.title == "Another":
            raise KeyboardInterrupt
        return whole(ready, *given, **more)

    monkeypatch.setattr(greeks, "sensitivities", pressed_at_another)
    outcome = mcx("greeks", both, "--paths", 4096)
    assert outcome.code == 130 and outcome.out.startswith("Call (european)\n")
    assert outcome.out.rstrip().endswith("\ninterrupted: not valued are Another")
    assert mcx("greeks", both, "--paths", 4096, "--json").json["not_valued"] == ["Another"]


def test_interrupted_among_the_revaluations(call: Path, pressed):
    """The sensitivities are whole; of what came after only what was done is shown."""
    pressed(PILOT + 32 + 40)
    outcome = mcx("greeks", call, "--paths", 4096, "--estimator", "pathwise", "--ladder")
    assert outcome.code == 130 and outcome.out.startswith("interrupted: the estimates so far\n")
    assert "theta" in outcome.out and "spots moved together" not in outcome.out


@pytest.mark.parametrize("batches", [0, 60, PILOT + 20])
def test_interrupted_before_anything(call: Path, pressed, batches: int):
    """In the pilot, or before every part of the run has paths: code 130 and a sentence."""
    pressed(batches)
    outcome = mcx("greeks", call, "--paths", 10_000, "--estimator", "pathwise")
    assert (outcome.code, outcome.out, outcome.err.strip()) == (130, "", "interrupted before there was an estimate")


def test_python_takes_texts_and_numbers(call: Path):
    """Moves as one text or as numbers."""
    one = package.greeks(call, paths=PATHS, spot_moves="-1%, 1%")
    other = package.greeks(call, paths=PATHS, spot_moves=[-0.01, 0.01], assets="harbour")
    assert one.ladder == other.ladder
    with pytest.raises(RequestError, match="named twice"):
        package.greeks(call, paths=PATHS, spot_moves=[0.01, "1%"])


def test_between_bounds_everything_is_about_the_middle(tmp_path: Path):
    """Of a worst-of watched continuously: the bounds are those of the price of the same paths but for the pilot's error,
    the terminal says so, and the record repeats the steps."""
    record = tmp_path / "greeks.json"
    asked = (EXAMPLES / "worst_of_watched.yaml", "--paths", 1 << 17, "--seed", 3)
    found = mcx("greeks", *asked, "--json").json["contracts"][1]
    priced = mcx("price", *asked, "--json").json["prices"][1]
    assert found["price"] == pytest.approx(priced["price"], rel=1e-12)
    bracket, bounds = found["bracket"], priced["bracket"]
    assert bracket["pieces"] == bounds["pieces"] > 1
    assert bracket["width"] == pytest.approx(bounds["width"], abs=6 * bounds["width_standard_error"] + 1e-5)
    shown = mcx("greeks", *asked, "--record", record)
    assert "sensitivities are those of the middle" in " ".join(shown.out.split())
    again = mcx("replay", record, "--json")
    assert again.code == 0 and again.json["identical"]


@pytest.mark.parametrize("corner", sorted((Path(__file__).parent / "corners").glob("*.yaml")), ids=lambda file: file.stem)
def test_every_corner_has_sensitivities_or_reasons(corner: Path):
    """Of each contract every sensitivity is a number or is refused in words, theta included: a node of a curve may be
    one calendar day before a date that cuts a watch."""
    found = mcx("greeks", corner, "--paths", PATHS, "--json")
    assert found.code == 0, found.err
    for each in found.json.get("contracts", [found.json]):
        named = {greek["name"] for greek in each["greeks"]} | {greek["name"] for greek in each["refused"]}
        assert "theta" in named
        assert all(greek["reason"] for greek in each["refused"])
