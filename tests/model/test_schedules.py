"""Schedules: values, exact integrals, interpolation, units, files, and what is refused."""

import pickle

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from scipy.integrate import quad
from scipy.interpolate import PchipInterpolator

from anneal_ref import Schedule
from anneal_ref.base.errors import InputError

S = np.array([0.0, 0.1, 0.35, 0.5, 0.8, 1.0])
G = np.array([20.0, 12.0, 3.0, 0.8, 0.0, 0.0])
P = np.array([0.01, 0.5, 3.0, 5.0, 8.0, 10.0])
X = np.linspace(0, 1, 1001)


def a_table(**settings):
    return Schedule.from_table(S, G, P, **settings)


def schedules():
    return {
        "pchip": a_table(),
        "broken line": a_table(interpolation="linear"),
        "polynomial": Schedule.polynomial([8, -16, 8], [-3, 0, 5, 1]),
        "constant": Schedule.polynomial([2.0], [1.0]),
        "linear": Schedule.linear((20, 0), (0, 10)),
        "sweep": Schedule.linear((1, 1), (-5, 5)),
    }


each = pytest.mark.parametrize("schedule", schedules().values(), ids=schedules().keys())


def test_table_passes_through_its_points_exactly():
    for interpolation in ("pchip", "linear"):
        schedule = a_table(interpolation=interpolation)
        assert np.array_equal(schedule.transverse(S), G)
        assert np.array_equal(schedule.problem(S), P)


def test_interpolations_against_scipy_and_numpy():
    smooth, straight = a_table(), a_table(interpolation="linear")
    assert np.allclose(smooth.transverse(X), PchipInterpolator(S, G)(X), rtol=0, atol=1e-13)
    assert np.allclose(smooth.problem(X), PchipInterpolator(S, P)(X), rtol=0, atol=1e-13)
    assert np.allclose(straight.transverse(X), np.interp(X, S, G), rtol=0, atol=1e-13)


def test_polynomial_is_the_polynomial():
    coefficients = [3.0, -7.0, 2.0, 5.0, 1.5, -0.25]
    schedule = Schedule.polynomial([1.0], coefficients)
    assert np.allclose(schedule.problem(X), np.polynomial.Polynomial(coefficients)(X), rtol=0, atol=1e-13)
    primitive = np.polynomial.Polynomial(coefficients).integ()
    assert np.allclose(schedule.problem_integral(0.2, X), primitive(X) - primitive(0.2), rtol=0, atol=1e-13)


def test_linear_ends_are_exact():
    schedule = Schedule.linear(transverse=(20.0, 0.0), problem=(0.0, 10.0))
    assert schedule.transverse([0, 0.25, 1]).tolist() == [20, 15, 0]
    assert schedule.problem([0, 0.25, 1]).tolist() == [0, 2.5, 10]
    assert float(schedule.transverse_integral(0, 1)) == pytest.approx(10, rel=1e-15)


@each
def test_integrals_against_quadrature(schedule):
    for low, high in ((0.0, 1.0), (0.05, 0.62), (0.9, 0.3), (0.4, 0.4)):
        between = [knot for knot in schedule.knots if min(low, high) < knot < max(low, high)]
        for strength, integral in (
            (schedule.transverse, schedule.transverse_integral),
            (schedule.problem, schedule.problem_integral),
        ):
            expected = quad(strength, low, high, points=between or None, epsabs=1e-12)[0]
            assert float(integral(low, high)) == pytest.approx(expected, abs=1e-11)


@given(*[st.floats(0, 1)] * 3)
def test_integrals_add_up(a, b, c):
    for schedule in schedules().values():
        for integral in (schedule.transverse_integral, schedule.problem_integral):
            assert float(integral(a, b) + integral(b, c)) == pytest.approx(float(integral(a, c)), abs=1e-13)
            assert integral(a, b) == -integral(b, a)
            assert integral(a, a) == 0


@each
def test_derivative_of_the_integral_is_the_strength(schedule):
    step = 1e-5
    inner = X[(np.abs(X[:, None] - schedule.knots) > step).all(axis=1)]
    slope = schedule.problem_integral(inner - step, inner + step) / (2 * step)
    assert np.allclose(slope, schedule.problem(inner), rtol=0, atol=2e-8)


