r"""Kernel: a block grows by one site.

From the operators of the sites up to a bond, kept in the basis of that bond, follow those of one site more through its
isometric tensor A,

    O' = sum_s A[s]^+ O A[s]          H' = ... with the site's own terms and its couplings to the block.

The transverse and the problem part of the Hamiltonian are kept apart, since their strengths change with time. Of the
single-spin operators only as many combinations are kept as are needed further on (see `wiring`); with the spin-flip
symmetry each is its even-odd rectangle.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from anneal_ref.backends.mps.blas import ADJOINT, PLAIN, multiply
from anneal_ref.backends.mps.effective import add_blocks, add_scaled, combined, field_of


@njit
def _hermitian(h):  # type: ignore[no-untyped-def]
    """Make a matrix Hermitian in place: rounding must not grow over a long chain."""
    half = h.real.dtype.type(0.5)
    for a in range(h.shape[0]):
        for b in range(a + 1):
            mean = half * (h[a, b] + np.conj(h[b, a]))
            h[a, b] = mean
            h[b, a] = np.conj(mean)


@njit
def absorb(hx, hz, operators, a, mix, near, weight, field, de, ne, even):  # type: ignore[no-untyped-def]
    """Return (hx, hz, operators) of the block grown by the site with tensor `a` (B, D, D').

    `mix` (r + 1, r') gives the new operators from the old ones and, last, Z of the new site; `near` (r,) the field of
    the block on the new site; `de` and `ne` the numbers of even states of the old and of the new bond.
    """
    matrices, d, n = a.shape
    count = len(operators)
    kept = combined(mix[:count].T, operators)
    new_hx, new_hz = np.empty((n, n), a.dtype), np.empty((n, n), a.dtype)
    tx, tz = np.empty((d, n), a.dtype), np.empty((d, n), a.dtype)
    if even:
        m = a[0]
        energy = hz.copy()
        field_of(near, operators, 1.0, even, energy)
        for rows in (slice(0, de), slice(de, None)):
            multiply(tx[rows], hx[rows, rows], m[rows])
        multiply(tz, energy, m)
        add_blocks(tx, m, de, ne, (-weight, weight, weight, -weight))
        new_hx[:] = 0
        new_hz[:] = 0
        for columns in (slice(0, ne), slice(ne, None)):
            multiply(new_hx[columns, columns], m[:, columns], tx[:, columns], ADJOINT)
            multiply(new_hz[columns, columns], m[:, columns], tz[:, columns], ADJOINT)
        new = np.empty((mix.shape[1], ne, n - ne), a.dtype)
        t = np.empty((d, n - ne), a.dtype)
        for k in range(mix.shape[1]):
            multiply(t[:de], kept[k], m[de:, ne:])
            multiply(t[de:], kept[k], m[:de, ne:], ADJOINT)
            add_scaled(t, m[:, ne:], mix[count, k])
            multiply(new[k], m[:, :ne], t, ADJOINT)
    else:
        new = np.empty((mix.shape[1], n, n), a.dtype)
        for b in range(2):
            sign = 1.0 - 2.0 * b
            m = a[b]
            energy = hz.copy()
            field_of(near, operators, sign, even, energy)
            multiply(tx, hx, m)
            add_scaled(tx, a[1 - b], -weight)
            multiply(tz, energy, m)
            add_scaled(tz, m, sign * field)
            multiply(new_hx, m, tx, ADJOINT, PLAIN, 1.0, float(b))
            multiply(new_hz, m, tz, ADJOINT, PLAIN, 1.0, float(b))
            for k in range(mix.shape[1]):
                multiply(tx, kept[k], m)
                add_scaled(tx, m, sign * mix[count, k])
                multiply(new[k], m, tx, ADJOINT, PLAIN, 1.0, float(b))
    _hermitian(new_hx)
    _hermitian(new_hz)
    return new_hx, new_hz, new
