from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from anneal_ref.base.errors import InputError
from anneal_ref.base.estimate import Estimate
from anneal_ref.judgement.deviations import PairTable, holm, pair_deviations
from anneal_ref.observe.clusters import Clusters

N = 8


def distribution(couplings: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """States and probabilities of a ring with the given bonds."""
    s = (1 - 2 * ((np.arange(2**N)[:, None] >> np.arange(N)) & 1)).astype(np.int8)
    weight = np.exp((s * np.roll(s, -1, axis=1)) @ couplings)
    return s, weight / weight.sum()


def truth(couplings: np.ndarray, num: float = 0.0) -> Estimate:
    s, p = distribution(couplings)
    bars = np.full((N, N), num)
    np.fill_diagonal(bars, 0.0)
    return Estimate((s.T * p) @ s, 0.0, bars)


def draw(couplings: np.ndarray, shots: int, seed: int) -> np.ndarray:
    s, p = distribution(couplings)
    return s[np.random.default_rng(seed).choice(len(p), shots, p=p)]


RING = np.array([0.5, -0.6, 0.4, 0.7, -0.5, 0.6, 0.3, -0.4])


def test_holm_hand_case() -> None:
    # S. Holm, Scand. J. Stat. 6, 65 (1979), worked by hand
    p = np.array([0.001, 0.008, 0.012, 0.041, 0.042, 0.06, 0.074, 0.205])
    adjusted = holm(p[::-1])[::-1]
    np.testing.assert_allclose(adjusted[:4], [0.008, 0.056, 0.072, 0.205])
    assert np.sum(adjusted <= 0.05) == 1
    assert holm([0.9, 0.8]).tolist() == [1.0, 1.0]
    with pytest.raises(InputError, match="between 0 and 1"):
        holm([1.1])


def test_p_values_are_the_binomial_ones() -> None:
    spins = draw(RING, 30, 1)
    table = pair_deviations(spins, truth(RING), Clusters.of(30))
    for k in (0, 5, 20):
        count = int(np.sum(spins[:, table.first[k]] == spins[:, table.second[k]]))
        chance = (1 + table.truth[k]) / 2
        tails = [stats.binomtest(count, 30, chance, alternative).pvalue for alternative in ("less", "greater")]
        assert table.p[k] == pytest.approx(min(1.0, 2 * min(tails)))
    assert np.all(np.diff(table.p) >= 0)


@pytest.mark.parametrize("groups", [None, 12])
def test_false_alarms_stay_below_five_per_cent(groups: int | None) -> None:
    clusters = Clusters.of(300, None if groups is None else np.arange(300) % groups)
    alarms = sum(pair_deviations(draw(RING, 300, k), truth(RING), clusters).significant() > 0 for k in range(400))
    assert alarms <= stats.binom.isf(1e-4, 400, 0.05)


def test_false_alarms_are_rare_for_strong_correlations_in_gauges() -> None:
    """A chain of <Z_i Z_i+1> = 0.999: clusters without a single broken bond do not prove a correlation of 1."""
    n, c, shots, groups = 12, 0.999, 4000, np.arange(4000) // 100
    site, rng = np.arange(n), np.random.default_rng(1)
    exact = Estimate(c ** np.abs(site[:, None] - site), 0.0, 0.0)
    alarms = naive = 0
    for _ in range(300):
        bonds = np.where(rng.random((shots, n - 1)) < (1 - c) / 2, -1, 1)
        spins = np.concatenate((np.ones((shots, 1)), np.cumprod(bonds, axis=1)), axis=1).astype(np.int8)
        table = pair_deviations(spins, exact, Clusters.of(shots, groups))
        alarms += table.significant() > 0
        # the wrong twin: Student's t on the measured scatter alone
        p = 2 * stats.t.sf(np.abs(table.measured - table.truth) / table.stat, 39)
        naive += bool(np.any(holm(p) <= 0.05))
    assert alarms <= stats.binom.isf(1e-4, 300, 0.05) < naive


def test_one_coupler_off_shows_at_its_ends() -> None:
    off = RING.copy()
    off[3] *= 0.6
    table = pair_deviations(draw(off, 4000, 2), truth(RING), Clusters.of(4000))
    assert (table.first[0], table.second[0]) == (3, 4)
    assert table.adjusted[0] < 1e-6
    assert set(np.argsort(table.site_sigma())[-2:]) == {3, 4}


def test_a_flipping_spin_shows_in_all_of_its_pairs() -> None:
    spins = draw(RING, 4000, 3).copy()
    spins[np.random.default_rng(4).random(4000) < 0.08, 5] *= -1
    table = pair_deviations(spins, truth(RING), Clusters.of(4000))
    assert int(np.argmax(table.site_sigma())) == 5
    gain = table.site_gain()
    assert gain[5] == pytest.approx(1 - 2 * 0.08, abs=0.05)
    assert np.abs(np.delete(gain, [4, 5, 6]) - 1).max() < 0.06
    assert all(5 in (table.first[k], table.second[k]) for k in range(table.significant()))
    spins[:, 5] *= -1
    assert pair_deviations(spins, truth(RING), Clusters.of(4000)).site_gain()[5] < -0.7


def test_the_truth_may_lie_anywhere_within_its_error() -> None:
    off = RING * 1.05
    spins = draw(off, 20_000, 5)
    sharp, blunt = (pair_deviations(spins, truth(RING, num), Clusters.of(20_000)) for num in (0.0, 0.08))
    assert sharp.significant() > 0
    assert blunt.significant() == 0
    assert blunt.sigma[blunt.p == 1.0].tolist() == [0.0] * int(np.sum(blunt.p == 1.0))


def test_gauges_that_differ_are_not_taken_for_deviations() -> None:
    rng = np.random.default_rng(6)
    alarms = {True: 0, False: 0}
    shifted = [RING + 0.15 * rng.standard_normal(N) for _ in range(4000)]
    mean = np.mean([truth(one).value for one in shifted], axis=0)
    for _ in range(100):
        spins = np.concatenate([draw(shifted[rng.integers(4000)], 200, int(rng.integers(1 << 30))) for _ in range(12)])
        for aware in alarms:
            clusters = Clusters.of(len(spins), np.repeat(np.arange(12), 200) if aware else None)
            alarms[aware] += pair_deviations(spins, Estimate(mean, 0.0, 0.0), clusters).significant() > 0
    assert alarms[True] <= stats.binom.isf(1e-4, 100, 0.05)
    assert alarms[False] > 50


def test_pairs_without_scatter_have_an_error() -> None:
    spins = np.ones((100, 3), dtype=np.int8)
    for groups in (None, np.arange(100) // 10):
        table: PairTable = pair_deviations(spins, Estimate(np.ones((3, 3)), 0.0, 0.0), Clusters.of(100, groups))
        assert np.all(table.stat > 0)
        assert table.p.tolist() == [1.0, 1.0, 1.0]
    impossible = pair_deviations(spins, Estimate(-np.ones((3, 3)), 0.0, 0.0), Clusters.of(100))
    assert impossible.p.tolist() == [0.0, 0.0, 0.0]


def test_text_shows_the_worst_pairs() -> None:
    text = pair_deviations(draw(RING, 100, 7), truth(RING), Clusters.of(100)).text(rows=3)
    assert len(text.splitlines()) == 4
    assert "adjusted p" in text
