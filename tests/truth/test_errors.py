"""Errors from runs whose knobs are refined separately: on series with a known limit, and on real evolutions."""

from __future__ import annotations

import numpy as np
import pytest

import anneal_ref as ar
from anneal_ref.observe.moments import Moments
from anneal_ref.truth.errors import errors_of, measured_moments
from anneal_ref.truth.evolutions import Evolution, free_entries

RAMP = ar.Schedule.linear(transverse=(4.0, 0.0), problem=(0.0, 4.0))
N = 12


def anneal(fields=None):
    instance = ar.draw_instance(ar.lattices.square(3, 4), ar.disorder.plus_minus(), fields=fields, seed=1)
    return ar.Anneal(instance, RAMP, 1.0)


def series(ratio, step=0.0, rounding=0.0, weights=(1e-3, 1e-4, 1e-5), extra=(), seed=0):
    """Runs whose truncation error shrinks by `ratio`, with a step error of fourth order and a rounding error."""
    random = np.random.default_rng(seed)
    limit, a, b, c = (random.normal(scale=scale, size=(N, N)) for scale in (0.1, 1.0, 1.0, 1.0))
    places = [(0, 0, 0), (1, 0, 0), (2, 0, 0), (1, 1, 0), (1, 0, 1), *extra]
    runs = []
    for d, s, r in places:
        zz = limit + 0.01 * ratio**d * a + step * 16.0**-s * b + rounding * 100.0**-r * c
        zz = np.triu(zz, 1) + np.triu(zz, 1).T + np.eye(N)
        ledger = {"discarded_weight": weights[min(d, 2)], "truncation": 1e-12, "bond_dimension": 8 << d}
        refined = {"bond_dimension": d, "step": s, "rounding": r}
        runs.append(Evolution(Moments.of(np.zeros(N), zz), ledger, {k: v for k, v in refined.items() if v}))
    limit = np.triu(limit, 1) + np.triu(limit, 1).T + np.eye(N)
    return runs, limit


def coverage(runs, limit):
    problem = anneal()
    errors = errors_of(problem, runs)
    moments, parts = measured_moments(problem, runs, errors)
    off = np.triu(np.ones((N, N), bool), 1)
    inside = np.abs(moments.zz.value - limit)[off] <= moments.zz.num[off]
    return float(inside.mean()), errors, parts, moments


@pytest.mark.parametrize("ratio", [0.05, 0.1, 0.2, 0.4])
@pytest.mark.parametrize(("step", "rounding"), [(0.0, 0.0), (1e-4, 0.0), (1e-3, 1e-6), (0.0, 1e-4)])
def test_known_series_are_covered(ratio, step, rounding):
    covered, errors, parts, _ = coverage(*series(ratio, step, rounding))
    assert covered >= 0.97
    assert errors.settled
    assert set(parts) == {"step", "truncation", "rounding"}


def test_every_source_is_seen_in_its_own_part():
    for name, arguments in (
        ("truncation", {"ratio": 0.3}),
        ("step", {"ratio": 1e-4, "step": 1e-3}),
        ("rounding", {"ratio": 1e-4, "rounding": 1e-3}),
    ):
        _, _, parts, _ = coverage(*series(**arguments))
        assert max(parts, key=parts.get) == name


def test_a_ladder_that_does_not_shrink_is_not_settled():
    assert not coverage(*series(0.9))[1].settled
    assert coverage(*series(0.4))[1].settled


def test_the_discarded_weight_is_a_second_opinion_and_the_worse_one_counts():
    kind = coverage(*series(0.1))[3].zz.num.max()
    doubtful = coverage(*series(0.1, weights=(1e-3, 1e-4, 4e-5)))[3].zz.num.max()
    assert doubtful > 3 * kind
    assert not coverage(*series(0.1, weights=(1e-3, 1e-4, 9e-5)))[1].settled


def test_a_sudden_drop_is_not_relied_on():
    runs, limit = series(1e-3)
    _, _, _, moments = coverage(runs, limit)
    off = np.triu(np.ones((N, N), bool), 1)
    assert np.median(moments.zz.num[off]) > 10 * np.median(np.abs(moments.zz.value - limit)[off])


