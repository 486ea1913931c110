"""The start |+...+>, its room to grow, and kicks: without the room, distant pairs stay frozen."""

import itertools

import numpy as np
import pytest

import anneal_ref as ar
from anneal_ref.backends.mps.chain import Chain, Limits
from anneal_ref.backends.mps.product import Product
from anneal_ref.backends.mps.reading import moments_of
from anneal_ref.backends.mps.start import kicked, plus_state

KINDS = pytest.mark.parametrize("symmetric", [True, False], ids=["sectors", "dense"])


def pair_on(lattice, first, second, coupling=1.0):
    """One coupling of a lattice that has more edges than it uses; the pair is added where it is none of them."""
    edges = [tuple(edge) for edge in lattice.edges]
    if (first, second) not in edges:
        edges.append((first, second))
    couplings = [coupling * (edge == (first, second)) for edge in edges]
    return ar.Instance(ar.lattices.from_edges(lattice.n_sites, edges), couplings)


def quench(case, coupling_time=0.5):
    """The problem part alone, from |+...+>."""
    schedule = ar.Schedule.linear((0.0, 0.0), (1.0, 1.0))
    with pytest.warns(ar.AnnealRefWarning):
        return ar.Anneal(case, schedule, coupling_time)


# --------------------------------------------------------------------------------------------------------- starts
@pytest.mark.parametrize("dtype", [np.complex128, np.complex64])
@KINDS
@pytest.mark.parametrize("n", [1, 2, 5, 8])
def test_the_start_is_plus_and_right_canonical(n, symmetric, dtype):
    generator = np.random.default_rng(n)
    lattice = ar.lattices.complete(n) if n > 1 else ar.lattices.from_edges(1, [])
    case = ar.Instance(lattice, generator.normal(size=len(lattice.edges)))
    product = plus_state(case, generator.permutation(n), symmetric, dtype)
    assert all(tensor.dtype == dtype and tensor.flags.c_contiguous for tensor in product.tensors)
    np.testing.assert_allclose(product.dense(), np.full(1 << n, 2 ** (-n / 2)), atol=1e-6 if dtype == np.complex64 else
                               1e-15)  # fmt: skip
    for tensor in product.in_z_basis()[1:]:
        gram = np.einsum("slr,smr->lm", tensor, tensor.conj())
        np.testing.assert_allclose(gram, np.eye(len(gram)), atol=1e-6)


def test_room_is_made_for_spins_that_couple_to_the_left():
    # bonds of the complete graph see every spin to their right, those of a chain the next one
    complete = ar.Instance(ar.lattices.complete(6), np.ones(15))
    assert plus_state(complete, np.arange(6), True, np.complex128).bond_dimensions == (6, 5, 4, 3, 2)
    chain = ar.Instance(ar.lattices.chain(6), np.ones(5))
    assert set(plus_state(chain, np.arange(6), True, np.complex128).bond_dimensions) == {2}
    # a coupling of zero needs none
    idle = ar.Instance(ar.lattices.chain(6), [1.0, 0.0, 1.0, 1.0, 1.0])
    assert plus_state(idle, np.arange(6), True, np.complex128).bond_dimensions == (2, 1, 2, 2, 2)


# ------------------------------------------------------------------------------------------------------ frozen pairs
# exact by hand: from |+...+> under J Z_a Z_b alone, <X_a> = cos 2 J t, here cos 1
COSINE = 0.5403023058681398


@pytest.mark.parametrize("order", list(itertools.permutations(range(4))))
def test_a_distant_pair_turns_in_any_order(order):
    case = pair_on(ar.lattices.chain(4), 0, 3)
    x = ar.MPS(site_order=order).evolve(quench(case)).moments().x.value
    np.testing.assert_allclose(x, [COSINE, 1, 1, COSINE], atol=1e-10)


@pytest.mark.parametrize(
    ("lattice", "pair"),
    [(ar.lattices.chain(16), (0, 15)), (ar.lattices.square(4, 4), (0, 15)), (ar.lattices.cubic(2, 2, 4), (3, 12)),
     (ar.lattices.square(6, 6), (0, 35))],
    ids=["chain", "square", "cubic", "large"],
)  # fmt: skip
@pytest.mark.parametrize("symmetric", [True, False], ids=["sectors", "dense"])
def test_a_distant_pair_turns_on_any_lattice(lattice, pair, symmetric):
    n = lattice.n_sites
    case = pair_on(lattice, *pair)
    if not symmetric:
        # a field on a spin that takes no part forbids the symmetry
        rest = next(site for site in range(n) if site not in pair)
        case = ar.Instance(case.lattice, case.couplings, np.eye(n)[rest])
    for order in (None, tuple(range(n)), tuple(np.random.default_rng(2).permutation(n).tolist())):
        state = ar.MPS(site_order=order).evolve(quench(case))
        assert state.ledger["symmetric"] == symmetric
        np.testing.assert_allclose(state.moments().x.value[list(pair)], COSINE, atol=1e-10)


