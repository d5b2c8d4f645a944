"""Configurations: what is read, and every fault with its place and its words."""

import json
from decimal import Decimal
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from roa.errors import UserError
from roa.loop.expression import Name
from roa.loop.read import read, read_text
from roa.loop.starter import STARTER

CONFIGS = Path(__file__).parents[2] / "configs"
LOOP = """
title = "a loop"
[states]
tilt = "rad"
rate = "rad/s"
[parameters]
stiffness = { value = 0.1, unit = "1/s^2" }
damping = 2
[signals]
spring = "stiffness*tilt"
torque = "clip(-spring - damping*rate, -1, 1)"
[dynamics]
tilt = "rate"
rate = "torque"
[equilibrium]
tilt = 0.0
[domain]
tilt = [-1.5, 1.5]
rate = [-4, 4]
"""


def with_change(old, new):
    assert old in LOOP
    return LOOP.replace(old, new, 1)


def with_table(text):
    return f"{LOOP}\n{text}\n"


def faults_of(text):
    with pytest.raises(UserError) as caught:
        read_text(text, "a.toml")
    assert all("\n" not in fault and fault.startswith("a.toml: ") for fault in caught.value.faults)
    return caught.value.faults


def only_fault_of(text):
    faults = faults_of(text)
    assert len(faults) == 1, faults
    return faults[0]


@pytest.mark.parametrize(("name", "n"), [("mast", 2), ("van_der_pol", 2), ("cart", 4), ("mast_digital", 2)])
def test_the_configurations_are_sound(name, n):
    configuration = read(CONFIGS / f"{name}.toml")
    assert configuration.loop.n == n
    assert configuration.sweep.samples == 262144
    assert configuration.bound.Q == "identity"
    assert configuration.bound.level is None


def test_the_starter_is_sound_and_names_every_key_that_is_accepted():
    configuration = read_text(STARTER, "new.toml")
    assert configuration.loop.states == ("depth", "speed")
    keys = [
        *type(configuration.sweep).model_fields,
        *type(configuration.verdict).model_fields,
        "Q",
        "P",
        "V",
        "level",
        "inner",
    ]
    assert all(f"\n{key} " in STARTER or f"\n# {key} " in STARTER for key in keys)
    for line in STARTER.splitlines():  # what is commented out is right as well
        if line.startswith("# ") and "=" in line and "'" not in line.split("#")[1]:
            text = STARTER.replace(line, line[2:])
            text = text.replace("samples = 65536", "") if line.startswith("# goal") else text
            text = text.replace('"sobol"', '"rays"', 1) if line.startswith("# accuracy") else text
            read_text(text if line[2] not in "PV" else text.replace('Q = "identity"', ""), "new.toml")


def test_the_searches_that_are_asked_for():
    bound = read_text(
        with_table('[bound]\nsearch = ["quadratic", "no_return"]\ndegree = 6\nboxes = 5000'), "a.toml"
    ).bound
    assert (bound.search, bound.degree, bound.boxes) == (("quadratic", "no_return"), 6, 5000)
    assert read_text(with_table("[bound]\nsearch = []"), "a.toml").bound.search == ()
    assert read_text(LOOP, "a.toml").searches == ("quadratic", "polynomial", "no_return")


@pytest.mark.parametrize("degree", ["3", "0", "14", "-2", "4.5"])
def test_a_degree_that_is_refused(degree):
    assert "an even number from 2 to 12" in only_fault_of(with_table(f"[bound]\ndegree = {degree}"))


@pytest.mark.parametrize("search", ['["cubic"]', '"quadratic"'])
def test_a_search_that_is_refused(search):
    assert "quadratic" in only_fault_of(with_table(f"[bound]\nsearch = {search}"))


def test_defaults():
    configuration = read_text(LOOP, "a.toml")
    sweep, verdict = configuration.sweep, configuration.verdict
    assert (sweep.design, sweep.method, sweep.seed, sweep.escape) == ("sobol", "auto", 1, 10.0)
    assert (sweep.ball_radius, sweep.dwell, sweep.longest) == (1e-3, None, 16 * sweep.horizon)
    assert (verdict.accept, verdict.confidence, verdict.fraction) == ("proved", 0.99, 0.999)
    assert configuration.bound.Q == "identity"
    assert read_text(LOOP.replace('title = "a loop"', ""), "tower.toml").loop.title == "Untitled loop"
    assert read_text(with_table("[sweep]\nhorizon = 2.5"), "a.toml").sweep.longest == 40


