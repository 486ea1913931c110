"""Evolutions against the state vector: every lattice, fast and slow, with and without fields; error against the cap."""

import numpy as np
import pytest
from scipy.integrate import solve_ivp

import anneal_ref as ar

lattices = ar.lattices
SCHEDULE = ar.Schedule.polynomial([5, -10, 5], [0, 5])
FAMILIES = {
    "chain": lattices.chain(9),
    "ring": lattices.chain(8, periodic=True),
    "ladder": lattices.ladder(4),
    "ladder ring": lattices.ladder(4, periodic=True),
    "square": lattices.square(3, 3),
    "cylinder": lattices.square(3, 3, (False, True)),
    "torus": lattices.square(3, 3, (True, True)),
    "triangular": lattices.triangular(3, 3),
    "honeycomb": lattices.honeycomb(2, 2),
    "cubic": lattices.cubic(2, 2, 2),
    "diamond": lattices.diamond(1, 2, 2),
    "biclique": lattices.biclique(4, 5),
    "complete": lattices.complete(8),
    "random regular": lattices.random_regular(10, 3, seed=1),
    "diluted": lattices.square(3, 4).diluted(dead=[5, 7]),
    "two pieces": lattices.from_edges(9, [(0, 5), (5, 8), (1, 6), (6, 2), (2, 7), (7, 1), (0, 3)]),
}
FULL = ar.MPS(bond_dimension=32, truncation=1e-16, halvings=3)
EXACT = ar.StateVector(tolerance=1e-10)


def instance(lattice, kind="plain", seed=0):
    generator, n = np.random.default_rng([seed, lattice.n_sites]), lattice.n_sites
    fields = generator.normal(size=n) if "fields" in kind else None
    weights = generator.uniform(0.4, 1.6, n) if "weights" in kind else None
    return ar.Instance(lattice, generator.normal(size=len(lattice.edges)), fields, weights)


# ----------------------------------------------------------------------------------------- full bond dimension
@pytest.mark.parametrize("duration", [0.4, 2.0], ids=["fast", "slow"])
@pytest.mark.parametrize("kind", ["plain", "fields and weights"])
@pytest.mark.parametrize("family", FAMILIES)
def test_every_lattice_at_full_bond_dimension(apart, family, kind, duration):
    anneal = ar.Anneal(instance(FAMILIES[family], kind), SCHEDULE, duration)
    state = FULL.evolve(anneal)
    assert apart(state, EXACT.evolve(anneal)) < 1e-6
    assert state.ledger["symmetric"] == (kind == "plain")
    assert abs(state.ledger["norm_drift"]) < 1e-11


@pytest.mark.slow
@pytest.mark.parametrize("family", FAMILIES)
def test_long_anneals_at_full_bond_dimension(apart, family):
    kind = ("plain", "fields and weights")[list(FAMILIES).index(family) % 2]
    anneal = ar.Anneal(instance(FAMILIES[family], kind, seed=1), SCHEDULE, 10.0)
    assert apart(FULL.evolve(anneal), EXACT.evolve(anneal)) < 1e-6


# -------------------------------------------------------------------------------------------------- special cases
CHAIN = instance(lattices.chain(6))
LADDER = instance(lattices.ladder(4), "fields")
S = np.linspace(0, 1, 101)


def weighted(case, weights):
    return ar.Instance(case.lattice, case.couplings, case.fields, weights)


def alone(n, fields=None, weights=None):
    return ar.Instance(lattices.from_edges(n, []), [], fields, weights)


def linear(transverse, problem):
    return ar.Schedule.linear(transverse, problem)


