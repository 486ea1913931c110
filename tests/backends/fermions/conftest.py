"""Chains and Gaussian states for the tests of free fermions."""

import numpy as np
import pytest

import anneal_ref as ar


def named_instance(kind, n, seed):
    random = np.random.default_rng(seed)
    if kind == "parts":
        # three chains and a single spin, sites in no order
        sites = random.permutation(n)
        cuts = (0, n // 3, 2 * n // 3, n - 1, n)
        edges = [
            (sites[k], sites[k + 1])
            for start, stop in zip(cuts[:-1], cuts[1:], strict=True)
            for k in range(start, stop - 1)
        ]
        lattice = ar.lattices.from_edges(n, edges)
    else:
        lattice = ar.lattices.chain(n, periodic=kind == "ring")
    couplings = random.normal(size=lattice.n_edges)
    return ar.Instance(lattice, couplings, transverse=random.uniform(0.5, 1.5, n))


SCHEDULES = {
    "plus": ar.Schedule.polynomial([6, -12, 6], [0, 1, 3]),
    "ground": ar.Schedule.polynomial([6, -12, 6], [2, -1, 3]),
    "negative": ar.Schedule.polynomial([6, -12, 6], [0, -1, -3]),
}


@pytest.fixture(scope="session")
def chain_anneal():
    """Make an anneal of random couplings and weights on a "chain", a "ring" or "parts"."""

    def make(kind, n=10, schedule="plus", duration=1.7, seed=3):
        start = "ground" if schedule == "ground" else "plus"
        return ar.Anneal(named_instance(kind, n, seed), SCHEDULES[schedule], duration, start=start)

    return make


@pytest.fixture(scope="session")
def uniform_ramp():
    """Make the ramps of J. Dziarmaga: uniform ferromagnets, (1-s) X + s ZZ or the field alone from 5 to 0."""

    def make(n, duration, field_alone=False, periodic=True):
        lattice = ar.lattices.chain(n, periodic=periodic)
        instance = ar.Instance(lattice, -np.ones(lattice.n_edges))
        if field_alone:
            return ar.Anneal(instance, ar.Schedule.linear((5.0, 0.0), (1.0, 1.0)), duration, start="ground")
        return ar.Anneal(instance, ar.Schedule.linear((1.0, 0.0), (0.0, 1.0)), duration)

    return make


@pytest.fixture(scope="session")
def gaussian_band():
    """Make the covariance of |+...+> turned by an orthogonal matrix, as an upper band; also return it whole."""

    def make(turn):
        rows = len(turn)
        pairs = np.kron(np.eye(rows // 2), [[0.0, 1.0], [-1.0, 0.0]])
        gamma = turn @ pairs @ turn.T
        k, d = np.arange(rows)[:, None], np.arange(rows)
        band = np.where(k + d < rows, gamma[k, np.minimum(k + d, rows - 1)], 0.0)
        return np.ascontiguousarray(band), gamma

    return make


@pytest.fixture(scope="session")
def spins_of():
    """All 2^N configurations, shape (2^N, N), in the order of the basis."""
    return lambda n: 1 - 2 * ((np.arange(1 << n)[:, None] >> np.arange(n)) & 1)
