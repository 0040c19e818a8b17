"""Commands, options and exit codes, through the door of the command line."""

from __future__ import annotations

import json
import signal
from pathlib import Path

import pytest
from front_door import CALL, EXAMPLES, MARKET, SEED, mcx, refused, written

import mcx as package
from mcx.checked.library import shipped_names

NOTE = EXAMPLES / "harbour_lantern.yaml"
TWO = EXAMPLES / "autocall.yaml"
ASKED = ("--paths", 1000, "--seed", SEED)
PRICE_KEYS = {"price", "standard_error", "value", "interval95", "paths", "seconds", "seed", "reduction", "legs",
              "conditions", "expected_life", "checks", "warnings"}


@pytest.fixture
def call(tmp_path: Path) -> Path:
    """A textbook call with its market."""
    return written(tmp_path, CALL + MARKET)


def test_price_says_the_number_first():
    """'98.33 % ± 0.02 % (sampling error only)': the first line."""
    outcome = mcx("price", NOTE, *ASKED)
    result = package.price(NOTE, paths=1000, seed=SEED)
    half = (result.interval95[1] - result.interval95[0]) / 2
    assert (outcome.code, outcome.err) == (0, "")
    assert outcome.out.splitlines()[0] == f"{100 * result.price:.2f} % ± {100 * half:.2f} % (sampling error only)"
    words = " ".join(outcome.out.split())
    for said in ("legs", "sum", "knocked in", "risk-neutral, not a forecast", "95 % interval", "check: mean level over",
                 "no skew", "no default before maturity", "licensed professional", "not advice"):
        assert said in words


def test_price_in_json():
    """One object with the documented keys, every number as Python has it; nothing else on either stream."""
    outcome = mcx("price", NOTE, *ASKED, "--json")
    assert (outcome.code, outcome.err) == (0, "")
    found, result = outcome.json, package.price(NOTE, paths=1000, seed=SEED).to_dict()
    assert PRICE_KEYS <= found.keys() == result.keys()
    assert {**found, "seconds": 0} == {**result, "seconds": 0}
    assert found["unit"] == "notional" and found["seed"] == SEED and found["paths"] == 1000


def test_several_contracts_make_one_table(call: Path):
    """In the order of the files, on one market; in JSON under `prices`."""
    outcome = mcx("price", TWO, *ASKED)
    found = mcx("price", TWO, *ASKED, "--json").json
    titles = ["Harbour step-down autocall 2029", "Harbour, Quarry and Orchard memory autocall 2028"]
    assert [each["contract"] for each in found["prices"]] == titles and found["not_valued"] == []
    assert outcome.code == 0 and outcome.out.index("Harbour step-down") < outcome.out.index("memory")
    assert f"{100 * found['prices'][1]['price']:.2f}" in outcome.out
    alone = mcx("price", call, *ASKED, "--json").json
    assert "prices" not in alone


def test_contracts_and_market_in_files_of_their_own(tmp_path: Path):
    """In any order, and the market from standard input."""
    first = written(tmp_path, CALL, "a.yaml")
    second = written(tmp_path, CALL.replace("Call", "Other").replace("100", "90"), "b.yaml")
    outcome = mcx("price", "-", second, first, *ASKED, "--json", stdin=MARKET.encode())
    assert [each["contract"] for each in outcome.json["prices"]] == ["Other", "Call"]


def test_one_seed_one_answer(call: Path):
    """The seed decides, threads do not; without a seed it is 1."""
    options = ((), ("--seed", 1), ("--seed", 1, "--threads", 1), ("--seed", 1, "--threads", 2), ("--seed", 2))
    prices = [mcx("price", call, "--paths", 1000, *more, "--json").json["price"] for more in options]
    assert prices[0] == prices[1] == prices[2] == prices[3] != prices[4]


@pytest.mark.parametrize("seed", [0, 2**63, 2**64 - 1])
def test_any_seed_of_64_bits(call: Path, seed: int):
    """Also the last one."""
    assert mcx("price", call, "--paths", 64, "--seed", seed, "--json").json["seed"] == seed


