from __future__ import annotations

import numpy as np
import pytest

import anneal_ref as ar
from anneal_ref.truth.deviations import deviating

LINE = ar.Schedule.linear(transverse=(8.0, 0.0), problem=(0.0, 6.0))
CURVED = ar.Schedule.polynomial(transverse=[20.0, -60.0, 60.0, -20.0], problem=[0.0, 0.5, 9.5])
TABLE = ar.Schedule.from_table(
    [0, 0.15, 0.4, 0.6, 0.85, 1],
    [3.1, 2.0, 0.8, 0.3, 0.02, 0],
    [0.0, 0.2, 0.7, 1.3, 2.0, 2.2],
    unit="GHz",
    prefactor=0.5,
)
PAUSE = ar.Waveform([0, 0.4, 0.6, 1], [0, 0.5, 0.5, 1])
INSTANCE = ar.draw_instance(
    ar.lattices.square(2, 3),
    ar.disorder.gaussian(0.7),
    ar.disorder.gaussian(0.3),
    ar.disorder.uniform(0.8, 1.2),
    seed=5,
)
CASES = [(LINE, None), (CURVED, None), (TABLE, None), (TABLE, PAUSE), (CURVED, PAUSE)]
EXACT = ar.StateVector(tolerance=1e-10)


def times(duration):
    return np.linspace(0.0, duration, 301)


def test_no_deviation_is_the_same_anneal():
    for schedule, waveform in CASES:
        anneal = ar.Anneal(INSTANCE, schedule, 3.0, waveform=waveform)
        assert deviating(anneal).identity == anneal.identity


@pytest.mark.parametrize(("schedule", "waveform"), CASES)
@pytest.mark.parametrize("ahead", [0.21, -0.34, 1e-4])
def test_strengths_are_scaled_and_the_problem_is_ahead(schedule, waveform, ahead):
    anneal = ar.Anneal(INSTANCE, schedule, 3.0, waveform=waveform)
    other = deviating(anneal, transverse_scale=0.1, problem_scale=-0.2, time_scale=0.5, time_offset=ahead)
    assert other.duration == pytest.approx(4.5, rel=1e-15)
    t = times(4.5)
    np.testing.assert_allclose(other.transverse(t), 1.1 * anneal.transverse(t / 1.5), rtol=1e-12, atol=1e-11)
    held = np.clip(t + ahead, 0.0, 4.5)
    np.testing.assert_allclose(other.problem(t), 0.8 * anneal.problem(held / 1.5), rtol=1e-12, atol=1e-11)


@pytest.mark.parametrize(("schedule", "waveform"), CASES)
def test_integrals_and_knots_go_with_the_strengths(schedule, waveform):
    other = deviating(ar.Anneal(INSTANCE, schedule, 3.0, waveform=waveform), time_offset=0.4)
    for strength, integral in (
        (other.transverse, other.transverse_integral),
        (other.problem, other.problem_integral),
    ):
        for left, right in zip(other.knots[:-1], other.knots[1:], strict=True):
            # Gauss-Legendre of 8 points is exact up to degree 15: both strengths are polynomials between knots
            nodes, weights = np.polynomial.legendre.leggauss(8)
            half = (right - left) / 2
            sums = half * weights @ strength(np.clip(left + half * (1 + nodes), left, right))
            np.testing.assert_allclose(integral(left, right), sums, rtol=1e-9, atol=1e-12)
    assert other.knots[0] == 0.0
    assert other.knots[-1] == 3.0


def test_couplings_fields_and_weights_deviate_one_by_one():
    anneal = ar.Anneal(INSTANCE, LINE, 1.0)
    shift = np.arange(INSTANCE.n_edges) / 10
    other = deviating(anneal, couplings=shift, fields=0.25, weights=np.full(6, -0.1)).instance
    np.testing.assert_allclose(other.couplings, INSTANCE.couplings + shift)
    np.testing.assert_allclose(other.fields, INSTANCE.fields + 0.25)
    np.testing.assert_allclose(other.transverse, 0.9 * INSTANCE.transverse)
    assert other.lattice is INSTANCE.lattice


