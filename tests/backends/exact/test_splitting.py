"""Orders of the splittings, clocks, and what happens to the order when time is treated carelessly."""

import numpy as np
import pytest

import anneal_ref as ar
from anneal_ref.backends.exact import splitting as rooms
from anneal_ref.backends.exact.register import Register
from anneal_ref.backends.exact.splitting import (
    BLANES_MOAN_4,
    BLANES_MOAN_6,
    SPLITTINGS,
    STRANG,
    merge_steps,
    step_angles,
)

ALL = pytest.mark.parametrize("splitting", SPLITTINGS.values(), ids=SPLITTINGS.keys())


def dense_anneal(schedule, duration=3.0, n=5, waveform=None):
    generator = np.random.default_rng(4)
    lattice = ar.lattices.complete(n)
    couplings = generator.normal(size=len(lattice.edges))
    instance = ar.Instance(lattice, couplings, generator.normal(size=n), generator.uniform(0.5, 1.5, n))
    return ar.Anneal(instance, schedule, duration, waveform=waveform)


def cubic():
    return ar.Schedule.polynomial([2.5, -4.0, 3.0, -1.5], [0.0, 0.6, 1.0, -0.4])


def amplitudes(anneal, problem, transverse):
    instance = anneal.instance
    register = Register(instance.coupling_matrix(), instance.fields, instance.transverse, False, "double", 1)
    register.load_plus()
    problem_angles, transverse_angles, closing = merge_steps(problem, transverse)
    register.layers(np.append(problem_angles, closing), np.append(transverse_angles, 0.0))
    return register.amplitudes()


def evolved(anneal, steps, splitting):
    grid = np.linspace(0, anneal.duration, steps + 1)
    return amplitudes(anneal, *step_angles(anneal, grid, splitting))


def slope(counts, errors):
    return -np.polyfit(np.log(counts), np.log(errors), 1)[0]


def measured_order(anneal, splitting, counts, run=evolved):
    reference = evolved(anneal, 8 * counts[-1], BLANES_MOAN_6)
    return slope(counts, [np.linalg.norm(run(anneal, k, splitting) - reference) for k in counts])


COUNTS = {"strang": (80, 160, 320, 640), "blanes-moan-4": (40, 60, 90, 135), "blanes-moan-6": (20, 28, 40, 56)}


@ALL
def test_fractions_add_up_and_are_palindromes(splitting):
    for fractions in (splitting.problem, splitting.transverse):
        assert sum(fractions) == pytest.approx(1.0, abs=1e-15)
        assert fractions == fractions[::-1]
    assert len(splitting.problem) == splitting.stages + 1


@ALL
def test_clocks_stay_inside_the_step(splitting):
    # a schedule is not known outside [0, T]; checked here because it is false for other published splittings
    for fractions in (splitting.problem, splitting.transverse):
        clock = np.cumsum(fractions)
        assert clock.min() > 0
        assert clock.max() < 1 + 1e-12


@ALL
def test_measured_order(splitting):
    # source: orders stated by Blanes and Moan, J. Comput. Appl. Math. 142, 313 (2002), Table 2
    assert measured_order(dense_anneal(cubic()), splitting, COUNTS[splitting.name]) == pytest.approx(
        splitting.order, abs=0.2
    )


def frozen_at_midpoints(anneal, steps, splitting):
    """Negative control: both schedules frozen at the middle of each step."""
    grid = np.linspace(0, anneal.duration, steps + 1)
    middle, length = (grid[1:] + grid[:-1])[:, None] / 2, np.diff(grid)[:, None]
    problem = anneal.problem(middle) * length * np.array(splitting.problem)
    return amplitudes(anneal, problem, anneal.transverse(middle) * length * np.array(splitting.transverse))


