"""Energy and variance against H on all amplitudes, and where <H^2> - <H>^2 has no digits left."""

import dataclasses

import numpy as np
import pytest

import anneal_ref as ar
from anneal_ref.backends.mps import variance
from anneal_ref.backends.mps.product import Product
from anneal_ref.backends.mps.reading import moments_of
from anneal_ref.backends.mps.variance import energy_variance

KINDS = [(True, False), (True, True), (False, False)]


class Problem:
    """A Hamiltonian with all bonds, and its matrix."""

    def __init__(self, n, seed, symmetric=False, fill=0.7):
        random = np.random.default_rng([seed, n])
        upper = np.triu(random.normal(size=(n, n)) * (random.random((n, n)) < fill), 1)
        self.couplings, self.weights = upper + upper.T, random.normal(size=n)
        self.fields = np.zeros(n) if symmetric else random.normal(size=n)
        self.transverse, self.problem = random.normal(size=2)

    def arguments(self):
        return self.couplings, self.fields, self.weights, self.transverse, self.problem

    def matrix(self, spins):
        pairs = np.sum((spins @ np.triu(self.couplings, 1)) * spins, axis=1)
        h, index = np.diag(self.problem * (pairs + spins @ self.fields)), np.arange(len(spins))
        for i, weight in enumerate(self.weights):
            h[index, index ^ (1 << i)] -= self.transverse * weight
        return h


def brute(h, psi):
    psi = psi / np.linalg.norm(psi)
    energy = np.vdot(psi, h @ psi).real
    return energy, np.linalg.norm(h @ psi - energy * psi) ** 2


@pytest.mark.parametrize("dtype", [np.complex64, np.complex128])
@pytest.mark.parametrize(("symmetric", "odd"), KINDS)
@pytest.mark.parametrize("n", [1, 2, 3, 6, 9])
def test_random_states(random_product, spins_of, n, symmetric, odd, dtype):
    for seed in range(6):
        product, problem = random_product(n, 1 + seed, symmetric, dtype, seed, odd), Problem(n, seed)
        product.tensors[0] = 2 * product.tensors[0]
        found = energy_variance(product, *problem.arguments())
        assert found == pytest.approx(brute(problem.matrix(spins_of(n)), product.dense()), rel=1e-11, abs=1e-11)


@pytest.mark.parametrize("symmetric", [True, False])
@pytest.mark.parametrize("level", [0, 3])
def test_eigenstates_have_none(product_of, spins_of, symmetric, level):
    n = 9
    problem = Problem(n, 1, symmetric)
    energies, states = np.linalg.eigh(problem.matrix(spins_of(n)))
    product = product_of(states[:, level], np.random.default_rng(level).permutation(n), symmetric)
    energy, left = energy_variance(product, *problem.arguments())
    assert energy == pytest.approx(energies[level], abs=1e-12)
    assert 0 <= left < 1e-25


@pytest.mark.parametrize("symmetric", [True, False])
@pytest.mark.parametrize("part", [1e-3, 1e-6, 1e-9])
def test_small_variances_keep_their_digits(product_of, spins_of, symmetric, part):
    n = 9
    problem = Problem(n, 2, symmetric)
    energies, states = np.linalg.eigh(problem.matrix(spins_of(n)))
    # a level of the same parity
    parity = np.einsum("an,an->n", states[::-1], states)
    other = next(k for k in range(1, 9) if not symmetric or parity[k] * parity[0] > 0)
    product = product_of(states[:, 0] + part * states[:, other], np.arange(n)[::-1], symmetric)
    exact = (energies[other] - energies[0]) ** 2 * part**2 / (1 + part**2) ** 2
    assert energy_variance(product, *problem.arguments())[1] == pytest.approx(exact, rel=1e-14 / part + 1e-10)


