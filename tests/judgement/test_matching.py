"""The matching bond dimension: ladders with a known law, processors of a known error, intervals that hold."""

from __future__ import annotations

import math
import pickle
from dataclasses import replace

import numpy as np
import pytest
from scipy import stats

import anneal_ref as ar
from anneal_ref.base.estimate import Estimate, Score
from anneal_ref.judgement import matching as room
from anneal_ref.judgement.correlation_error import CorrelationError
from anneal_ref.judgement.matching import matching_bond_dimension
from anneal_ref.judgement.squared_distance import SquaredDistance
from anneal_ref.truth.convergence import Convergence, Rung

RAMP = ar.Schedule.polynomial(transverse=(5, -10, 5), problem=(0, 5))
N, PAIRS = 12, 66
SIZES = (8, 16, 32, 64, 128)
SLOPE = 1.7


def matrix(upper):
    full = np.eye(N)
    full[np.triu_indices(N, 1)] = upper
    return np.triu(full, 1).T + full


def study(seed=0, scale=0.08, strength=1.0, num=0.0, sizes=SIZES, slope=SLOPE, pace=1.0):
    """A study against a reference, whose correlation error is scale (32/D)^slope; truth squares are `strength`."""
    random = np.random.default_rng(seed)
    truth, way = random.normal(size=PAIRS), random.normal(size=PAIRS)
    truth *= math.sqrt(strength) / np.linalg.norm(truth)
    way *= math.sqrt(strength) / np.linalg.norm(way)
    instance = ar.draw_instance(ar.lattices.chain(N), ar.disorder.plus_minus(), seed=seed)
    backend = ar.MPS()
    rungs = tuple(
        Rung(
            replace(backend, bond_dimension=d), d, 0, ar.Moments.of(np.zeros(N), matrix(truth + err * way)),
            {"discarded_weight": err**2}, seconds=pace * d**3 * 1e-6, planned_seconds=d**3 * 1e-6, bytes=1000 * d,
        )
        for d in sizes
        for err in [scale * (32 / d) ** slope]
    )  # fmt: skip
    bars = np.where(np.eye(N) == 1, 0.0, num)
    target = ar.Moments(Estimate(np.zeros(N), 0.0, 0.0), Estimate(matrix(truth), 0.0, bars))
    return Convergence(ar.Anneal(instance, RAMP, 1.0), backend, rungs, target)


def processor(random, eps, strength=1.0, shots=10**4, num=0.0):
    """The correlation error of a processor whose true one is eps, measured with shots of a white noise."""
    delta = random.normal(size=PAIRS)
    delta *= eps * math.sqrt(strength) / np.linalg.norm(delta)
    v = 1 / shots
    d = delta + random.normal(size=PAIRS) * math.sqrt(v)
    traces = PAIRS * v, PAIRS * v**2, PAIRS * v**3
    return CorrelationError(SquaredDistance(PAIRS * v, np.full(PAIRS, v), d**2, traces, 1e4), strength, num)


def matched(eps, scale=0.08, slope=SLOPE):
    return 32 * (scale / eps) ** (1 / slope)


# ---- values


@pytest.mark.parametrize("eps", [0.3, 0.06, 0.011])
def test_the_law_is_found_between_the_runs(eps):
    error = processor(np.random.default_rng(1), eps, shots=10**9)
    found = matching_bond_dimension(study(), error)
    assert found.outcome == "matched"
    assert found.bond_dimension == pytest.approx(matched(eps), rel=1e-3)
    assert found.low < found.bond_dimension < found.high
    assert found.error == pytest.approx(eps, rel=1e-3)
    # wall time grows as the cube, and so does its interpolation; memory is that of the next larger run
    assert found.seconds == pytest.approx(1e-6 * found.bond_dimension**3)
    assert found.bytes == 1000 * min(size for size in SIZES if size >= found.bond_dimension)
    assert found.ensemble is None


def test_outside_the_ladder_it_says_so():
    random = np.random.default_rng(2)
    below = matching_bond_dimension(study(), processor(random, 0.95, shots=10**7))
    assert below.outcome == "below the smallest bond dimension"
    assert math.isnan(below.bond_dimension)
    assert (below.low, below.high) == (1.0, 1.0)
    assert "below 8" in str(below)
    above = matching_bond_dimension(study(), processor(random, 1e-3, shots=10**9))
    assert above.outcome == "above the largest bond dimension tried"
    assert (above.low, above.high) == (math.inf, math.inf)
    assert "above 128" in str(above)
    assert math.isnan(above.seconds)


def test_a_negative_square_is_above_with_a_lower_end():
    random = np.random.default_rng(3)
    errors = (processor(random, 0.0, shots=500) for _ in range(50))
    error = next(one for one in errors if one.squared < 0)
    found = matching_bond_dimension(study(), error)
    assert found.error < 0
    assert found.outcome.startswith("above")
    assert 8 < found.low < 128
    assert found.high == math.inf


