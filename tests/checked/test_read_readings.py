"""Other readings of a definition: what they change, and every fault of a wrong one at its place."""

from __future__ import annotations

import pytest

from mcx.checked.contract import Contract, DayList, Stretch, Word
from mcx.checked.formula import Binary, IfElse
from mcx.checked.library import shipped, shipped_names
from mcx.checked.load import checked_request
from mcx.checked.payoff import OtherReading, Payoff
from mcx.checked.read_payoff import read_payoff
from mcx.text.documents import parse_documents

DEFINITION = """\
payoff: note
terms:
  fixings: {type: dates}
  final:   {type: date}
  watched: {type: watch}
  level:   {type: percent}
  memory:  {type: flag}
  kind:    {type: choice, of: [plain, geared]}
  cap:     {type: percent, optional: true}
let:
  perf: worst(spot)
running:
  hit: {ever: perf < level, at: watched}
  missed: {start: 0}
events:
  - at: fixings
    name: paid
    if: perf >= level
    then:
      - pay: 1
        as: coupon
      - set: {missed: 0}
  - at: fixings
    name: called
    if: perf >= 1
    then:
      - end
  - at: final
    pay: min(perf, cap) if given(cap) else 1
    as: redemption
  - at: final
    name: lost
    if: hit
    then:
      - pay: -1
readings:
"""
CONTRACT = """
---
contract: Trade
currency: EUR
notional: 100
assets: [north]
start: 2026-12-01
settlement: 2 business days
calendar: {holidays: none, roll: following}
payoff: note
terms:
  fixings: [2027-06-01, 2027-12-01]
  final: 2027-12-01
  watched: final
  level: 60%
  memory: true
  kind: plain
"""


def read(*readings: str) -> tuple[Payoff | None, list[str]]:
    """The definition with readings, each the text of a list item after its dash; and its faults."""
    text = DEFINITION + "".join("  - " + reading.replace("\n", "\n    ") + "\n" for reading in readings)
    documents, faults = parse_documents(text.encode(), "note.yaml")
    assert not faults, faults
    payoff, faults = read_payoff(documents[0])
    return payoff, [str(fault) for fault in faults]


def one(changes: str) -> OtherReading:
    """The only reading of the definition, which must be sound."""
    payoff, faults = read(f"name: other\nabout: Said otherwise.\n{changes}")
    assert not faults, faults
    return payoff.readings[0]


def contract_with(changes: str, contract: str = CONTRACT) -> Contract:
    text = DEFINITION + f"  - name: other\n    about: Said otherwise.\n    {changes}\n" + contract
    made, faults = checked_request(*parse_documents(text.encode(), "note.yaml"))
    assert not faults, faults
    return made.contracts[0]


def test_a_reading_has_a_name_and_a_sentence():
    reading = one("terms: {memory: false}")
    assert (reading.name, reading.about) == ("other", "Said otherwise.")


def test_what_is_not_restated_stays():
    payoff, _ = read("name: other\nabout: Said otherwise.\nrunning:\n  hit: {ever: perf <= level, at: watched}")
    other = payoff.readings[0].payoff
    assert payoff.running[0].formula.symbol == "<"
    assert other.running[0].formula.symbol == "<="
    assert (other.events, other.lets, other.running[1]) == (payoff.events, payoff.lets, payoff.running[1])


def test_a_let_name_gets_another_formula():
    other = one("let:\n  perf: best(spot) / 2").payoff
    assert isinstance(other.lets[0].formula, Binary)


def test_keys_of_an_event_are_restated_one_by_one():
    other = one("events:\n  paid: {if: perf > level}").payoff
    assert other.events[0].condition.symbol == ">"
    assert [action.leg for action in other.events[0].then[:1]] == ["coupon"]


def test_an_event_without_a_name_is_called_by_its_leg():
    other = one("events:\n  redemption: {pay: 2}").payoff
    assert not isinstance(other.events[2].then[0].amount, IfElse)


