"""Samples and probabilities of configurations."""

import numpy as np
import pytest
from scipy.stats import chi2, norm

import anneal_ref as ar
from anneal_ref.backends.fermions.configurations import Configurations

KINDS = pytest.mark.parametrize("kind", ["chain", "ring", "parts"])
FINE = ar.FreeFermions(tolerance=1e-11)


def exact(anneal):
    return ar.StateVector(scheme="blanes-moan-4", tolerance=1e-11).evolve(anneal)


@KINDS
@pytest.mark.parametrize("schedule", ["plus", "ground"])
def test_probabilities_of_all_configurations(kind, schedule, chain_anneal, spins_of):
    case = chain_anneal(kind, n=10, schedule=schedule)
    state, other, spins = FINE.evolve(case), exact(case), spins_of(10)
    logs, p = state.log_probability(spins), other.probabilities()
    assert np.exp(logs).sum() == pytest.approx(1.0, abs=1e-12)
    np.testing.assert_allclose(np.exp(logs), p, atol=1e-10)
    np.testing.assert_allclose(logs[p > 1e-15], np.log(p[p > 1e-15]), atol=1e-3)
    np.testing.assert_allclose(logs[p > 1e-9], np.log(p[p > 1e-9]), atol=1e-6)
    np.testing.assert_allclose(state.probabilities(), p, atol=1e-10)
    assert state.probabilities().sum() == pytest.approx(1.0, abs=1e-14)
    assert state.ground_probability() == pytest.approx(other.ground_probability(), abs=1e-10)


@pytest.mark.parametrize("kind", ["chain", "ring"])
def test_probabilities_near_the_adiabatic_limit(kind, chain_anneal, spins_of):
    case = ar.Anneal(chain_anneal(kind, n=8).instance, ar.Schedule.linear((8.0, 0.0), (0.0, 8.0)), 20.0)
    state, other, spins = FINE.evolve(case), exact(case), spins_of(8)
    logs, expected = state.log_probability(spins), other.log_probability(spins)
    assert other.ground_probability() > 0.5
    assert expected.min() < -20
    seen = expected > -32
    np.testing.assert_allclose(logs[seen], expected[seen], atol=1e-2)


@KINDS
def test_amplitudes_and_conditional_probabilities_agree(kind, chain_anneal):
    state = ar.FreeFermions(tolerance=1e-6).evolve(chain_anneal(kind, n=30))
    spins = state.sample(40, 1).spins
    along = np.ascontiguousarray(spins[:, state._chain.order])
    amplitudes = state._configurations._from_amplitudes(along) - np.log(2)
    np.testing.assert_allclose(state.log_probability(spins), amplitudes, atol=1e-9)


def test_what_cannot_be_has_no_probability():
    # an even superposition of two configurations
    instance = ar.Instance(ar.lattices.chain(4), [1.0, -1.0, 1.0])
    case = ar.Anneal(instance, ar.Schedule.linear((0.0, 1.0), (1.0, 1.0)), 1.0, start="ground")
    logs = ar.FreeFermions().evolve(case, at=0.0).log_probability([[1, -1, -1, 1], [-1, 1, 1, -1], [1, 1, -1, 1]])
    np.testing.assert_allclose(logs[:2], np.log(0.5), atol=1e-14)
    assert logs[2] < -60


def test_samples_are_reproducible_and_carry_their_origin(chain_anneal):
    case = chain_anneal("ring", n=20)
    state = ar.FreeFermions(tolerance=1e-6).evolve(case)
    samples = state.sample(1000, seed=5)
    np.testing.assert_array_equal(samples.spins, state.sample(1000, seed=5).spins)
    np.testing.assert_array_equal(samples.spins[:300], state.sample(300, seed=5).spins)
    assert (samples.spins != state.sample(1000, seed=6).spins).any()
    assert samples.manifest.instance == case.instance.identity
    assert samples.manifest.duration == case.duration


def statistic(state, p, shots, seed):
    """G statistic of samples against probabilities, and its degrees of freedom; rare configurations go together."""
    spins = state.sample(shots, seed).spins.astype(int)
    counts = np.bincount(((1 - spins) // 2) @ (1 << np.arange(len(p).bit_length() - 1)), minlength=len(p))
    common = p * shots >= 5
    expected = np.append(p[common], p[~common].sum()) * shots
    seen = np.append(counts[common], counts[~common].sum())
    keep = expected > 1e-6
    expected, seen = expected[keep], seen[keep]
    return float(np.sum((seen - expected) ** 2 / expected)), len(expected) - 1


@KINDS
def test_samples_follow_the_probabilities(kind, chain_anneal):
    case = chain_anneal(kind, n=8, seed=6)
    value, freedom = statistic(FINE.evolve(case), exact(case).probabilities(), 20_000, seed=2)
    assert value < chi2.isf(1e-4, freedom)


def test_samples_of_something_else_fail(chain_anneal, monkeypatch):
    case = chain_anneal("ring", n=8, seed=6)
    p = exact(case).probabilities()
    shorter = ar.Anneal(case.instance, case.schedule, 0.9 * case.duration)
    value, freedom = statistic(FINE.evolve(shorter), p, 20_000, seed=2)
    assert value > chi2.isf(1e-4, freedom)
    # products measured without regard of each other
    state = FINE.evolve(case)
    band = state._configurations._band.copy()
    band[:, 2:] = 0.0
    band[1::2, 1] = 0.0
    lonely = Configurations(state._covariance)
    lonely.__dict__["_band"] = band
    state._configurations = lonely
    value, freedom = statistic(state, p, 20_000, seed=2)
    assert value > chi2.isf(1e-4, freedom)


@pytest.mark.parametrize("kind", ["chain", "ring"])
def test_samples_of_long_chains_have_the_moments(kind, chain_anneal):
    n, shots = 150, 3000
    state = ar.FreeFermions(tolerance=1e-6).evolve(chain_anneal(kind, n=n, duration=3.0))
    spins = state.sample(shots, seed=4).spins.astype(float)
    zz = state.moments().zz.value
    pairs = np.triu_indices(n, 1)
    errors = np.sqrt((1 - zz**2) / shots) + 1e-12
    deviations = np.abs(spins.T @ spins / shots - zz)[pairs] / errors[pairs]
    # beyond 1e-4 for the largest of all pairs
    assert deviations.max() < norm.isf(0.5e-4 / len(deviations))
    assert np.sqrt(np.mean(deviations**2)) == pytest.approx(1.0, abs=0.1)
    assert np.abs(spins.mean(axis=0)).max() < norm.isf(0.5e-4 / n) / np.sqrt(shots)
    assert np.isfinite(state.log_probability(spins)).all()
