"""Branch and cut: bounds from linear programmes with cycle cuts, until value and bound meet or the nodes run out."""

from __future__ import annotations

import heapq
import math
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from anneal_ref.ground.exact import solve_exactly
from anneal_ref.ground.problem import Problem
from anneal_ref.ground.relaxation import Bound, Cut, relax, separate, violated
from anneal_ref.ground.search import first_guess, rounded, searched, tied

# what is left of a node after fixing is solved exactly if it takes no more than this (see `solve_exactly`)
NODE_BUDGET = 2.0**23
NODE_MEMORY = 2**30
# cutting ends when it gains less than this fraction of the gap over this many rounds
LEAST_GAIN = 0.002
PATIENCE = 20


@dataclass(order=True, slots=True)
class _Node:
    """A box of x that may hold a better configuration, and the lowest energy that is still possible there."""

    bound: int
    serial: int
    low: NDArray[np.float64] = field(compare=False)
    high: NDArray[np.float64] = field(compare=False)
    cuts: list[Cut] = field(compare=False)


def branch_and_cut(problem: Problem, nodes: int) -> tuple[int, int, NDArray[np.int8]]:
    """Find a configuration of low energy and prove a bound; they meet when the search ends within `nodes`.

    Each node of the tree is one linear relaxation, tightened by violated cycle inequalities. Edges whose price exceeds
    the gap are fixed, spins tied by fixed edges are merged, and what is left is solved exactly when it is small.

    Parameters
    ----------
    problem : Problem
    nodes : int
        The most nodes to work on; with 0 the bound is minus the sum of absolute values.

    Returns
    -------
    energy, bound : int
        In units of the problem; bound <= ground energy <= energy, and equal where proved.
    spins : (n,) array of int8
        The configuration with `energy`.

    References
    ----------
    F. Barahona, M. Grötschel, M. Jünger and G. Reinelt, Oper. Res. 36, 493 (1988); C. De Simone et al., J. Stat. Phys.
    80, 487 (1995).

    Examples
    --------
    >>> from anneal_ref.ground.problem import whole_numbers
    >>> branch_and_cut(whole_numbers(3, [(0, 1), (1, 2), (0, 2)], [1, 1, 1]), nodes=1)[:2]
    (-1, -1)
    """
    search = _Search(problem.with_ghost())
    while nodes > 0 and search.open and search.open[0].bound < search.energy:
        search.work_on(heapq.heappop(search.open))
        nodes -= 1
    bounds = [node.bound for node in search.open] + search.given_up
    spins = search.spins[: problem.n_sites]
    if problem.has_fields:
        spins = spins * search.spins[-1]
    return search.energy, min([search.energy, *bounds]), spins


class _Search:
    """The best configuration so far, the open nodes in the order of their bounds, and the cuts found."""

    def __init__(self, graph: Problem) -> None:
        self.graph = graph
        self.energy, self.spins = first_guess(graph)
        # all energies differ by multiples of twice, or where all sums at a site are even of four times, a unit
        sums = np.zeros(graph.n_sites, dtype=np.int64)
        np.add.at(sums, graph.edges, graph.couplings[:, None])
        self.step = 2 if (sums % 2).any() else 4
        self.pool: dict[Cut, None] = {}
        self.serial = 0
        self.open: list[_Node] = []
        self.given_up: list[int] = []
        size = graph.couplings.size
        self.push(self.possible(-graph.weight), np.zeros(size), np.ones(size), [])

    def possible(self, bound: float) -> int:
        """Return the lowest energy that a configuration can have, given that it is at least `bound`."""
        least = math.ceil(bound)
        return least + (int(self.graph.couplings.sum()) - least) % self.step

    def push(self, bound: int, low: NDArray[np.float64], high: NDArray[np.float64], cuts: list[Cut]) -> None:
        """Put a box among the open nodes."""
        self.serial += 1
        heapq.heappush(self.open, _Node(bound, self.serial, low, high, cuts))

    def offer(self, spins: NDArray[np.int8]) -> None:
        """Improve a configuration and keep it if it is the best."""
        energy, spins = searched(self.graph, spins, 10)
        if energy < self.energy:
            self.energy, self.spins = energy, spins

    def work_on(self, node: _Node) -> None:
        """Close the node, or put its two halves among the open ones."""
        relaxed = self.tighten(node)
        if relaxed is None:
            self.given_up.append(node.bound)
            return
        if node.bound >= self.energy:
            return
        # a better configuration is at least one step better; what is too expensive for that has its x fixed
        spare = self.energy - self.step - relaxed.value
        high = np.where((relaxed.prices > spare) & (node.low == 0), 0.0, node.high)
        low = np.where((-relaxed.prices > spare) & (node.high == 1), 1.0, node.low)
        fixed = low == high
        ties = None if (low > high).any() else tied(self.graph.n_sites, self.graph.edges[fixed], low[fixed] == 1)
        if ties is None:
            return
        group, sign = ties
        reduced, constant = self.graph.contracted(group, sign)
        solved = solve_exactly(reduced, NODE_BUDGET, NODE_MEMORY)
        if solved is not None:
            self.offer(sign * solved.spins[0][group])
            return
        first, second = self.graph.edges.T
        inside = group[first] == group[second]
        low[inside] = high[inside] = sign[first[inside]] != sign[second[inside]]
        self.branch(node, relaxed.x, low, high)

    def tighten(self, node: _Node) -> Bound | None:
        """Solve relaxations with more and more cuts; raise the bound of the node and leave it its active cuts."""
        best: Bound | None = None
        history = [float(node.bound)]
        while True:
            relaxed = relax(self.graph, node.cuts, node.low, node.high)
            if relaxed is None:
                return best
            if best is None or relaxed.value > best.value:
                best = relaxed
            node.bound = max(node.bound, self.possible(relaxed.value))
            history.append(best.value)
            self.offer(rounded(self.graph, relaxed.x))
            gained = history[-1] - history[max(0, len(history) - 1 - PATIENCE)]
            stalled = len(history) > PATIENCE + 1 and gained < LEAST_GAIN * (self.energy - history[-1])
            if node.bound >= self.energy or stalled:
                return best
            used = set(node.cuts)
            new = violated([cut for cut in self.pool if cut not in used], relaxed.x) or self.separated(relaxed.x)
            if not new:
                return best
            self.pool.update(dict.fromkeys(new))
            if history[-1] > history[-2]:
                node.cuts = [cut for cut, active in zip(node.cuts, relaxed.active.tolist(), strict=True) if active]
            kept = set(node.cuts)
            node.cuts = node.cuts + [cut for cut in new if cut not in kept]

    def separated(self, x: NDArray[np.float64]) -> list[Cut]:
        """Look for cuts halfway to the best configuration, where they are deeper, then at x itself.

        The best configuration obeys all cuts, so that what is violated halfway is violated at x too.
        """
        first, second = self.graph.edges.T
        inside = self.spins[first] != self.spins[second]
        return separate(self.graph, (x + inside) / 2) or separate(self.graph, x)

    def branch(self, node: _Node, x: NDArray[np.float64], low: NDArray[np.float64], high: NDArray[np.float64]) -> None:
        """Split the box at the free edge that is least decided, the strongest of those."""
        doubt = np.where(low < high, np.rint(20 * np.minimum(x, 1 - x)), -1.0)
        edge = int(np.lexsort((-np.abs(self.graph.couplings), -doubt))[0])
        for side in (0.0, 1.0):
            lower, upper = low.copy(), high.copy()
            lower[edge] = upper[edge] = side
            self.push(node.bound, lower, upper, node.cuts)