def test_within(call: Path):
    """The half-width is reached, and the plan says how."""
    found = mcx("price", NOTE, "--within", "100bp", "--json").json
    half = (found["interval95"][1] - found["interval95"][0]) / 2
    assert half <= 0.01 and found["planned"]["met"] and found["planned"]["target"] == 0.01
    assert found["planned"]["asked"] == "within 100 bp" and found["planned"]["pilot_paths"] > 0
    money = mcx("price", call, "--within", "0.5", "--json").json
    assert (money["interval95"][1] - money["interval95"][0]) / 2 <= 0.5 and money["unit"] == "currency per unit"


def test_seconds(call: Path):
    """Some number of paths, whole groups of it, which is then reported."""
    found = mcx("price", call, "--seconds", 0.02, "--json").json
    assert found["paths"] == found["planned"]["paths"] and found["paths"] % 64 == 0
    assert found["planned"]["asked"] == "0.02 seconds"


@pytest.mark.parametrize(("options", "said"), [
    (("--paths", "1"), "one path has no error"), (("--paths", "0"), "'paths' is from 2"),
    (("--paths", "many"), "not a valid integer"), (("--paths", "1.5e-1"), "not a valid integer"),
    (("--paths", "1e99"), "'paths' is from 2"), (("--within", "2"), "ask for 'within' in bp or %"),
    (("--within", "nan"), "'within' is a half-width above 0"), (("--seconds", "nan"), "'seconds' is a time above 0"),
    (("--seconds", "-1"), "'seconds' is a time above 0"), (("--seed", "-1"), "'seed' is a whole number from 0"),
    (("--seed", str(2**64)), "'seed' is a whole number from 0"), (("--seed", "1.5"), "not a valid integer"),
    (("--threads", "0"), "'threads' is from 1 to"), (("--threads", "100000"), "'threads' is from 1 to"),
    (("--reduction", "sobol"), "the variance reduction 'sobol' is not known"),
    (("--paths", "100", "--within", "1bp"), "'paths' and 'within' cannot both decide"),
    (("--paths", "100", "--seconds", "1"), "'paths' and 'seconds' cannot both decide"),
    (("--within", "1bp", "--seconds", "1"), "'within' and 'seconds' cannot both decide"),
    (("--within", "1e-9bp"), "'within 1e-9 bp' needs about"),
    (("--pats", "100"), "--pats"), (("--paths",), "'--paths' requires an argument"),
])
def test_wrong_options(options: tuple, said: str):
    """Code 2, a sentence, nothing on standard output."""
    refused(mcx("price", NOTE, *options), said)


@pytest.mark.parametrize("command", ["price", "readback"])
@pytest.mark.parametrize("more", [(), ("--json",)])
def test_every_fault_of_all_documents_at_once(tmp_path: Path, command: str, more: tuple):
    """In the order of their places, each `file:line:column: …`; nothing on standard output, JSON or not."""
    contract = written(tmp_path, CALL.replace("side:", "sied:").replace("strike: 100", "strike: -1"), "a.yaml")
    market = written(tmp_path, MARKET.removeprefix("---\n").replace("4%", "four").replace("22%", "-22%"), "b.yaml")
    outcome = mcx(command, contract, market, *more)
    refused(outcome)
    places = [line.split(": ")[0] for line in outcome.err.splitlines()]
    rows = [(file, int(line), int(column)) for file, line, column in (place.split(":") for place in places)]
    assert f"{contract}:6:9" in places and f"{market}:2:14" in places
    assert len([place for place in places if place.startswith(str(market))]) == 2
    assert rows == sorted(rows)


@pytest.mark.parametrize(("files", "said"), [
    (("none.yaml",), "none.yaml:1:1: there is no such file"), ((".",), ".:1:1: this is a folder; expected a file"),
    ((), "Missing argument 'FILES…'"), (("a\0b",), "the name is not one of a file"),
])
def test_wrong_files(files: tuple, said: str):
    """As faults with places, or as a missing argument."""
    refused(mcx("price", *files), said)