def test_pooled_is_the_ratio_of_summed_squares():
    random = np.random.default_rng(4)
    studies = [study(1, scale=0.16, strength=1.0), study(2, scale=0.04, strength=9.0)]
    errors = [processor(random, 0.1, 1.0, 10**9), processor(random, 0.02, 9.0, 10**9)]
    found = matching_bond_dimension(studies, errors)
    ladder = math.sqrt((0.16**2 + 9 * 0.04**2) / 10)
    eps = math.sqrt((0.1**2 + 9 * 0.02**2) / 10)
    assert found.bond_dimension == pytest.approx(matched(eps, ladder), rel=1e-3)
    assert found.errors[2] == pytest.approx(ladder)
    # neither the mean of the roots nor that of the two bond dimensions
    assert found.bond_dimension != pytest.approx(np.mean([matched(0.1, 0.16), matched(0.02, 0.04)]), rel=0.02)
    assert found.n_instances == 2


def test_the_error_of_the_truth_widens_the_interval_and_limits_the_ladder():
    error = processor(np.random.default_rng(5), 0.03, shots=10**8)
    sharp, blurred = (matching_bond_dimension(study(num=num), error) for num in (0.0, 1e-3))
    assert blurred.floor == pytest.approx(1e-3 * math.sqrt(PAIRS))
    assert blurred.low < sharp.low < sharp.high < blurred.high
    assert blurred.errors.min() == blurred.floor
    small = processor(np.random.default_rng(5), 0.003, shots=10**9)
    assert matching_bond_dimension(study(num=0.0, slope=3), small).outcome == "matched"
    assert matching_bond_dimension(study(num=5e-4, slope=3), small).outcome.startswith("above")


def test_a_score_stands_for_all_instances():
    score = Score("correlation_error", Estimate(0.05, 0.005, 0.0), 0.04, 0.06, level=0.9)
    found = matching_bond_dimension([study(1), study(2)], score)
    assert found.bond_dimension == pytest.approx(matched(0.05))
    assert found.low == pytest.approx(matched(0.06))
    assert found.high == pytest.approx(matched(0.04))
    assert found.level == 0.9
    with pytest.raises(ar.InputError, match="that of the score, 0.9"):
        matching_bond_dimension(study(1), score, level=0.95)


# ---- intervals


def test_interval_from_shots_holds_and_half_of_it_does_not():
    random = np.random.default_rng(6)
    hits = halves = 0
    runs = 400
    ladder = [study(k) for k in range(3)]
    for _ in range(runs):
        errors = [processor(random, 0.06, shots=1500) for _ in range(3)]
        found = matching_bond_dimension(ladder, errors)
        hits += found.low <= matched(0.06) <= found.high
        middle = found.bond_dimension
        low, high = middle * (found.low / middle) ** 0.5, middle * (found.high / middle) ** 0.5
        halves += low <= matched(0.06) <= high
    assert stats.binom.ppf(1e-4, runs, 0.95) <= hits
    assert halves < stats.binom.ppf(1e-4, runs, 0.95)


def drawn_ensemble(random, count, spread):
    """Studies and processors whose strength, ladder and error differ from instance to instance."""
    studies, errors = [], []
    for _ in range(count):
        strength, ladder, error = np.exp(spread * random.normal(size=3))
        studies.append(study(int(random.integers(1 << 30)), 0.08 * math.sqrt(ladder / strength), strength))
        errors.append(processor(random, 0.06 * math.sqrt(error / strength), strength, shots=3000))
    return studies, errors


def test_interval_for_the_ensemble_holds_and_that_of_the_shots_does_not(monkeypatch):
    """Of a log-normal ensemble: the means of the squares are all alike, so that the match is that of 0.08 and 0.06."""
    monkeypatch.setattr(room, "DRAWS", 800)
    random, runs = np.random.default_rng(7), 150
    hits = shots = 0
    for k in range(runs):
        found = matching_bond_dimension(*drawn_ensemble(random, 8, 0.6), seed=k)
        low, high = found.ensemble
        hits += low <= matched(0.06) <= high
        shots += found.low <= matched(0.06) <= found.high
        assert low <= found.low
        assert high >= found.high
    assert hits >= stats.binom.ppf(1e-4, runs, 0.95)
    assert shots < stats.binom.ppf(1e-4, runs, 0.95)


def test_fewer_than_five_instances_have_no_interval_for_the_ensemble():
    random = np.random.default_rng(8)
    four = matching_bond_dimension(*drawn_ensemble(random, 4, 0.3))
    assert four.ensemble is None
    assert "takes 5 instances" in str(four)
    five = matching_bond_dimension(*drawn_ensemble(random, 5, 0.3))
    assert five.ensemble[0] < five.bond_dimension < five.ensemble[1]
    assert "for their ensemble" in str(five)


