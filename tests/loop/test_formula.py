"""Formulas: what is read, what is refused and with which words, and the way back to text."""

from decimal import Decimal

import pytest
from hypothesis import given
from hypothesis import strategies as st

from roa.loop.expression import FUNCTIONS, Binary, Call, Compare, Name, Negate, Number, Power, children, walk
from roa.loop.formula import Vocabulary, parse
from roa.loop.formula_syntax import DEEPEST, LONGEST, FormulaError
from roa.loop.formula_text import decimal_text, to_text

NAMES = ("tilt", "rate", "mass", "k_p")
VOCABULARY = Vocabulary(NAMES, {"mass": Decimal("2.5"), "k_p": Decimal(3)}, {"later": 'signal "later" is below'})


def read(text):
    return parse(text, VOCABULARY)


def faults_of(text):
    with pytest.raises(FormulaError) as caught:
        read(text)
    return caught.value.faults


def test_precedence_is_that_of_mathematics():
    assert read("-tilt**2") == Negate(Power(Name("tilt"), Decimal(2)))
    assert read("tilt - rate - mass") == Binary("-", Binary("-", Name("tilt"), Name("rate")), Name("mass"))
    assert read("tilt/rate*mass") == Binary("*", Binary("/", Name("tilt"), Name("rate")), Name("mass"))
    assert read("+tilt") == Name("tilt")


def test_numbers_keep_their_decimals():
    assert read("0.1000000000000000055511151231257827") == Number(Decimal("0.1000000000000000055511151231257827"))
    assert read("1_000.5e-3") == Number(Decimal("1.0005"))
    assert read(".5 + 5.") == Binary("+", Number(Decimal("0.5")), Number(Decimal(5)))


def test_an_exponent_is_a_signed_number_or_a_parameter():
    assert read("tilt**-2.5") == read("tilt**-mass") == Power(Name("tilt"), Decimal("-2.5"))
    assert read("tilt**+(k_p)") == Power(Name("tilt"), Decimal(3))


def test_min_and_max_of_many_are_pairs_and_stay_shallow():
    a, b, c = Name("tilt"), Name("rate"), Name("mass")
    assert read("min(tilt, rate, mass)") == Call("min", (Call("min", (a, b)), c))
    many = read(f"max({', '.join(['tilt'] * 300)})")
    assert sum(part == a for part in walk(many)) == 300
    assert depth(many) <= 10


def test_where_takes_a_comparison():
    tree = read("where(tilt >= 0, rate, -rate)")
    assert tree == Call("where", (Compare(">=", Name("tilt"), Number(Decimal(0))), Name("rate"), Negate(Name("rate"))))


def test_a_formula_may_span_lines_and_columns_count_on():
    assert read("\n  tilt +\n\trate\n") == Binary("+", Name("tilt"), Name("rate"))
    assert faults_of("  tilt +\n  rte")[0].column == 12


@pytest.mark.parametrize(
    ("text", "column", "words"),
    [
        ("", 1, "empty"),
        ("   ", 1, "empty"),
        ("2*tilit", 3, 'unknown name "tilit" (did you mean "tilt"?)'),
        ("later", 1, 'signal "later" is below'),
        ("pi*tilt", 1, "3.141592653589793"),
        ("tilt^2", 5, "write ** for a power"),
        ("(tilt) // rate", 8, 'operator "//"'),
        ("tilt % 2", 6, 'operator "%"'),
        ("tilt @ rate", 6, 'operator "@"'),
        ("tilt and rate", 1, "and / or"),
        ("1or tilt", 1, "and / or"),  # Python warns about the missing space
        ("not tilt", 1, "refused"),
        ("~tilt", 1, "refused"),
        ("tilt if rate else 1", 1, "where(condition, a, b)"),
        ("tilt.real", 1, "attributes"),
        ("__import__('os').system('x')", 1, "attributes"),
        ("(lambda: 1)()", 2, "lambda"),
        ("tilt[0]", 1, "square brackets"),
        ("(tilt := 1)", 2, ":="),
        ("[tilt]", 1, "lists"),
        ("tilt, rate", 1, "comma"),
        ("f'{tilt}'", 1, "text"),
        ("'tilt'", 1, "'tilt' is not part of formulas"),
        ("True", 1, "True is not part of formulas"),
        ("None", 1, "None is not part of formulas"),
        ("...", 1, "not part of formulas"),
        ("2j*tilt", 1, "imaginary"),
        ("0x1f", 1, "write it in decimals"),
        ("1e400", 1, "out of range"),
        ("1e-400", 1, "out of range"),
        ("1e99999999999999999999", 1, "cannot read the number"),
        ("tilt < 0", 1, "first argument of where"),
        ("where(tilt, 1, 2)", 7, "must be a comparison"),
        ("where(0 < tilt < 1, 1, 2)", 7, "chained"),
        ("where(tilt == 0, 1, 2)", 7, "< <= > >="),
        ("where(tilt < 0, 1)", 1, "where takes 3 arguments, 2 found"),
        ("sin(tilt, rate)", 1, "sin takes 1 argument, 2 found"),
        ("min(tilt)", 1, "min takes 2 or more arguments, 1 found"),
        ("sin(x=tilt)", 5, "no names"),
        ("sin(*tilt)", 5, "star"),
        ("sin", 1, "needs its arguments in brackets"),
        ("sni(tilt)", 1, 'unknown function "sni" (did you mean "sin"?)'),
        ("lookup(drag, tilt)", 8, 'no look-up table is called "drag"'),
        ("mass(tilt)", 1, 'a product needs *'),
        ("2(tilt)", 1, "a product needs *"),
        ("2tilt", 1, "a product needs *"),
        ("tilt rate", 6, 'cannot read the formula from "rate" on'),
        ("tilt +", 7, "ends where a number or a name was expected"),
        ("(tilt", 1, "never closed"),
        ("tilt)", 5, "never opened"),
        ("(tilt]", 6, "never opened"),
        ("rate = tilt", 6, "right-hand side alone"),
        ("import os", 1, "cannot read"),
        ("tilt; rate", 5, "cannot read"),
        ("tilt # lean", 6, '"#"'),
        ("ｔilt", 1, "U+FF54"),
        ("tilt\x00", 5, "not part of formulas"),
        ("tilt**rate", 7, "exponent must be a number"),
        ("tilt**(1 + 1)", 8, "exponent must be a number"),
        ("9**9**9", 4, "exponent must be a number"),
        ("tilt**17", 7, "-16 to 16"),
        ("tilt**-16.5", 7, "-16 to 16"),
        ("+".join(["tilt"] * (DEEPEST + 1)), 1, "deeper than 50"),
        ("-" * 1500 + "1", 1, "deeper than 50"),
        ("(" * 250 + "1" + ")" * 250, 201, "deeper than 50"),
        ("1" * (LONGEST + 1), LONGEST + 1, f"{LONGEST + 1} characters"),
    ],
)  # fmt: skip
def test_refused_with_column_and_reason(text, column, words):
    fault = faults_of(text)[0]
    assert words in fault.sentence
    assert fault.column == column


