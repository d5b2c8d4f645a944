"""Look-up tables: the curve against scipy's interpolants, what a file may hold, and what is refused with a sentence."""

from decimal import Decimal

import numpy as np
import pytest
from scipy.interpolate import PchipInterpolator

import gallery
from roa.errors import UserError
from roa.loop.lookup_table import LookupTable
from roa.loop.read import read, read_text
from roa.loop.read_tables import MOST_ROWS

LOOP = """
title = "a valve"
[states]
x = "m"
[dynamics]
x = "-lookup(curve, x)"
[domain]
x = [-1, 1]
"""
POINTS = "x = [-2, 0, 0.5, 3]\ny = [-1, 0, 2, 2.5]\n"


def with_table(text, name="curve"):
    return f"{LOOP}[tables.{name}]\n{text}\n"


def curve(kind="linear", beyond="linear"):
    return read_text(with_table(f'{POINTS}kind = "{kind}"\nbeyond = "{beyond}"'), "a.toml").loop.tables["curve"]


def faults(text, folder=None):
    with pytest.raises(UserError) as caught:
        read_text(text, "a.toml", folder)
    return caught.value.faults


def random_tables():
    rng = np.random.default_rng(1)
    for count in (2, 3, 4, 20, 200):
        for _ in range(12):
            x = np.unique(np.round(rng.uniform(-3, 3, count), 4))
            y = np.round(rng.normal(size=len(x)) * rng.choice([1, 100]), 3)
            y = np.sort(y) if rng.random() < 0.3 else np.round(y) if rng.random() < 0.2 else y
            if len(x) > 1:
                yield x, y, np.concatenate([rng.uniform(x[0], x[-1], 200), x])


def exact(values):
    return tuple(Decimal(repr(float(value))) for value in values)


def test_linear_and_pchip_are_those_of_numpy_and_scipy():
    for x, y, points in random_tables():
        size = np.abs(y).max()
        straight = LookupTable("a", exact(x), exact(y))
        np.testing.assert_allclose(straight.value(points), np.interp(points, x, y), rtol=1e-12, atol=1e-12 * size)
        smooth, theirs = LookupTable("a", exact(x), exact(y), "pchip", "refuse"), PchipInterpolator(x, y)
        np.testing.assert_allclose(smooth.value(points), theirs(points), rtol=1e-12, atol=1e-12 * size)
        slopes = theirs(points, 1)
        np.testing.assert_allclose(smooth.slope(points), slopes, rtol=1e-9, atol=1e-9 * np.abs(slopes).max())


@pytest.mark.parametrize("kind", ["linear", "pchip"])
def test_beyond_its_ends_a_curve_is_straight_or_refused(kind):
    straight, refused = curve(kind), curve(kind, "refuse")
    for end, outward in ((-2.0, -1), (3.0, 1)):
        slope = straight.slope(end + outward * 1e-9)
        assert straight.slope(end + outward) == slope == straight.slope(end + 50 * outward)
        assert straight.value(end + 7 * outward) == pytest.approx(straight.value(end) + 7 * outward * slope)
        assert refused.value(end) == pytest.approx(straight.value(end))
        assert np.isnan(refused.value(end + 1e-9 * outward))
        assert np.isnan(refused.slope(end + outward))
        assert list(refused.leaves(np.array([end, end + 1e-9 * outward]))) == [False, True]
    assert not straight.leaves(100.0)


def test_slopes_of_a_loop_go_through_its_tables():
    text = with_table(f'{POINTS}kind = "pchip"').replace(
        '"-lookup(curve, x)"', '"-x*lookup(curve, sin(x)) + lookup(curve, 1)"'
    )
    loop = read_text(text, "a.toml").loop
    x = np.linspace(-0.9, 0.9, 41)[:, None]
    h = 1e-6
    difference = (loop.rhs(x + h) - loop.rhs(x - h)) / (2 * h)
    np.testing.assert_allclose(loop.jacobian(x)[:, :, 0], difference, rtol=1e-6, atol=1e-7)


def test_a_file_beside_the_configuration(tmp_path):
    (tmp_path / "deep").mkdir()
    text = '# measured in March\n\n"x", "y"\n-2, -1\n0 ,0\n.5,2\n3,2.5\n'
    for name, content in (("a.csv", text), ("deep/b.csv", text.replace(",", ";")), ("c.csv", text.replace(",", "\t"))):
        (tmp_path / name).write_text("\ufeff" + content, encoding="utf-8")
        (tmp_path / "a.toml").write_text(with_table(f'csv = "{name}"'), encoding="utf-8")
        assert read(tmp_path / "a.toml").loop.tables["curve"] == curve()


