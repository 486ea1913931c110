"""The state-vector back-end: settings, plans, states, kicks and what is refused."""

import pickle
from contextlib import contextmanager
from dataclasses import FrozenInstanceError

import numpy as np
import pytest
from scipy.integrate import solve_ivp
from scipy.sparse import csr_matrix

import anneal_ref as ar
from anneal_ref.backends import memory
from anneal_ref.backends.contract import Backend, State
from anneal_ref.base.errors import InputError, NotConverged, NotSupported, TooLarge

SCHEDULE = ar.Schedule.polynomial([6, -12, 6], [0, 1, 2])
FIELDS = [0.3, -0.2, 0.0, 0.9, 0.1, -0.6]


def small(fields=None, duration=1.3, transverse=None, start="plus", schedule=SCHEDULE):
    lattice = ar.lattices.square(2, 3)
    couplings = np.random.default_rng(8).normal(size=len(lattice.edges))
    return ar.Anneal(ar.Instance(lattice, couplings, fields, transverse), schedule, duration, start=start)


BOTH = pytest.mark.parametrize("fields", [None, FIELDS], ids=["half", "whole"])


def configurations(n):
    return 1 - 2 * ((np.arange(1 << n)[:, None] >> np.arange(n)) & 1)


# ------------------------------------------------------------------------------------------------------- settings
def test_a_back_end_is_a_frozen_value():
    backend = ar.StateVector(tolerance=1e-6)
    assert pickle.loads(pickle.dumps(backend)) == backend
    assert hash(backend) == hash(ar.StateVector(tolerance=1e-6))
    assert "tolerance=1e-06" in repr(backend)
    assert isinstance(backend, Backend)
    with pytest.raises(FrozenInstanceError):
        backend.tolerance = 1e-3


@pytest.mark.parametrize(
    ("settings", "words"),
    [
        ({"tolerance": 0.0}, "at least"),
        ({"tolerance": -1e-3}, "tolerance"),
        ({"tolerance": float("nan")}, "tolerance"),
        ({"tolerance": 1e-13}, "1e-11"),
        ({"tolerance": 0.5}, "0.1"),
        ({"precision": "singel"}, "did you mean 'single'"),
        ({"precision": "single"}, "use precision='double'"),
        ({"steps": 0}, "steps"),
        ({"scheme": "blanes-moan-5"}, "did you mean"),
        ({"halvings": -1}, "halvings"),
    ],
)
def test_settings_out_of_range(settings, words):
    with pytest.raises(InputError, match=words):
        ar.StateVector(**settings)


def test_finer_halves_every_step():
    backend = ar.StateVector(tolerance=1e-4)
    assert backend.knobs == ("step",)
    coarse, fine = backend.evolve(small()), backend.finer("step").evolve(small())
    assert fine.ledger["steps"] == 2 * coarse.ledger["steps"]
    with pytest.raises(InputError, match="step"):
        backend.finer("bond dimension")


def test_a_given_number_of_steps_and_scheme_is_used():
    state = ar.StateVector(steps=7, scheme="strang").evolve(small())
    assert state.ledger["steps"] == 7
    assert state.ledger["layers"] == 8
    assert state.ledger["scheme"] == "strang"


# ---------------------------------------------------------------------------------------------------------- plans
def test_a_plan_tells_what_the_run_does():
    for case in (small(), small(FIELDS)):
        plan, state = ar.StateVector().plan(case), ar.StateVector().evolve(case)
        assert (plan.steps, plan.layers) == (state.ledger["steps"], state.ledger["layers"])
        assert plan.details["symmetric half"] == (not case.instance.has_fields)
        assert "MiB" in str(plan)


def chain(n, fields=None):
    return ar.Anneal(ar.Instance(ar.lattices.chain(n), np.ones(n - 1), fields), SCHEDULE, 1.0)


