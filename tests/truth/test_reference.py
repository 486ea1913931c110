from __future__ import annotations

import pickle
from dataclasses import dataclass, replace

import numpy as np
import pytest

import anneal_ref as ar
from anneal_ref.backends.contract import Plan
from anneal_ref.observe.manifest import Manifest
from anneal_ref.observe.moments import Moments
from anneal_ref.truth.evolutions import fixed_by_symmetry
from anneal_ref.truth.reference import identity_of, reference

RAMP = ar.Schedule.linear(transverse=(4.0, 0.0), problem=(0.0, 4.0))


def anneal(n=4, seed=1, fields=None, duration=1.0, lattice=None, schedule=RAMP, couplings=None):
    lattice = ar.lattices.chain(n) if lattice is None else lattice
    law = ar.disorder.plus_minus() if couplings is None else couplings
    return ar.Anneal(ar.draw_instance(lattice, law, fields=fields, seed=seed), schedule, duration)


class PlainState:
    def __init__(self, problem, psi, ledger, noise, wander):
        self.anneal, self.at, self.psi, self.ledger = problem, 1.0, psi, ledger
        self.noise, self.wander = noise, wander

    def probabilities(self):
        return np.abs(self.psi) ** 2

    def moments(self):
        n = self.anneal.n_sites
        spins = configurations(n)
        p = self.probabilities()
        z, zz = p @ spins, spins.T @ (p[:, None] * spins)
        psi = self.psi.reshape((2,) * n)
        x = np.array([np.sum(psi.conj() * np.flip(psi, n - 1 - i)).real for i in range(n)])
        random = np.random.default_rng(self.ledger["steps"])
        zz *= 1 - self.wander * random.random()
        shift = self.noise * random.normal(size=(n, n))
        zz += np.triu(shift, 1) + np.triu(shift, 1).T
        np.fill_diagonal(zz, 1.0)
        return Moments.of(z, zz, x)

    def sample(self, shots, seed):
        p = self.probabilities()
        rows = np.random.default_rng(seed).choice(len(p), shots, p=p / p.sum())
        return ar.Samples(configurations(self.anneal.n_sites)[rows].astype(int), Manifest())

    def log_probability(self, spins):
        index = (np.asarray(spins) < 0) @ (1 << np.arange(self.anneal.n_sites))
        return np.log(self.probabilities()[index])


@dataclass(frozen=True)
class Plain:
    """Second-order splitting in plain numpy, with errors on request that no refinement removes.

    `noise` differs from entry to entry and does not follow the sites, as rounding; `wander` scales all alike.
    """

    steps: int = 40
    noise: float = 0.0
    wander: float = 0.0
    knobs = ("step",)

    def plan(self, problem):
        return Plan("Plain", 1, 1.0, self.steps, self.steps)

    def finer(self, knob):
        assert knob == "step"
        return replace(self, steps=2 * self.steps)

    def evolve(self, problem, at=1.0, kicks=(), run=None):
        n = problem.n_sites
        energies = problem.instance.energies(configurations(n).astype(np.int8))
        psi = np.full(1 << n, 2.0 ** (-n / 2), dtype=complex)
        times = np.linspace(0, at * problem.duration, self.steps + 1)
        for t0, t1 in zip(times[:-1], times[1:], strict=True):
            half = np.exp(-0.5j * problem.problem_integral(t0, t1) * energies)
            psi = half * psi
            angle = problem.transverse_integral(t0, t1)
            for i, weight in enumerate(problem.instance.transverse):
                view = psi.reshape(-1, 2, 1 << i)
                psi = (np.cos(angle * weight) * view + 1j * np.sin(angle * weight) * view[:, ::-1]).reshape(-1)
            psi = half * psi
        ledger = {"steps": self.steps, "layers": self.steps, "order": 2, "norm_drift": np.vdot(psi, psi).real - 1}
        return PlainState(problem, psi, ledger, self.noise, self.wander)

    def states(self, problem, at, run=None):
        return (self.evolve(problem, u) for u in at)


def configurations(n):
    return (1 - 2 * ((np.arange(1 << n)[:, None] >> np.arange(n)) & 1)).astype(float)


