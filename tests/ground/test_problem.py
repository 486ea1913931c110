"""Problems in whole numbers: units, reductions that keep every energy, orders of elimination, the local search."""

import itertools
import math

import numpy as np
import pytest

from anneal_ref.base.errors import InputError
from anneal_ref.ground.enumeration import ROOM, enumerate_states
from anneal_ref.ground.ordering import best_ordering
from anneal_ref.ground.problem import LARGEST_SUM, whole_numbers
from anneal_ref.ground.search import first_guess, rounded, searched, tied
from anneal_ref.ground.strips import eliminate, plan_strips


def a_problem(seed, n=9, share=0.5, fields=True):
    generator = np.random.default_rng(seed)
    pairs = [pair for pair in itertools.combinations(range(n), 2) if generator.random() < share]
    return whole_numbers(n, pairs, generator.normal(size=len(pairs)), generator.normal(size=n) if fields else None)


@pytest.mark.parametrize(
    ("values", "unit", "wholes"),
    [
        ([1.0, -1.0, 1.0], 1.0, [1, -1, 1]),
        ([0.7, -0.7, 0.7], 0.7, [1, -1, 1]),
        ([2.0, 3.0, -4.0], 1.0, [2, 3, -4]),
        ([0.1, 0.2, 0.3], 0.1, [1, 2, 3]),
        ([2 / 3, -1 / 3, 1.0], 1 / 3, [2, -1, 3]),
        ([0.6, 0.4, -1.0], 0.2, [3, 2, -5]),
        ([5e-324, 1e-320, 0.0], 5e-324, [1, 2024]),
    ],
)
def test_units(values, unit, wholes):
    problem = whole_numbers(4, [(0, 1), (1, 2), (2, 3)], values)
    assert problem.unit == pytest.approx(unit, rel=1e-15)
    assert problem.couplings.tolist() == wholes
    assert problem.slack == 0


def test_values_of_the_disorder_grid_are_exact():
    values = np.rint(np.random.default_rng(1).normal(size=200) * 2**32) / 2**32
    problem = whole_numbers(201, [(k, k + 1) for k in range(200)], values)
    assert (problem.couplings * problem.unit == values).all()
    assert (problem.rounding, problem.slack) == (0, 0)


def test_other_values_are_rounded_and_say_so():
    values = np.random.default_rng(1).normal(size=200) * math.pi
    problem = whole_numbers(201, [(k, k + 1) for k in range(200)], values)
    assert problem.weight < LARGEST_SUM
    assert np.abs(problem.couplings * problem.unit - values).sum() <= problem.rounding
    assert 0 < problem.rounding < 1e-14 * np.abs(values).sum()


@pytest.mark.parametrize(
    ("edges", "couplings", "fields", "words"),
    [
        ([(0, 3)], [1], None, "from 0 to 2"),
        ([(-1, 2)], [1], None, "from 0 to 2"),
        ([(1, 1)], [1], None, "edge 0 joins 1 to itself"),
        ([(0, 1), (1, 0)], [1, 1], None, r"\(0, 1\) is there more than once"),
        ([(0, 1)], [1, 2], None, "couplings must have shape"),
        ([(0, 1)], [np.nan], None, "couplings must be finite"),
        ([(0, 1)], [1], [0, np.inf, 0], "fields must be finite"),
        ([(0, 1)], [1], [0, 1], "fields must have shape"),
        ([(0, 1, 2)], [1], None, "edges must have shape"),
    ],
)
def test_bad_arrays(edges, couplings, fields, words):
    with pytest.raises(InputError, match=words):
        whole_numbers(3, edges, couplings, fields)


