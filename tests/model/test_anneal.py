"""Anneals and waveforms: times, exact integrals through pauses, starts, identity, and what is refused."""

import pickle
import warnings

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.integrate import quad

import anneal_ref as ar
from anneal_ref import AnnealRefWarning, lattices
from anneal_ref.base.errors import InputError

INSTANCE = ar.Instance(lattices.chain(4), [1.0, -1.0, 0.5])
TABLE = ar.Schedule.from_table([0, 0.2, 0.45, 0.7, 1], [20, 11, 3, 0.5, 0], [0, 1.0, 4.0, 7.0, 10.0])
WAVEFORMS = {
    "none": None,
    "pause": ar.Waveform([0, 0.3, 0.5, 1], [0, 0.4, 0.4, 1]),
    "pause at a knot": ar.Waveform([0, 0.3, 0.5, 1], [0, 0.45, 0.45, 1]),
    "fast ending": ar.Waveform([0, 0.999, 1], [0, 0.5, 1]),
    "there and back": ar.Waveform([0, 0.4, 0.6, 1], [0, 0.8, 0.1, 1]),
    "late start": ar.Waveform([0, 0.25, 1], [0, 0, 1]),
    "early end": ar.Waveform([0, 0.5, 1], [0, 1, 1]),
}
each = pytest.mark.parametrize("waveform", WAVEFORMS.values(), ids=WAVEFORMS.keys())


def an_anneal(waveform=None, duration=7.0, **settings):
    return ar.Anneal(INSTANCE, TABLE, duration, waveform=waveform, **settings)


@each
def test_strengths_are_those_of_the_schedule_at_s_of_t(waveform):
    anneal = an_anneal(waveform)
    t = np.linspace(0, 7, 2001)
    s = t / 7 if waveform is None else np.interp(t / 7, waveform.u, waveform.s)
    assert np.allclose(anneal.transverse(t), TABLE.transverse(s), rtol=0, atol=1e-11)
    assert np.allclose(anneal.problem(t), TABLE.problem(s), rtol=0, atol=1e-11)
    assert anneal.transverse(t).min() >= 0
    assert (float(anneal.transverse(0)), float(anneal.problem(7.0))) == (20.0, 10.0)


@each
def test_integrals_in_time_against_quadrature(waveform):
    anneal = an_anneal(waveform)
    for t0, t1 in ((0.0, 7.0), (0.5, 6.995), (5.0, 1.0)):
        between = [knot for knot in anneal.knots if min(t0, t1) < knot < max(t0, t1)]
        for strength, integral in (
            (anneal.transverse, anneal.transverse_integral),
            (anneal.problem, anneal.problem_integral),
        ):
            expected = quad(strength, t0, t1, points=between, epsabs=1e-12)[0]
            assert float(integral(t0, t1)) == pytest.approx(expected, abs=1e-9)


@each
def test_between_knots_strengths_are_cubic(waveform):
    anneal = an_anneal(waveform)
    assert anneal.knots[0] == 0
    assert anneal.knots[-1] == 7
    assert (np.diff(anneal.knots) > 0).all()
    for left, right in zip(anneal.knots[:-1], anneal.knots[1:], strict=True):
        for strength in (anneal.transverse, anneal.problem):
            assert np.abs(np.diff(strength(np.linspace(left, right, 9)), n=4)).max() < 1e-10


def test_knots_are_corners_of_the_waveform_and_knots_of_the_schedule():
    assert an_anneal().knots.tolist() == (7 * TABLE.knots).tolist()
    anneal = an_anneal(ar.Waveform([0, 0.5, 0.6, 1], [0, 0.5, 0.5, 1]), duration=10)
    assert anneal.knots == pytest.approx([0, 2, 4.5, 5, 6, 6 + 4 * 0.4, 10])


@given(*[st.floats(0, 7)] * 3, st.sampled_from(list(WAVEFORMS)))
def test_integrals_add_up(a, b, c, name):
    anneal = an_anneal(WAVEFORMS[name])
    for integral in (anneal.transverse_integral, anneal.problem_integral):
        assert float(integral(a, b) + integral(b, c)) == pytest.approx(float(integral(a, c)), abs=1e-11)
        assert integral(a, b) == -integral(b, a)


points = st.lists(st.floats(0, 1), min_size=1, max_size=5)


