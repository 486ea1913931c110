"""Schmidt values and entropies against all amplitudes."""

import numpy as np
import pytest

from anneal_ref.backends.mps import entropies
from anneal_ref.backends.mps.entropies import cut_entropies, entropy, schmidt_values
from anneal_ref.backends.mps.product import Product
from anneal_ref.backends.mps.reading import moments_of
from anneal_ref.base.errors import InputError, NotSupported

KINDS = [(True, False), (True, True), (False, False)]
LIMIT = {np.complex64: 3e-5, np.complex128: 1e-11}


def dense_values(psi, n, sites):
    rest = [site for site in range(n) if site not in sites]
    axes = [n - 1 - site for site in (*sites, *rest)]
    matrix = psi.reshape((2,) * n).transpose(axes).reshape(1 << len(sites), -1)
    return np.linalg.svd(matrix / np.linalg.norm(psi), compute_uv=False)


def dense_entropy(psi, n, sites):
    weights = dense_values(psi, n, sites) ** 2
    weights = weights[weights > 0]
    return -np.sum(weights * np.log(weights))


@pytest.mark.parametrize("dtype", LIMIT)
@pytest.mark.parametrize(("symmetric", "odd"), KINDS)
@pytest.mark.parametrize("n", [1, 2, 3, 6, 9])
def test_all_cuts(random_product, n, symmetric, odd, dtype):
    for seed in range(8):
        product = random_product(n, 1 + seed, symmetric, dtype, seed, odd)
        product.tensors[0] = 2 * product.tensors[0]
        psi, found = product.dense(), schmidt_values(product)
        assert len(found) == n - 1
        for cut, values in enumerate(found, 1):
            exact = dense_values(psi, n, product.order[:cut])
            exact, values = (np.pad(v, (0, (1 << n) - len(v))) for v in (exact, values))
            np.testing.assert_allclose(values, exact, atol=LIMIT[dtype])
            assert np.all(np.diff(values) <= 0)
            assert np.sum(values**2) == pytest.approx(1, abs=1e-14)
        exact = [dense_entropy(psi, n, product.order[:cut]) for cut in range(1, n)]
        np.testing.assert_allclose(cut_entropies(product), exact, atol=LIMIT[dtype])


@pytest.mark.parametrize("dtype", LIMIT)
@pytest.mark.parametrize(("symmetric", "odd"), KINDS)
@pytest.mark.parametrize("bond", [3, 8])
def test_all_sets(random_product, symmetric, odd, bond, dtype):
    n = 6
    product = random_product(n, bond, symmetric, dtype, 3, odd)
    product.tensors[0] = 2 * product.tensors[0]
    psi = product.dense()
    for bits in range(1 << n):
        sites = [site for site in range(n) if bits >> site & 1]
        assert entropy(product, sites[::-1]) == pytest.approx(dense_entropy(psi, n, sites), abs=LIMIT[dtype])


@pytest.mark.parametrize("symmetric", [True, False])
def test_sets_of_more_sites(random_product, symmetric):
    n, random = 11, np.random.default_rng(1)
    product = random_product(n, 7, symmetric, seed=2)
    psi = product.dense()
    for _ in range(25):
        sites = random.permutation(n)[: random.integers(1, n)].tolist()
        assert entropy(product, sites) == pytest.approx(dense_entropy(psi, n, sites), abs=1e-12)


@pytest.mark.parametrize("symmetric", [True, False])
def test_one_bit_shared_by_all(product_of, symmetric):
    # |up ... up> + |down ... down>: ln 2 for every set (textbook)
    psi = np.zeros(1 << 7)
    psi[[0, -1]] = 1.0
    product = product_of(psi, [2, 5, 0, 6, 1, 4, 3], symmetric)
    np.testing.assert_allclose([v.tolist() for v in schmidt_values(product)], np.sqrt(0.5), atol=1e-12)
    for sites in ([0], [1, 2], [3, 6, 4], [0, 1, 2, 3, 4, 5]):
        assert entropy(product, sites) == pytest.approx(np.log(2), abs=1e-12)
    assert entropy(product, []) == entropy(product, range(7)) == 0.0


def test_a_block_between_two_small_bonds_of_a_long_chain(random_product):
    # most sites of a set that is cheap only because its inside is brought down to its bonds
    product = random_product(60, 6, False, seed=1)
    block = product.order[10:50]
    rest = np.setdiff1d(np.arange(60), block)
    inner = entropy(product, block)
    assert inner == pytest.approx(entropy(product, rest), abs=1e-12)
    # strong subadditivity (E. H. Lieb and M. B. Ruskai, J. Math. Phys. 14, 1938 (1973)) and Araki-Lieb (1970)
    left, right = entropy(product, product.order[:10]), entropy(product, product.order[:50])
    assert abs(left - right) <= inner <= left + right
    assert inner > 0.1


@pytest.mark.parametrize("symmetric", [True, False])
def test_a_site_of_a_long_chain(random_product, symmetric):
    product = random_product(40, 16, symmetric, seed=1)
    z, _, x = moments_of(product)
    for site in product.order[[0, 7, 20, 39]]:
        if symmetric:
            # the density matrix of a spin is (1 + x X)/2, since <Y> and <Z> vanish (by hand)
            weights = np.array([1 + x[site], 1 - x[site]]) / 2
            assert entropy(product, [site]) == pytest.approx(-np.sum(weights * np.log(weights)), abs=1e-12)
        else:
            # without <Y> the entropy can only seem larger
            length = np.hypot(x[site], z[site])
            weights = np.array([1 + length, 1 - length]) / 2
            assert entropy(product, [site]) <= -np.sum(weights * np.log(weights)) + 1e-12


def test_what_cannot_be_had_is_refused(random_product):
    product = random_product(36, 64, True, np.complex64)
    with pytest.raises(NotSupported, match="Available are the sites at either end") as caught:
        entropy(product, product.order[::4])
    assert "StateVector" in caught.value.alternatives
    with pytest.raises(InputError, match="differ"):
        entropy(product, [1, 1])
    with pytest.raises(InputError, match=r"sites\[1\]"):
        entropy(product, [1, 36])


def test_the_estimate_of_the_work_is_an_upper_bound(random_product, monkeypatch):
    sizes = []
    reduced = entropies._reduced
    monkeypatch.setattr(entropies, "_reduced", lambda y: sizes.append(y.size) or reduced(y))
    for symmetric in (True, False):
        product = random_product(14, 5, symmetric, seed=4)
        sites = product.order[[2, 3, 5, 9, 11]]
        entropy(product, sites)
        largest = max(sizes)
        monkeypatch.setattr(entropies, "_MOST_ENTRIES", largest - 1)
        with pytest.raises(NotSupported):
            entropy(product, sites)
        monkeypatch.setattr(entropies, "_MOST_ENTRIES", 1 << 24)


class TestWrongTwins:
    def test_order_forgotten(self, random_product):
        product = random_product(7, 6, False, seed=5)
        twin = Product(product.tensors, product.dims, False, np.arange(7))
        psi = product.dense()
        off = [abs(entropy(twin, [a, b]) - dense_entropy(psi, 7, [a, b])) for a in range(7) for b in range(a)]
        assert max(off) > 1e-2

    def test_values_of_tensors_without_the_centre(self, random_product):
        product = random_product(7, 6, False, seed=5)
        psi = product.dense()
        exact = dense_values(psi, 7, product.order[:3])
        twin = np.linalg.svd(product.tensors[2].reshape(-1, product.dims[3][0]), compute_uv=False)
        twin = twin / np.linalg.norm(twin)
        assert np.abs(twin - exact[: len(twin)]).max() > 1e-2
