"""Linear relaxation of the cut problem, tightened by odd-cycle inequalities; its bounds hold whatever the solver does.

With x_e = 1 on pairs with s_i != s_j, E = sum J - 2 sum J x. A cycle changes side an even number of times, so for each
cycle C and each odd part F of it, x(F) - x(C without F) <= |F| - 1.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import linprog
from scipy.sparse import csr_array
from scipy.sparse.csgraph import dijkstra

from anneal_ref.ground.problem import Problem

# among cycles that are violated equally short ones are better; small enough not to hide a violated one that matters
STEP_WEIGHT = 1e-6
LEAST_VIOLATION = 1e-5
SOURCES = 512


@dataclass(frozen=True, slots=True)
class Cut:
    """One inequality x(odd) - x(even) <= |odd| - 1 over the edges of a cycle."""

    odd: tuple[int, ...]
    even: tuple[int, ...]


@dataclass(frozen=True, slots=True, eq=False)
class Bound:
    """What one linear programme proves about all configurations whose x lies in a box.

    Parameters
    ----------
    value : float
        No configuration in the box has a lower energy (units of the problem). It follows from the multipliers by
        arithmetic whose rounding is subtracted, so it does not depend on the tolerances of the solver.
    prices : (m,) array
        Every free edge with x = 1 and a positive price, or x = 0 and a negative one, costs the price on top of `value`.
    x : (m,) array
        The solver's solution, within the box.
    active : (k,) array of bool
        Which of the cuts have a multiplier above zero.
    """

    value: float
    prices: NDArray[np.float64]
    x: NDArray[np.float64]
    active: NDArray[np.bool_]


def relax(problem: Problem, cuts: list[Cut], low: NDArray[np.float64], high: NDArray[np.float64]) -> Bound | None:
    """Minimise the energy over the box and the cuts; None where the solver gives no multipliers.

    For any multipliers y >= 0 of A x <= b, the minimum of c x over the box is at least -y b plus the minimum over the
    box of (c + A^T y) x (weak duality); the latter is found edge by edge.
    """
    scale = float(np.abs(problem.couplings).max())
    cost = -2.0 * problem.couplings / scale
    matrix, limits = _rows(cuts, cost.size)
    result = linprog(
        cost,
        A_ub=matrix if cuts else None,
        b_ub=limits if cuts else None,
        bounds=list(zip(low.tolist(), high.tolist(), strict=True)),
        method="highs-ds",
    )
    if result.x is None:
        return None
    multipliers = np.maximum(0.0, -result.ineqlin.marginals) if cuts else np.zeros(0)
    prices = cost + matrix.T @ multipliers
    terms = np.concatenate([-multipliers * limits, np.where(prices > 0, prices * low, prices * high)])
    # each price is a sum of products, each correct to one unit in the last place of the largest partial sum
    magnitude = multipliers @ limits + np.abs(cost).sum() + (abs(matrix).T @ multipliers).sum()
    rounding = (len(cuts) + 8) * 2.0**-52 * magnitude
    value = float(problem.couplings.sum()) + scale * (math.fsum(terms) - rounding)
    return Bound(value - 2.0**-50 * problem.weight, scale * prices, np.clip(result.x, low, high), multipliers > 1e-9)


def separate(problem: Problem, x: NDArray[np.float64]) -> list[Cut]:
    """Find violated cycle inequalities, of cycles of any length: the worst through each edge, without repetition.

    References
    ----------
    F. Barahona and A. R. Mahjoub, Math. Programming 36, 157 (1986): shortest paths between the two copies of a site in
    a doubled graph, where an edge costs x within a copy and 1 - x between the copies.
    """
    n_sites = problem.n_sites
    first, second = problem.edges.T.astype(np.int32)  # scipy's graph routines want 32-bit indices
    stay, cross = np.maximum(x, 0) + STEP_WEIGHT, np.maximum(1 - x, 0) + STEP_WEIGHT
    rows = np.concatenate([first, first + n_sites, first, first + n_sites])
    columns = np.concatenate([second, second + n_sites, second + n_sites, second])
    weights = np.concatenate([stay, stay, cross, cross])
    doubled = csr_array((weights, (rows, columns)), shape=(2 * n_sites, 2 * n_sites))
    edge_of = {pair: place for place, pair in enumerate(map(tuple, np.sort(problem.edges, axis=1).tolist()))}
    cuts: dict[Cut, float] = {}
    for start in range(0, n_sites, SOURCES):
        # the table of distances is as wide as the doubled graph, so only a block of sources at a time
        edges = np.flatnonzero((first >= start) & (first < start + SOURCES))
        sources, row = np.unique(first[edges], return_inverse=True)
        distances, previous = dijkstra(doubled, directed=False, indices=sources, return_predecessors=True, limit=1.0)
        # a path to either copy of the other end, then the edge itself, ends in the second copy of the first end
        by_stay = distances[row, second[edges] + n_sites] + stay[edges]
        by_cross = distances[row, second[edges]] + cross[edges]
        last = np.where(by_stay <= by_cross, second[edges] + n_sites, second[edges])
        for k in np.flatnonzero(np.minimum(by_stay, by_cross) < 1 - LEAST_VIOLATION).tolist():
            cycle = _simple_cycle(previous[row[k]], int(first[edges[k]]) + n_sites, int(last[k]), n_sites)
            if (cycle[0] < n_sites) == (cycle[-1] < n_sites):
                # the path ran through the edge itself, so a worse cycle is found at another edge; this one is even
                continue
            cut = _cut(cycle, n_sites, edge_of)
            excess = float(x[list(cut.odd)].sum() - x[list(cut.even)].sum()) - (len(cut.odd) - 1)
            if excess > LEAST_VIOLATION:
                cuts[cut] = excess
    return sorted(cuts, key=lambda cut: (-cuts[cut], cut.odd, cut.even))


def violated(cuts: list[Cut], x: NDArray[np.float64]) -> list[Cut]:
    """Return those of the cuts that x violates."""
    matrix, limits = _rows(cuts, x.size)
    over = matrix @ x - limits
    return [cut for cut, excess in zip(cuts, over.tolist(), strict=True) if excess > LEAST_VIOLATION]


def _rows(cuts: list[Cut], n_edges: int) -> tuple[Any, NDArray[np.float64]]:
    columns = np.array([edge for cut in cuts for edge in cut.odd + cut.even], dtype=np.int32)
    signs = np.array([sign for cut in cuts for sign in (1.0,) * len(cut.odd) + (-1.0,) * len(cut.even)])
    ends = np.cumsum([0, *(len(cut.odd) + len(cut.even) for cut in cuts)])
    limits = np.array([len(cut.odd) - 1.0 for cut in cuts])
    return csr_array((signs, columns, ends), shape=(len(cuts), n_edges)), limits


def _simple_cycle(previous: NDArray[np.int32], end: int, last: int, n_sites: int) -> list[int]:
    """Walk back from the end; where a site comes again first, the walk between is a cycle.

    It is odd if the site comes again in its other copy, and then no longer than the whole walk.
    """
    path = [end]
    seen = {end % n_sites: 0}
    node = last
    while node % n_sites not in seen:
        seen[node % n_sites] = len(path)
        path.append(node)
        node = int(previous[node])
    return [*path[seen[node % n_sites] :], node]


def _cut(cycle: list[int], n_sites: int, edge_of: dict[tuple[int, ...], int]) -> Cut:
    odd: list[int] = []
    even: list[int] = []
    for one, other in zip(cycle[:-1], cycle[1:], strict=True):
        edge = edge_of[tuple(sorted((one % n_sites, other % n_sites)))]
        (even if (one < n_sites) == (other < n_sites) else odd).append(edge)
    return Cut(tuple(sorted(odd)), tuple(sorted(even)))
