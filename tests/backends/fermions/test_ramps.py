"""Linear ramps of long chains: exact densities, statistics, correlations and entropies of kinks.

Tables that name no other source are of free fermions, mode by mode, after J. Dziarmaga, Phys. Rev. Lett. 95, 245701
(2005); values up to 12 spins were compared with state vectors.
"""

import numpy as np
import pytest
from scipy.integrate import solve_ivp

import anneal_ref as ar
from anneal_ref.backends.fermions import free_fermions as room
from anneal_ref.backends.fermions.chains import Chain, chain_of

FINE = ar.FreeFermions(tolerance=1e-10)

FIELD_RAMP = {  # tau: rings of 8, 12, 16, 64
    0.25: (0.286935411, 0.287326769, 0.287329000, 0.287329002),
    0.5: (0.209494078, 0.213142921, 0.213140621, 0.213141463),
    1: (0.117505670, 0.132813680, 0.133775421, 0.133816758),
    2: (0.037638078, 0.071071719, 0.079470530, 0.080776674),
    8: (0.000258598, 0.005650298, 0.018304580, 0.039975986),
}
STANDARD_RAMP = {  # duration: rings of 8, 12, 1000
    1: (0.372992042, 0.372992042, 0.372992042),
    2: (0.231816184, 0.231817604, 0.231817604),
    4: (0.149820100, 0.151528676, 0.151529196),
    8: (0.095740257, 0.111718514, 0.112321028),
    32: (0.004979754, 0.029826126, 0.056278432),
}


@pytest.mark.parametrize("tau", FIELD_RAMP)
def test_kinks_of_the_ramp_of_the_field(tau, uniform_ramp):
    for n, kinks in zip((8, 12, 16, 64), FIELD_RAMP[tau], strict=True):
        state = FINE.evolve(uniform_ramp(n, 5 * tau, field_alone=True))
        assert state.kink_density() == pytest.approx(kinks, abs=1e-8)


@pytest.mark.parametrize("duration", STANDARD_RAMP)
def test_kinks_of_the_standard_ramp(duration, uniform_ramp):
    for n, kinks in zip((8, 12, 1000), STANDARD_RAMP[duration], strict=True):
        assert FINE.evolve(uniform_ramp(n, duration)).kink_density() == pytest.approx(kinks, abs=1e-8)


@pytest.mark.slow
def test_kinks_of_a_slow_ramp(uniform_ramp):
    for n, kinks in zip((8, 12, 1000), (0.000001589, 0.000172204, 0.028122567), strict=True):
        assert FINE.evolve(uniform_ramp(n, 128)).kink_density() == pytest.approx(kinks, abs=1e-8)


def test_periodic_fermions_miss_the_table(uniform_ramp, monkeypatch):
    def periodic(instance):
        chain = chain_of(instance)
        return Chain(chain.order, chain.couplings * np.append(np.ones(chain.n_sites - 1), -1), chain.weights, True)

    monkeypatch.setattr(room, "chain_of", periodic)
    assert abs(FINE.evolve(uniform_ramp(8, 8)).kink_density() - STANDARD_RAMP[8][0]) > 1e-3


def test_density_follows_kibble_and_zurek(uniform_ramp):
    # n = 1 / (pi sqrt(T)): from the formula of Dziarmaga, with the rate 4/T at the critical point
    for duration in (32, 64):
        density = ar.FreeFermions(tolerance=1e-6).evolve(uniform_ramp(400, duration)).kink_density()
        assert density * np.pi * np.sqrt(duration) == pytest.approx(1.0, abs=2e-3)