def test_configurations(product_of):
    # without transverse field a configuration is an eigenstate; with it, the variance is G^2 sum w^2 (by hand)
    n = 8
    problem = Problem(n, 3)
    psi = np.zeros(1 << n)
    psi[77] = 1.0
    product = product_of(psi, np.random.default_rng(0).permutation(n), False)
    spins = np.array([1 - 2 * (77 >> i & 1) for i in range(n)])
    classical = spins @ np.triu(problem.couplings, 1) @ spins + spins @ problem.fields
    couplings, fields, weights, transverse, scale = problem.arguments()
    energy, left = energy_variance(product, couplings, fields, weights, 0.0, scale)
    assert energy == pytest.approx(scale * classical, abs=1e-12)
    assert left < 1e-25
    left = energy_variance(product, couplings, fields, weights, transverse, scale)[1]
    assert left == pytest.approx(transverse**2 * np.sum(weights**2), rel=1e-12)


@pytest.mark.parametrize("symmetric", [True, False])
def test_energies_of_large_states_follow_from_moments(random_product, symmetric):
    instance = ar.draw_instance(ar.lattices.square(6, 6, periodic=(False, True)), ar.disorder.gaussian(), seed=1)
    product, couplings = random_product(36, 12, symmetric, seed=1), instance.coupling_matrix()
    z, zz, x = moments_of(product)
    fields = np.linspace(-1, 1, 36)
    energy, left = energy_variance(product, couplings, fields, np.ones(36), 1.5, 0.5)
    assert energy == pytest.approx(0.5 * (np.sum(np.triu(couplings, 1) * zz) + fields @ z) - 1.5 * x.sum(), abs=1e-11)
    assert left > 1


def test_the_whole_of_a_large_ghz_state():
    # (|up...up> + |down...down>)/sqrt 2 in a field h: variance (P N h)^2, its energy that of the couplings (by hand)
    n = 40
    half = np.full((1, 2, 2), np.sqrt(0.5), complex)
    tensors = [half[:, :1].copy(), *[half] * (n - 2), np.ones((1, 2, 1), complex)]
    product = Product(tensors, [(1, 0), *[(1, 1)] * (n - 1), (1, 0)], True, np.arange(n))
    couplings = np.ones((n, n)) - np.eye(n)
    energy, left = energy_variance(product, couplings, np.full(n, 0.25), np.ones(n), 0.0, 2.0)
    assert energy == pytest.approx(n * (n - 1), rel=1e-14)
    assert left == pytest.approx((2.0 * n * 0.25) ** 2, rel=1e-12)


class TestWrongTwins:
    def test_order_forgotten(self, random_product, spins_of):
        product, problem = random_product(6, 5, False, seed=3), Problem(6, 4)
        twin = Product(product.tensors, product.dims, False, np.arange(6))
        found = energy_variance(twin, *problem.arguments())
        assert found != pytest.approx(brute(problem.matrix(spins_of(6)), product.dense()), rel=1e-2)

    @pytest.mark.parametrize("wrong", ["long bonds", "what leaves both bases"])
    def test_left_out(self, product_of, spins_of, monkeypatch, wrong):
        problem, psi = Problem(6, 5), np.full(64, 1 / 8)
        product, exact = product_of(psi, np.arange(6), False), brute(problem.matrix(spins_of(6)), psi)
        assert energy_variance(product, *problem.arguments()) == pytest.approx(exact, rel=1e-12)
        if wrong == "long bonds":
            terms = variance._terms

            def short(*arguments):
                return [dataclasses.replace(term, through=0 * term.through) for term in terms(*arguments)]

            monkeypatch.setattr(variance, "_terms", short)
        else:
            products = variance._products
            monkeypatch.setattr(variance, "_products", lambda w: 0 * products(w))
        assert energy_variance(product, *problem.arguments()) != pytest.approx(exact, rel=1e-2)

    def test_the_plain_difference_has_no_digits(self, product_of, spins_of):
        n, part = 9, 1e-9
        problem = Problem(n, 2)
        h = problem.matrix(spins_of(n))
        energies, states = np.linalg.eigh(h)
        psi = states[:, 0] + part * states[:, 1]
        psi /= np.linalg.norm(psi)
        plain = psi @ (h @ (h @ psi)) - (psi @ (h @ psi)) ** 2
        exact = (energies[1] - energies[0]) ** 2 * part**2
        assert abs(plain - exact) > exact / 2