class TestWithoutEnrichment:
    """The wrong twin: |+...+> alone on every bond."""

    @staticmethod
    def turned(n, rich, steps=8):
        case = pair_on(ar.lattices.chain(n), 0, n - 1)
        if rich:
            start = plus_state(case, np.arange(n), True, np.complex128)
        else:
            start = Product([np.ones((1, 1, 1), complex)] * n, [(1, 0)] * (n + 1), True, np.arange(n))
        chain = Chain(start, case, Limits(64, 1e-12, 1e-13))
        for _ in range(2 * steps):
            chain.sweep(0.25 / steps, (0.0, 1.0), True)
            chain.flip()
        return moments_of(chain.product())[2][[0, -1]]

    def test_a_long_chain_stays_frozen(self):
        np.testing.assert_allclose(self.turned(16, rich=False), 1.0, atol=1e-12)
        np.testing.assert_allclose(self.turned(16, rich=True), COSINE, atol=1e-10)

    def test_a_short_chain_is_late(self):
        # the few states that a division never drops span so little that the pair starts turning a sweep too late
        assert abs(self.turned(4, rich=False)[0] - COSINE) > 1e-2
        np.testing.assert_allclose(self.turned(4, rich=True), COSINE, atol=1e-10)


def test_room_waits_for_a_late_problem_part(apart):
    # nothing but the transverse field for a third of the anneal, then distant pairs all at once
    s = [0, 0.3, 1]
    schedule = ar.Schedule.from_table(s, [4, 3, 0], [0, 0, 4], interpolation="linear")
    lattice = ar.lattices.biclique(4, 5)
    case = ar.draw_instance(lattice, ar.disorder.gaussian(), seed=5)
    anneal = ar.Anneal(case, schedule, 2.0)
    exact = ar.StateVector(tolerance=1e-9).evolve(anneal)
    backend = ar.MPS(bond_dimension=16, halvings=3, truncation=1e-15)
    assert apart(backend.evolve(anneal), exact) < 1e-4
    waveform = ar.Waveform([0, 0.3, 1], [0, 0, 1])
    paused = ar.Anneal(case, ar.Schedule.polynomial([4, -4], [0, 4]), 2.0, waveform=waveform)
    exact = ar.StateVector(tolerance=1e-9).evolve(paused)
    assert apart(backend.evolve(paused), exact) < 1e-6


# ---------------------------------------------------------------------------------------------------------- kicks
@pytest.mark.parametrize("odd", [False, True])
@KINDS
def test_a_kick_is_z_on_its_site(random_product, symmetric, odd):
    n = 6
    product = random_product(n, 5, symmetric, odd=odd)
    psi = product.dense()
    for site in range(n):
        after = kicked(product, site)
        signs = 1 - 2 * ((np.arange(1 << n) >> site) & 1)
        np.testing.assert_allclose(after.dense(), signs * psi, atol=1e-14)
        np.testing.assert_allclose(kicked(after, site).dense(), psi, atol=1e-14)
        if symmetric:
            assert after.dims[-1] == product.dims[-1][::-1]
    # what was there stays as it was
    np.testing.assert_array_equal(product.dense(), psi)


FIELDS = [0.3, -0.2, 0.0, 0.9, 0.1, -0.6]
KICKS = {
    "one": [(0.5, 2)],
    "several": [(0.2, 1), (0.2, 4), (0.7, 0)],
    "twice the same": [(0.4, 3), (0.4, 3)],
    "at both ends": [(0.0, 1), (1.0, 5)],
    "nearly together": [(0.3, 1), (0.1 + 0.2, 4)],
    "one after the other": [(0.1, 3), (0.15, 3), (0.6, 3)],
}


@pytest.mark.parametrize("kicks", KICKS.values(), ids=KICKS.keys())
@pytest.mark.parametrize("fields", [None, FIELDS], ids=["sectors", "dense"])
def test_kicks_are_those_of_the_state_vector(apart, fields, kicks):
    lattice = ar.lattices.ladder(3)
    case = ar.Instance(lattice, np.random.default_rng(8).normal(size=len(lattice.edges)), fields)
    anneal = ar.Anneal(case, ar.Schedule.polynomial([5, -10, 5], [0, 2, 3]), 1.5)
    state = ar.MPS(halvings=3, truncation=1e-15).evolve(anneal, kicks=kicks)
    exact = ar.StateVector(tolerance=1e-10)
    assert apart(state, exact.evolve(anneal, kicks=kicks)) < 1e-6
    assert state.ledger["kicks"] == len(kicks)
    if fields is None:
        assert state.ledger["parity"] == ("odd" if len(kicks) % 2 else "even")
    else:
        assert state.ledger["parity"] == "broken by fields"
    if kicks is not KICKS["twice the same"]:
        # one after the other in place of another is no longer the same: the suite would see it
        assert apart(state, exact.evolve(anneal)) > 1e-3
