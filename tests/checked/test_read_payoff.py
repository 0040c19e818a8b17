"""Definitions: what a whole one becomes, and every fault of a wrong one at its place."""

from __future__ import annotations

from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from mcx.checked.formula import Binary, ChoiceIs, Formula, Name, Number, OfAsset, walk
from mcx.checked.kinds import Kind
from mcx.checked.payoff import Assign, At, Continuous, End, Pay, Payoff
from mcx.checked.read_payoff import read_payoff
from mcx.text.documents import parse_documents

WHOLE = """\
payoff: memory_note
about: A note with memory coupons.
terms:
  initial:      {type: level}
  observations: {type: dates}
  payments:     {type: dates, per: observations}
  first_call:   {type: date}
  barrier:      {type: percent, per: observations, above: 0%, at_most: 200%}
  coupon:       {type: percent, about: for one observation}
  watched:      {type: watch}
  rebate:       {type: number, optional: true, at_least: 0}
  kind:         {type: choice, of: [plain, one touch]}
  memory:       {type: flag, default: true}
  favourite:    {type: asset}
  weights:      {type: number, per: assets}
let:
  perf: worst(spot / initial)
  twice: 2 * best_so_far
running:
  best_so_far: {highest: perf, at: observations, start: 0}
  hit: {ever: perf < 60%, at: watched}
  touched: {ever: perf < 50%, at: {continuous: [first_call, observations.last]}}
  days: {total: perf > 1, at: observations}
  missed: {start: 0}
events:
  - at: observations
    from: first_call
    name: coupon paid
    if: perf >= barrier
    then:
      - pay: coupon * (1 + missed)
        as: coupon
        part: coupon
        due: payments
      - set: {missed: 0}
    else:
      - set: {missed: missed + 1}
  - at: observations.but_last
    name: called
    if: perf >= 1 and kind == 'plain'
    then:
      - pay: 1
        due: same day
      - end
  - at: observations.last
    pay: 1 + (rebate if given(rebate) else 0)
  - at: observations.last
    end:
"""


def read(text: str, assets: int | None = None) -> tuple[Payoff | None, list[str]]:
    """A definition and its faults; without the file's name, in order."""
    (document,), faults = parse_documents(text.encode(), "p.yaml")
    payoff, more = read_payoff(document, assets=assets, asset_names=("harbour", "lantern", "quarry")[: assets or 0])
    return payoff, [str(fault).removeprefix("p.yaml:") for fault in sorted({*faults, *more})]


def faults_of(old: str, new: str, assets: int | None = None) -> list[str]:
    """The faults of the whole definition with one text put in place of another."""
    assert WHOLE.count(old) == 1, old
    return read(WHOLE.replace(old, new), assets)[1]


def small(terms: str = "", rest: str = "", events: str = "  - at: expiry\n    pay: 1\n") -> str:
    """A definition around a few lines."""
    return f"payoff: p\nterms:\n  expiry: {{type: date}}\n{terms}{rest}events:\n{events}"


# What is read


def test_a_whole_definition():
    """Terms, names, running values and events come out as they were written, with kinds and places."""
    payoff, faults = read(WHOLE)
    assert faults == []
    assert (payoff.name, payoff.about, payoff.assets) == ("memory_note", "A note with memory coupons.", (1, None))
    assert str(payoff.place) == "p.yaml:1:9"
    barrier, rebate, kind = (payoff.term(name) for name in ("barrier", "rebate", "kind"))
    assert (barrier.type, barrier.per, barrier.above, barrier.at_most) == ("percent", "observations", 0.0, 2.0)
    assert (rebate.optional, rebate.at_least, rebate.default) == (True, 0.0, None)
    assert kind.choices == ("plain", "one touch")
    assert payoff.term("memory").default.text == "true"
    assert payoff.term("payments").per == "observations"
    assert [let.name for let in payoff.lets] == ["perf", "twice"]
    assert [(one.name, one.how) for one in payoff.running] == [
        ("best_so_far", "highest"), ("hit", "ever"), ("touched", "ever"), ("days", "total"), ("missed", "set")]
    best, hit, touched, _, missed = payoff.running
    assert best.at == At("observations", best.at.place) and isinstance(best.start, Number)
    assert hit.formula.kind is Kind.FLAG
    assert isinstance(touched.at, Continuous)
    assert (touched.at.start.name, touched.at.end.name, touched.at.end.part) == ("first_call", "observations", "last")
    assert missed.formula is None and missed.at is None and missed.start == Number(0.0, missed.start.place)