@given(points, st.lists(st.floats(0.01, 1), min_size=6, max_size=6))
def test_any_waveform(s, steps):
    u = np.concatenate([[0], np.cumsum(steps[: len(s) + 1])])
    waveform = ar.Waveform(u / u[-1], [0, *s, 1])
    anneal = an_anneal(waveform, duration=1.0)
    t = np.linspace(0, 1, 301)
    assert np.allclose(anneal.problem(t), TABLE.problem(waveform.at(t)), rtol=0, atol=1e-9)
    coarse, fine = anneal.problem_integral(0.0, 1.0), anneal.problem_integral(t[:-1], t[1:]).sum()
    assert float(coarse) == pytest.approx(float(fine), abs=1e-11)


def test_pause_adds_its_length_times_the_strength():
    anneal = an_anneal(ar.Waveform([0, 0.3, 0.5, 1], [0, 0.4, 0.4, 1]), duration=10)
    assert float(anneal.problem_integral(3, 5)) == pytest.approx(2 * float(TABLE.problem(0.4)), rel=1e-13)
    assert float(anneal.transverse_integral(0, 3)) == pytest.approx(
        7.5 * float(TABLE.transverse_integral(0, 0.4)), rel=1e-13
    )


def test_straight_waveform_is_no_waveform():
    straight = an_anneal(ar.Waveform([0, 0.25, 1], [0, 0.25, 1]))
    assert straight.identity == an_anneal().identity
    assert straight.waveform is None  # its points would be corners, and so other digits under one identity
    assert straight.knots.tolist() == an_anneal().knots.tolist()


def test_vectorised():
    anneal = an_anneal()
    t = np.linspace(0, 7, 12).reshape(3, 4)
    assert anneal.transverse(t).shape == (3, 4)
    assert anneal.problem_integral(t[:, :-1], t[:, 1:]).shape == (3, 3)
    assert np.shape(anneal.problem_integral(0, 1)) == ()
    assert anneal.problem_integral(0.0, 7 * (1 + 1e-15)) == anneal.problem_integral(0.0, 7.0)


# the start


def test_start_far_from_the_ground_state_warns_with_the_number():
    schedule = ar.Schedule.linear((10, 0), (2, 10))
    with pytest.warns(AnnealRefWarning, match=r"is 0.4 times its transverse energy .*give start=\"ground\""):
        ar.Anneal(ar.Instance(lattices.chain(3), [1.0, -1.0]), schedule, 1.0)


@pytest.mark.parametrize(
    ("instance", "problem", "number"),
    [
        (ar.Instance(lattices.chain(2), [0.0], fields=[0.0, -2.0]), -5.0, "1"),
        (ar.Instance(lattices.chain(2), [1.0], transverse=[1.0, 0.5]), 1.0, "0.2"),
        (ar.Instance(lattices.chain(2), [1.0], transverse=[1.0, 0.0]), 1.0, "inf"),
    ],
)
def test_the_number_counts_fields_weights_and_signs(instance, problem, number):
    with pytest.warns(AnnealRefWarning, match=f"is {number} times"):
        ar.Anneal(instance, ar.Schedule.linear((10, 0), (problem, 10)), 1.0)


def test_no_warning_where_none_is_due():
    steep = ar.Schedule.linear((10, 0), (2, 10))
    with warnings.catch_warnings(record=True) as heard:
        warnings.simplefilter("always")
        ar.Anneal(INSTANCE, steep, 1.0, start="ground")
        ar.Anneal(INSTANCE, ar.Schedule.linear((10, 0), (0.2, 10)), 1.0)
        ar.Anneal(INSTANCE, ar.Schedule.linear((0, 1), (0, 1)), 1.0)
        ar.Anneal(ar.Instance(lattices.chain(2), [0.0]), steep, 1.0)
    assert not heard


def test_unpickling_does_not_warn_again():
    with pytest.warns(AnnealRefWarning):
        anneal = ar.Anneal(INSTANCE, ar.Schedule.linear((1, 0), (1, 1)), 1.0)
    assert pickle.loads(pickle.dumps(anneal)).identity == anneal.identity


# identity, pickles, content


@each
def test_pickle_and_content_keep_everything(waveform):
    anneal = an_anneal(waveform, start="ground")
    t = np.linspace(0, 7, 50)
    for again in (pickle.loads(pickle.dumps(anneal)), ar.Anneal.from_dict(anneal.to_dict())):
        assert again.identity == anneal.identity
        assert (again.duration, again.start, again.n_sites) == (7.0, "ground", 4)
        assert np.array_equal(again.problem_integral(0, t), anneal.problem_integral(0, t))
        assert np.array_equal(again.knots, anneal.knots)
        with pytest.raises(ValueError, match="read-only"):
            again.instance.couplings[0] = 0