def test_a_contract_without_a_market_and_the_other_way_round(tmp_path: Path):
    """What is missing is said once, and how it begins; readback needs no market."""
    contract, market = written(tmp_path, CALL, "a.yaml"), written(tmp_path, MARKET.removeprefix("---\n"), "b.yaml")
    refused(mcx("price", contract), f"{contract}:1:1: no market in ", "'market: DATE'")
    refused(mcx("price", market), f"{market}:1:1: no contract in ", "'contract: TITLE'")
    assert mcx("readback", contract).code == 0
    refused(mcx("readback", market), "no contract in ")


def test_a_path_that_is_not_finite_stops_the_run(tmp_path: Path):
    """With the contract, the output, the path, seed and stream, so that it can be found again; code 2."""
    payoff = "payoff: inverse\nabout: one over a fall\nterms: {expiry: {type: date}}\n" \
             "events:\n  - at: expiry\n    pay: 1 / max(100 - spot, 0)\n"
    contract = CALL.replace("european", "inverse").replace("{side: call, strike: 100, expiry: 1y}", "{expiry: 1y}")
    file = written(tmp_path, f"{contract}---\n{payoff}{MARKET}")
    for wish in (("--paths", 1000), ("--seconds", 1)):
        outcome = mcx("price", file, "--seed", 7, *wish)
        refused(outcome, "'Call': 'price' is not a finite number on path ", "seed 7, stream ")


def test_readback():
    """Sentences and dates, forwards and discount factors, with a market; one JSON object."""
    outcome = mcx("readback", NOTE)
    assert (outcome.code, outcome.err) == (0, "")
    for said in ("terms", "events, in this order on each date", "everything that is observed, decided and paid",
                 "discount factors", "forwards", "with funding"):
        assert said in outcome.out
    found = mcx("readback", NOTE, "--json").json
    assert found == package.readback(NOTE).to_dict()
    table = mcx("readback", TWO, "--json").json
    assert table == package.readback(TWO).to_dict() and len(table["readbacks"]) == 2
    assert "Harbour step-down autocall 2029" in mcx("readback", TWO).out


def test_payoffs():
    """All of them by name, whole words even where a name is long; one in full as its file has it."""
    listed = mcx("payoffs")
    assert listed.code == 0 and len(mcx("payoffs", "--json").json["payoffs"]) == len(shipped_names())
    assert all(f"\n{name}  " in f"\n{listed.out}" for name in shipped_names())
    one = mcx("payoffs", "autocall")
    assert (one.code, one.out) == (0, (EXAMPLES.parent / "autocall.yaml").read_text(encoding="utf-8"))
    found = mcx("payoffs", "autocall", "--json").json
    assert (found["name"], found["assets"], found["text"]) == ("autocall", "1 or more", one.out)


@pytest.mark.parametrize("arguments", [
    ("autocall", "--blank"), ("autocall", "--assets", "a"), ("--blank", "--assets", "a")])
def test_a_blank_needs_all_three(arguments: tuple):
    """Name, --blank and --assets."""
    refused(mcx("payoffs", *arguments), "a blank needs all three: 'mcx payoffs NAME --blank --assets a,b'")


def test_unknown_names():
    """A word that is near, or where to look."""
    refused(mcx("payoffs", "autocal"), "no payoff 'autocal' in the library; did you mean 'autocall'?")
    refused(mcx("prise"), "No such command 'prise'")


def test_no_command():
    """The help as it is, without a word where to find it."""
    outcome = mcx()
    assert outcome.code != 0 and outcome.err.strip() == mcx("--help").out.strip()


@pytest.mark.parametrize("command", [(), ("price",), ("readback",), ("payoffs",), ("replay",)])
def test_help(command: tuple):
    """Every command and every option has a line; -h is --help."""
    outcome = mcx(*command, "--help")
    assert outcome.code == 0 and outcome.out.startswith(f"Usage: mcx {' '.join(command)}".rstrip())
    assert outcome.out == mcx(*command, "-h").out
    assert "--json" in outcome.out or not command
    if command == ("price",):
        for option in ("--paths", "--within", "--seconds", "--seed", "--threads", "--reduction", "--record"):
            assert option in outcome.out


