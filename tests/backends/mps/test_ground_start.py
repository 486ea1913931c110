"""The ground state of H(0): against the state vector, free fermions, and searches that are trapped."""

import pickle

import numpy as np
import pytest

import anneal_ref as ar
from anneal_ref.backends.mps import ground_start, mps
from anneal_ref.backends.mps.chain import Chain, Limits
from anneal_ref.backends.mps.ground_start import ground_cost, ground_product
from anneal_ref.backends.mps.variance import energy_variance
from anneal_ref.base.errors import AnnealRefWarning, NotConverged, NotSupported, TooLarge
from anneal_ref.base.run import Run

LATTICES = {
    "spin": ar.lattices.chain(1),
    "pair": ar.lattices.chain(2),
    "chain": ar.lattices.chain(8),
    "ring": ar.lattices.chain(9, periodic=True),
    "square": ar.lattices.square(2, 5),
    "complete": ar.lattices.complete(8),
    "biclique": ar.lattices.biclique(4, 4),
    "regular": ar.lattices.random_regular(10, 3, seed=1),
    "parts": ar.lattices.from_edges(7, [(0, 1), (1, 2), (4, 6), (3, 5)]),
}
STRENGTHS = ((1.0, 1.0), (1.0, -1.0), (5.0, 0.1), (0.3, 1.0), (0.0, 1.0), (0.0, -1.0), (1.0, 0.0))


def anneal_of(instance, transverse, problem, duration=1.0):
    schedule = ar.Schedule.linear(transverse=(transverse, 1.0), problem=(problem, 1.5))
    return ar.Anneal(instance, schedule, duration, start="ground")


def random_instance(lattice, fields, seed=0):
    random = np.random.default_rng([seed, lattice.n_sites, lattice.n_edges])
    n, m = lattice.n_sites, lattice.n_edges
    h = random.normal(size=n) if fields else None
    return ar.Instance(lattice, random.normal(size=m), h, random.uniform(0.5, 1.5, size=n))


def distance(one, other):
    return max(np.abs(getattr(one, name).value - getattr(other, name).value).max() for name in ("z", "zz", "x"))


@pytest.mark.parametrize("fields", [False, True])
@pytest.mark.parametrize("name", LATTICES)
def test_as_the_state_vector(name, fields):
    instance = random_instance(LATTICES[name], fields)
    for transverse, problem in STRENGTHS:
        if name == "parts" and not fields and transverse == 0:
            continue  # each part may be flipped by itself
        anneal = anneal_of(instance, transverse, problem)
        exact = ar.StateVector(tolerance=1e-10).evolve(anneal, at=0.0)
        found = ar.MPS(bond_dimension=32, truncation=1e-14).evolve(anneal, at=0.0)
        assert distance(found.moments(), exact.moments()) < 1e-8
        assert found.ledger["ground_energy"] == pytest.approx(exact.ledger["ground_energy"], abs=1e-12)
        assert found.energy() == pytest.approx(found.ledger["ground_energy"], abs=1e-8)
        assert 0 <= found.ledger["ground_variance"] < 1e-12
        assert 0 <= found.ledger["ground_spread"] < 1e-9


@pytest.mark.parametrize("fields", [False, True])
@pytest.mark.parametrize(("transverse", "problem"), [(1.0, 1.0), (0.0, -1.0), (0.5, -2.0)])
def test_anneals_from_it(transverse, problem, fields):
    anneal = anneal_of(random_instance(LATTICES["complete"], fields, seed=1), transverse, problem, duration=2.0)
    exact = ar.StateVector(tolerance=1e-10).evolve(anneal)
    found = ar.MPS(bond_dimension=16, truncation=1e-14, halvings=3).evolve(anneal)
    assert distance(found.moments(), exact.moments()) < 1e-6
    assert abs(found.ledger["work_identity"]) < 1e-4
    # the other start leads elsewhere
    with pytest.warns(AnnealRefWarning, match="the start"):
        other = ar.Anneal(anneal.instance, anneal.schedule, 2.0)
    assert distance(ar.MPS(bond_dimension=16).evolve(other).moments(), exact.moments()) > 1e-2


def ring_energy(n, transverse):
    """Ground energy and gap to the next even state of the ring H = -G sum X - sum ZZ."""
    # P. Pfeuty, Ann. Phys. 57, 79 (1970): E = -sum_k eps_k, eps_k = sqrt(1 + G^2 - 2 G cos k), with half-odd momenta;
    # the next even state has two quasi-particles, of 2 eps_k each
    modes = np.sqrt(1 + transverse**2 - 2 * transverse * np.cos(np.pi * (2 * np.arange(n) + 1) / n))
    return -modes.sum(), 2 * np.sort(modes)[:2].sum()


