from __future__ import annotations

import pickle
from dataclasses import replace

import numpy as np
import pytest

import anneal_ref as ar
from anneal_ref.observe.moments import Moments
from anneal_ref.truth.deviations import deviating
from anneal_ref.truth.effects import InputEffect

RAMP = ar.Schedule.linear(transverse=(8.0, 0.0), problem=(0.0, 6.0))
FINE = ar.StateVector(tolerance=1e-9)


def zz(moments):
    return moments.zz.value


def z(moments):
    return moments.z.value


def x(moments):
    return moments.x.value


def pairs(moments):
    return moments.zz.value[np.triu_indices(moments.n_sites, 1)]


def anneal(lattice=None, fields=None, duration=1.0, seed=3, couplings=None):
    lattice = ar.lattices.square(2, 3) if lattice is None else lattice
    law = ar.disorder.gaussian(0.8) if couplings is None else couplings
    return ar.Anneal(ar.draw_instance(lattice, law, fields=fields, seed=seed), RAMP, duration)


WITH_FIELDS = anneal(fields=ar.disorder.gaussian(0.4))
WITHOUT = anneal(couplings=ar.disorder.plus_minus())


def quench(instance, transverse, problem, duration):
    """Both strengths constant, from |+...+>."""
    schedule = ar.Schedule.linear(transverse=(transverse,) * 2, problem=(problem,) * 2)
    with pytest.warns(ar.AnnealRefWarning):
        return ar.Anneal(instance, schedule, duration)


def draw(problem, draws, seed, **sigmas):
    """Return the change of the moments in runs with all inputs off at random: an independent Monte Carlo."""
    random = np.random.default_rng(seed)
    instance = problem.instance
    sizes = {"couplings": instance.n_edges, "fields": instance.n_sites, "weights": instance.n_sites}
    for _ in range(draws):
        off = {name: s * random.normal(size=sizes[name] if name in sizes else None) for name, s in sigmas.items()}
        if "field_offset" in off:
            off["fields"] = off.get("fields", 0.0) + off.pop("field_offset")
        yield ar.StateVector(tolerance=1e-6).evolve(deviating(problem, **off)).moments()


def check_against_draws(square, changes):
    """The mean square of independent changes, within 4 of its standard errors (6e-5 if it were normal)."""
    squares = np.sum(np.reshape(changes, (len(changes), -1)) ** 2, axis=1)
    error = squares.std(ddof=1) / len(squares) ** 0.5
    assert abs(squares.mean() - square) < 4 * error, (squares.mean(), square, error)


# ---- closed forms


def rabi(transverse, problem, field, time):
    """<Z> of one spin, H = -G X + P h Z from |+>: the Bloch vector turns by 2 omega t about (-G, 0, P h)/omega."""
    omega = np.hypot(transverse, problem * field)
    return -transverse * problem * field / omega**2 * (1 - np.cos(2 * omega * time))


def normal_mean(f):
    """Mean square of f(d) - f(0) over a standard normal d, by Gauss and Hermite."""
    nodes, weights = np.polynomial.hermite_e.hermegauss(40)
    return weights @ (f(nodes) - f(0.0)) ** 2 / weights.sum()


def test_one_spin_follows_its_closed_form():
    g, p, h, t, u = 1.3, 2.0, 0.6, 0.9, 0.01
    problem = quench(ar.Instance(ar.lattices.from_edges(1, []), [], [h]), g, p, t)
    inputs = ar.InputUncertainty(u, u, u, 0.02, fields=u, field_offset=u, weights=u)
    budget = ar.uncertainty_budget(problem, inputs, backend=FINE)
    expected = {
        "transverse_scale": (rabi(g * (1 + u), p, h, t) - rabi(g * (1 - u), p, h, t)) / 2,
        "problem_scale": (rabi(g, p * (1 + u), h, t) - rabi(g, p * (1 - u), h, t)) / 2,
        "time_scale": (rabi(g, p, h, t * (1 + u)) - rabi(g, p, h, t * (1 - u))) / 2,
        "time_offset": 0.0,
        "fields": (rabi(g, p, h + u, t) - rabi(g, p, h - u, t)) / 2,
    }
    expected["field_offset"] = expected["fields"]
    expected["weights"] = expected["transverse_scale"]
    assert list(budget.effects) == [name for name in budget.inputs.__dataclass_fields__ if name != "couplings"]
    for name, change in expected.items():
        np.testing.assert_allclose(budget.effects[name].changes(z), [[change]], atol=2e-8)
    total = 2 * normal_mean(lambda d: rabi(g * (1 + u * d), p, h, t)) + normal_mean(
        lambda d: rabi(g, p * (1 + u * d), h, t)
    )
    total += normal_mean(lambda d: rabi(g, p, h, t * (1 + u * d))) + 2 * normal_mean(lambda d: rabi(g, p, h + u * d, t))
    np.testing.assert_allclose(budget.moments().z.stat, [np.sqrt(total)], rtol=1e-3)
    # the twin that knows straight lines alone
    assert abs(np.sqrt(sum(change**2 for change in expected.values()) / total) - 1) > 0.01
    assert "largest Z" in str(budget)
    assert "ZZ" not in budget.table()["all inputs"]


