"""Formulas: the tree and the kind of what is allowed, and a fault at its column for all the rest."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from mcx.checked.expression import CALLS, Scope, read_formula
from mcx.checked.formula import Binary, Call, ChoiceIs, Given, IfElse, Name, Number, OfAsset, Previous, Unary, walk
from mcx.checked.kinds import Kind
from mcx.faults import Place
from mcx.text.located import Scalar
from mcx.text.yaml12 import read_yaml

PLACE = Place("p.yaml", 4, 11)
NUMBERS = {"n": Kind.NUMBER, "a": Kind.NUMBER, "b": Kind.NUMBER, "k": Kind.NUMBER, "cap": Kind.NUMBER}
SCOPE = Scope(
    names=NUMBERS | {"hit": Kind.FLAG, "spot": Kind.NUMBERS, "initial": Kind.NUMBERS, "weights": Kind.NUMBERS},
    choices={"side": ("call", "put"), "touch": ("one touch", "no touch")},
    optional=("cap",),
    asset_terms=("receive",),
    asset_names=("harbour", "lantern"),
    barred={"expiry": "'expiry' is a matter of dates and has no value in a formula"},
    broken=frozenset(("spoiled",)),
)
ONE_ASSET = Scope(names=NUMBERS | {"hit": Kind.FLAG, "spot": Kind.NUMBER}, single=True)


def read(text: str, scope: Scope = SCOPE):
    """The formula of a text that must be without fault."""
    faults = []
    formula = read_formula(Scalar(text, PLACE), scope, faults)
    assert faults == [] and formula is not None
    return formula


def faults_of(text: str, scope: Scope = SCOPE) -> list[str]:
    """The faults of a text, each as 'COLUMN: WORDS' with columns from 1 within the formula."""
    faults = []
    formula = read_formula(Scalar(text, PLACE), scope, faults)
    assert formula is None and faults
    assert {fault.place.line for fault in faults} == {PLACE.line}
    return [f"{fault.place.column - PLACE.column + 1}: {fault.text}" for fault in faults]


# What is read


def test_arithmetic_follows_pythons_order():
    """Powers bind before products, products before sums; a minus sign is a part of its own."""
    tree = read("a + b * n ** 2 - -k")
    assert isinstance(tree, Binary) and tree.symbol == "-"
    assert isinstance(tree.right, Unary) and tree.right.symbol == "-"
    total = tree.left
    assert isinstance(total, Binary) and total.symbol == "+"
    assert isinstance(total.right, Binary) and total.right.symbol == "*"
    assert isinstance(total.right.right, Binary) and total.right.right.symbol == "**"


@pytest.mark.parametrize(
    ("text", "value"),
    [("70%", 0.7), ("1.9%", 0.019), ("25 bp", 0.0025), ("25bp", 0.0025), ("1.5e-3", 0.0015), (".5", 0.5), ("1.9 %", 0.019),
     ("3", 3.0)],
)
def test_numbers_with_their_units(text, value):
    """Numbers of formulas are those of values: percentages and basis points too."""
    assert read(text) == Number(value, PLACE)


def test_units_shift_no_column():
    """What stands behind a unit keeps its column, and its meaning."""
    tree = read("(70% * a + 25 bp * b) if hit else 5%")
    assert isinstance(tree, IfElse)
    assert {part.name: part.place.column - PLACE.column for part in walk(tree) if isinstance(part, Name)} == {
        "a": 7, "b": 19, "hit": 25}
    assert tree.no == Number(0.05, PLACE.right(34))


def test_true_and_false():
    """true and false are flags."""
    assert read("true") == Number(1.0, PLACE, Kind.FLAG)
    assert read("false") == Number(0.0, PLACE, Kind.FLAG)


def test_a_chained_comparison_is_an_and_of_two():
    """a < b <= k means a < b and b <= k."""
    tree = read("a < b <= k")
    assert isinstance(tree, Binary) and tree.symbol == "and" and tree.kind is Kind.FLAG
    assert (tree.left.symbol, tree.right.symbol) == ("<", "<=")
    assert tree.left.right == tree.right.left


def test_a_choice_is_compared_with_its_words():
    """Comparisons of a choice become ChoiceIs, from either side, equal or not."""
    assert read("side == 'call'") == ChoiceIs("side", "call", False, PLACE)
    assert read("'put' != side") == ChoiceIs("side", "put", True, PLACE)
    assert read('touch == "one touch"') == ChoiceIs("touch", "one touch", False, PLACE)


def test_given_of_and_previous():
    """The functions that take names give nodes of their own."""
    assert read("given(cap)") == Given("cap", PLACE)
    by_term, by_name = read("of(spot, receive)"), read("of(spot / initial, lantern)")
    assert isinstance(by_term, OfAsset) and (by_term.asset, by_term.kind) == ("receive", Kind.NUMBER)
    assert isinstance(by_name, OfAsset) and by_name.asset == "lantern"
    assert read("of(spot > initial, receive)").kind is Kind.FLAG
    tree = read("previous(spot, initial)")
    assert isinstance(tree, Previous) and tree.kind is Kind.NUMBERS


@pytest.mark.parametrize(
    ("text", "kind"),
    [
        ("a + 1", Kind.NUMBER),
        ("spot / initial", Kind.NUMBERS),
        ("a * spot", Kind.NUMBERS),
        ("spot > a", Kind.FLAGS),
        ("not spot > a", Kind.FLAGS),
        ("spot > a and hit", Kind.FLAGS),
        ("worst(spot / initial)", Kind.NUMBER),
        ("mean(spot) + best(spot)", Kind.NUMBER),
        ("basket(spot, weights)", Kind.NUMBER),
        ("ranked(spot, 2)", Kind.NUMBER),
        ("ranked(spot, n)", Kind.NUMBER),
        ("any(spot > a) or all(spot > b)", Kind.FLAG),
        ("max(a, spot, 1)", Kind.NUMBERS),
        ("clip(a, 0, 1)", Kind.NUMBER),
        ("exp(log(spot))", Kind.NUMBERS),
        ("1 if spot > a else 0", Kind.NUMBERS),
        ("hit if a > 1 else false", Kind.FLAG),
        ("+a", Kind.NUMBER),
    ],
)
def test_kinds_are_inferred(text, kind):
    """A formula is a number or a flag, one or one for each asset, by what it is made of."""
    assert read(text).kind is kind


@pytest.mark.parametrize("text", ["worst(spot / a)", "mean(spot)", "any(spot > a)", "basket(spot, a)", "ranked(spot, 1)"])
def test_with_one_asset_functions_over_assets_take_plain_values(text):
    """With a single asset 'for each asset' falls away, and worst of it is itself."""
    formula = read(text, ONE_ASSET)
    assert isinstance(formula, Call) and not formula.kind.per_asset


def test_a_bracketed_branch_is_no_bare_conditional():
    """Calls, names, numbers, bracketed branches and a conditional behind else need no more brackets."""
    for text in ("max(a - k, 0) if side == 'call' else max(k - a, 0)", "(n + 1) if hit else 0",
                 "n + (1 if hit else 0)", "-a if hit else -b", "a if hit else b if a > 1 else k",
                 "(a > b) if hit else (not hit)", "hit if a > 1 else not hit", "a if a + 1 > b and hit else k"):
        read(text)


# What is refused


@pytest.mark.parametrize(
    ("text", "first", "second"),
    [
        ("n + 1 if hit else 0", "(n + 1) if hit else 0", "n + (1 if hit else 0)"),
        ("a if hit else b + 1", "a if hit else (b + 1)", "(a if hit else b) + 1"),
        ("a + b * n if hit else 0", "(a + b * n) if hit else 0", "a + b * (n if hit else 0)"),
        ("a + 1 if hit else b * 2", "(a + 1) if hit else (b * 2)", "a + (1 if hit else b) * 2"),
        ("a if hit else b * 2 + 1", "a if hit else (b * 2 + 1)", "(a if hit else b) * 2 + 1"),
        ("k * (a + b) if hit else 0", "(k * (a + b)) if hit else 0", "k * ((a + b) if hit else 0)"),
        ("not hit if a > 1 else hit", "(not hit) if a > 1 else hit", "not (hit if a > 1 else hit)"),
        ("a > b if hit else hit", "(a > b) if hit else hit", "a > (b if hit else hit)"),
    ],
)
def test_a_conditional_beside_an_operator(text, first, second):
    """It is read wrongly by people, so it is refused, and both readings are written out."""
    assert faults_of(text)[0] == (
        f"1: a conditional beside an operator needs brackets; write '{first}' or '{second}'")


@pytest.mark.parametrize("text", ["max(0, n + 1 if hit else 0)", "(1 if hit else (n + 1 if hit else 0))"])
def test_a_bare_conditional_inside(text):
    """The same holds inside arguments and branches, at the column of the conditional."""
    (fault,) = faults_of(text)
    assert fault.startswith(f"{text.index('n + 1') + 1}: a conditional beside an operator")


@pytest.mark.parametrize(
    ("text", "fault"),
    [
        ("hit + 1", "1: expected a number, found a flag; write '(1 if hit else 0)'"),
        ("1 + (a > b)", "6: expected a number, found a flag; write '(1 if a > b else 0)'"),
        ("max(a, hit)", "8: expected a number, found a flag; write '(1 if hit else 0)'"),
        ("not a", "5: expected a flag, such as a comparison, found a number"),
        ("hit and spot", "9: expected a flag, such as a comparison, found one number for each asset"),
        ("1 if a else 0", "6: expected a flag, such as a comparison, found a number"),
        ("hit == true", "1: flags are not compared; write 'hit' or 'not hit' alone"),
        ("(a > b) == hit", "2: flags are not compared; join them by 'and', 'or', 'not'"),
        ("1 if hit else hit", "1: the branches of a conditional are of different kinds: a number and a flag"),
        ("worst(a)", "7: expected one number for each asset, found a number"),
        ("all(hit)", "5: expected one flag for each asset, found a flag"),
        ("worst(spot > 1)", "7: expected a number, found one flag for each asset; write '(1 if spot > 1 else 0)'"),
        ("ranked(spot, 0)", "14: the rank must be a whole number from 1, the worst"),
        ("ranked(spot, 1.5)", "14: the rank must be a whole number from 1, the worst"),
        ("of(a, receive)", "4: expected one number for each asset, found a number"),
        ("previous(a, hit)", "13: expected a number as before, found a flag"),
        ("previous(previous(a, 0), 0)",
         "10: 'previous' cannot stand inside 'previous'; carry the value as a running value"),
    ],
)
def test_wrong_kinds(text, fault):
    """A number where a flag is needed, and the like, is refused at the part that is wrong."""
    assert faults_of(text) == [fault]


@pytest.mark.parametrize(
    ("text", "fault"),
    [
        ("spott + 1", "1: there is no 'spott' here; did you mean 'spot'?"),
        ("xyz", "1: there is no 'xyz' here"),
        ("side", "1: the choice 'side' has no value of its own; compare it with 'call' or 'put'"),
        ("receive", "1: 'receive' names an asset; its level is 'of(spot, receive)'"),
        ("expiry + 1", "1: 'expiry' is a matter of dates and has no value in a formula"),
        ("max", "1: 'max' is a function; expected max(a, b, ...)"),
        ("side == 'cal'", "9: 'cal' is no word of the choice 'side'; did you mean 'call'?"),
        ("side == 'straddle'", "9: 'straddle' is no word of the choice 'side'; expected 'call' or 'put'"),
        ("sid == 'call'", "1: 'sid' is not a choice, and only a choice is compared with a text; did you mean 'side'?"),
        ("a == 'call'", "1: 'a' is not a choice, and only a choice is compared with a text"),
        ("side < 'call'",
         "1: a text is compared with one choice by '==' or '!=', as in \"side == 'call'\""),
        ("'call'", "1: a text stands only in a comparison with a choice, as in \"side == 'call'\""),
        ("given(a)", "7: 'given' asks about an optional term, and 'a' is not one; expected 'cap'"),
        ("of(spot, lanter)", "10: 'lanter' is not an asset; did you mean 'lantern'?"),
        ("of(spot, 1)", "10: expected an asset, by its name or by an 'asset' term"),
        ("maxx(a, b)", "1: 'maxx' is not a function of formulas; did you mean 'max'?"),
        ("a(b + 1)", "1: 'a' is not a function of formulas; an operator is missing before the bracket"),
        ("max(a)", "1: expected max(a, b, ...), found 1 argument"),
        ("clip(a, 1)", "1: expected clip(x, low, high), found 2 arguments"),
        ("abs()", "1: expected abs(x), found no arguments"),
    ],
)
def test_wrong_names_and_calls(text, fault):
    """Unknown names, words and functions are offered the near miss."""
    assert faults_of(text) == [fault]


@pytest.mark.parametrize(
    ("text", "fault"),
    [
        ("observations.last", "1: 'observations.last': names with a dot are not part of formulas"),
        ("().__class__", "1: '().__class__': names with a dot are not part of formulas"),
        ("open('x')", "1: 'open' is not a function of formulas; expected 'min', 'max', 'abs', 'exp', 'log', 'sqrt', "
                      "'clip', 'worst', 'best', 'mean', 'basket', 'ranked', 'any', 'all', 'of', 'previous' or 'given'"),
        ("np.exp(a)", "1: 'np.exp' is not a function of formulas; did you mean 'exp'?"),
        ("lambda: 1", "1: functions cannot be defined in a formula"),
        ("max(x for x in a)", "7: a formula has no loops; operations go over all assets by themselves"),
        ("[a, b]", "1: lists and subscripts in '[ ]' are not part of formulas"),
        ("spot[0]", "5: lists and subscripts in '[ ]' are not part of formulas"),
        ("{a}", "1: '{ }' is not part of formulas"),
        ("f'{a}'", "1: a text is written plainly, as 'call'"),
        ("(n := 1)", "4: ':=' is not part of formulas; name a value under 'let'"),
        ("clip(a, low=1, high=2)", "12: '=' is not part of formulas; equality is written '==', and arguments have no "
                                   "names"),
        ("max(*a, b)", "5: '*' before an argument is not part of formulas"),
        ("a, b", "1: a comma stands only between the arguments of a function"),
        ("a & b", "3: '&' is not part of formulas; write 'and'"),
        ("hit && hit", "5: '&&' is not part of formulas; write 'and'"),
        ("hit || hit", "5: '||' is not part of formulas; write 'or'"),
        ("~hit", "1: '~' is not part of formulas; write 'not'"),
        ("!hit", "1: '!' is not part of formulas; write 'not'"),
        ("a ^ 2", "3: '^' is not part of formulas; a power is written '**'"),
        ("a // b", "3: '//' is not part of formulas; a division is written '/'"),
        ("a % b", "3: '%' stands only behind a number, as in '70%'; there is no remainder"),
        ("7 % 2", "3: '%' stands only behind a number, as in '70%'; there is no remainder"),
        ("7%2", "2: '%' stands only behind a number, as in '70%'; there is no remainder"),
        ("a << b", "3: '<<' is not part of formulas"),
        ("a = b", "3: '=' is not part of formulas; equality is written '==', and arguments have no names"),
        ("a <> b", "3: '<>' is not part of formulas; write '!='"),
        ("a => b", "3: '=>' is not part of formulas; write '>='"),
        ("a ≤ b", "3: '≤' is not part of formulas"),
        ("side in ('call', 'put')", "6: 'in' is not part of formulas; compare with '==', joined by 'or'"),
        ("a is b", "3: 'is' is not part of formulas; compare with '==', joined by 'or'"),
        ("hit ? a : b", "5: '?' is not part of formulas; write 'a if condition else b'"),
        ("a # b", "3: a comment inside a formula; put it on its own line above"),
        ("a \\ b", "3: a backslash is not part of formulas"),
        ("await a", "1: 'await' is not part of formulas"),
        ("True", "1: write 'true' instead of 'True'"),
        ("None", "1: expected a number such as '1.5', found 'None'"),
        ("1_000", "1: expected a number such as '1.5', found '1_000'"),
        ("0x10", "1: expected a number such as '1.5', found '0x10'"),
        ("1j", "1: expected a number such as '1.5', found '1j'"),
        ("010", "1: write the number without leading zeros"),
        ("1e999", "1: expected a finite number, found '1e999'"),
    ],
)
def test_forbidden_syntax(text, fault):
    """Whatever Python knows beyond formulas is refused by name, and so is what other languages write."""
    assert faults_of(text) == [fault]


@pytest.mark.parametrize(
    ("text", "fault"),
    [
        ("a b", "3: 'b' is not expected here"),
        ("a +", "4: the formula ends too early"),
        ("max(a b)", "5: an operator or a comma is missing here"),
        ("(a + b", "1: this bracket is never closed"),
        ("a + b)", "6: this bracket closes nothing"),
        ("a) + (b", "2: this bracket closes nothing"),
        ("a if hit", "1: a conditional needs its 'else': 'a if condition else b'"),
        ("2n", "1: a number runs into a name here; an operator is missing"),
        ("side == 'call", "9: the quote that opens here is not closed"),
    ],
)
def test_unreadable_formulas(text, fault):
    """What cannot be parsed is one fault where the trouble is."""
    assert faults_of(text) == [fault]


@pytest.mark.parametrize(
    ("text", "fault"),
    [
        ("a ** 65", "6: the power is beyond 64"),
        ("a ** -65", "6: the power is beyond 64"),
        ("9 ** 9 ** 9", "1: a power of a power is not part of formulas; name the inner one under 'let'"),
        ("(9 ** 9) ** 9", "1: a power of a power is not part of formulas; name the inner one under 'let'"),
    ],
)
def test_huge_powers(text, fault):
    """Powers that nobody can mean are refused before anything is computed."""
    assert faults_of(text) == [fault]


def test_bounds_of_size():
    """Long and deep formulas are refused with the limit."""
    assert faults_of("a" * 2001) == ["1: the formula has 2,001 characters; at most 2,000 are read; name parts of it "
                                     "under 'let'"]
    deep = "more than 50 operations stand inside one another; name parts of it under 'let'"
    assert faults_of("(" * 51 + "a" + ")" * 51) == [f"51: {deep}"]
    assert faults_of("-" * 1000 + "a") == [f"51: {deep}"]
    assert faults_of(" + ".join("a" * 60)) == [f"1: {deep}"]
    assert read("(" * 50 + "a" + ")" * 50) == Name("a", PLACE.right(50), Kind.NUMBER)


def test_all_faults_of_a_formula_at_once():
    """One reading finds every wrong part."""
    assert faults_of("foo + hit * max(a)") == [
        "1: there is no 'foo' here",
        "7: expected a number, found a flag; write '(1 if hit else 0)'",
        "13: expected max(a, b, ...), found 1 argument",
    ]


def test_names_at_fault_elsewhere_are_passed_over():
    """A formula with a name whose own definition is wrong is no formula, but adds no fault."""
    faults = []
    assert read_formula(Scalar("spoiled + 1", PLACE), SCOPE, faults) is None
    assert faults == []
    assert faults_of("spoiled + nothing") == ["11: there is no 'nothing' here"]


def test_before_the_contract_any_asset_may_be_named():
    """A definition read by itself does not know the contract's assets."""
    scope = Scope(names={"spot": Kind.NUMBERS}, asset_names=None)
    assert read("of(spot, anything)", scope).asset == "anything"


