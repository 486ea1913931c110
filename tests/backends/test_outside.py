"""The state vector, and free fermions on rings, against the outside: closed forms, chains, and three other codes.

Hamiltonians for the other codes are built here from Pauli matrices, from the one line that states the convention:
H = -G sum_i w_i X_i + P (sum J_ij Z_i Z_j + sum_i h_i Z_i), site 0 the least significant bit, bit 0 for Z = +1.
"""

import numpy as np
import pytest
import scipy.sparse as sp
from scipy.integrate import solve_ivp

import anneal_ref as ar

X, Z = np.array([[0.0, 1.0], [1.0, 0.0]]), np.diag([1.0, -1.0])


def ring(n, coupling=-1.0):
    return ar.Instance(ar.lattices.chain(n, periodic=True), np.full(n, coupling))


def open_chain(n, coupling=-1.0):
    return ar.Instance(ar.lattices.chain(n), np.full(n - 1, coupling))


def constant(transverse, problem):
    return ar.Schedule.linear((transverse, transverse), (problem, problem))


def neighbours(moments, instance):
    i, j = instance.lattice.edges.T
    return moments.zz.value[i, j]


# ---------------------------------------------------------------------------------------------- one and two spins
class TestLandauZener:
    """Source: L. Landau, Phys. Z. Sowjetunion 2, 46 (1932); C. Zener, Proc. R. Soc. A 137, 696 (1932)."""

    @staticmethod
    def left_adiabatic(window, rate=1.0, gap=1.0):
        instance = ar.Instance(ar.lattices.from_edges(1, []), [], fields=[1.0])
        edge = rate * window / 2
        schedule = ar.Schedule.linear((gap / 2, gap / 2), (-edge, edge))
        anneal = ar.Anneal(instance, schedule, 2 * window, start="ground")
        state = ar.StateVector(tolerance=1e-9).evolve(anneal)
        ground = np.linalg.eigh(-gap / 2 * X + edge * Z)[1][:, 0]
        return 1 - abs(ground @ state.amplitudes()) ** 2

    @pytest.mark.parametrize("window", [10.0, 20.0, 40.0])
    def test_adiabatic_basis(self, window):
        probability = np.exp(-np.pi / 2)
        # boundary term of N. V. Vitanov, Phys. Rev. A 59, 988 (1999), from memory
        energy = np.hypot(window, 1.0)
        bound = 2 * np.sqrt(probability * (1 - probability)) * 2 / (2 * energy**3)
        assert abs(self.left_adiabatic(window) - probability) < 1.1 * bound

    def test_other_rates(self):
        for rate in (0.5, 3.0):
            assert self.left_adiabatic(60.0, rate) == pytest.approx(np.exp(-np.pi / (2 * rate)), abs=1e-4)


def test_two_spins_coupling_alone():
    # <X_1> = cos 2 J t from |++> under J Z_1 Z_2: by hand
    instance = ar.Instance(ar.lattices.chain(2), [0.7])
    with pytest.warns(ar.AnnealRefWarning):
        anneal = ar.Anneal(instance, constant(0.0, 1.0), 1.9)
    moments = ar.StateVector(tolerance=1e-10).evolve(anneal).moments()
    np.testing.assert_allclose(moments.x.value, np.cos(2 * 0.7 * 1.9), atol=1e-12)
    assert moments.zz.value[0, 1] == pytest.approx(0.0, abs=1e-12)


def test_two_spins_in_a_transverse_field():
    # the even sector is one spin in the field (-2G, 0, J): precession by hand
    coupling, transverse, duration = 0.8, 0.6, 2.3
    instance = ar.Instance(ar.lattices.chain(2), [coupling])
    with pytest.warns(ar.AnnealRefWarning):
        anneal = ar.Anneal(instance, constant(transverse, 1.0), duration)
    omega = np.hypot(coupling, 2 * transverse)
    expected = -2 * transverse * coupling / omega**2 * (1 - np.cos(2 * omega * duration))
    moments = ar.StateVector(tolerance=1e-10).evolve(anneal).moments()
    assert moments.zz.value[0, 1] == pytest.approx(expected, abs=1e-10)


