"""Are the error bars of `reference` honest and useful? Judged on anneals that none of its constants was tuned on."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from scipy.integrate import solve_ivp

import anneal_ref as ar
from anneal_ref.truth.evolutions import fixed_by_symmetry
from anneal_ref.truth.reference import reference

RAMP = ar.Schedule.linear(transverse=(8.0, 0.0), problem=(0.0, 6.0))
CURVED = ar.Schedule.polynomial(transverse=[20.0, -60.0, 60.0, -20.0], problem=[0.0, 0.5, 9.5])
TABLE = ar.Schedule.from_table(
    [0, 0.15, 0.4, 0.6, 0.85, 1], [3.1, 2.0, 0.8, 0.3, 0.02, 0], [0.0, 0.2, 0.7, 1.3, 2.0, 2.2], unit="GHz"
)
PAUSE = ar.Waveform([0, 0.4, 0.6, 1], [0, 0.5, 0.5, 1])
EXACT = ar.StateVector(tolerance=1e-11).finer("step")


def catalogue():
    """Sixty anneals of 4 to 10 spins: lattices, couplings, fields, weights, schedules, durations, starts, waveforms."""
    graphs = [
        ar.lattices.chain(9),
        ar.lattices.chain(6, periodic=True),
        ar.lattices.ladder(4),
        ar.lattices.square(3, 3),
        ar.lattices.complete(5),
        ar.lattices.biclique(3, 4),
        ar.lattices.random_regular(8, 3, seed=2),
        ar.lattices.square(2, 5),
        ar.lattices.complete(7),
        ar.lattices.from_edges(4, [(0, 1), (1, 2)]),
    ]
    laws = [ar.disorder.plus_minus(), ar.disorder.gaussian(0.7), ar.disorder.uniform(-1.0, 1.0)]
    fields = [None, ar.disorder.gaussian(0.4), None, ar.disorder.constant(0.3)]
    weights = [None, None, ar.disorder.uniform(0.7, 1.3)]
    for k in range(60):
        instance = ar.draw_instance(graphs[k % 10], laws[k % 3], fields[k % 4], weights[(k // 2) % 3], seed=700 + k)
        yield ar.Anneal(
            instance,
            (RAMP, CURVED, TABLE)[(k // 3) % 3],
            duration=(0.4, 1.0, 2.5, 7.0)[(k // 5) % 4],
            start="ground" if k % 7 == 0 else "plus",
            waveform=PAUSE if k % 11 == 0 else None,
        )


def solve(anneals, backends):
    """References of anneals, with back-ends in turn, beside the moments that are known to be right."""
    for anneal, backend in zip(anneals, itertools.cycle(backends), strict=False):
        truth = reference(anneal, tolerance=1e-2, backend=backend, samples=1)
        assert truth.outcome == "converged"
        yield truth, EXACT.evolve(anneal).moments()


def deviations(solved):
    """Errors and bars of all entries that symmetry does not fix, and the number of the anneal that they belong to."""
    errors, bars, owner = [], [], []
    for k, (truth, exact) in enumerate(solved):
        found = truth.moments()
        z_zero, zz_zero = fixed_by_symmetry(truth.anneal)
        free_entries = {"z": ~z_zero, "zz": np.triu(~zz_zero, 1), "x": np.full(truth.n_sites, True)}
        for name, free in free_entries.items():
            one, other = getattr(found, name), getattr(exact, name)
            errors.append(np.abs(one.value - other.value)[free])
            bars.append(one.num[free])
            owner.append(np.full(len(bars[-1]), k))
    return np.concatenate(errors), np.concatenate(bars), np.concatenate(owner)


def check(errors, bars):
    """Honest: at least 95 % of the errors lie within their bars. Useful: the median bar is at most 10 median errors."""
    covered = np.mean(errors <= bars)
    assert covered >= 0.95, f"not honest: {covered:.1%} of the errors lie within their bars"
    ratio = np.median(bars) / np.median(errors)
    assert ratio <= 10, f"not useful: the median bar is {ratio:.3g} median errors"


@pytest.fixture(scope="module")
def solved():
    tolerances = (1e-2, 1e-3, 1e-4, 1e-6, 1e-7)  # of the coarsest runs
    return list(solve(catalogue(), [ar.StateVector(tolerance=tolerance) for tolerance in tolerances]))


@pytest.fixture(scope="module")
def measured(solved):
    return deviations(solved)


def test_bars_are_honest_and_useful(measured):
    errors, bars, owner = measured
    assert len(errors) > 1500
    check(errors, bars)
    missed = np.bincount(owner, errors > bars) > 0
    assert missed.mean() <= 0.1


def test_bars_of_derived_numbers_are_honest_and_useful(solved):
    errors, bars = [], []
    for truth, exact in solved:
        instance = truth.anneal.instance
        for f in (
            lambda moments, instance=instance: ar.observables.problem_energy(moments, instance),
            ar.observables.q2,
            lambda moments: moments.z.value.sum() + (moments.zz.value**2).sum(),
        ):
            estimate = truth.estimate(f)
            errors.append(abs(estimate.value - f(exact)))
            bars.append(estimate.num)
    check(np.array(errors), np.array(bars))


def test_bars_follow_the_errors(measured):
    errors, bars = (np.argsort(np.argsort(values)) for values in measured[:2])
    assert np.corrcoef(errors, bars)[0, 1] > 0.9


@pytest.mark.parametrize(
    ("spoil", "verdict"),
    [
        (lambda errors, bars: bars / 10, "not honest"),
        (lambda errors, bars: np.full_like(bars, np.median(bars)), "not honest"),
        (lambda errors, bars: np.full_like(bars, np.quantile(errors, 0.96)), "not useful"),
        (lambda errors, bars: np.full_like(bars, 1e-2), "not useful"),
        (lambda errors, bars: 100 * bars, "not useful"),
        (lambda errors, bars: np.random.default_rng(1).permutation(bars), "not honest"),
    ],
    ids=["a tenth", "constant, median", "constant, wide", "the tolerance", "too wide", "of other entries"],
)
def test_wrong_bars_fail_the_same_check(spoil, verdict, measured):
    errors, bars, _ = measured
    with pytest.raises(AssertionError, match=verdict):
        check(errors, spoil(errors, bars))


@pytest.mark.parametrize(
    "backend",
    [
        ar.StateVector(tolerance=1e-4),
        ar.StateVector(tolerance=1e-3, scheme="strang"),
        ar.StateVector(tolerance=1e-2, scheme="blanes-moan-6"),
        ar.StateVector(tolerance=3e-3, scheme="blanes-moan-4"),
        ar.StateVector(tolerance=1e-4, precision="single"),
    ],
    ids=["tighter", "second order", "loose sixth order", "loose fourth order", "single precision"],
)
def test_other_settings_are_honest_too(backend):
    errors, bars, _ = deviations(solve(list(catalogue())[::4], [backend]))
    assert np.mean(errors <= bars) >= 0.95
    assert np.median(bars) <= 15 * np.median(errors)


def test_the_default_is_far_better_than_asked():
    for anneal in list(catalogue())[::9]:
        truth = reference(anneal, tolerance=1e-3, samples=1)
        assert len(truth.runs) == 4
        assert truth.outcome == "converged"
        assert truth.error < 1e-6


def test_the_known_answers_are_right():
    """Against an explicit Runge-Kutta method on the dense Hamiltonian, which shares nothing with the state vector."""
    for anneal in [one for one in catalogue() if one.n_sites <= 5 and one.start == "plus"][::3]:
        n, instance = anneal.n_sites, anneal.instance
        spins = 1 - 2 * ((np.arange(1 << n)[:, None] >> np.arange(n)) & 1)
        energies = spins @ instance.fields
        for (i, j), coupling in zip(instance.lattice.edges, instance.couplings, strict=True):
            energies = energies + coupling * spins[:, i] * spins[:, j]
        flips = [np.arange(1 << n) ^ (1 << i) for i in range(n)]

        def slope(t, psi, anneal=anneal, energies=energies, flips=flips):
            turned = sum(w * psi[flip] for w, flip in zip(anneal.instance.transverse, flips, strict=True))
            return -1j * (anneal.problem(t) * energies * psi - anneal.transverse(t) * turned)

        psi = np.full(1 << n, 2.0 ** (-n / 2), dtype=complex)
        for t0, t1 in zip(anneal.knots[:-1], anneal.knots[1:], strict=True):
            psi = solve_ivp(slope, (t0, t1), psi, method="DOP853", rtol=1e-12, atol=1e-13).y[:, -1]
        p = np.abs(psi) ** 2
        exact = EXACT.evolve(anneal).moments()
        np.testing.assert_allclose(exact.zz.value, spins.T @ (p[:, None] * spins), atol=2e-10)
        np.testing.assert_allclose(exact.z.value, spins.T @ p, atol=2e-10)


# second-order weights of an eighth-order composition: W. Kahan and R.-C. Li, Math. Comput. 66, 1089 (1997), s = 17
KAHAN_LI = [
    "0.13020248308889008088", "0.56116298177510838456", "-0.38947496264484728641", "0.15884190655515560090",
    "-0.39590389413323757734", "0.18453964097831570709", "0.25837438768632204729", "0.29501172360931029887",
]  # fmt: skip


def extended(anneal, steps):
    """Moments z, zz of a ramp in extended precision, with the integrals of its schedule written out by hand."""
    real = np.longdouble
    first = [real(weight) for weight in KAHAN_LI]
    weights = [*first, 1 - 2 * sum(first), *first[::-1]]
    instance, n, duration = anneal.instance, anneal.n_sites, real(anneal.duration)
    spins = (1 - 2 * ((np.arange(1 << n)[:, None] >> np.arange(n)) & 1)).astype(real)
    energies = spins @ instance.fields.astype(real)
    for (i, j), coupling in zip(instance.lattice.edges, instance.couplings, strict=True):
        energies = energies + real(coupling) * spins[:, i] * spins[:, j]
    psi = np.full(1 << n, np.sqrt(real(2)) ** -n, dtype=np.clongdouble)
    t, h = real(0), duration / steps
    for weight in weights * steps:
        ends = np.array([t, t + weight * h / 2, t + weight * h])
        problem = 6 * ends**2 / (2 * duration)
        transverse = 8 * (ends - ends**2 / (2 * duration))
        angle = transverse[2] - transverse[0]
        psi = psi * np.exp(-1j * (problem[1] - problem[0]) * energies)
        for i in range(n):
            view = psi.reshape(-1, 2, 1 << i)
            psi = (np.cos(angle) * view + 1j * np.sin(angle) * view[:, ::-1]).reshape(-1)
        psi = psi * np.exp(-1j * (problem[2] - problem[1]) * energies)
        t = ends[2]
    p = psi.real**2 + psi.imag**2
    return spins.T @ p, spins.T @ (p[:, None] * spins)


@pytest.mark.skipif(np.finfo(np.longdouble).eps > 2e-19, reason="this machine has no extended precision")
def test_bars_are_honest_down_to_rounding():
    inside = []
    for seed in (1, 2):
        fields = ar.disorder.gaussian(0.3)
        instance = ar.draw_instance(ar.lattices.chain(4), ar.disorder.gaussian(), fields=fields, seed=seed)
        anneal = ar.Anneal(instance, RAMP, 1.0)
        z, zz = extended(anneal, 150)
        for tolerance in (1e-8, 1e-9, 1e-10, 1e-11):
            found = reference(anneal, backend=ar.StateVector(tolerance=tolerance), samples=1).moments()
            assert found.zz.num.max() < 1e-11
            inside.extend(np.abs(found.z.value - z) <= found.z.num)
            inside.extend((np.abs(found.zz.value - zz) <= found.zz.num)[np.triu_indices(4, 1)])
    assert np.mean(inside) >= 0.95


@pytest.mark.parametrize(("precision", "tolerance"), [("double", 1e-6), ("single", 1e-2)])
def test_rounding_common_to_every_order_of_the_sites_is_in_the_bars(precision, tolerance):
    """Without a transverse field |+...+> only collects phases, and hardly a bit depends on the order of the sites."""
    random, inside, backend = np.random.default_rng(5), [], ar.StateVector(tolerance=tolerance, precision=precision)
    for n, duration in itertools.product((2, 3, 4), (0.02, 0.3, 1.1, 4.0)):
        lattice = ar.lattices.complete(n)
        instance = ar.Instance(lattice, random.normal(size=lattice.n_edges), random.normal(size=n))
        with pytest.warns(ar.AnnealRefWarning):
            anneal = ar.Anneal(instance, ar.Schedule.linear((0.0, 0.0), (5.0, 5.0)), duration)
        truth = reference(anneal, backend=backend, samples=1)
        assert truth.outcome == "converged"
        # <X_i> = cos(2 h_i P t) prod_j cos(2 J_ij P t), by hand
        angles = 2 * 5.0 * duration * (instance.coupling_matrix() + np.diag(instance.fields))
        x = truth.moments().x
        inside.extend(np.abs(x.value - np.cos(angles).prod(axis=1)) <= x.num)
    assert np.mean(inside) >= 0.95


def rough_tables(seed, count):
    """Anneals whose schedule is a table of many uneven rows, as measured ones are; steps cannot meet all its knots."""
    rng = np.random.default_rng(seed)
    for k in range(count):
        n, rows = int(rng.integers(3, 7)), int(rng.integers(60, 900))
        s = np.sort(np.concatenate([[0, 1], rng.random(rows)]))
        s = s[np.concatenate([[True], np.diff(s) > 1e-6])]
        scatter = 1 + rng.choice([0.0, 0.02, 0.1, 0.4]) * rng.random((2, len(s)))
        schedule = ar.Schedule.from_table(
            s,
            20 * (1 - s) ** 1.5 * scatter[0],
            10 * s * scatter[1],
            unit="1",
            interpolation=("pchip", "linear")[k % 2],
        )
        fields = ar.disorder.gaussian(1.0) if k % 3 else None
        instance = ar.draw_instance(ar.lattices.complete(n), ar.disorder.gaussian(1.0), fields, seed=seed + k)
        yield ar.Anneal(instance, schedule, duration=float(rng.choice([0.3, 0.5, 1.0])))


def test_bars_are_honest_where_steps_straddle_the_knots_of_a_table():
    solved = list(solve(rough_tables(seed=51, count=80), [ar.StateVector(tolerance=1e-5), ar.StateVector(1e-3)]))
    straddled = [one for one in solved if one[0].ledger["order"] < 6]
    assert len(straddled) > 40
    for part in (solved, straddled):
        errors, bars, owner = deviations(part)
        errors = np.maximum(errors - 1e-10, 0.0)  # of the answer, whose own steps meet every knot
        assert np.mean(errors <= bars) >= 0.95
        assert np.mean(np.bincount(owner, errors > bars) == 0) >= 0.8
