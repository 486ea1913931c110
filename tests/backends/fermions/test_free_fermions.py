"""The free-fermion back-end against the state vector: settings, plans, states, kicks and what is refused."""

import pickle
from contextlib import contextmanager
from dataclasses import FrozenInstanceError

import numpy as np
import pytest

import anneal_ref as ar
from anneal_ref.backends import memory
from anneal_ref.backends.contract import Backend, State
from anneal_ref.backends.fermions import free_fermions as room
from anneal_ref.backends.fermions.chains import Chain, chain_of
from anneal_ref.base.errors import InputError, NotSupported, TooLarge

KINDS = pytest.mark.parametrize("kind", ["chain", "ring", "parts"])
FINE = ar.FreeFermions(tolerance=1e-11)


def exact(anneal, **settings):
    # another scheme and step than the fermions use
    return ar.StateVector(scheme="blanes-moan-4", tolerance=1e-11).evolve(anneal, **settings)


def differences(state, other):
    ours, theirs = state.moments(), other.moments()
    return max(np.abs(ours.zz.value - theirs.zz.value).max(), np.abs(ours.x.value - theirs.x.value).max())


# ------------------------------------------------------------------------------------------------------- settings
def test_a_back_end_is_a_frozen_value():
    backend = ar.FreeFermions(tolerance=1e-6)
    assert pickle.loads(pickle.dumps(backend)) == backend
    assert hash(backend) == hash(ar.FreeFermions(tolerance=1e-6))
    assert "tolerance=1e-06" in repr(backend)
    assert isinstance(backend, Backend)
    with pytest.raises(FrozenInstanceError):
        backend.tolerance = 1e-3


@pytest.mark.parametrize(
    ("settings", "words"),
    [
        ({"tolerance": 0.0}, "at least"),
        ({"tolerance": float("nan")}, "tolerance"),
        ({"tolerance": 1e-13}, "1e-11"),
        ({"tolerance": 0.5}, "0.1"),
        ({"steps": 0}, "steps"),
        ({"scheme": "blanes-moan-5"}, "did you mean"),
        ({"halvings": -1}, "halvings"),
    ],
)
def test_settings_out_of_range(settings, words):
    with pytest.raises(InputError, match=words):
        ar.FreeFermions(**settings)


def test_finer_halves_every_step(chain_anneal):
    backend = ar.FreeFermions(tolerance=1e-4)
    assert backend.knobs == ("step",)
    coarse, fine = backend.evolve(chain_anneal("ring")), backend.finer("step").evolve(chain_anneal("ring"))
    assert fine.ledger["steps"] == 2 * coarse.ledger["steps"]
    with pytest.raises(InputError, match="step"):
        backend.finer("bond dimension")


def test_a_given_number_of_steps_and_scheme_is_used(chain_anneal):
    state = ar.FreeFermions(steps=7, scheme="strang").evolve(chain_anneal("chain"))
    assert state.ledger["steps"] == 7
    assert state.ledger["layers"] == 8
    assert (state.ledger["scheme"], state.ledger["order"]) == ("strang", 2)


# ---------------------------------------------------------------------------------------------------------- plans
@KINDS
def test_a_plan_tells_what_the_run_does(kind, chain_anneal):
    case = chain_anneal(kind)
    plan, state = ar.FreeFermions().plan(case), ar.FreeFermions().evolve(case)
    assert (plan.steps, plan.layers) == (state.ledger["steps"], state.ledger["layers"])
    assert "MiB" in str(plan)
    assert ("ring" in plan.details["lattice"]) == (kind == "ring") == state.ledger["ring"]


@pytest.mark.parametrize("duration", [0.01, 0.5, 4.0])
@pytest.mark.parametrize("kind", ["chain", "ring"])
def test_light_cones_are_planned_with_little_to_spare(kind, duration, chain_anneal):
    case = chain_anneal(kind, n=300, duration=duration)
    state = ar.FreeFermions(tolerance=1e-4).evolve(case)
    planned = room.cone_width(case, chain_of(case.instance))
    assert 0.5 * planned < state.ledger["cone"] <= planned


def test_too_large_is_said_before_anything_is_done(monkeypatch, chain_anneal):
    def begin(*_):
        pytest.fail("the work began")

    case = chain_anneal("chain", n=3000)
    monkeypatch.setattr(memory, "available_bytes", lambda: 8 << 20)
    monkeypatch.setattr(room, "Cones", begin)
    monkeypatch.setattr(memory, "_ALWAYS_THERE", 0)
    for call in (ar.FreeFermions().evolve, ar.FreeFermions().plan):
        with pytest.raises(TooLarge, match="free fermions on 3000 spins") as caught:
            call(case)
        assert caught.value.needed_bytes > 8 << 20


