from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from anneal_ref.base.errors import NotSupported
from anneal_ref.judgement.fidelity import fidelity, fold, state_index, support
from anneal_ref.observe.clusters import Clusters


def spins_of(index: np.ndarray, n: int) -> np.ndarray:
    return (1 - 2 * ((index[:, None] >> np.arange(n)) & 1)).astype(np.int8)


def draw(p: np.ndarray, shots: int, seed: int) -> np.ndarray:
    return spins_of(np.random.default_rng(seed).choice(len(p), shots, p=p), len(p).bit_length() - 1)


def test_state_index_has_site_0_lowest_and_down_as_1() -> None:
    assert state_index(np.array([[1, 1, 1], [-1, 1, 1], [1, 1, -1]], dtype=np.int8)).tolist() == [0, 1, 4]


def test_fold_adds_the_flipped_state() -> None:
    p = np.arange(8) / 28
    np.testing.assert_allclose(fold(p), (np.arange(4) + np.array([7, 6, 5, 4])) / 28)
    np.testing.assert_allclose(fold(np.array([0.25, 0.75])), [1.0])


def test_support_counts_the_states_that_matter() -> None:
    assert support(np.full(64, 1 / 64)).states == 64
    peaked = np.r_[0.6, 0.3, 0.0901, np.full(61, 0.0099 / 61)]
    assert support(peaked).states == 3
    assert support(peaked).shots_needed == 30


def test_perfect_sampler_falls_short_by_the_known_bias() -> None:
    # matched distributions with K states: 1 - E[BC] = (K - 1)/(8 n) (Freeman-Tukey; Matusita 1955), so that the
    # fidelity BC^2 falls short by (K - 1)/(4 n); K = 16, n = 1000: 1.875e-3 for BC to leading order, 1.903e-3 simulated
    p = np.full(16, 1 / 16)
    floor = fidelity(draw(p, 1000, 1), p, False, Clusters.of(1000), replicas=4000).plain_floor
    error = float(floor.stat) / np.sqrt(4000)
    assert (1 - float(floor)) / 2 == pytest.approx(1.903e-3, abs=4 * error + 1e-5)
    assert (1 - float(floor)) / 2 == pytest.approx(1.875e-3, rel=0.05)
    # 8 n (1 - BC) is chi-square with K - 1 degrees of freedom, of variance 2 (K - 1)
    assert float(floor.stat) == pytest.approx(2 * np.sqrt(30) / 8000, rel=0.08)


def test_too_few_shots_are_refused_with_the_number_it_takes() -> None:
    p = np.full(256, 1 / 256)
    with pytest.raises(NotSupported, match="2540 in all; there are 1000") as refusal:
        fidelity(draw(p, 1000, 1), p, False, Clusters.of(1000))
    assert refusal.value.alternatives == ("log_likelihood",)
    # folding halves the states
    assert fidelity(draw(p, 1280, 1), p, True, Clusters.of(1280)).plain > 0.95


@pytest.mark.parametrize("n_groups", [None, 20])
@pytest.mark.parametrize("strength", [0.0, 0.5])
def test_the_interval_covers_the_true_fidelity(strength: float, n_groups: int | None) -> None:
    rng = np.random.default_rng(3)
    p = rng.dirichlet(np.full(16, 3.0))
    q = p * np.exp(strength * rng.standard_normal(16))
    q /= q.sum()
    true = float(np.sum(np.sqrt(p * q)) ** 2)
    groups = None if n_groups is None else np.arange(2000) % n_groups
    repeats, missed = 300, 0
    for seed in range(repeats):
        score = fidelity(draw(q, 2000, seed), p, False, Clusters.of(2000, groups), replicas=60).score
        missed += not score.low - 1e-12 <= true <= score.high + 1e-12
    assert missed <= stats.binom.isf(1e-4, repeats, 0.07)


@pytest.mark.parametrize("n_groups", [None, 25])
def test_the_interval_covers_with_no_more_shots_than_it_takes(n_groups: int | None) -> None:
    """Hundreds of states, most of them rare: what the jackknife leaves of the bias is as large as the scatter."""
    rng = np.random.default_rng(2)
    p = rng.dirichlet(np.full(1024, 0.1))
    q = p * np.exp(0.3 * rng.standard_normal(1024))
    q /= q.sum()
    true, shots = float(np.sum(np.sqrt(p * q)) ** 2), support(p).shots_needed
    groups = None if n_groups is None else np.arange(shots) % n_groups
    repeats, missed, twin = 150, 0, 0
    for seed in range(repeats):
        found = fidelity(draw(q, shots, seed), p, False, Clusters.of(shots, groups), replicas=20)
        score = found.score
        assert score.low <= score.value <= score.high
        missed += not score.low <= true <= score.high
        # wrong twin: the plain value with its standard error
        twin += not abs(found.plain - true) < 2 * float(score.estimate.stat)
    assert missed <= stats.binom.isf(1e-4, repeats, 0.07) < twin


def test_delete_one_sums_agree_with_leaving_shots_out() -> None:
    # the closed form for independent shots, and the one for clusters of a single shot each, are the same jackknife
    p = np.full(8, 1 / 8)
    spins = draw(p, 100, 4)
    found = fidelity(spins, p, False, Clusters.of(100), replicas=2)
    root = np.sqrt(p)

    def plain(rows: np.ndarray) -> float:
        return float((root @ np.sqrt(np.bincount(state_index(rows), minlength=8) / len(rows))) ** 2)

    left = np.array([plain(np.delete(spins, k, axis=0)) for k in range(100)])
    assert found.plain == pytest.approx(plain(spins), rel=1e-12)
    assert found.score.value == pytest.approx(min(1.0, 100 * plain(spins) - 99 * left.mean()), rel=1e-9)
    assert float(found.score.estimate.stat) == pytest.approx(
        np.sqrt(0.99 * np.sum((left - left.mean()) ** 2)), rel=1e-6
    )
