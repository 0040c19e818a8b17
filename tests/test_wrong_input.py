"""Wrong input as a user meets it: `mcx price FILE` on documents with one slip each, one or more for every kind of
slip that is promised to be caught. Everything is told at once, as file:line:column; nothing else is written."""

from __future__ import annotations

from pathlib import Path

import pytest
from front_door import mcx, refused, written

NOTE = """\
payoff: averaging_note
about: Par and the average gain of the worst, once every barrier held.
terms:
  initial:   {type: level, about: level that the barrier is a percentage of}
  averaging: {type: dates, about: fixings that enter the average}
  barrier:   {type: percent, per: averaging, at_least: 0%, at_most: 150%, about: lowest level that is harmless}
  expiry:    {type: date, about: when the average is paid}
  side:      {type: choice, of: [call, put], about: who gains from a rise}
let:
  performance: worst(spot / initial)
running:
  mean_level: {average: performance, at: averaging}
  low: {lowest: performance, at: averaging}
  held: {start: true}
events:
  - at: averaging
    set:
      held: held and performance >= barrier
  - at: expiry
    pay: max(mean_level, 1) if side == 'call' and held else low
---
contract: Harbour, lantern and quarry averaging note
currency: EUR
notional: 1000000
assets: [harbour, lantern, quarry]
start: 2026-12-01
settlement: 2 business days
calendar: {holidays: ECB, roll: modified following}
payoff: averaging_note
terms:
  initial: {harbour: 4180.2, lantern: 801.1, quarry: 62.35}
  averaging: {from: 2027-03-01, until: 2027-12-01, every: 3 months}
  barrier: [70%, 70%, 65%, 60%]
  expiry: averaging.last
  side: call
---
market: 2026-12-01
rates: {EUR: {1y: 2.1%, 3y: 2.35%}}
funding: {EUR: 80 bp}
assets:
  harbour: {spot: 4180.2, currency: EUR, yield: 2.4%, vol: {1y: 18%, 3y: 19%}}
  lantern: {spot: 801.1, currency: EUR, yield: 1%, vol: 22%}
  quarry: {spot: 62.35, currency: EUR, yield: 0%, vol: 31%}
correlation: {harbour/lantern: 65%, harbour/quarry: 40%, lantern/quarry: 50%}
"""
SLIPS = {
    "unknown key": ("notional:", "notionl:", "24:1: 'notionl' is not a key of the contract; did you mean 'notional'?"),
    "unknown term": ("  side: call", "  syde: call",
                     "35:3: 'syde' is not a key of the terms of 'averaging_note'; did you mean 'side'?"),
    "missing key": ("currency: EUR\nnot", "not", "22:1: 'currency' is missing in the contract"),
    "missing term": ("  side: call\n", "", "31:3: 'side' is missing in the terms of 'averaging_note'"),
    "repeated key": ("settlement:", "currency: USD\nsettlement:",
                     "27:1: the key 'currency' stands here a second time; the first is at line 23, column 1"),
    "repeated term": ("  side: call", "  side: call\n  side: put",
                      "36:3: the key 'side' stands here a second time; the first is at line 35, column 3"),
    "key of a later version": ("funding:", "borrow: {}\nfunding:",
                               "39:1: 'borrow' is a key of a later version and is refused rather than ignored"),
    "wrong type": ("{harbour: 4180.2, lantern", "{harbour: high, lantern", "31:22: expected a number, found 'high'"),
    "bound broken": ("60%]", "160%]", "33:28: 'barrier' must be at most 150%, found '160%'"),
    "wrong kind": ("performance: worst(spot / initial)", "performance: spot / initial",
                   "20:10: expected a number, found one number for each asset; bring them together by worst(...), "
                   "best(...), mean(...) or basket(...)"),
    "flag as a number": ("pay: max(mean_level, 1)", "pay: max(mean_level, held)",
                         "20:26: expected a number, found a flag; write '(1 if held else 0)'"),
    "attribute access": ("spot / initial)", "spot.real)",
                         "10:22: 'spot.real': names with a dot are not part of formulas"),
    "call outside the list": ("worst(spot / initial)", "eval('1')",
                              "10:16: 'eval' is not a function of formulas; expected 'min', 'max', 'abs', 'exp', "
                              "'log', 'sqrt', 'clip', 'worst', 'best', 'mean', 'basket', 'ranked', 'any', 'all', "
                              "'of', 'previous' or 'given'"),
    "comprehension": ("worst(spot / initial)", "worst(x for x in spot)",
                      "10:24: a formula has no loops; operations go over all assets by themselves"),
    "huge power": ("worst(spot / initial)", "worst(spot / initial) ** 9 ** 99", "10:46: the power is beyond 64"),
    "cut at a comma": ("{average: performance,", "{average: min(performance, 1),",
                       "12:25: a formula inside { } was cut at its comma; quote it: mean_level: {average: "
                       "'min(performance, 1)', at: averaging}"),
    "bare conditional": ("pay: max(mean_level, 1)", "pay: 1 + mean_level",
                         "20:10: a conditional beside an operator needs brackets; write '(1 + mean_level) if side == "
                         "'call' and held else low' or '1 + (mean_level if side == 'call' and held else low)'"),
    "read before its first date": (
        "expiry: averaging.last", "expiry: 2027-02-01",
        "32:14: 'mean_level' is read on 2027-02-01 (FILE:20:14), but begins on 2027-03-01"),
    "observed after the last reading": (
        "expiry: averaging.last", "expiry: 2027-09-01",
        "32:14: 'low' is observed until 2027-12-01, but read for the last time on 2027-09-01 (FILE:20:61); expected no "
        "date of 'averaging' after that",
        "32:14: 'mean_level' is observed until 2027-12-01, but read for the last time on 2027-09-01 (FILE:20:14); "
        "expected no date of 'averaging' after that"),
    "dates in disorder": ("{from: 2027-03-01, until: 2027-12-01, every: 3 months}",
                          "[2027-03-01, 2027-09-01, 2027-06-01, 2027-12-01]",
                          "32:39: 2027-06-01 is listed after 2027-09-01; dates are listed in order, each once"),
    "date before the valuation date": (
        "market: 2026-12-01", "market: 2027-03-02",
        "37:9: 'Harbour, lantern and quarry averaging note' needs a fixing of 'harbour' on 2027-03-01",
        "37:9: 'Harbour, lantern and quarry averaging note' needs a fixing of 'lantern' on 2027-03-01",
        "37:9: 'Harbour, lantern and quarry averaging note' needs a fixing of 'quarry' on 2027-03-01"),
    "date before the start": ("start: 2026-12-01", "start: 2027-03-02",
                              "32:14: 2027-03-01 lies before the contract's start 2027-03-02"),
    "rule that misses its end": ("until: 2027-12-01", "until: 2027-12-08",
                                 "32:40: the steps do not end on 2027-12-08: they give 2027-03-01, 2027-06-01, "
                                 "2027-09-01, 2027-12-01, 2028-03-01"),
    "empty schedule": ("{from: 2027-03-01, until: 2027-12-01, every: 3 months}", "[]",
                       "32:14: expected one date or more, found a list; the list is empty"),
    "list of the wrong length": ("[70%, 70%, 65%, 60%]", "[70%, 65%, 60%]",
                                 "33:12: 'barrier' has 3 numbers; 'averaging' has 4 dates, 2027-03-01 to 2027-12-01"),
    "asset not in the market": (
        "[harbour, lantern, quarry]", "[harbour, lantern, quary]",
        "25:28: the market has no asset 'quary'; did you mean 'quarry'?",
        "31:46: 'quarry' is not a key of 'initial', which goes by asset; did you mean 'quary'?"),
    "currency not in the market": (
        "currency: EUR\nnot", "currency: CHF\nnot",
        "23:11: the market has no rates for 'CHF'; it has 'EUR'",
        "39:10: no funding spread for 'CHF', the currency of the note 'Harbour, lantern and quarry averaging note'; "
        "write 'funding: {CHF: 0 bp}' to value it without the issuer's spread",
        *(f"{line}:3: '{name}' is quoted in EUR, but 'Harbour, lantern and quarry averaging note' pays in CHF; write "
          f"in the contract 'conversion: {{{name}: quanto}}' (paid at a fixed rate) or '{{{name}: composite}}' "
          "(converted at the rate of the day)"
          for line, name in ((41, "harbour"), (42, "lantern"), (43, "quarry")))),
    "falling total variance": ("3y: 19%", "3y: 10%",
                               "41:74: total variance falls from 0.0324 at '1y' to 0.0300274 at '3y'; a vol of "
                               "10.3876% is the least that '3y' can have"),
    "correlation out of range": ("65%, harbour/q", "165%, harbour/q",
                                 "44:32: expected a correlation from -100% to 100%, found '165%'"),
    "no correlation": (", lantern/quarry: 50%", "",
                       "44:14: no correlation for 'lantern/quarry'; write 'lantern/quarry: NUMBER%' under "
                       "'correlation'"),
    "negative vol": ("vol: 22%", "vol: -22%", "42:57: expected a vol above 0% and up to 300%, found '-22%'"),
    "negative spot": ("spot: 801.1", "spot: -801.1", "42:19: expected an amount above 0, found '-801.1'"),
    "not finite": ("spot: 801.1", "spot: .nan", "42:19: expected a finite number, found '.nan'"),
    "too large to be finite": ("spot: 801.1", "spot: 1e999",
                               "42:19: expected a finite number, found '1e999'; it is too large"),
    "vol in percent twice": ("vol: 22%", "vol: 1800%",
                             "42:57: expected a vol above 0% and up to 300%, found '1800%'; is the unit right?"),
    "barrier without a percent sign": ("[70%, 70%, 65%, 60%]", "70",
                                       "33:12: expected a percentage with its unit, found '70'; write '70%'"),
    "barrier as a fraction": ("[70%, 70%, 65%, 60%]", "0.7",
                              "33:12: expected a percentage with its unit, found '0.7'; write '70%' or '0.7%'"),
    "holidays of nobody": ("ECB", "ECBB", "28:22: there are no holidays 'ECBB'; did you mean 'ECB'?"),
    "payoff of nobody": ("\npayoff: averaging_note", "\npayoff: averagin_note",
                         "29:9: there is no payoff 'averagin_note'; did you mean 'averaging_note'?"),
}


