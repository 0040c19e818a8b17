"""Valuation records: whole or not at all, never over a file, held to the last bit, and every cut or edit is noticed."""

from __future__ import annotations

import json
import os
from pathlib import Path

import pytest
from front_door import CALL, EXAMPLES, MARKET, SEED, mcx, refused, written
from hypothesis import assume, given
from hypothesis import strategies as st

import mcx as package
from mcx.faults import InputError, RequestError
from mcx.report.record import CHECKSUM, compare, differences, environment, make_record, read_record, write_record

ASKED = ("--paths", 1000, "--seed", SEED)
TWO = EXAMPLES / "autocall.yaml"


@pytest.fixture(scope="module")
def recorded(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The record of two notes, one with three assets."""
    file = tmp_path_factory.mktemp("records") / "two.json"
    assert mcx("price", TWO, *ASKED, "--record", file).code == 0
    return file


def changed(recorded: Path, folder: Path, sealed: bool = True, **new: object) -> Path:
    """A copy of a record with other entries, under a checksum that holds (`sealed`) or under the old one."""
    record = {**json.loads(recorded.read_text(encoding="utf-8")), **new}
    if sealed:
        del record[CHECKSUM]
        from mcx.report.record import _checksum

        record[CHECKSUM] = _checksum(record)
    return written(folder, json.dumps(record), "changed.json")


def test_everything_a_price_depends_on_is_in_it(recorded: Path):
    """Texts with their hashes (the library's definition too), request, versions, calendar, processor, results."""
    record = json.loads(recorded.read_text(encoding="utf-8"))
    assert record["inputs"][0] == {"file": str(TWO), "text": TWO.read_text(encoding="utf-8"),
                                   "sha256": record["inputs"][0]["sha256"]}
    assert [Path(each["file"]).name for each in record["inputs"]] == ["autocall.yaml", "autocall.yaml"]
    asked = [(each["paths"], each["seed"], each["reduction"]) for each in record["request"]]
    assert asked == [(1000, SEED, "none")] * 2
    assert {"python", "mcx", "numpy", "numba", "llvmlite", "holidays", "python-dateutil", "source",
            "processor"} <= record["environment"].keys()
    assert all("holidays" in each["calendar_version"] for each in record["results"])
    table = package.price(TWO, paths=1000, seed=SEED).to_dict()
    for stored, found in zip(record["results"], table["prices"], strict=True):
        assert {**stored, "seconds": 0} == {**found, "seconds": 0}


def test_hash_of_an_input_is_the_files_own(recorded: Path):
    """The SHA-256 beside a text is what any tool finds for the file."""
    import hashlib

    stored = json.loads(recorded.read_text(encoding="utf-8"))["inputs"][0]["sha256"]
    assert stored == hashlib.sha256(TWO.read_bytes()).hexdigest()


@pytest.mark.parametrize("threads", [1, None])
def test_replays_to_the_last_bit(recorded: Path, threads: int | None):
    """With any number of threads, from any folder, without the files."""
    found = package.replay(recorded, threads=threads)
    assert found.identical and found.largest_difference == 0.0
    assert (found.first_difference, found.changed) == ("", ())


def test_replay_says_so(recorded: Path):
    """Code 0 and the word, or one JSON object with the keys of the design."""
    outcome = mcx("replay", recorded)
    assert outcome.code == 0 and outcome.out.startswith("identical\n")
    found = mcx("replay", recorded, "--json", "--threads", 1).json
    assert (found["identical"], found["largest_difference"], found["first_difference"]) == (True, 0.0, "")


def test_planned_numbers_of_paths_replay(tmp_path: Path):
    """What `--seconds` and `--within` decided is recorded as a number, and replayed as one."""
    file = written(tmp_path, CALL + MARKET)
    for number, wish in enumerate((("--seconds", 0.01), ("--within", "0.5"))):
        record = tmp_path / f"{number}.json"
        assert mcx("price", file, *wish, "--record", record).code == 0
        assert package.replay(record).identical


def test_another_number_is_the_first_difference(recorded: Path, tmp_path: Path):
    """One leg off in its last digits: exit code 1, the leg's name, both numbers."""
    results = json.loads(recorded.read_text(encoding="utf-8"))["results"]
    leg = results[1]["legs"][1]
    right = leg["price"]
    leg["price"] = right * (1.0 + 4e-16) if right else 1e-16
    assert leg["price"] != right
    wrong = changed(recorded, tmp_path, results=results)
    outcome = mcx("replay", wrong)
    assert outcome.code == 1 and outcome.out.startswith("not identical\n")
    found = mcx("replay", wrong, "--json")
    assert found.code == 1
    assert found.json["first_difference"] == f"[{results[1]['contract']}].legs[{leg['name']}].price"
    assert (found.json["stored"], found.json["found"]) == (leg["price"], right)
    assert 0.0 < found.json["largest_difference"] < 1e-15


def test_on_another_processor_rounding_is_allowed(recorded: Path):
    """Within 1e-12 relative on another type, to the last bit on the same."""
    stored = read_record(recorded)
    results = json.loads(json.dumps(stored["results"]))
    results[0]["price"] *= 1.0 + 5e-13
    here = environment()
    assert compare(stored, results, here).first_difference.endswith(".price")
    there = compare(stored, results, {**here, "processor": "another"})
    assert there.identical and 0.0 < there.largest_difference < 1e-12
    assert there.changed == (f"processor: {here['processor']} then, another now",)
    results[0]["price"] *= 1.0 + 5e-12
    assert not compare(stored, results, {**here, "processor": "another"}).identical


def test_differences_are_named():
    """By keys, and by names or dates of entries; a list of another length as a whole; what is worded not at all."""
    old = {"a": 1, "legs": [{"name": "coupon", "price": 1.0}], "ends": [1, 2], "on": [{"date": "d", "p": None}],
           "warnings": ["x"], "seconds": 1.0}
    new = {"a": 1, "legs": [{"name": "coupon", "price": 2.0}], "ends": [1], "on": [{"date": "d", "p": 0.5}],
           "warnings": [], "seconds": 2.0, "later": 1}
    assert list(differences(old, new)) == [("legs[coupon].price", 1.0, 2.0), ("ends", "[1, 2]", "[1]"),
                                           ("on[d].p", None, 0.5)]


@pytest.mark.parametrize("share", [0.0, 0.1, 0.5, 0.999])
def test_cut_short(recorded: Path, tmp_path: Path, share: float):
    """A record of which the end is missing is no record."""
    data = recorded.read_bytes()
    file = tmp_path / "cut.json"
    file.write_bytes(data[: int(share * len(data))])
    refused(mcx("replay", file), "cut short")


@given(st.data())
def test_any_edit_is_noticed(recorded: Path, tmp_path_factory: pytest.TempPathFactory, data: st.DataObject):
    """One byte changed anywhere outside the white space: never a replay that runs, never a traceback."""
    whole = recorded.read_bytes()
    where = data.draw(st.integers(0, len(whole) - 1).filter(lambda at: whole[at:at + 1].strip()))
    byte = data.draw(st.integers(0, 255).filter(lambda new: new != whole[where]))
    edited = whole[:where] + bytes([byte]) + whole[where + 1:]
    assume({whole[where], byte} != set(b"eE"))  # 1e-05 and 1E-05 are one number
    file = tmp_path_factory.getbasetemp() / "edited.json"
    file.write_bytes(edited)
    with pytest.raises(RequestError, match=r"edited\.json: "):
        read_record(file)


@pytest.mark.parametrize(("text", "said"), [
    ("[]", "no valuation record"), ("{}", "no valuation record"), ('{"record": 2}', "format 2; this version reads"),
    ('{"record": NaN}', "no whole valuation record"), ('{"record": 1, "x": 1e999}', "no whole valuation record"),
    ('{"record": 1, "x": "\\ud800"}', "no whole valuation record"), ('{"record": 1}', "checksum does not hold"),
    ("[" * 100_000, "no whole valuation record"), ("contract: x", "no whole valuation record"),
])
def test_other_files_are_no_records(tmp_path: Path, text: str, said: str):
    """Each with its sentence."""
    refused(mcx("replay", written(tmp_path, text, "other.json")), "other.json: ", said)


def test_a_missing_file_and_a_folder(tmp_path: Path):
    """No record there."""
    refused(mcx("replay", tmp_path / "none.json"), "none.json: the record cannot be read: no such file")
    refused(mcx("replay", tmp_path), "the record cannot be read: is a directory")


def test_a_sealed_record_without_its_parts(recorded: Path, tmp_path: Path):
    """A checksum that somebody made anew does not lead to a traceback."""
    refused(mcx("replay", changed(recorded, tmp_path, results=[])), "lacks inputs, requests or results")
    refused(mcx("replay", changed(recorded, tmp_path, inputs=[{}])), "lacks inputs")
    one = json.loads(recorded.read_text(encoding="utf-8"))
    refused(mcx("replay", changed(recorded, tmp_path, request=one["request"][:1], results=one["results"][:1])),
            "1 requests for the 2 contracts")
    refused(mcx("replay", changed(recorded, tmp_path, inputs=one["inputs"][1:])), "2 requests for the 0 contracts")


def test_texts_that_this_version_finds_wrong(recorded: Path, tmp_path: Path):
    """A record whose documents do not read any more gives their faults with their places."""
    inputs = json.loads(recorded.read_text(encoding="utf-8"))["inputs"]
    inputs[0]["text"] = inputs[0]["text"].replace("coupon: 3.9%", "coupon: 3.9")
    with pytest.raises(InputError, match=r"autocall\.yaml:\d+:\d+: "):
        package.replay(changed(recorded, tmp_path, inputs=inputs))
    inputs[0]["text"] = "contract: {"
    with pytest.raises(InputError, match=r"autocall\.yaml:1:\d+: "):
        package.replay(changed(recorded, tmp_path, inputs=inputs))


def test_never_over_a_file(recorded: Path, tmp_path: Path):
    """An existing file, also a dangling link, is refused before any work, and stays as it is."""
    before = recorded.read_bytes()
    refused(mcx("price", TWO, "--record", recorded), "the file exists; a record is never written over another file")
    assert recorded.read_bytes() == before
    link = tmp_path / "link.json"
    link.symlink_to(tmp_path / "nowhere")
    refused(mcx("price", TWO, "--record", link), "the file exists")
    refused(mcx("price", TWO, "--record", tmp_path / "none" / "r.json"), "there is no folder")
    assert sorted(tmp_path.iterdir()) == [link]


def test_a_folder_that_nothing_can_be_written_in(tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    """Found out before the work."""
    monkeypatch.setattr(os, "access", lambda path, mode: False)
    refused(mcx("price", TWO, "--record", tmp_path / "r.json"), "nothing can be written in the folder")


def test_whole_or_not_at_all(tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    """A disk that fills up while the record is written leaves no file behind, not even a part under another name."""
    def full(number: int) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "fsync", full)
    with pytest.raises(RequestError, match="cannot be written: no space left on device"):
        write_record(tmp_path / "r.json", make_record((), []))
    assert list(tmp_path.iterdir()) == []


def test_wrong_documents_leave_no_record(tmp_path: Path):
    """Nothing is written when the input is wrong."""
    record = tmp_path / "r.json"
    refused(mcx("price", written(tmp_path, CALL.replace("side", "sied") + MARKET), "--record", record), "sied")
    assert not record.exists()


def test_an_interrupted_run_leaves_no_record(tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    """Its number of paths depends on when somebody pressed a key."""
    import signal

    monkeypatch.setattr("mcx.machine.run.batch_for", lambda code, lanes: 128)
    result = package.price(TWO, paths=10_000, record=tmp_path / "r.json",
                           progress=lambda *_: signal.raise_signal(signal.SIGINT))
    assert result.interrupted and list(tmp_path.iterdir()) == []