@pytest.mark.parametrize(("move", "order"), [
    ("paid: {after: called}", ["called", "paid", "", "lost"]),
    ("lost: {before: paid}", ["lost", "paid", "called", ""]),
    ("called: {after: redemption}", ["paid", "", "called", "lost"]),
])
def test_an_event_moves(move: str, order: list[str]):
    assert [event.name for event in one(f"events:\n  {move}").payoff.events] == order


def test_terms_of_the_contract_are_replaced():
    other = contract_with("terms: {memory: false, kind: geared, watched: fixings}").otherwise[0].contract
    assert other.terms["memory"].text == "false" and other.terms["kind"].text == "geared"
    assert other.terms["watched"].days[0].term == "fixings"
    assert isinstance(other.terms["level"], type(contract_with("terms: {memory: false}").terms["level"]))


def test_the_contract_itself_is_not_changed():
    contract = contract_with("terms: {memory: false, watched: fixings}")
    assert contract.terms["memory"].text == "true"
    assert isinstance(contract.terms["watched"], DayList) and contract.terms["watched"].days[0].term == "final"


def test_start_is_the_contracts_start():
    other = contract_with("terms:\n      watched: {continuous: [start, fixings.last]}").otherwise[0].contract
    stretch = other.terms["watched"]
    assert isinstance(stretch, Stretch)
    assert (str(stretch.start.date), stretch.end.term, stretch.end.part) == ("2026-12-01", "fixings", "last")


def test_start_is_a_term_where_there_is_one():
    definition = DEFINITION.replace("  final:   {", "  start:   {type: date}\n  final:   {")
    text = (definition + "  - name: other\n    about: Said otherwise.\n    terms: {watched: start}\n"
            + CONTRACT.replace("  final: 2027", "  start: 2027-03-01\n  final: 2027"))
    text = text.replace("  - at: final\n    pay", "  - at: start\n    pay: 0\n  - at: final\n    pay")
    made, faults = checked_request(*parse_documents(text.encode(), "note.yaml"))
    assert not faults, faults
    assert made.contracts[0].otherwise[0].contract.terms["watched"].days[0].term == "start"


def test_start_of_a_contract_of_times_is_0y():
    times = CONTRACT.replace("start: 2026-12-01\nsettlement: 2 business days\n"
                             "calendar: {holidays: none, roll: following}\n", "")
    times = times.replace("[2027-06-01, 2027-12-01]", "[0.5y, 1y]").replace("2027-12-01", "1y")
    other = contract_with("terms:\n      watched: {continuous: [start, final]}", times).otherwise[0]
    assert other.contract.terms["watched"].start.time == 0.0


def test_what_a_contract_cannot_be_read_as_is_told_and_no_fault_of_it():
    times = CONTRACT.replace("start: 2026-12-01\nsettlement: 2 business days\n"
                             "calendar: {holidays: none, roll: following}\n", "")
    times = times.replace("[2027-06-01, 2027-12-01]", "[0.5y, 1y]").replace("2027-12-01", "1y")
    daily = "terms:\n      watched: {from: start, until: final, every: 1 business day}"
    refused = contract_with(daily, times).otherwise[0]
    assert refused.contract is None
    assert "a step of business days needs calendar dates" in str(refused.faults[0])
    assert contract_with(daily).otherwise[0].contract is not None


HEAD = "name: other\nabout: Said otherwise.\n"