def test_numbers_are_the_decimals_of_the_file():
    loop = read_text(LOOP, "a.toml").loop
    assert str(loop.parameters["stiffness"].value) == "0.1"
    assert loop.parameters["stiffness"].unit == "1/s^2"
    assert loop.parameters["damping"].value == Decimal(2)
    assert loop.domain == ((Decimal("-1.5"), Decimal("1.5")), (Decimal(-4), Decimal(4)))
    assert loop.guess == (Decimal(0), Decimal(0))


def test_the_loop_evaluates():
    loop = read_text(LOOP, "a.toml").loop
    np.testing.assert_allclose(loop.rhs(np.array([[1.0, 0.25], [0.0, 3.0]])), [[0.25, -0.6], [3.0, -1.0]], rtol=1e-15)
    assert loop.dynamics[0] == Name("rate")


def test_a_matrix_a_level_and_a_formula_for_V():
    bound = read_text(with_table("[bound]\nP = [[1.5, -0.5], [-0.5, 1]]\nlevel = 0.8"), "a.toml").bound
    np.testing.assert_array_equal(np.array(bound.P, dtype=float), [[1.5, -0.5], [-0.5, 1.0]])
    assert (bound.Q, bound.V, bound.level) == (None, None, Decimal("0.8"))
    bound = read_text(with_table('[bound]\nV = "damping*tilt**2 + rate**2"\nlevel = 1'), "a.toml").bound
    assert (bound.Q, bound.P, bound.V_text) == (None, None, "damping*tilt**2 + rate**2")
    assert read_text(with_table("[bound]\nlevel = 1"), "a.toml").bound.Q == "identity"
    # a P that is not positive definite is for the verdict to refute
    assert read_text(with_table("[bound]\nP = [[1, 0], [0, -1]]\nlevel = 1"), "a.toml").bound.P is not None


