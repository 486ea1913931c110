from __future__ import annotations

from itertools import combinations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp
from scipy import stats

from anneal_ref.base.errors import InputError
from anneal_ref.model import lattices
from anneal_ref.model.instances import Instance
from anneal_ref.observe import overlaps
from anneal_ref.observe.samples import Samples

LIMIT = stats.norm.isf(0.5e-4)
SPINS = hnp.arrays(np.int8, st.tuples(st.integers(2, 9), st.integers(1, 6)), elements=st.sampled_from([1, -1]))


def pairwise(spins: np.ndarray) -> tuple[float, float]:
    """The slow twin: every pair of different shots."""
    q = np.array([np.mean(a * b) for a, b in combinations(spins.astype(float), 2)])
    return float(np.mean(q**2)), float(np.mean(q**4))


@given(SPINS)
def test_both_ways_give_the_mean_over_different_pairs(spins: np.ndarray) -> None:
    n, shots = spins.shape[1], len(spins)
    expected = pairwise(spins)
    assert overlaps.overlap_moments(spins) == pytest.approx(expected, abs=1e-12)
    for way in (overlaps._by_shots, overlaps._by_pairs):
        second, fourth = way(spins)
        count = shots * (shots - 1)
        assert ((second / n**2 - shots) / count, (fourth / n**4 - shots) / count) == pytest.approx(expected, abs=1e-12)


def test_both_ways_agree_over_chunks(monkeypatch: pytest.MonkeyPatch) -> None:
    spins = 1 - 2 * np.random.default_rng(3).integers(0, 2, (700, 9), dtype=np.int8)
    whole = overlaps._by_shots(spins)
    monkeypatch.setattr(overlaps, "_CHUNK_BYTES", 50_000)
    assert overlaps._by_shots(spins) == pytest.approx(whole, rel=1e-12)
    assert overlaps._by_pairs(spins) == pytest.approx(whole, rel=1e-12)


def test_overlap_moments_are_unbiased_and_the_plain_mean_is_not() -> None:
    """Independent spins of mean m (12 of them, 40 shots): <q^2> and <q^4> follow from those of a sum of signs."""
    rng = np.random.default_rng(17)
    m, n, shots, runs = 0.5, 12, 40, 2500
    up = (1 + m**2) / 2  # chance that two shots agree at a site
    sums = 2 * np.arange(n + 1) - n
    weights = stats.binom(n, up).pmf(np.arange(n + 1))
    exact = np.array([weights @ (sums / n) ** 2, weights @ (sums / n) ** 4])
    found = np.array(
        [
            overlaps.overlap_moments(np.where(rng.random((shots, n)) < (1 + m) / 2, 1, -1).astype(np.int8))
            for _ in range(runs)
        ]
    )
    within = LIMIT * found.std(axis=0) / np.sqrt(runs)
    assert (np.abs(found.mean(axis=0) - exact) < within).all()
    with_self = ((shots - 1) * found + 1) / shots
    assert (np.abs(with_self.mean(axis=0) - exact) > within).all()  # pairing a shot with itself fails


def test_jackknife_error_of_q2_covers_and_the_error_over_pairs_does_not() -> None:
    rng = np.random.default_rng(4)
    m, n, shots, runs = 0.5, 12, 60, 400
    exact = (n + n * (n - 1) * m**4) / n**2
    hits = {"shots": 0, "pairs": 0}
    for _ in range(runs):
        samples = Samples(np.where(rng.random((shots, n)) < (1 + m) / 2, 1, -1))
        estimate = samples.estimate(lambda s: overlaps.overlap_moments(s)[0], of="spins")
        hits["shots"] += bool(abs(estimate.value - exact) < 1.96 * estimate.stat)
        q = samples.spins @ samples.spins.T.astype(float) / n
        pairs = q[np.triu_indices(shots, 1)] ** 2
        hits["pairs"] += bool(abs(pairs.mean() - exact) < 1.96 * pairs.std() / np.sqrt(len(pairs)))
    assert hits["shots"] >= stats.binom(runs, 0.93).ppf(1e-4)
    assert hits["pairs"] < stats.binom(runs, 0.93).ppf(1e-4)