@pytest.mark.parametrize(("transverse", "bond"), [(0.5, 12), (1.0, 32)])
def test_a_ring_of_64_spins(transverse, bond):
    instance = ar.Instance(ar.lattices.chain(64, periodic=True), [-1.0] * 64)
    order = np.roll(np.arange(64), 5)
    found = ground_product(anneal_of(instance, transverse, 1.0), order, Limits(bond, 1e-12, 1e-10))
    energy, gap = ring_energy(64, transverse)
    # G. Temple, Proc. R. Soc. A 119, 276 (1928) (from memory): E - E_0 <= variance / (E_1 - E)
    assert 0 < found.energy - energy < 1.001 * found.variance / gap
    assert gap < found.gap + (found.energy - energy) < 1.2 * gap
    assert found.variance < 1e-2 * gap**2
    assert found.spread < 1e-5


def test_the_gap_is_one_from_above():
    """The second state of a pair is no lower than the second level; at full bond dimension the middle pair has it."""
    instance = random_instance(LATTICES["regular"], True)
    anneal = anneal_of(instance, 1.0, 1.0)
    found = ground_product(anneal, np.arange(10), Limits(64, 1e-14, 1e-10))
    spins = 1 - 2 * ((np.arange(1 << 10)[:, None] >> np.arange(10)) & 1)
    matrix = np.diag(instance.energies(spins))
    for site, weight in enumerate(instance.transverse):
        matrix[np.arange(1 << 10), np.arange(1 << 10) ^ (1 << site)] -= weight
    levels = np.linalg.eigvalsh(matrix)[:2]
    assert found.energy == pytest.approx(levels[0], abs=1e-11)
    assert -1e-9 < found.gap - (levels[1] - levels[0]) < 1e-3


@pytest.mark.parametrize("symmetric", [False, True])
def test_lowest_states_of_a_pair(symmetric, random_product):
    """Against the dense Hamiltonian in the basis of two free spins and the states on their right."""
    n = 6
    product = random_product(n, 5, symmetric, seed=3)
    instance = random_instance(ar.lattices.complete(n), not symmetric)
    strengths = (0.7, -1.3)
    order = product.order
    spins = 1 - 2 * ((np.arange(1 << n)[:, None] >> np.arange(n)) & 1)
    matrix = np.diag(strengths[1] * instance.energies(spins)).astype(complex)
    for site, weight in enumerate(instance.transverse):
        matrix[np.arange(1 << n), np.arange(1 << n) ^ (1 << site)] -= strengths[0] * weight
    # the states on the right of the pair, as tensors over the positions
    right = np.ones((1, 1))
    for tensor in product.in_z_basis()[:1:-1]:
        right = np.einsum("slr,rx->lsx", tensor, right).reshape(tensor.shape[1], -1)
    free = np.eye(4)
    parity = np.array([1, 1])
    if symmetric:
        free = np.kron([[1, 1], [1, -1]], [[1, 1], [1, -1]]) / 2
        even, odd = product.dims[2]
        parity = np.repeat((0, 1), (even, odd))
        total = product.dims[-1][1]
    states = []
    for k, spin_state in enumerate(free):
        for j, state in enumerate(right):
            if not symmetric or ((k.bit_count() + parity[j] + 2 * total) % 2 == 0):
                states.append(np.kron(spin_state, state))
    basis = np.array(states).reshape((-1,) + (2,) * n)
    # axis p is the site order[p]; the first axis of a vector is the site n - 1
    basis = basis.transpose(0, *(1 + np.argsort(order)[::-1])).reshape(len(states), -1)
    np.testing.assert_allclose(basis.conj() @ basis.T, np.eye(len(states)), atol=1e-12)
    levels = np.linalg.eigvalsh(basis.conj() @ matrix @ basis.T)

    chain = Chain(product, instance, Limits(64, 0.0, 1e-10))
    theta = chain._joined(0)
    first, energy = chain._lowest(theta, 0, 2, strengths, 1e-12, theta[None][:0])
    assert energy == pytest.approx(levels[0], abs=1e-11)
    start = np.random.default_rng(0).normal(size=theta.shape).astype(complex)
    second, above = chain._lowest(start, 0, 2, strengths, 1e-12, first[None])
    assert above == pytest.approx(levels[1], abs=1e-10)
    assert abs(np.vdot(first, second)) < 1e-12
    assert np.linalg.norm(first) == pytest.approx(1, abs=1e-13)
    # from the eigenvector itself there is nothing to find, and rounding must not be taken for a direction
    for _ in range(3):
        first, again = chain._lowest(first, 0, 2, strengths, 1e-12, theta[None][:0])
        assert again == pytest.approx(levels[0], abs=1e-11)