@pytest.mark.parametrize(
    ("text", "words"),
    [
        (with_change("-spring", "-sprung"),
         'a.toml: [signals] torque = "clip(-sprung - damping*rate, -1, 1)": column 7: unknown name "sprung" '
         '(did you mean "spring"?)'),
        (with_change('"stiffness*tilt"', '"stiffness*torque"'),
         'signal "torque" is defined further down; a signal may use only those above it'),
        (with_change('"stiffness*tilt"', '"spring"'), 'signal "spring" uses itself'),
        (with_change('"stiffness*tilt"', "3"), "[signals] spring = 3: must be a formula in quotes, a number found"),
        (with_change('"torque"', '"__import__(1)"'), '[dynamics] rate = "__import__(1)": column 1: unknown function'),
        (with_change('rate = "torque"', ""), "[dynamics] rate: the state has no entry here; its time derivative"),
        (with_change('rate = "torque"', 'rate = "torque"\nraet = "tilt"'),
         '[dynamics] raet: no such state; states are tilt, rate (did you mean "rate"?)'),
        (with_change("rate = [-4, 4]", ""), "[domain] rate: the state has no entry here; its range [low, high]"),
        (with_change("rate = [-4, 4]", "rate = [4, -4]"), "[domain] rate = [4, -4]: must be a pair [low, high] with"),
        (with_change("rate = [-4, 4]", "rate = [1, 1]"), "with low below high"),
        (with_change("rate = [-4, 4]", "rate = [1, 2, 3]"), "must be a pair [low, high], a list found"),
        (with_change("rate = [-4, 4]", "rate = [-4, nan]"), "[domain] rate = [-4, nan]: must be a finite number"),
        (with_change("rate = [-4, 4]", "rate = [false, 4]"), "must be a number, true or false found"),
        (with_change("tilt = 0.0", "tilt = 2"), "the guess tilt = 2 of [equilibrium] lies outside"),
        (with_change("tilt = 0.0", "tlit = 0"), '[equilibrium] tlit: no such state; states are tilt, rate (did'),
        (with_change("tilt = 0.0", 'tilt = "0"'), '[equilibrium] tilt = "0": must be a number, text found'),
        (with_change("damping = 2", "damping = inf"), "[parameters] damping = inf: must be a finite number"),
        (with_change("damping = 2", "damping = true"), "[parameters] damping = true: must be a number, true or false"),
        (with_change("damping = 2", "damping = 1e400"), "out of range"),
        (with_change("damping = 2", "damping = 1e99999999999999999999"), "must be a finite number"),
        (with_change("damping = 2", "damping = 2\ntilt = 1"), "tilt: the name is taken already in [states]"),
        (with_change("damping = 2", "damping = 2\nsin = 1"), "[parameters] sin: the name of a function"),
        (with_change("damping = 2", "damping = 2\nlambda = 1"), "[parameters] lambda: the name is reserved"),
        (with_change("damping = 2", 'damping = 2\n"2nd" = 1'), "[parameters] 2nd: not a name"),
        (with_change("damping = 2", 'damping = 2\n"da\\nmp" = 1'), 'not a name; accepted are ASCII letters'),
        (with_change("damping = 2", 'damping = 2\n"größe" = 1'), "[parameters] größe: not a name"),
        (with_change("value = 0.1", "vaule = 0.1"), 'unknown key "vaule"; accepted are value, unit (did you'),
        (with_change('unit = "1/s^2"', "unit = 3"), "a unit must be text in quotes"),
        (with_change('"rad/s"', "1"), '[states] rate = 1: a unit must be text in quotes'),
        (with_change('title = "a loop"', "title = 3"), "title = 3: must be one line of text"),
        (with_change('title = "a loop"', "titel = 3"), 'titel: unknown key; accepted are title and the tables states'),
        (with_change('title = "a loop"', "sweep = 3"), "sweep = 3: must be a table [sweep], a number found"),
        (with_table("[sweeep]"), '[sweeep]: unknown table; accepted are title and the tables states'),
        (with_table("[sweep]\nsamlpes = 3"), '[sweep] samlpes: unknown key; accepted are design, samples'),
        (with_table("[sweep]\nsamlpes = 3"), '(did you mean "samples"?)'),
        (with_table("[sweep]\nsamples = 0"), "[sweep] samples = 0: must be a whole number from 1 to 2**40"),
        (with_table("[sweep]\nsamples = 1099511627777"), "from 1 to 2**40"),
        (with_table("[sweep]\nsamples = 1.5"), "must be a whole number"),
        (with_table("[sweep]\nsamples = true"), "[sweep] samples = true: must be a number, true or false found"),
        (with_table('[sweep]\nsamples = "many"'), '[sweep] samples = "many": must be a number, text found'),
        (with_table("[sweep]\nseed = -1"), "must be a whole number from 0 to"),
        (with_table("[sweep]\nhorizon = 0"), "[sweep] horizon = 0: must be greater than 0"),
        (with_table("[sweep]\nhorizon = 9\nlongest = 8"), "longest = 8 must not be less than horizon = 9"),
        (with_table("[sweep]\nescape = 0.9"), "must be at least 1"),
        (with_table("[sweep]\nrtol = 1e-13"), "must be greater than 1e-13 and at most 0.1"),
        (with_table("[sweep]\nrtol = 0.2"), "must be greater than 1e-13 and at most 0.1"),
        (with_table("[sweep]\natol = 0"), "[sweep] atol = 0: must be greater than 0"),
        (with_table("[sweep]\nball_radius = 0.51"), "must be greater than 0 and at most 0.5"),
        (with_table("[sweep]\ndwell = -2"), "[sweep] dwell = -2: must be greater than 0"),
        (with_table("[sweep]\ndesign = 3"), "[sweep] design = 3: must be text, a number found"),
        (with_table('[sweep]\nstore = "some"'), '[sweep] store = "some": must be one of all, outcomes'),
        (with_table('[verdict]\naccept = "simulated"'), "must be one of proved, supported"),
        (with_table("[verdict]\nconfidence = 0.5"), "must be between 0.5 and 1"),
        (with_table("[verdict]\nconfidence = 99"), "must be between 0.5 and 1"),
        (with_table("[verdict]\nfraction = 1"), "must be between 0 and 1"),
        (with_table("[verdict]\nacept = 1"), '[verdict] acept: unknown key; accepted are accept, confidence, fraction'),
        (with_table('[bound]\nQ = "unit"'), '[bound] Q = "unit": must be one of identity, domain'),
        (with_table("[bound]\nQ = [[1, 0], [0, -1]]"), "[bound] Q: must be positive definite"),
        (with_table("[bound]\nQ = [[1, 1], [1, 1]]"), "[bound] Q: must be positive definite"),
        (with_table("[bound]\nQ = [[1]]"), "[bound] Q: must have 2 rows and columns, one for each state; 1 found"),
        (with_table("[bound]\nP = [[1, 0, 0], [0, 1, 0], [0, 0, 1]]"), "[bound] P: must have 2 rows and columns"),
        (with_table("[bound]\nP = [[1, 2], [3, 4]]"), "must be symmetric; row 1 column 2 is 2, row 2 column 1 is 3"),
        (with_table("[bound]\nP = [[1, 0], [0]]"), "must be square"),
        (with_table("[bound]\nP = 3"), "must be a matrix, a list of rows"),
        (with_table("[bound]\nP = [[1, nan], [nan, 1]]"), "must be a finite number"),
        (with_table('[bound]\nQ = "domain"\nP = [[1, 0], [0, 1]]'), "only one of Q, P and V is accepted; Q and P"),
        (with_table("[bound]\nlevel = 0"), "[bound] level = 0: must be greater than 0"),
        (with_table("[bound]\nV_text = 0"), "[bound] V_text: unknown key"),
        (with_table('[bound]\nV = "tilt**2 + torque"'), 'column 11: "torque" is a signal; V is a formula in'),
        (with_table("[bound]\nV = 3"), "[bound] V = 3: must be a formula in quotes, a number found"),
        (with_table("[limits]\ntilt = [1, 1]"), "[limits] tilt = [1, 1]: must be a pair [low, high] with low below"),
        (with_table("[limits]\ntilt = 1"), "[limits] tilt = 1: must be a pair [low, high], a number found"),
        (with_table("[limits]\ndamping = [1, 3]"), "[limits] damping: is a parameter; limits are set on tilt, rate"),
        (with_table("[limits]\ntilr = [-1, 1]"), '[limits] tilr: is no state or signal; limits are set on tilt, rate'),
        ("x = [1", "a.toml: not valid TOML: "),
        ("x = 1\nx = 2\n", "(at line 2, column"),
        ("x = " + "[" * 3000, "nested too deep"),
        ("x = " + "9" * 5000, "too many digits"),
        ("#" * 200_001, "the file has 200001 bytes, at most 200000 are accepted"),
    ],
)  # fmt: skip
def test_one_fault_one_line(text, words):
    assert words in only_fault_of(text)