def mode_by_mode(n, tau):
    """Outside solution of the ramp of the field: amplitudes of every pair of momenta in the final ground basis."""
    momenta = (2 * np.arange(1, n // 2 + 1) - 1) * np.pi / n

    def hamiltonian(k, g):
        return 2 * np.array([[g - np.cos(k), np.sin(k)], [np.sin(k), np.cos(k) - g]])

    found = []
    for k in momenta:
        start = np.linalg.eigh(hamiltonian(k, 5.0))[1][:, 0].astype(complex)
        psi = solve_ivp(
            lambda t, y, k=k: -1j * (hamiltonian(k, 5.0 - t / tau) @ y),
            (0, 5 * tau), start, method="DOP853", rtol=1e-11, atol=1e-13,
        ).y[:, -1]  # fmt: skip
        # without a field, the states of energy -2 and +2
        ground, excited = np.array([np.cos(k / 2), -np.sin(k / 2)]), np.array([np.sin(k / 2), np.cos(k / 2)])
        found.append((excited @ psi, ground @ psi))
    return momenta, *np.array(found).T


def test_all_statistics_of_the_uniform_ring(uniform_ramp):
    n, tau = 32, 2
    k, excited, ground = mode_by_mode(n, tau)
    p = np.abs(excited) ** 2
    state = FINE.evolve(uniform_ramp(n, 5 * tau, field_alone=True))
    density = 2 * p.sum() / n
    assert state.kink_density() == pytest.approx(density, abs=1e-9)
    # pairs of kinks are independent: A. del Campo, Phys. Rev. Lett. 121, 200601 (2018)
    pairs = np.ones(1)
    for one in p:
        pairs = np.convolve(pairs, [1 - one, one])
    numbers = np.zeros(n + 1)
    numbers[::2] = pairs
    np.testing.assert_allclose(state.kink_numbers(), numbers, atol=1e-9)
    # connected correlation -alpha^2 + |beta|^2: L. Cincio et al., Phys. Rev. A 75, 052321 (2007), from memory
    r = np.arange(1, n)[:, None]
    alpha = 2 / n * np.sum(p * np.cos(k * r), axis=1)
    beta = 2 / n * np.sum(excited * ground.conj() * np.sin(k * r), axis=1)
    both = state.kink_correlations()[1]
    np.testing.assert_allclose(both[0, 1:] - density**2, np.abs(beta) ** 2 - alpha**2, atol=1e-9)
    # its sum is the variance of the number
    mean, square = state.kink_numbers() @ np.arange(n + 1), state.kink_numbers() @ np.arange(n + 1) ** 2
    assert n * (both[0].sum() - n * density**2) == pytest.approx(square - mean**2, abs=1e-9)


@pytest.mark.parametrize(("tau", "second", "third"), [(8, 0.5924, 0.1490), (16, 0.5890, 0.1402)])
def test_cumulants_approach_those_of_pairs(tau, second, third, uniform_ramp):
    # kappa2/kappa1 -> 2 - sqrt 2, kappa3/kappa1 -> 4 (1 - 3/sqrt 2 + 2/sqrt 3): A. del Campo, Phys. Rev. Lett. 121,
    # 200601 (2018); at finite rate mode by mode
    p = ar.FreeFermions(tolerance=1e-7).evolve(uniform_ramp(200, 5 * tau, field_alone=True)).kink_numbers()
    n = np.arange(len(p))
    mean = p @ n
    ratios = p @ (n - mean) ** 2 / mean, p @ (n - mean) ** 3 / mean
    assert ratios == pytest.approx((second, third), abs=1e-4)
    assert ratios == pytest.approx((2 - np.sqrt(2), 4 * (1 - 3 / np.sqrt(2) + 2 / np.sqrt(3))), abs=0.02)


def test_kinks_keep_their_distance(uniform_ramp):
    # R. J. Nowak and J. Dziarmaga, Phys. Rev. B 104, 075448 (2021), from memory; deviation 0.036 at this rate
    n, tau = 400, 16
    both = ar.FreeFermions(tolerance=1e-7).evolve(uniform_ramp(n, 5 * tau, field_alone=True)).kink_correlations()[1]
    density = both[0, 0]
    xi = 2 * np.pi * np.sqrt(2 * tau)
    length = xi * np.sqrt(1 + (3 * np.log(tau) / (4 * np.pi)) ** 2)
    r = np.arange(1, 120)
    law = 9.57 * xi / length * (r / length) ** 2 * np.exp(-3 * np.pi * (r / length) ** 2)
    law -= np.exp(-2 * np.pi * (r / xi) ** 2)
    connected = both[0, r] / density**2 - 1
    assert np.abs(connected - law).max() < 0.04
    assert connected[0] < -0.9


@pytest.mark.parametrize(("tau", "entropy"), [(1, 0.67679), (4, 0.72041), (8, 0.72072), (16, 0.75646)])
def test_entropy_after_a_ramp(tau, entropy, uniform_ramp):
    state = ar.FreeFermions().evolve(uniform_ramp(128, 5 * tau, field_alone=True, periodic=False))
    assert state.entropy(range(64)) == pytest.approx(entropy, abs=6e-6)


@pytest.mark.parametrize(
    ("tau", "kinks", "energy"),
    [(1, (0.2274, 0.0017), (0.1499, 0.0010)), (4, (0.1234, 0.0016), (0.0500, 0.0005))],
)
def test_ramps_of_the_disordered_chain(tau, kinks, energy):
    # T. Caneva, R. Fazio, G. E. Santoro, Phys. Rev. B 76, 144427 (2007): couplings and weights uniform in (0, 1]; the
    # means over 120 samples of 64 spins are of free fermions that were compared with exact diagonalisation at 8 spins
    random, found = np.random.default_rng(11), []
    schedule = ar.Schedule.linear((5.0, 0.0), (1.0, 1.0))
    for _ in range(60):
        couplings, weights = random.uniform(0, 1, 63), random.uniform(0, 1, 64)
        instance = ar.Instance(ar.lattices.chain(64), -couplings, transverse=weights)
        state = ar.FreeFermions(tolerance=1e-4).evolve(ar.Anneal(instance, schedule, 5 * tau, start="ground"))
        found.append((state.kink_density(), (state.energy() + couplings.sum()) / 64))
    found = np.array(found)
    for values, (mean, error) in zip(found.T, (kinks, energy), strict=True):
        own = values.std(ddof=1) / np.sqrt(len(values))
        # 1e-4 two-sided
        assert abs(values.mean() - mean) < 3.9 * np.hypot(own, error)
