"""Starts from the ground state of H(0): closed forms, the state vector, and what is degenerate."""

import numpy as np
import pytest

import anneal_ref as ar
from anneal_ref.base.errors import NotSupported


def start(instance, transverse, problem):
    schedule = ar.Schedule.linear((transverse, 1.0), (problem, 1.0))
    return ar.Anneal(instance, schedule, 1.0, start="ground")


def uniform(n, coupling, periodic):
    lattice = ar.lattices.chain(n, periodic=periodic)
    return ar.Instance(lattice, np.full(lattice.n_edges, coupling))


@pytest.mark.parametrize("n", [8, 12, 200])
@pytest.mark.parametrize("coupling", [-1.0, 1.0])
def test_critical_ring(n, coupling):
    # P. Pfeuty, Ann. Phys. 57, 79 (1970): E0 = -2 / sin(pi/2N), <X> = -sign(J) <ZZ> = 1/(N sin(pi/2N))
    state = ar.FreeFermions().evolve(start(uniform(n, coupling, True), 1.0, 1.0), at=0.0)
    assert state.energy() == pytest.approx(-2 / np.sin(np.pi / (2 * n)), rel=1e-12)
    assert state.ledger["ground_energy"] == pytest.approx(state.energy(), rel=1e-12)
    bond = 1 / (n * np.sin(np.pi / (2 * n)))
    pairs, values = state.correlations(1)
    np.testing.assert_allclose(values, -coupling * bond, atol=1e-12)
    np.testing.assert_allclose(state.moments().x.value, bond, atol=1e-12)


@pytest.mark.parametrize("n", [8, 12, 300])
def test_critical_open_chain(n):
    # P. Pfeuty, Ann. Phys. 57, 79 (1970): E0 = 1 - 1/sin(pi/(2(2N+1)))
    state = ar.FreeFermions().evolve(start(uniform(n, -1.0, False), 1.0, 1.0), at=0.0)
    assert state.energy() == pytest.approx(1 - 1 / np.sin(np.pi / (2 * (2 * n + 1))), rel=1e-12)


def test_correlations_of_the_critical_ring():
    # P. Pfeuty, Ann. Phys. 57, 79 (1970): in the infinite chain (2/pi)^r prod_k (1 - 1/4k^2)^(k-r); r = 1 to 4 and 10.
    # On a ring distances are chords: corrections of the square of r/N
    n = 300
    state = ar.FreeFermions().evolve(start(uniform(n, -1.0, True), 1.0, 1.0), at=0.0)
    zz = state.moments().zz.value[0]
    expected = [0.6366197724, 0.5403796461, 0.4892677224, 0.4556470945, 0.3626550031]
    np.testing.assert_allclose(zz[[1, 2, 3, 4, 10]], expected, atol=5e-4)
    # and all round the ring the power law of chords with the amplitude 0.6450024481
    chord = n / np.pi * np.sin(np.pi * np.arange(30, n - 29) / n)
    np.testing.assert_allclose(zz[30 : n - 29], 0.6450024481 * chord**-0.25, rtol=1e-4)


def test_order_of_the_ordered_ring():
    # P. Pfeuty, Ann. Phys. 57, 79 (1970): <Z_0 Z_r> -> (1 - g^2)^(1/4)
    state = ar.FreeFermions().evolve(start(uniform(100, -1.0, True), 0.5, 1.0), at=0.0)
    assert state.moments().zz.value[0, 50] == pytest.approx(0.75**0.25, abs=1e-12)


@pytest.mark.parametrize(
    ("couplings", "transverse"),
    [
        ([1.0] * 8 + [0.7], 0.5),
        ([1.0] * 9, 0.7),
        ([1.0] * 9, 1.3),
        ([-1.0] * 8 + [0.9], 0.2),
        ([1.0] * 8 + [0.7], 0.0),
        ([-1.0, 0.5, 2.0, 1.0, -0.3, 0.8, 1.0, 1.0, 1.0], 0.0),
    ],
)
def test_frustrated_rings_are_those_of_the_state_vector(couplings, transverse):
    case = start(ar.Instance(ar.lattices.chain(9, periodic=True), couplings), transverse, 1.0)
    state, other = (backend.evolve(case, at=0.0) for backend in (ar.FreeFermions(), ar.StateVector()))
    np.testing.assert_allclose(state.moments().zz.value, other.moments().zz.value, atol=1e-10)
    np.testing.assert_allclose(state.moments().x.value, other.moments().x.value, atol=1e-10)
    np.testing.assert_allclose(state.probabilities(), other.probabilities(), atol=1e-10)
    assert state.energy() == pytest.approx(other.energy(), abs=1e-10)


def test_an_ordered_open_chain_starts_even():
    # two lowest states that differ by 1e-9 or so, and in parity
    for transverse in (0.0, 0.05, 0.3):
        case = start(uniform(10, -1.0, False), transverse, 1.0)
        state, other = (backend.evolve(case, at=0.0) for backend in (ar.FreeFermions(), ar.StateVector()))
        np.testing.assert_allclose(state.moments().zz.value, other.moments().zz.value, atol=1e-10)
        np.testing.assert_allclose(state.probabilities(), other.probabilities(), atol=1e-10)
        np.testing.assert_allclose(state.entropy(range(4)), other.entropy(range(4)), atol=1e-10)


def test_a_start_without_couplings_is_plus():
    case = start(uniform(6, -1.0, True), 2.0, 0.0)
    plus = ar.Anneal(case.instance, case.schedule, 1.0)
    one, other = ar.FreeFermions().evolve(case), ar.FreeFermions().evolve(plus)
    np.testing.assert_array_equal(one.moments().zz.value, other.moments().zz.value)
    # and needs no more memory or time
    assert ar.FreeFermions().plan(case) == ar.FreeFermions().plan(plus)


TWO_CHAINS = ar.Instance(ar.lattices.from_edges(5, [(0, 1), (1, 2), (3, 4)]), [1.0, -1.0, 1.0])


@pytest.mark.parametrize(
    ("instance", "transverse", "words"),
    [
        (uniform(3, 1.0, True), 0.0, "degenerate"),
        (TWO_CHAINS, 0.0, "degenerate"),
        (TWO_CHAINS, 1e-7, "nearly so"),
        (ar.Instance(ar.lattices.chain(3), [1.0, 1.0], transverse=[1.0, 0.0, 1.0]), 1.0, "every transverse weight"),
    ],
)
def test_undecided_starts_are_refused(instance, transverse, words):
    with pytest.raises(NotSupported, match=words) as caught:
        ar.FreeFermions().evolve(start(instance, transverse, 1.0))
    assert "start='plus'" in caught.value.alternatives