def test_a_table_of_all_pairs_that_does_not_fit_is_refused_and_the_near_ones_are_there(monkeypatch, chain_anneal):
    state = ar.FreeFermions(tolerance=1e-3).evolve(chain_anneal("chain", n=600, duration=0.1))
    monkeypatch.setattr(memory, "available_bytes", lambda: 17 << 20)
    with pytest.raises(TooLarge, match="600 spins") as caught:
        state.moments()
    assert caught.value.alternatives == ("correlations(reach)",)
    assert len(state.correlations(3)[1]) == 599 + 598 + 597


@pytest.mark.parametrize("duration", [1e9, 1e300])
def test_endless_anneals_are_refused_before_their_steps_are_listed(duration, chain_anneal):
    with pytest.raises(TooLarge, match="time steps needs .* a shorter duration"):
        ar.FreeFermions().plan(chain_anneal("chain", duration=duration))


# -------------------------------------------------------------------------------------------------------- moments
@KINDS
@pytest.mark.parametrize("schedule", ["plus", "ground", "negative"])
def test_moments_and_energy_are_those_of_the_state_vector(kind, schedule, chain_anneal):
    for seed in (1, 2):
        case = chain_anneal(kind, n=12, schedule=schedule, seed=seed)
        state, other = FINE.evolve(case), exact(case)
        assert isinstance(state, State)
        assert differences(state, other) < 1e-9
        assert state.energy() == pytest.approx(other.energy(), abs=1e-8)
        assert not state.moments().z.value.any()
        assert np.isnan(state.moments().zz.num).all()
        assert not state.moments().zz.stat.any()
        assert state.ledger["norm_drift"] < 1e-12


@pytest.mark.parametrize("kind", ["chain", "ring"])
@pytest.mark.parametrize("duration", [0.01, 0.3, 9.0])
def test_short_and_long_anneals(kind, duration, chain_anneal):
    for n in (3, 7, 11):
        case = chain_anneal(kind, n=n, duration=duration)
        assert differences(FINE.evolve(case), exact(case)) < 1e-9


def test_single_spins_and_pairs():
    for edges in ([], [(0, 1)], [(0, 2)]):
        n = 1 + 2 * len(edges)
        instance = ar.Instance(ar.lattices.from_edges(n, edges), [0.7] * len(edges), transverse=np.full(n, 1.3))
        for start in ("plus", "ground"):
            case = ar.Anneal(instance, ar.Schedule.linear((3.0, 0.0), (0.0, 2.0)), 2.0, start=start)
            state = FINE.evolve(case)
            assert differences(state, exact(case)) < 1e-9
            np.testing.assert_allclose(state.probabilities(), exact(case).probabilities(), atol=1e-10)


def test_waveforms_and_tables(chain_anneal):
    instance = chain_anneal("ring").instance
    s = np.linspace(0, 1, 9)
    schedule = ar.Schedule.from_table(s, (1 - s) ** 2, s * (0.3 + 0.7 * s), unit="GHz", interpolation="linear")
    case = ar.Anneal(instance, schedule, 1.5, waveform=ar.Waveform([0, 0.3, 0.6, 1], [0, 0.5, 0.5, 1]))
    assert differences(FINE.evolve(case), exact(case)) < 1e-9


def misled(monkeypatch, mistake):
    """Make the back-end see another chain."""

    def seen(instance):
        chain = chain_of(instance)
        couplings, weights = chain.couplings.copy(), chain.weights
        if mistake == "periodic fermions":
            # the sign of c_2N against c_0 and that of the last coupling are one
            couplings[-1] *= -1
        elif mistake == "sign of J":
            couplings = -couplings
        elif mistake == "couplings shifted":
            couplings = np.roll(couplings, 1)
        elif mistake == "weights ignored":
            weights = np.ones_like(weights)
        else:
            couplings = couplings / 2
        return Chain(chain.order, couplings, weights, chain.ring)

    monkeypatch.setattr(room, "chain_of", seen)


@pytest.mark.parametrize(
    "mistake", ["periodic fermions", "sign of J", "couplings shifted", "weights ignored", "a missing factor 2"]
)
def test_a_wrong_twin_fails(mistake, chain_anneal, monkeypatch):
    case = chain_anneal("ring", n=6)
    other = exact(case)
    misled(monkeypatch, mistake)
    assert differences(FINE.evolve(case), other) > 1e-3


