"""Matrix product states for tests: random ones of any bond dimensions, and given states written as one."""

import numpy as np
import pytest

from anneal_ref.backends.mps.product import Product


def complex_normal(random, *shape):
    return random.normal(size=shape) + 1j * random.normal(size=shape)


def orthonormal_rows(matrix):
    """Return (carry, rows) with carry @ rows = matrix."""
    q, r = np.linalg.qr(matrix.conj().T)
    return r.conj().T, q.conj().T


def finished(tensors, dims, symmetric, order, dtype):
    tensors = [np.ascontiguousarray(tensor, dtype=dtype) for tensor in tensors]
    return Product(tensors, [tuple(map(int, pair)) for pair in dims], symmetric, np.asarray(order, np.intp))


@pytest.fixture(scope="session")
def random_product():
    """Build a random right-canonical state of norm 1: random sectors, some of them empty, and a random order."""

    def build(n, bond, symmetric, dtype=np.complex128, seed=0, odd=False):
        random = np.random.default_rng([seed, n, bond, symmetric, odd])
        even = random.integers(0, bond + 1, size=n + 1) if symmetric else np.full(n + 1, bond)
        # as many as there can be at the ends of the chain, or even more on the left
        dims = [(e, bond - e) if symmetric else (bond, 0) for e in even]
        dims[0], dims[n] = (1, 0), (0, 1) if odd else (1, 0)
        tensors, carries = [None] * n, [np.eye(d) for d in dims[n]]
        for p in range(n - 1, -1, -1):
            # one set of rows for each sector on the left; without the symmetry the second set is empty
            columns = [complex_normal(random, 1 if symmetric else 2, sum(dims[p]), len(c)) @ c for c in carries]
            a = np.concatenate(columns, axis=2)
            width = a.shape[2]
            flat = a.transpose(1, 0, 2).reshape(sum(dims[p]), -1)
            carries, rows = zip(*map(orthonormal_rows, (flat[: dims[p][0]], flat[dims[p][0] :])), strict=True)
            dims[p] = tuple(len(r) for r in rows)
            tensors[p] = np.concatenate(rows).reshape(sum(dims[p]), -1, width).transpose(1, 0, 2)
        return finished(tensors, dims, symmetric, random.permutation(n), dtype)

    return build


@pytest.fixture(scope="session")
def product_of():
    """Write a vector of 2^N amplitudes as a matrix product state, exactly, by singular values from the right."""

    def build(psi, order, symmetric, dtype=np.complex128):
        n = len(order)
        t = np.asarray(psi, complex).reshape((2,) * n).transpose([n - 1 - site for site in order])
        parity = np.zeros(1 << n, int)
        if symmetric:
            for axis in range(n):
                plus, minus = t.take(0, axis), t.take(1, axis)
                t = np.stack((plus + minus, plus - minus), axis) / np.sqrt(2)
            parity = np.bitwise_count(np.arange(1 << n)) % 2
        rest = t.reshape(-1, 1)
        total = parity[np.abs(rest[:, 0]).argmax()]
        sectors, tensors, dims = np.array([total]), [], [(1 - total, total)]
        for p in range(n - 1, -1, -1):
            rest = rest.reshape(1 << p, 2, -1)
            found, kept = [], np.zeros((1 << p, 0))
            for q in (0, 1):
                mine = parity[: 1 << p] == q
                if symmetric:
                    part = rest[:, q ^ sectors, np.arange(len(sectors))] * mine[:, None]
                else:
                    part = rest.reshape(1 << p, -1) * mine[:, None]
                u, values, v = np.linalg.svd(part, full_matrices=False)
                count = int(np.sum(values > 1e-14 * np.linalg.norm(rest)))
                found.append(v[:count])
                kept = np.concatenate((kept, u[:, :count] * values[:count]), axis=1)
            rows = np.concatenate(found).reshape(kept.shape[1], -1, len(sectors))
            tensors.append(rows.transpose(1, 0, 2))
            dims.append((len(found[0]), len(found[1])))
            rest, sectors = kept, np.repeat((0, 1), dims[-1])
        # the first tensor carries the norm and the phase
        tensors[-1] = tensors[-1] * rest[0, 0]
        return finished(tensors[::-1], dims[::-1], symmetric, order, dtype)

    return build


@pytest.fixture(scope="session")
def spins_of():
    """All 2^N configurations, shape (2^N, N), in the order of the basis."""
    return lambda n: 1 - 2 * ((np.arange(1 << n)[:, None] >> np.arange(n)) & 1)


@pytest.fixture(scope="session")
def apart():
    """Largest difference between two states over all <Z>, <ZZ> and <X>."""

    def largest(first, second):
        first, second = first.moments(), second.moments()
        pairs = ((first.z, second.z), (first.zz, second.zz), (first.x, second.x))
        return max(float(np.abs(one.value - other.value).max()) for one, other in pairs)

    return largest


@pytest.fixture(scope="session")
def parts():
    """The transverse and the problem part of a Hamiltonian as dense matrices, from the line that defines them."""

    def build(instance):
        n = instance.n_sites
        states = np.arange(1 << n)
        spins = 1 - 2 * ((states[:, None] >> np.arange(n)) & 1)
        transverse = np.zeros((1 << n, 1 << n))
        for site, weight in enumerate(instance.transverse):
            transverse[states, states ^ (1 << site)] -= weight
        couplings = np.einsum("xi,ij,xj->x", spins, np.triu(instance.coupling_matrix(), 1), spins)
        return transverse, np.diag(couplings + spins @ instance.fields)

    return build