@pytest.mark.parametrize("seed", range(4))
def test_reductions_keep_every_energy(seed):
    problem = a_problem(seed)
    generator = np.random.default_rng(seed)
    spins = 2 * generator.integers(0, 2, size=(40, 9), dtype=np.int8) - 1
    pinned, constant = problem.pinned(4)
    ghost = problem.with_ghost()
    for s in spins:
        direct = int(sum(J * s[i] * s[j] for (i, j), J in zip(problem.edges, problem.couplings, strict=True)))
        assert problem.energy(s) == direct + int(problem.fields @ s)
        up = s.copy()
        up[4] = 1
        assert pinned.energy(np.delete(up, 4)) + constant == problem.energy(up)
        assert ghost.energy(np.append(s, np.int8(1))) == ghost.energy(np.append(-s, np.int8(-1))) == problem.energy(s)
    group, sign = np.array([0, 1, 2, 0, 1, 2, 3, 3, 0]), 2 * generator.integers(0, 2, 9, dtype=np.int8) - 1
    reduced, constant = problem.contracted(group, sign)
    for t in itertools.product([1, -1], repeat=4):
        t = np.array(t, dtype=np.int8)
        assert reduced.energy(t) + constant == problem.energy(sign * t[group])


def test_orders_are_narrow():
    def square(nx, ny):
        along = [(x * ny + y, x * ny + y + 1) for x in range(nx) for y in range(ny - 1)]
        return along + [(x * ny + y, x * ny + y + ny) for x in range(nx - 1) for y in range(ny)]

    for n_sites, edges, width in (
        (30, [(k, k + 1) for k in range(29)], 1),
        (30, [(k, (k + 1) % 30) for k in range(30)], 2),
        (63, [(k, (k - 1) // 2) for k in range(1, 63)], 1),
        (100, square(20, 5), 5),
        (100, square(5, 20), 5),
        (12, list(itertools.combinations(range(12), 2)), 11),
    ):
        shuffled = np.random.default_rng(3).permutation(n_sites)
        for names in (np.arange(n_sites), shuffled):
            problem = whole_numbers(n_sites, names[np.array(edges)], np.ones(len(edges)))
            ordering = best_ordering(problem)
            assert sorted(ordering.order) == list(range(n_sites))
            assert ordering.width <= width + (n_sites == 100 and names is shuffled)
    assert best_ordering(whole_numbers(40, list(itertools.combinations(range(40), 2)), np.ones(780))) is None


def test_more_states_than_room():
    # 14 free spins
    problem = whole_numbers(14, np.empty((0, 2)), [])
    assert 2**14 > ROOM
    for energy, count, spins in (
        enumerate_states(problem, limit=2**20),
        eliminate(problem, plan_strips(problem), limit=2**20),
    ):
        assert (energy, count) == (0, 2**14)
        assert len({bytes(s) for s in spins}) == 2**14
    assert len(enumerate_states(problem, limit=9000)[2]) == 9000


@pytest.mark.parametrize("fields", [False, True])
def test_search_never_loses(fields):
    problem = a_problem(2, n=14, fields=fields)
    least, _, _ = enumerate_states(problem)
    start = np.ones(14, dtype=np.int8)
    for sweeps in (0, 1, 20):
        energy, spins = searched(problem, start, sweeps)
        assert least <= energy == problem.energy(spins) <= problem.energy(start)
    assert first_guess(problem)[0] == least


def test_ties():
    edges = np.array([(0, 1), (1, 2), (3, 4)])
    group, sign = tied(6, edges, np.array([True, False, True]))
    assert len(set(group[[0, 1, 2]])) == len(set(group[[3, 4]])) == 1
    assert len(set(group)) == 3
    assert (sign[0] * sign[1], sign[1] * sign[2], sign[3] * sign[4]) == (-1, 1, -1)
    triangle = np.array([(0, 1), (1, 2), (0, 2)])
    assert tied(3, triangle, np.array([True, True, True])) is None
    assert tied(3, triangle, np.array([True, True, False])) is not None


@pytest.mark.parametrize("order", [1, -1])
def test_rounding_reads_a_configuration_back(order):
    drawn = a_problem(1, fields=False)
    problem = whole_numbers(9, drawn.edges[:, ::order], drawn.couplings)
    spins = np.array([1, -1, -1, 1, 1, 1, -1, 1, -1], dtype=np.int8)
    x = (spins[problem.edges[:, 0]] != spins[problem.edges[:, 1]]).astype(float)
    assert problem.energy(rounded(problem, x)) == problem.energy(spins)


def test_values_of_any_two_sizes_have_a_unit():
    problem = whole_numbers(3, [(0, 1), (1, 2)], [1e300, -1e-300])
    assert problem.couplings.tolist() == [int(1e300 / problem.unit)]
    assert problem.slack > 0