def test_two_spins_follow_their_closed_form():
    # in the space of |++> and |-->: H = -2 G sigma_z + P J sigma_x, and <Z Z> = <sigma_x>
    def exact(g, p, j, t):
        omega = np.hypot(2 * g, p * j)
        return -2 * g * p * j / omega**2 * (1 - np.cos(2 * omega * t))

    g, p, j, t, u = 0.7, 1.5, -0.8, 1.1, 0.02
    problem = quench(ar.Instance(ar.lattices.chain(2), [j]), g, p, t)
    budget = ar.uncertainty_budget(problem, ar.InputUncertainty(0.01, 0.01, 0.01, couplings=u), backend=FINE)
    coupling = (exact(g, p, j + u, t) - exact(g, p, j - u, t)) / 2
    np.testing.assert_allclose(budget.effects["couplings"].changes(pairs), [[coupling]], atol=2e-8)
    for name, arguments in {
        "transverse_scale": ((1.01 * g, p, j, t), (0.99 * g, p, j, t)),
        "problem_scale": ((g, 1.01 * p, j, t), (g, 0.99 * p, j, t)),
        "time_scale": ((g, p, j, 1.01 * t), (g, p, j, 0.99 * t)),
    }.items():
        change = (exact(*arguments[0]) - exact(*arguments[1])) / 2
        np.testing.assert_allclose(budget.effects[name].changes(pairs), [[change]], atol=2e-8)
    slope = (exact(g, p, j + 1e-6, t) - exact(g, p, j - 1e-6, t)) / 2e-6
    assert float(budget.effects["couplings"].changes(pairs)[0, 0]) == pytest.approx(slope * u, rel=2e-3)
    square = normal_mean(lambda d: exact(g, p, j + u * d, t))
    assert float(budget.effect("couplings", lambda m: m.zz.value[0, 1])) == pytest.approx(np.sqrt(square), rel=2e-3)
    energy = budget.effect("problem_scale", lambda m: ar.observables.problem_energy(m, problem.instance))
    one = budget.effect("problem_scale", lambda m: m.zz.value[0, 1])
    assert energy.value == pytest.approx(abs(j) * one.value, rel=1e-9)


@pytest.mark.parametrize("turns", [0.5, 1.0, 1.2])
def test_a_stationary_point_has_the_uncertainty_of_second_order(turns):
    # P J Z Z alone turns <X_1> = cos(a), a = 2 P J t; with a relative error d of J, cos(a + a d), d normal
    a, u = np.pi * turns, 0.03
    problem = quench(ar.Instance(ar.lattices.chain(2), [1.0]), 0.0, 1.0, a / 2)
    effect = ar.uncertainty_budget(problem, ar.InputUncertainty(problem_scale=u), backend=FINE).effects["problem_scale"]
    exact = np.sqrt(normal_mean(lambda d: np.cos(a + a * u * d)))
    assert float(effect.uncertainty(lambda m: m.x.value[0])) == pytest.approx(exact, rel=1e-2)
    assert effect.is_straight(x, 0.0) == (turns != 1.0)
    # the twin that knows the straight line alone
    first = abs(effect.changes(lambda m: m.x.value[0])[0])
    assert (abs(first / exact - 1) < 1e-2) == (turns != 1.0)


