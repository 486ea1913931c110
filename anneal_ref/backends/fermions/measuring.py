r"""Kernel that measures the products of neighbouring spins one after the other.

The products tau = Z Z' of all bonds commute, and each is i c c' of two Majorana operators of its own. With the outcomes
so far put in, the state is Gaussian again. In its covariance S with the measured operators taken out, the next product
has the mean g = S[0, 1] and the outcome tau with probability (1 + tau g)/2; that outcome eliminates its two rows with
the factor tau / (1 + tau g).

Reference: S. Bravyi, Quantum Inf. Comput. 5, 216 (2005), from memory, on measurements of Gaussian fermions.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from anneal_ref.backends.fermions.eliminating import PANEL, change_row, change_rows, load_row, place, window


@njit
def measure(band, s, draws, outcomes, given, logs, least):  # type: ignore[no-untyped-def]
    """Measure all products, shot by shot.

    Parameters
    ----------
    band : (2 products, reach + 1) array
        Covariance: entry (k, d) belongs to the operators k and k + d; product b is i c_2b c_2b+1.
    s : 1d array
        Work space of slots * stride floats of the window.
    draws : (shots, products) array
        Uniform random numbers in [0, 1); not read if the outcomes are given.
    outcomes : (shots, products) array of int8
        +1 and -1; written unless given.
    given : bool
    logs : (shots,) array
        Logarithms of the probabilities of the outcomes.
    least : (shots,) array
        Smallest probability of a single outcome, given those before.
    """
    rows, reach = band.shape[0], band.shape[1] - 1
    w = window(reach)
    factors = np.zeros(PANEL // 2)
    for shot in range(len(outcomes)):
        logs[shot], least[shot] = 0.0, 1.0
        loaded = 0
        for k in range(0, rows, PANEL):
            end = min(rows, k + PANEL)
            top = min(rows, end + reach)
            while loaded < min(rows, top + 1):
                load_row(s, w, loaded, band[loaded])
                loaded += 1
            for r in range(k, end, 2):
                mean = s[place(w, r) + r + 1]
                if not given:
                    outcomes[shot, r // 2] = 1 if draws[shot, r // 2] < (1.0 + mean) / 2 else -1
                outcome = outcomes[shot, r // 2]
                probability = (1.0 + outcome * mean) / 2
                least[shot] = min(least[shot], probability)
                if probability <= 0.0:
                    logs[shot] = -np.inf
                    break
                logs[shot] += np.log(min(1.0, probability))
                factors[(r - k) // 2] = outcome / (2 * probability)
                for i in range(r + 2, end):
                    change_row(s, w, r, i, factors[(r - k) // 2], top)
            if logs[shot] == -np.inf:
                break
            for i in range(end, top, 2):
                change_rows(s, w, k, i, factors, top)