@each
def test_vectorised_over_any_shape(schedule):
    grid = X[:1000].reshape(10, 100)
    assert schedule.transverse(grid).shape == (10, 100)
    assert schedule.transverse(grid)[3, 7] == schedule.transverse(float(grid[3, 7]))
    assert schedule.problem_integral(grid[:, :1], grid).shape == (10, 100)
    assert schedule.problem_integral(0.0, 1.0).shape == ()
    assert schedule.transverse([]).shape == (0,)


@each
def test_pickle_and_content_keep_every_bit(schedule):
    for again in (pickle.loads(pickle.dumps(schedule)), Schedule.from_dict(schedule.canonical_dict())):
        assert again.identity == schedule.identity
        assert again.unit == schedule.unit
        assert np.array_equal(again.transverse(X), schedule.transverse(X))
        assert np.array_equal(again.problem_integral(0, X), schedule.problem_integral(0, X))
        with pytest.raises(ValueError, match="read-only"):
            again.knots[0] = 1


def test_knots():
    assert a_table().knots.tolist() == S.tolist()
    assert Schedule.polynomial([1], [1]).knots.tolist() == [0, 1]


def test_between_knots_strengths_are_cubic():
    schedule = a_table()
    for left, right in zip(S[:-1], S[1:], strict=True):
        x = np.linspace(left, right, 9)
        for strength in (schedule.transverse, schedule.problem):
            assert np.abs(np.diff(strength(x), n=4)).max() < 1e-12


@given(
    st.lists(st.floats(0, 1e3, allow_subnormal=False), min_size=3, max_size=8),
    st.lists(st.floats(1e-3, 1), min_size=7, max_size=7),
)
def test_pchip_of_nonnegative_data_is_nonnegative_and_monotone(values, steps):
    s = np.concatenate([[0.0], np.cumsum(steps[: len(values) - 1])])
    s = s / s[-1]
    schedule = Schedule.from_table(s, values, values)
    fine = schedule.transverse(np.linspace(0, 1, 2001))
    assert fine.min() >= 0
    assert fine.max() <= max(values) * (1 + 1e-14)
    for left, right, low, high in zip(s[:-1], s[1:], values[:-1], values[1:], strict=True):
        piece = np.diff(schedule.transverse(np.linspace(left, right, 50)))
        assert (piece * np.sign(high - low)).min() >= -1e-12 * max(values)


def test_units_and_prefactor():
    gigahertz = a_table(unit="GHz", prefactor=0.5)
    plain = a_table()
    assert gigahertz.unit == plain.unit == "rad/ns"
    assert np.allclose(gigahertz.transverse(X), np.pi * plain.transverse(X), rtol=1e-15)
    assert np.allclose(gigahertz.problem_integral(0, X), np.pi * plain.problem_integral(0, X), rtol=1e-14)
    assert a_table(unit="1").unit == "1"
    assert float(Schedule.linear((1, 0), (0, 1), unit="GHz").problem(1)) == 2 * np.pi
    assert float(Schedule.polynomial([1], [0, 1], unit="GHz", prefactor=0.5).problem(1)) == np.pi


def test_identity_is_of_the_content():
    assert a_table().identity == a_table(unit="rad/ns", prefactor=1).identity
    assert a_table(unit="GHz").identity == Schedule.from_table(S, G * (2 * np.pi), P * (2 * np.pi)).identity
    different = [a_table(), a_table(unit="1"), a_table(prefactor=2), a_table(interpolation="linear")]
    different += [Schedule.from_table(S, G, P + 1), Schedule.from_table(S, G + 1, P), Schedule.from_table(S**2, G, P)]
    assert len({schedule.identity for schedule in different}) == len(different)


def test_identity_is_frozen():
    schedule = Schedule.from_table([0, 0.4, 1], [6.4, 1.2, 0], [0, 2, 9.6], unit="GHz", prefactor=0.5)
    assert schedule.identity == "5a8077bff0d3ff8717224469136fcd9f5b370c2d4b97ba134391d9dcfeb8539a"


def test_description():
    assert repr(a_table()) == (
        "<Schedule pchip through 6 points: transverse 20 to 0 rad/ns, problem 0.01 to 10 rad/ns>"
    )
    assert Schedule.polynomial([1], [2], unit="1").describe() == {
        "schedule": "polynomial", "unit": "1", "transverse": "1 to 1", "problem": "2 to 2",
    }  # fmt: skip


# negative transverse strengths


@pytest.mark.parametrize(
    "coefficients",
    [[1, -2, 1], [0.25, -1, 1], [0.09, -0.6, 1], [0, 0, 1], [0.0081, -0.108, 0.54, -1.2, 1], [0.0]],
)
def test_polynomials_may_touch_zero(coefficients):
    schedule = Schedule.polynomial(coefficients, [1])
    assert schedule.transverse(X).min() >= -1e-15