# ---- the outcome and what it carries


def test_three_runs_converge_and_say_so():
    truth = reference(anneal(), tolerance=1e-3, backend=Plain(), samples=500, seed=3)
    assert truth.outcome == "converged"
    assert [(run.ledger["steps"], run.reordered) for run in truth.runs] == [
        (40, True), (40, False), (80, False), (160, False),
    ]  # fmt: skip
    assert [dict(run.refined) for run in truth.runs] == [{}, {}, {"step": 1}, {"step": 2}]
    assert truth.stopped == "tolerance met"
    assert truth.finest == Plain(160)
    assert 0 < truth.error <= 1e-3
    assert isinstance(truth, ar.Source)
    assert truth.stored_samples.n_shots == 500
    exact = reference(anneal(), backend=Plain(1280)).moments()
    error = np.abs(truth.moments().zz.value - exact.zz.value)
    assert np.all(error <= truth.moments().zz.num)


def test_a_tight_tolerance_takes_more_runs():
    loose = reference(anneal(), tolerance=1e-3, backend=Plain())
    tight = reference(anneal(), tolerance=loose.error / 10, backend=Plain())
    assert tight.outcome == "converged"
    assert len(tight.runs) == 6
    assert tight.error <= loose.error / 10


def test_the_error_is_measured_and_not_the_tolerance():
    results = [reference(anneal(), tolerance=tolerance, backend=Plain(80)) for tolerance in (1e-3, 1e-1)]
    assert results[0].error == results[1].error


def test_a_budget_that_ends_gives_the_best_numbers_and_no_claim():
    truth = reference(anneal(), tolerance=1e-9, backend=Plain(), max_runs=4)
    assert truth.outcome == "not converged"
    assert len(truth.runs) == 5
    assert truth.stopped == "all runs made"
    assert 1e-9 < truth.error < 1e-3
    assert "not converged" in str(truth)
    with pytest.raises(ar.NotConverged, match=r"above the tolerance 1e-09; allow more runs \(max_runs=6\)") as caught:
        reference(anneal(), tolerance=1e-9, backend=Plain(), max_runs=4, strict=True)
    assert caught.value.result.error == truth.error


def test_errors_that_refinement_does_not_remove_are_never_called_converged():
    truth = reference(anneal(), tolerance=1e-2, backend=Plain(160, wander=1e-3), max_runs=4)
    assert not truth.settled
    assert truth.outcome == "not converged"
    assert truth.error < 1e-2
    assert "not settled" in str(truth)


def test_errors_of_rounding_are_measured_and_bound_what_can_be_reached():
    problem = anneal(6)
    exact = reference(problem, backend=Plain(160)).moments().zz.value
    truth = reference(problem, tolerance=1e-2, backend=Plain(160, noise=1e-5), max_runs=4)
    assert truth.outcome == "converged"
    assert 1e-5 < truth.rounding < 3e-4
    inside = np.abs(truth.moments().zz.value - exact) <= truth.moments().zz.num
    assert inside.all()
    assert reference(problem, tolerance=1e-6, backend=Plain(160, noise=1e-5), max_runs=4).outcome == "not converged"


def test_a_hopeless_step_is_not_called_converged_at_once():
    truth = reference(anneal(duration=20.0), tolerance=1e-2, backend=Plain(steps=2), max_runs=3)
    assert truth.outcome == "not converged"


def test_what_symmetry_fixes_has_no_error():
    lattice = ar.lattices.from_edges(6, [(0, 1), (1, 2), (3, 4)])  # two parts and a single spin
    free = anneal(lattice=lattice)
    moments = reference(free, backend=Plain()).moments()
    np.testing.assert_array_equal(moments.z.num, np.abs(moments.z.value))
    assert moments.z.num.max() < 1e-14
    across = moments.zz.num[np.ix_([0, 1, 2], [3, 4, 5])]
    assert across.max() < 1e-14
    assert np.all(np.diagonal(moments.zz.num) == 0)
    assert moments.zz.num[0, 1] > 1e-9
    z_zero, zz_zero = fixed_by_symmetry(free)
    assert z_zero.all()
    assert zz_zero[0, 3]
    assert not zz_zero[0, 2]