SPECIAL = {
    "one spin": (alone(1), SCHEDULE),
    "one spin in a field": (alone(1, [0.7]), SCHEDULE),
    "one spin that nothing acts on": (alone(1, None, [0.0]), SCHEDULE),
    "two spins": (instance(lattices.chain(2)), SCHEDULE),
    "two spins in fields": (instance(lattices.chain(2), "fields"), SCHEDULE),
    "two spins that nothing acts on": (alone(2, None, [0.0, 0.0]), SCHEDULE),
    "spins without couplings": (alone(4, [1.0, 0.0, -2.0, 0.5]), SCHEDULE),
    "couplings of zero": (ar.Instance(lattices.chain(4), [0.0, 1.0, 0.0]), SCHEDULE),
    "no weight on some sites": (weighted(CHAIN, [1, 0, 1.3, 0, 0, 2]), SCHEDULE),
    "no weight on some sites, fields": (weighted(LADDER, [1, 0, 1.3, 0, 0, 2, 1, 1]), SCHEDULE),
    "no weight at all": (weighted(CHAIN, np.zeros(6)), SCHEDULE),
    "one field among many spins": (ar.Instance(CHAIN.lattice, CHAIN.couplings, [0, 0, 1, 0, 0, 0]), SCHEDULE),
    "negative problem": (LADDER, linear((5.0, 0.0), (0.0, -5.0))),
    "from minus to plus": (LADDER, linear((2.0, 2.0), (-4.0, 4.0))),
    "no transverse field": (LADDER, linear((0.0, 0.0), (1.0, 1.0))),
    "no problem": (LADDER, linear((1.0, 1.0), (0.0, 0.0))),
    "nothing": (LADDER, linear((0.0, 0.0), (0.0, 0.0))),
    "nothing for a while": (
        LADDER, ar.Schedule.from_table([0, 0.3, 0.5, 0.7, 1], [5, 5, 0, 0, 2], [0, 2, 0, 0, 3], interpolation="linear")
    ),
    "a long table": (LADDER, ar.Schedule.from_table(S, 5 * (1 - S) ** 2, 5 * S**1.5, interpolation="linear")),
    "GHz": (CHAIN, ar.Schedule.from_table(S, (1 - S) ** 2, 0.8 * S, unit="GHz")),
}  # fmt: skip


@pytest.mark.parametrize("case", SPECIAL)
@pytest.mark.filterwarnings("ignore::anneal_ref.base.errors.AnnealRefWarning")
def test_special_cases(apart, case):
    state = FULL.evolve(anneal := ar.Anneal(*SPECIAL[case], 1.0))
    # corners of a table inside a step cost its fourth order
    corners = case in ("nothing for a while", "a long table")
    assert apart(state, EXACT.evolve(anneal)) < (3e-5 if corners else 1e-6)


@pytest.mark.parametrize(
    "waveform",
    [ar.Waveform([0, 0.3, 0.6, 1], [0, 0, 0.5, 1]), ar.Waveform([0, 0.3, 0.7, 1], [0, 0.5, 0.5, 1]),
     ar.Waveform([0, 0.9, 1], [0, 0.4, 1]), ar.Waveform([0, 0.5, 0.7, 1], [0, 0.8, 0.3, 1])],
    ids=["late", "pause", "fast ending", "back and forth"],
)  # fmt: skip
def test_waveforms(apart, waveform):
    anneal = ar.Anneal(LADDER, SCHEDULE, 1.5, waveform=waveform)
    assert apart(FULL.evolve(anneal), EXACT.evolve(anneal)) < 1e-6
    assert apart(FULL.evolve(anneal), EXACT.evolve(ar.Anneal(LADDER, SCHEDULE, 1.5))) > 1e-3


@pytest.mark.filterwarnings("ignore::anneal_ref.base.errors.AnnealRefWarning")
@pytest.mark.parametrize("lattice", [lattices.complete(12), lattices.square(3, 4, (False, True))], ids=str)
def test_a_quench(apart, lattice):
    # a problem part from the first moment, between spins far apart on the chain
    anneal = ar.Anneal(instance(lattice), linear((1.0, 1.0), (1.0, 1.0)), 0.5)
    exact = EXACT.evolve(anneal)
    backend = ar.MPS(bond_dimension=64, truncation=1e-16)
    assert apart(backend.evolve(anneal), exact) < 2e-5
    assert apart(backend.finer("step").finer("step").evolve(anneal), exact) < 1e-6


def test_one_strong_bond_and_one_strong_field(apart):
    # the step follows the root mean square over the sites; a single strong term must not escape the local exponentials
    for couplings, fields in (([30.0] + [1.0] * 7, None), ([1.0] * 8, [30.0] + [0.0] * 8)):
        anneal = ar.Anneal(ar.Instance(lattices.chain(9), couplings, fields), SCHEDULE, 0.5)
        assert apart(FULL.evolve(anneal), EXACT.evolve(anneal)) < 2e-6