def test_what_was_read_is_kept_and_read_again_without_the_file(tmp_path):
    file, config = tmp_path / "curve.csv", tmp_path / "a.toml"
    file.write_bytes(b"x,y\r\n-2,-1\r\n0,0\r\n0.5,2\r\n3,2.5\r\n")
    config.write_text(with_table('csv = "curve.csv"'), encoding="utf-8")
    first = read(config)
    file.unlink()
    again = read_text(first.text, "run/config.toml")
    assert again.loop.tables == first.loop.tables == {"curve": curve()}
    assert again.text == first.text
    assert again.resolved() == first.resolved()
    assert "[files]" in first.text
    # Numbers alone count: a table in the configuration itself is the same study.
    assert read_text(with_table(POINTS), "a.toml").resolved() == first.resolved()


def test_numbers_and_kind_of_a_table_change_the_study():
    plain = read_text(with_table(POINTS), "a.toml").resolved()
    for change in (("2.5", "2.6"), ("0.5", "0.25"), ("y =", 'kind = "pchip"\ny ='), ("y =", 'beyond = "refuse"\ny =')):
        assert read_text(with_table(POINTS.replace(*change)), "a.toml").resolved() != plain
    assert read_text(with_table(POINTS.replace("0.5", "5.0e-1")), "a.toml").resolved() == plain


@pytest.mark.parametrize(
    ("text", "sentence"),
    [
        ("x = [1, 0, 2]\ny = [0, 1, 2]", "[tables.curve] x: x must rise from row to row; row 2 has 0 after 1"),
        ("x = [0, 0, 2]\ny = [0, 1, 2]", "[tables.curve] x: x must rise from row to row; row 2 has 0 after 0"),
        ("x = [1]\ny = [0]", "[tables.curve] x: 1 row found; accepted are 2 to 1000"),
        ("x = []\ny = []", "[tables.curve] x: 0 rows found; accepted are 2 to 1000"),
        ("x = [0, 1]\ny = [0, nan]", "[tables.curve] y = nan: entry 2 must be a finite number"),
        ("x = [0, inf]\ny = [0, 1]", "[tables.curve] x = inf: entry 2 must be a finite number"),
        ('x = [0, "1"]\ny = [0, 1]', '[tables.curve] x = "1": entry 2 must be a number, text found'),
        ("x = [0, 1]\ny = [0]", "[tables.curve] x: x and y must have as many numbers as each other; 2 and 1 found"),
        ("x = [0, 1]\ny = 3", "[tables.curve] y = 3: must be a list of numbers, a number found"),
        ("x = [0, 1]", '[tables.curve]: y missing; give csv = "FILE", or x = […] and y = […]'),
        ("", '[tables.curve]: x and y missing; give csv = "FILE", or x = […] and y = […]'),
        (f'csv = "a.csv"\n{POINTS}', "[tables.curve]: either csv or x and y is accepted; both are found"),
        (f'kindd = "linear"\n{POINTS}', "[tables.curve] kindd: unknown key; accepted are csv, x, y, kind, beyond"),
        (f'kind = "spline"\n{POINTS}', '[tables.curve] kind = "spline": must be one of linear, pchip'),
        (f'beyond = "hold"\n{POINTS}', '[tables.curve] beyond = "hold": must be one of linear, refuse'),
        ("csv = 3", "[tables.curve] csv = 3: must be the name of a file in quotes, a number found"),
        ('csv = "a.csv"', "was not read from a file, so there is no folder to look in"),
    ],
)
def test_a_faulty_table_is_one_sentence(text, sentence):
    (fault,) = faults(with_table(text))
    assert sentence in fault
    assert fault.startswith("a.toml: ")