def test_the_finest_step_of_the_largest_bond_is_reported():
    runs, _ = series(0.2, step=1e-3, extra=[(2, 1, 0)])
    errors = errors_of(anneal(), runs)
    assert errors.final == 5
    # the change of a halving is three times what the halved step leaves, if the order is two
    coarse = errors_of(anneal(), runs[:5])
    parts = [measured_moments(anneal(), runs, e)[1]["step"] for e in (errors,)]
    assert parts[0] < measured_moments(anneal(), runs[:5], coarse)[1]["step"] / 3


def test_the_best_pair_tells_the_step_error():
    # a heavily truncated pair of runs differs by more than the step does
    runs, _ = series(0.2, step=1e-4)
    zz = runs[3].moments.zz.value + 0.05 * (1 - np.eye(N))
    runs[3] = Evolution(Moments.of(np.zeros(N), zz), runs[3].ledger, runs[3].refined)
    before = measured_moments(anneal(), runs, errors_of(anneal(), runs))[1]["step"]
    more, _ = series(0.2, step=1e-4, extra=[(3, 0, 0), (2, 1, 0)])
    runs = [*runs, *more[5:]]
    after = measured_moments(anneal(), runs, errors_of(anneal(), runs))[1]["step"]
    assert before > 0.05
    assert after < 1e-3


def test_runs_without_a_pair_of_steps_are_refused():
    runs, _ = series(0.2)
    with pytest.raises(ValueError, match="no two runs"):
        errors_of(anneal(), [runs[k] for k in (0, 1, 2, 4)])


# ---- real evolutions


@pytest.fixture(scope="module")
def truths():
    found = []
    for k, fields in enumerate((None, ar.disorder.uniform(-0.4, 0.4))):
        lattice = (ar.lattices.cubic(2, 2, 3), ar.lattices.square(3, 4))[k]
        instance = ar.draw_instance(lattice, ar.disorder.gaussian(0.8), fields=fields, seed=31 + k)
        problem = ar.Anneal(instance, RAMP, 2.0)
        truth = ar.reference(problem, tolerance=3e-3, backend=ar.MPS(bond_dimension=8), samples=2000)
        found.append((truth, ar.StateVector(tolerance=1e-10).evolve(problem).moments()))
    return found


def test_a_reference_by_matrix_product_states_converges_to_the_truth(truths):
    for truth, exact in truths:
        assert truth.outcome == "converged"
        assert truth.stopped == "tolerance met"
        errors = np.abs(free_entries(truth.anneal, truth.moments()) - free_entries(truth.anneal, exact))
        zz = truth.moments().zz
        assert errors.max() <= 3e-3
        assert np.mean(np.abs(zz.value - exact.zz.value) <= zz.num) >= 0.95
        assert truth.finest.bond_dimension == 8 << truth.runs[truth.errors.final].times("bond_dimension")
        assert max(truth.parts.values()) <= truth.error
        for word in ("bond 8", "less rounding", "step / 2", "error by source: step", "truncation"):
            assert word in str(truth)


def test_its_samples_and_likelihoods_belong_to_it(truths):
    truth, exact = truths[0]
    spins = truth.stored_samples.spins.astype(float)
    scatter = np.abs(spins.T @ spins / len(spins) - exact.zz.value)
    assert scatter.max() < 5 / np.sqrt(len(spins))
    assert truth.log_probability(truth.stored_samples.spins[:5]) == pytest.approx(
        truth.state().log_probability(truth.stored_samples.spins[:5]), abs=1e-6
    )


def test_derived_numbers_get_their_bars(truths):
    for truth, exact in truths:
        for f in (ar.observables.q2, lambda m, i=truth.anneal.instance: ar.observables.problem_energy(m, i)):
            estimate = truth.estimate(f)
            assert 0 < abs(float(estimate.value) - float(f(exact))) <= estimate.num < 0.2


def test_single_precision_is_not_hidden():
    problem = anneal()
    single = ar.reference(problem, tolerance=1e-9, backend=ar.MPS(32, precision="single"), samples=1, max_runs=3)
    double = ar.reference(problem, tolerance=1e-9, backend=ar.MPS(32, truncation=1e-15), samples=1, max_runs=3)
    assert single.runs[4].ledger["precision"] == "double"
    assert single.parts["rounding"] > 2 * double.parts["rounding"]
