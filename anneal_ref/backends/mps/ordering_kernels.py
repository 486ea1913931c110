"""Kernels of the search for an order of the sites."""

from __future__ import annotations

import numpy as np
from numba import njit


@njit(cache=True, nogil=True)
def cost(starts, neighbours, place, prices, left, right):  # type: ignore[no-untyped-def]
    """Sum of the prices of all cuts, plus the total length of the couplings.

    Parameters
    ----------
    starts, neighbours : arrays of int
        The graph in compressed rows.
    place : (n,) array of int64
        Position of every site.
    prices : array of int64
        Price of a cut of every size, the smaller number of active sites on either side.
    left, right : (n,) arrays of int64
        Scratch.
    """
    n = place.size
    # a site is active from its own place to its last neighbour, as one on the left, and from its first to its own
    left[:] = 0
    right[:] = 0
    total = 0
    for site in range(n):
        here = place[site]
        low, high = here, here
        for k in range(starts[site], starts[site + 1]):
            there = place[neighbours[k]]
            low, high = min(low, there), max(high, there)
            total += max(there - here, 0)
        left[here] += 1
        left[high] -= 1
        right[low] += 1
        right[here] -= 1
    lefts, rights = 0, 0
    for cut in range(n - 1):
        lefts += left[cut]
        rights += right[cut]
        total += prices[min(lefts, rights)]
    return total


@njit(cache=True, nogil=True)
def move(order, place, kind, i, j):  # type: ignore[no-untyped-def]
    """Reverse the stretch from i to j (kind 0), or take the site at position i to position j (kind 1)."""
    if kind == 0:
        i, j = min(i, j), max(i, j)
        while i < j:
            order[i], order[j] = order[j], order[i]
            place[order[i]], place[order[j]] = i, j
            i, j = i + 1, j - 1
    else:
        site, step = order[i], 1 if j > i else -1
        for k in range(i, j, step):
            order[k] = order[k + step]
            place[order[k]] = k
        order[j], place[site] = site, j


@njit(cache=True, nogil=True)
def improve(starts, neighbours, order, prices, moves, slack):  # type: ignore[no-untyped-def]
    """Try the moves one by one; keep those that raise the cost by no more than the slack; return the lowest cost.

    Parameters
    ----------
    starts, neighbours, prices : arrays
        See `cost`.
    order : (n,) array of int64
        Start; overwritten by the best order that was met, the first among equals.
    moves : (steps, 3) array of int64
        Arguments kind, i, j of `move`.
    slack : (steps,) array of int64
        Largest rise that is kept, in units of 2^-16 of the cost, rounded down.
    """
    n = order.size
    place, left, right = np.empty(n, np.int64), np.empty(n, np.int64), np.empty(n, np.int64)
    place[order] = np.arange(n)
    current = order.copy()
    now = cost(starts, neighbours, place, prices, left, right)
    best = now
    for step in range(slack.size):
        kind, i, j = moves[step]
        move(current, place, kind, i, j)
        then = cost(starts, neighbours, place, prices, left, right)
        if then > now + (now >> 16) * slack[step]:
            # back again: a reversed stretch is reversed once more, and a site goes from j to i
            move(current, place, kind, j, i)
            continue
        now = then
        if now < best:
            best = now
            order[:] = current
    return best