# -------------------------------------------------------------------------------------------------------- limits
def ramp(transverse=3.0, problem=2.0):
    return ar.Schedule.linear((transverse, 0.0), (0.0, problem))


def test_no_coupling_is_a_product_of_single_spins():
    fields, weights = np.array([0.5, -1.2, 0.0, 2.0]), np.array([1.0, 0.7, 1.3, 1.0])
    anneal = ar.Anneal(ar.Instance(ar.lattices.from_edges(4, []), [], fields, weights), ramp(), 2.0)
    moments = ar.StateVector(tolerance=1e-9).evolve(anneal).moments()
    expected = []
    for field, weight in zip(fields, weights, strict=True):
        psi = solve_ivp(
            lambda t, y, h=field, w=weight: 1j * (3.0 * (1 - t / 2) * w * (X @ y) - 2.0 * t / 2 * h * (Z @ y)),
            (0.0, 2.0), np.full(2, 2**-0.5, complex), method="DOP853", rtol=1e-13, atol=1e-14,
        ).y[:, -1]  # fmt: skip
        expected.append(abs(psi[0]) ** 2 - abs(psi[1]) ** 2)
    np.testing.assert_allclose(moments.z.value, expected, atol=1e-9)
    np.testing.assert_allclose(
        moments.zz.value, np.outer(expected, expected) + np.diag(1 - np.square(expected)), atol=1e-9
    )


def test_no_field_keeps_every_magnetisation_at_zero():
    instance = ar.draw_instance(ar.lattices.square(3, 3), ar.disorder.gaussian(), seed=3)
    moments = ar.StateVector().evolve(ar.Anneal(instance, ramp(), 2.0)).moments()
    np.testing.assert_allclose(moments.z.value, 0.0, atol=1e-12)


def test_a_sudden_anneal_leaves_the_spins_alone():
    instance = ar.draw_instance(ar.lattices.square(3, 3), ar.disorder.plus_minus(), seed=3)
    moments = ar.StateVector().evolve(ar.Anneal(instance, ramp(), 1e-5)).moments()
    np.testing.assert_allclose(moments.zz.value, np.eye(9), atol=1e-8)
    np.testing.assert_allclose(moments.x.value, 1.0, atol=1e-8)


def test_a_slow_anneal_ends_in_the_ground_state():
    instance = ar.Instance(ar.lattices.chain(6), [1.0, -0.8, 1.2, 0.7, -1.1], fields=[0.3, 0, 0, 0.2, 0, 0])
    state = ar.StateVector(tolerance=1e-6).evolve(ar.Anneal(instance, ramp(), 400.0))
    assert state.ground_probability() > 0.999
    assert state.energy() == pytest.approx(
        2.0 * min(instance.energies(1 - 2 * ((np.arange(64)[:, None] >> np.arange(6)) & 1))), abs=5e-3
    )


# ------------------------------------------------------------------------------------------------- uniform chains
CRITICAL = constant(1.0, 1.0)


@pytest.mark.parametrize(
    ("n", "energy", "bond"), [(8, -10.2516617910, 0.6407288619), (12, -15.3225951511, 0.6384414646)]
)
@pytest.mark.parametrize("coupling", [-1.0, 1.0], ids=["ferromagnet", "antiferromagnet"])
def test_critical_ring(n, energy, bond, coupling):
    # source: P. Pfeuty, Ann. Phys. 57, 79 (1970): E0 = -2 / sin(pi/2N), <X> = -sign(J) <ZZ> = 1/(N sin(pi/2N))
    state = ar.StateVector().evolve(ar.Anneal(ring(n, coupling), CRITICAL, 1.0, start="ground"), at=0.0)
    assert state.energy() == pytest.approx(energy, abs=1e-9)
    assert state.ledger["ground_energy"] == pytest.approx(-2 / np.sin(np.pi / (2 * n)), abs=1e-10)
    moments = state.moments()
    np.testing.assert_allclose(neighbours(moments, state.anneal.instance), -coupling * bond, atol=1e-9)
    np.testing.assert_allclose(moments.x.value, bond, atol=1e-9)


