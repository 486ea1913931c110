"""The state of a configuration: right amplitudes, orthonormal bases, and room for what the transverse field does."""

import numpy as np
import pytest

import anneal_ref as ar
from anneal_ref.backends.mps.classical_start import configuration_state


def random_case(n, seed):
    random = np.random.default_rng([n, seed])
    lattice = ar.lattices.complete(n) if n > 1 else ar.lattices.chain(1)
    couplings = random.normal(size=lattice.n_edges) * (random.random(lattice.n_edges) < 0.6)
    return ar.Instance(lattice, couplings), random.choice((-1, 1), n).astype(np.int8), random.permutation(n)


@pytest.mark.parametrize("symmetric", [False, True])
@pytest.mark.parametrize("n", range(1, 8))
def test_amplitudes_and_bases(n, symmetric):
    for seed in range(4):
        instance, spins, order = random_case(n, seed)
        product = configuration_state(spins, instance, order, symmetric)
        wanted = np.zeros(1 << n)
        wanted[(spins < 0) @ (1 << np.arange(n))] = 1
        if symmetric:
            wanted = (wanted + wanted[::-1]) / np.sqrt(2)
        np.testing.assert_allclose(product.dense(), wanted, atol=1e-15)
        assert [(sum(a), sum(b)) for a, b in zip(product.dims[:-1], product.dims[1:], strict=True)] == [
            tensor.shape[1:] for tensor in product.tensors
        ]
        for tensor, (even, odd) in zip(product.tensors[1:], product.dims[1:-1], strict=True):
            overlaps = np.einsum("slr,smr->lm", tensor, tensor.conj())
            # states of different parity are orthogonal by the spins themselves, which the one matrix does not hold
            for block, size in ((overlaps[:even, :even], even), (overlaps[even:, even:], odd)):
                np.testing.assert_allclose(block, np.eye(size), atol=1e-15)


@pytest.mark.parametrize("symmetric", [False, True])
def test_room_for_every_flip_that_couples(symmetric):
    n = 6
    instance, spins, order = random_case(n, 1)
    couplings = instance.coupling_matrix()[np.ix_(order, order)]
    product = configuration_state(spins, instance, order, symmetric)
    for bond in range(1, n):
        flips = sum(bool(couplings[:bond, c].any()) for c in range(bond, n))
        both = (1 + flips) << symmetric
        # the ends of the chain have no more states than that
        assert sum(product.dims[bond]) == (min(both, 1 << (n - bond)) if symmetric else both)


def test_distant_pairs_of_a_classical_start_do_not_freeze():
    """Spins 0 and 23 are coupled, and the field on all others is all that lies between them on the chain."""
    n = 24
    fields = np.full(n, 0.3)
    fields[0], fields[-1] = 0.5, 0.2
    schedule = ar.Schedule.linear(transverse=(0.0, 2.0), problem=(1.0, 0.5))
    long = ar.Instance(ar.lattices.from_edges(n, [(0, n - 1)]), [0.8], fields)
    pair = ar.Instance(ar.lattices.chain(2), [0.8], fields[[0, -1]])
    exact = ar.StateVector(tolerance=1e-9).evolve(ar.Anneal(pair, schedule, 2.0, start="ground")).moments()
    backend = ar.MPS(bond_dimension=16, halvings=1, site_order=tuple(range(n)))
    found = backend.evolve(ar.Anneal(long, schedule, 2.0, start="ground")).moments()
    assert abs(exact.zz.value[0, 1] - exact.z.value[0] * exact.z.value[1]) > 0.1
    assert abs(found.zz.value[0, -1] - exact.zz.value[0, 1]) < 5e-5
    np.testing.assert_allclose(found.z.value[[0, -1]], exact.z.value, atol=5e-5)