# ---- exact relations


def test_scales_of_strengths_add_up_to_one_of_time():
    budget = ar.uncertainty_budget(WITH_FIELDS, ar.InputUncertainty(0.002, 0.002, 0.002), backend=FINE)
    together = sum(budget.effects[name].changes(zz) for name in ("transverse_scale", "problem_scale"))
    time = budget.effects["time_scale"].changes(zz)
    np.testing.assert_allclose(together, time, atol=1e-6)
    assert np.abs(time).max() > 1e-4
    # the twin without G
    assert np.abs(budget.effects["problem_scale"].changes(zz) - time).max() > 1e-4


def test_a_common_offset_adds_linearly_and_independent_fields_in_quadrature():
    budget = ar.uncertainty_budget(WITH_FIELDS, ar.InputUncertainty(fields=1e-3, field_offset=1e-3), backend=FINE)
    each = budget.effects["fields"].changes(z)
    assert each.shape == (6, 6)
    np.testing.assert_allclose(budget.effects["field_offset"].changes(z)[0], each.sum(axis=0), atol=1e-7)
    np.testing.assert_allclose(budget.effect("fields", z).value, np.sqrt(np.sum(each**2, axis=0)), rtol=1e-3)
    np.testing.assert_allclose(budget.effect("field_offset", z).value, np.abs(each.sum(axis=0)), rtol=1e-2, atol=1e-7)


def test_a_problem_scale_is_one_of_couplings_and_fields_that_move_together():
    u = 1e-3
    j, h = WITH_FIELDS.instance.couplings, WITH_FIELDS.instance.fields
    inputs = ar.InputUncertainty(problem_scale=u, couplings=u * np.abs(j), fields=u * np.abs(h))
    budget = ar.uncertainty_budget(WITH_FIELDS, inputs, backend=FINE)
    together = np.tensordot(np.sign(j), budget.effects["couplings"].changes(zz), 1)
    together = together + np.tensordot(np.sign(h), budget.effects["fields"].changes(zz), 1)
    np.testing.assert_allclose(budget.effects["problem_scale"].changes(zz)[0], together, atol=1e-6)


# ---- against an independent Monte Carlo


def test_the_straight_law_agrees_with_monte_carlo_and_its_twins_do_not():
    sigmas = {
        "transverse_scale": 0.02, "problem_scale": 0.02, "time_scale": 0.01, "time_offset": 0.01,
        "couplings": 0.02, "fields": 0.02, "field_offset": 0.01, "weights": 0.02,
    }  # fmt: skip
    budget = ar.uncertainty_budget(WITH_FIELDS, ar.InputUncertainty(**sigmas))
    assert not budget.notes
    moved = list(draw(WITH_FIELDS, 250, 1, **sigmas))
    functions = (
        pairs, z, ar.observables.q2, lambda m: ar.observables.problem_energy(m, WITH_FIELDS.instance),
    )  # fmt: skip
    for f in functions:
        changes = [f(m) - f(budget.centre) for m in moved]
        check_against_draws(np.sum(budget.estimate(f).stat ** 2), changes)
        linear = sum(effect.uncertainty(f).value for effect in budget.effects.values())
        with pytest.raises(AssertionError):  # standard uncertainties added up linearly
            check_against_draws(np.sum(linear**2), changes)
        with pytest.raises(AssertionError):  # twice the scales
            check_against_draws(4 * np.sum(budget.estimate(f).stat ** 2), changes)


@pytest.mark.parametrize(("draws", "method"), [(10, "differences"), (9, "Monte Carlo")])
def test_fields_on_a_symmetric_instance_move_correlations_to_second_order(draws, method):
    # one at a time they would show their squares alone; products of two fields matter as much
    budget = ar.uncertainty_budget(WITHOUT, ar.InputUncertainty(fields=0.05), draws=draws)
    effect = budget.effects["fields"]
    assert effect.method == method
    moved = list(draw(WITHOUT, 150, 2, fields=0.05))
    for f in (pairs, z):
        found = effect.uncertainty(f, pooled=True)
        squares = np.sum(np.array([f(m) - f(budget.centre) for m in moved]) ** 2, axis=1)
        error = np.hypot(squares.std(ddof=1) / 150**0.5, 2 * found.value * found.stat)
        assert abs(squares.mean() - found.value**2) < 4 * error
    assert effect.uncertainty(pairs, pooled=True).stat > 0.1 * effect.uncertainty(pairs, pooled=True).value
    if method == "differences":
        # the twin that knows straight lines alone sees nothing
        assert np.abs(effect.changes(pairs)).max() < 1e-6
    assert any("fields: <ZZ> does not change in a straight line" in note for note in budget.notes)
    assert not any("fields: <Z> does not" in note for note in budget.notes)


