"""The matrix-product-state back-end: settings, plans, ledgers, reproducibility, and what is refused."""

import pickle
from contextlib import contextmanager
from dataclasses import FrozenInstanceError

import numpy as np
import pytest

import anneal_ref as ar
from anneal_ref.backends import memory
from anneal_ref.backends.contract import Backend
from anneal_ref.base.errors import InputError, TooLarge

SCHEDULE = ar.Schedule.polynomial([5, -10, 5], [0, 2, 3])
FIELDS = [0.3, -0.2, 0.0, 0.9, 0.1, -0.6]
BOTH = pytest.mark.parametrize("fields", [None, FIELDS], ids=["sectors", "dense"])


def small(fields=None, duration=1.3):
    lattice = ar.lattices.square(2, 3)
    couplings = np.random.default_rng(8).normal(size=len(lattice.edges))
    return ar.Anneal(ar.Instance(lattice, couplings, fields), SCHEDULE, duration)


def wide(duration=1.0, seed=3):
    """Twelve spins: bonds of up to 64."""
    lattice = ar.lattices.square(3, 4, (False, True))
    return ar.Anneal(ar.draw_instance(lattice, ar.disorder.gaussian(), seed=seed), SCHEDULE, duration)


def infidelity(state, exact):
    return 1 - abs(np.vdot(state.amplitudes(), exact.amplitudes())) ** 2


# ------------------------------------------------------------------------------------------------------- settings
def test_a_back_end_is_a_frozen_value():
    backend = ar.MPS(bond_dimension=32, site_order=(2, 0, 1))
    assert pickle.loads(pickle.dumps(backend)) == backend
    assert hash(backend) == hash(ar.MPS(bond_dimension=32, site_order=[2, 0, 1]))
    assert backend != ar.MPS(bond_dimension=32)
    assert repr(backend).startswith("MPS(bond_dimension=32, truncation=")
    assert eval(repr(backend), {"MPS": ar.MPS}) == backend
    assert isinstance(backend, Backend)
    with pytest.raises(FrozenInstanceError):
        backend.bond_dimension = 64


def test_numbers_of_other_kinds_are_the_same_settings():
    twin = ar.MPS(bond_dimension=np.int64(32), truncation=np.float64(1e-9), step=1, site_order=np.array([1, 0]))
    assert twin == ar.MPS(bond_dimension=32, truncation=1e-9, step=1.0, site_order=(1, 0))
    assert hash(twin) == hash(ar.MPS(bond_dimension=32, truncation=1e-9, step=1.0, site_order=(1, 0)))
    assert isinstance(twin.site_order[0], int)


@pytest.mark.parametrize(
    ("settings", "words"),
    [
        ({"bond_dimension": 0}, "bond_dimension must be .*at least 1"),
        ({"bond_dimension": -4}, "bond_dimension"),
        ({"bond_dimension": 2.5}, "whole number of at least 1; got 2.5"),
        ({"bond_dimension": True}, "bond_dimension"),
        ({"bond_dimension": "64"}, "bond_dimension"),
        ({"truncation": -1e-12}, "truncation"),
        ({"truncation": 0.5}, "0.1"),
        ({"truncation": float("nan")}, "truncation"),
        ({"step": 0.0}, "step must be above 0"),
        ({"step": -1.0}, "step"),
        ({"step": 5.0}, "4"),
        ({"step": float("inf")}, "step"),
        ({"precision": "singel"}, "did you mean 'single'"),
        ({"precision": None}, "precision"),
        ({"halvings": -1}, "halvings"),
        ({"halvings": 21}, "20"),
        ({"site_order": (0, 1, 1)}, "every site from 0 to 2 once"),
        ({"site_order": (0, 2)}, "every site from 0 to 1 once"),
        ({"site_order": (1, 2)}, "site_order"),
        ({"site_order": (0, -1)}, r"site_order\[1\]"),
        ({"site_order": (0.5, 1)}, r"site_order\[0\]"),
    ],
)
def test_settings_out_of_range(settings, words):
    with pytest.raises(InputError, match=words):
        ar.MPS(**settings)