def test_relaxing_never_raises_the_energy():
    instance = random_instance(ar.lattices.square(4, 4), False)
    order = np.random.default_rng(1).permutation(16)
    start = ground_start.configuration_state(np.ones(16, np.int8), instance, order, True)
    chain = Chain(start, instance, Limits(256, 0.0, 1e-10))
    energies = [float(np.dot((0.5, 1.0), chain.energies()))]
    for _ in range(3):
        chain.relax((0.5, 1.0), 1e-6)
        chain.flip()
        energies.append(float(np.dot((0.5, 1.0), chain.energies())))
    assert all(after < before + 1e-12 for before, after in zip(energies, energies[1:], strict=False))
    exact = ar.StateVector().evolve(anneal_of(instance, 0.5, 1.0), at=0.0).ledger["ground_energy"]
    assert energies[-1] >= exact - 1e-10


def test_one_start_alone_may_be_trapped(monkeypatch):
    """The wrong twin: sweeps from a single local minimum, which report a small variance and a wrong energy."""
    instance = ar.draw_instance(ar.lattices.complete(10), ar.disorder.gaussian(), ar.disorder.gaussian(0.5), seed=0)
    anneal, limits = anneal_of(instance, 0.1, 1.0), Limits(32, 1e-12, 1e-10)
    exact = ar.StateVector().evolve(anneal, at=0.0).ledger["ground_energy"]
    found = ground_product(anneal, np.arange(10), limits)
    assert found.energy == pytest.approx(exact, abs=1e-10)
    assert found.spread > 0.1

    minimum = ground_start._configurations(instance)[-1]
    state = ground_start.configuration_state(minimum, instance, np.arange(10), False)
    monkeypatch.setattr(ground_start, "plus_state", lambda *arguments: state)
    monkeypatch.setattr(ground_start, "_descent", lambda *arguments: ())
    monkeypatch.setattr(ground_start, "_configurations", lambda instance: [])
    trapped = ground_product(anneal, np.arange(10), limits)
    assert trapped.energy > exact + 0.1
    assert trapped.variance < 1e-10
    assert trapped.spread == 0


def test_a_glass_of_36_spins():
    instance = ar.draw_instance(ar.lattices.square(6, 6, (False, True)), ar.disorder.gaussian(), seed=1)
    anneal = anneal_of(instance, 0.3, 1.0)
    found = [ar.MPS(bond_dimension=bond).evolve(anneal, at=0.0) for bond in (12, 24)]
    energies, variances = ([state.ledger[f"ground_{name}"] for state in found] for name in ("energy", "variance"))
    assert energies[1] < energies[0]
    assert variances[1] < 0.1 * variances[0]
    # errors of the energy are proportional to variances, and a straight line leads to what 128 bonds give
    straight = energies[1] - (energies[0] - energies[1]) / (variances[0] - variances[1]) * variances[1]
    assert straight == pytest.approx(-44.1271204, abs=1e-4)
    # and never below: the transverse field lowers the classical energy by at most G per spin
    classical = ar.ground_energy(instance).value
    assert classical - 36 * 0.3 < energies[1] < classical
    p = found[1].product
    again = energy_variance(
        p, instance.coupling_matrix(), instance.fields, instance.transverse, float(anneal.transverse(0)), 1.0
    )
    np.testing.assert_allclose(again, (energies[1], variances[1]), rtol=1e-12)


def test_too_small_a_bond_dimension_is_not_converged():
    instance = ar.Instance(ar.lattices.chain(48, periodic=True), [-1.0] * 48)
    anneal = anneal_of(instance, 1.0, 1.0)
    with pytest.raises(NotConverged, match=r"standard deviation of .* below half the gap of .* larger bond") as no:
        ar.MPS(bond_dimension=4).evolve(anneal)
    result = pickle.loads(pickle.dumps(no.value)).result
    assert result.variance > 0.25 * result.gap**2
    assert result.energy > ring_energy(48, 1.0)[0]
    assert result.product.n_sites == 48


