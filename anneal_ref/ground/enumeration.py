"""Enumeration: every configuration is looked at, so value, configurations and degeneracy are certain."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from anneal_ref.base.errors import NotSupported
from anneal_ref.ground.enumeration_kernels import collect, minimum
from anneal_ref.ground.problem import Problem

# energies of 2^10 inner configurations and the rows of the outer spins that flip most often fit the nearest cache
INNER_SPINS = 10
# configurations that are kept before it is known how many there are
ROOM = 4096
# some minutes
MOST_CONFIGURATIONS = 2.0**40


def enumeration_cost(problem: Problem) -> float:
    """Return the number of configurations that are looked at: half of all when there are no fields."""
    return 2.0 ** min(1000, problem.n_sites - (not problem.has_fields))


def enumerate_states(problem: Problem, limit: int = 1) -> tuple[int, int, NDArray[np.int8]]:
    """Find the ground states by looking at all configurations.

    Parameters
    ----------
    problem : Problem
    limit : int
        The most configurations to return; all are counted.

    Returns
    -------
    energy : int
        In units of the problem.
    degeneracy : int
        Number of configurations within `problem.slack` of the energy.
    spins : (k, n) array of int8
        The first min(limit, degeneracy) of them. Without fields, each is followed by its mirror image.

    Raises
    ------
    NotSupported
        More than 2^40 configurations; before any work.

    References
    ----------
    F. Gray, US patent 2632058 (1953), for the order in which one spin flips at a time.

    Examples
    --------
    >>> from anneal_ref.ground.problem import whole_numbers
    >>> enumerate_states(whole_numbers(3, [(0, 1), (1, 2), (0, 2)], [1, 1, 1]))[:2]
    (-1, 6)
    """
    configurations = enumeration_cost(problem)
    if configurations > MOST_CONFIGURATIONS:
        raise NotSupported(
            f"enumeration of {problem.n_sites} coupled spins would look at {configurations:.2g} configurations; "
            f"at most {MOST_CONFIGURATIONS:.2g} are allowed",
            alternatives=("method 'strips'", "method 'cuts'"),
        )
    mirrored = not problem.has_fields
    free, constant = problem.pinned(problem.n_sites - 1) if mirrored else (problem, 0)
    inner, crossing, outer = _tables(free)
    least, _ = minimum(inner.copy(), crossing, outer)
    copies = 2 if mirrored else 1
    wanted = -(-limit // copies)
    steps, places = np.zeros((2, min(wanted, ROOM)), dtype=np.int64)
    count = collect(inner.copy(), crossing, outer, least + free.slack, steps, places)
    if min(wanted, count) > ROOM:
        steps, places = np.zeros((2, min(wanted, count)), dtype=np.int64)
        collect(inner, crossing, outer, least + free.slack, steps, places)
    spins = _spins(free.n_sites, steps[:count], places[:count])
    if mirrored:
        spins = np.concatenate([spins, np.ones_like(spins, shape=(len(spins), 1))], axis=1)
        spins = np.stack([spins, -spins], axis=1).reshape(-1, problem.n_sites)
    return int(least) + constant, copies * int(count), spins[:limit]


def _spins(n_sites: int, steps: NDArray[np.int64], places: NDArray[np.int64]) -> NDArray[np.int8]:
    """Return configurations, shape (k, n_sites), from the steps of the Gray code and the inner configurations."""
    inside = min(n_sites, INNER_SPINS)
    bits = places | (steps ^ (steps >> 1)) << inside
    return (1 - 2 * ((bits[:, None] >> np.arange(n_sites)) & 1)).astype(np.int8)


def _tables(problem: Problem) -> tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.int64]]:
    """Energies of the inner configurations, and doubled fields and couplings of the outer spins, for the kernels."""
    # the kernels add up to four times the weight before anything cancels
    dtype = np.int32 if 4 * problem.weight < 2**31 else np.int64
    inside = min(problem.n_sites, INNER_SPINS)
    matrix = problem.matrix()
    spins = 1 - 2 * ((np.arange(2**inside)[:, None] >> np.arange(inside)) & 1)
    among = np.einsum("xi,ij,xj->x", spins, np.triu(matrix[:inside, :inside]), spins)
    on_outer = spins @ matrix[:inside, inside:] + problem.fields[inside:]
    outer = matrix[inside:, inside:]
    energies = among + spins @ problem.fields[:inside] + on_outer.sum(axis=1) + np.triu(outer).sum()
    return energies.astype(dtype), (2 * on_outer.T).astype(dtype, order="C"), (2 * outer).astype(dtype)