def test_draws_are_the_same_for_the_same_seed():
    pairs = drawn_ensemble(np.random.default_rng(9), 6, 0.5)
    first, again, other = (matching_bond_dimension(*pairs, seed=seed).ensemble for seed in (1, 1, 2))
    assert first == again
    assert first != other


def test_a_higher_level_is_wider():
    error = processor(np.random.default_rng(10), 0.06, shots=20000)
    narrow, wide = (matching_bond_dimension(study(), error, level=level) for level in (0.68, 0.99))
    assert wide.low < narrow.low < narrow.high < wide.high


# ---- matrix product states as processors


@pytest.fixture(scope="module")
def solved():
    found = []
    for k in range(2):
        instance = ar.draw_instance(ar.lattices.square(3, 4), ar.disorder.plus_minus(), seed=41, index=k)
        anneal = ar.Anneal(instance, RAMP, 1.5)
        found.append((anneal, ar.reference(anneal, 1e-4)))
    return found


@pytest.mark.parametrize("dimension", [6, 8, 11])
def test_a_matrix_product_state_matches_itself(solved, dimension):
    """A processor that is a matrix product state has its own bond dimension as its match."""
    backend = ar.MPS(halvings=1)
    studies = [ar.converge(anneal, (2, 4, 8, 16), (1,), reference=truth) for anneal, truth in solved]
    states = [replace(backend, bond_dimension=dimension).evolve(anneal) for anneal, _ in solved]
    found = matching_bond_dimension(studies, [state.sample(20000, seed=k) for k, state in enumerate(states)])
    if dimension == 8:
        # one of the runs: no interpolation
        assert found.low <= dimension <= found.high
    else:
        assert found.low * 0.85 <= dimension <= found.high * 1.15


def test_samples_and_their_comparison_say_the_same(solved):
    anneal, truth = solved[0]
    samples = ar.MPS(bond_dimension=4).evolve(anneal).sample(3000, seed=1)
    study = ar.converge(anneal, (2, 4, 8), (0,), reference=truth)
    comparison = ar.compare(truth, samples)
    first = matching_bond_dimension(study, samples)
    for other in (comparison.correlation, comparison.correlation_error):
        again = matching_bond_dimension(study, other)
        assert again.bond_dimension == pytest.approx(first.bond_dimension)
        assert (again.low, again.high) == pytest.approx((first.low, first.high))


def test_without_a_reference_the_last_run_is_the_truth(solved):
    anneal, truth = solved[0]
    samples = ar.MPS(bond_dimension=4).evolve(anneal).sample(20000, seed=1)
    own = matching_bond_dimension(ar.converge(anneal, (2, 4, 8, 16)), samples)
    given = matching_bond_dimension(ar.converge(anneal, (2, 4, 8, 16), reference=truth), samples)
    assert own.bond_dimension == pytest.approx(given.bond_dimension, rel=0.1)
    assert own.floor > given.floor
    assert own.low <= given.bond_dimension <= own.high


# ---- what goes in and what comes out


def test_bad_input(solved):
    error = processor(np.random.default_rng(11), 0.06)
    one = study(1)
    for studies, given, said in (
        ([], [], "convergence must be"),
        ([3], [error], "convergence must be"),
        ([one, one], [error, error], "came twice"),
        ([one, study(2, sizes=(8, 16, 32))], [error, error], "same bond dimensions"),
        ([one, study(2)], [error], "each of 2 studies; got 1"),
        (one, ["x"], "must be Samples or a CorrelationError"),
    ):
        with pytest.raises(ar.InputError, match=said):
            matching_bond_dimension(studies, given)
    for level in (0.0, 1.0, float("nan")):
        with pytest.raises(ar.InputError, match="level"):
            matching_bond_dimension(one, error, level=level)
    with pytest.raises(ar.InputError, match="seed"):
        matching_bond_dimension(one, error, seed=-1)
    anneal, truth = solved[0]
    unmeasured = ar.converge(anneal, (2, 4), (0,))
    with pytest.raises(ar.InputError, match="no measured error"):
        matching_bond_dimension(unmeasured, truth.sample(100, seed=1))
    foreign = solved[1][1].sample(100, seed=1)
    with pytest.raises(ar.InputError, match="another instance"):
        matching_bond_dimension(ar.converge(anneal, (2, 4), (0,), reference=truth), foreign)


def test_text_repr_and_pickle():
    found = matching_bond_dimension(study(), processor(np.random.default_rng(12), 0.06, shots=4000))
    assert repr(found).startswith("<Matching: 3")
    assert repr(pickle.loads(pickle.dumps(found))) == repr(found)
    for word in ("matching bond dimension", "95% interval", "for these instances", "the truth itself", "a run"):
        assert word in str(found)