@pytest.mark.parametrize(
    ("fields", "transverse", "weights", "words"),
    [
        (None, 0.0, None, "at most 2 ground configurations, equal up to the global flip, and counted: .*at least 4"),
        ([0.0] * 4 + [1.0], 0.0, None, "at most 1 ground configuration, and counted: .*at least 2"),
        (None, 1.0, [1.0, 1.0, 0.0, 1.0, 1.0], "every transverse weight above zero"),
    ],
)
def test_degenerate_ground_states_are_not_supported(fields, transverse, weights, words):
    instance = ar.Instance(ar.lattices.from_edges(5, [(0, 1), (1, 2), (3, 4)]), [1.0] * 3, fields, weights)
    with pytest.raises(NotSupported, match=words) as caught:
        ar.MPS().evolve(anneal_of(instance, transverse, 1.0))
    assert "start='plus'" in caught.value.alternatives
    with pytest.raises(NotSupported):
        ar.StateVector().evolve(anneal_of(instance, transverse, 1.0))


def test_without_a_problem_part_it_is_plus():
    schedule = ar.Schedule.from_table([0, 0.3, 1], [2, 2, 0], [0, 0, 2], interpolation="linear")
    instance = random_instance(ar.lattices.square(3, 3), False)
    states = [
        ar.MPS(bond_dimension=16).evolve(ar.Anneal(instance, schedule, 3.0, start=start))
        for start in ("plus", "ground")
    ]
    assert all(np.array_equal(a, b) for a, b in zip(*(state.product.tensors for state in states), strict=True))
    assert states[1].ledger["ground_energy"] == pytest.approx(-2 * instance.transverse.sum())
    assert states[1].ledger["two_site_steps"] < states[1].ledger["steps"]


def test_single_precision():
    anneal = anneal_of(random_instance(LATTICES["square"], False), 1.0, 1.0)
    state = ar.MPS(bond_dimension=32, precision="single", truncation=1e-10).evolve(anneal)
    exact = ar.StateVector().evolve(anneal)
    assert {tensor.dtype for tensor in state.product.tensors} == {np.dtype(np.complex64)}
    assert distance(state.moments(), exact.moments()) < 1e-3
    assert state.ledger["ground_energy"] == pytest.approx(exact.ledger["ground_energy"], abs=1e-8)


def test_a_search_is_not_made_again_after_an_interruption(tmp_path, monkeypatch):
    anneal, backend = anneal_of(random_instance(LATTICES["square"], True), 1.0, 1.0), ar.MPS(bond_dimension=16)
    whole = backend.evolve(anneal)
    run = Run(checkpoint=tmp_path / "run.h5", every=1e6)
    with monkeypatch.context() as patch:
        patch.setattr(Chain, "sweep", lambda *arguments: 1 / 0)
        with pytest.raises(ZeroDivisionError):
            backend.evolve(anneal, run=run)
    monkeypatch.setattr(mps, "ground_product", None)
    again = backend.evolve(anneal, run=run)
    assert all(np.array_equal(a, b) for a, b in zip(again.product.tensors, whole.product.tensors, strict=True))
    assert again.ledger | {"seconds": 0} == whole.ledger | {"seconds": 0}


def test_the_same_bits_twice():
    anneal = anneal_of(random_instance(LATTICES["regular"], False), 0.7, 1.0)
    one, other = (ground_product(anneal, np.arange(10), Limits(8, 1e-12, 1e-10)) for _ in range(2))
    assert all(np.array_equal(a, b) for a, b in zip(one.product.tensors, other.product.tensors, strict=True))
    assert (one.energy, one.variance, one.gap, one.spread) == (other.energy, other.variance, other.gap, other.spread)


def test_cost_is_told_before():
    instance = ar.draw_instance(ar.lattices.square(6, 6), ar.disorder.gaussian(), seed=0)
    plus = ar.Anneal(instance, ar.Schedule.linear(transverse=(2.0, 0.0), problem=(0.0, 1.0)), 1.0)
    ground = ar.Anneal(instance, plus.schedule, 1.0, start="ground")
    backend = ar.MPS(bond_dimension=64)
    assert backend.plan(ground).seconds > backend.plan(plus).seconds
    assert backend.plan(ground).bytes >= backend.plan(plus).bytes
    assert ground_cost(instance, np.arange(36), 128).bytes > 2 * ground_cost(instance, np.arange(36), 64).bytes
    with pytest.raises(TooLarge, match=r"MPS\(bond_dimension="):
        ar.MPS(bond_dimension=10**6).evolve(ground)