# ------------------------------------------------------------------------------------------------------ wrong twins
@pytest.mark.parametrize("wrong", ["a sign", "one field forgotten", "weights forgotten", "two sites swapped"])
def test_the_suite_would_see(apart, wrong):
    case = instance(lattices.ladder(4), "fields and weights")
    signs, keep = np.ones(len(case.couplings)), np.ones(8)
    signs[3], keep[2] = -1, 0
    twin = {
        "a sign": ar.Instance(case.lattice, signs * case.couplings, case.fields, case.transverse),
        "one field forgotten": ar.Instance(case.lattice, case.couplings, keep * case.fields, case.transverse),
        "weights forgotten": ar.Instance(case.lattice, case.couplings, case.fields),
        "two sites swapped": case.relabelled([1, 0, 2, 3, 4, 5, 6, 7]),
    }[wrong]
    exact = EXACT.evolve(ar.Anneal(case, SCHEDULE, 0.4))
    assert apart(FULL.evolve(ar.Anneal(twin, SCHEDULE, 0.4)), exact) > 1e-3


# ----------------------------------------------------------------------------------------------------- closed forms
# kink densities of the ramped ring, exact to the digits given: free fermions, mode by mode, after J. Dziarmaga,
# Phys. Rev. Lett. 95, 245701 (2005)
@pytest.mark.parametrize(
    ("n", "duration", "kinks"),
    [(8, 1, 0.372992042), (8, 2, 0.231816184), (8, 4, 0.149820100), (8, 8, 0.095740257), (12, 1, 0.372992042),
     (12, 2, 0.231817604), (12, 4, 0.151528676),
     *(pytest.param(*row, marks=pytest.mark.slow) for row in ((8, 32, 0.004979754), (8, 128, 0.000001589),
       (12, 8, 0.111718514), (12, 32, 0.029826126), (12, 128, 0.000172204)))],
)  # fmt: skip
def test_kinks_of_the_standard_ramp(n, duration, kinks):
    ring = ar.Instance(lattices.chain(n, periodic=True), -np.ones(n))
    anneal = ar.Anneal(ring, linear((1.0, 0.0), (0.0, 1.0)), duration)
    state = ar.MPS(bond_dimension=64, halvings=3, truncation=1e-14).evolve(anneal)
    i, j = ring.lattice.edges.T
    np.testing.assert_allclose((1 - state.moments().zz.value[i, j]) / 2, kinks, atol=1e-6)


def test_kinks_of_an_open_chain(apart):
    # far inside a long chain a fast ramp does not feel the ends: the value of the infinite ring
    chain = ar.Instance(lattices.chain(24), -np.ones(23))
    anneal = ar.Anneal(chain, linear((1.0, 0.0), (0.0, 1.0)), 1.0)
    state = ar.MPS(bond_dimension=32, halvings=2).evolve(anneal)
    assert (1 - state.moments().zz.value[11, 12]) / 2 == pytest.approx(0.372992042, abs=2e-6)


def mean_field(anneal):
    """Three components of every spin in the mean field of the others, by SciPy; returns shape (N, 3)."""
    case, couplings = anneal.instance, anneal.instance.coupling_matrix()

    def turn(t, flat):
        m = flat.reshape(-1, 3)
        fields = anneal.problem(t) * (couplings @ m[:, 2] + case.fields)
        axis = np.stack([-anneal.transverse(t) * case.transverse, np.zeros(len(m)), fields], axis=1)
        return 2 * np.cross(axis, m).ravel()

    start = np.tile([1.0, 0.0, 0.0], case.n_sites)
    return solve_ivp(turn, (0, anneal.duration), start, "DOP853", rtol=1e-10, atol=1e-12).y[:, -1].reshape(-1, 3)


def test_bond_dimension_one_is_mean_field():
    # dm_i/dt = 2 B_i x m_i with B_i = (-G w_i, 0, P (sum_j J_ij m_j^z + h_i)): by hand
    anneal = ar.Anneal(instance(lattices.ladder(3), "fields and weights"), SCHEDULE, 1.0)
    wanted, errors = mean_field(anneal), []
    for halvings in (3, 4, 5):
        moments = ar.MPS(bond_dimension=1, halvings=halvings).evolve(anneal).moments()
        errors.append(max(np.abs(moments.z.value - wanted[:, 2]).max(), np.abs(moments.x.value - wanted[:, 0]).max()))
        outer = np.outer(moments.z.value, moments.z.value)
        np.testing.assert_allclose(moments.zz.value, outer + np.diag(1 - np.diag(outer)), atol=1e-10)
    # of first order, since pairs are evolved together now and then
    np.testing.assert_allclose(np.log2(np.divide(errors[:-1], errors[1:])), 1, atol=0.3)
    assert errors[-1] < 1e-2


