"""Carriers and channels give back every coupling across every cut, and there are no more of them than its rank."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

import anneal_ref as ar
from anneal_ref.backends.mps.wiring import Wires, Wiring


def symmetrised(upper):
    upper = np.triu(upper, 1)
    return upper + upper.T


def random_couplings(n, density=1.0, rank=None, seed=0):
    generator = np.random.default_rng([seed, n])
    values = generator.normal(size=(n, n))
    if rank is not None:
        # off its diagonal the matrix is a sum of so many products, and so is every cut
        factors = generator.normal(size=(rank, n))
        values = np.einsum("ki,kj->ij", factors, factors)
    return symmetrised(values * (generator.random((n, n)) < density))


def carriers(wiring):
    """Coefficients of the carriers in the spins, shape (b, r_b), for every bond b, followed from site to site."""
    found = [np.zeros((0, 0))]
    for mix in wiring.mixes:
        wide = np.zeros((len(found[-1]) + 1, found[-1].shape[1] + 1))
        wide[:-1, :-1], wide[-1, -1] = found[-1], 1.0
        found.append(wide @ mix)
    return found


def disagreement(couplings, wiring, mirror):
    """Largest difference between the couplings and what carriers and wires make of them, relative to the largest."""
    n = len(couplings)
    left, right = carriers(wiring), [shape[::-1] for shape in carriers(mirror)[::-1]]
    pairs = [(left[b] @ wiring.near[b], couplings[:b, b]) for b in range(n)]
    for sites in range(3):
        for b in range(n + 1 - sites):
            wires, end = Wires(*wiring.wires[sites][b]), b + sites
            u, w = left[b], right[end]
            pairs.append((u @ wires.cross_left.T @ wires.cross_right @ w.T, couplings[:b, end:]))
            if sites >= 1:
                pairs += [(u @ wires.left_near, couplings[:b, b]), (w @ wires.right_near, couplings[end:, end - 1])]
            if sites == 2:
                pairs += [(u @ wires.left_far, couplings[:b, b + 1]), (w @ wires.right_far, couplings[end:, b])]
    scale = np.abs(couplings).max(initial=1e-300)
    return max(np.abs(found - wanted).max(initial=0.0) / scale for found, wanted in pairs)


def gaussian(lattice, seed=3):
    return ar.draw_instance(lattice, ar.disorder.gaussian(), seed=seed).coupling_matrix()


CASES = {
    "one spin": np.zeros((1, 1)),
    "no coupling": np.zeros((5, 5)),
    "chain": gaussian(ar.lattices.chain(7)),
    "ring": gaussian(ar.lattices.chain(8, periodic=True)),
    "cylinder": gaussian(ar.lattices.square(3, 4, (False, True))),
    "cubic": gaussian(ar.lattices.cubic(2, 2, 3)),
    "biclique": gaussian(ar.lattices.biclique(5, 6)),
    "complete": gaussian(ar.lattices.complete(9)),
    "constant complete": 0.7 * (1 - np.eye(9)),
    "rank two": random_couplings(10, rank=2, seed=1),
    "two pieces": random_couplings(9, density=0.15, seed=4),
    "orders of magnitude": random_couplings(8, seed=5) * symmetrised(10.0 ** -(np.arange(64).reshape(8, 8) ** 0.5)),
}
NAMED = pytest.mark.parametrize("couplings", CASES.values(), ids=CASES.keys())


@NAMED
def test_every_coupling_comes_back(couplings):
    wiring = Wiring(couplings)
    assert disagreement(couplings, wiring, wiring.mirrored()) < 1e-12


@NAMED
def test_no_more_carriers_and_channels_than_the_rank(couplings):
    n, wiring = len(couplings), Wiring(couplings)
    ranks = [np.linalg.matrix_rank(couplings[:b, b:]) if 0 < b < n else 0 for b in range(n + 1)]
    assert list(wiring.ranks) == ranks
    for sites in range(3):
        for b in range(n + 1 - sites):
            wires, crossing = Wires(*wiring.wires[sites][b]), couplings[:b, b + sites :]
            assert len(wires.cross_left) == len(wires.cross_right)
            assert len(wires.cross_left) == (np.linalg.matrix_rank(crossing) if crossing.size else 0)


def test_one_channel_carries_the_constant_complete_graph():
    wiring = Wiring(1 - np.eye(12))
    assert set(wiring.ranks[1:-1]) == {1}
    assert {len(wires[4]) for wires in wiring.wires[2][1:-1]} == {1}


def test_a_chain_keeps_one_spin_as_it_is():
    wiring = Wiring(CASES["chain"])
    # the block's last spin, and nothing of the older carriers
    assert all(mix.tolist() == [[0.0]] * (len(mix) - 1) + [[1.0]] for mix in wiring.mixes[:-1])


def test_the_mirror_of_the_mirror_is_the_wiring():
    wiring = Wiring(CASES["cylinder"])
    np.testing.assert_array_equal(wiring.mirrored().mirrored().couplings, wiring.couplings)


@given(
    n=st.integers(1, 9), density=st.sampled_from([0.1, 0.3, 0.7, 1.0]), rank=st.sampled_from([None, 1, 2, 3]),
    seed=st.integers(0, 1 << 20),
)  # fmt: skip
def test_random_couplings_come_back(n, density, rank, seed):
    couplings = random_couplings(n, density, rank, seed)
    wiring = Wiring(couplings)
    assert disagreement(couplings, wiring, wiring.mirrored()) < 1e-10


class TestWrongTwins:
    """Each must fail what the right wiring passes."""

    couplings = CASES["cylinder"]

    def test_a_sign(self):
        wiring = Wiring(-self.couplings)
        assert disagreement(self.couplings, wiring, wiring.mirrored()) > 0.5

    def test_a_mirror_that_is_not_turned_round(self):
        couplings = CASES["complete"]
        wiring = Wiring(couplings)
        assert disagreement(couplings, wiring, wiring) > 0.1

    def test_one_channel_too_few(self):
        wiring = Wiring(self.couplings)
        found = list(wiring.wires[2])
        found[4] = (*found[4][:4], found[4][4][1:], found[4][5][1:])
        wiring.wires = (*wiring.wires[:2], tuple(found))
        assert disagreement(self.couplings, wiring, wiring.mirrored()) > 0.1