def test_events_and_their_actions():
    """Events keep dates, condition, actions and legs; a bare action is an event without condition."""
    payoff, _ = read(WHOLE)
    coupon, called, redemption, last = payoff.events
    assert (coupon.at.name, coupon.at.part, coupon.since, coupon.until, coupon.name) == (
        "observations", "", "first_call", "", "coupon paid")
    pay, reset = coupon.then
    assert isinstance(pay, Pay) and (pay.leg, pay.part, pay.due) == ("coupon", "coupon", "payments")
    assert isinstance(reset, Assign) and [name for name, _ in reset.values] == ["missed"]
    assert isinstance(coupon.otherwise[0].values[0][1], Binary)
    assert isinstance(called.condition, Binary)
    assert isinstance(called.then[1], End) and called.then[0].due == "same day"
    assert redemption.condition is None and isinstance(redemption.then[0], Pay)
    assert redemption.then[0].leg == "payment"
    assert isinstance(last.then[0], End)


def test_kinds_depend_on_the_number_of_assets():
    """A level is one number for each asset, a plain number with a single one: then it may be paid as it is."""
    text = small("  strike: {type: level}\n", events="  - at: expiry\n    pay: max(spot - strike, 0)\n")
    for assets in (None, 1):
        assert read(text, assets)[1] == []
    assert read(text, 2)[1] == ["7:10: expected a number, found one number for each asset; bring them together by "
                                "worst(...), best(...), mean(...) or basket(...)"]


def test_a_definition_for_several_assets_is_read_with_several():
    """By itself a definition for two assets or more is not read as for one."""
    text = small(rest="assets: 2 or more\n", events="  - at: expiry\n    pay: spot\n")
    payoff, faults = read(text)
    assert payoff is None and "found one number for each asset" in faults[0]
    assert read(text.replace("pay: spot", "pay: best(spot)"))[0].assets == (2, None)
    assert read(text.replace("2 or more", "1"))[0].assets == (1, 1)


def test_a_wrong_number_of_assets_is_not_a_fault_of_the_definition():
    """A contract with two assets for a definition of one is at fault itself; the definition still reads."""
    payoff, faults = read(small(rest="assets: 1\n", events="  - at: expiry\n    pay: spot\n"), 2)
    assert faults == [] and payoff.assets == (1, 1)


def test_names_may_stand_in_any_order():
    """let names and running values may use each other, above or below."""
    payoff, faults = read(small("  fixings: {type: dates}\n", """\
let:
  gain: total_return - 1
  step: spot / previous(spot, spot)
running:
  total_return: {product: step, at: fixings}
""", "  - at: expiry\n    pay: gain\n"))
    assert faults == []
    assert payoff.lets[0].formula.kind is Kind.NUMBER


def test_a_value_set_for_each_asset_is_one_for_each_asset():
    """A running value that starts as a plain number and is set to one for each asset is one for each asset."""
    text = small("  fixings: {type: dates}\n", "running:\n  seen: {start: 0}\n", """\
  - at: fixings
    set: {seen: "max(seen, spot)"}
  - at: expiry
    pay: worst(seen)
""")
    payoff, faults = read(text, 2)
    assert faults == []
    assert payoff.events[1].then[0].amount.arguments[0].kind is Kind.NUMBERS
    assert read(text.replace("worst(seen)", "seen"), 2)[1] == [
        "11:10: expected a number, found one number for each asset; bring them together by worst(...), best(...), "
        "mean(...) or basket(...)"]


def test_of_knows_the_contracts_assets():
    """of(x, asset) takes any name until the contract is known, then only its assets."""
    text = small(events="  - at: expiry\n    pay: of(spot, lantern)\n")
    assert read(text)[1] == []
    assert read(text, 2)[1] == []
    assert read(text.replace("lantern", "quarry"), 2)[1] == [
        "6:19: 'quarry' is not an asset; expected 'harbour' or 'lantern'"]