@pytest.mark.parametrize("splitting", [BLANES_MOAN_4, BLANES_MOAN_6], ids=lambda s: s.name)
def test_schedules_frozen_at_midpoints_leave_order_two(splitting):
    order = measured_order(dense_anneal(cubic()), splitting, (40, 60, 90, 135), frozen_at_midpoints)
    assert order == pytest.approx(2.0, abs=0.2)


def kinked():
    """A schedule with corners at s = 1/3 and 2/3."""
    s = np.array([0, 1 / 3, 2 / 3, 1])
    return ar.Schedule.from_table(s, [2.5, 1.9, 0.4, 0.0], [0.0, 0.2, 1.4, 1.5], interpolation="linear")


def test_steps_across_corners_lose_the_order_and_steps_that_meet_them_keep_it(monkeypatch):
    anneal = dense_anneal(kinked())
    reference = evolved(anneal, 3 * 150, BLANES_MOAN_6)
    across = np.array([16, 32, 64])  # never a multiple of 3
    meeting = np.array([15, 30, 60])
    monkeypatch.setattr(rooms, "_straddling", lambda knots, grid: np.zeros(0, dtype=np.intp))
    lost = slope(across, [np.linalg.norm(evolved(anneal, k, BLANES_MOAN_6) - reference) for k in across])
    kept = slope(meeting, [np.linalg.norm(evolved(anneal, k, BLANES_MOAN_6) - reference) for k in meeting])
    assert kept > 5.5
    assert lost < 4.5


def test_fine_tables_are_straddled_without_loss():
    s = np.linspace(0, 1, 401)
    anneal = dense_anneal(ar.Schedule.from_table(s, 20 * (1 - s) ** 3, 10 * s**2, interpolation="linear"), 1.0)
    reference = amplitudes(anneal, *step_angles(anneal, s, BLANES_MOAN_6))
    assert np.linalg.norm(evolved(anneal, 64, BLANES_MOAN_6) - reference) < 2e-8
    smooth = dense_anneal(ar.Schedule.polynomial([20, -60, 60, -20], [0, 0, 10]), 1.0)
    assert np.linalg.norm(evolved(smooth, 64, BLANES_MOAN_6) - evolved(smooth, 400, BLANES_MOAN_6)) < 2e-8


@ALL
def test_straddling_a_knot_of_a_single_cubic_changes_nothing(splitting):
    # a table of a straight line is one polynomial: its knots are none
    s = np.linspace(0, 1, 6)
    line = ar.Schedule.from_table(s, 3 * (1 - s), 2 * s, interpolation="linear")
    anneal, plain = dense_anneal(line), dense_anneal(ar.Schedule.linear((3.0, 0.0), (0.0, 2.0)))
    grid = np.linspace(0, 3.0, 4)
    for ours, theirs in zip(step_angles(anneal, grid, splitting), step_angles(plain, grid, splitting), strict=True):
        np.testing.assert_allclose(ours, theirs, atol=1e-13)


def test_angles_add_up_to_the_integrals():
    anneal = dense_anneal(kinked(), 2.0)
    for grid in (np.array([0.0, 2.0]), np.linspace(0, 2.0, 8)):
        problem, transverse = step_angles(anneal, grid, BLANES_MOAN_4)
        assert problem.sum() == pytest.approx(float(anneal.problem_integral(0.0, 2.0)), abs=1e-13)
        assert transverse.sum() == pytest.approx(float(anneal.transverse_integral(0.0, 2.0)), abs=1e-13)


def test_merging_steps_changes_nothing():
    anneal = dense_anneal(cubic())
    problem, transverse = step_angles(anneal, np.linspace(0, 3, 4), STRANG)
    instance = anneal.instance
    register = Register(instance.coupling_matrix(), instance.fields, instance.transverse, False, "double", 1)
    register.load_plus()
    for k in range(3):
        register.layers(np.append(problem[k, :-1], problem[k, -1]), np.append(transverse[k], 0.0))
    np.testing.assert_allclose(register.amplitudes(), amplitudes(anneal, problem, transverse), atol=1e-14)