def slipped(*slips: str) -> str:
    """The documents with these slips made."""
    text = NOTE
    for name in slips:
        old, new, *_ = SLIPS[name]
        assert NOTE.count(old) == 1, old
        text = text.replace(old, new)
    return text


def told(folder: Path, text: str) -> list[str]:
    """The faults of a document, without the file's name."""
    file = written(folder, text)
    outcome = mcx("price", file, "--paths", 64)
    refused(outcome)
    assert sorted(folder.iterdir()) == [file]
    lines = outcome.err.splitlines()
    assert all(line.startswith(f"{file}:") for line in lines), outcome.err
    return [line.removeprefix(f"{file}:").replace(str(file), "FILE") for line in lines]


def test_the_documents_without_slips(tmp_path: Path):
    """What the slips are made in is right."""
    assert mcx("price", written(tmp_path, NOTE), "--paths", 64).code == 0


@pytest.mark.parametrize("slip", SLIPS)
def test_slips(tmp_path: Path, slip: str):
    """Each slip gives its own fault at its place, and no other."""
    assert told(tmp_path, slipped(slip)) == list(SLIPS[slip][2:])


TOGETHER = ("unknown key", "unknown term", "bound broken", "huge power", "cut at a comma", "holidays of nobody",
            "falling total variance", "negative spot")