def test_near_correlations_are_those_of_the_moments(chain_anneal):
    for kind in ("chain", "ring", "parts"):
        for n in (9, 10):
            state = ar.FreeFermions(tolerance=1e-4).evolve(chain_anneal(kind, n=n))
            zz = state.moments().zz.value
            pairs, values = state.correlations(n)
            np.testing.assert_allclose(zz[pairs[:, 0], pairs[:, 1]], values, atol=1e-13)
            seen = np.eye(n, dtype=int)
            np.add.at(seen, (pairs[:, 0], pairs[:, 1]), 1)
            np.add.at(seen, (pairs[:, 1], pairs[:, 0]), 1)
            assert seen.max() == 1
            assert not zz[seen == 0].any()
            if kind != "parts":
                assert seen.min() == 1
                assert len(state.correlations(2)[1]) == (2 * n - 3 if kind == "chain" else 2 * n)


def test_a_long_chain_is_locally_a_short_one(chain_anneal):
    # information has not come from the cut: <ZZ> in the middle of a short piece are those of the long chain
    long = chain_anneal("chain", n=400, duration=0.4)
    lattice = ar.lattices.chain(14)
    instance = ar.Instance(lattice, long.instance.couplings[200:213], transverse=long.instance.transverse[200:214])
    short = exact(ar.Anneal(instance, long.schedule, long.duration)).moments()
    moments = FINE.evolve(long).moments()
    np.testing.assert_allclose(moments.zz.value[205:209, 205:209], short.zz.value[5:9, 5:9], atol=2e-9)
    far = np.abs(np.arange(400)[:, None] - np.arange(400)) > 40
    assert not moments.zz.value[far].any()


def test_the_order_of_the_sites_does_not_matter(chain_anneal):
    order = np.random.default_rng(4).permutation(60)
    for kind in ("chain", "ring"):
        case = chain_anneal(kind, n=60)
        moved = ar.Anneal(case.instance.relabelled(order), case.schedule, case.duration)
        one, other = (ar.FreeFermions().evolve(each).moments() for each in (case, moved))
        np.testing.assert_allclose(other.zz.value, one.zz.value[np.ix_(order, order)], atol=1e-12)
        np.testing.assert_allclose(other.x.value, one.x.value[order], atol=1e-12)


def test_convergence_has_the_order_of_the_scheme(chain_anneal):
    for kind in ("chain", "ring"):
        case = chain_anneal(kind, n=24)
        fine = ar.FreeFermions(tolerance=1e-11, halvings=1).evolve(case).moments().zz.value
        for scheme, steps in (("strang", 60), ("blanes-moan-4", 24), ("blanes-moan-6", 24)):
            backend = ar.FreeFermions(scheme=scheme, steps=steps)
            errors = []
            for _ in range(3):
                state = backend.evolve(case)
                errors.append(np.abs(state.moments().zz.value - fine).max())
                backend = backend.finer("step")
            slopes = np.diff(-np.log2(errors))
            assert slopes[-1] == pytest.approx(state.ledger["order"], abs=0.35)


def test_the_step_rule_meets_its_tolerance_without_waste(chain_anneal):
    ratios = []
    for kind in ("chain", "ring"):
        for n, schedule, duration in ((10, "plus", 0.3), (150, "plus", 4.0), (60, "negative", 12.0)):
            case = chain_anneal(kind, n=n, schedule=schedule, duration=duration)
            truth = ar.FreeFermions(tolerance=1e-11, halvings=1).evolve(case).moments().zz.value
            for tolerance in (1e-3, 1e-4, 1e-6, 1e-8):
                found = ar.FreeFermions(tolerance=tolerance).evolve(case).moments().zz.value
                ratios.append(np.abs(found - truth).max() / tolerance)
    assert max(ratios) < 1
    assert np.median(ratios) > 0.002


# --------------------------------------------------------------------------------------------------------- states
@KINDS
def test_states_in_one_pass_are_the_states_of_single_runs(kind, chain_anneal):
    case, at = chain_anneal(kind), (0.0, 0.25, 0.6, 1.0)
    states = list(FINE.states(case, at))
    for u, state in zip(at, states, strict=True):
        assert state.at == u
        assert differences(state, exact(case, at=u)) < 1e-9
    assert [state.ledger["steps"] for state in states] == sorted(state.ledger["steps"] for state in states)