def test_scales_of_both_strengths_are_a_scale_of_time():
    # exact: H(t/T) t depends on the product of strength and time alone
    for schedule, waveform in CASES:
        anneal = ar.Anneal(INSTANCE, schedule, 1.5, waveform=waveform)
        strong = EXACT.evolve(deviating(anneal, transverse_scale=0.07, problem_scale=0.07)).moments()
        long = EXACT.evolve(deviating(anneal, time_scale=0.07)).moments()
        short = EXACT.evolve(deviating(anneal, time_scale=-0.07)).moments()
        np.testing.assert_allclose(strong.zz.value, long.zz.value, atol=1e-9)
        # the twin with the wrong sign
        assert np.abs(strong.zz.value - short.zz.value).max() > 1e-3


def test_a_problem_scale_is_one_of_couplings_and_fields_together():
    anneal = ar.Anneal(INSTANCE, CURVED, 1.5)
    one = EXACT.evolve(deviating(anneal, problem_scale=0.05)).moments()
    other = EXACT.evolve(
        deviating(anneal, couplings=0.05 * INSTANCE.couplings, fields=0.05 * INSTANCE.fields)
    ).moments()
    np.testing.assert_allclose(one.zz.value, other.zz.value, atol=1e-9)
    np.testing.assert_allclose(one.z.value, other.z.value, atol=1e-9)


def test_nothing_is_lost_at_the_ends():
    # P late by 0.3: an anneal that is longer by 0.3 lets P come to its end, after G has gone to 0
    anneal = ar.Anneal(INSTANCE, LINE, 2.0)
    late = EXACT.evolve(deviating(anneal, time_offset=-0.3)).moments()
    grid = np.array([0.0, 0.3, 2.0, 2.3])
    longer = ar.Schedule.from_table(
        grid / 2.3, LINE.transverse(np.minimum(grid / 2, 1)), LINE.problem(np.clip((grid - 0.3) / 2, 0, 1)),
        interpolation="linear",
    )  # fmt: skip
    complete = EXACT.evolve(ar.Anneal(INSTANCE, longer, 2.3)).moments()
    np.testing.assert_allclose(late.zz.value, complete.zz.value, atol=1e-9)
    np.testing.assert_allclose(late.z.value, complete.z.value, atol=1e-9)
    # the twin that is early instead
    early = EXACT.evolve(deviating(anneal, time_offset=0.3)).moments()
    assert np.abs(early.zz.value - complete.zz.value).max() > 1e-2


def test_a_start_in_the_ground_state_is_that_of_the_deviating_hamiltonian():
    quench = ar.Schedule.linear(transverse=(1.0, 1.0), problem=(1.0, 1.0))
    anneal = ar.Anneal(INSTANCE, quench, 1.0, start="ground")
    other = deviating(anneal, problem_scale=0.3)
    still = EXACT.evolve(other, at=0.0).moments()
    # a ground state does not move
    np.testing.assert_allclose(EXACT.evolve(other).moments().zz.value, still.zz.value, atol=1e-9)
    assert np.abs(still.zz.value - EXACT.evolve(anneal, at=0.0).moments().zz.value).max() > 1e-2


def test_an_anneal_that_was_warned_about_is_not_warned_about_again():
    quench = ar.Schedule.linear(transverse=(1.0, 1.0), problem=(1.0, 1.0))
    with pytest.warns(ar.AnnealRefWarning):
        anneal = ar.Anneal(INSTANCE, quench, 1.0)
    deviating(anneal, problem_scale=0.1)


@pytest.mark.parametrize(
    ("deviation", "message"),
    [
        ({"transverse_scale": -1.0}, "transverse_scale must be above -1; got -1.0"),
        ({"time_scale": -2.0}, "time_scale must be above -1; got -2.0"),
        ({"problem_scale": np.nan}, "problem_scale must be a finite number"),
        ({"time_offset": -3.0}, "time_offset must be shorter than the duration, 3; got -3.0"),
        ({"couplings": np.zeros(6)}, r"couplings must be one number or have shape \(7,\); got shape \(6,\)"),
        ({"fields": [0.1]}, r"fields must be one number or have shape \(6,\)"),
        ({"weights": -1.5}, "transverse weights must be at least 0"),
    ],
)
def test_what_cannot_be_is_refused(deviation, message):
    with pytest.raises(ar.InputError, match=message):
        deviating(ar.Anneal(INSTANCE, LINE, 3.0), **deviation)
