r"""Kernels that eliminate pairs of rows of a skew matrix.

Eliminating the rows k and k + 1 with a factor f changes all rows behind them,

    S[i, j] -> S[i, j] - f (S[k, i] S[k+1, j] - S[k+1, i] S[k, j]).

Elements far from the diagonal are zero and stay zero, so that only a window of rows is at work. Four pairs of rows are
a panel: the rows behind it are changed by all four in one pass.
"""

from __future__ import annotations

from typing import NamedTuple

from numba import njit

from anneal_ref.backends.exact.simd import lanes_of, vfma, vload, vset, vstore

PANEL = 8
"""Rows of four pairs."""


class Window(NamedTuple):
    """Where rows lie: row i, in slot i % slots, starts with the column i rounded down to a panel."""

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
    """Put row i, from the diagonal on, into its slot."""
    o = (i % w.slots) * w.stride
    first = o + i % PANEL
    s[o:first] = 0.0
    s[first : first + len(row)] = row
    s[first + len(row) : o + w.stride] = 0.0


@njit
def change_row(s, w, k, i, factor, top):  # type: ignore[no-untyped-def]
    """Change row i after the rows k and k + 1; columns beyond `top` are zero."""
    lanes = lanes_of(s)
    x, y, o = place(w, k), place(w, k + 1), place(w, i)
    a, b = vset(factor * s[y + i]), vset(-factor * s[x + i])
    for j in range((i + 1) & -PANEL, top, lanes):
        vstore(s, o + j, vfma(a, vload(s, x + j), vfma(b, vload(s, y + j), vload(s, o + j))))


@njit
def change_rows(s, w, k, i, factors, top):  # type: ignore[no-untyped-def]
    """Change the rows i and i + 1 after the four pairs of rows from k on."""
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