@KINDS
def test_kicks_are_z_at_their_times(kind, chain_anneal):
    case, kicks = chain_anneal(kind), [(0.2, 3), (0.4, 7), (0.4, 0), (0.7, 3)]
    state, other = FINE.evolve(case, kicks=kicks), exact(case, kicks=kicks)
    assert state.ledger["kicks"] == 4
    assert differences(state, other) < 1e-9
    np.testing.assert_allclose(state.probabilities(), other.probabilities(), atol=1e-10)
    assert state.energy() == pytest.approx(other.energy(), abs=1e-8)
    # one kick makes the parity of a ring odd
    assert differences(FINE.evolve(case, kicks=kicks[:1]), exact(case, kicks=kicks[:1])) < 1e-9
    # the comparison sees a kick that comes too late
    assert differences(FINE.evolve(case, kicks=[(0.25, 3), *kicks[1:]]), other) > 1e-3
    # Z at the very end changes no probability; at the very start it turns |+> into |->
    last = FINE.evolve(case, kicks=[(1.0, 3)]).moments()
    plain = FINE.evolve(case).moments()
    np.testing.assert_allclose(last.zz.value, plain.zz.value, atol=1e-12)
    x = FINE.evolve(case, at=0.0, kicks=[(0.0, 3)]).moments().x.value
    np.testing.assert_allclose(x, 1 - 2 * (np.arange(10) == 3), atol=1e-15)


def test_progress_counts_the_layers(chain_anneal):
    seen = []

    class Watching:
        threads, checkpoint = 1, None

        @contextmanager
        def track(self, total, label):
            seen.append((total, label))
            yield self

        def update(self, n=1, note=""):
            seen.append(n)

    state = ar.FreeFermions(tolerance=1e-4).evolve(chain_anneal("chain"), run=Watching())
    assert seen[0] == (state.ledger["layers"], "10 spins")
    assert sum(seen[1:]) == seen[0][0]


def test_threads_change_no_bit(chain_anneal):
    case = chain_anneal("ring", n=80)
    one, two = (
        ar.FreeFermions().evolve(case, run=ar.Run(threads=threads, progress=False)).moments() for threads in (1, 2)
    )
    np.testing.assert_array_equal(one.zz.value, two.zz.value)
    np.testing.assert_array_equal(one.x.value, two.x.value)


def test_a_reference_measures_the_error(chain_anneal):
    for kind in ("chain", "ring", "parts"):
        case = chain_anneal(kind, n=14)
        truth = ar.reference(case, tolerance=1e-6, backend=ar.FreeFermions(tolerance=1e-5), samples=100)
        assert truth.outcome == "converged"
        moments, other = truth.moments(), exact(case).moments()
        errors = np.abs(moments.zz.value - other.zz.value)
        assert np.mean(errors <= moments.zz.num + 1e-11) > 0.95
        assert errors.max() < 1e-6
        assert truth.stored_samples.n_shots == 100
        np.testing.assert_allclose(truth.probabilities(), exact(case).probabilities(), atol=1e-8)


# ------------------------------------------------------------------------------------------------------- bad input
@pytest.mark.parametrize(
    ("call", "words"),
    [
        (lambda b, a: b.evolve("anneal"), "anneal must be an Anneal"),
        (lambda b, a: b.plan(None), "anneal must be an Anneal"),
        (lambda b, a: b.states(3, (0.5,)), "anneal must be an Anneal"),
        (lambda b, a: b.evolve(a, at=1.5), "at must be"),
        (lambda b, a: b.states(a, 0.5), "sequence"),
        (lambda b, a: b.states(a, (0.5, 0.5)), "ascend"),
        (lambda b, a: b.evolve(a, kicks=[(0.5, 10)]), "site"),
        (lambda b, a: b.evolve(a, at=0.5, kicks=[(0.6, 1)]), "0.5"),
        (lambda b, a: b.evolve(a).entropy([0, 0]), "differ"),
        (lambda b, a: b.evolve(a).entropy([10]), "sites"),
        (lambda b, a: b.evolve(a).sample(0, 1), "shots"),
        (lambda b, a: b.evolve(a).correlations(0), "reach"),
        (lambda b, a: b.evolve(a).log_probability(np.ones((2, 5))), "shape"),
        (lambda b, a: b.evolve(a).log_probability(np.zeros((2, 10))), r"\+1 and -1"),
    ],
)
def test_bad_input_is_named(call, words, chain_anneal):
    with pytest.raises(InputError, match=words):
        call(ar.FreeFermions(tolerance=1e-3), chain_anneal("chain"))


def test_fields_and_other_lattices_are_refused():
    schedule = ar.Schedule.linear((3.0, 0.0), (0.0, 2.0))
    square = ar.lattices.square(2, 3)
    for instance in (ar.Instance(square, np.ones(7)), ar.Instance(ar.lattices.chain(3), [1, 1], [0, 0, 0.1])):
        for call in (ar.FreeFermions().plan, ar.FreeFermions().evolve):
            with pytest.raises(NotSupported, match=r"StateVector\(\) or MPS\("):
                call(ar.Anneal(instance, schedule, 1.0))