def test_all_slips_at_once(tmp_path: Path):
    """Slips in all documents are told in one round, in the order of the file."""
    assert told(tmp_path, slipped(*TOGETHER)) == sorted(
        (SLIPS[name][2] for name in TOGETHER), key=lambda line: [int(part) for part in line.split(":")[:2]])


def test_slips_that_only_dates_and_markets_show_come_at_once_too(tmp_path: Path):
    """What documents say of each other, and what dates say, waits for no second round."""
    text = slipped("list of the wrong length", "vol in percent twice", "no correlation")
    assert [line.split(": ")[0] for line in told(tmp_path, text)] == ["33:12", "42:57", "44:14"]


def test_watches_that_are_refused_beside_other_slips(tmp_path: Path):
    """That a continuous watch of several assets is for a later version is said in the same round, too."""
    watched = NOTE.replace("low: {lowest: performance, at: averaging}",
                           "low: {lowest: performance, at: {continuous: [averaging.first, averaging.last]}}")
    refusal = "13:3: several assets watched at once: this needs their joint law, which a later version brings"
    assert told(tmp_path, watched) == [refusal]
    old, new, fault = SLIPS["negative vol"]
    assert told(tmp_path, watched.replace(old, new)) == [refusal, fault]


def test_a_matrix_that_cannot_be(tmp_path: Path):
    """The message gives the nearest correlation matrix, which is then taken as it is."""
    text = NOTE.replace("quarry: 40%", "quarry: -90%")
    (fault,) = told(tmp_path, text)
    assert fault.startswith("44:14: no assets can be correlated like this (the smallest eigenvalue of the matrix is -")
    nearest = fault.split("the nearest correlations that can be: ")[1]
    head = text[: text.index("correlation:")]
    assert mcx("price", written(tmp_path, f"{head}correlation: {{{nearest}}}\n"), "--paths", 64).code == 0