def test_binder_cumulants_at_their_limits() -> None:
    """Bhatt and Young 1985 (glass), Binder 1981 (magnet): one size of order, and Gaussian."""
    ordered = np.repeat(np.array([[1], [-1]], dtype=np.int8), 20, axis=1)[np.arange(100) % 2]
    assert overlaps.binder_magnet(ordered) == pytest.approx(2 / 3)
    assert overlaps.binder_glass(ordered) == pytest.approx(1)
    free = Samples(1 - 2 * np.random.default_rng(2).integers(0, 2, (1000, 60), dtype=np.int8))
    # of N free spins <m^4>/<m^2>^2 = 3 - 2/N exactly, and so is <q^4>/<q^2>^2
    for f, exact in ((overlaps.binder_magnet, 2 / 180), (overlaps.binder_glass, 1 / 60)):
        estimate = free.estimate(f, of="spins")
        assert abs(estimate.value - exact) < LIMIT * estimate.stat
        assert estimate.stat < 0.1


def test_ratio_of_averages() -> None:
    assert overlaps.glass_ratio(0.5, 0.25) == 1.0
    with pytest.raises(InputError, match=r"<q\^2> must be above 0, got -0.1"):
        overlaps.glass_ratio(-0.1, 0.1)
    with pytest.raises(InputError, match="0 in every shot"):
        overlaps.binder_magnet(np.array([[1, -1], [-1, 1]], dtype=np.int8))
    with pytest.raises(InputError, match="at least 2 shots; got 1"):
        overlaps.overlap_moments(np.array([[1, -1]], dtype=np.int8))


def test_covariance_of_correlations_by_products() -> None:
    """Derived by hand: Cov(c_ij, c_kl) = (<s_i s_j s_k s_l> - c_ij c_kl)/n, here seen in the scatter of 4000 runs."""
    rng = np.random.default_rng(12)
    weights = rng.dirichlet(np.ones(8))
    states = 1 - 2 * ((np.arange(8)[:, None] >> np.arange(3)) & 1).astype(np.int8)
    pairs = [(0, 1), (1, 2)]
    four = weights @ overlaps.products(states, [(0, 1, 1, 2)])[:, 0]
    c = weights @ overlaps.products(states, pairs)
    shots, runs = 50, 4000
    counts = rng.multinomial(shots, weights, size=runs)
    found = counts @ overlaps.products(states, pairs) / shots
    predicted = (four - c[0] * c[1]) / shots
    cross = (found[:, 0] - c[0]) * (found[:, 1] - c[1])
    assert abs(cross.mean() - predicted) < LIMIT * cross.std() / np.sqrt(runs)


def test_energies_and_their_distribution() -> None:
    instance = Instance(lattices.chain(3), [1.0, -0.5], [0.25, 0, 0])
    spins = np.array([[1, 1, 1], [1, -1, 1], [1, -1, -1], [1, -1, -1]], dtype=np.int8)
    assert overlaps.energies(spins, instance).tolist() == [0.75, -0.25, -1.25, -1.25]
    levels, weights = overlaps.energy_distribution(spins, instance)
    assert levels.tolist() == [-1.25, -0.25, 0.75]
    assert weights.tolist() == [0.5, 0.25, 0.25]
    assert overlaps.energy_histogram(spins, instance, [-2, 0, 0.75]).tolist() == [0.75, 0.25]
    with pytest.raises(InputError, match="edges must cover all energies, -1.25 to 0.75; got -1 to 1"):
        overlaps.energy_histogram(spins, instance, [-1, 1])
    with pytest.raises(InputError, match="edges must ascend"):
        overlaps.energy_histogram(spins, instance, [1, 0])
    with pytest.raises(InputError, match=r"spins must have shape \(n_shots, 3\)"):
        overlaps.energies(spins[:, :2], instance)
