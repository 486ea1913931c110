"""Budget, choice of the back-end, and the second opinion."""

from __future__ import annotations

import numpy as np
import pytest

import anneal_ref as ar
from anneal_ref.truth import choosing
from anneal_ref.truth.choosing import choose_backend, default_mps
from anneal_ref.truth.opinions import Opinion
from anneal_ref.truth.refining import first_runs, plan_reference

RAMP = ar.Schedule.linear(transverse=(4.0, 0.0), problem=(0.0, 4.0))


def anneal(lattice, fields=None, duration=1.0, seed=1):
    return ar.Anneal(ar.draw_instance(lattice, ar.disorder.plus_minus(), fields=fields, seed=seed), RAMP, duration)


CUBE = anneal(ar.lattices.cubic(2, 2, 2))
CYLINDER = anneal(ar.lattices.square(6, 6, periodic=(False, True)))


# ---- the choice


def test_small_anneals_get_the_state_vector_and_large_ones_do_not():
    assert isinstance(choose_backend(CUBE, 1e-3, ar.Budget()), ar.StateVector)
    assert isinstance(choose_backend(CYLINDER, 1e-3, ar.Budget()), ar.MPS)


def test_a_long_chain_without_fields_gets_free_fermions():
    assert isinstance(choose_backend(anneal(ar.lattices.chain(200)), 1e-3, ar.Budget()), ar.FreeFermions)
    with_fields = anneal(ar.lattices.chain(60), fields=ar.disorder.constant(0.3))
    assert isinstance(choose_backend(with_fields, 1e-3, ar.Budget()), ar.MPS)


def test_a_budget_rules_back_ends_out():
    middle = anneal(ar.lattices.square(4, 5))
    assert isinstance(choose_backend(middle, 1e-3, ar.Budget(seconds=600)), ar.StateVector)
    assert isinstance(choose_backend(middle, 1e-3, ar.Budget(seconds=1e-3)), ar.MPS)
    assert isinstance(choose_backend(middle, 1e-3, ar.Budget(bytes=1e6)), ar.MPS)


def test_settings_follow_the_tolerance():
    loose, tight = default_mps(1e-2), default_mps(1e-5)
    assert loose.halvings < tight.halvings
    assert loose.truncation > tight.truncation


# ---- the budget


def test_a_budget_of_seconds_ends_the_refinement_and_says_so():
    truth = ar.reference(CUBE, tolerance=1e-12, backend=ar.MPS(4), samples=1, budget=1e-6)
    assert truth.outcome == "not converged"
    assert "out of the budget" in truth.stopped
    assert "s are allowed" in truth.stopped
    # without these there is no error
    assert len(truth.runs) == len(first_runs(ar.MPS(4)))
    with pytest.raises(ar.NotConverged, match="out of the budget"):
        ar.reference(CUBE, tolerance=1e-12, backend=ar.MPS(4), samples=1, budget=1e-6, strict=True)


def test_a_budget_of_bytes_ends_the_refinement_and_says_so():
    truth = ar.reference(CUBE, tolerance=1e-12, backend=ar.MPS(4), samples=1, budget=ar.Budget(bytes=10))
    assert "10 bytes are allowed" in truth.stopped


def test_the_most_runs_end_it_too():
    truth = ar.reference(CUBE, tolerance=1e-12, backend=ar.MPS(2), samples=1, max_runs=4)
    assert truth.stopped == "all runs made"
    assert max(run.times("bond_dimension") for run in truth.runs) == 3


@pytest.mark.parametrize("budget", ["an hour", True, -5, 0, float("nan")])
def test_a_budget_is_asked_for(budget):
    with pytest.raises(ar.InputError, match="budget|seconds"):
        ar.reference(CUBE, budget=budget)


def test_the_plan_of_a_reference_adds_up_its_runs():
    for backend in (ar.StateVector(), ar.MPS(8)):
        largest, seconds = plan_reference(CUBE, backend)
        assert seconds > largest.seconds > 0
        assert largest.backend == type(backend).__name__


# ---- the second opinion


def test_two_back_ends_agree():
    truth = ar.reference(CUBE, tolerance=1e-4, samples=1, independent=True)
    assert isinstance(truth.backend, ar.StateVector)
    assert isinstance(truth.second.backend, ar.MPS)
    assert truth.outcome == "converged"
    assert truth.second.worst <= 1
    assert "agrees" in str(truth)
    assert truth.identity != ar.reference(CUBE, tolerance=1e-4, samples=1).identity


def test_a_second_opinion_travels_through_the_archive(tmp_path):
    truth = ar.reference(CUBE, tolerance=1e-4, samples=100, independent=True)
    archive = ar.Archive(tmp_path)
    archive.add(truth)
    again = archive.open(truth.identity)
    assert str(again) == str(truth)
    np.testing.assert_array_equal(again.second.moments.zz.num, truth.second.moments.zz.num)
    assert archive.audit(recompute=1.0).sound


def test_a_wrong_second_back_end_is_an_outcome(monkeypatch):
    class Tilted(ar.MPS):
        """Solves an anneal of another duration."""

        def evolve(self, problem, at=1.0, kicks=(), run=None):
            other = ar.Anneal(problem.instance, problem.schedule, 1.03 * problem.duration)
            return super().evolve(other, at, kicks)

    monkeypatch.setattr(choosing, "default_mps", lambda tolerance: Tilted(bond_dimension=8))
    truth = ar.reference(CUBE, tolerance=1e-3, samples=1, independent=True)
    assert truth.outcome == "disagreement"
    assert truth.second.disagrees
    assert "disagrees" in str(truth)
    with pytest.raises(ar.NotConverged, match="contradict"):
        ar.reference(CUBE, tolerance=1e-3, samples=1, independent=True, strict=True)


def test_no_second_back_end_is_refused_before_any_work():
    large = anneal(ar.lattices.square(6, 6))
    with pytest.raises(ar.NotSupported, match="no second back-end"):
        ar.reference(large, independent=True)


def test_one_entry_far_off_disagrees():
    def moments(zz, bar):
        values = np.eye(8)
        values[0, 1] = values[1, 0] = zz
        return ar.Moments(ar.Estimate(np.zeros(8), 0.0, np.zeros(8)), ar.Estimate(values, 0.0, np.full((8, 8), bar)))

    for shift, disagrees in ((1e-3, False), (5.9e-3, False), (7e-3, True)):
        one = Opinion.of(CUBE, moments(0.5, 1e-3), ar.MPS(), "converged", moments(0.5 + shift, 1e-3))
        assert one.disagrees == disagrees
