"""Step ends meet what they must meet, and the strengths of the two sweeps make a step of fourth order."""

import numpy as np
import pytest

import anneal_ref as ar
from anneal_ref.backends.mps.chain import Chain, Limits
from anneal_ref.backends.mps.reading import moments_of
from anneal_ref.backends.mps.start import plus_state
from anneal_ref.backends.mps.steps import step_ends, sweep_strengths
from anneal_ref.backends.phase import phase_mesh

S = np.linspace(0, 1, 41)
SCHEDULES = {
    "polynomial": ar.Schedule.polynomial([5, -10, 5], [0, 2, 3]),
    "table": ar.Schedule.from_table(S, 5 * (1 - S) ** 2, 5 * S**1.5),
    "broken line": ar.Schedule.from_table([0, 0.3, 1], [5, 3, 0], [0, 0, 5], interpolation="linear"),
}


def anneal(schedule="polynomial", duration=2.0, waveform=None, fields=None, n=6):
    generator = np.random.default_rng(8)
    lattice = ar.lattices.ladder(n // 2)
    instance = ar.Instance(lattice, generator.normal(size=len(lattice.edges)), fields)
    return ar.Anneal(instance, SCHEDULES[schedule], duration, waveform=waveform)


WAVEFORM = ar.Waveform([0, 0.35, 0.61, 1], [0, 0.5, 0.5, 1])


# ---------------------------------------------------------------------------------------------------------- grids
@pytest.mark.parametrize("waveform", [None, WAVEFORM], ids=["straight", "pause"])
@pytest.mark.parametrize("schedule", SCHEDULES)
def test_grids_ascend_and_meet_marks_and_corners(schedule, waveform):
    case = anneal(schedule, waveform=waveform)
    marks = [0.123 * case.duration, 0.7 * case.duration]
    for step, halvings in ((0.3, 0), (1.0, 2), (4.0, 1)):
        grid = step_ends(case, phase_mesh(case), step, marks, halvings)
        assert (grid[0], grid[-1]) == (0.0, case.duration)
        assert (np.diff(grid) > 0).all()
        assert set(marks) <= set(grid)
        for corner in () if waveform is None else waveform.u * case.duration:
            assert np.abs(grid - corner).min() < 1e-12


@pytest.mark.parametrize("step", [0.1, 1.0, 3.0])
def test_no_step_is_longer_in_phase_than_asked(step):
    case = anneal()
    mesh = phase_mesh(case)
    lengths = np.diff(np.interp(step_ends(case, mesh, step, [0.41]), mesh.times, mesh.phase))
    assert lengths.max() < step * (1 + 1e-6)
    # and no more of them than the two pieces ask for
    assert len(lengths) <= mesh.total / step + 2


def test_knots_need_not_be_met():
    case = anneal("table")
    grid = step_ends(case, phase_mesh(case), 4.0, [])
    assert len(grid) < len(S)


def test_halvings_cut_every_step_in_two():
    case = anneal(waveform=WAVEFORM)
    coarse, fine = (step_ends(case, phase_mesh(case), 1.0, [0.4], halvings) for halvings in (0, 2))
    np.testing.assert_array_equal(fine[::4], coarse)
    np.testing.assert_allclose(np.diff(fine).reshape(-1, 4), np.diff(coarse)[:, None] / 4 * np.ones(4), rtol=1e-9)


def test_a_problem_part_at_once_starts_with_small_steps():
    constant = ar.Schedule.linear((1.0, 1.0), (1.0, 1.0))
    with pytest.warns(ar.AnnealRefWarning):
        quench = ar.Anneal(anneal().instance, constant, 2.0)
    grid = step_ends(quench, phase_mesh(quench), 1.0, [])
    steps = np.diff(grid)
    assert steps[0] == steps[1] < steps[-1] / 60
    np.testing.assert_allclose(steps[2:7] / steps[1:6], 2.0)
    np.testing.assert_allclose(steps[7:], grid[7] - grid[0])
    # a start that is entangled already, or a problem part that comes by and by, has no need of it
    ground = ar.Anneal(quench.instance, constant, 2.0, start="ground")
    assert len(step_ends(ground, phase_mesh(ground), 1.0, [])) == len(grid) - 6
    slow = np.diff(step_ends(anneal(), phase_mesh(anneal()), 1.0, []))
    assert slow[0] > slow.max() / 10


@pytest.mark.parametrize("marks", [(0.6, np.nextafter(0.6, 1)), (0.7, 1.2200000000000002, 1.22), (2.0 - 2e-16, 2.0)])
def test_marks_that_differ_by_rounding_share_a_step_end(marks):
    case = anneal(waveform=WAVEFORM)
    grid = step_ends(case, phase_mesh(case), 1.0, marks, halvings=3)
    assert np.diff(grid).min() > 1e-6
    assert np.abs(grid[:, None] - np.array(marks)).min(axis=0).max() < 1e-12


# ------------------------------------------------------------------------------------------------------ strengths
@pytest.mark.parametrize("schedule", SCHEDULES)
def test_both_sweeps_together_carry_the_whole_integral(schedule):
    case = anneal(schedule)
    for start, stop in ((0.0, 0.2), (0.37, 1.1), (1.9, 2.0)):
        first, second = sweep_strengths(case, start, stop)
        for part, integral in enumerate((case.transverse_integral, case.problem_integral)):
            assert first[part] + second[part] == pytest.approx(float(integral(start, stop)), abs=1e-14)


def test_a_straight_line_has_the_weights_of_the_commutator_free_scheme():
    # source: S. Blanes and P. C. Moan, Appl. Numer. Math. 56, 1519 (2006): 1/4 +- sqrt(3)/6 on the two Gauss points
    schedule = ar.Schedule.linear(transverse=(4.0, 1.0), problem=(-1.0, 3.0))
    with pytest.warns(ar.AnnealRefWarning):
        case = ar.Anneal(anneal().instance, schedule, 1.0)
    start, stop = 0.2, 0.7
    points = (start + stop) / 2 + (stop - start) * np.sqrt(3) / 6 * np.array([-1, 1])
    weights = np.array([[1 / 4 + np.sqrt(3) / 6, 1 / 4 - np.sqrt(3) / 6]]) * (stop - start)
    first, second = sweep_strengths(case, start, stop)
    for part, strength in enumerate((case.transverse, case.problem)):
        assert first[part] == pytest.approx(float((weights @ strength(points))[0]), abs=1e-14)
        assert second[part] == pytest.approx(float((weights @ strength(points)[::-1])[0]), abs=1e-14)


def test_frozen_strengths_are_those_of_the_middle():
    case = anneal()
    both = sweep_strengths(case, 0.4, 0.6, frozen=True)
    assert both[0] == both[1] == pytest.approx((0.1 * float(case.transverse(0.5)), 0.1 * float(case.problem(0.5))))


# ---------------------------------------------------------------------------------------------------------- order
def march(case, halvings, frozen=False):
    """Evolve at full bond dimension with the given strengths; return <ZZ> and <X>."""
    order = np.arange(case.n_sites)
    start = plus_state(case.instance, order, not case.instance.has_fields, np.complex128)
    chain = Chain(start, case.instance, Limits(1 << case.n_sites // 2, 0.0, 1e-13))
    grid = step_ends(case, phase_mesh(case), 1.0, [], halvings)
    for k in range(len(grid) - 1):
        for strengths in sweep_strengths(case, grid[k], grid[k + 1], frozen):
            chain.sweep(1.0, strengths, two_site=k % 4 == 0)
            chain.flip()
    return np.concatenate([np.ravel(values) for values in moments_of(chain.product())])


FIELDS = [0.3, -0.2, 0.0, 0.9, 0.1, -0.6]


@pytest.mark.parametrize("fields", [None, FIELDS], ids=["half", "whole"])
@pytest.mark.parametrize(("frozen", "order"), [(False, 4), (True, 2)], ids=["magnus", "frozen"])
def test_order(fields, frozen, order):
    case = anneal(fields=fields, duration=1.5)
    moments = ar.StateVector(tolerance=1e-11).evolve(case).moments()
    exact = np.concatenate([moments.z.value, moments.zz.value.ravel(), moments.x.value])
    errors = np.array([np.abs(march(case, halvings, frozen) - exact).max() for halvings in (1, 2, 3)])
    rates = np.log2(errors[:-1] / errors[1:])
    np.testing.assert_allclose(rates, order, atol=0.15)
    assert (errors[-1] > 1e-5) == frozen


def test_a_schedule_with_corners_keeps_little_error():
    # a corner inside a step costs the order, but not the convergence
    case = anneal("broken line", duration=1.5)
    moments = ar.StateVector(tolerance=1e-11).evolve(case).moments()
    exact = np.concatenate([moments.z.value, moments.zz.value.ravel(), moments.x.value])
    errors = [np.abs(march(case, halvings) - exact).max() for halvings in (1, 3)]
    assert errors[1] < errors[0] / 10
    assert errors[1] < 1e-4
