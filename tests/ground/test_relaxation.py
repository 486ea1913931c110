"""Relaxation: cuts hold for every configuration, none is missed, and bounds hold whatever the solver returns."""

import itertools

import networkx as nx
import numpy as np
import pytest

from anneal_ref.ground import relaxation
from anneal_ref.ground.cuts import branch_and_cut
from anneal_ref.ground.enumeration import enumerate_states
from anneal_ref.ground.problem import whole_numbers
from anneal_ref.ground.relaxation import Cut, relax, separate, violated


def a_problem(seed, n=8, share=0.5):
    generator = np.random.default_rng(seed)
    pairs = [pair for pair in itertools.combinations(range(n), 2) if generator.random() < share]
    return whole_numbers(n, pairs, generator.normal(size=len(pairs)))


def all_configurations(problem):
    spins = np.array(list(itertools.product([1, -1], repeat=problem.n_sites)), dtype=np.int8)
    first, second = problem.edges.T
    return spins, (spins[:, first] != spins[:, second]).astype(float)


def excess(cut, x):
    return x[..., list(cut.odd)].sum(-1) - x[..., list(cut.even)].sum(-1) - (len(cut.odd) - 1)


@pytest.mark.parametrize("seed", range(10))
def test_cuts_hold_for_all_configurations_and_are_violated_at_x(seed):
    problem = a_problem(seed)
    _, corners = all_configurations(problem)
    x = np.random.default_rng(seed).random(problem.couplings.size)
    for point in (x, np.rint(x), x / 3):
        for cut in separate(problem, point):
            assert (excess(cut, corners) <= 0).all()
            assert excess(cut, point) > 0
            assert len(cut.odd) % 2 == 1
            assert len({*cut.odd, *cut.even}) == len(cut.odd + cut.even)


@pytest.mark.parametrize("seed", range(10))
def test_no_violated_cycle_is_missed(seed):
    # independent check: all simple cycles by networkx, all odd parts by their best choice
    problem = a_problem(seed, n=7)
    x = 0.25 + 0.5 * np.random.default_rng(seed).random(problem.couplings.size)
    place = {frozenset(map(int, pair)): k for k, pair in enumerate(problem.edges)}
    graph = nx.Graph(map(tuple, problem.edges.tolist()))
    worst = 0.0
    for cycle in nx.simple_cycles(graph):
        edges = [place[frozenset(pair)] for pair in zip(cycle, cycle[1:] + cycle[:1], strict=True)]
        for size in range(1, len(edges) + 1, 2):
            for odd in itertools.combinations(edges, size):
                even = tuple(set(edges) - set(odd))
                worst = max(worst, float(excess(Cut(odd, even), x)))
    found = separate(problem, x)
    assert max((float(excess(cut, x)) for cut in found), default=0.0) == pytest.approx(worst, abs=1e-4)
    assert bool(found) == (worst > 1e-4)


def test_no_cut_at_a_configuration():
    problem = a_problem(3)
    _, corners = all_configurations(problem)
    assert not any(separate(problem, corner) for corner in corners[::17])


def tightened(problem, rounds=30):
    low, high = np.zeros(problem.couplings.size), np.ones(problem.couplings.size)
    cuts = []
    for _ in range(rounds):
        bound = relax(problem, cuts, low, high)
        cuts += separate(problem, bound.x)
    return bound, cuts, low, high


def test_bound_and_prices_hold_for_all_configurations():
    problem = a_problem(5)
    bound, cuts, low, high = tightened(problem)
    spins, corners = all_configurations(problem)
    energies = np.array([problem.energy(s) for s in spins], dtype=float)
    against = np.where(bound.prices > 0, corners, 1 - corners) * np.abs(bound.prices)
    assert (energies >= bound.value + against.sum(axis=1)).all()
    assert not violated(cuts, corners[0])
    assert energies.min() - bound.value < 0.05 * abs(bound.value)
    # one edge fixed against its price
    edge = int(np.argmax(bound.prices))
    low[edge] = 1
    fixed = relax(problem, cuts, low, high)
    assert (energies[corners[:, edge] == 1] >= fixed.value).all()
    assert fixed.value > bound.value


@pytest.mark.parametrize("noise", [1e-7, 1e-3, 1.0])
def test_bounds_do_not_trust_the_solver(monkeypatch, noise):
    problem = a_problem(6, n=9, share=0.6)
    least, _, _ = enumerate_states(problem)
    honest = relaxation.linprog
    generator = np.random.default_rng(1)
    claims = []

    def careless(*arguments, **settings):
        result = honest(*arguments, **settings)
        result.ineqlin.marginals = result.ineqlin.marginals + noise * generator.normal(
            size=result.ineqlin.marginals.shape
        )
        result.x = np.clip(result.x + noise * generator.normal(size=result.x.shape), 0, 1)
        result.fun = result.fun + 2 * noise * abs(result.fun)
        claims.append(result.fun)
        return result

    monkeypatch.setattr(relaxation, "linprog", careless)
    bound, *_ = tightened(problem, rounds=15)
    assert bound.value <= least
    # the wrong twin believes the solver's own optimum, and claims too much
    scale = float(np.abs(problem.couplings).max())
    assert problem.couplings.sum() + scale * max(claims[5:]) > bound.value
    energy, proved_bound, _ = branch_and_cut(problem, nodes=30)
    assert proved_bound <= least <= energy


def test_a_solver_that_fails_proves_nothing(monkeypatch):
    problem = a_problem(6, n=9, share=0.6)

    class Failed:
        x = None

    monkeypatch.setattr(relaxation, "linprog", lambda *arguments, **settings: Failed())
    least, _, _ = enumerate_states(problem)
    energy, bound, _ = branch_and_cut(problem, nodes=30)
    assert bound < least <= energy


def test_a_false_cut_is_noticed():
    # the wrong twin forgets an edge of each cycle: its bounds rise above the ground energy, ours never do
    for seed in range(4):
        problem = a_problem(seed, n=14, share=0.4)
        least, _, _ = enumerate_states(problem)
        bound, cuts, low, high = tightened(problem)
        assert bound.value <= least
        wrong = [Cut(tuple(set(cut.odd) - {edge}), cut.even) for cut in cuts for edge in cut.odd if len(cut.odd) > 1]
        assert relax(problem, cuts + wrong, low, high).value > least
