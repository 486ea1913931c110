r"""Kernels for Pfaffians of all leading blocks of a skew matrix by elimination.

Eliminating the first two rows with the factor 1/p, p = S[0, 1] the pivot, leaves a matrix S' with Pf(S) = p Pf(S').
One elimination from left to right thus gives the Pfaffian of every leading block on its way. A pivot that is small
against what it divides would spoil all that follow. Then the pivot becomes a block of four rows, six, ..., within which
rows may be exchanged; the Pfaffians of the leading blocks inside come from exchanges of their own. At worst the block
grows to the whole matrix, and every Pfaffian has been computed with complete pivoting.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from anneal_ref.backends.fermions.eliminating import PANEL, change_row, change_rows, load_row, place, window

LARGEST_GROWTH = 1e3
"""Of rounding errors from one pivot block to the Pfaffians that follow."""


@njit
def exchange(s, w, k, a, b, top):  # type: ignore[no-untyped-def]
    """Exchange the rows and columns a <= b of the upper triangle from row k on; return the sign of the Pfaffian."""
    if a == b:
        return 1.0
    pa, pb = place(w, a), place(w, b)
    for i in range(k, a):
        o = place(w, i)
        s[o + a], s[o + b] = s[o + b], s[o + a]
    s[pa + b] = -s[pa + b]
    for j in range(a + 1, b):
        o = place(w, j)
        s[pa + j], s[o + b] = -s[o + b], -s[pa + j]
    for j in range(b + 1, top):
        s[pa + j], s[pb + j] = s[pb + j], s[pa + j]
    return -1.0


@njit
def largest_in(s, w, k, end):  # type: ignore[no-untyped-def]
    """Place of the largest element among the rows and columns k .. end-1."""
    size, a, b = -1.0, k, k + 1
    for i in range(k, end):
        o = place(w, i)
        for j in range(i + 1, end):
            if abs(s[o + j]) > size:
                size, a, b = abs(s[o + j]), i, j
    return a, b


@njit
def eliminate_block(s, w, k, end, top):  # type: ignore[no-untyped-def]
    """Eliminate the rows k .. end-1 with complete pivoting among them; return their Pfaffian and the smallest pivot."""
    value, smallest = 1.0, np.inf
    for r in range(k, end, 2):
        a, b = largest_in(s, w, r, end)
        value *= exchange(s, w, r, r, a, top) * exchange(s, w, r, r + 1, b, top)
        p = s[place(w, r) + r + 1]
        value *= p
        smallest = min(smallest, abs(p))
        if p == 0.0:
            break
        for i in range(r + 2, top):
            change_row(s, w, r, i, 1.0 / p, top)
    return value, smallest


@njit
def largest_of(s, w, k, end, top):  # type: ignore[no-untyped-def]
    """Largest element of the rows k .. end-1."""
    size = 0.0
    for i in range(k, end):
        o = place(w, i)
        for j in range(i + 1, top):
            size = max(size, abs(s[o + j]))
    return size


@njit
def safe(value, largest, smallest):  # type: ignore[no-untyped-def]
    """Whether pivots are large enough, for a Pfaffian `value` so far and rows with elements up to `largest`."""
    return abs(value) * largest * largest <= LARGEST_GROWTH * smallest


@njit
def load_rows(s, w, band, first, loaded, stop, m):  # type: ignore[no-untyped-def]
    """Put the rows loaded .. stop-1 of the block of m rows at `first` into their slots; return the larger end."""
    rows, width = band.shape[0], band.shape[1] - 1
    while loaded < stop:
        load_row(s, w, loaded, band[(first + loaded) % rows, : min(width, m - 1 - loaded) + 1])
        loaded += 1
    return loaded


@njit
def leading_pfaffians(s, work, w, band, first, m, out):  # type: ignore[no-untyped-def]
    """Write the Pfaffians of 2, 4, ..., m rows of a band matrix, from the row `first` on, to `out` (m/2,).

    Parameters
    ----------
    s, work : 1d arrays
        Work space for the window of m rows.
    w : Window
    band : (rows, width + 1) array
        Entry (k, d) belongs to the rows k and k + d; rows are counted modulo their number.
    first, m : int
    out : (m/2,) array
    """
    width = band.shape[1] - 1
    factors = np.zeros(PANEL // 2)
    value, k, loaded = 1.0, 0, 0
    while k < m:
        end = min(m, k + PANEL)
        top = min(m, end + width)
        loaded = load_rows(s, w, band, first, loaded, min(m, top + 1), m)
        r = k
        while r < end:
            p = s[place(w, r) + r + 1]
            out[r // 2] = value * p
            if not safe(value, largest_of(s, w, r, r + 2, top), abs(p)):
                break
            if p == 0.0:
                out[r // 2 :] = 0.0
                return
            value *= p
            factors[(r - k) // 2] = 1.0 / p
            for i in range(r + 2, end):
                change_row(s, w, r, i, 1.0 / p, top)
            r += 2
        if r == end:
            for i in range(end, top, 2):
                change_rows(s, w, k, i, factors, top)
            k = end
            continue
        for i in range(end, top):
            for q in range(k, r, 2):
                change_row(s, w, q, i, factors[(q - k) // 2], top)
        # the pivot at r is too small: a block that is large enough, or all that is left
        end = r + 2
        while end < m:
            end += 2
            top = min(m, end + width)
            loaded = load_rows(s, w, band, first, loaded, top, m)
            for i in range(r, end):
                o = place(w, i)
                work[o + i + 1 : o + end] = s[o + i + 1 : o + end]
            factor, smallest = eliminate_block(work, w, r, end, end)
            out[end // 2 - 1] = value * factor
            if safe(value, largest_of(s, w, r, end, top), smallest):
                break
        if end < m:
            eliminate_block(s, w, r, end, top)
            value *= factor
        k = end


@njit
def correlations(band, ends, s, work, out):  # type: ignore[no-untyped-def]
    """Write <Z_i Z_i+r> to out[i, r-1].

    Parameters
    ----------
    band : (2 sites, width + 1) array
        Covariance of neighbouring Majorana operators; see `covariance`.
    ends : (sites,) array of int64
        How many further positions each position may be correlated with.
    s, work : 1d arrays
        Work space for a window of 2 reach rows.
    out : (sites, reach) array
    """
    sites, reach = out.shape
    for i in range(sites):
        m = 2 * min(reach, ends[i])
        if m > 0:
            leading_pfaffians(s, work, window(m), band, 2 * i + 1, m, out[i, : m // 2])