@pytest.mark.parametrize(("n", "energy"), [(8, -9.8379514475), (10, -12.38148999965), (12, -14.9259711099)])
def test_critical_open_chain(n, energy):
    # source: P. Pfeuty, Ann. Phys. 57, 79 (1970): E0 = 1 - 1/sin(pi/(2(2N+1)))
    state = ar.StateVector().evolve(ar.Anneal(open_chain(n), CRITICAL, 1.0, start="ground"), at=0.0)
    assert state.energy() == pytest.approx(energy, abs=1e-9)


def test_a_ground_state_stays_where_it_is():
    anneal = ar.Anneal(ring(8), CRITICAL, 5.0, start="ground")
    state = ar.StateVector(tolerance=1e-9).evolve(anneal)
    np.testing.assert_allclose(neighbours(state.moments(), anneal.instance), 0.6407288619, atol=2e-9)


# kink densities of the ramped ring, exact to the digits given: free fermions, mode by mode, after J. Dziarmaga,
# Phys. Rev. Lett. 95, 245701 (2005)
@pytest.mark.parametrize(
    ("n", "duration", "kinks"),
    [(8, 1, 0.372992042), (8, 2, 0.231816184), (8, 4, 0.149820100), (8, 8, 0.095740257), (8, 32, 0.004979754),
     (12, 2, 0.231817604), (12, 8, 0.111718514), (12, 32, 0.029826126)],
)  # fmt: skip
def test_kinks_of_the_standard_ramp(n, duration, kinks):
    anneal = ar.Anneal(ring(n), ar.Schedule.linear((1.0, 0.0), (0.0, 1.0)), duration)
    moments = ar.StateVector(tolerance=1e-9).evolve(anneal).moments()
    np.testing.assert_allclose((1 - neighbours(moments, anneal.instance)) / 2, kinks, atol=1e-8)


@pytest.mark.parametrize(
    ("n", "tau", "kinks"),
    [(8, 0.25, 0.286935411), (8, 1, 0.117505670), (8, 8, 0.000258598), (12, 0.5, 0.213142921), (12, 2, 0.071071719)],
)
def test_kinks_of_the_ramp_from_a_finite_field(n, tau, kinks):
    anneal = ar.Anneal(ring(n), ar.Schedule.linear((5.0, 0.0), (1.0, 1.0)), 5 * tau, start="ground")
    moments = ar.StateVector(tolerance=1e-9).evolve(anneal).moments()
    np.testing.assert_allclose((1 - neighbours(moments, anneal.instance)) / 2, kinks, atol=1e-8)