@given(st.lists(st.floats(-3, 3), min_size=1, max_size=7))
def test_negative_polynomials_are_refused(coefficients):
    least = np.polynomial.Polynomial(coefficients)(np.linspace(0, 1, 4001)).min()
    assume(abs(least) > 1e-5)
    if least < 0:
        with pytest.raises(InputError, match="transverse must not be negative between s = 0 and 1; it is -"):
            Schedule.polynomial(coefficients, [1])
    else:
        Schedule.polynomial(coefficients, [1])


# files


def write(tmp_path, text):
    file = tmp_path / "schedule.csv"
    file.write_text(text)
    return file


def test_csv(tmp_path):
    file = write(
        tmp_path,
        "# made up\n# unit: GHz\n# prefactor: 0.5\n\nproblem, s ,transverse\n0,0,3.5\n# between\n1.5,0.5,1\n4,1,0\n",
    )
    expected = Schedule.from_table([0, 0.5, 1], [3.5, 1, 0], [0, 1.5, 4], unit="GHz", prefactor=0.5)
    assert Schedule.read_csv(file).identity == expected.identity
    assert Schedule.read_csv(file, unit="GHz", prefactor=0.5).identity == expected.identity
    assert Schedule.read_csv(str(file), interpolation="linear").describe()["schedule"] == "linear through 3 points"


def test_csv_defaults_to_rad_per_ns_and_takes_the_callers_unit(tmp_path):
    file = write(tmp_path, "\ufeffs,transverse,problem\r\n0,1,0\r\n1,0,1\r\n")
    assert float(Schedule.read_csv(file).problem(1.0)) == 1.0
    assert float(Schedule.read_csv(file, unit="GHz").problem(1.0)) == 2 * np.pi
    assert float(Schedule.read_csv(file, prefactor=3).problem(1.0)) == 3


HEAD = "s,transverse,problem\n"


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", "the file holds no table; it needs a line with the names s,transverse,problem"),
        (HEAD, "the file holds no table"),
        ("0,1,0\n1,0,1\n", "line 1: the first line must name the columns.*got '0', '1', '0'"),
        ("s;transverse;problem\n", "line 1: .*separated by commas.*got 's;transverse;problem'"),
        ("s,transverse,problem,extra\n", "line 1: .*and no others; got .*'extra'"),
        (HEAD + "0,1,0\n0.5,1\n1,0,1\n", "line 3: a row must have 3 numbers; got 2"),
        (HEAD + "0,1,0\n\n0.5,x,1\n", "line 4: transverse must be a finite number; got 'x'"),
        (HEAD + "0,1,nan\n", "line 2: problem must be a finite number; got 'nan'"),
        (HEAD + "0,1,0\n0.5,1,1\n0.5,0,1\n", "line 4: s must ascend strictly; got 0.5 after 0.5"),
        (HEAD + "0,1,0\n0.5,-1,1\n", "line 3: transverse must not be negative; got -1.0"),
        (HEAD + "0,1,0\n0.5,1,1\n", "schedule.csv: s must run from exactly 0 to exactly 1; got 0.0 to 0.5"),
        (
            "# unit: MHz\n" + HEAD + "0,1,0\n1,0,1\n",
            "schedule.csv: unit must be one of .*got 'MHz'; did you mean 'GHz'",
        ),
        ("# prefactor: half\n" + HEAD + "0,1,0\n1,0,1\n", "prefactor must be a positive number; got 'half'"),
        ("# prefactor: -1\n" + HEAD + "0,1,0\n1,0,1\n", "prefactor must be a positive number; got -1"),
        (HEAD + "0,1,0\n# unit: GHz\n1,0,1\n", "line 3: `unit` must be given once, before the first row"),
        ("# unit: GHz\n# unit: GHz\n" + HEAD, "line 2: `unit` must be given once"),
    ],
)
def test_bad_csv_names_file_and_line(text, message, tmp_path):
    with pytest.raises(InputError, match=message) as caught:
        Schedule.read_csv(write(tmp_path, text))
    assert "schedule.csv" in str(caught.value)


def test_csv_and_caller_may_not_contradict(tmp_path):
    file = write(tmp_path, "# unit: GHz\n# prefactor: 0.5\n" + HEAD + "0,1,0\n1,0,1\n")
    with pytest.raises(InputError, match="the file says unit GHz, the caller rad/ns; take one of them away"):
        Schedule.read_csv(file, unit="rad/ns")
    with pytest.raises(InputError, match="the file says prefactor 0.5, the caller 1"):
        Schedule.read_csv(file, prefactor=1.0)


