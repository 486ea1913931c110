"""The kernels against plain numpy: blocks and effective Hamiltonians built from dense operators."""

from typing import NamedTuple

import numpy as np
import pytest
from scipy.linalg import expm

import anneal_ref as ar
from anneal_ref.backends.mps import compiled, krylov
from anneal_ref.backends.mps.chain import Chain, Limits
from anneal_ref.backends.mps.product import Product

N = 7
KINDS = pytest.mark.parametrize("symmetric", [True, False], ids=["sectors", "dense"])
DTYPES = pytest.mark.parametrize("dtype", [np.complex128, np.complex64])
FLOOR = {np.complex128: 1e-12, np.complex64: 3e-5}
STRENGTHS = (1.3, 0.7)


def instance(symmetric, seed=2, constant=False):
    generator = np.random.default_rng(seed)
    if constant:
        lattice, couplings = ar.lattices.complete(N), np.full(N * (N - 1) // 2, 0.8)
    else:
        edges = [(0, 1), (0, 4), (1, 2), (1, 6), (2, 3), (2, 5), (3, 6), (4, 6)]
        lattice, couplings = ar.lattices.from_edges(N, edges), generator.normal(size=len(edges))
    fields = None if symmetric else generator.normal(size=N)
    return ar.Instance(lattice, couplings, fields, generator.uniform(0.5, 1.5, N))


@pytest.fixture
def chain_at(random_product):
    """A chain of random tensors, in the order of its sites, with its centre moved to a position."""

    def build(symmetric, centre=0, dtype=np.complex128, seed=0, bond=6, odd=False, **kind):
        product = random_product(N, bond, symmetric, dtype, seed, odd)
        product.order = np.arange(N)
        chain = Chain(product, instance(symmetric, **kind), Limits(1 << N, 0.0, 1e-14))
        for p in range(centre):
            before = chain.dims[p + 1][0]
            a, bond, even, odd = compiled.orthogonalise(chain.tensors[p], before, symmetric)
            chain.tensors[p], chain.dims[p + 1] = a, (even, odd)
            chain.tensors[p + 1] = compiled.attach(bond, chain.tensors[p + 1], even, before, symmetric)
            chain.left[p + 1] = compiled.absorb(
                chain.left[p], a, chain.wiring.mixes[p], chain.wiring.near[p], chain.weights[p], chain.fields[p],
                chain.dims[p][0], even, symmetric,
            )  # fmt: skip
        return chain

    return build


# ----------------------------------------------------------------------------------------------- dense twins
def left_basis(tensors):
    """Vectors (D, 2^b) of the bond after the given tensors; the first spin is the least significant bit."""
    basis = np.ones((1, 1))
    for a in tensors:
        basis = np.einsum("lx,slr->rsx", basis, a).reshape(a.shape[2], -1)
    return basis


def right_basis(tensors):
    """Vectors (D, 2^sites) of the bond before the given tensors."""
    basis = np.ones((1, 1))
    for a in tensors[::-1]:
        basis = np.einsum("slr,ry->lys", a, basis).reshape(a.shape[1], -1)
    return basis


def subsystem(case, sites):
    """Transverse and problem part on some sites alone, and Z of each of them (as diagonals)."""
    n = len(sites)
    states, spins = np.arange(1 << n), 1 - 2 * ((np.arange(1 << n)[:, None] >> np.arange(n)) & 1)
    transverse = np.zeros((1 << n, 1 << n))
    for k, site in enumerate(sites):
        transverse[states, states ^ (1 << k)] -= case.transverse[site]
    inside = np.triu(case.coupling_matrix()[np.ix_(sites, sites)], 1)
    problem = np.einsum("xi,ij,xj->x", spins, inside, spins) + spins @ case.fields[sites]
    return transverse, np.diag(problem), spins.T


def carriers(mixes):
    found = np.zeros((0, 0))
    for mix in mixes:
        wide = np.zeros((len(found) + 1, found.shape[1] + 1))
        wide[:-1, :-1], wide[-1, -1] = found, 1.0
        found = wide @ mix
    return found


def disagreement_of_block(block, basis, case, sites, shape, even, symmetric):
    """Largest difference of a block from the dense operators in the dense basis."""
    transverse, problem, spins = subsystem(case, sites)
    reduced = [basis.conj() @ part @ basis.T for part in (transverse, problem)]
    operators = [(basis.conj() * (column @ spins)) @ basis.T for column in shape.T]
    if symmetric:
        operators = [operator[:even, even:] for operator in operators]
    hx, hz, found = block
    assert len(found) == shape.shape[1]
    pairs = [(hx, reduced[0]), (hz, reduced[1]), *zip(found, operators, strict=True)]
    return max(np.abs(one - other).max(initial=0.0) for one, other in pairs)


def embedding(theta_shape, left, right, left_dims, right_dims, sites, symmetric):
    """Columns (2^N, size) that the entries of a centre tensor multiply."""
    columns = []
    # parities of the states on both sides
    q_left, q_right = (np.repeat((0, 1), dims) for dims in (left_dims, right_dims))
    hadamard = np.array([[1, 1], [1, -1]]) / np.sqrt(2)
    for k in range(np.prod(theta_shape)):
        theta = np.zeros(np.prod(theta_shape))
        theta[k] = 1
        theta = theta.reshape(theta_shape)
        if not symmetric:
            spins = theta.reshape((2,) * sites + theta.shape[1:])
        elif sites == 0:
            spins = theta[0] * (q_left[:, None] == q_right)
        else:
            spins = np.zeros((2,) * sites + theta.shape[1:])
            # two sites come in the eigenbasis of their Z Z: the sum and the difference of the parities between them
            matrices = theta if sites == 1 else hadamard @ theta.reshape(2, -1)
            for m, matrix in enumerate(matrices.reshape(theta.shape)):
                for (a, b), value in np.ndenumerate(matrix):
                    if value:
                        put = (q_left[a] ^ q_right[b],) if sites == 1 else (q_left[a] ^ m, m ^ q_right[b])
                        spins[(*put, a, b)] += value
            for axis in range(sites):
                spins = np.moveaxis(np.tensordot(hadamard, spins, (1, axis)), 0, axis)
        subscripts = {0: "lr,lx,ry->yx", 1: "slr,lx,ry->ysx", 2: "stlr,lx,ry->ytsx"}[sites]
        columns.append(np.einsum(subscripts, spins.reshape((2,) * sites + theta_shape[1:]), left, right).ravel())
    return np.array(columns).T


def dense_hamiltonian(case):
    transverse, problem, _ = subsystem(case, np.arange(N))
    return STRENGTHS[0] * transverse + STRENGTHS[1] * problem


# ------------------------------------------------------------------------------------------------------ absorbing
@DTYPES
@KINDS
@pytest.mark.parametrize("constant", [False, True], ids=["gaussian", "rank one"])
def test_blocks_are_the_operators_in_their_basis(chain_at, symmetric, dtype, constant):
    for seed in range(3):
        chain = chain_at(symmetric, N - 1, dtype, seed, odd=seed == 1, constant=constant)
        whole = chain_at(symmetric, 0, dtype, seed, odd=seed == 1, constant=constant)
        case = instance(symmetric, constant=constant)
        for b in range(1, N):
            left, right = left_basis(chain.product().in_z_basis()[:b]), right_basis(whole.product().in_z_basis()[b:])
            shape = carriers(chain.wiring.mixes[:b])
            assert disagreement_of_block(
                chain.left[b], left, case, np.arange(b), shape, chain.dims[b][0], symmetric
            ) < FLOOR[dtype]  # fmt: skip
            shape = carriers(whole.wiring.mirrored().mixes[: N - b])[::-1]
            assert disagreement_of_block(
                whole.right[b], right, case, np.arange(b, N), shape, whole.dims[b][0], symmetric
            ) < FLOOR[dtype]  # fmt: skip


@KINDS
def test_blocks_of_another_instance_disagree(chain_at, symmetric):
    chain = chain_at(symmetric, N - 1)
    left, shape = left_basis(chain.product().in_z_basis()[:4]), carriers(chain.wiring.mixes[:4])
    wrong = instance(symmetric, seed=3)
    assert disagreement_of_block(chain.left[4], left, wrong, np.arange(4), shape, chain.dims[4][0], symmetric) > 0.1


# ------------------------------------------------------------------------------------- effective Hamiltonians
def evolved_twins(opened, p, sites, tau, tolerance=1e-14):
    """Return a random centre tensor evolved by the kernel and by its dense twin, and the number of Lanczos vectors."""
    chain, far, case = opened
    symmetric, dtype, end = chain.symmetric, chain.tensors[0].dtype, p + sites
    left, right = left_basis(chain.product().in_z_basis()[:p]), right_basis(far.product().in_z_basis()[end:])
    dims = chain.dims[p], far.dims[end]
    matrices = {0: 1, 1: 1 if symmetric else 2, 2: 2 if symmetric else 4}[sites]
    shape = (matrices, sum(dims[0]), sum(dims[1]))
    generator = np.random.default_rng([p, sites])
    theta = (generator.normal(size=shape) + 1j * generator.normal(size=shape)).astype(dtype)
    if sites == 0 and symmetric:
        theta[0, : dims[0][0], dims[1][0] :] = theta[0, dims[0][0] :, : dims[1][0]] = 0
    columns = embedding(shape, left, right, *dims, sites, symmetric)
    effective = columns.conj().T @ dense_hamiltonian(case) @ columns
    twin = (expm(-1j * tau * effective) @ theta.ravel()).reshape(shape)
    inner = np.zeros(1)
    if sites == 2:
        coupling, signs = case.coupling_matrix()[p, p + 1], np.array([1, -1, -1, 1])[:matrices]
        first, second = np.array([1, 1, -1, -1])[:matrices], np.array([1, -1, 1, -1])[:matrices]
        inner = coupling * signs + case.fields[p] * first + case.fields[p + 1] * second
    elif sites == 1 and not symmetric:
        inner = case.fields[p] * np.array([1.0, -1.0])
    flips = np.zeros(2)
    flips[:sites] = case.transverse[p:end]
    found, vectors = compiled.evolve(
        theta, tau, tolerance, chain.left[p], far.right[end], chain.wiring.wires[sites][p], inner, flips,
        STRENGTHS, (dims[0][0], dims[1][0]), sites, symmetric,
    )  # fmt: skip
    return found, twin, vectors


class Opened(NamedTuple):
    chain: Chain
    far: Chain
    case: ar.Instance


@pytest.fixture
def open_chain(chain_at):
    """A chain whose left blocks are laid up to a position, with its right blocks beside it."""

    def build(symmetric, p, dtype=np.complex128, seed=0, bond=6, **kind):
        chain, far = (chain_at(symmetric, centre, dtype, seed, bond, **kind) for centre in (p, 0))
        return Opened(chain, far, instance(symmetric, **kind))

    return build


@DTYPES
@KINDS
@pytest.mark.parametrize("sites", [0, 1, 2])
def test_the_local_exponential_is_that_of_the_projected_hamiltonian(open_chain, symmetric, dtype, sites):
    for p in range(1 if sites == 0 else 0, N + 1 - max(sites, 1)):
        for constant in (False, True):
            chain = open_chain(symmetric, p, dtype, seed=p % 3, constant=constant)
            found, twin, _ = evolved_twins(chain, p, sites, 0.6, FLOOR[dtype] / 10)
            assert np.abs(found - twin).max() < FLOOR[dtype] * np.linalg.norm(twin)


@KINDS
def test_the_local_exponential_of_another_time_disagrees(open_chain, symmetric):
    found, _, _ = evolved_twins(open_chain(symmetric, 3), 3, 2, 0.6)
    _, twin, _ = evolved_twins(open_chain(symmetric, 3), 3, 2, -0.6)
    assert np.abs(found - twin).max() > 0.1


# --------------------------------------------------------------------------------------------------------- Lanczos
@pytest.mark.parametrize("tau", [0.0, 0.01, -0.3, 1.0, 3.0])
@pytest.mark.parametrize("tolerance", [1e-3, 1e-6, 1e-12])
def test_lanczos_keeps_its_tolerance(open_chain, tau, tolerance):
    found, twin, _ = evolved_twins(open_chain(True, 3, bond=16), 3, 2, tau, tolerance)
    assert np.linalg.norm(found - twin) < 2 * max(tolerance, 1e-13) * np.linalg.norm(twin)


def test_lanczos_takes_more_vectors_for_more(open_chain):
    chain = open_chain(True, 3, bond=16)
    count = {(tau, tolerance): evolved_twins(chain, 3, 2, tau, tolerance)[2] for tau in (0.01, 1.0) for tolerance in
             (1e-3, 1e-12)}  # fmt: skip
    assert count[0.01, 1e-3] < count[0.01, 1e-12] < count[1.0, 1e-12] < krylov.MOST
    assert count[1.0, 1e-3] < count[1.0, 1e-12]


@KINDS
def test_nothing_happens_under_a_hamiltonian_that_is_zero(symmetric):
    empty = ar.Instance(ar.lattices.from_edges(2, []), [], None if symmetric else [0.0, 0.0], [0.0, 0.0])
    shapes = [(1, 1, 2), (1, 2, 1)] if symmetric else [(2, 1, 2), (2, 2, 1)]
    product = Product(
        [np.full(shape, 0.5 + 0.5j) for shape in shapes], [(1, 0), (1, 1) if symmetric else (2, 0), (1, 0)], symmetric,
        np.arange(2),
    )  # fmt: skip
    chain = Chain(product, empty, Limits(4, 0.0, 1e-13))
    before = chain.product().dense()
    chain.sweep(1.0, STRENGTHS, True)
    chain.flip()
    after = chain.product().dense()
    np.testing.assert_allclose(after / np.linalg.norm(after), before / np.linalg.norm(before), atol=1e-14)


@pytest.mark.parametrize("tau", [0.0, -0.7, 5.0])
def test_the_exponential_of_a_tridiagonal_matrix(tau):
    generator = np.random.default_rng(4)
    for k in (1, 2, 9, 40):
        diagonal, off = 3 + generator.normal(size=k + 1), generator.random(k + 1)
        matrix = np.diag(diagonal[:k]) + np.diag(off[: k - 1], 1) + np.diag(off[: k - 1], -1)
        found = krylov.tridiagonal_exponential.py_func(diagonal, off, k, tau)
        np.testing.assert_allclose(found, expm(-1j * tau * matrix)[:, 0], atol=1e-13)