def test_version():
    """That of the package, or that it is not installed."""
    assert mcx("--version").out == f"{package.__version__}\n"


@pytest.fixture
def pressed(monkeypatch: pytest.MonkeyPatch):
    """Presses Ctrl-C as soon as so many batches of 128 paths are done, counted over all contracts."""
    from mcx.machine.blocks import Crew

    monkeypatch.setattr("mcx.machine.run.batch_for", lambda code, lanes: 128)

    def after(batches: int) -> None:
        done, run = [0], Crew.run

        def counted(crew, *given):
            done[0] += 1
            if done[0] > batches:
                signal.raise_signal(signal.SIGINT)
            return run(crew, *given)

        monkeypatch.setattr(Crew, "run", counted)

    return after


def test_interrupted_with_the_estimate_so_far(call: Path, pressed):
    """Code 130, the estimate marked, its number the one of a run of that length."""
    short = mcx("price", call, "--paths", 384, "--json").json
    pressed(3)
    outcome = mcx("price", call, "--paths", 10_000)
    assert outcome.code == 130 and outcome.err == ""
    assert outcome.out.startswith("interrupted: the estimate so far\n")
    assert "interrupted after 384 of 10,000 paths" in outcome.out
    assert f"{short['price']:.4f} EUR per unit" in outcome.out.splitlines()[1]


def test_interrupted_in_json(call: Path, pressed, tmp_path: Path):
    """Still one object; no record is written, and that is said."""
    pressed(2)
    outcome = mcx("price", call, "--paths", 10_000, "--json", "--record", tmp_path / "r.json")
    assert outcome.code == 130 and outcome.json["interrupted"] and outcome.json["paths"] == 256
    assert outcome.err == "interrupted: no record was written\n" and not (tmp_path / "r.json").exists()


def test_interrupted_before_anything(call: Path, pressed):
    """Code 130 and a sentence."""
    pressed(0)
    outcome = mcx("price", call, "--paths", 10_000)
    assert (outcome.code, outcome.out, outcome.err.strip()) == (130, "", "interrupted before there was an estimate")


@pytest.mark.parametrize(("batches", "valued", "missing"), [(1, 1, 1), (2, 1, 1), (3, 2, 0)])
def test_interrupted_between_contracts(pressed, batches: int, valued: int, missing: int):
    """What is done is shown, what is missing is named, wherever in a table Ctrl-C comes."""
    pressed(batches)
    outcome = mcx("price", TWO, "--paths", 256, "--json")
    assert outcome.code == 130
    found = outcome.json
    assert (len(found["prices"]), len(found["not_valued"])) == (valued, missing)


def test_interrupted_table_says_so(pressed):
    """On the terminal too."""
    pressed(2)
    outcome = mcx("price", TWO, "--paths", 256)
    assert outcome.code == 130 and outcome.out.startswith("interrupted: the estimates so far\n")
    assert "not valued: Harbour, Quarry and Orchard memory autocall 2028" in outcome.out


def test_interrupted_replay(call: Path, tmp_path: Path, pressed):
    """An answer needs the whole run: 130, and nothing said about the record."""
    record = tmp_path / "r.json"
    assert mcx("price", call, "--paths", 1000, "--record", record).code == 0
    pressed(2)
    outcome = mcx("replay", record)
    assert (outcome.code, outcome.out) == (130, "")


def test_json_is_utf8_text_as_it_is(tmp_path: Path):
    """Titles keep their letters."""
    file = written(tmp_path, CALL.replace("contract: Call", "contract: Käufer 日本") + MARKET)
    outcome = mcx("price", file, "--paths", 64, "--json")
    assert outcome.json["contract"] == "Käufer 日本" and "Käufer 日本" in outcome.out
    assert json.loads(outcome.out)["price"] > 0
