"""Rotations of spins above the lanes: loads and stores of bundles, each pass turning up to four bits at once.

A pass runs over rows of `chunk` floats. Row r of an array starts at `o + (r >> s) * a + (r & (1 << s) - 1) * b`: rows
lie `b` apart inside a piece of 2^s rows and pieces lie `a` apart. The bits turned are reached by steps of `q` floats,
2q, 4q. Source and target may be one array (in place) or memory and buffer, so that copying costs nothing extra.
"""

from __future__ import annotations

from numba import njit

from anneal_ref.backends.exact.bundles import (
    flip,
    gather,
    scatter,
    turn,
    turn_pair,
)
from anneal_ref.backends.exact.simd import (
    lanes_of,
    parity,
    vload,
    vneg,
)


@njit
def rotate(x, o, s, a, b, q, y, p, z, c, d, g, rows, chunk, t, i, k):  # type: ignore[no-untyped-def]
    """Turn k <= 4 bits with tangents t[i:], from x (o, s, a, b, q) to y (p, z, c, d, g)."""
    lanes = lanes_of(x)
    for r in range(rows):
        j = o + (r >> s) * a + (r & ((1 << s) - 1)) * b
        h = p + (r >> z) * c + (r & ((1 << z) - 1)) * d
        if k == 3:
            for _ in range(0, chunk, lanes):
                scatter(y, h, g, turn(gather(x, j, q, 8), t, i, 3))
                j += lanes
                h += lanes
        elif k == 2:
            for _ in range(0, chunk, lanes):
                scatter(y, h, g, turn(gather(x, j, q, 4), t, i, 2))
                j += lanes
                h += lanes
        elif k == 4:
            for _ in range(0, chunk, lanes):
                scatter(y, h, g, turn(gather(x, j, q, 16), t, i, 4))
                j += lanes
                h += lanes
        elif k == 1:
            for _ in range(0, chunk, lanes):
                scatter(y, h, g, turn(gather(x, j, q, 2), t, i, 1))
                j += lanes
                h += lanes
        else:
            for _ in range(0, chunk, lanes):
                scatter(y, h, g, gather(x, j, q, 1))
                j += lanes
                h += lanes


@njit
def rotate_pairs(x, o, u, s, a, b, q, y, p, v, z, c, d, g, rows, chunk, t, i, w, f, even, odd):  # type: ignore[no-untyped-def]
    """Turn two bits with tangents t[i:] and the spin left out of the symmetric half.

    That spin turns amplitude z against amplitude ~z (all bits flipped), the sign alternating with the parity of z.
    Row r at offset o holds bundles of z, row `rows - 1 - r` at offset u their complements, read backwards.
    w[f:] holds the tangents for the lanes of an even block, then of an odd one; `even` is 1 if the parity of the first
    block is odd; `odd` couples real to imaginary parts (an odd number of spins).
    """
    lanes = lanes_of(x)
    blocks = chunk // (2 * lanes)
    swap = lanes if odd else 0
    for r in range(rows):
        e = rows - 1 - r
        j = o + (r >> s) * a + (r & ((1 << s) - 1)) * b
        h = p + (r >> z) * c + (r & ((1 << z) - 1)) * d
        jj = u + (e >> s) * a + (e & ((1 << s) - 1)) * b + chunk - 2 * lanes
        hh = v + (e >> z) * c + (e & ((1 << z) - 1)) * d + chunk - 2 * lanes
        for n in range(blocks):
            sign = vload(w, f + (parity(r * blocks + n) ^ even) * lanes)
            first = vneg(sign) if odd else sign
            ra = turn(gather(x, j, q, 4), t, i, 2)
            ia = turn(gather(x, j + lanes, q, 4), t, i, 2)
            rb = flip(turn(gather(x, jj + swap, q, 4), t, i, 2))
            ib = flip(turn(gather(x, jj + lanes - swap, q, 4), t, i, 2))
            ra, rb = turn_pair(ra, rb, first)
            ia, ib = turn_pair(ia, ib, sign)
            scatter(y, h, g, ra)
            scatter(y, h + lanes, g, ia)
            scatter(y, hh + swap, g, flip(rb))
            scatter(y, hh + lanes - swap, g, flip(ib))
            j += 2 * lanes
            h += 2 * lanes
            jj -= 2 * lanes
            hh -= 2 * lanes
