"""What can be read on which date: running values before they begin, after the end, in file order; counts; terms that
count."""

from __future__ import annotations

from datetime import date

import pytest
from dated_contracts import CONTRACT, HEAD, dated, places

MEAN = "running:\n  mean_level: {average: spot, at: observations}\n"


def test_running_value_read_before_its_first_date():
    """Reading before anything was observed is a fault of the dates that the contract gives."""
    terms, events = "  early: {type: date}\n", "  - at: early\n    pay: mean_level / 100\n"
    events += "  - at: observations.last\n    pay: mean_level\n"
    _, faults = dated(terms=terms, parts=MEAN, events=events, more="  early: 2027-01-15\n")
    assert faults == ["'mean_level' is read on 2027-01-15 (n.yaml:9:10), but begins on 2027-02-16"]
    assert dated(terms=terms, parts=MEAN, events=events, more="  early: 2027-02-16\n")[1] == []
    started = MEAN.replace("at: observations", "at: observations, start: 100")
    assert dated(terms=terms, parts=started, events=events, more="  early: 2027-01-15\n")[1] == []


def test_what_the_terms_rule_out_is_not_read():
    """A branch that a choice, a flag or the number of the date settles is as if it were not written."""
    terms = "  early: {type: date}\n  averaged: {type: flag}\n"
    read = "    pay: (mean_level / 100) if averaged else 1\n"
    for flag, count in (("true", 1), ("false", 0)):
        _, faults = dated(terms=terms, parts=MEAN, events=f"  - at: early\n{read}",
                          more=f"  early: 2027-01-15\n  averaged: {flag}\n")
        assert len(faults) == count
    _, faults = dated(parts="running:\n  gain: {total: 1 if nth == 1 else gain_before, at: observations}\n"
                            "  gain_before: {latest: spot, at: observations}\n",
                      events="  - at: observations.last\n    pay: gain\n")
    assert faults == []


def test_running_values_see_those_above_them():
    """On one day a running value sees those above it in the file, not yet those below it."""
    above = "  one: {total: 1, at: observations}\n  two: {total: one, at: observations}\n"
    below = "  two: {total: one, at: observations}\n  one: {total: 1, at: observations}\n"
    pays = "  - at: observations.last\n    pay: two\n"
    assert dated(parts=f"running:\n{above}", events=pays)[1] == []
    (fault,) = dated(parts=f"running:\n{below}", events=pays)[1]
    assert fault.startswith("'one' is read on 2027-02-16 (")


def test_watches_are_seen_in_file_order_too():
    """On its first day a continuous watch is seen by the running values below it and by events, not by
    those above."""
    watch = "  low: {lowest: spot, at: {continuous: [observations.first, observations.last]}}\n"
    total = "  sum_of_lows: {total: low, at: observations}\n"
    pays = "  - at: observations.last\n    pay: sum_of_lows\n"
    assert dated(parts=f"running:\n{watch}{total}", events=pays)[1] == []
    (fault,) = dated(parts=f"running:\n{total}{watch}", events=pays)[1]
    assert fault.startswith("'low' is read on 2027-02-16 (")
    assert dated(parts=f"running:\n{watch}", events="  - at: observations.first\n    pay: low\n")[1] == []


def test_previous_reads_the_date_before():
    """What `previous` asks for must have had its value on the date before."""
    read = "  - at: observations\n    pay: previous(mean_level, 0)\n"
    assert dated(parts=MEAN, events=read)[1] == []
    (fault,) = dated(parts=MEAN.replace("at: observations", "at: observations.but_first"), events=read)[1]
    assert "'mean_level' is read on 2027-02-16" in fault


def test_after_the_end_nothing_is_read():
    """What stands after an unconditional end never happens and needs no values."""
    ends = "  - at: observations.first\n    end:\n"
    later = MEAN.replace("observations", "observations.last")
    reads = "  - at: observations.but_last\n    pay: mean_level\n"
    assert dated(parts=later, events=ends + reads)[1] == []
    assert len(dated(parts=later, events=reads)[1]) == 1