def test_the_corrected_line_is_right(tmp_path: Path):
    """The line that is printed for a formula cut at a comma is what the document should say."""
    (fault,) = told(tmp_path, slipped("cut at a comma"))
    lines = slipped("cut at a comma").splitlines(keepends=True)
    lines[11] = f"  {fault.split('quote it: ')[1]}\n"
    assert mcx("price", written(tmp_path, "".join(lines)), "--paths", 64).code == 0


BOMB = "a0: &a0 [x, x, x, x, x, x, x, x, x, x]\n" + "".join(
    f"a{k}: &a{k} [{', '.join(10 * [f'*a{k - 1}'])}]\n" for k in range(1, 10))
UNREADABLE = {
    "aliases that multiply": (BOMB.encode(), "5:45: with '*a3' expanded the file holds more than 100,000 values"),
    "10 MB": (b"contract: x\n#" + 10_000_000 * b"a",
              "1:1: the input has 10,000,013 bytes; at most 1,048,576 bytes (1 MiB) are read"),
    "nesting in brackets": (b"contract: " + 1000 * b"[" + 1000 * b"]", "1:60: values are nested deeper than 50 levels"),
    "nesting by indent": ("\n".join(f"{k * ' '}a:" for k in range(1000)).encode(),
                          "51:51: values are nested deeper than 50 levels"),
    "binary": (bytes(range(256)), "3:115: byte 0x80 at offset 128 is not UTF-8; expected a text file in UTF-8"),
    "compressed": (b"\x1f\x8b\x08\x00", "1:2: byte 0x8b at offset 1 is not UTF-8; expected a text file in UTF-8"),
    "zero bytes": (b"contract: x\0\n", "1:12: the character U+0000 is not allowed in a document; is this a text file?"),
    "Latin-1": ("contract: Gr\u00fcn".encode("latin-1"),
                "1:13: byte 0xfc at offset 12 is not UTF-8; expected a text file in UTF-8"),
    "UTF-16": ("contract: x".encode("utf-16"), "1:1: the file is UTF-16 or UTF-32; expected UTF-8"),
    "empty": (b"", "1:1: the file is empty; expected a payoff, contract, market or quote"),
    "no YAML": (b"contract: 'x", "1:11: the quote that opens here is never closed"),
}


@pytest.mark.parametrize("case", UNREADABLE)
def test_files_that_cannot_be_read(tmp_path: Path, case: str):
    """A file that cannot be read gives that one fault: nothing is said of what it may hold, or lack."""
    data, fault = UNREADABLE[case]
    file = tmp_path / "case.yaml"
    file.write_bytes(data)
    outcome = mcx("price", file)
    refused(outcome)
    assert outcome.err == f"{file}:{fault}\n"


def test_what_is_missing_in_files_that_can_be_read(tmp_path: Path):
    """Where every file was read, a missing contract or market is said, beside the faults of the others."""
    contract, market = NOTE.split("---\n")[1:]
    assert [line.split(";")[0] for line in told(tmp_path, market)] == ["1:1: no contract in FILE"]
    own, rest = NOTE.split("---\n", 1)
    found = told(tmp_path, own + "---\n" + contract.replace("side: call", "side: cal"))
    assert [line.split(";")[0] for line in found] == [
        "1:1: no market in FILE", "35:9: expected 'side' to be: 'call' or 'put', found 'cal'"]


def test_a_payoff_that_turns_non_finite(tmp_path: Path):
    """A path on which a payoff is no finite number stops the run and is named, so that it can be replayed."""
    text = NOTE.replace("held else low", "held else log(low - 1)")
    outcome = mcx("price", written(tmp_path, text), "--paths", 4096, "--seed", 7)
    refused(outcome, "is not a finite number on path ", "(seed 7, stream ")
    path = outcome.err.split("on path ")[1].split()[0]
    again = mcx("price", written(tmp_path, text), "--paths", int(path) + 1, "--seed", 7)
    refused(again, f"on path {path} (seed 7")
    if int(path):
        assert mcx("price", written(tmp_path, text), "--paths", path, "--seed", 7).code == 0