def test_thirty_and_more_spins_are_planned_honestly(monkeypatch):
    monkeypatch.setattr(memory, "available_bytes", lambda: 1 << 40)
    plan = ar.StateVector().plan(chain(30))
    assert 16 << 29 <= plan.bytes < 1.25 * (16 << 29) + (250 << 20)
    single = ar.StateVector(precision="single", tolerance=1e-4).plan(chain(30))
    assert 8 << 29 <= single.bytes < 0.7 * plan.bytes
    monkeypatch.setattr(memory, "available_bytes", lambda: 15 << 30)
    with pytest.raises(TooLarge, match="GiB") as caught:
        ar.StateVector().plan(chain(31))
    assert caught.value.needed_bytes >= 16 << 30
    assert caught.value.available_bytes == 15 << 30
    assert any("single" in alternative for alternative in caught.value.alternatives)


def test_too_large_is_said_before_anything_is_allocated(monkeypatch):
    def allocate(*_):
        pytest.fail("the state was allocated")

    monkeypatch.setattr(memory, "available_bytes", lambda: 1 << 20)
    monkeypatch.setattr(ar.StateVector, "_start", allocate)
    with pytest.raises(TooLarge):
        ar.StateVector().evolve(chain(22))


# --------------------------------------------------------------------------------------------------------- states
@BOTH
def test_moments_come_from_the_probabilities(fields):
    state = ar.StateVector(tolerance=1e-6).evolve(small(fields))
    assert isinstance(state, State)
    spins, p = configurations(6), state.probabilities()
    moments = state.moments()
    assert p.sum() == pytest.approx(1.0, abs=1e-14)
    np.testing.assert_allclose(moments.z.value, p @ spins, atol=1e-13)
    np.testing.assert_allclose(moments.zz.value, spins.T @ (spins * p[:, None]), atol=1e-13)
    np.testing.assert_allclose(np.exp(state.log_probability(spins)), p, atol=1e-14)
    np.testing.assert_allclose(np.abs(state.amplitudes()) ** 2, p, atol=1e-12)
    assert np.isnan(moments.zz.num).all()
    assert not moments.zz.stat.any()


def outside_state(case, psi, start, end):
    """The Schrodinger equation of six spins from u = start to u = end, by SciPy's DOP853."""
    energies = case.instance.energies(configurations(6))
    rows = np.tile(np.arange(64), 6)
    columns = np.concatenate([np.arange(64) ^ (1 << i) for i in range(6)])
    flip = csr_matrix((np.repeat(case.instance.transverse, 64), (rows, columns)))
    return solve_ivp(
        lambda t, y: 1j * (case.transverse(t) * (flip @ y) - case.problem(t) * energies * y),
        (start * case.duration, end * case.duration), psi, method="DOP853", rtol=1e-12, atol=1e-13,
    ).y[:, -1]  # fmt: skip


@BOTH
def test_amplitudes_follow_the_schroedinger_equation(fields):
    case = small(fields, transverse=[1, 0.5, 1.5, 1, 1, 0.8])
    energies = case.instance.energies(configurations(6))
    psi = outside_state(case, np.full(64, 1 / 8, complex), 0.0, 1.0)
    ours = ar.StateVector(tolerance=1e-10).evolve(case)
    np.testing.assert_allclose(ours.amplitudes(), psi, atol=1e-8)
    assert ours.energy() == pytest.approx(float(case.problem(case.duration)) * np.abs(psi) ** 2 @ energies, abs=1e-8)


@BOTH
def test_states_in_one_pass_are_the_states_of_single_runs(fields):
    backend, case = ar.StateVector(tolerance=1e-9), small(fields)
    at = (0.0, 0.25, 0.6, 1.0)
    for u, state in zip(at, backend.states(case, at), strict=True):
        alone = backend.evolve(case, at=u)
        assert state.at == alone.at == u
        np.testing.assert_allclose(state.amplitudes(), alone.amplitudes(), atol=3e-9)
    assert alone.ledger["steps"] <= state.ledger["steps"] <= alone.ledger["steps"] + 2


