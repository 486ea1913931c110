"""Random regular graphs from raw words."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from anneal_ref.model.words import below, raw_words


def regular_edges(n: int, degree: int, seed: int) -> NDArray[np.intp]:
    """Return the edges of a random regular graph, in lexical order, by the pairing of Steger and Wormald.

    Free ends of edges are joined two by two at random, each time only if the sites differ and are not yet joined; a run
    that gets stuck starts anew with fresh words. Above half filling the complement is drawn instead.

    Parameters
    ----------
    n, degree : int
        With an even product and degree < n.
    seed : int

    Returns
    -------
    ndarray of int, shape (n * degree / 2, 2)

    References
    ----------
    Steger and Wormald, Combin. Probab. Comput. 8, 377 (1999), algorithm 2.
    """
    joined = np.zeros((n, n), dtype=bool)
    few = min(degree, n - 1 - degree)
    attempt = 0
    while not _pair_up(joined, few, _picks(seed, attempt)):
        joined[:] = False
        attempt += 1
    if few < degree:
        joined = ~joined
    return np.argwhere(np.triu(joined, 1))


def _pair_up(joined: NDArray[np.bool_], degree: int, picks: Iterator[np.uint64]) -> bool:
    """Fill the adjacency matrix; return False if no two free ends can be joined any more."""
    free = np.repeat(np.arange(len(joined)), degree).tolist()
    while free:
        sites = np.unique(free)
        # sites that are all joined to each other and have ends to spare are no more than their degree
        if len(sites) <= degree and joined[np.ix_(sites, sites)].sum() == len(sites) * (len(sites) - 1):
            return False
        while True:
            a, b = below(len(free), np.array([next(picks), next(picks)])).tolist()
            i, j = free[a], free[b]
            if i != j and not joined[i, j]:
                break
        joined[i, j] = joined[j, i] = True
        for end in sorted((a, b), reverse=True):
            free[end] = free[-1]
            free.pop()
    return True


def _picks(seed: int, attempt: int) -> Iterator[np.uint64]:
    """Yield the words of an attempt, block by block."""
    size = 256
    while True:
        yield from raw_words(size, seed, attempt, "graph")[size // 2 if size > 256 else 0 :]
        size *= 2
