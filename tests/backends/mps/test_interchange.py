"""The state handed over to quimb is the same state: an independent code for amplitudes and expectation values."""

import numpy as np
import pytest

from anneal_ref.backends.mps.entropies import cut_entropies
from anneal_ref.backends.mps.interchange import to_quimb
from anneal_ref.backends.mps.reading import moments_of

KINDS = [(True, False), (True, True), (False, False)]
X, Z = np.array([[0.0, 1.0], [1.0, 0.0]]), np.diag([1.0, -1.0])


def amplitudes(psi, order):
    """In the order of the lattice, by quimb's own contraction."""
    return psi.to_dense([psi.site_ind(p) for p in np.argsort(order)[::-1]]).ravel()


def mean(psi, *factors):
    acted = psi
    for operator, position in factors:
        acted = acted.gate(operator, int(position), contract=True)
    return (psi.H @ acted).real


@pytest.mark.parametrize("dtype", [np.complex64, np.complex128])
@pytest.mark.parametrize(("symmetric", "odd"), KINDS)
@pytest.mark.parametrize("n", [1, 2, 5, 14])
def test_amplitudes(random_product, n, symmetric, odd, dtype):
    product = random_product(n, 6, symmetric, dtype, 1, odd)
    psi = to_quimb(product)
    assert (psi.L, psi.dtype) == (n, "complex128")
    np.testing.assert_allclose(amplitudes(psi, product.order), product.dense(), atol=1e-14)


@pytest.mark.parametrize(("symmetric", "odd"), KINDS)
def test_expectation_values_of_a_large_state(random_product, symmetric, odd):
    n = 36
    product = random_product(n, 20, symmetric, odd=odd, seed=2)
    psi, place = to_quimb(product), np.argsort(product.order)
    z, zz, x = moments_of(product)
    for i in range(0, n, 5):
        assert mean(psi, (Z, place[i])) == pytest.approx(z[i], abs=1e-12)
        assert mean(psi, (X, place[i])) == pytest.approx(x[i], abs=1e-12)
        for j in range(i + 1, n, 7):
            assert mean(psi, (Z, place[i]), (Z, place[j])) == pytest.approx(zz[i, j], abs=1e-12)
    for cut in (1, 9, 18, 30):
        # quimb's entropies are in bits
        assert psi.entropy(cut) * np.log(2) == pytest.approx(cut_entropies(product)[cut - 1], abs=1e-10)


def test_wrong_twins(random_product):
    product = random_product(6, 5, True, seed=2)
    psi, exact = to_quimb(product), product.dense()
    # the convention of quimb, first site most significant, and the order of the chain
    for order in (np.arange(6), np.arange(6)[::-1], product.order[::-1]):
        assert np.abs(amplitudes(psi, order) - exact).max() > 1e-2