def test_bond_dimension_one_with_the_symmetry_stays_where_it_is():
    # products of |+> and |-> are all there is
    anneal = ar.Anneal(instance(lattices.ladder(3)), SCHEDULE, 1.0)
    moments = ar.MPS(bond_dimension=1).evolve(anneal).moments()
    np.testing.assert_allclose(np.abs(moments.x.value), 1.0, atol=1e-12)
    np.testing.assert_allclose(moments.zz.value, np.eye(6), atol=1e-12)


# ------------------------------------------------------------------------------------------------- against the cap
LARGE = {
    "cylinder": lattices.square(4, 4, (False, True)),
    "cubic": lattices.cubic(2, 2, 4),
    "diamond": lattices.diamond(2, 2, 2),
    "biclique": lattices.biclique(8, 8),
    "triangular": lattices.triangular(4, 4),
    "honeycomb": lattices.honeycomb(2, 4),
}


@pytest.mark.slow
@pytest.mark.parametrize("duration", [0.3, 1.0], ids=["fast", "slow"])
@pytest.mark.parametrize("family", LARGE)
def test_error_against_the_cap(apart, family, duration):
    case = ar.draw_instance(LARGE[family], ar.disorder.gaussian(), seed=7)
    anneal = ar.Anneal(case, SCHEDULE, duration)
    exact = ar.StateVector(tolerance=1e-9).evolve(anneal)
    # bonds of the biclique need all of their room
    caps = (16, 64, 256) if family == "biclique" else (8, 16, 32, 64, 128)
    states = [ar.MPS(bond_dimension=cap, truncation=1e-14).evolve(anneal) for cap in caps]
    errors = np.array([apart(state, exact) for state in states])
    weights = np.array([state.ledger["discarded_weight"] for state in states])
    # the error falls from cap to cap until only that of the step is left
    floor = errors[-1]
    falling = errors[1:] > 3 * floor
    assert errors[0] > 2 * floor
    assert (errors[1:][falling] < errors[:-1][falling]).all()
    assert floor < 1e-3
    # what is discarded goes on falling, down to what the truncation allows
    assert (np.diff(weights)[weights[1:] > 1e-9] < 0).all()
    assert weights[-1] < 1e-9
    # and the floor falls with the fourth power of the step
    finer = ar.MPS(bond_dimension=caps[-1], truncation=1e-14, halvings=1).evolve(anneal)
    assert apart(finer, exact) < floor / 10


@pytest.mark.nightly
@pytest.mark.timeout(3600)
def test_error_against_the_cap_on_25_spins(apart):
    case = ar.draw_instance(lattices.square(5, 5, (False, True)), ar.disorder.plus_minus(), seed=7)
    anneal = ar.Anneal(case, SCHEDULE, 5.0)
    exact = ar.StateVector(tolerance=1e-7).evolve(anneal)
    errors = [apart(ar.MPS(bond_dimension=cap).evolve(anneal), exact) for cap in (16, 32, 64, 128, 256)]
    assert (np.diff(errors) < 0).all()
    assert errors[-1] < 1e-3


@pytest.mark.nightly
def test_36_spins_go_through(apart):
    case = ar.draw_instance(lattices.square(6, 6, (False, True)), ar.disorder.plus_minus(), seed=7)
    anneal = ar.Anneal(case, SCHEDULE, 5.0)
    small, middle, large = (ar.MPS(bond_dimension=cap).evolve(anneal) for cap in (16, 32, 64))
    assert large.ledger["largest_bond"] == 64
    assert small.ledger["discarded_weight"] > middle.ledger["discarded_weight"] > large.ledger["discarded_weight"]
    assert abs(large.ledger["norm_drift"]) < 1e-11
    assert apart(middle, large) < apart(small, large)
    samples, moments = large.sample(2000, seed=1), large.moments()
    # a normal bound at 1e-4 over 630 pairs
    spread = np.sqrt((1 - moments.zz.value**2) / 2000)
    assert (np.abs(samples.moments().zz.value - moments.zz.value) < 5.2 * spread + 5e-3).all()
