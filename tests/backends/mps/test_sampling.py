"""Samples against the exact distribution, and probabilities against all amplitudes."""

import numpy as np
import pytest
from scipy.stats import binom, chi2

from anneal_ref.backends.mps import sampling
from anneal_ref.backends.mps.product import Product
from anneal_ref.backends.mps.reading import moments_of
from anneal_ref.backends.mps.sampling import log_probability, sample_spins
from anneal_ref.base.errors import InputError

KINDS = [(True, False), (True, True), (False, False)]
SHOTS = 40_000


def distribution(product):
    p = np.abs(product.dense()) ** 2
    return p / p.sum()


def indices(spins):
    return ((1 - spins.astype(int)) // 2) @ (1 << np.arange(spins.shape[1]))


def g_test(spins, probabilities):
    """p-value of the likelihood-ratio (G) test; rare configurations are one class (common practice: at least five)."""
    counts = np.bincount(indices(spins), minlength=len(probabilities))
    expected = len(spins) * probabilities
    often = expected >= 5
    counts = np.append(counts[often], counts[~often].sum())
    expected = np.append(expected[often], expected[~often].sum())
    if expected[-1] < 5:
        counts, expected = counts[:-1], expected[:-1]
    seen = counts > 0
    g = 2 * np.sum(counts[seen] * np.log(counts[seen] / expected[seen])) + 2 * (expected.sum() - counts.sum())
    return chi2.sf(g, len(counts) - 1)


class TestProbabilities:
    @pytest.mark.parametrize(("dtype", "limit"), [(np.complex64, 2e-6), (np.complex128, 1e-13)])
    @pytest.mark.parametrize(("symmetric", "odd"), KINDS)
    @pytest.mark.parametrize("n", [1, 2, 5, 9])
    def test_all_configurations(self, random_product, spins_of, n, symmetric, odd, dtype, limit):
        for seed in range(8):
            product = random_product(n, 1 + seed, symmetric, dtype, seed, odd)
            product.tensors[0] = 2 * product.tensors[0]
            found = log_probability(product, spins_of(n))
            assert found.dtype == np.float64
            np.testing.assert_allclose(np.exp(found), distribution(product), atol=limit)
            assert abs(np.exp(found).sum() - 1) < 4 * limit

    @pytest.mark.parametrize("symmetric", [True, False])
    def test_small_ones_keep_their_digits(self, product_of, spins_of, symmetric):
        # spins that all point almost along +z, and with the symmetry the flipped ones besides (by hand)
        n, angle = 8, 1e-3
        psi = np.ones(1)
        for _ in range(n):
            psi = np.kron([np.cos(angle), np.sin(angle)], psi)
        if symmetric:
            psi = psi + psi[::-1]
        product = product_of(psi, np.arange(n)[::-1], symmetric)
        exact = np.log(psi**2 / np.sum(psi**2))
        assert exact.min() < (-50 if symmetric else -100)
        # with the symmetry small amplitudes are differences of the even and the odd part
        np.testing.assert_allclose(log_probability(product, spins_of(n)), exact, atol=1e-4 if symmetric else 1e-9)

    @pytest.mark.parametrize("dtype", [np.complex64, np.complex128])
    @pytest.mark.parametrize("symmetric", [True, False])
    def test_no_underflow_on_long_chains(self, random_product, symmetric, dtype):
        n = 100
        product = random_product(n, 6, symmetric, dtype, seed=1)
        rows = sample_spins(product, 50, np.random.default_rng(2))
        tensors = product.in_z_basis()
        for spins, found in zip(rows[:, product.order], log_probability(product, rows), strict=True):
            row, total = np.ones(1), 0.0
            for tensor, spin in zip(tensors, spins, strict=True):
                row = row @ tensor[0 if spin == 1 else 1]
                total += np.log(np.sum(np.abs(row) ** 2))
                row = row / np.linalg.norm(row)
            assert total < -40
            assert found == pytest.approx(total, abs=1e-3 if dtype == np.complex64 else 1e-10)

    def test_minus_infinity_where_there_is_nothing(self, spins_of):
        n = 5
        both = np.stack([np.diag([1.0, 0.0]), np.diag([0.0, 1.0])]).astype(complex)
        ends = [np.ascontiguousarray(both.sum(axis=1, keepdims=True) / np.sqrt(2)), both.sum(axis=2, keepdims=True)]
        plain = Product(
            [ends[0], *[both] * (n - 2), ends[1]], [(1, 0), *[(2, 0)] * (n - 1), (1, 0)], False, np.arange(n)
        )
        half = np.full((1, 2, 2), np.sqrt(0.5), complex)
        tensors = [half[:, :1].copy(), *[half] * (n - 2), np.ones((1, 2, 1), complex)]
        symmetric = Product(tensors, [(1, 0), *[(1, 1)] * (n - 1), (1, 0)], True, np.arange(n))
        for product in (plain, symmetric):
            found = log_probability(product, spins_of(n))
            np.testing.assert_allclose(found[[0, -1]], -np.log(2), atol=1e-14)
            assert np.all(np.isneginf(found[1:-1]))
            assert set(indices(sample_spins(product, 100, np.random.default_rng(0)))) == {0, 2**n - 1}

    def test_what_is_given_is_checked(self, random_product):
        product = random_product(4, 2, False)
        for spins in ([[1, 1, 1]], [[1, 0, 1, 1]], [1, 1, 1, 1]):
            with pytest.raises(InputError, match="spins must"):
                log_probability(product, spins)
        assert log_probability(product, np.ones((0, 4))).shape == (0,)
        with pytest.raises(InputError, match="shots must"):
            sample_spins(product, 0, np.random.default_rng(0))


class TestSamples:
    @pytest.mark.parametrize("dtype", [np.complex64, np.complex128])
    @pytest.mark.parametrize(("symmetric", "odd"), KINDS)
    def test_g_test(self, random_product, symmetric, odd, dtype):
        product = random_product(8, 5, symmetric, dtype, 3, odd)
        spins = sample_spins(product, SHOTS, np.random.default_rng(17))
        assert spins.dtype == np.int8
        assert spins.shape == (SHOTS, 8)
        assert g_test(spins, distribution(product)) > 1e-4

    @pytest.mark.parametrize("symmetric", [True, False])
    def test_shots_are_independent(self, random_product, symmetric):
        # pairs of successive shots follow the product distribution
        product = random_product(4, 4, symmetric, seed=6)
        spins = sample_spins(product, SHOTS, np.random.default_rng(23))
        p = distribution(product)
        pairs = np.concatenate((spins[::2], spins[1::2]), axis=1)
        assert g_test(pairs, np.outer(p, p).reshape(-1)) > 1e-4

    @pytest.mark.parametrize("symmetric", [True, False])
    def test_correlations_of_a_large_state(self, random_product, symmetric):
        product = random_product(36, 16, symmetric, np.complex64, seed=5)
        z, zz, _ = moments_of(product)
        shots = 10_000
        spins = sample_spins(product, shots, np.random.default_rng(29)).astype(float)
        i, j = np.triu_indices(36, 1)
        pairs = shots / 2 + (spins.T @ spins)[i, j] / 2
        single = shots / 2 + spins.sum(axis=0) / 2
        for counts, means in ((pairs, zz[i, j]), (single, z)):
            chance = 1e-4 / len(means) / 2
            low, high = binom.ppf(chance, shots, (1 + means) / 2), binom.isf(chance, shots, (1 + means) / 2)
            assert np.all((low <= counts) & (counts <= high))

    def test_the_seed_decides(self, random_product):
        product = random_product(8, 5, True)
        first, again, other = (sample_spins(product, 64, np.random.default_rng(seed)) for seed in (1, 1, 2))
        assert np.array_equal(first, again)
        assert not np.array_equal(first, other)

    @pytest.mark.parametrize("symmetric", [True, False])
    def test_parts_of_any_size(self, random_product, monkeypatch, symmetric):
        product = random_product(8, 5, symmetric, seed=3)
        rows = sample_spins(product, 100, np.random.default_rng(1))
        whole = log_probability(product, rows)
        monkeypatch.setattr(sampling, "_CHUNK_BYTES", 1000)
        np.testing.assert_allclose(log_probability(product, rows), whole, rtol=1e-12)
        spins = sample_spins(product, 5_000, np.random.default_rng(31))
        assert g_test(spins, distribution(product)) > 1e-4


class TestWrongTwins:
    """The G-test must fail samplers that are wrong."""

    @pytest.mark.parametrize("symmetric", [True, False])
    def test_order_forgotten(self, random_product, symmetric):
        product = random_product(8, 5, symmetric, seed=3)
        spins = sample_spins(product, SHOTS, np.random.default_rng(17))
        assert g_test(spins[:, product.order], distribution(product)) < 1e-4

    def test_every_spin_from_its_own_mean(self, random_product):
        product = random_product(8, 5, False, seed=3)
        up = (1 + moments_of(product)[0]) / 2
        spins = np.where(np.random.default_rng(17).random((SHOTS, 8)) < up, 1, -1)
        assert g_test(spins, distribution(product)) < 1e-4

    def test_product_of_neighbours_taken_for_the_spin(self, random_product):
        product = random_product(8, 5, True, seed=3)
        chain = sample_spins(product, SHOTS, np.random.default_rng(17))[:, product.order]
        chain[:, 1:] *= chain[:, :-1].copy()
        spins = np.empty_like(chain)
        spins[:, product.order] = chain
        assert g_test(spins, distribution(product)) < 1e-4
