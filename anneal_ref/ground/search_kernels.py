"""Kernel of the local search."""

from __future__ import annotations

import numpy as np
from numba import njit


@njit(cache=True, nogil=True)
def improve(starts, neighbours, couplings, spins, steps, tenure):  # type: ignore[no-untyped-def]
    """Flip the spin that lowers the energy most, or raises it least, again and again; a flipped spin rests for a while.

    Parameters
    ----------
    starts, neighbours, couplings : arrays
        Couplings in compressed rows (int64 values); there are no fields.
    spins : (n,) array of int8
        Start; overwritten by the best configuration that was met.
    steps, tenure : int
        Number of flips, and how many flips a spin rests, unless flipping it beats the best energy.
    """
    n_sites = spins.size
    current = spins.copy()
    pull = np.zeros(n_sites, dtype=np.int64)
    for site in range(n_sites):
        for place in range(starts[site], starts[site + 1]):
            pull[site] += couplings[place] * current[neighbours[place]]
    rests_until = np.zeros(n_sites, dtype=np.int64)
    # energies relative to the start: only the difference matters
    energy, best = 0, 0
    for step in range(1, steps + 1):
        chosen, change = -1, 0
        for site in range(n_sites):
            candidate = -2 * current[site] * pull[site]
            allowed = rests_until[site] < step or energy + candidate < best
            if allowed and (chosen < 0 or candidate < change):
                chosen, change = site, candidate
        if chosen < 0:
            continue
        current[chosen] = -current[chosen]
        energy += change
        rests_until[chosen] = step + tenure + chosen % 3
        for place in range(starts[chosen], starts[chosen + 1]):
            pull[neighbours[place]] += 2 * couplings[place] * current[chosen]
        if energy < best:
            best = energy
            spins[:] = current
