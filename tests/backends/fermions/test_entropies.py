"""Entropies of stretches, of what is left when one is taken out, and of unions over several chains."""

import numpy as np
import pytest

import anneal_ref as ar

CHAIN = [[0], [9], [4], [0, 1, 2], [3, 4, 5, 6], [5, 3, 4], [7, 8, 9], [0, 1, 8, 9], [], range(10), range(1, 9)]
RING = [*CHAIN, [9, 0], [8, 9, 0, 1, 2], [0, 1, 2, 3, 5, 6, 7, 8, 9]]


@pytest.mark.parametrize(("kind", "sets"), [("chain", CHAIN), ("ring", RING)])
@pytest.mark.parametrize("schedule", ["plus", "ground"])
def test_entropies_are_those_of_the_state_vector(kind, sets, schedule, chain_anneal):
    case = chain_anneal(kind, n=10, schedule=schedule)
    state = ar.FreeFermions(tolerance=1e-11).evolve(case)
    other = ar.StateVector(scheme="blanes-moan-4", tolerance=1e-11).evolve(case)
    for sites in sets:
        assert state.entropy(sites) == pytest.approx(other.entropy(sites), abs=1e-9)


def test_entropies_of_several_chains_add_up(chain_anneal):
    case = chain_anneal("parts", n=10)
    state = ar.FreeFermions(tolerance=1e-11).evolve(case)
    other = ar.StateVector(scheme="blanes-moan-4", tolerance=1e-11).evolve(case)
    # of three spins in a row any set is a stretch, or what is left of one: no set is refused
    for bits in range(0, 1 << 10, 13):
        sites = [site for site in range(10) if bits >> site & 1]
        assert state.entropy(sites) == pytest.approx(other.entropy(sites), abs=1e-9)


@pytest.mark.parametrize(("kind", "sites"), [("chain", [1, 3]), ("chain", [0, 4, 9]), ("ring", [0, 1, 5, 6])])
def test_other_sets_are_refused(kind, sites, chain_anneal):
    state = ar.FreeFermions(tolerance=1e-3).evolve(chain_anneal(kind))
    with pytest.raises(ar.NotSupported, match="neighbours in a row") as caught:
        state.entropy(sites)
    assert "StateVector()" in caught.value.alternatives


@pytest.mark.parametrize("n", [64, 256])
def test_entropy_of_the_critical_ring(n):
    # P. Calabrese and J. Cardy, J. Stat. Mech. P06002 (2004), with c = 1/2; the constant: F. Igloi and R. Juhasz, EPL
    # 81, 57003 (2008), from memory: 0.478558
    instance = ar.Instance(ar.lattices.chain(n, periodic=True), -np.ones(n))
    case = ar.Anneal(instance, ar.Schedule.linear((1.0, 1.0), (1.0, 1.0)), 1.0, start="ground")
    state = ar.FreeFermions().evolve(case, at=0.0)
    for length in (n // 4, n // 2):
        law = np.log(n / np.pi * np.sin(np.pi * length / n)) / 6 + 0.478558
        assert state.entropy(range(length)) == pytest.approx(law, abs=0.06 / n)


@pytest.mark.parametrize(("n", "half"), [(64, 0.23689), (256, 0.23868)])
def test_entropy_of_half_the_critical_open_chain(n, half):
    # the same law, (1/12) ln(2N/pi) and half of the constant; the two values: free fermions, mode by mode
    instance = ar.Instance(ar.lattices.chain(n), -np.ones(n - 1))
    case = ar.Anneal(instance, ar.Schedule.linear((1.0, 1.0), (1.0, 1.0)), 1.0, start="ground")
    entropy = ar.FreeFermions().evolve(case, at=0.0).entropy(range(n // 2))
    assert entropy - np.log(2 * n / np.pi) / 12 == pytest.approx(half, abs=1e-5)