def test_knobs_are_refined_one_by_one():
    backend = ar.MPS(bond_dimension=8, precision="single")
    assert {"step", "bond_dimension"} <= set(backend.knobs)
    for knob in backend.knobs:
        finer = backend.finer(knob)
        changed = [name for name in backend.__slots__ if getattr(backend, name) != getattr(finer, name)]
        assert len(changed) == 1
    assert backend.finer("bond_dimension").bond_dimension == 16
    coarse, fine = backend.evolve(small()), backend.finer("step").evolve(small())
    assert fine.ledger["steps"] == 2 * coarse.ledger["steps"]
    with pytest.raises(InputError, match="did you mean 'bond_dimension'"):
        backend.finer("bond dimension")


def test_a_shorter_step_takes_more_steps():
    counts = [ar.MPS(step=step).evolve(small()).ledger["steps"] for step in (4.0, 2.0, 0.5)]
    assert counts[0] < counts[1] < counts[2]
    assert counts[2] >= 3 * counts[1]


# ---------------------------------------------------------------------------------------------------------- plans
@BOTH
def test_a_plan_tells_what_the_run_does(fields):
    for halvings in (0, 1):
        backend, case = ar.MPS(halvings=halvings), small(fields)
        plan, state = backend.plan(case), backend.evolve(case)
        assert (plan.steps, plan.layers) == (state.ledger["steps"], state.ledger["layers"])
        assert plan.details["symmetric"] == state.ledger["symmetric"] == (fields is None)
        assert max(state.bond_dimensions) <= plan.details["largest that could matter"] == 8
        assert plan.backend == "MPS"
        assert "MiB" in str(plan)


def test_plans_of_large_lattices():
    case = ar.draw_instance(ar.lattices.square(8, 8), ar.disorder.plus_minus(), seed=1)
    anneal = ar.Anneal(case, SCHEDULE, 5.0)
    backend = ar.MPS(bond_dimension=128, site_order=tuple(range(64)))
    plan, single = backend.plan(anneal), ar.MPS(128, precision="single", site_order=tuple(range(64))).plan(anneal)
    assert 100 << 20 < single.bytes < plan.bytes < 1 << 30
    assert 10 < single.seconds < plan.seconds < 10_000
    assert "largest 8" in plan.details["cut ranks"]


def test_too_large_is_said_before_anything_is_allocated(monkeypatch):
    def allocate(*_):
        pytest.fail("the state was allocated")

    monkeypatch.setattr(ar.MPS, "_start", allocate)
    case = ar.draw_instance(ar.lattices.complete(60), ar.disorder.gaussian(), seed=1)
    anneal = ar.Anneal(case, SCHEDULE, 1.0)
    backend = ar.MPS(bond_dimension=1 << 20, site_order=tuple(range(60)))
    for call in (backend.plan, backend.evolve):
        with pytest.raises(TooLarge, match=r"60 spins with bond dimension 1048576 needs .*TiB.* are free") as caught:
            call(anneal)
        assert caught.value.needed_bytes > caught.value.available_bytes
        assert caught.value.alternatives[0] == "MPS(bond_dimension=524288)"
        assert "precision='single'" in caught.value.alternatives
        assert pickle.loads(pickle.dumps(caught.value)).alternatives == caught.value.alternatives
    monkeypatch.setattr(memory, "available_bytes", lambda: 20 << 20)
    with pytest.raises(TooLarge, match=r"bond dimension 64 needs .* MPS\(bond_dimension=32\)"):
        ar.MPS(bond_dimension=64, site_order=tuple(range(60))).plan(anneal)
    # bonds of a few spins never get so wide
    assert ar.MPS(bond_dimension=1 << 20).plan(small()).bytes < 1 << 30


@pytest.mark.parametrize("duration", [1e9, 1e300])
def test_endless_anneals_are_refused_before_their_steps_are_listed(duration):
    with pytest.raises(TooLarge, match="time steps needs .* a shorter duration"):
        ar.MPS().plan(small(duration=duration))