def test_running_values_that_nothing_reads_are_left_out():
    """A running value that no payment depends on is not observed at all, so it cannot be at fault either."""
    parts = ("running:\n  unread: {total: mean_level, at: observations.first}\n  mean_level: {average: spot, "
             "at: late}\n"
             "  count: {total: 1, at: observations}\n")
    found, faults = dated(terms="  late: {type: date}\n", parts=parts,
                          events="  - at: observations.last\n    pay: count\n", more="  late: 2027-12-01\n")
    assert faults == []
    assert {update.running.name for moment in found.moments for update in moment.updates} == {"count"}
    assert found.last.date == date(2027, 11, 16)


FINAL = "  final: {type: date}\n"
PAID_ON_FINAL = "  - at: final\n    pay: (mean_level / 100) if spot > 1 else 1\n"


@pytest.mark.parametrize(("parts", "terms", "more", "place", "fault"), [
    (MEAN, "", "", "21:17",
     "'mean_level' is observed until 2027-11-16, but read for the last time on 2027-06-16 (n.yaml:9:11); expected no "
     "date of 'observations' after that"),
    (MEAN.replace("at: observations", "at: fixings"), "  fixings: {type: dates}\n",
     "  fixings: [2027-01-15, 2027-06-16, 2027-06-17]\n", "24:37",
     "'mean_level' is observed until 2027-06-17, but read for the last time on 2027-06-16 (n.yaml:10:11); expected no "
     "date of 'fixings' after that"),
    (MEAN.replace("average: spot, at: observations", "lowest: spot, at: watched"), "  watched: {type: watch}\n",
     "  watched: {continuous: [2026-12-01, observations.last]}\n", "24:38",
     "'mean_level' is observed until 2027-11-16, but read for the last time on 2027-06-16 (n.yaml:10:11); expected no "
     "date of 'watched' after that"),
    (MEAN.replace("average: spot, at: observations",
                  "lowest: spot, at: {continuous: [observations.first, observations.last]}"), "", "", "21:17",
     "'mean_level' is observed until 2027-11-16, but read for the last time on 2027-06-16 (n.yaml:9:11); expected no "
     "date of 'observations' after that"),
])
def test_observations_after_the_last_reading(parts: str, terms: str, more: str, place: str, fault: str):
    """An average or a watch that the contract lets run past the payment is refused at its last date."""
    text = f"{HEAD}{FINAL}{terms}{parts}events:\n{PAID_ON_FINAL}---\n{CONTRACT}  final: 2027-06-16\n{more}"
    more = f"  final: 2027-06-16\n{more}"
    assert dated(terms=FINAL + terms, parts=parts, events=PAID_ON_FINAL, more=more)[1] == [fault]
    assert places(text) == [place]


def test_what_is_read_to_the_end_may_be_observed_to_the_end():
    """A value read on the last day of its observation, by a payment or through another value, is no fault; nor is one
    that the definition reads on some dates only of its own schedule."""
    pays = "  - at: observations.last\n    pay: mean_level\n"
    assert dated(parts=MEAN, events=pays)[1] == []
    assert dated(parts=MEAN, events=pays.replace("last", "but_last"))[1] == []
    through = MEAN + "  top: {highest: mean_level, at: observations}\n"
    assert dated(parts=through, events=pays.replace("pay: mean_level", "pay: top"))[1] == []
    late = "  - at: final\n    pay: mean_level\n"
    assert dated(terms=FINAL, parts=MEAN, events=late, more="  final: 2027-12-16\n")[1] == []


COUNTED = """\
running:
  seen: {start: 0}
"""
COUNTS = """\
  - at: days
    set: {seen: seen + 1}
  - at: observations
    pay: 1 / seen
  - at: observations
    set: {seen: 0}
"""
DAYS = "  days: {type: dates}\n"


def test_a_period_without_any_day():
    """What would divide by 0 whatever happens is refused, at each of the dates that let nothing be counted."""
    days = "  days: [2027-01-15, 2027-03-01, 2027-03-02]\n"
    _, faults = dated(terms=DAYS, parts=COUNTED, events=COUNTS, more=days)
    assert faults == ["on 2027-08-16 a formula divides by 'seen', which is 0 then (n.yaml:11:14)",
                      "on 2027-11-16 a formula divides by 'seen', which is 0 then (n.yaml:11:14)"]
    assert dated(terms=DAYS, parts=COUNTED, events=COUNTS, more=days.replace("]", ", 2027-08-16, 2027-11-16]"))[1] == []
    listed = CONTRACT.replace("{from: 2027-02-16, until: 2027-11-16, every: 3 months}", "[2027-02-16, 2027-05-17]")
    text = f"{HEAD}{DAYS}{COUNTED}events:\n{COUNTS}---\n{listed}  days: [2027-02-16]\n"
    assert places(text) == ["25:30"]


