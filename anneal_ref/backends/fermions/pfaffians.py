r"""Kernels for Pfaffians of all leading blocks of a skew matrix by elimination.

Eliminating the first two rows of a skew matrix with the pivot p = S[0, 1] leaves

    S'[i, j] = S[i, j] - (S[0, i] S[1, j] - S[1, i] S[0, j]) / p,      Pf(S) = p Pf(S'),

so one elimination from left to right gives the Pfaffian of every leading block on its way. A pivot that is small
against what it divides would spoil all that follow. Then the pivot becomes a block of four rows, six, ..., within which
rows may be exchanged; the Pfaffians of the leading blocks inside come from exchanges of their own. At worst the block
grows to the whole matrix, and every Pfaffian has been computed with complete pivoting.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from anneal_ref.backends.exact.simd import lanes_of, vfma, vload, vset, vstore

LARGEST_GROWTH = 1e3
"""Of rounding errors from one pivot block to the Pfaffians that follow."""

PAD = 16
"""Floats beyond the end of every row that vectors may touch."""


@njit
def eliminate(s, stride, k, top):  # type: ignore[no-untyped-def]
    """Eliminate the rows k and k + 1 from the rows k + 2 .. top-1 of the upper triangle."""
    lanes = lanes_of(s)
    x, y = k * stride, (k + 1) * stride
    p = s[x + k + 1]
    for i in range(k + 2, top):
        a, b = s[y + i] / p, -s[x + i] / p
        if a == 0.0 and b == 0.0:
            continue
        a, b = vset(a), vset(b)
        o = i * stride
        for j in range(i + 1, top, lanes):
            vstore(s, o + j, vfma(a, vload(s, x + j), vfma(b, vload(s, y + j), vload(s, o + j))))


@njit
def exchange(s, stride, k, a, b, top):  # type: ignore[no-untyped-def]
    """Exchange the rows and columns a <= b of the upper triangle from row k on; return the sign of the Pfaffian."""
    if a == b:
        return 1.0
    for i in range(k, a):
        s[i * stride + a], s[i * stride + b] = s[i * stride + b], s[i * stride + a]
    s[a * stride + b] = -s[a * stride + b]
    for j in range(a + 1, b):
        s[a * stride + j], s[j * stride + b] = -s[j * stride + b], -s[a * stride + j]
    for j in range(b + 1, top):
        s[a * stride + j], s[b * stride + j] = s[b * stride + j], s[a * stride + j]
    return -1.0


@njit
def largest_in(s, stride, k, end):  # type: ignore[no-untyped-def]
    """Place of the largest element among the rows and columns k .. end-1."""
    size, a, b = -1.0, k, k + 1
    for i in range(k, end):
        for j in range(i + 1, end):
            if abs(s[i * stride + j]) > size:
                size, a, b = abs(s[i * stride + j]), i, j
    return a, b


@njit
def eliminate_block(s, stride, k, end, top):  # type: ignore[no-untyped-def]
    """Eliminate the rows k .. end-1 with complete pivoting among them; return their Pfaffian and the smallest pivot."""
    value, smallest = 1.0, np.inf
    while k < end:
        a, b = largest_in(s, stride, k, end)
        value *= exchange(s, stride, k, k, a, top) * exchange(s, stride, k, k + 1, b, top)
        p = s[k * stride + k + 1]
        value *= p
        smallest = min(smallest, abs(p))
        if p == 0.0:
            return 0.0, 0.0
        eliminate(s, stride, k, top)
        k += 2
    return value, smallest


@njit
def largest_row(s, stride, k, end, top):  # type: ignore[no-untyped-def]
    """Largest element of the rows k .. end-1."""
    size = 0.0
    for i in range(k, end):
        for j in range(i + 1, top):
            size = max(size, abs(s[i * stride + j]))
    return size


@njit
def leading_pfaffians(s, work, stride, m, reach, out):  # type: ignore[no-untyped-def]
    """Write the Pfaffians of the leading blocks of 2, 4, ..., m rows to `out` (m/2,).

    Parameters
    ----------
    s : 1d array
        Upper triangle of a skew matrix in rows of length `stride`; overwritten.
    work : 1d array
        As large as s.
    stride : int
        At least m + PAD.
    m : int
        Even.
    reach : int
        Elements further than this from the diagonal are zero.
    out : (m/2,) array
    """
    value, k = 1.0, 0
    while k < m:
        end = k + 2
        while True:
            top = min(m, end + reach)
            largest = largest_row(s, stride, k, end, top)
            if end == k + 2:
                factor = s[k * stride + k + 1]
                smallest = abs(factor)
            else:
                for i in range(k, end):
                    work[i * stride + i + 1 : i * stride + end] = s[i * stride + i + 1 : i * stride + end]
                factor, smallest = eliminate_block(work, stride, k, end, end)
            out[end // 2 - 1] = value * factor
            if end == m or abs(value) * largest * largest <= LARGEST_GROWTH * smallest:
                break
            end += 2
        if end == m:
            return
        if factor == 0.0:
            out[end // 2 :] = 0.0
            return
        if end == k + 2:
            eliminate(s, stride, k, top)
        else:
            eliminate_block(s, stride, k, end, top)
        value *= factor
        k = end


@njit
def correlations(band, ends, reach, first, stop, out):  # type: ignore[no-untyped-def]
    """Write <Z_i Z_i+r> to out[i, r-1] for the positions first .. stop-1 and r up to `reach`.

    Parameters
    ----------
    band : (2 sites, width + 1) array
        Covariance of neighbouring Majorana operators; see `covariance`.
    ends : (sites,) array of int64
        How many further positions each position may be correlated with.
    reach, first, stop : int
    out : (sites, reach) array
    """
    rows, width = band.shape[0], band.shape[1] - 1
    stride = 2 * reach + PAD
    s, work = np.zeros(2 * reach * stride), np.zeros(2 * reach * stride)
    for i in range(first, stop):
        m = 2 * min(reach, ends[i])
        if m == 0:
            continue
        for a in range(m):
            k, count = (2 * i + 1 + a) % rows, min(width, m - 1 - a)
            s[a * stride + a + 1 : a * stride + a + 1 + count] = band[k, 1 : count + 1]
            s[a * stride + a + 1 + count : (a + 1) * stride] = 0.0
        leading_pfaffians(s, work, stride, m, width, out[i, : m // 2])
