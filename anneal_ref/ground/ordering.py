"""Elimination orders: which spin to minimise over next so that the tables stay small."""

from __future__ import annotations

import heapq
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from scipy.sparse import csr_array
from scipy.sparse.csgraph import breadth_first_order, reverse_cuthill_mckee

from anneal_ref.ground.problem import Problem

# beyond this many neighbours no order is followed further: its tables would not fit any memory
WIDEST = 30


@dataclass(frozen=True, slots=True)
class Ordering:
    """Order of elimination and, for each spin of it, the later spins that its table depends on (its frontier)."""

    order: tuple[int, ...]
    frontiers: tuple[tuple[int, ...], ...]

    @property
    def width(self) -> int:
        """Size of the largest frontier."""
        return max(map(len, self.frontiers), default=0)

    @property
    def cost(self) -> float:
        """Number of table entries that are computed."""
        return float(sum(2.0 ** len(frontier) for frontier in self.frontiers))


def best_ordering(problem: Problem) -> Ordering | None:
    """Try sweeps along the sites, along breadth-first layers, and two greedy rules; return the cheapest, or None.

    References
    ----------
    U. Bertele and F. Brioschi, *Nonserial Dynamic Programming* (Academic Press, 1972), for elimination orders and the
    greedy rules of least degree and least fill-in.

    Examples
    --------
    >>> from anneal_ref.ground.problem import whole_numbers
    >>> best_ordering(whole_numbers(4, [(0, 1), (1, 2), (2, 3), (0, 3)], [1, 1, 1, 1])).width
    2
    """
    neighbours = [0] * problem.n_sites
    for first, second in problem.edges.tolist():
        neighbours[first] |= 1 << second
        neighbours[second] |= 1 << first
    candidates = [_followed(neighbours, sweep) for sweep in _sweeps(problem)]
    candidates += [_greedy(neighbours, fill=False), _greedy(neighbours, fill=True)]
    # the widest table counts several times over, for its memory; ties go to the first of the list, the same everywhere
    return min((c for c in candidates if c is not None), key=lambda c: c.cost + 8 * 2.0**c.width, default=None)


def _sweeps(problem: Problem) -> Iterator[list[int]]:
    yield list(range(problem.n_sites))
    graph = problem.graph()
    pattern = csr_array((np.ones(graph.nnz), graph.indices, graph.indptr), shape=graph.shape)
    yield reverse_cuthill_mckee(pattern, symmetric_mode=True).tolist()
    start = 0
    for _ in range(2):
        # the last site of a breadth-first sweep is far out: start the next sweep there
        layers = breadth_first_order(pattern, start, directed=False, return_predecessors=False).tolist()
        yield layers + sorted(set(range(problem.n_sites)).difference(layers))
        start = layers[-1]


def _followed(neighbours: list[int], sweep: list[int]) -> Ordering | None:
    remaining, frontiers = list(neighbours), []
    for site in sweep:
        frontier = _eliminate(remaining, site)
        if len(frontier) > WIDEST:
            return None
        frontiers.append(frontier)
    return Ordering(tuple(sweep), tuple(frontiers))


def _greedy(neighbours: list[int], fill: bool) -> Ordering | None:
    remaining, order, frontiers = list(neighbours), [], []
    scores = {site: _score(remaining, site, fill) for site in range(len(neighbours))}
    queue = [(score, site) for site, score in scores.items()]
    heapq.heapify(queue)
    while scores:
        score, site = heapq.heappop(queue)
        if scores.get(site) != score:
            # eliminated, or queued again with another score
            continue
        if remaining[site].bit_count() > WIDEST:
            return None
        frontier = _eliminate(remaining, site)
        del scores[site]
        order.append(site)
        frontiers.append(frontier)
        stale = set(frontier)
        if fill:
            stale.update(*(_bits(remaining[other]) for other in frontier))
        for other in stale:
            scores[other] = _score(remaining, other, fill)
            heapq.heappush(queue, (scores[other], other))
    return Ordering(tuple(order), tuple(frontiers))


def _score(remaining: list[int], site: int, fill: bool) -> tuple[int, int]:
    mask = remaining[site]
    degree = mask.bit_count()
    if not fill:
        return degree, 0
    missing = degree * (degree - 1) - sum((remaining[other] & mask).bit_count() for other in _bits(mask))
    return missing, degree


def _eliminate(remaining: list[int], site: int) -> tuple[int, ...]:
    """Join all neighbours of the site with each other and take it out; return them, ascending."""
    mask = remaining[site]
    frontier = _bits(mask)
    for other in frontier:
        remaining[other] = (remaining[other] | mask) & ~(1 << site | 1 << other)
    remaining[site] = 0
    return frontier


def _bits(mask: int) -> tuple[int, ...]:
    places = []
    while mask:
        low = mask & -mask
        places.append(low.bit_length() - 1)
        mask ^= low
    return tuple(places)