# What is refused


@pytest.mark.parametrize(
    ("old", "new", "fault"),
    [
        ("about: A", "abuot: A", "2:1: 'abuot' is not a key of the payoff; did you mean 'about'?"),
        ("about: A", "pays: money\nabout: A", "2:7: expected what its amounts are: 'money per unit' or 'multiples of the "
                                             "notional', found 'money'"),
        ("payoff: memory_note", "payoff: Memory Note",
         "1:9: expected a name of lower-case letters, digits and '_', found 'Memory Note'"),
        ("{type: level}", "{typ: level}", "4:18: 'typ' is not a key of the term 'initial'; did you mean 'type'?"),
        ("{type: level}", "{about: x}", "4:17: 'type' is missing in the term 'initial'"),
        ("{type: level}", "level", "4:17: expected the type of the term, as 'initial: {type: level}', found 'level'"),
        ("{type: level}", "{type: levle}",
         "4:24: expected a type: 'number', 'percent', 'level', 'date', 'dates', 'watch', 'choice', 'flag' or 'asset', "
         "found 'levle'; did you mean 'level'?"),
        ("per: observations, above", "per: observation, above",
         "8:38: 'observation' is not what a term can be 'per'; did you mean 'observations'?"),
        ("above: 0%", "above: 0.5", "8:59: expected a percentage with its unit, found '0.5'; write '50%' or '0.5%'"),
        ("above: 0%", "above: 300%", "8:17: no number keeps these bounds"),
        ("above: 0%", "above: 0%, at_least: 1%", "8:63: 'at_least' and 'above' bound the same side; keep one"),
        ("{type: watch}", "{type: watch, above: 1}", "10:31: 'above' does not go with the type 'watch'"),
        ("at_least: 0}", "at_least: .inf}", "11:58: expected a finite number, found '.inf'"),
        ("at_least: 0}", "default: 3}", "11:48: the term 'rebate' is optional and has a default; keep one of the two"),
        ("optional: true", "optional: yes", "11:42: expected true or false, found 'yes'; write true"),
        ("of: [plain, one touch]", "of: [plain, plain]", "12:44: the word 'plain' stands twice"),
        (", of: [plain, one touch]", "", "12:17: 'of' is missing in the term 'kind': the list of its words"),
        ("default: true", "default: maybe", "13:39: expected true or false, found 'maybe'"),
        ("{type: asset}", "{type: asset, default: harbour}",
         "14:40: an asset has no default: every contract names its own"),
        ("twice: 2", "worst: 2", "18:3: 'worst' is a word of the grammar; take another name"),
        ("twice: 2", "barrier: 2", "18:3: 'barrier' is a term already, at line 8"),
        ("twice: 2 * best_so_far", "twice: twice + 1", "18:3: 'twice' is said through itself"),
        ("twice: 2", "lambda: 2",
         "18:3: expected a name of letters, digits and '_' that is no word of Python, found 'lambda'"),
        ("highest: perf", "higest: perf",
         "20:17: 'higest' is not a key of the running value 'best_so_far'; did you mean 'highest'?"),
        ("at: observations, start: 0", "start: 0",
         "20:16: 'at' is missing in the running value 'best_so_far': when it is observed"),
        ("at: observations, start: 0", "lowest: 1, at: observations",
         "20:32: 'lowest' is a second rule beside 'highest'; keep one"),
        ("start: 0}\n  hit", "start: spot}\n  hit",
         "20:57: 'spot' has no value in a 'start', which may use numbers and terms only"),
        ("start: 0}\n  hit", "start: true}\n  hit", "20:57: expected a number under 'start', found a flag"),
        ("at: watched", "at: watched.last", "21:31: 'watched' is of type 'watch' and has no parts; leave out '.last'"),
        ("at: watched", "at: {once: hit}",
         "21:32: 'once', the moment of a hit, is of a later version and is refused rather than ignored"),
        ("perf < 60%", "perf", "21:15: 'ever' asks about a flag, such as a comparison, found a number"),
        ("highest: perf", "highest: perf > 1",
         "20:26: expected a number under 'highest', found a flag; write (1 if ... else 0)"),
        ("[first_call, observations.last]", "[first_call, observations]",
         "22:61: 'observations' has several dates; expected one, as 'observations.first' or 'observations.last'"),
        ("[first_call, observations.last]", "[first_call]",
         "22:48: expected two dates, as 'continuous: [from, until]', found a list"),
        ("total: perf > 1, at: observations", "total: 1, at: {continuous: [first_call, first_call]}",
         "23:24: expected a date or dates term, as 'expiry' or 'observations.last', found a mapping; only 'lowest', "
         "'highest', 'ever' and 'always' can be watched continuously"),
        ("missed: {start: 0}", "missed: {at: observations}",
         "24:11: the running value 'missed' needs one of 'average', 'total', 'product', 'lowest', 'highest', 'ever', "
         "'always' or 'latest' with 'at', or a 'start' alone"),
        ("at: observations\n    from", "at: observation\n    from",
         "26:9: there is no term 'observation'; did you mean 'observations'?"),
        ("at: observations\n    from", "at: watched\n    from",
         "26:9: 'watched' may be watched continuously; an event happens at a date or dates term"),
        ("at: observations\n    from", "at: coupon\n    from",
         "26:9: 'coupon' is a term of type 'percent', not dates; expected 'observations', 'payments' or 'first_call'"),
        ("from: first_call", "from: observations",
         "27:11: expected a term of type 'date' behind 'from', found 'observations'"),
        ("if: perf >= barrier", "if: perf", "29:9: expected a flag, such as a comparison, found a number"),
        ("pay: coupon * (1 + missed)", "pay: perf > 1", "31:14: expected a number, found a flag"),
        ("part: coupon", "part: coupn",
         "33:15: expected a part: 'bond', 'coupon' or 'option', found 'coupn'; did you mean 'coupon'?"),
        ("due: payments", "due: observations",
         "34:14: expected a date term, a 'dates' term that is 'per' a schedule, or 'same day', found 'observations'; "
         "'observations' is not 'per' a schedule, so it does not say which of its dates is meant"),
        ("set: {missed: 0}", "set: {misse: 0}",
         "35:15: there is no running value 'misse'; did you mean 'missed'?"),
        ("set: {missed: 0}", "set: {days: 0}",
         "35:15: 'days' cannot be set; 'set' changes running values that have a 'start' only"),
        ("set: {missed: 0}", "set: {missed: true}", "35:23: 'missed' starts as a number and cannot be set to a flag"),
        ("set: {missed: 0}", "set: {}", "35:14: expected one running value or more, found a mapping; the mapping is empty"),
        ("observations.but_last", "observations.butlast",
         "38:9: '.butlast' is no part of a schedule; did you mean 'but_last'?"),
        ("kind == 'plain'", "kind == 'plan'", "40:31: 'plan' is no word of the choice 'kind'; did you mean 'plain'?"),
        ("      - end\n", "      - end\n      - pay: 1\n", "45:9: nothing happens after 'end' in the same list"),
        ("      - end\n", "      - stop\n",
         "44:9: expected an action: 'pay: FORMULA', 'set: {NAME: FORMULA}' or 'end', found 'stop'"),
        ("    end:\n", "    end: now\n", "48:10: expected nothing behind 'end', found 'now'"),
        ("    end:\n", "    end:\n    pay: 1\n",
         "49:5: 'pay' is a second action beside 'end'; begin it on a line of its own, under 'then' or in its own event"),
        ("    end:\n", "    name: nothing\n",
         "47:5: nothing happens at this event: expected 'pay', 'deliver', 'set', 'end', or 'if' and 'then'"),
        ("given(rebate)", "given(coupon)",
         "46:31: 'given' asks about an optional term, and 'coupon' is not one; expected 'rebate'"),
    ],
)
def test_wrong_definitions(old, new, fault):
    """Each wrong word gives one fault, at its place, and nothing else is reported because of it."""
    assert faults_of(old, new) == [fault]