def test_many_inputs_are_drawn_and_few_are_taken_one_at_a_time():
    inputs = ar.InputUncertainty(couplings=0.03)
    budgets = {draws: ar.uncertainty_budget(WITH_FIELDS, inputs, draws=draws) for draws in (10, 11)}
    drawn, alone = (budgets[draws].effects["couplings"] for draws in (10, 11))
    assert (drawn.method, drawn.n_runs, budgets[10].n_runs) == ("Monte Carlo", 20, 21)
    assert (alone.method, alone.n_runs, budgets[11].n_runs) == ("differences", 22, 23)
    assert alone.n_inputs == drawn.n_inputs == 7
    assert alone.changes(zz).shape == (7, 6, 6)
    with pytest.raises(ar.InputError, match="at least draws=17"):
        drawn.changes(zz)
    assert "Monte Carlo, ±" in str(budgets[10])


def test_the_error_of_a_monte_carlo_is_stated_and_right():
    inputs = ar.InputUncertainty(couplings=0.03)
    truth = ar.reference(WITH_FIELDS, tolerance=1e-2, samples=1)
    differences = ar.uncertainty_budget(WITH_FIELDS, inputs, truth).effects["couplings"].uncertainty(pairs, pooled=True)
    found = [
        ar.uncertainty_budget(WITH_FIELDS, inputs, truth, draws=10, seed=seed).effects["couplings"]
        for seed in range(16)
    ]
    each = [effect.uncertainty(pairs, pooled=True) for effect in found]
    values, errors = np.array([float(e) for e in each]), np.array([float(e.stat) for e in each])
    assert differences.stat < 0.02 * differences.value
    assert abs(values.mean() - float(differences)) < 4 * values.std(ddof=1) / 16**0.5 + 0.02 * float(differences)
    # the spread of 16 values has 18 % of error of its own, and 10 draws give their own spread to 25 %
    assert 0.5 < errors.mean() / values.std(ddof=1) < 1.6


def test_the_same_seed_draws_the_same_whatever_else_is_uncertain():
    one = ar.uncertainty_budget(WITHOUT, ar.InputUncertainty(couplings=0.03), draws=5, seed=4)
    two = ar.uncertainty_budget(WITHOUT, ar.InputUncertainty(0.01, couplings=0.03), draws=5, seed=4)
    other = ar.uncertainty_budget(WITHOUT, ar.InputUncertainty(couplings=0.03), draws=5, seed=5)
    values = [float(budget.effect("couplings", ar.observables.q2)) for budget in (one, two, other)]
    assert values[0] == values[1] != values[2]


# ---- the budget


def test_nothing_uncertain_is_no_uncertainty():
    budget = ar.uncertainty_budget(WITH_FIELDS, ar.InputUncertainty())
    known = budget.truth.moments()
    for mine, truth in ((budget.moments().z, known.z), (budget.moments().zz, known.zz), (budget.moments().x, known.x)):
        np.testing.assert_array_equal(mine.value, truth.value)
        np.testing.assert_array_equal(mine.num, truth.num)
        assert not mine.stat.any()
    assert budget.n_runs == 1
    assert budget.dominant is None
    assert float(budget.effect("couplings", ar.observables.q2)) == 0.0
    assert budget.effect("couplings", pairs).shape == (15,)
    assert set(budget.table()) == {"all inputs", "numerical error", "together, 95 %"}
    assert "nothing that is uncertain changes the correlations" in str(budget)


