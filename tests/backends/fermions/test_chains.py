"""Chains are found whatever the order of their sites, and all else is refused with what would do."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

import anneal_ref as ar
from anneal_ref.backends.fermions.chains import chain_of


def rebuilt(chain):
    """Couplings as a matrix between sites."""
    n = chain.n_sites
    matrix = np.zeros((n, n))
    for p, coupling in enumerate(chain.couplings):
        i, j = chain.order[p], chain.order[(p + 1) % n]
        matrix[i, j] += coupling
        matrix[j, i] += coupling
    return matrix


@given(st.integers(1, 9), st.randoms(use_true_random=False), st.booleans())
def test_every_union_of_open_chains_and_every_ring_is_found(n, random, ring):
    sites = random.sample(range(n), n)
    edges = [(sites[k], sites[k + 1]) for k in range(n - 1) if ring or random.random() < 0.7]
    if ring and n > 2:
        edges.append((sites[-1], sites[0]))
    random.shuffle(edges)
    couplings = [random.choice([-1, 1]) * random.uniform(0.1, 2) for _ in edges]
    weights = [random.uniform(0.1, 2) for _ in range(n)]
    instance = ar.Instance(ar.lattices.from_edges(n, edges), couplings, transverse=weights)
    chain = chain_of(instance)
    assert sorted(chain.order) == list(range(n))
    np.testing.assert_array_equal(rebuilt(chain), instance.coupling_matrix())
    np.testing.assert_array_equal(chain.weights, np.array(weights)[chain.order])
    np.testing.assert_array_equal(chain.order[chain.places], np.arange(n))
    assert chain.ring == (ring and n > 2)
    assert len(chain.bonds) == len(edges)


def test_couplings_of_zero_are_no_couplings():
    instance = ar.Instance(ar.lattices.square(2, 3), [1, 0, 0, 1, 1, 1, 1])
    chain = chain_of(instance)
    np.testing.assert_array_equal(rebuilt(chain), instance.coupling_matrix())
    cut = chain_of(ar.Instance(ar.lattices.chain(5, periodic=True), [1, 1, 0, 1, 1]))
    assert not cut.ring
    assert len(cut.bonds) == 4


def test_the_plain_chain_keeps_its_order():
    for periodic in (False, True):
        lattice = ar.lattices.chain(6, periodic=periodic)
        chain = chain_of(ar.Instance(lattice, np.ones(lattice.n_edges)))
        np.testing.assert_array_equal(chain.order, np.arange(6))


TWO_RINGS = [(0, 1), (1, 2), (2, 0), (3, 4), (4, 5), (5, 3)]


@pytest.mark.parametrize(
    ("lattice", "fields", "words"),
    [
        (ar.lattices.chain(4), [0, 0, 0.5, 0], "no fields; got h = 0.5 at site 2"),
        (ar.lattices.square(2, 3), None, "at most two couplings to a site; site 1 of square 2x3 has 3"),
        (ar.lattices.from_edges(6, TWO_RINGS), None, "one ring alone"),
        (ar.lattices.from_edges(6, TWO_RINGS[:4]), None, "one ring alone"),
    ],
)
def test_other_problems_are_refused_and_told_what_would_do(lattice, fields, words):
    with pytest.raises(ar.NotSupported, match=words) as caught:
        chain_of(ar.Instance(lattice, np.ones(lattice.n_edges), fields))
    assert {name.split("(")[0] for name in caught.value.alternatives} == {"StateVector", "MPS"}