# -------------------------------------------------------------------------------------------------------- bad input
@pytest.mark.parametrize(
    ("call", "words"),
    [
        (lambda b: b.evolve("anneal"), "anneal must be an Anneal"),
        (lambda b: b.plan(None), "anneal must be an Anneal"),
        (lambda b: b.states(3, (0.5,)), "anneal must be an Anneal"),
        (lambda b: b.evolve(small(), at=1.5), "at must be"),
        (lambda b: b.evolve(small(), at=-0.1), "at must be"),
        (lambda b: b.evolve(small(), at=float("nan")), "at must be"),
        (lambda b: b.states(small(), 0.5), "sequence"),
        (lambda b: b.states(small(), ()), "at least one"),
        (lambda b: b.states(small(), (0.5, 0.5)), "ascend"),
        (lambda b: b.evolve(small(), kicks=[(0.5, 6)]), "site"),
        (lambda b: b.evolve(small(), kicks=[(0.5, 1), (0.4, 1)]), "ascend"),
        (lambda b: b.evolve(small(), at=0.5, kicks=[(0.6, 1)]), "0.5"),
        (lambda b: b.evolve(small(), kicks=[3]), "pair"),
        (lambda _: ar.MPS(site_order=(1, 0, 2)).evolve(small()), "the 6 sites of the anneal; got 3"),
        (lambda _: ar.MPS(site_order=()).plan(small()), "the 6 sites of the anneal; got 0"),
        (lambda _: next(ar.MPS(site_order=range(7)).states(small(), (1.0,))), "the 6 sites"),
    ],
)
def test_bad_input_is_named(call, words):
    with pytest.raises(InputError, match=words):
        call(ar.MPS())


# ---------------------------------------------------------------------------------------------------------- ledgers
LEDGER = {
    "backend", "precision", "symmetric", "order", "steps", "layers", "two_site_steps", "kicks", "bond_dimension",
    "largest_bond", "truncation", "discarded_weight", "discarded_weights", "entropies", "site_order", "exponentials",
    "lanczos_vectors", "norm_drift", "work_identity", "parity", "seconds",
}  # fmt: skip


@BOTH
def test_the_ledger(fields):
    state = ar.MPS(bond_dimension=4).evolve(small(fields))
    ledger = state.ledger
    assert set(ledger) >= LEDGER
    assert ledger["largest_bond"] == max(state.bond_dimensions) == ledger["bond_dimension"] == 4
    assert len(ledger["discarded_weights"]) == len(ledger["entropies"]) == 5
    assert sum(ledger["discarded_weights"]) == pytest.approx(ledger["discarded_weight"], rel=1e-12)
    # only the middle can be too narrow
    assert ledger["discarded_weights"][2] > 1e-8
    assert ledger["discarded_weights"][0] == ledger["discarded_weights"][4] == 0.0
    assert sorted(ledger["site_order"]) == list(range(6))
    assert abs(ledger["norm_drift"]) < 1e-12
    assert 0 < ledger["two_site_steps"] <= ledger["steps"]
    assert ledger["lanczos_vectors"] >= 2 * ledger["exponentials"] > 0
    assert ledger["parity"] == ("even" if fields is None else "broken by fields")
    assert ledger["seconds"] > 0
    pickle.dumps(ledger)


@pytest.mark.parametrize("bond", [1, 2, 3, 5, 8, 12, 31])
def test_no_bond_exceeds_the_cap(bond):
    state = ar.MPS(bond_dimension=bond).evolve(wide(0.5))
    assert max(state.bond_dimensions) == state.ledger["largest_bond"] == bond
    assert abs(state.ledger["norm_drift"]) < 1e-11


def test_entropies_are_bounded_by_the_bonds():
    state = ar.MPS(bond_dimension=6).evolve(wide())
    for entropy, bond in zip(state.ledger["entropies"], state.bond_dimensions, strict=True):
        assert 0 <= entropy <= np.log(bond) + 1e-12


