"""Diagonal phases exp(-i phi E) without stored energies.

A row is a bundle of eight blocks, the lowest A local bits of a tile. The energy of a tile splits into the couplings
inside a row and the fields on it (T), the couplings between the row and the spins that number the rows (D, one table
for every pair of those spins and each of their four settings), and the rest, one number a row (R). The phase of a
row is T D ... D R; a tree over the pairs shares the products, so that a row costs one product with D, one with R.
Energies are sums, formed once for a frame; a layer needs sines and cosines of small tables only.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from anneal_ref.backends.exact.simd import lanes_of, vadd, vfloor, vfma, vload, vmul, vneg, vplace, vset, vstore, vsub

# pi/2 in three parts for the reduction of an angle, and Taylor-like minimax coefficients on |r| <= pi/4
# (W. J. Cody and W. Waite, Software Manual for the Elementary Functions, 1980; coefficients as in common practice).
TWO_OVER_PI = 0.6366197723675814
HALF_PI_1, HALF_PI_2, HALF_PI_3 = 1.5707963267948966, 6.123233995736766e-17, -1.4973849048591833e-33


@njit
def unit_phases(phi, e, i, n, c, s):  # type: ignore[no-untyped-def]
    """c[:n], s[:n] = cos(phi e[i:]), -sin(phi e[i:]); n is rounded up to whole vectors."""
    lanes = lanes_of(e)
    angle, half, one, two = vset(phi), vset(0.5), vset(1.0), vset(2.0)
    for z in range(0, n, lanes):
        x = vmul(angle, vload(e, i + z))
        q = vfloor(vfma(x, vset(TWO_OVER_PI), half))
        r = vfma(vneg(q), vset(HALF_PI_1), x)
        r = vfma(vneg(q), vset(HALF_PI_2), r)
        r = vfma(vneg(q), vset(HALF_PI_3), r)
        y = vmul(r, r)
        a = vset(1.58962301576546568060e-10)
        a = vfma(a, y, vset(-2.50507477628578072866e-8))
        a = vfma(a, y, vset(2.75573136213857245213e-6))
        a = vfma(a, y, vset(-1.98412698295895385996e-4))
        a = vfma(a, y, vset(8.33333333332211858878e-3))
        a = vfma(a, y, vset(-1.66666666666666307295e-1))
        sine = vfma(vmul(a, y), r, r)
        b = vset(-1.13585365213876817300e-11)
        b = vfma(b, y, vset(2.08757008419747316778e-9))
        b = vfma(b, y, vset(-2.75573141792967388112e-7))
        b = vfma(b, y, vset(2.48015872888517045348e-5))
        b = vfma(b, y, vset(-1.38888888888730564116e-3))
        b = vfma(b, y, vset(4.16666666666665929218e-2))
        cosine = vfma(vmul(b, y), y, vfma(vneg(half), y, one))
        # q modulo 4 turns (cosine, sine) by right angles; everything below is exact
        odd = vsub(q, vmul(two, vfloor(vmul(half, q))))
        keep = vsub(one, odd)
        quarter = vmul(vset(0.25), q)
        sign_s = vfma(vneg(two), vfloor(vmul(two, vsub(quarter, vfloor(quarter)))), one)
        quarter = vadd(quarter, vset(0.25))
        sign_c = vfma(vneg(two), vfloor(vmul(two, vsub(quarter, vfloor(quarter)))), one)
        vstore(c, z, vmul(sign_c, vfma(odd, sine, vmul(keep, cosine))))
        vstore(s, z, vneg(vmul(sign_s, vfma(odd, cosine, vmul(keep, sine)))))


@njit
def place(c, s, n, w, o, sign):  # type: ignore[no-untyped-def]
    """w[o:] = blocks of c + i sign s."""
    lanes = lanes_of(w)
    for z in range(0, n, lanes):
        vplace(c, z, w, o + 2 * z, 1.0)
        vplace(s, z, w, o + 2 * z + lanes, sign)


@njit
def add_fields(f, i, n, e, o):  # type: ignore[no-untyped-def]
    """e[o:][z] = e[o] + sum_k f[i + k] s_k(z) for all 2^n settings z of n spins."""
    lanes = lanes_of(e)
    size = 1
    for k in range(n):
        g = f[i + k]
        if size < lanes:
            for z in range(o, o + size):
                v = e[z]
                e[z + size] = v - g
                e[z] = v + g
        else:
            h = vset(g)
            for z in range(o, o + size, lanes):
                u = vload(e, z)
                vstore(e, z + size, vsub(u, h))
                vstore(e, z, vadd(u, h))
        size *= 2


@njit
def internal_energies(coupling, sites, i, n, e, o, f, u):  # type: ignore[no-untyped-def]
    """e[o:][z] = energy of the couplings among sites[i : i + n], for all settings; f, u are scratch."""
    zero = np.intp(0)  # typed, because numba compiles a variant of its own for a literal
    e[o] = 0.0
    size = 1
    for k in range(n):
        for j in range(k):
            f[j] = coupling[sites[i + k], sites[i + j]]
        u[0] = 0.0
        add_fields(f, zero, k, u, zero)
        for z in range(size):
            v = e[o + z]
            e[o + size + z] = v - u[z]
            e[o + z] = v + u[z]
        size *= 2


@njit
def frame_energies(coupling, sites, bits, row_bits, e, f, u):  # type: ignore[no-untyped-def]
    """Tables of energies of a tile, for one frame: rows, then pairs of row-numbering spins, then row numbers."""
    size = 1 << row_bits
    zero = np.intp(0)
    internal_energies(coupling, sites, zero, row_bits, e, zero, f, u)
    o = size
    for pair in range(row_bits, max(bits, row_bits + 1), 2):
        for which in range(2):
            for k in range(row_bits):
                v = 0.0
                if pair < bits:
                    v = coupling[sites[pair], sites[k]] * (1 - 2 * which)
                if pair + 1 < bits:
                    v += coupling[sites[pair + 1], sites[k]]
                f[k] = v
            e[o] = 0.0
            add_fields(f, zero, row_bits, e, o)
            o += size
    internal_energies(coupling, sites, row_bits, bits - row_bits, e, o, f, u)


@njit
def pair_phases(phi, e, o, levels, row_bits, c, s, w, d):  # type: ignore[no-untyped-def]
    """w[d:] = the tables D of a layer: for each pair of spins the settings ++, -+, +-, -- (bit 0 of the pair first)."""
    size = 1 << row_bits
    for _ in range(levels):
        unit_phases(phi, e, o, size, c, s)
        place(c, s, size, w, d, 1.0)
        place(c, s, size, w, d + 6 * size, -1.0)
        unit_phases(phi, e, o + size, size, c, s)
        place(c, s, size, w, d + 2 * size, 1.0)
        place(c, s, size, w, d + 4 * size, -1.0)
        o += 2 * size
        d += 8 * size


@njit
def tile_phases(phi, scale, coupling, field, sites, bits, total, row_bits, index, e, o, f, u, c, s, w, t, r):  # type: ignore[no-untyped-def]
    """w[t:] = T and w[r:] = R of a tile whose outer spins sites[bits:total] are set to the bits of `index`."""
    size, number, zero = 1 << row_bits, 1 << (bits - row_bits), np.intp(0)
    for k in range(bits):
        f[k] = field[sites[k]]
    outer = 0.0
    for j in range(bits, total):
        spin = 1.0 - 2.0 * (index >> (j - bits) & 1)
        force = field[sites[j]]
        for k in range(bits, j):
            force += coupling[sites[j], sites[k]] * (1.0 - 2.0 * (index >> (k - bits) & 1))
        outer += force * spin
        for k in range(bits):
            f[k] += coupling[sites[j], sites[k]] * spin
    u[0] = 0.0
    add_fields(f, zero, row_bits, u, zero)
    for z in range(size):
        u[z] += e[z]
    unit_phases(phi, u, zero, size, c, s)
    place(c, s, size, w, t, 1.0)
    u[0] = outer
    add_fields(f, row_bits, bits - row_bits, u, zero)
    for z in range(number):
        u[z] += e[o + z]
    unit_phases(phi, u, zero, number, c, s)
    for z in range(number):
        w[r + 2 * z] = scale * c[z]
        w[r + 2 * z + 1] = scale * s[z]
