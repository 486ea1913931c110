"""Sweeps against dense exponentials and closed laws: exact where nothing is projected away, conserving where it is."""

import numpy as np
import pytest
from scipy.linalg import expm

import anneal_ref as ar
from anneal_ref.backends.mps.chain import Chain, Limits
from anneal_ref.backends.mps.product import Product
from anneal_ref.backends.mps.start import plus_state

N = 8
STRENGTHS = (1.3, 0.7)
KINDS = pytest.mark.parametrize("symmetric", [True, False], ids=["sectors", "dense"])
SITES = pytest.mark.parametrize("two_site", [True, False], ids=["two sites", "one site"])


def instance(symmetric=True, n=N, seed=2):
    generator = np.random.default_rng(seed)
    lattice = ar.lattices.random_regular(n, 3, seed=1)
    fields = None if symmetric else generator.normal(size=n)
    return ar.Instance(lattice, generator.normal(size=len(lattice.edges)), fields, generator.uniform(0.5, 1.5, n))


def chain_of(product, case, most=1 << N, truncation=0.0, krylov=1e-14):
    twin = Product(list(product.tensors), list(product.dims), product.symmetric, product.order.copy())
    return Chain(twin, case, Limits(most, truncation, krylov))


def step(chain, tau, two_site, strengths=STRENGTHS):
    for _ in range(2):
        chain.sweep(tau / 2, strengths, two_site)
        chain.flip()


@pytest.fixture
def full(product_of):
    """A random state whose bonds are as wide as they can be."""

    def build(symmetric, odd=False, dtype=np.complex128, seed=0):
        generator = np.random.default_rng([seed, symmetric])
        psi = generator.normal(size=(1 << N, 2)) @ [1, 1j]
        if symmetric:
            psi = psi - psi[::-1] if odd else psi + psi[::-1]
        return product_of(psi / np.linalg.norm(psi), generator.permutation(N), symmetric, dtype)

    return build


# ----------------------------------------------------------------------------------------------------- energies
@pytest.mark.parametrize("dtype", [np.complex128, np.complex64])
@KINDS
def test_energies_of_both_parts(random_product, parts, symmetric, dtype):
    case = instance(symmetric)
    for seed in range(3):
        product = random_product(N, 5, symmetric, dtype, seed, odd=seed == 1)
        chain, psi = chain_of(product, case), product.dense()
        expected = [np.vdot(psi, part @ psi).real for part in parts(case)]
        np.testing.assert_allclose(chain.energies(), expected, atol=1e-5 if dtype is np.complex64 else 1e-12)
        # as seen from the other end
        chain.flip()
        chain.flip()
        np.testing.assert_allclose(chain.energies(), expected, atol=1e-5 if dtype is np.complex64 else 1e-12)


def test_the_energy_is_that_of_a_normalised_state(random_product):
    product = random_product(N, 5, True)
    before = chain_of(product, instance()).energies()
    product.tensors[0] = 3 * product.tensors[0]
    np.testing.assert_allclose(chain_of(product, instance()).energies(), before, rtol=1e-13)


# ------------------------------------------------------------------------------------- nothing is projected away
@SITES
@pytest.mark.parametrize("odd", [False, True], ids=["even", "odd"])
@KINDS
def test_a_sweep_at_full_bond_dimension_is_the_exponential(full, parts, symmetric, odd, two_site):
    case, product = instance(symmetric), full(symmetric, odd)
    transverse, problem = parts(case)
    chain = chain_of(product, case)
    if not two_site:
        # bonds count as saturated, so that all are updated by one site
        chain.limits = Limits(1, 0.0, 1e-14)
    expected = product.dense()
    for tau, strengths in ((0.4, STRENGTHS), (-1.1, (0.3, -0.9))):
        chain.sweep(tau, strengths, two_site)
        chain.flip()
        expected = expm(-1j * tau * (strengths[0] * transverse + strengths[1] * problem)) @ expected
    np.testing.assert_allclose(chain.product().dense(), expected, atol=1e-11)