def test_zero_uncertainties_within_an_array_cost_nothing():
    some = np.zeros(7)
    some[[1, 4]] = 0.02
    budget = ar.uncertainty_budget(WITH_FIELDS, ar.InputUncertainty(couplings=some, fields=np.zeros(6)))
    assert list(budget.effects) == ["couplings"]
    assert budget.effects["couplings"].n_inputs == 2
    every = ar.uncertainty_budget(WITH_FIELDS, ar.InputUncertainty(couplings=0.02), budget.truth)
    np.testing.assert_array_equal(
        budget.effects["couplings"].changes(zz), every.effects["couplings"].changes(zz)[[1, 4]]
    )


def test_inputs_add_in_quadrature_beside_the_numerical_error():
    inputs = ar.InputUncertainty(problem_scale=0.01, couplings=0.02, field_offset=0.01)
    budget = ar.uncertainty_budget(WITH_FIELDS, inputs, tolerance=1e-2)
    for f in (zz, ar.observables.q2):
        whole, known = budget.estimate(f), budget.truth.estimate(f)
        parts = [budget.effect(name, f).value ** 2 for name in ("problem_scale", "couplings", "field_offset")]
        np.testing.assert_allclose(whole.stat, np.sqrt(sum(parts)), rtol=1e-12)
        np.testing.assert_array_equal(whole.num, known.num)
        np.testing.assert_array_equal(whole.value, known.value)
    moments = budget.moments()
    np.testing.assert_allclose(moments.zz.stat, budget.estimate(zz).stat, rtol=1e-12)
    assert not np.diagonal(moments.zz.stat).any()
    assert moments.x.stat.shape == (6,)
    table = budget.table()
    rows = [table[name] for name in budget.effects]
    for column in ("rms ZZ", "eps", "energy", "q2"):
        assert table["all inputs"][column] == pytest.approx(np.sqrt(sum(row[column] ** 2 for row in rows)))
    assert budget.dominant == max(budget.effects, key=lambda name: table[name]["eps"])
    joint = table["together, 95 %"]["energy"]
    assert joint == pytest.approx(1.959964 * table["all inputs"]["energy"] + table["numerical error"]["energy"])


def test_eps_is_the_mean_correlation_error_of_a_perfect_processor_with_such_inputs():
    # processors whose couplings are off: sum of (c - t)^2 over sum of t^2, connected where there are fields
    for problem, scored in (
        (WITHOUT, pairs),
        (WITH_FIELDS, lambda m: pairs(m) - np.outer(z(m), z(m))[np.triu_indices(6, 1)]),
    ):
        budget = ar.uncertainty_budget(problem, ar.InputUncertainty(couplings=0.03))
        known = scored(budget.truth.moments())
        changes = [(scored(m) - known) / np.linalg.norm(known) for m in draw(problem, 120, 3, couplings=0.03)]
        check_against_draws(budget.table()["couplings"]["eps"] ** 2, changes)
        together = budget.effects["couplings"].changes(scored).sum(axis=0) / np.linalg.norm(known)
        with pytest.raises(AssertionError):  # couplings that move together
            check_against_draws(np.sum(together**2), changes)


def test_the_numerical_error_of_an_effect_is_a_bound():
    inputs = ar.InputUncertainty(problem_scale=0.02)
    coarse = ar.uncertainty_budget(WITH_FIELDS, inputs, backend=ar.StateVector(tolerance=1e-3))
    fine = ar.uncertainty_budget(WITH_FIELDS, inputs, backend=FINE)
    found = coarse.effect("problem_scale", pairs)
    error = np.abs(found.value - fine.effect("problem_scale", pairs).value)
    assert 0 < found.num.max() < 1e-3
    assert np.mean(error <= found.num) >= 0.95


def test_what_is_lost_in_the_numerical_error_is_told():
    truth = ar.reference(WITH_FIELDS, samples=1)
    rough = ar.StateVector(steps=2, scheme="strang")
    budget = ar.uncertainty_budget(WITH_FIELDS, ar.InputUncertainty(problem_scale=1e-6), truth, backend=rough)
    assert any("below the numerical error" in note for note in budget.notes)
    assert budget.backend == rough
    open_end = replace(truth, tolerance=1e-14)
    notes = ar.uncertainty_budget(WITH_FIELDS, ar.InputUncertainty(problem_scale=1e-6), open_end).notes
    assert any("'not converged'" in note for note in notes)


