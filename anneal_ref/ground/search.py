"""Local search: good configurations to start from. It proves nothing and its result is never called a ground energy."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csr_array
from scipy.sparse.csgraph import connected_components, minimum_spanning_tree

from anneal_ref.ground.problem import Problem
from anneal_ref.ground.search_kernels import improve

MOST_LOOKS = 10**7


def searched(problem: Problem, spins: NDArray[np.int8], sweeps: int) -> tuple[int, NDArray[np.int8]]:
    """Improve a configuration by a tabu search of some flips per spin: energy in units, and the best that was met.

    References
    ----------
    F. Glover, ORSA J. Comput. 1, 190 (1989).
    """
    graph = problem.with_ghost().graph()
    ghosts = graph.shape[0] - problem.n_sites
    full = np.concatenate([spins, np.ones(ghosts, dtype=np.int8)])
    # each flip looks at all spins: on large lattices there are fewer
    steps = min(sweeps * full.size, MOST_LOOKS // full.size)
    improve(graph.indptr, graph.indices, graph.data, full, steps, 5 + problem.n_sites // 20)
    best = full[: problem.n_sites] * (full[-1] if ghosts else np.int8(1))
    return problem.energy(best), best


def first_guess(problem: Problem, starts: int = 16) -> tuple[int, NDArray[np.int8]]:
    """Best of several searches from fixed pseudo-random configurations."""
    random = np.random.Generator(np.random.PCG64(20))
    bits = random.integers(0, 2, size=(starts, problem.n_sites), dtype=np.int8)
    found = [searched(problem, 2 * row - 1, 40) for row in bits]
    return min(found, key=lambda item: item[0])


def tied(
    n_sites: int, edges: NDArray[np.intp], broken: NDArray[np.bool_]
) -> tuple[NDArray[np.intp], NDArray[np.int8]] | None:
    """Tie the spins of each edge, opposite where `broken`, else equal; None where the ties contradict each other.

    Returns
    -------
    group : (n_sites,) array of int
        Number of the set of spins that are tied to each other.
    sign : (n_sites,) array of int8
        Sign of each spin relative to its set.
    """
    first, second = edges.T.astype(np.int32)  # scipy's graph routines want 32-bit indices
    shift = np.int32(n_sites) * broken
    rows = np.concatenate([first, first + n_sites])
    columns = np.concatenate([second + shift, second + n_sites - shift])
    copies = csr_array((np.ones(rows.size), (rows, columns)), shape=(2 * n_sites, 2 * n_sites))
    _, label = connected_components(copies, directed=False)
    up, down = label[:n_sites], label[n_sites:]
    if (up == down).any():
        return None
    _, group = np.unique(np.minimum(up, down), return_inverse=True)
    return group, np.where(up < down, 1, -1).astype(np.int8)


def rounded(problem: Problem, x: NDArray[np.float64]) -> NDArray[np.int8]:
    """Read a configuration off a relaxed solution, trusting the edges nearest to 0 or 1 first."""
    doubt = 1e-3 + np.minimum(x, 1 - x)
    n_sites = problem.n_sites
    first, second = problem.edges.T.astype(np.int32)
    tree = minimum_spanning_tree(csr_array((doubt, (first, second)), shape=(n_sites, n_sites))).tocoo()
    wide = csr_array((x + 1, (first, second)), shape=(n_sites, n_sites))
    broken = np.asarray(wide[tree.row, tree.col]).ravel() > 1.5
    ties = tied(n_sites, np.stack([tree.row, tree.col], axis=1).astype(np.intp), broken)
    assert ties is not None, "a tree has no cycle to contradict itself"
    return ties[1]
