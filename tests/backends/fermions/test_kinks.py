"""How many kinks there are, and how they are correlated."""

import numpy as np
import pytest

import anneal_ref as ar
from anneal_ref.backends.fermions.kinks import _reduced

KINDS = pytest.mark.parametrize("kind", ["chain", "ring", "parts"])


def unsatisfied(instance, spins):
    i, j = instance.lattice.edges.T
    return (1 + np.sign(instance.couplings) * spins[:, i] * spins[:, j]) / 2


@KINDS
def test_kinks_are_those_of_the_state_vector(kind, chain_anneal, spins_of):
    for schedule in ("plus", "ground"):
        case = chain_anneal(kind, n=10, schedule=schedule)
        state = ar.FreeFermions(tolerance=1e-11).evolve(case)
        p = ar.StateVector(scheme="blanes-moan-4", tolerance=1e-11).evolve(case).probabilities()
        kinks = unsatisfied(case.instance, spins_of(10))
        numbers = np.bincount(kinks.sum(axis=1).astype(int), p, minlength=kinks.shape[1] + 1)
        np.testing.assert_allclose(state.kink_numbers(), numbers, atol=1e-10)
        assert state.kink_density() == pytest.approx(p @ kinks.mean(axis=1), abs=1e-10)
        assert state.kink_density() == pytest.approx(ar.observables.kink_density(state.moments(), case.instance))
        bonds, both = state.kink_correlations()
        # edges in the order of the bonds, whichever way round
        keys = [tuple(sorted(edge)) for edge in case.instance.lattice.edges.tolist()]
        order = [keys.index(tuple(sorted(bond))) for bond in bonds.tolist()]
        expected = kinks.T @ (kinks * p[:, None])
        np.testing.assert_allclose(both, expected[np.ix_(order, order)], atol=1e-10)


def test_numbers_density_and_correlations_of_a_long_chain_belong_together(chain_anneal):
    for kind in ("chain", "ring"):
        state = ar.FreeFermions().evolve(chain_anneal(kind, n=120))
        p, n = state.kink_numbers(), np.arange(121 if kind == "ring" else 120)
        assert p.sum() == pytest.approx(1.0, abs=1e-12)
        assert p @ n == pytest.approx((len(n) - 1) * state.kink_density(), abs=1e-9)
        assert p @ n**2 == pytest.approx(state.kink_correlations()[1].sum(), abs=1e-8)
        if kind == "ring":
            # with the sign of the product of all couplings, numbers are even or odd
            assert min(p[::2].max(), p[1::2].max()) < 1e-12


def test_a_union_counts_the_kinks_of_its_parts(chain_anneal):
    # without correlations between chains the distribution is a convolution
    case = chain_anneal("parts", n=16)
    whole = ar.FreeFermions().evolve(case)
    edges, together = case.instance.lattice.edges, np.ones(1)
    for part in ([site for site in range(16) if site in group] for group in connected(edges, 16)):
        inside = np.isin(edges[:, 0], part)
        lattice = ar.lattices.from_edges(len(part), np.searchsorted(part, edges[inside]))
        instance = ar.Instance(
            lattice, case.instance.couplings[inside], transverse=case.instance.transverse[np.array(part)]
        )
        if len(part) > 1:
            state = ar.FreeFermions().evolve(ar.Anneal(instance, case.schedule, case.duration))
            together = np.convolve(together, state.kink_numbers())
    np.testing.assert_allclose(whole.kink_numbers(), together, atol=1e-8)


def connected(edges, n):
    groups = [{site} for site in range(n)]
    for i, j in edges.tolist():
        one, other = (next(group for group in groups if site in group) for site in (i, j))
        if one is not other:
            groups.remove(other)
            one |= other
    return groups


def test_the_reduction_keeps_each_eigenvalue_once():
    random = np.random.default_rng(2)
    for n in (1, 2, 3, 12):
        a, g, q = (random.normal(size=(n, n)) for _ in range(3))
        matrix = np.block([[a, g - g.T], [q - q.T, a.T]])
        once, twice = np.linalg.eigvals(_reduced(matrix)), np.linalg.eigvals(matrix)
        for z in (0.3, -1.2, 0.4 + 0.7j):
            assert np.prod(z - once) ** 2 == pytest.approx(np.prod(z - twice), rel=1e-6)


def test_no_bonds_no_kinks():
    instance = ar.Instance(ar.lattices.chain(3), [0.0, 0.0])
    state = ar.FreeFermions().evolve(ar.Anneal(instance, ar.Schedule.linear((1.0, 0.0), (0.0, 1.0)), 1.0))
    for ask in (state.kink_density, state.kink_numbers, state.kink_correlations):
        with pytest.raises(ar.InputError, match="unsatisfied bond"):
            ask()
