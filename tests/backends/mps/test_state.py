"""What a matrix product state answers is what the state vector answers."""

import itertools

import numpy as np
import pytest

import anneal_ref as ar
from anneal_ref.backends.contract import State
from anneal_ref.base.errors import InputError, TooLarge
from anneal_ref.observe.source import Source

N = 8
FIELDS = [0.3, -0.2, 0.0, 0.9, 0.1, -0.6, 0.4, -1.1]
BOTH = pytest.mark.parametrize("fields", [None, FIELDS], ids=["sectors", "dense"])
SPINS = 1 - 2 * ((np.arange(1 << N)[:, None] >> np.arange(N)) & 1)
FINE = ar.MPS(halvings=3, truncation=1e-16)


def anneal(fields=None, duration=1.5):
    lattice = ar.lattices.square(2, 4)
    generator = np.random.default_rng(8)
    couplings, weights = generator.normal(size=len(lattice.edges)), generator.uniform(0.5, 1.5, N)
    schedule = ar.Schedule.polynomial([5, -10, 5], [0, 2, 3])
    return ar.Anneal(ar.Instance(lattice, couplings, fields, weights), schedule, duration)


@pytest.fixture(scope="module")
def solved():
    """Both states of the anneal with and without fields."""
    return {
        fields is None: (FINE.evolve(anneal(fields)), ar.StateVector(tolerance=1e-10).evolve(anneal(fields)))
        for fields in (None, FIELDS)
    }


@pytest.fixture
def pair(solved, fields):
    return solved[fields is None]


# ------------------------------------------------------------------------------------------------------- protocols
@BOTH
def test_it_is_a_state_and_a_source(pair):
    state, _ = pair
    assert isinstance(state, State)
    assert isinstance(state, Source)
    assert (state.at, state.anneal.n_sites) == (1.0, N)
    assert repr(state) == f"<MPSState of 8 spins at 1; largest bond {max(state.bond_dimensions)}>"
    moments = state.moments()
    assert moments is state.moments()
    assert np.isnan(moments.zz.num).all()
    assert not moments.zz.stat.any()


# ---------------------------------------------------------------------------------------------------------- values
@BOTH
def test_amplitudes_up_to_a_phase(pair):
    state, exact = pair
    overlap = np.vdot(exact.amplitudes(), state.amplitudes())
    assert abs(overlap) == pytest.approx(1.0, abs=1e-10)
    np.testing.assert_allclose(state.amplitudes(), overlap * exact.amplitudes(), atol=1e-6)
    np.testing.assert_allclose(state.probabilities(), exact.probabilities(), atol=1e-6)
    assert state.probabilities().sum() == pytest.approx(1.0, abs=1e-13)


@BOTH
def test_moments_are_those_of_its_own_amplitudes(pair):
    state, _ = pair
    moments, p = state.moments(), state.probabilities()
    np.testing.assert_allclose(moments.z.value, p @ SPINS, atol=1e-13)
    np.testing.assert_allclose(moments.zz.value, SPINS.T @ (SPINS * p[:, None]), atol=1e-13)


@BOTH
def test_log_probabilities_of_all_configurations(pair):
    state, exact = pair
    found, wanted = state.log_probability(SPINS), exact.log_probability(SPINS)
    np.testing.assert_allclose(np.exp(found), state.probabilities(), rtol=1e-10, atol=1e-16)
    np.testing.assert_allclose(np.exp(found), np.exp(wanted), atol=1e-6)
    likely = wanted > np.log(1e-3)
    assert likely.sum() > 20
    np.testing.assert_allclose(found[likely], wanted[likely], atol=1e-4)


@BOTH
def test_entropies_at_all_cuts_and_of_sets(pair):
    state, exact = pair
    order = state.product.order
    for b in range(1, N):
        expected = exact.entropy(order[:b])
        assert state.entropy(order[:b]) == pytest.approx(expected, abs=1e-6)
        assert state.ledger["entropies"][b - 1] == pytest.approx(expected, abs=1e-6)
        values = state.schmidt_values()[b - 1]
        assert len(values) == state.bond_dimensions[b - 1]
        assert np.sum(values**2) == pytest.approx(1.0, abs=1e-12)
    for sites in ([0], [1, 4], [2, 5, 7], [0, 3, 4, 6]):
        assert state.entropy(sites) == pytest.approx(exact.entropy(sites), abs=1e-6)


@BOTH
def test_energies_at_any_time(fields):
    case = anneal(fields)
    at = (0.0, 0.3, 0.8, 1.0)
    exact = ar.StateVector(tolerance=1e-10).states(case, at)
    for state, twin in zip(FINE.states(case, at), exact, strict=True):
        assert state.energy() == pytest.approx(twin.energy(), abs=1e-5)
    assert next(FINE.states(case, at)).energy() == pytest.approx(-5 * case.instance.transverse.sum(), abs=1e-12)