@pytest.mark.parametrize("wrong", ["sign of the couplings", "no fields", "weights forgotten"])
def test_a_wrong_hamiltonian_is_seen(full, parts, wrong):
    case, product = instance(False), full(False)
    transverse, problem = parts(case)
    twin = {
        "sign of the couplings": ar.Instance(case.lattice, -case.couplings, case.fields, case.transverse),
        "no fields": ar.Instance(case.lattice, case.couplings, None, case.transverse),
        "weights forgotten": ar.Instance(case.lattice, case.couplings, case.fields),
    }[wrong]
    chain = chain_of(product, twin)
    chain.sweep(0.4, STRENGTHS, True)
    chain.flip()
    chain.sweep(0.0, STRENGTHS, True)
    chain.flip()
    expected = expm(-0.4j * (STRENGTHS[0] * transverse + STRENGTHS[1] * problem)) @ product.dense()
    assert np.abs(chain.product().dense() - expected).max() > 1e-2


# -------------------------------------------------------------------------------------------------- projected
# with the symmetry, states of bond dimension one do not move at all
@pytest.mark.parametrize(("symmetric", "bond"), [(True, 2), (True, 4), (True, 7), (False, 1), (False, 3), (False, 6)])
def test_one_site_sweeps_conserve_norm_and_energy(random_product, symmetric, bond):
    # source: J. Haegeman et al., Phys. Rev. B 94, 165116 (2016): a projected flow conserves both
    chain = chain_of(random_product(N, bond, symmetric, seed=3), instance(symmetric), most=1)
    start, bonds = chain.energies(), chain.bond_dimensions
    for _ in range(20):
        step(chain, 0.3, False)
        assert abs(chain.norm() - 1) < 1e-12
        assert np.dot(STRENGTHS, chain.energies()) == pytest.approx(np.dot(STRENGTHS, start), abs=1e-10)
    assert all(now <= before for now, before in zip(chain.bond_dimensions, bonds, strict=True))
    assert abs(chain.energies()[1] - start[1]) > 1e-3


@KINDS
def test_the_energy_after_a_quench_stays(symmetric):
    # from |+...+>, in the manifold that its enriched bonds span
    case = instance(symmetric)
    chain = chain_of(plus_state(case, np.arange(N), symmetric, np.complex128), case, most=1)
    for _ in range(20):
        step(chain, 0.2, False)
    assert np.dot(STRENGTHS, chain.energies()) == pytest.approx(-STRENGTHS[0] * case.transverse.sum(), abs=1e-10)
    assert abs(chain.energies()[1]) > 0.1


@KINDS
def test_two_site_sweeps_keep_the_norm_but_not_the_energy(random_product, symmetric):
    chain = chain_of(random_product(N, 3, symmetric, seed=3), instance(symmetric), most=3)
    start = np.dot(STRENGTHS, chain.energies())
    for _ in range(20):
        step(chain, 0.3, True)
        assert abs(chain.norm() - 1) < 1e-12
    assert abs(np.dot(STRENGTHS, chain.energies()) - start) > 1e-6
    assert chain.discarded.sum() > 1e-6


@KINDS
def test_a_sweep_and_its_mirror_image_are_adjoint(random_product, symmetric):
    # backward in time and from the other end, a projected sweep undoes itself
    product = random_product(N, 4, symmetric, seed=5)
    chain = chain_of(product, instance(symmetric), most=1)
    chain.sweep(0.7, STRENGTHS, False)
    chain.flip()
    assert abs(np.vdot(chain.product().dense(), product.dense())) < 0.9
    chain.sweep(-0.7, STRENGTHS, False)
    chain.flip()
    np.testing.assert_allclose(chain.product().dense(), product.dense(), atol=1e-10)


@KINDS
def test_the_splitting_of_the_projector_is_of_second_order(random_product, symmetric):
    def after(steps):
        chain = chain_of(random_product(N, 4, symmetric, seed=5), instance(symmetric), most=1)
        for _ in range(steps):
            step(chain, 0.5 / steps, False)
        return chain.product().dense()

    fine = after(256)
    errors = np.array([np.linalg.norm(after(steps) - fine) for steps in (8, 16, 32)])
    np.testing.assert_allclose(np.log2(errors[:-1] / errors[1:]), 2, atol=0.2)


# ------------------------------------------------------------------------------------------------- with symmetry
@SITES
def test_the_symmetry_changes_nothing(two_site):
    case, states = instance(n=10), []
    for symmetric in (True, False):
        chain = chain_of(plus_state(case, np.arange(10), symmetric, np.complex128), case, most=12, truncation=1e-14)
        for k in range(6):
            step(chain, 0.12, two_site or k < 2)
        states.append(chain.product().dense())
        assert chain.symmetric == symmetric
        assert chain.largest == 12
    # a cap that cuts: singular values of both sectors compete as those of one matrix
    assert abs(np.vdot(*states)) == pytest.approx(1.0, abs=1e-7)