def test_sudden_quench_of_the_ring():
    # source of <X>: E. Barouch, B. M. McCoy, M. Dresden, Phys. Rev. A 2, 1075 (1970); echo after H. T. Quan et al.,
    # Phys. Rev. Lett. 96, 140604 (2006), from memory. <ZZ> by hand: the energy -N (g <X> + <ZZ>) under the field g
    # after the jump is kept, and before the jump it is -N (g0 <X>_0 + <ZZ>_0) = -sum over k of 2 sqrt(1 + g0^2 - 2 g0
    # cos k), the ground energy of P. Pfeuty, Ann. Phys. 57, 79 (1970)
    n, before, after, time = 10, 1.7, 0.6, 1.0
    k = (2 * np.arange(1, n // 2 + 1) - 1) * np.pi / n
    angle = {g: np.arctan2(np.sin(k), g - np.cos(k)) for g in (before, after)}
    turn = angle[after] - angle[before]
    frequency = 2 * np.sqrt(1 + after**2 - 2 * after * np.cos(k))
    echo = np.prod(1 - np.sin(turn) ** 2 * np.sin(frequency * time) ** 2)
    x = (
        2
        / n
        * np.sum(
            np.cos(angle[after]) * np.cos(turn) + np.sin(angle[after]) * np.sin(turn) * np.cos(2 * frequency * time)
        )
    )
    x_before = 2 / n * np.sum(np.cos(angle[before]))
    zz_before = 2 / n * np.sum(np.sqrt(1 + before**2 - 2 * before * np.cos(k))) - before * x_before
    zz = zz_before + after * (x_before - x)
    assert zz == pytest.approx(0.6477035949, abs=1e-10)

    jump = 1e-9  # changes nothing beyond its own size
    schedule = ar.Schedule.from_table([0, jump, 1], [before, after, after], [1, 1, 1], interpolation="linear")
    anneal = ar.Anneal(ring(n), schedule, time, start="ground")
    backend = ar.StateVector(tolerance=1e-10)
    state = backend.evolve(anneal)
    start = backend.evolve(anneal, at=0.0).amplitudes()
    assert abs(np.vdot(start, state.amplitudes())) ** 2 == pytest.approx(echo, abs=1e-8)
    assert echo == pytest.approx(0.1517979642, abs=1e-10)
    np.testing.assert_allclose(state.moments().x.value, x, atol=1e-8)
    np.testing.assert_allclose(neighbours(state.moments(), anneal.instance), zz, atol=1e-8)


# ---------------------------------------------------------------------------------------------------- other codes
def on_site(matrix, site, n):
    return sp.kron(sp.kron(sp.identity(1 << (n - 1 - site)), matrix), sp.identity(1 << site), format="csr")


def pauli_parts(instance):
    """Return sum_i w_i X_i and the problem part, as sparse matrices."""
    n = instance.n_sites
    transverse = sum(weight * on_site(X, i, n) for i, weight in enumerate(instance.transverse))
    problem = sum(field * on_site(Z, i, n) for i, field in enumerate(instance.fields))
    for (i, j), coupling in zip(instance.lattice.edges, instance.couplings, strict=True):
        problem = problem + coupling * on_site(Z, i, n) @ on_site(Z, j, n)
    return sp.csr_matrix(transverse), sp.csr_matrix(problem)


def outside_moments(psi, n):
    p = np.abs(psi) ** 2 / np.linalg.norm(psi) ** 2
    spins = 1 - 2 * ((np.arange(1 << n)[:, None] >> np.arange(n)) & 1)
    return p @ spins, spins.T @ (spins * p[:, None])


def table(duration):
    """The schedule of the agreement suite: a table with units of GHz, and the same in plain numbers for the others."""
    s = np.linspace(0, 1, 9)
    transverse, problem = 1.1 * (1 - s) ** 2, 0.9 * s * (0.3 + 0.7 * s)
    ours = ar.Schedule.from_table(s, transverse, problem, unit="GHz", interpolation="linear")
    # 2 pi rad per turn; straight lines between the rows
    return ours, [lambda t, y=y: 2 * np.pi * np.interp(t / duration, s, y) for y in (transverse, problem)]


def random_anneal(seed):
    generator = np.random.default_rng(seed)
    n, duration = 6, 1.7
    lattice = ar.lattices.random_regular(n, 3, seed=seed)
    instance = ar.Instance(
        lattice, generator.normal(size=len(lattice.edges)), generator.normal(size=n), generator.uniform(0.5, 1.5, n)
    )
    schedule, (transverse, problem) = table(duration)
    return ar.Anneal(instance, schedule, duration), transverse, problem


def random_ring(seed):
    anneal, transverse, problem = random_anneal(seed)
    instance = ar.Instance(
        ar.lattices.chain(6, periodic=True), anneal.instance.couplings[:6], transverse=anneal.instance.transverse
    )
    return ar.Anneal(instance, anneal.schedule, anneal.duration), transverse, problem


def scipy_state(anneal, transverse, problem):
    flip, diagonal = pauli_parts(anneal.instance)
    energies = diagonal.diagonal()
    psi = np.full(len(energies), len(energies) ** -0.5, complex)
    ends = np.linspace(0, anneal.duration, 9)
    for start, end in zip(ends[:-1], ends[1:], strict=True):
        psi = solve_ivp(
            lambda t, y: 1j * (transverse(t) * (flip @ y) - problem(t) * energies * y),
            (start, end), psi, method="DOP853", rtol=1e-11, atol=1e-13,
        ).y[:, -1]  # fmt: skip
    return psi


def quimb_state(anneal, transverse, problem):
    quimb = pytest.importorskip("quimb")
    flip, diagonal = (part.astype(complex) for part in pauli_parts(anneal.instance))
    psi = np.full((flip.shape[0], 1), flip.shape[0] ** -0.5, complex)
    evolution = quimb.Evolution(
        psi, lambda t: problem(t) * diagonal - transverse(t) * flip, method="integrate", int_stop=None, progbar=False
    )
    evolution._stepper.set_integrator("dop853", rtol=1e-10, atol=1e-12, nsteps=100_000)
    evolution.update_to(anneal.duration)
    return np.asarray(evolution.pt).ravel()


def qutip_state(anneal, transverse, problem):
    qutip = pytest.importorskip("qutip")
    flip, diagonal = (qutip.Qobj(part) for part in pauli_parts(anneal.instance))
    hamiltonian = qutip.QobjEvo([[-flip, lambda t: transverse(t)], [diagonal, lambda t: problem(t)]])
    psi = qutip.Qobj(np.full((flip.shape[0], 1), flip.shape[0] ** -0.5))
    options = {"method": "vern9", "rtol": 1e-10, "atol": 1e-12, "nsteps": 100_000, "progress_bar": ""}
    result = qutip.sesolve(hamiltonian, psi, np.linspace(0, anneal.duration, 9), options=options)
    return result.states[-1].full().ravel()


OUTSIDE = {"scipy": scipy_state, "quimb": quimb_state, "qutip": qutip_state}


STATE_VECTOR, FERMIONS = ar.StateVector(tolerance=1e-9), ar.FreeFermions(tolerance=1e-9)


def disagreement(anneal, outside, solved, backend=STATE_VECTOR):
    """Largest difference over all <Z> and <ZZ> between our solution of `solved` and theirs of `anneal`."""
    moments = backend.evolve(solved).moments()
    z, zz = outside_moments(outside, anneal.n_sites)
    return max(np.abs(moments.z.value - z).max(), np.abs(moments.zz.value - zz).max())


@pytest.mark.parametrize("code", OUTSIDE)
def test_agreement_on_random_graphs(code):
    for seed in (1, 2):
        anneal, transverse, problem = random_anneal(seed)
        assert disagreement(anneal, OUTSIDE[code](anneal, transverse, problem), anneal) < 3e-8


@pytest.mark.parametrize("code", OUTSIDE)
def test_free_fermions_agree_on_random_rings(code):
    for seed in (1, 2):
        anneal, transverse, problem = random_ring(seed)
        outside = OUTSIDE[code](anneal, transverse, problem)
        assert disagreement(anneal, outside, anneal, FERMIONS) < 3e-8


def mistaken(anneal, mistake):
    instance, schedule = anneal.instance, anneal.schedule
    couplings, fields, weights = (np.array(part) for part in (instance.couplings, instance.fields, instance.transverse))
    if mistake == "sign of J":
        couplings = -couplings
    elif mistake == "missing field":
        fields[2] = 0.0
    elif mistake == "factor 2 in G":
        weights = 2 * weights
    elif mistake == "weights ignored":
        weights = np.ones_like(weights)
    else:
        # turns taken for radians
        s = np.linspace(0, 1, 9)
        schedule = ar.Schedule.from_table(s, 1.1 * (1 - s) ** 2, 0.9 * s * (0.3 + 0.7 * s), interpolation="linear")
    wrong = ar.Instance(instance.lattice, couplings, fields, weights)
    return ar.Anneal(wrong, schedule, anneal.duration)


@pytest.mark.parametrize("mistake", ["sign of J", "missing field", "factor 2 in G", "weights ignored", "unit"])
def test_a_wrong_twin_fails_the_agreement(mistake):
    anneal, transverse, problem = random_anneal(1)
    outside = scipy_state(anneal, transverse, problem)
    assert disagreement(anneal, outside, mistaken(anneal, mistake)) > 1e-2


@pytest.mark.parametrize("mistake", ["sign of J", "factor 2 in G", "weights ignored", "unit"])
def test_a_wrong_ring_fails_the_agreement(mistake):
    anneal, transverse, problem = random_ring(1)
    outside = scipy_state(anneal, transverse, problem)
    assert disagreement(anneal, outside, mistaken(anneal, mistake), FERMIONS) > 1e-2