def test_identity_is_of_the_content():
    edges = lattices.from_edges(4, [(3, 2), (1, 0), (1, 2)])
    same = ar.Anneal(
        ar.Instance(edges, [0.5, 1.0, -1.0]), ar.Schedule.from_dict(TABLE.canonical_dict()), 7, "plus", None
    )
    assert same.identity == an_anneal().identity
    others = [an_anneal(waveform) for waveform in WAVEFORMS.values()]
    others += [an_anneal(duration=7.5), an_anneal(start="ground"), ar.Anneal(INSTANCE.gauge([1, 1, 1, -1]), TABLE, 7)]
    others += [ar.Anneal(INSTANCE, ar.Schedule.linear(), 7)]
    assert len({anneal.identity for anneal in others}) == len(others)


def test_identity_is_frozen():
    drawn = ar.draw_instance(lattices.square(4, 5, (False, True)), ar.disorder.plus_minus(), seed=11)
    schedule = ar.Schedule.from_table([0, 0.4, 1], [6.4, 1.2, 0], [0, 2, 9.6], unit="GHz", prefactor=0.5)
    anneal = ar.Anneal(drawn, schedule, duration=7.0)
    assert anneal.identity == "ce4783126c01ebb6bfa9492aa658d980c9805eb6654bedb72f76f38c7ca75c84"


def test_frozen():
    with pytest.raises(AttributeError):
        an_anneal().duration = 3
    with pytest.raises(ValueError, match="read-only"):
        WAVEFORMS["pause"].s[0] = 1


def test_description():
    row = an_anneal(WAVEFORMS["pause"]).describe()
    assert row["duration"] == "7 ns"
    assert row["waveform"] == "4 points"
    assert row["identity"] == an_anneal(WAVEFORMS["pause"]).identity[:12]
    assert repr(an_anneal()) == "<Anneal chain 4: 7 ns from plus>"
    bare = ar.Anneal(INSTANCE, ar.Schedule.linear((1, 0), (0, 1), unit="1"), 20)
    assert bare.describe()["duration"] == "20"
    assert bare.time_unit == ""


# bad input


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: an_anneal(duration=-3.0), "duration must be a positive number of ns; got -3.0"),
        (lambda: an_anneal(duration=0), "duration must be a positive number of ns; got 0"),
        (lambda: an_anneal(duration=np.nan), "duration must be a positive number of ns; got nan"),
        (lambda: an_anneal(duration="7"), "duration must be a positive number of ns; got '7'"),
        (lambda: an_anneal(start="plsu"), "start must be one of 'plus', 'ground'; got 'plsu'; did you mean 'plus'"),
        (lambda: ar.Anneal("chain", TABLE, 1), "instance must be an Instance; got a str"),
        (lambda: ar.Anneal(INSTANCE, None, 1), "schedule must be a Schedule; got a NoneType"),
        (lambda: an_anneal(waveform=[0, 1]), "waveform must be a Waveform or None; got a list"),
        (lambda: an_anneal().problem(7.1), "got 1.01.* of the way"),
        (lambda: an_anneal().problem_integral(0, np.inf), "got inf of the way"),
        (lambda: ar.Waveform([0, 0.5, 0.5, 1], [0, 0, 1, 1]), r"got u\[1\] = 0.5, u\[2\] = 0.5; a jump needs a short"),
        (lambda: ar.Waveform([0, 0.6, 0.5, 1], [0, 0, 1, 1]), r"u must ascend.*got u\[1\] = 0.6, u\[2\] = 0.5$"),
        (lambda: ar.Waveform([0, 0.5, 0.5 + 1e-14, 1], [0, 0, 1, 1]), "at least 1e-09; .*a jump needs a short ramp"),
        (lambda: ar.Waveform([0.1, 1], [0, 1]), "u must start at 0 and end at 1; got 0.1 and 1.0"),
        (lambda: ar.Waveform([0, 1], [1, 0]), "s must start at 0 and end at 1; got 1.0 and 0.0"),
        (lambda: ar.Waveform([0, 0.5, 1], [0, 1.2, 1]), r"s must lie within \[0, 1\]; got s\[1\] = 1.2"),
        (lambda: ar.Waveform([0, 1], [0, 0.5, 1]), "same length of at least 2; got 2 and 3"),
        (lambda: ar.Waveform([0], [0]), "same length of at least 2; got 1 and 1"),
        (lambda: ar.Waveform([0, np.nan, 1], [0, 0.5, 1]), r"u must be finite; got u\[1\] = nan"),
        (lambda: WAVEFORMS["pause"].at(1.5), "got 1.5 of the way"),
    ],
)
def test_bad_input(call, message):
    with pytest.raises(InputError, match=message):
        call()
