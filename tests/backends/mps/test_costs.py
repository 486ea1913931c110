"""Costs told in advance: sizes of what a chain really holds, and what they grow with."""

import numpy as np
import pytest

import anneal_ref as ar
from anneal_ref.backends.mps.chain import Chain, Limits
from anneal_ref.backends.mps.costs import bond_limits, cost_of
from anneal_ref.backends.mps.start import plus_state

KINDS = pytest.mark.parametrize("symmetric", [True, False], ids=["sectors", "dense"])


def instance(lattice, symmetric=True):
    generator = np.random.default_rng(3)
    fields = None if symmetric else generator.normal(size=lattice.n_sites)
    return ar.Instance(lattice, generator.normal(size=len(lattice.edges)), fields)


def cost(lattice, most=64, symmetric=True, precision="double", share=0.25):
    return cost_of(instance(lattice, symmetric), np.arange(lattice.n_sites), most, precision, share)


def test_bonds_are_limited_by_both_sides():
    assert bond_limits(6, True, 100) == [1, 2, 4, 8, 4, 2, 1]
    assert bond_limits(6, False, 5) == [1, 2, 4, 5, 4, 2, 1]
    assert bond_limits(1, True, 8) == [1, 1]
    assert max(bond_limits(300, True, 1 << 60)) == 1 << 60


@pytest.mark.parametrize("lattice", [ar.lattices.square(3, 4, (False, True)), ar.lattices.complete(11)], ids=str)
@pytest.mark.parametrize("precision", ["double", "single"])
@KINDS
def test_bytes_are_those_of_a_saturated_chain(lattice, precision, symmetric):
    case, n = instance(lattice, symmetric), lattice.n_sites
    dtype = {"double": np.complex128, "single": np.complex64}[precision]
    chain = Chain(plus_state(case, np.arange(n), symmetric, dtype), case, Limits(24, 0.0, 1e-6))
    for k in range(6):
        chain.sweep(0.1, (1.0, 0.5), k < 4)
        chain.flip()
    assert max(chain.bond_dimensions) == 24
    held = sum(tensor.nbytes for tensor in chain.tensors)
    held += sum(array.nbytes for block in (*chain.left, *chain.right) if block is not None for array in block)
    told = cost(lattice, 24, symmetric, precision).bytes
    # what a local exponential takes comes on top
    assert 0.8 * held < told < 4 * held


def test_single_precision_takes_half():
    lattice = ar.lattices.square(6, 6)
    double, single = (cost(lattice, precision=precision) for precision in ("double", "single"))
    assert double.bytes == pytest.approx(2 * single.bytes, rel=1e-6)
    assert 0.5 <= single.seconds / double.seconds < 1


def test_the_symmetry_pays():
    lattice = ar.lattices.square(6, 6)
    with_it, without = cost(lattice, 256), cost(lattice, 256, symmetric=False)
    assert 1.5 < without.bytes / with_it.bytes < 4
    assert 2 < without.seconds / with_it.seconds < 6


def test_powers_of_the_bond_dimension():
    lattice = ar.lattices.square(8, 8)
    small, large = cost(lattice, 256), cost(lattice, 512)
    assert large.bytes / small.bytes == pytest.approx(4, rel=0.1)
    assert large.seconds / small.seconds == pytest.approx(8, rel=0.15)


def test_more_two_site_updates_and_more_channels_cost_more():
    lattice = ar.lattices.square(6, 6)
    assert cost(lattice, share=0.25).seconds < cost(lattice, share=1.0).seconds
    assert cost(ar.lattices.chain(36)).seconds < cost(lattice).seconds < cost(ar.lattices.complete(36)).seconds
    # the constant complete graph needs one channel
    even = ar.Instance(ar.lattices.complete(36), np.ones(36 * 35 // 2))
    assert cost_of(even, np.arange(36), 64, "double", 0.25).seconds < cost(lattice).seconds


@pytest.mark.parametrize("n", [1, 2])
@KINDS
def test_smallest_chains(n, symmetric):
    lattice = ar.lattices.chain(2) if n == 2 else ar.lattices.from_edges(1, [])
    told = cost(lattice, symmetric=symmetric)
    assert told.bytes > 0
    assert told.seconds > 0