@pytest.mark.parametrize(
    ("text", "words"),
    [
        (with_change("damping = 2", "damping = { value = 2, spread = [1, 3] }"), "spread is not yet supported"),
        (with_change("[dynamics]", '[dynamics]\npython = "plant.py:rhs"'), "[dynamics] python: not yet supported"),
        *((with_table(f"[sweep]\n{key} = 1"), f"[sweep] {key}: not yet supported by this version")
          for key in ("stop_outside",)),
    ],
)  # fmt: skip
def test_not_yet_is_refused_by_name(text, words):
    assert words in faults_of(text)[0]


@pytest.mark.parametrize("method", ["auto", "tsitouras5", "dormand_prince8", "bogacki_shampine3"])
def test_methods_are_accepted_by_name(method):
    assert read_text(with_table(f'[sweep]\nmethod = "{method}"'), "a.toml").sweep.method == method


def test_a_state_called_python_is_a_state():
    text = with_change('rate = "rad/s"', 'rate = "rad/s"\npython = ""').replace(
        "[dynamics]", '[dynamics]\npython = "-python"'
    )
    assert read_text(text.replace("[domain]", "[domain]\npython = [0, 1]"), "a.toml").loop.n == 3


def test_all_faults_in_one_go():
    text = with_change("-spring", "-sprung").replace('"torque"', '"torqe^2 + raet"').replace("1.5, 1.5", "1.5, nan")
    faults = faults_of(text + '[sweep]\nsamples = -1\nseeed = 3\n[bound]\nV = "tilt +"')
    for words in ("sprung", "torqe", "write **", "raet", "finite", "samples = -1", "seeed", "[bound] V"):
        assert any(words in fault for fault in faults), words
    assert len(faults) == 8


def test_a_line_break_in_a_name_leaves_one_line_a_fault():
    text = LOOP.replace("tilt =", '"ti\\nlt" =')
    assert all("ti\\nlt" in fault or "tilt" in fault for fault in faults_of(text))