@pytest.mark.parametrize(("reading", "fault"), [
    ("name: other\nterms: {memory: true}", "37:5: 'about' is missing in a reading"),
    (HEAD + "term: {memory: true}", "39:5: 'term' is not a key of a reading; did you mean 'terms'?"),
    (HEAD, "37:5: the reading changes nothing: expected 'terms', 'later', 'let', 'running' or 'events'"),
    (HEAD + "terms: {}", "39:12: expected terms and their values, found a mapping; the mapping is empty"),
    (HEAD + "terms: {memori: true}", "39:13: there is no term 'memori'; did you mean 'memory'?"),
    (HEAD + "terms: {memory: 1}", "39:21: expected true or false, found '1'"),
    (HEAD + "terms: {kind: round}", "39:19: expected 'kind' to be: 'plain' or 'geared', found 'round'"),
    (HEAD + "terms: {level: 60%}",
     "39:13: 'level' is of type 'percent'; a reading changes numbers and assets in formulas"),
    (HEAD + "terms: {watched: 2027-06-01}",
     "39:22: expected 'start' or the name of another date term, found '2027-06-01'"),
    (HEAD + "terms: {watched: watched.last}", "39:22: 'watched' is said through itself"),
    (HEAD + "terms: {watched: finale}", "39:22: expected dates, a rule of dates, the name of another date term, or "
                                        "'{continuous: [from, until]}', found 'finale'; did you mean 'final'?"),
    (HEAD + "later: {memory: 1 business day}", "39:13: 'memory' is of type 'flag'; dates can fall later"),
    (HEAD + "later: {final: 1 month}", "39:20: expected a number of business days, as '1 business day', found "
                                       "'1 month'"),
    (HEAD + "terms: {final: start}\nlater: {final: 1 business day}",
     "40:13: 'final' has another value in this reading already"),
    (HEAD + "let:\n  perv: spot", "40:7: there is no 'let' name 'perv'; did you mean 'perf'?"),
    (HEAD + "let:\n  perf: spott", "40:13: there is no 'spott' here; did you mean 'spot'?"),
    (HEAD + "running:\n  hits: {start: 0}", "40:7: there is no running value 'hits'; did you mean 'hit'?"),
    (HEAD + "running:\n  hit: {start: 0}", "33:9: expected a flag, such as a comparison, found a number"),
    (HEAD + "events:\n  payd: {if: perf > 1}", "40:7: there is no event 'payd'; did you mean 'paid'?"),
    (HEAD + "events:\n  paid: {when: fixings}", "40:14: 'when' is not a key of the event 'paid' in a reading"),
    (HEAD + "events:\n  paid: {after: lots}", "40:21: there is no event 'lots'; did you mean 'lost'?"),
    (HEAD + "events:\n  paid: {after: lost, before: lost}",
     "40:27: 'before' is a second move beside 'after'; keep one"),
    (HEAD + "events:\n  paid: {pay: 2}", "40:14: beside 'if' an action stands in the list under 'then' or 'else', not "
                                        "'pay' in the event itself"),
])
def test_faults_of_a_reading(reading: str, fault: str):
    _, faults = read(reading)
    assert len(faults) == 1 and faults[0].startswith(f"note.yaml:{fault}"), faults


def test_two_readings_have_two_names():
    _, faults = read(HEAD + "terms: {memory: true}", HEAD + "terms: {memory: false}")
    assert faults == ["note.yaml:40:11: a reading 'other' stands above already"]


@pytest.mark.parametrize("name", shipped_names())
def test_shipped_readings_are_sound_for_one_asset_and_for_several(name: str):
    payoff, faults = read_payoff(shipped(name))
    assert not faults
    if payoff.assets[1] is None:
        several, faults = read_payoff(shipped(name), assets=3, asset_names=("a", "b", "c"))
        assert not faults and len(several.readings) == len(payoff.readings)


@pytest.mark.parametrize("name", ["autocall", "snowball_autocall", "reverse_convertible",
                                  "barrier_reverse_convertible", "barrier", "touch", "asian"])
def test_the_families_that_termsheets_confuse_have_readings(name: str):
    assert read_payoff(shipped(name))[0].readings


def test_words_of_a_reading_are_of_the_type_of_their_term():
    assert isinstance(contract_with("terms: {kind: geared}").otherwise[0].contract.terms["kind"], Word)
