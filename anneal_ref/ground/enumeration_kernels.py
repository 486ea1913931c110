"""Kernels of the enumeration: all configurations of the outer spins in Gray-code order, all of the inner at once."""

from __future__ import annotations

import numpy as np
from numba import njit


@njit(cache=True, nogil=True)
def _flip(inner, crossing, outer, spins, step):  # type: ignore[no-untyped-def]
    """Flip the outer spin that the Gray code flips at this step; return the least of the updated energies."""
    site = 0
    while (step >> site) & 1 == 0:
        site += 1
    shift = inner.dtype.type(0)
    for other in range(spins.size):
        shift += outer[site, other] * spins[other]
    row = crossing[site]
    least = inner[0] + inner.dtype.type(0)
    if spins[site] > 0:
        least = inner[0] - row[0] - shift
        for x in range(inner.size):
            inner[x] -= row[x] + shift
            least = min(least, inner[x])
    else:
        least = inner[0] + row[0] + shift
        for x in range(inner.size):
            inner[x] += row[x] + shift
            least = min(least, inner[x])
    spins[site] = -spins[site]
    return least


@njit(cache=True, nogil=True)
def minimum(inner, crossing, outer):  # type: ignore[no-untyped-def]
    """Return the least energy and the Gray-code step where it is first met.

    Parameters
    ----------
    inner : (2^b,) array of int32 or int64
        Energies of all inner configurations while all outer spins are +1; overwritten.
    crossing : (o, 2^b) array, same type
        Twice the field that the inner spins and the external field exert on each outer spin.
    outer : (o, o) array, same type
        Twice the couplings among the outer spins.
    """
    spins = np.ones(outer.shape[0], dtype=inner.dtype)
    best, best_step = inner.min(), 0
    for step in range(1, 1 << outer.shape[0]):
        least = _flip(inner, crossing, outer, spins, step)
        if least < best:
            best, best_step = least, step
    return best, best_step


@njit(cache=True, nogil=True)
def collect(inner, crossing, outer, threshold, steps, places):  # type: ignore[no-untyped-def]
    """Count the configurations with an energy of at most `threshold`; keep the first of them.

    `steps` and `places`, int64 arrays of one length, receive the Gray-code step and the inner configuration of as many
    as they hold; the other parameters are those of `minimum`.
    """
    spins = np.ones(outer.shape[0], dtype=inner.dtype)
    count = 0
    least = inner.min()
    for step in range(1 << outer.shape[0]):
        if step > 0:
            least = _flip(inner, crossing, outer, spins, step)
        if least <= threshold:
            for x in range(inner.size):
                if inner[x] <= threshold:
                    if count < steps.size:
                        steps[count], places[count] = step, x
                    count += 1
    return count