def test_a_wide_formula_of_too_many_parts_is_refused(monkeypatch):
    monkeypatch.setattr("roa.loop.formula_syntax.MOST_NODES", 100)
    assert "more than 100 parts" in faults_of(f"max({','.join(['1'] * 120)})")[0].sentence


def test_all_faults_of_a_formula_in_one_go_in_order():
    assert [fault.column for fault in faults_of("sni(tilit) + rte**tilt - 3^2")] == [1, 5, 14, 19, 27]


@given(st.text(alphabet="abtilratems_0123456789.+-*/^()[]{},<>=:;'\"!@ \t\n\\#eEjJ", max_size=40))
def test_any_text_is_read_or_refused(text):
    tree, faults = Name("tilt"), ()
    try:
        tree = read(text)
    except FormulaError as error:
        faults = error.faults
    assert all(fault.column >= 1 and "\n" not in fault.sentence for fault in faults)
    assert read(to_text(tree)) == tree


def numbers():
    return st.decimals(0, 1000, allow_nan=False, places=3).map(Number)


def grown(inner):
    comparisons = st.builds(Compare, st.sampled_from(["<", "<=", ">", ">="]), inner, inner)
    plain = [name for name in FUNCTIONS if name != "where"]
    return st.one_of(
        st.builds(Negate, inner),
        st.builds(Binary, st.sampled_from("+-*/"), inner, inner),
        st.builds(Power, inner, st.decimals(-16, 16, allow_nan=False, places=2)),
        st.builds(lambda condition, a, b: Call("where", (condition, a, b)), comparisons, inner, inner),
        st.sampled_from(plain).flatmap(
            lambda name: st.tuples(*[inner] * FUNCTIONS[name]).map(lambda arguments: Call(name, arguments))
        ),
    )


TREES = st.recursive(st.one_of(numbers(), st.sampled_from(NAMES).map(Name)), grown, max_leaves=25)


@given(TREES)
def test_text_of_a_tree_reads_back_as_the_tree(tree):
    assert read(to_text(tree)) == tree


def test_text_has_no_needless_brackets():
    for text in ("-(tilt + 1)**2*rate/(mass*k_p) - (tilt - rate)", "where(tilt < 0, -1, tilt**-2)"):
        assert to_text(read(text)) == text


@pytest.mark.parametrize(
    ("spellings", "text"),
    [
        (("1.20", "1.2", "12e-1"), "1.2"),
        (("3E+2", "300.0", "300"), "300"),
        (("-0.0", "0", "0e5"), "0"),
        (("1e-9", "0.000000001"), "1e-9"),
        (("1" * 40, "1" * 40 + ".0"), "1" * 40),
    ],
)
def test_equal_decimals_have_one_text(spellings, text):
    assert {decimal_text(Decimal(spelling)) for spelling in spellings} == {text}


def depth(tree):
    return 1 + max((depth(child) for child in children(tree)), default=0)