def test_a_state_that_has_moved_on_says_so():
    states = ar.StateVector().states(small(), (0.5, 1.0))
    first = next(states)
    moments = first.moments()
    next(states)
    assert first.moments() is moments
    with pytest.raises(InputError, match=r"evolve\(anneal, at=0.5\)"):
        first.probabilities()


@BOTH
def test_kicks_are_z_at_their_times(fields):
    case, backend = small(fields), ar.StateVector(tolerance=1e-10)
    spins = configurations(6)
    psi = np.full(64, 1 / 8, complex)
    for start, end, kicked in ((0.0, 0.4, [2]), (0.4, 0.8, [5, 0]), (0.8, 1.0, [])):
        psi = outside_state(case, psi, start, end) * spins[:, kicked].prod(axis=1)
    state = backend.evolve(case, kicks=[(0.4, 2), (0.8, 5), (0.8, 0)])
    assert state.ledger["kicks"] == 3
    np.testing.assert_allclose(state.amplitudes(), psi, atol=3e-9)
    # the comparison sees a kick that comes too late
    late = backend.evolve(case, kicks=[(0.45, 2), (0.8, 5), (0.8, 0)])
    assert np.abs(late.amplitudes() - psi).max() > 1e-3
    # Z at the very end changes no probability; at the very start it turns |+> into |->
    plain = backend.evolve(case).probabilities()
    np.testing.assert_allclose(backend.evolve(case, kicks=[(1.0, 3)]).probabilities(), plain, atol=1e-9)
    x = backend.evolve(case, at=0.0, kicks=[(0.0, 3)]).moments().x.value
    np.testing.assert_allclose(x, [1, 1, 1, -1, 1, 1], atol=1e-12)


def test_kicks_that_differ_by_rounding_come_at_one_time():
    backend, case = ar.StateVector(tolerance=1e-8), small(FIELDS)
    assert 0.1 + 0.2 != 0.3
    one = backend.evolve(case, kicks=[(0.3, 1), (0.3, 4)])
    other = backend.evolve(case, kicks=[(0.3, 1), (0.1 + 0.2, 4)])
    assert one.ledger["steps"] == other.ledger["steps"]
    np.testing.assert_allclose(one.amplitudes(), other.amplitudes(), atol=1e-12)


def test_threads_change_no_bit():
    instance = ar.draw_instance(ar.lattices.square(3, 6), ar.disorder.gaussian(), seed=2)
    case = ar.Anneal(instance, SCHEDULE, 0.2)
    backend = ar.StateVector(steps=2)
    one, two = (backend.evolve(case, run=ar.Run(threads=threads, progress=False)).moments() for threads in (1, 2))
    assert (one.zz.value == two.zz.value).all()
    assert (one.x.value == two.x.value).all()


def test_progress_counts_the_layers():
    seen = []

    class Watching:
        threads, checkpoint = 1, None

        @contextmanager
        def track(self, total, label):
            seen.append((total, label))
            yield self

        def update(self, n=1, note=""):
            seen.append(n)

    state = ar.StateVector(tolerance=1e-4).evolve(small(), run=Watching())
    assert seen[0] == (state.ledger["layers"] - 1, "6 spins")
    assert sum(seen[1:]) == seen[0][0]