def test_if_then_and_bare_actions_do_not_mix():
    """A condition has lists of actions; a bare action has no condition."""
    assert read(small(events="  - at: expiry\n    if: spot > 1\n    pay: 1\n"))[1] == [
        "6:5: 'if' needs a 'then' with a list of actions",
        "7:5: beside 'if' an action stands in the list under 'then' or 'else', not 'pay' in the event itself"]
    assert read(small(events="  - at: expiry\n    then:\n      - pay: 1\n"))[1] == [
        "6:5: 'then' needs an 'if' in the same event"]
    assert read(small(events="  - at: expiry\n    set: {a: 1}\n    as: leg\n"))[1] == [
        "6:11: there is no running value 'a'", "7:5: 'as' goes with 'pay' and 'deliver' only"]


def test_names_that_go_round():
    """A circle of names is one fault, which says the way round."""
    text = small(rest="let:\n  a: b + 1\n  b: c + 1\n  c: a + 1\n", events="  - at: expiry\n    pay: a + b\n")
    assert read(text)[1] == ["5:3: 'a' is said through itself: from 'a' to 'b' to 'c' to 'a'"]


def test_a_formula_cut_in_braces_is_one_fault():
    """The definition is checked with the formula that was meant."""
    assert faults_of("{highest: perf, at", "{highest: max(perf, 1), at") == [
        "20:26: a formula inside { } was cut at its comma; quote it: "
        "best_so_far: {highest: 'max(perf, 1)', at: observations, start: 0}"]