def test_fields_break_the_symmetry_of_their_part_alone():
    lattice = ar.lattices.from_edges(5, [(0, 1), (2, 3)])
    instance = ar.Instance(lattice, [1.0, 1.0], fields=[0.5, 0, 0, 0, 0])
    z_zero, zz_zero = fixed_by_symmetry(ar.Anneal(instance, RAMP, 1.0))
    assert z_zero.tolist() == [False, False, True, True, True]
    assert not zz_zero[0, 1]
    assert not zz_zero[2, 3]
    assert zz_zero[0, 2]
    assert zz_zero[2, 4]


def test_a_zero_coupling_connects_nothing():
    instance = ar.Instance(ar.lattices.chain(3), [0.0, 1.0], fields=[1.0, 0, 0])
    assert fixed_by_symmetry(ar.Anneal(instance, RAMP, 1.0))[0].tolist() == [False, True, True]


# ---- derived numbers


def test_estimate_measures_the_error_of_a_derived_number():
    problem = anneal(5, fields=ar.disorder.gaussian(0.3))
    truth = reference(problem, backend=Plain(60))
    exact = reference(problem, backend=Plain(960)).moments()
    for f in (
        lambda moments: ar.observables.problem_energy(moments, problem.instance),
        ar.observables.q2,
        lambda moments: moments.x.value,
    ):
        estimate = truth.estimate(f)
        error = np.abs(estimate.value - f(exact))
        assert np.all(error <= estimate.num)
        assert np.median(estimate.num) <= 30 * np.median(error)
        assert np.all(estimate.stat == 0)
    energy = truth.estimate(lambda moments: ar.observables.problem_energy(moments, problem.instance))
    added_up = (
        np.abs(problem.instance.coupling_matrix())[np.triu_indices(5, 1)]
        @ truth.moments().zz.num[np.triu_indices(5, 1)]
        + np.abs(problem.instance.fields) @ truth.moments().z.num
    )
    assert energy.num < 3 * added_up


def test_estimate_refuses_what_is_not_finite():
    truth = reference(anneal(), backend=Plain())
    with pytest.raises(ar.InputError, match="finite numbers of one shape"):
        truth.estimate(lambda moments: np.nan)
    with pytest.raises(ar.InputError, match=r"f must give a real number.*'x'"):
        truth.estimate(lambda moments: "x")
    with pytest.raises(ar.InputError, match=r"Estimate.*\.value"):
        truth.estimate(lambda moments: moments.zz.max())


# ---- samples and probabilities


@pytest.mark.parametrize("fields", [None, ar.disorder.gaussian(0.5)])
def test_probabilities_samples_and_likelihoods_belong_together(fields):
    truth = reference(anneal(5, fields=fields), backend=Plain(), samples=4000)
    p = truth.probabilities()
    assert p.shape == (32,)
    assert len(truth.folded) == (32 if fields else 16)
    assert p.sum() == pytest.approx(1, abs=1e-12)
    spins = configurations(5)
    np.testing.assert_allclose(spins.T @ (p[:, None] * spins), truth.moments().zz.value, atol=1e-12)
    np.testing.assert_allclose(np.exp(truth.log_probability(spins.astype(int))), p, rtol=1e-12)
    for samples in (truth.sample(20_000, seed=1), truth.stored_samples):
        counts = np.bincount((samples.spins < 0) @ (1 << np.arange(5)), minlength=32)
        expected = p * len(samples)
        kept = expected > 5
        # chi-square with about 31 degrees of freedom; 90 is beyond its 1e-6 quantile
        assert np.sum((counts - expected)[kept] ** 2 / expected[kept]) < 90
        assert samples.manifest.instance == truth.anneal.instance.identity
    np.testing.assert_array_equal(truth.sample(50, seed=4).spins, truth.sample(50, seed=4).spins)
    assert not np.array_equal(truth.sample(50, seed=4).spins, truth.sample(50, seed=5).spins)