def test_missing_and_unreadable_csv(tmp_path):
    with pytest.raises(InputError, match="there is no schedule file .*nowhere.csv"):
        Schedule.read_csv(tmp_path / "nowhere.csv")
    with pytest.raises(InputError, match="cannot be read"):
        Schedule.read_csv(tmp_path)
    (tmp_path / "a.csv").write_bytes(b"\xff\xfe\x00\x00")
    with pytest.raises(InputError, match="cannot be read"):
        Schedule.read_csv(tmp_path / "a.csv")


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: Schedule.from_table([0], [1], [1]), "s must have at least 2 points, 0 and 1; got 1"),
        (lambda: Schedule.from_table([0, 1], [1], [1, 1]), "same length; got 2 values of s and 1 of transverse"),
        (lambda: Schedule.from_table([0, 1], [1, 1], [1, 1, 1]), "2 values of s and 3 of problem"),
        (
            lambda: Schedule.from_table([0, 0.6, 0.4, 1], [1] * 4, [1] * 4),
            r"unsorted value: s\[1\] = 0.6, s\[2\] = 0.4",
        ),
        (lambda: Schedule.from_table([0, 0.5, 0.5, 1], [1] * 4, [1] * 4), r"repeated value: s\[1\] = 0.5"),
        (lambda: Schedule.from_table([0, 0.5, 0.5 + 1e-13, 1], [1] * 4, [1] * 4), "at least 1e-09 apart.*short ramp"),
        (lambda: Schedule.from_table([0.1, 1], [1, 1], [1, 1]), "exactly 0 to exactly 1; got 0.1 to 1.0; extend"),
        (lambda: Schedule.from_table([0, 0.999], [1, 1], [1, 1]), "exactly 0 to exactly 1; got 0.0 to 0.999"),
        (lambda: Schedule.from_table([0, np.nan, 1], [1] * 3, [1] * 3), r"s must be finite; got s\[1\] = nan"),
        (lambda: Schedule.from_table([0, 1], [1, np.inf], [1, 1]), r"transverse must be finite; got transverse\[1\]"),
        (
            lambda: Schedule.from_table([0, 1], [1, -0.1], [1, 1]),
            "transverse must not be negative; got -0.1 at s = 1.0",
        ),
        (lambda: Schedule.from_table([0, 1], [1, 1e308], [1, 1], unit="GHz"), r"finite; got transverse\[1\] = inf"),
        (lambda: a_table(unit="ghz"), "unit must be one of 'rad/ns', 'GHz', '1'; got 'ghz'"),
        (lambda: a_table(prefactor=0), "prefactor must be a positive number; got 0.0"),
        (lambda: a_table(interpolation="cubic"), "interpolation must be one of 'pchip', 'linear'; got 'cubic'"),
        (lambda: Schedule.polynomial([], [1]), "transverse must have from 1 to 31 coefficients; got 0; use a table"),
        (lambda: Schedule.polynomial([1, np.nan], [1]), r"transverse must be finite; got transverse\[1\] = nan"),
        (lambda: Schedule.polynomial([1, -2], [1]), "transverse must not be negative .* it is -1 at s = 1"),
        (lambda: Schedule.linear(transverse=(1, -1)), "transverse must not be negative; got -1.0 at s = 1.0"),
        (lambda: Schedule.linear(problem=(0, 1, 2)), r"problem must have shape \(2,\); got shape \(3,\)"),
        (lambda: Schedule.from_dict({"kind": "spline"}), "kind must be one of 'table', 'polynomial'; got 'spline'"),
        (lambda: Schedule.from_dict({"kind": "table", "s": [0, 1]}), "content does not fit"),
        (lambda: a_table().transverse(1.1), "from its start .0. to its end .1.; got 1.1 of the way"),
        (lambda: a_table().problem([0, np.nan]), "got nan of the way"),
        (lambda: a_table().problem_integral(-0.1, 1), "got -0.1 of the way"),
    ],
)
def test_bad_input(call, message):
    with pytest.raises(InputError, match=message):
        call()


def test_rounding_beyond_the_ends_counts_as_the_ends():
    schedule = a_table()
    assert schedule.problem(1 + 1e-15) == P[-1]
    assert schedule.transverse(-1e-15) == G[0]