# ----------------------------------------------------------------------------------------------------- truncation
@pytest.mark.parametrize("most", [2, 3, 5, 9])
@KINDS
def test_the_fidelity_of_a_truncating_sweep_is_the_product_of_what_is_kept(full, symmetric, most):
    # nested projectors: F = prod (1 - eps_b) without approximation, for one sweep that does nothing else; derived
    product = full(symmetric, seed=4)
    chain = chain_of(product, instance(symmetric), most=most)
    chain.sweep(0.0, STRENGTHS, True)
    assert max(chain.bond_dimensions) == most
    discarded = chain.discarded.copy()
    chain.flip()
    kept = chain.product()
    overlap = abs(np.vdot(kept.dense(), product.dense())) ** 2
    assert overlap == pytest.approx(np.prod(1 - discarded), abs=1e-12)
    assert discarded[1:-1].max() - 1e-12 <= 1 - overlap <= discarded.sum() + 1e-12


@KINDS
def test_bonds_shrink_where_little_is_kept(symmetric):
    wide = plus_state(instance(symmetric, n=14), np.arange(14), symmetric, np.complex128)
    chain = chain_of(wide, instance(symmetric, n=14), most=64, truncation=0.0, krylov=1e-13)
    for _ in range(4):
        step(chain, 0.1, True)
    assert max(chain.bond_dimensions) == 64
    bonds = [max(chain.bond_dimensions)]
    for chain.limits.truncation in (1e-6, 1e-4, 1e-2):
        step(chain, 0.0, True)
        bonds.append(max(chain.bond_dimensions))
    assert bonds == sorted(bonds, reverse=True)
    assert bonds[1] < 64
    # below so few states nothing is gained
    assert bonds[-1] == 16
    chain.limits.bond_dimension = 5
    step(chain, 0.0, True)
    assert max(chain.bond_dimensions) == 5


def test_bonds_that_may_grow_are_updated_by_two_sites():
    case = instance(n=10)
    chain = chain_of(plus_state(case, np.arange(10), True, np.complex128), case, most=12)
    bonds = []
    for _ in range(5):
        step(chain, 0.1, False)
        bonds.append(chain.bond_dimensions)
    assert bonds[-1][1:-1] == (2, 4, 8, 12, 12, 12, 8, 4, 2)
    assert all(b <= 12 for dims in bonds for b in dims)


# -------------------------------------------------------------------------------------------------------- counters
def test_local_exponentials_are_counted(random_product):
    chain = chain_of(random_product(N, 3, True), instance(), most=1)
    chain.sweep(0.1, STRENGTHS, False)
    # every site forward, every bond back
    assert chain.exponentials == 2 * N - 1
    chain.flip()
    chain.sweep(0.1, STRENGTHS, True)
    # every pair forward, every site between two of them back
    assert chain.exponentials == 2 * N - 1 + 2 * N - 3
    assert chain.vectors >= 2 * chain.exponentials


def test_a_state_is_taken_over_with_the_counters(full):
    chain = chain_of(full(True), instance(), most=4)
    step(chain, 0.1, True)
    counted, discarded, other = chain.exponentials, chain.discarded.sum(), full(True, seed=1)
    assert discarded > 0
    other.order = chain.order
    chain.replace(other)
    np.testing.assert_allclose(chain.product().dense(), other.dense(), atol=1e-14)
    assert (chain.exponentials, chain.discarded.sum()) == (counted, discarded)
    expected = chain_of(other, instance()).energies()
    np.testing.assert_allclose(chain.energies(), expected, atol=1e-13)


@pytest.mark.parametrize("symmetric", [True, False])
def test_flips_turn_everything_round(random_product, symmetric):
    product = random_product(N, 5, symmetric)
    chain = chain_of(product, instance(symmetric))
    before, energies = chain.product(), chain.energies()
    chain.flip()
    turned = chain.product()
    np.testing.assert_array_equal(turned.order, product.order[::-1])
    assert turned.bond_dimensions == before.bond_dimensions[::-1]
    chain.flip()
    for one, other in zip(chain.product().tensors, before.tensors, strict=True):
        np.testing.assert_array_equal(one, other)
    np.testing.assert_array_equal(chain.energies(), energies)