def test_samples_are_reproducible_and_follow_the_probabilities():
    state = ar.StateVector(tolerance=1e-6).evolve(small(FIELDS))
    samples = state.sample(20_000, seed=5)
    assert samples.n_shots == 20_000
    np.testing.assert_array_equal(samples.spins, state.sample(20_000, seed=5).spins)
    assert samples.manifest.instance == state.anneal.instance.identity
    index = ((1 - samples.spins.astype(int)) // 2) @ (1 << np.arange(6))
    counts, p = np.bincount(index, minlength=64), state.probabilities()
    # each count within a normal bound at 1e-4 over all 64
    assert (np.abs(counts - 20_000 * p) <= 4.9 * np.sqrt(20_000 * p * (1 - p)) + 2).all()


def test_ground_probability_by_energy_configuration_or_search():
    case = small(duration=3.0)
    state = ar.StateVector(tolerance=1e-6).evolve(case)
    spins = configurations(6)
    energies = case.instance.energies(spins)
    ground = spins[np.argmin(energies)]
    expected = state.probabilities()[energies < energies.min() + 1e-9].sum()
    for given in (None, energies.min(), ground, -ground):
        assert state.ground_probability(given) == pytest.approx(expected, abs=1e-14)
    assert state.ground_probability(energies.max()) == pytest.approx(1.0)


@BOTH
def test_entropy_of_any_bipartition(fields):
    state = ar.StateVector(tolerance=1e-6).evolve(small(fields))
    psi = state.amplitudes().reshape((2,) * 6).transpose(range(5, -1, -1))  # axis k is site k
    for sites in ([0], [2, 4], [5, 0, 3], [1, 2, 3, 4]):
        rest = [site for site in range(6) if site not in sites]
        values = np.linalg.svd(psi.transpose(*sites, *rest).reshape(1 << len(sites), -1), compute_uv=False) ** 2
        values = values[values > 1e-300]
        assert state.entropy(sites) == pytest.approx(-np.sum(values * np.log(values)), abs=1e-12)
        assert state.entropy(sites) == pytest.approx(state.entropy(rest), abs=1e-12)
    assert state.entropy([]) == state.entropy(range(6)) == 0.0


def test_entropy_of_bell_pairs():
    # two critical limits by hand: a product state has none, an even pair ground state of the ferromagnet ln 2
    pair = ar.Instance(ar.lattices.chain(2), [-1.0])
    start = ar.Anneal(pair, ar.Schedule.linear((0.0, 0.0), (1.0, 1.0)), 1.0, start="ground")
    assert ar.StateVector().evolve(start).entropy([0]) == pytest.approx(np.log(2), abs=1e-12)
    assert ar.StateVector().evolve(small(), at=0.0).entropy([0, 3]) == pytest.approx(0.0, abs=1e-12)


def test_the_norm_and_the_parity_stay():
    state = ar.StateVector(tolerance=1e-10).evolve(small(duration=20.0))
    assert abs(state.ledger["norm_drift"]) < 1e-12
    np.testing.assert_allclose(state.moments().z.value, 0.0, atol=1e-13)


def test_single_precision_is_as_good_as_it_says():
    lattice = ar.lattices.square(3, 4, periodic=(False, True))
    instance = ar.draw_instance(lattice, ar.disorder.plus_minus(), seed=1)
    anneal = ar.Anneal(instance, ar.Schedule.polynomial([20, -60, 60, -20], [0, 0.5, 9.5]), 20.0)
    exact = ar.StateVector(tolerance=1e-9).evolve(anneal).moments().zz.value
    single = ar.StateVector(tolerance=1e-4, precision="single").evolve(anneal)
    assert np.abs(single.moments().zz.value - exact).max() < 1e-4


def test_single_precision_is_refused_where_it_rounds_too_much():
    backend = ar.StateVector(tolerance=1e-5, precision="single")
    assert backend.plan(small(duration=1.0)).layers > 0
    with pytest.raises(NotSupported, match="round") as caught:
        backend.plan(small(duration=3000.0))
    assert any("double" in alternative for alternative in caught.value.alternatives)


# --------------------------------------------------------------------------------------------------- ground starts
@BOTH
def test_ground_starts_are_eigenvectors(fields):
    weights = np.array([1, 0.5, 1.5, 1, 1, 0.8])
    schedule = ar.Schedule.linear((1.0, 0.0), (0.7, 1.0))
    case = small(fields, transverse=weights, start="ground", schedule=schedule)
    spins = configurations(6)
    matrix = np.diag(0.7 * case.instance.energies(spins))
    for i, weight in enumerate(weights):
        matrix[np.arange(64), np.arange(64) ^ (1 << i)] -= weight
    values, vectors = np.linalg.eigh(matrix)
    state = ar.StateVector().evolve(case, at=0.0)
    assert abs(vectors[:, 0] @ state.amplitudes()) == pytest.approx(1.0, abs=1e-12)
    assert state.ledger["ground_energy"] == pytest.approx(values[0], abs=1e-12)
    assert state.energy() == pytest.approx(values[0], abs=1e-12)
    assert state.ledger["ground_residual"] < 1e-12


def test_a_ground_start_without_transverse_field_is_classical_or_refused():
    still = ar.Schedule.linear((0.0, 1.0), (1.0, 1.0))
    case = small(FIELDS, start="ground", schedule=still)
    state = ar.StateVector().evolve(case, at=0.0)
    assert state.ground_probability() == pytest.approx(1.0)
    # a frustrated triangle has six ground states
    triangle = ar.Instance(ar.lattices.chain(3, periodic=True), [1.0, 1.0, 1.0])
    with pytest.raises(NotSupported, match="6-fold"):
        ar.StateVector().evolve(ar.Anneal(triangle, still, 1.0, start="ground"))


def test_an_undecided_ground_start_is_refused():
    ordered = ar.Schedule.linear((1e-9, 1.0), (1.0, 1.0))
    case = small([1e-12, 0, 0, 0, 0, 0], start="ground", schedule=ordered)
    with pytest.raises(NotConverged, match=r"gap.*nearly degenerate.*global flip.*use start='plus'") as caught:
        ar.StateVector().evolve(case)
    assert caught.value.result.angle > 1e-10


# ------------------------------------------------------------------------------------------------------- bad input
@pytest.mark.parametrize(
    ("call", "words"),
    [
        (lambda b: b.evolve("anneal"), "anneal must be an Anneal"),
        (lambda b: b.plan(None), "anneal must be an Anneal"),
        (lambda b: b.states(3, (0.5,)), "anneal must be an Anneal"),
        (lambda b: b.evolve(small(), at=1.5), "at must be"),
        (lambda b: b.evolve(small(), at=float("nan")), "at must be"),
        (lambda b: b.states(small(), 0.5), "sequence"),
        (lambda b: b.states(small(), ()), "at least one"),
        (lambda b: b.states(small(), (0.5, 0.5)), "ascend"),
        (lambda b: b.states(small(), (0.5, -0.1)), "at"),
        (lambda b: b.evolve(small(), kicks=[(0.5, 6)]), "site"),
        (lambda b: b.evolve(small(), kicks=[(0.5, 1), (0.4, 1)]), "ascend"),
        (lambda b: b.evolve(small(), kicks=[(1.5, 1)]), "time of kicks"),
        (lambda b: b.evolve(small(), at=0.5, kicks=[(0.6, 1)]), "0.5"),
        (lambda b: b.evolve(small(), kicks=[3]), "pair"),
        (lambda b: b.evolve(small()).entropy([0, 0]), "differ"),
        (lambda b: b.evolve(small()).entropy([9]), "sites"),
        (lambda b: b.evolve(small()).sample(0, 1), "shots"),
        (lambda b: b.evolve(small()).log_probability(np.ones((2, 5))), "shape"),
        (lambda b: b.evolve(small()).log_probability(np.zeros((2, 6))), r"\+1 and -1"),
        (lambda b: b.evolve(small()).ground_probability([1, 1]), "shape"),
    ],
)
def test_bad_input_is_named(call, words):
    with pytest.raises(InputError, match=words):
        call(ar.StateVector(tolerance=1e-3))


@pytest.mark.parametrize("duration", [1e9, 1e300])
def test_endless_anneals_are_refused_before_their_steps_are_listed(duration):
    instance = ar.draw_instance(ar.lattices.chain(4), ar.disorder.plus_minus(), seed=1)
    schedule = ar.Schedule.linear(transverse=(20.0, 0.0), problem=(0.0, 10.0))
    endless = ar.Anneal(instance, schedule, duration)
    with pytest.raises(TooLarge, match="time steps needs .* a shorter duration") as caught:
        ar.StateVector().plan(endless)
    assert caught.value.needed_bytes > caught.value.available_bytes
