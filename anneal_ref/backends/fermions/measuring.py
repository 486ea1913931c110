r"""Kernels that measure the products of neighbouring spins one after the other.

The products tau = Z Z' of all bonds commute, and each is i c c' of two Majorana operators of its own. With the outcomes
so far put in, the state is Gaussian again. In its covariance S with the measured operators taken out, the next product
has the mean g = S[0, 1] and the outcome tau with probability (1 + tau g)/2; that outcome changes the rest to

    S'[i, j] = S[i, j] - tau (S[0, i] S[1, j] - S[1, i] S[0, j]) / (1 + tau g).

Rows further away than the reach of S are not touched, so that a window of them is all that is kept. Four products are
measured before the rows behind them are changed, by all four in one pass.

Reference: S. Bravyi, Quantum Inf. Comput. 5, 216 (2005), from memory, on measurements of Gaussian fermions.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numba import njit

from anneal_ref.backends.exact.simd import lanes_of, vfma, vload, vset, vstore

PANEL = 8
"""Rows of four products."""


class Window(NamedTuple):
    """Rows of S that are at work: row i, in slot i % slots, starts with the column i rounded down to a panel."""

    slots: int
    stride: int


@njit
def window(reach):  # type: ignore[no-untyped-def]
    """Room for all rows that a panel changes, and in a row for its elements and a panel on both sides."""
    return Window(reach + 2 * PANEL, (reach // PANEL + 4) * PANEL)


@njit
def place(w, i):  # type: ignore[no-untyped-def]
    """Where column 0 of row i would lie."""
    return (i % w.slots) * w.stride - (i & -PANEL)


@njit
def load_row(s, w, i, row):  # type: ignore[no-untyped-def]
    """Put the band row i into its slot."""
    o = (i % w.slots) * w.stride
    first = o + i % PANEL
    s[o:first] = 0.0
    s[first : first + len(row)] = row
    s[first + len(row) : o + w.stride] = 0.0


@njit
def change_row(s, w, k, i, factor, top):  # type: ignore[no-untyped-def]
    """Change row i after an outcome for the rows k and k + 1; columns beyond `top` are zero."""
    lanes = lanes_of(s)
    x, y, o = place(w, k), place(w, k + 1), place(w, i)
    a, b = vset(factor * s[y + i]), vset(-factor * s[x + i])
    for j in range((i + 1) & -PANEL, top, lanes):
        vstore(s, o + j, vfma(a, vload(s, x + j), vfma(b, vload(s, y + j), vload(s, o + j))))


@njit
def change_rows(s, w, k, i, factors, top):  # type: ignore[no-untyped-def]
    """Change the rows i and i + 1 after four outcomes for the rows from k on."""
    lanes = lanes_of(s)
    x0, y0, x1, y1 = place(w, k), place(w, k + 1), place(w, k + 2), place(w, k + 3)
    x2, y2, x3, y3 = place(w, k + 4), place(w, k + 5), place(w, k + 6), place(w, k + 7)
    f0, f1, f2, f3 = factors[0], factors[1], factors[2], factors[3]
    o, q = place(w, i), place(w, i + 1)
    a0, b0, a1, b1 = vset(f0 * s[y0 + i]), vset(-f0 * s[x0 + i]), vset(f1 * s[y1 + i]), vset(-f1 * s[x1 + i])
    a2, b2, a3, b3 = vset(f2 * s[y2 + i]), vset(-f2 * s[x2 + i]), vset(f3 * s[y3 + i]), vset(-f3 * s[x3 + i])
    i += 1
    c0, d0, c1, d1 = vset(f0 * s[y0 + i]), vset(-f0 * s[x0 + i]), vset(f1 * s[y1 + i]), vset(-f1 * s[x1 + i])
    c2, d2, c3, d3 = vset(f2 * s[y2 + i]), vset(-f2 * s[x2 + i]), vset(f3 * s[y3 + i]), vset(-f3 * s[x3 + i])
    for j in range(i & -PANEL, top, lanes):
        u, v = vload(s, o + j), vload(s, q + j)
        z = vload(s, x0 + j)
        u, v = vfma(a0, z, u), vfma(c0, z, v)
        z = vload(s, y0 + j)
        u, v = vfma(b0, z, u), vfma(d0, z, v)
        z = vload(s, x1 + j)
        u, v = vfma(a1, z, u), vfma(c1, z, v)
        z = vload(s, y1 + j)
        u, v = vfma(b1, z, u), vfma(d1, z, v)
        z = vload(s, x2 + j)
        u, v = vfma(a2, z, u), vfma(c2, z, v)
        z = vload(s, y2 + j)
        u, v = vfma(b2, z, u), vfma(d2, z, v)
        z = vload(s, x3 + j)
        u, v = vfma(a3, z, u), vfma(c3, z, v)
        z = vload(s, y3 + j)
        u, v = vfma(b3, z, u), vfma(d3, z, v)
        vstore(s, o + j, u)
        vstore(s, q + j, v)


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