def test_a_bare_conditional_in_an_event():
    """The formula's fault stands at its place in the file."""
    (fault,) = faults_of("pay: coupon * (1 + missed)", "pay: missed + 1 if memory else 0")
    assert fault == ("31:14: a conditional beside an operator needs brackets; write '(missed + 1) if memory else 0' or "
                     "'missed + (1 if memory else 0)'")


def test_all_faults_at_once():
    """One reading reports everything that is wrong, in order of place."""
    text = WHOLE
    for old, new in (("about: A", "abuot: A"), ("{type: level}", "{type: levle}"), ("perf < 60%", "prf < 60%"),
                     ("due: same day", "due: some day"), ("given(rebate)", "given(coupon)")):
        text = text.replace(old, new)
    payoff, faults = read(text)
    assert payoff is None
    assert [fault.split(": ")[0] for fault in faults] == ["2:1", "4:24", "21:15", "43:14", "46:31"]


def test_missing_keys():
    """A definition without events is none."""
    assert read("payoff: p\n")[1] == ["1:1: 'events' is missing in the payoff"]
    assert read("payoff: p\nevents: []\n")[1] == ["2:9: expected one event or more, found a list; the list is empty"]
    assert read("about: x\nevents: 3\n")[1] == [
        "1:1: 'payoff' is missing in the payoff", "2:9: expected a list of events, each beginning with '- at:', found '3'"]


def test_names_that_double_each_other_are_bounded():
    """Names written out may not grow without end: thirty doublings are refused, not expanded."""
    lines = "".join(f"  a{k}: a{k - 1} + a{k - 1}\n" for k in range(1, 30))
    (fault,) = read(small(rest=f"let:\n  a0: spot + 1\n{lines}", events="  - at: expiry\n    pay: a29\n"))[1]
    assert "with the names in it written out this formula is too large: at most 10,000 parts" in fault


def test_a_long_chain_of_names_is_bounded():
    """A hundred names on top of each other are a fault, not a recursion."""
    lines = "".join(f"  a{k}: a{k - 1} + 1\n" for k in range(1, 400))
    (fault,) = read(small(rest=f"let:\n  a0: spot\n{lines}", events="  - at: expiry\n    pay: a399\n"))[1]
    assert "100 levels are read" in fault


def test_numbers_of_parts_are_bounded():
    """A definition of thousands of terms is refused before its names are compared."""
    terms = "".join(f"  t{k}: {{type: number}}\n" for k in range(600))
    assert read(small(terms))[1] == ["3:3: the payoff has 601 terms; at most 500 are read"]


# Whatever is written


LIBRARY = sorted((Path(__file__).resolve().parents[2] / "payoffs").glob("*.yaml"))