def test_beyond_the_table_samples_come_without_repeats_and_are_refused_beyond():
    small = reference(anneal(), backend=Plain(), samples=300)
    truth = replace(small, folded=None)
    drawn = truth.sample(300, seed=2)
    assert sorted(drawn.bits.ravel().tolist()) == sorted(truth.bits.ravel().tolist())
    with pytest.raises(ar.InputError, match=r"at most 300.*got 301.*state\(\)"):
        truth.sample(301, seed=2)
    assert truth.probabilities() is None
    spins = configurations(4).astype(int)
    np.testing.assert_allclose(truth.log_probability(spins), small.log_probability(spins), atol=1e-10)


def test_a_configuration_that_cannot_be_has_log_probability_minus_infinity():
    truth = reference(anneal(), backend=Plain())
    table = np.zeros(16)
    table[3] = 1.0
    assert replace(truth, folded=table).log_probability([[1, 1, 1, 1]])[0] == -np.inf


# ---- identity, text, input


def test_identity_names_the_anneal_and_every_setting_that_changes_digits():
    problem = anneal()
    base = (Plain(), 1e-3, 100, 0, 6, ar.Budget(), False)
    names = [identity_of(problem, *base)]
    for k, other in enumerate((Plain(41), 1e-4, 101, 1, 5, ar.Budget(60), True)):
        names.append(identity_of(problem, *(other if j == k else value for j, value in enumerate(base))))
    assert len(set(names)) == 8
    assert {name[:33] for name in names} == {problem.identity[:32] + "-"}
    assert identity_of(anneal(seed=2), *base)[:32] != names[0][:32]
    assert reference(problem, backend=Plain(), samples=100).identity == names[0]


def test_it_reads_well_and_survives_a_pickle():
    truth = reference(anneal(), backend=Plain())
    text = str(truth)
    words = ("4 spins", "converged", "Plain(steps=40", "reordered", "step / 4", "by source: step", "ground energy")
    for word in words:
        assert word in text
    assert max(map(len, text.splitlines())) < 140
    again = pickle.loads(pickle.dumps(truth))
    assert again.identity == truth.identity
    assert str(again) == text


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"tolerance": 0}, "tolerance must be above 0"),
        ({"tolerance": float("nan")}, "tolerance must be a finite number"),
        ({"tolerance": -1e-3}, "tolerance must be"),
        ({"samples": 0}, "samples must be"),
        ({"seed": -1}, "seed must be"),
        ({"max_runs": 2}, "max_runs must be"),
    ],
)
def test_input_that_is_refused(arguments, message):
    with pytest.raises(ar.InputError, match=message):
        reference(anneal(), backend=Plain(), **arguments)


def test_an_anneal_is_asked_for():
    with pytest.raises(ar.InputError, match="must be an Anneal"):
        reference(anneal().instance)


@pytest.mark.parametrize("backend", ["StateVector", ar.StateVector, 1e-3])
def test_a_backend_is_asked_for(backend):
    with pytest.raises(ar.InputError, match=r"backend must be a back-end such as StateVector\(tolerance=1e-6\); got"):
        reference(anneal(), backend=backend)


def test_a_backend_without_a_step_is_refused():
    @dataclass(frozen=True)
    class Closed(Plain):
        knobs = ("bond",)

    with pytest.raises(ar.InputError, match="whose step can be refined"):
        reference(anneal(), backend=Closed())


def test_seventeen_spins_have_no_table_but_samples_and_a_state():
    problem = anneal(17, schedule=RAMP, duration=0.3)
    truth = reference(problem, samples=3000, seed=2)
    assert truth.outcome == "converged"
    assert truth.folded is None
    sampled = truth.sample(2000, seed=1).moments()
    zz = truth.moments().zz
    off = np.abs(sampled.zz.value - zz.value)[np.triu_indices(17, 1)]
    assert np.max(off) < 6 / np.sqrt(2000)
    assert np.mean(off < 2 / np.sqrt(2000)) > 0.85
    rows = truth.stored_samples.spins[:5]
    np.testing.assert_allclose(truth.log_probability(rows), truth.state().log_probability(rows), rtol=1e-12)