# ------------------------------------------------------------------------------------------------------------ times
@BOTH
def test_states_in_one_pass(apart, fields):
    case, at = anneal(fields), (0.0, 0.25, 0.6, 1.0)
    exact = ar.StateVector(tolerance=1e-10)
    for u, state in zip(at, FINE.states(case, at), strict=True):
        assert state.at == u
        assert apart(state, FINE.evolve(case, at=u)) < 2e-6
        assert apart(state, exact.evolve(case, at=u)) < 2e-6
    assert apart(FINE.evolve(case, at=0.6), exact.evolve(case, at=0.62)) > 1e-3


def test_states_outlive_the_pass():
    case, at = anneal(FIELDS), (0.25, 0.6, 1.0)
    before = [state.moments().zz.value.copy() for state in FINE.states(case, at)]
    states = list(FINE.states(case, at))
    for state, zz in zip(states, before, strict=True):
        np.testing.assert_array_equal(state.moments().zz.value, zz)
        assert state.probabilities().sum() == pytest.approx(1.0)


def test_the_first_stop_is_the_same_evolution():
    case = anneal()
    first, alone = next(FINE.states(case, (0.4, 1.0))), FINE.evolve(case, at=0.4)
    np.testing.assert_array_equal(first.amplitudes(), alone.amplitudes())
    assert first.ledger | {"seconds": 0} == alone.ledger | {"seconds": 0}


# ---------------------------------------------------------------------------------------------------------- samples
@BOTH
def test_samples_follow_the_exact_probabilities(pair):
    state, exact = pair
    shots = 20_000
    samples = state.sample(shots, seed=5)
    np.testing.assert_array_equal(samples.spins, state.sample(shots, seed=5).spins)
    assert (samples.spins != state.sample(shots, seed=6).spins).any()
    assert samples.manifest.instance == state.anneal.instance.identity
    assert samples.manifest.duration == state.anneal.duration
    index = ((1 - samples.spins.astype(int)) // 2) @ (1 << np.arange(N))
    counts = np.bincount(index, minlength=1 << N)

    def follow(p):
        # each count within a normal bound at 1e-4 over all 256, or a Poisson one where few are expected
        return (np.abs(counts - shots * p) <= 5.2 * np.sqrt(shots * p * (1 - p)) + 4).all()

    assert follow(exact.probabilities())
    # the wrong twins: all spins turned over or read backwards, as far as the state has no such symmetry
    assert not follow(exact.probabilities().reshape((2,) * N).transpose().ravel())
    assert follow(exact.probabilities()[::-1]) == (not state.anneal.instance.has_fields)


@BOTH
def test_samples_are_judged_right(pair):
    # log-probabilities of the samples average to minus the Shannon entropy
    state, _ = pair
    p = state.probabilities()
    mean = -np.sum(p * np.log(p))
    spread = np.sqrt(np.sum(p * np.log(p) ** 2) - mean**2)
    logs = state.log_probability(state.sample(4000, seed=3).spins)
    assert abs(-logs.mean() - mean) < 4 * spread / np.sqrt(4000)


# --------------------------------------------------------------------------------------------------------- site order
@BOTH
def test_the_order_along_the_chain_is_hidden(apart, fields):
    case = anneal(fields)
    generator = np.random.default_rng(2)
    states = [ar.MPS(halvings=3, truncation=1e-16, site_order=tuple(generator.permutation(N))).evolve(case)
              for _ in range(3)]  # fmt: skip
    for one, other in itertools.pairwise(states):
        assert one.ledger["site_order"] != other.ledger["site_order"]
        assert apart(one, other) < 1e-7
        np.testing.assert_allclose(one.log_probability(SPINS[:40]), other.log_probability(SPINS[:40]), atol=1e-4)
        assert one.entropy([1, 2]) == pytest.approx(other.entropy([1, 2]), abs=1e-6)


# -------------------------------------------------------------------------------------------------------- bad input
@pytest.mark.parametrize(
    ("call", "words"),
    [
        (lambda s: s.sample(0, 1), "shots"),
        (lambda s: s.sample(2.5, 1), "shots"),
        (lambda s: s.sample(10, -1), "seed"),
        (lambda s: s.log_probability(np.ones((2, 5))), "shape"),
        (lambda s: s.log_probability(np.zeros((2, N))), r"\+1 and -1"),
        (lambda s: s.entropy([0, 0]), "differ|twice"),
        (lambda s: s.entropy([9]), "sites"),
        (lambda s: s.entropy([-1]), "sites"),
    ],
)
def test_bad_input_is_named(solved, call, words):
    with pytest.raises(InputError, match=words):
        call(solved[True][0])


def test_amplitudes_of_many_spins_are_refused():
    case = ar.Instance(ar.lattices.chain(60), np.ones(59))
    anneal = ar.Anneal(case, ar.Schedule.linear((1.0, 0.0), (0.0, 1.0)), 0.1)
    state = ar.MPS(bond_dimension=2, site_order=tuple(range(60))).evolve(anneal)
    for ask in (state.amplitudes, state.probabilities):
        with pytest.raises(TooLarge, match=r"amplitudes.*sample\(shots, seed\)"):
            ask()
    assert state.moments().zz.value.shape == (60, 60)