def test_a_count_that_hangs_on_the_path_is_not_judged():
    """Where the levels decide whether a day counts, only the paths can tell whether a division is possible."""
    counts = COUNTS.replace("seen + 1", "seen + (1 if spot > 90 else 0)")
    days = "  days: [2027-01-15]\n"
    assert len(dated(terms=DAYS, parts=COUNTED, events=counts, more=days)[1]) == 3
    sometimes = counts.replace("  - at: observations\n    set: {seen: 0}",
                               "  - at: observations\n    if: spot > 90\n    then: [set: {seen: 0}]")
    assert dated(terms=DAYS, parts=COUNTED, events=sometimes, more=days)[1] == []
    guarded = COUNTS.replace("pay: 1 / seen", "pay: (1 / seen) if seen > 0 else 0")
    assert dated(terms=DAYS, parts=COUNTED, events=guarded, more=days)[1] == []
    total = "running:\n  seen: {total: 1 if nth > 2 else 0, at: observations}\n"
    divides = "  - at: observations.but_first\n    pay: 1 / seen\n"
    assert dated(parts=total, events=divides)[1] == [
        "on 2027-05-17 a formula divides by 'seen', which is 0 then (n.yaml:8:14)"]


OPTIONAL = "  cap: {type: percent, optional: true}\n  capped: {type: flag}\n"
CAPPED = "  - at: observations\n    pay: min(spot / 100, cap) if capped else (spot / 100)\n"


def test_optional_terms_that_count_must_be_stated():
    """An optional term that is read, and not stated, is missing in the contract; `given` would ask for it."""
    _, faults = dated(terms=OPTIONAL, events=CAPPED, more="  capped: true\n")
    assert faults == ["the term 'cap' is missing: it is optional in 'own', but with these terms it is read "
                      "on 2027-02-16 (n.yaml:8:26)"]
    given = CAPPED.replace("if capped", "if given(cap)")
    assert dated(terms=OPTIONAL.splitlines()[0] + "\n", events=given)[1] == []


def test_optional_terms_that_do_not_count_are_refused():
    """An optional term that is stated but never read under these terms is a misunderstanding."""
    _, faults = dated(terms=OPTIONAL, events=CAPPED, more="  capped: false\n  cap: 120%\n")
    assert faults == ["'cap' is stated, but with these terms 'own' never reads it"]
    assert dated(terms=OPTIONAL, events=CAPPED, more="  capped: true\n  cap: 120%\n")[1] == []


def test_what_is_read_but_not_stated():
    """An optional term that counts, and a running value whose dates are not stated, are faults among the terms."""
    text = f"{HEAD}{OPTIONAL}events:\n{CAPPED}---\n{CONTRACT}  capped: true\n"
    assert places(text) == ["20:3"]
    parts = "running:\n  low: {lowest: spot, at: fixings}\n"
    terms, pays = "  fixings: {type: dates, optional: true}\n", "  - at: observations.last\n    pay: low\n"
    assert dated(terms=terms, parts=parts, events=pays)[1] == [
        "'low' is read on 2027-11-16 (n.yaml:9:10), but has no date"]
    assert places(f"{HEAD}{terms}{parts}events:\n{pays}---\n{CONTRACT}") == ["21:3"]
    found, faults = dated(terms=terms, parts=parts.replace("fixings}", "fixings, start: 90}"), events=pays)
    assert faults == [] and all(not moment.updates for moment in found.moments)


def test_a_start_reads_its_terms():
    """A term that only the start of a running value reads does count."""
    parts = "running:\n  top: {highest: spot, at: observations, start: cap}\n"
    assert dated(terms=OPTIONAL.splitlines()[0] + "\n", parts=parts,
                 events="  - at: observations.last\n    pay: top\n", more="  cap: 120%\n")[1] == []