def test_runs_are_as_coarse_as_the_tolerance_of_the_reference_allows():
    truth = ar.reference(WITH_FIELDS, samples=1)
    inputs = ar.InputUncertainty(problem_scale=0.01)
    assert ar.uncertainty_budget(WITH_FIELDS, inputs, truth).backend == truth.backend
    changes = [np.abs(made.moments.zz.value - zz(truth.moments())).max() for made in truth.runs if not made.reordered]
    middle = replace(truth, tolerance=1.1 * changes[1])
    assert ar.uncertainty_budget(WITH_FIELDS, inputs, middle).backend == truth.backend.finer("step")
    assert ar.uncertainty_budget(WITH_FIELDS, inputs, replace(truth, tolerance=1e-16)).backend == truth.finest


def test_correlations_that_cannot_change_draw_no_note():
    lattice = ar.lattices.from_edges(4, [(0, 1), (2, 3)])
    budget = ar.uncertainty_budget(anneal(lattice), ar.InputUncertainty(problem_scale=0.01, couplings=0.02))
    assert not budget.notes
    assert budget.moments().zz.stat[0, 2] < 1e-13 < budget.moments().zz.stat[0, 1]


def test_it_reads_well_and_survives_a_pickle():
    inputs = ar.InputUncertainty(0.01, 0.015, time_offset=0.01, couplings=0.02, fields=(0.01, 0.02, 0, 0, 0, 0))
    budget = ar.uncertainty_budget(WITH_FIELDS, inputs)
    text = str(budget)
    for word in ("6 spins, duration 1 ns", "1.5 %", "0.01 ns", "0 to 0.02", "eps", "makes", "of the variance"):
        assert word in text
    assert max(map(len, text.splitlines())) < 140
    assert "dominant" in repr(budget)
    assert repr(budget.effects["couplings"]) == "<InputEffect couplings 0.02: differences, 22 runs>"
    again = pickle.loads(pickle.dumps(budget))
    assert str(again) == text
    assert again.inputs == inputs


# ---- what is refused


@pytest.mark.parametrize(
    ("inputs", "message"),
    [
        ({"problem_scale": 1.0}, r"problem_scale must be a finite number from 0.0 to 0.5; got 1.0.*1 % is 0.01"),
        ({"transverse_scale": -0.1}, "transverse_scale must be a finite number from 0.0 to 0.5; got -0.1"),
        ({"time_scale": np.nan}, "time_scale must be a finite number"),
        ({"time_offset": -1}, "time_offset must be a finite number of at least 0.0; got -1.0"),
        ({"couplings": "much"}, "couplings must be a finite number of at least 0.0; got 'much'"),
        ({"couplings": [0.1, -0.2]}, r"couplings\[1\] must be a finite number of at least 0.0; got -0.2"),
        ({"couplings": [[0.1], [0.2, 0.3]]}, "couplings must be an array of numbers"),
        ({"fields": np.zeros((2, 2))}, r"fields must have shape \(any,\); got shape \(2, 2\)"),
        ({"weights": [0.01, 0.2]}, r"weights\[1\] must be a finite number from 0.0 to 0.1; got 0.2"),
        ({"field_offset": [0.1]}, "field_offset must be a finite number"),
    ],
)
def test_uncertainties_that_cannot_be_are_refused(inputs, message):
    with pytest.raises(ar.InputError, match=message):
        ar.InputUncertainty(**inputs)


def test_inputs_compare_hash_and_tell_what_is_stated():
    one = ar.InputUncertainty(couplings=np.array([0.1, 0.2]), time_scale=0.01)
    assert one == ar.InputUncertainty(couplings=(0.1, 0.2), time_scale=0.01)
    assert hash(one) == hash(pickle.loads(pickle.dumps(one)))
    assert repr(one) == "InputUncertainty(time_scale=0.01, couplings=(0.1, 0.2))"


@pytest.mark.parametrize(
    ("inputs", "message"),
    [
        (
            ar.InputUncertainty(couplings=(0.1,) * 6),
            r"couplings must be one number or have shape \(7,\), one for each ed",
        ),
        (ar.InputUncertainty(fields=(0.1,) * 7), r"fields must be one number or have shape \(6,\), one for each site"),
        (ar.InputUncertainty(weights=(0.1,)), r"weights must be one number or have shape \(6,\)"),
        (ar.InputUncertainty(time_offset=1.0), "time_offset must be shorter than the duration, 1; got 1"),
        (0.01, "inputs must be an InputUncertainty; got float"),
    ],
)
def test_inputs_that_do_not_fit_the_anneal_are_refused(inputs, message):
    with pytest.raises(ar.InputError, match=message):
        ar.uncertainty_budget(WITH_FIELDS, inputs)


