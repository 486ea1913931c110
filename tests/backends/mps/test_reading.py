"""Moments against all amplitudes, in both representations and both precisions."""

import numpy as np
import pytest

from anneal_ref.backends.mps.product import Product
from anneal_ref.backends.mps.reading import moments_of

LIMIT = {np.complex64: 2e-6, np.complex128: 1e-13}


def brute(psi, spins):
    n, p = spins.shape[1], np.abs(psi) ** 2
    halves = (psi.reshape(-1, 2, 1 << i) for i in range(n))
    x = np.array([2 * np.vdot(half[:, 0], half[:, 1]).real for half in halves])
    return tuple(values / p.sum() for values in (p @ spins, spins.T @ (spins * p[:, None]), x))


def largest_difference(first, second):
    return max(float(np.abs(a - b).max()) for a, b in zip(first, second, strict=True))


@pytest.mark.parametrize("dtype", LIMIT)
@pytest.mark.parametrize(("symmetric", "odd"), [(True, False), (True, True), (False, False)])
@pytest.mark.parametrize("n", [1, 2, 3, 6, 9])
def test_random_states(random_product, spins_of, n, symmetric, odd, dtype):
    empty = 0
    for seed in range(8):
        product = random_product(n, 1 + seed, symmetric, dtype, seed, odd)
        moments = moments_of(product)
        assert all(values.dtype == np.float64 for values in moments)
        assert largest_difference(moments, brute(product.dense(), spins_of(n))) < LIMIT[dtype]
        assert np.array_equal(moments[1], moments[1].T)
        assert np.array_equal(np.diag(moments[1]), np.ones(n))
        empty += sum(0 in pair for pair in product.dims[1:-1])
    assert not symmetric or n < 3 or empty > 0


@pytest.mark.parametrize("symmetric", [True, False])
def test_a_given_state_comes_back(product_of, spins_of, symmetric):
    n = 7
    psi = np.random.default_rng(3).normal(size=(1 << n, 2)) @ [1, 1j]
    if symmetric:
        psi = psi - psi[::-1]
    product = product_of(psi, [3, 0, 6, 2, 5, 1, 4], symmetric)
    np.testing.assert_allclose(product.dense(), psi, atol=1e-12)
    assert largest_difference(moments_of(product), brute(psi, spins_of(n))) < 1e-13


@pytest.mark.parametrize("symmetric", [True, False])
def test_the_norm_is_divided_out(random_product, symmetric):
    product = random_product(8, 6, symmetric, seed=1)
    before = moments_of(product)
    product.tensors[0] = 3j * product.tensors[0]
    assert largest_difference(before, moments_of(product)) < 1e-14


def test_a_configuration_and_its_flip():
    # (|s> + |-s>)/sqrt 2 is the sum of all even X configurations m with weight prod_p s_p^(m_p) (by hand)
    first, second, third = 1.0, -1.0, -1.0
    tensors = [
        np.array([[[1, first]]], complex) / np.sqrt(2),
        np.array([[[1, second], [second, 1]]], complex) / np.sqrt(2),
        np.array([[[1], [third]]], complex),
    ]
    product = Product(tensors, [(1, 0), (1, 1), (1, 1), (1, 0)], True, np.array([2, 0, 1]))
    z, zz, x = moments_of(product)
    signs = np.array([second, third, first])
    np.testing.assert_allclose(zz, np.outer(signs, signs), atol=1e-15)
    np.testing.assert_allclose([z, x], 0.0, atol=1e-15)


@pytest.mark.parametrize("odd", [False, True])
def test_both_representations_of_a_large_state_agree(random_product, odd):
    product = random_product(36, 24, True, seed=4, odd=odd)
    plain = plain_twin(product, product.in_z_basis())
    first, second = moments_of(product), moments_of(plain)
    assert np.abs(first[1] - np.eye(36)).max() > 0.05
    assert largest_difference(first, second) < 1e-13


def plain_twin(product, tensors):
    return Product(tensors, [(sum(pair), 0) for pair in product.dims], False, product.order)


class TestWrongTwins:
    """Each must fail what the right reading passes."""

    @pytest.mark.parametrize("symmetric", [True, False])
    @pytest.mark.parametrize("wrong", ["order forgotten", "order inverted"])
    def test_order(self, random_product, spins_of, symmetric, wrong):
        product = random_product(6, 5, symmetric, seed=2)
        order = np.arange(6) if wrong == "order forgotten" else np.argsort(product.order)
        assert not np.array_equal(product.order, order)
        twin = Product(product.tensors, product.dims, symmetric, order)
        assert largest_difference(moments_of(twin), brute(product.dense(), spins_of(6))) > 1e-2

    @pytest.mark.parametrize("wrong", ["|-> without a sign on Z = -1", "sign of one bond only"])
    def test_sign(self, random_product, spins_of, wrong):
        product = random_product(6, 5, True, seed=1)
        tensors = []
        for p, a in enumerate(product.tensors):
            sign = np.repeat((1.0, -1.0), product.dims[p + 1]) if wrong == "sign of one bond only" else 1.0
            tensors.append(np.concatenate((a, sign * a)) / np.sqrt(2))
        twin = plain_twin(product, tensors)
        assert largest_difference(moments_of(twin), brute(product.dense(), spins_of(6))) > 1e-2