def test_discarded_weight_goes_with_the_fidelity():
    # an estimate of one minus the fidelity, no bound: what is projected away between two divisions is not in it
    case = wide()
    exact = ar.StateVector(tolerance=1e-9).evolve(case)
    ratios, before = [], 1.0
    for bond in (16, 24, 32, 48):
        state = ar.MPS(bond_dimension=bond, halvings=2).evolve(case)
        lost = infidelity(state, exact)
        assert lost < before
        ratios.append(lost / state.ledger["discarded_weight"])
        before = lost
    assert 0.3 < min(ratios) < max(ratios) < 100
    assert before < 1e-4


def test_looser_truncation_keeps_fewer_states():
    bonds, errors, exact = [], [], ar.StateVector(tolerance=1e-9).evolve(wide())
    for truncation in (0.0, 1e-8, 1e-4):
        state = ar.MPS(bond_dimension=64, truncation=truncation, halvings=1).evolve(wide())
        bonds.append(sum(state.bond_dimensions))
        errors.append(infidelity(state, exact))
    assert bonds[0] > bonds[1] > bonds[2]
    assert errors[0] < errors[1] < errors[2]


def test_bonds_shrink_when_entanglement_falls():
    # a ferromagnet in a field is most entangled midway
    case = ar.Instance(ar.lattices.square(3, 4), -np.ones(17), np.full(12, 0.5))
    anneal = ar.Anneal(case, ar.Schedule.polynomial([5, -10, 5], [0, 5]), 5.0)
    states = list(ar.MPS(truncation=1e-7).states(anneal, (0.2, 0.5, 1.0)))
    bonds = [sum(state.bond_dimensions) for state in states]
    assert bonds[0] < bonds[2] < bonds[1] - 5
    assert max(states[2].bond_dimensions) < states[2].ledger["largest_bond"]


# --------------------------------------------------------------------------------------------------- reproducibility
@BOTH
def test_repeated_runs_have_the_same_bits(fields):
    one, other = (ar.MPS(bond_dimension=5).evolve(small(fields)) for _ in range(2))
    np.testing.assert_array_equal(one.amplitudes(), other.amplitudes())
    assert one.ledger | {"seconds": 0} == other.ledger | {"seconds": 0}


@pytest.mark.slow
def test_threads_change_rounding_alone():
    case, backend = wide(0.1), ar.MPS(bond_dimension=64)
    one, two = (backend.evolve(case, run=ar.Run(threads=threads, progress=False)) for threads in (1, 2))
    np.testing.assert_allclose(one.amplitudes(), two.amplitudes(), atol=1e-11)


def test_progress_counts_the_steps():
    seen, notes = [], []

    class Watching:
        threads, checkpoint, every = 1, None, 600.0

        @contextmanager
        def track(self, total, label):
            seen.append((total, label))
            yield self

        def update(self, n=1, note=""):
            seen.append(n)
            notes.append(note)

    state = ar.MPS(bond_dimension=4).evolve(small(), run=Watching())
    assert seen[0] == (state.ledger["steps"], "6 spins")
    assert sum(seen[1:]) == seen[0][0]
    assert notes[-1].startswith("s 1.00, bond 4, discarded ")


# --------------------------------------------------------------------------------------------------------- precision
@BOTH
def test_single_precision_has_a_floor_of_its_own(apart, fields):
    case = small(fields, duration=5.0)
    double, single = (ar.MPS(precision=precision).evolve(case) for precision in ("double", "single"))
    assert {tensor.dtype for tensor in single.product.tensors} == {np.dtype(np.complex64)}
    assert {tensor.dtype for tensor in double.product.tensors} == {np.dtype(np.complex128)}
    difference = apart(double, single)
    assert 1e-9 < difference < 3e-5
    assert abs(single.ledger["norm_drift"]) < 1e-4
    # what is told of it is double
    assert single.moments().zz.value.dtype == single.amplitudes().real.dtype == np.float64


def test_discarded_weights_of_single_precision_are_no_rounding_noise():
    case = wide(0.5)
    double, single = (
        ar.MPS(bond_dimension=40, precision=precision, truncation=1e-10).evolve(case)
        for precision in ("double", "single")
    )
    weights = [state.ledger["discarded_weight"] for state in (double, single)]
    assert 1e-12 < weights[0] < 1e-6
    assert weights[1] == pytest.approx(weights[0], rel=0.3)