def test_other_arguments_are_checked():
    inputs = ar.InputUncertainty(0.01)
    truth = ar.reference(WITHOUT, samples=1)
    for given, message in (
        ({"truth": truth}, "must be the reference for this anneal"),
        ({"truth": truth.moments()}, "truth must be a Reference.*got Moments"),
        ({"draws": 4}, "draws must be a whole number of at least 5; got 4"),
        ({"seed": -1}, "seed must be"),
        ({"backend": 3}, "backend must be"),
    ):
        with pytest.raises(ar.InputError, match=message):
            ar.uncertainty_budget(WITH_FIELDS, inputs, **given)
    with pytest.raises(ar.InputError, match="anneal must be an Anneal"):
        ar.uncertainty_budget(WITH_FIELDS.instance, inputs)
    budget = ar.uncertainty_budget(WITHOUT, inputs, truth)
    with pytest.raises(ar.InputError, match="did you mean 'couplings'"):
        budget.effect("coupling", pairs)
    with pytest.raises(ar.InputError, match="finite numbers of one shape"):
        budget.estimate(lambda m: np.nan)
    with pytest.raises(ar.InputError, match=r"\.value"):
        budget.effect("transverse_scale", lambda m: m.zz.max())


def test_a_backend_that_knows_no_fields_refuses_uncertain_ones():
    problem = anneal(ar.lattices.chain(6))
    inputs = ar.InputUncertainty(problem_scale=0.01, couplings=0.02, weights=0.01)
    fermions = ar.uncertainty_budget(problem, inputs, backend=ar.FreeFermions(tolerance=1e-6))
    exact = ar.uncertainty_budget(problem, inputs, backend=ar.StateVector(tolerance=1e-6))
    np.testing.assert_allclose(fermions.estimate(pairs).stat, exact.estimate(pairs).stat, atol=1e-5)
    with pytest.raises(ar.NotSupported) as caught:
        ar.uncertainty_budget(problem, ar.InputUncertainty(fields=0.01), fermions.truth)
    assert any("StateVector" in other for other in caught.value.alternatives)


# ---- the two halves of a change, by hand


def moments_of(correlation):
    return Moments.of([0.0, 0.0], [[1.0, correlation], [correlation, 1.0]])


def test_halves_add_up_as_they_should():
    pair = (moments_of(0.56), moments_of(0.46))  # first 0.05, second 0.01
    single = InputEffect("problem_scale", "1 %", 1, moments_of(0.5), (pair,), ())
    np.testing.assert_allclose(single.changes(pairs), [[0.05]])
    assert float(single.uncertainty(lambda m: pairs(m)[0])) == pytest.approx(np.sqrt(0.05**2 + 3 * 0.01**2))
    assert single.uncertainty(pairs).stat[0] == 0.0
    assert single.is_straight(pairs, 0.02)
    assert not single.is_straight(pairs, 0.001)
    draws = (pair, (moments_of(0.41), moments_of(0.61)))  # first -0.1, second 0.01
    drawn = InputEffect("couplings", "0.1", 9, moments_of(0.5), (), draws)
    squares = np.array([0.05**2, 0.1**2]) + 0.01**2
    assert float(drawn.uncertainty(pairs).value[0]) == pytest.approx(np.sqrt(squares.mean()))
    error = squares.std(ddof=1) / np.sqrt(2) / (2 * np.sqrt(squares.mean()))
    assert float(drawn.uncertainty(pairs).stat[0]) == pytest.approx(error)
    both = InputEffect("couplings", "0.1", 2, moments_of(0.5), (pair, pair), draws)
    assert float(both.uncertainty(pairs).value[0]) == pytest.approx(np.sqrt(2 * 0.05**2 + 0.01**2))
    assert float(both.uncertainty(zz, pooled=True)) == pytest.approx(np.sqrt(2 * (2 * 0.05**2 + 0.01**2)))