@pytest.mark.parametrize("file", LIBRARY, ids=lambda file: file.stem)
def test_every_definition_of_the_library_is_read(file):
    """The shipped definitions are without fault for every number of assets that they take."""
    (document,), faults = parse_documents(file.read_bytes(), file.name)
    assert faults == []
    payoff, faults = read_payoff(document)
    assert faults == [] and payoff.name == file.stem
    fewest, most = payoff.assets
    for assets in range(fewest, (most or 3) + 1):
        assert read_payoff(document, assets=assets, asset_names=tuple("abc"[:assets]))[1] == []


def formulas_of(payoff: Payoff) -> list[Formula]:
    """Every formula of a definition."""
    found = [let.formula for let in payoff.lets]
    found += [formula for one in payoff.running for formula in (one.formula, one.start)]
    for event in payoff.events:
        found.append(event.condition)
        for action in (*event.then, *event.otherwise):
            found += [action.amount] if isinstance(action, Pay) else []
            found += [right for _, right in action.values] if isinstance(action, Assign) else []
    return [formula for formula in found if formula is not None]


def dates_of(payoff: Payoff) -> list[str]:
    """Every date, dates and watch term that something of a definition goes by."""
    found = [term.per for term in payoff.terms]
    for one in payoff.running:
        found += [one.at.name] if isinstance(one.at, At) else []
        found += [one.at.start.name, one.at.end.name] if isinstance(one.at, Continuous) else []
    for event in payoff.events:
        found += [event.at.name, event.since, event.until]
        found += [action.due for action in (*event.then, *event.otherwise) if isinstance(action, Pay)]
    return found


@pytest.mark.parametrize("file", LIBRARY, ids=lambda file: file.stem)
def test_every_name_of_the_library_is_explained_and_used(file):
    """Definitions say what each term is, have no default, and hold no name that nothing reads."""
    (document,), _ = parse_documents(file.read_bytes(), file.name)
    payoff, _ = read_payoff(document)
    assert payoff.about
    assert all(term.about and term.default is None for term in payoff.terms)
    read = {part.name for formula in formulas_of(payoff) for part in walk(formula) if isinstance(part, Name)}
    read |= {part.term for formula in formulas_of(payoff) for part in walk(formula) if isinstance(part, ChoiceIs)}
    read |= {part.asset for formula in formulas_of(payoff) for part in walk(formula) if isinstance(part, OfAsset)}
    names = {one.name for one in (*payoff.terms, *payoff.lets, *payoff.running)}
    assert names - read - set(dates_of(payoff)) == set()


TEXTS = [WHOLE, *(file.read_text(encoding="utf-8") for file in LIBRARY)]
ODDITIES = st.sampled_from(["", " ", ":", "{", "}", "[", "]", "- ", "'", "(", ")", ",", "\n", "\n  ", "%", "&a ", "*a", "#",
                            "!!x ", "if", "null", "true", "spot", "at", "1e999", "|", ">", "é", "\t", "?", "<<"])


@st.composite
def mutated(draw: st.DrawFn) -> str:
    """A definition with pieces cut out, doubled, moved or replaced by odd ones."""
    text = draw(st.sampled_from(TEXTS))
    for _ in range(draw(st.integers(1, 4))):
        start = draw(st.integers(0, len(text)))
        end = min(len(text), start + draw(st.sampled_from([0, 1, 2, 5, 20, 80])))
        piece = draw(st.one_of(ODDITIES, st.just(text[start:end] * 2), st.integers(0, len(text)).map(
            lambda k, text=text: text[k : k + 15])))
        text = text[:start] + piece + text[end:]
    return text


@given(mutated(), st.sampled_from([None, 1, 2]))
def test_no_mutated_definition_raises(text, assets):
    """Whatever is done to a definition, it is read or there are faults, each on a line of the file."""
    documents, faults = parse_documents(text.encode(), "p.yaml")
    for document in documents:
        payoff, more = read_payoff(document, assets=assets, asset_names=("a", "b")[: assets or 0])
        assert (payoff is None) == bool(more)
        faults += more
    lines = text.count("\n") + text.count("\r") + 1
    for fault in faults:
        assert 1 <= fault.place.line <= lines + 1 and fault.place.column >= 1
        assert "\n" not in fault.text