@pytest.mark.parametrize(
    ("value", "place"),
    [
        ("max(a,\n    wrong)", "f.yaml:2:5"),
        (">-\n  max(a,\n  wrong)", "f.yaml:3:3"),
        ("|\n  a +\n    wrong", "f.yaml:3:5"),
        ("'max(a, wrong)'", "f.yaml:1:12"),
    ],
)
def test_faults_in_folded_formulas_stand_at_their_line(value, place):
    """A formula over several lines, or in quotes, keeps the place of each part."""
    (node,), _ = read_yaml(f"x: {value}\n".encode(), "f.yaml")
    faults = []
    read_formula(node.get("x"), SCOPE, faults)
    assert [str(fault.place) for fault in faults] == [place]


# Whatever is written

PIECES = st.sampled_from([*CALLS, *SCOPE.names, "side", "receive", "'call'", "70%", "25 bp", "1.5", "(", ")", ",", "+", "-",
                          "*", "/", "**", "<", "<=", "==", "and", "or", "not", "if", "else", "true", "[", ".", ":=", "#"])


@given(st.one_of(st.lists(PIECES, max_size=25).map(" ".join), st.text(max_size=60)))
def test_no_text_raises(text):
    """Whatever the text, there is a formula or a fault, and faults lie within the text."""
    faults = []
    formula = read_formula(Scalar(text, PLACE), SCOPE, faults)
    assert (formula is None) == bool(faults)
    for fault in faults:
        assert 0 <= fault.place.column - PLACE.column <= len(text)


def expressions() -> st.SearchStrategy[str]:
    """Formulas that are right, as text."""
    leaves = st.sampled_from(["a", "b", "1.5", "70%", "spot", "worst(spot)"])

    def grown(inner: st.SearchStrategy[str]) -> st.SearchStrategy[str]:
        pair = st.tuples(inner, inner)
        return st.one_of(
            st.tuples(inner, st.sampled_from("+-*/"), inner).map(lambda t: f"({t[0]} {t[1]} {t[2]})"),
            pair.map(lambda t: f"max({t[0]}, {t[1]})"),
            pair.map(lambda t: f"({t[0]} if side == 'call' else {t[1]})"),
            inner.map(lambda t: f"-{t}"),
        )

    return st.recursive(leaves, grown, max_leaves=20)


@given(expressions())
def test_right_formulas_are_read(text):
    """Every formula built by the rules is read, and its places point at the names in the text."""
    formula = read(text)
    for part in walk(formula):
        if isinstance(part, Name):
            start = part.place.column - PLACE.column
            assert text[start : start + len(part.name)] == part.name