def test_missing_tables_are_named():
    assert faults_of("") == tuple(
        f"a.toml: [{name}]: the table is missing" for name in ("states", "dynamics", "domain")
    )


def test_number_of_states():
    def chain(n):
        return "\n".join(
            f"[{table}]\n" + "\n".join(f"x{i} = {entry}" for i in range(n))
            for table, entry in (("states", '""'), ("dynamics", '"-x0"'), ("domain", "[-1, 1]"))
        )

    assert read_text(chain(40), "a.toml").loop.n == 40
    assert "41 states found, 1 to 40 are accepted" in only_fault_of(chain(41))


def test_a_long_formula_is_shown_around_the_column():
    fault = only_fault_of(with_change('"torque"', '"' + "torque + " * 20 + "tilit" + " + torque" * 20 + '"'))
    assert fault.count("torque") < 12
    assert "…" in fault
    assert "tilit + " in fault
    assert "column 181:" in fault


def test_files(tmp_path):
    good = tmp_path / "good.toml"
    good.write_bytes(b"\xef\xbb\xbf" + LOOP.replace("\n", "\r\n").encode())  # as Windows editors write it
    assert read(good).loop.n == 2
    for name, content, words in [
        ("missing.toml", None, "no such file"),
        ("bytes.toml", b"title = '\xff'", "not a text file in UTF-8"),
        ("large.toml", b"#" * 200_001, "at most 200000"),
    ]:
        path = tmp_path / name
        if content is not None:
            path.write_bytes(content)
        with pytest.raises(UserError, match=words) as caught:
            read(path)
        assert str(path) in str(caught.value)
    with pytest.raises(UserError, match="is not a file"):
        read(tmp_path)


def test_resolved_is_the_same_for_every_spelling_of_one_study():
    other = LOOP.replace("0.1,", "1.0e-1,").replace("damping = 2", "damping = 2.00").replace("a loop", "another title")
    other = other.replace('"stiffness*tilt"', '"(stiffness * tilt)"').replace("[-4, 4]", "[-4.0, +4]")
    resolved = read_text(LOOP, "a.toml").resolved()
    lines = ['stiffness = { value = 1.0e-1, unit = "1/s^2" }', "damping = 2.00"]
    other = other.replace("\n".join(lines), "\n".join(reversed(lines)))
    assert json.dumps(read_text(other, "b.toml").resolved()) == json.dumps(resolved)
    assert read_text(other + "\n[sweep]\nrtol = 0.000001 # the default\n", "b.toml").resolved() == resolved
    assert json.loads(json.dumps(resolved)) == resolved
    assert resolved["parameters"] == {"stiffness": "0.1", "damping": "2"}
    assert resolved["sweep"]["samples"] == 262144


@pytest.mark.parametrize(
    ("old", "new"),
    [
        ("value = 0.1", "value = 0.10000000000000000000001"),
        ("-1, 1)", "-1, 2)"),
        ('rate = "torque"', 'rate = "torque - rate"'),
        ("[-4, 4]", "[-4, 5]"),
        ("tilt = 0.0", "tilt = 0.1"),
        ("[domain]", '[bound]\nQ = "domain"\n[domain]'),
        ("[domain]", '[bound]\nV = "tilt**2 + rate**2"\n[domain]'),
        ("[domain]", "[bound]\nP = [[1, 0], [0, 1]]\n[domain]"),
        ("[domain]", "[sweep]\nescape = 3\n[domain]"),
        ("[domain]", "[sweep]\nsamples = 3\n[domain]"),
    ],
)
def test_resolved_changes_with_what_changes_results(old, new):
    assert read_text(with_change(old, new), "a.toml").resolved() != read_text(LOOP, "a.toml").resolved()


@given(
    st.integers(0, len(LOOP) - 1),
    st.integers(0, 12),
    st.text(alphabet="=\"[]{}.,-*\n tilra01e_#'\\n", max_size=12),
)
def test_whatever_is_typed_is_read_or_refused_in_sentences(start, length, typed):
    faults = ()
    try:
        read_text(LOOP[:start] + typed + LOOP[start + length :], "a.toml")
    except UserError as error:
        faults = error.faults or ["no sentence at all"]
    assert all(fault.startswith("a.toml: ") and "\n" not in fault for fault in faults)
