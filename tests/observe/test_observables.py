from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from anneal_ref.base.errors import InputError
from anneal_ref.base.estimate import Estimate
from anneal_ref.model import lattices
from anneal_ref.model.instances import Instance
from anneal_ref.observe import observables
from anneal_ref.observe.moments import Moments
from anneal_ref.observe.samples import Samples

LIMIT = stats.norm.isf(0.5e-4)


@pytest.fixture(scope="module")
def instance() -> Instance:
    rng = np.random.default_rng(3)
    lattice = lattices.square(3, 3)
    return Instance(lattice, rng.standard_normal(len(lattice.edges)), rng.standard_normal(9))


@pytest.fixture(scope="module")
def samples() -> Samples:
    return Samples(1 - 2 * np.random.default_rng(4).integers(0, 2, (300, 9)))


def test_energy_of_moments_is_the_mean_energy_of_the_shots(instance: Instance, samples: Samples) -> None:
    energies = instance.energies(samples.spins)
    assert observables.problem_energy(samples.moments(), instance) == pytest.approx(energies.mean())
    estimate = samples.estimate(lambda m: observables.problem_energy(m, instance))
    assert estimate.value == pytest.approx(energies.mean())
    assert estimate.stat == pytest.approx(energies.std(ddof=1) / np.sqrt(300))


def test_residual_energy_per_spin(instance: Instance, samples: Samples) -> None:
    moments = samples.moments()
    energy = observables.problem_energy(moments, instance)
    assert observables.residual_energy(moments, instance, -10) == pytest.approx((energy + 10) / 9)
    assert observables.residual_energy(moments, instance, Estimate(-10.0)) == pytest.approx((energy + 10) / 9)
    with pytest.raises(InputError, match="ground must be a finite number"):
        observables.residual_energy(moments, instance, np.nan)


def test_order_parameters_name_their_pairs() -> None:
    zz = np.array([[1, 0.5, -0.2], [0.5, 1, 0.1], [-0.2, 0.1, 1]])
    moments = Moments.of(np.zeros(3), zz)
    assert observables.q2(moments) == pytest.approx((0.25 + 0.04 + 0.01) / 3)
    assert observables.q2_full(moments) == pytest.approx((3 + 2 * 0.3) / 9)
    with pytest.raises(InputError, match="at least 2 spins; got 1"):
        observables.q2(Moments.of([0], [[1]]))


def test_q2_straight_from_samples_is_unbiased_too() -> None:
    """Free spins have q2 = 0; without its correction q2 would be 1/n, far outside."""
    rng = np.random.default_rng(9)
    runs, n = 400, 50
    moments = [Samples(1 - 2 * rng.integers(0, 2, (n, 6))).moments() for _ in range(runs)]
    found = np.array([observables.q2(one) for one in moments])
    plain = np.array([observables.q2(Moments.of(one.z.value, one.zz.value)) for one in moments])
    within = LIMIT * found.std() / np.sqrt(runs)
    assert abs(found.mean()) < within
    assert abs(plain.mean()) > 3 * within


def test_magnetisation() -> None:
    spins = np.array([[1, 1, -1], [1, 1, 1]], dtype=np.int8)
    moments = Samples(spins).moments()
    assert observables.magnetisation(moments) == pytest.approx(4 / 6)
    assert observables.magnetisation_squared(moments) == pytest.approx((1 / 9 + 1) / 2)


def test_kinks_are_counted_on_bonds_with_a_coupling() -> None:
    lattice = lattices.chain(4)
    instance = Instance(lattice, [-1.0, 2.0, 0.0])
    spins = np.array([[1, 1, -1, 1], [1, -1, -1, 1]], dtype=np.int8)
    for shot, unsatisfied in zip(spins, (0.0, 1.0), strict=True):  # none of the two bonds; both of them
        assert observables.kink_density(Samples([shot]).moments(), instance) == pytest.approx(unsatisfied)
    assert observables.kink_density(Samples(spins).moments(), instance) == pytest.approx(0.5)
    with pytest.raises(InputError, match="no bond with a coupling"):
        observables.kink_density(Samples(spins).moments(), Instance(lattice, [0, 0, 0]))
    with pytest.raises(InputError, match="moments of 2 spins do not go with 4 sites"):
        observables.kink_density(Moments.of([0, 0], np.eye(2)), instance)


def test_structure_factor_of_simple_orders() -> None:
    lattice = lattices.square(4, 4, periodic=(True, True))
    up = np.ones((1, 16), dtype=np.int8)
    parity = np.round(lattice.coordinates.sum(axis=1)).astype(int) % 2
    spins = np.where(parity == 1, -1, 1)[None, :]
    peaks = [[0, 0], [np.pi, np.pi], [np.pi / 2, 0]]
    assert observables.structure_factor(Samples(up).moments(), lattice, peaks) == pytest.approx([16, 0, 0], abs=1e-12)
    found = observables.structure_factor(Samples(spins).moments(), lattice, peaks)
    assert found == pytest.approx([0, 16, 0], abs=1e-12)
    free = Moments.of(np.zeros(16), np.eye(16))
    assert observables.structure_factor(free, lattice, [0.3, 0.4]) == pytest.approx(1)


def test_structure_factor_needs_places() -> None:
    graph = lattices.from_edges(2, [(0, 1)])
    with pytest.raises(InputError, match="takes a lattice with coordinates"):
        observables.structure_factor(Moments.of([0, 0], np.eye(2)), graph, [0.0])
    with pytest.raises(InputError, match=r"wave_vectors must have shape .*got shape \(3,\)"):
        observables.structure_factor(Moments.of(np.zeros(4), np.eye(4)), lattices.square(2, 2), [0.0, 1, 2])


def test_connected_correlations() -> None:
    moments = Moments.of([0.5, -0.2], [[1, 0.3], [0.3, 1]])
    np.testing.assert_allclose(observables.connected(moments), [[0.75, 0.4], [0.4, 0.96]])