@pytest.mark.parametrize(
    ("content", "sentence"),
    [
        (b"x,y\n0,0\n2,1\n1,3\n", "x must rise from row to row; row 3 has 1 after 2"),
        (b"x,y\n0,0\n", "1 row found; accepted are 2 to 1000"),
        (b"", "0 rows found"),
        (b"0,0\n1,nan\n", 'line 2: "nan" must be a finite number'),
        (b"0,0\n1,1e400\n", 'line 2: "1e400" is out of range'),
        (b"0,0\n1,one\n", 'line 2: "one" is not a number'),
        (b"x,y\nx,y\n1,2\n", 'line 2: "x" is not a number'),
        (b"0,0\n1,2,3\n", "line 2: two columns are accepted, 3 found"),
        (b"0,0\n1\n", "line 2: two columns are accepted, 1 found"),
        (b"0,0\n1,\xff\n", "not a text file in UTF-8 (byte 6)"),
        (b"0,0\n1,1\n#" + b"-" * 100_000, "bytes, at most 100000 are accepted"),
        (b"# '''\n0,0\n1,1\n", "characters that a table of numbers does not need"),
        (b"".join(b"%d,0\n" % i for i in range(MOST_ROWS + 1)), "1001 rows found; accepted are 2 to 1000"),
    ],
)
def test_a_faulty_file_is_one_sentence(tmp_path, content, sentence):
    (tmp_path / "curve.csv").write_bytes(content)
    (fault,) = faults(with_table('csv = "curve.csv"'), tmp_path)
    assert fault.startswith('a.toml: [tables.curve] csv = "curve.csv": ')
    assert sentence in fault


def test_only_files_in_the_folder_of_the_configuration_are_read(tmp_path):
    inside = tmp_path / "inside"
    inside.mkdir()
    secret = tmp_path / "secret.csv"
    secret.write_text("0,0\n1,1\n")
    (inside / "link.csv").symlink_to(secret)
    for name in ("../secret.csv", str(secret), "link.csv", "x/../../secret.csv"):
        (fault,) = faults(with_table(f'csv = "{name}"'), inside)
        assert "lies outside the folder of the configuration" in fault
    (fault,) = faults(with_table('csv = "curve.csv"'), inside)
    assert f"no such file in the folder of the configuration, {inside}" in fault
    (fault,) = faults(with_table('csv = "."'), inside)
    assert "is no file" in fault


def test_stored_files_are_all_that_there_are(tmp_path):
    (tmp_path / "other.csv").write_text("0,0\n1,1\n")
    text = with_table('csv = "other.csv"') + '[files]\n"curve.csv" = "0,0\\n1,1\\n"\n'
    (fault,) = faults(text, tmp_path)
    assert "is missing in [files]" in fault
    (fault,) = faults(with_table(POINTS) + "[files]\na = 3\n")
    assert "[files] a = 3: must be the text of a file, a number found" in fault


@pytest.mark.parametrize(
    ("formula", "sentence"),
    [
        ("lookup(curv, x)", 'no look-up table is called "curv"; tables are curve (did you mean "curve"?)'),
        ("lookup(curve)", "lookup takes the name of a table and one argument: lookup(table, x)"),
        ("lookup(curve, x, 2)", "lookup takes the name of a table and one argument"),
        ("lookup()", "lookup takes the name of a table and one argument"),
        ("lookup(2*x, x)", "lookup takes the name of a table and one argument"),
        ("lookup(curve, at=x)", "arguments have no names in formulas"),
        ("lookup(curve, z)", 'unknown name "z"'),
        ("curve*x", '"curve" is a look-up table; write lookup(curve, …)'),
        ("lookup", "lookup is a function and needs its arguments in brackets"),
        ("lookop(x)", 'unknown function "lookop" (did you mean "lookup"?)'),
    ],
)
def test_a_faulty_use_is_one_sentence(formula, sentence):
    fault = faults(with_table(POINTS).replace("-lookup(curve, x)", formula))[0]
    assert sentence in fault


def test_without_tables_the_sentence_says_so():
    (fault,) = faults(LOOP)
    assert 'no look-up table is called "curve"; the configuration has no table [tables.…]' in fault


def test_a_name_is_one_thing_alone():
    (fault,) = faults(with_table(POINTS, "x").replace("curve", "x"))
    assert "[tables] x: the name is taken already in [states]" in fault
    (fault,) = faults(LOOP + "[tables]\ncurve = 3\n")
    assert "[tables] curve = 3: must be a table [tables.curve], a number found" in fault


def test_a_formula_for_V_may_use_a_table():
    text = with_table(POINTS) + '[bound]\nV = "x**2 + 0.1*x*lookup(curve, x)"\n'
    assert read_text(text, "a.toml").bound.V is not None
    assert gallery.cubic().loop.tables == {}
