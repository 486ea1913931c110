"""Kernels of the light cones: rotations of neighbouring Majorana operators, a bundle of columns at a time.

Of the matrix M (see `cones`) a bundle is a few neighbouring columns, two machine vectors wide, over a window of rows
that is as wide as their light cone: a few kilobytes that stay in the first-level cache for all layers of a call. The
window widens as soon as its outermost rows, two on either side, hold more than `edge`. A layer carries amplitudes over
two rows at most, so what it moves beyond the window is below `edge` too; the rotation that would move it is left out,
and all that remain are rotations.

Rows are numbered on the cover of the chain, where those of a ring go on beyond both ends.
"""

from __future__ import annotations

from numba import njit

from anneal_ref.backends.exact.phases import unit_phases
from anneal_ref.backends.exact.simd import lanes_of, vfma, vload, vmul, vneg, vset, vstore, vsum

LOW, HIGH, BASE, DONE = 0, 1, 2, 3
"""Columns of `spans`: the window, the row at the start of the bundle's storage, and layers done."""

_MORE = 4


@njit
def tables(angles, strengths, c, s):  # type: ignore[no-untyped-def]
    """Write cosines and sines of twice the angles (layers,) times the strengths, padded to whole vectors."""
    for k in range(len(angles)):
        unit_phases(-2.0 * angles[k], strengths, 0, len(strengths), c[k], s[k])


@njit
def weight(v, o, lanes):  # type: ignore[no-untyped-def]
    """Sum of squares of the two rows at o."""
    a, b, c, d = vload(v, o), vload(v, o + lanes), vload(v, o + 2 * lanes), vload(v, o + 3 * lanes)
    return vsum(vfma(a, a, vfma(b, b, vfma(c, c, vmul(d, d)))))


@njit
def turn(v, o, low, high, closed, n, cp, sp, cx, sx):  # type: ignore[no-untyped-def]
    """Apply one layer to the window that lies at o: rotations of all bonds, then of all sites."""
    lanes = lanes_of(v)
    row = 2 * lanes
    site, left = (low >> 1) % n, (high - low >> 1) - 1
    if closed:
        # the last row and the first, which comes next with a minus sign
        last, bond = o + (high - low - 1) * row, (site + left) % n
        c, s = vset(cp[bond]), vset(sp[bond])
        for k in range(0, row, lanes):
            a, b = vload(v, last + k), vload(v, o + k)
            vstore(v, last + k, vfma(c, a, vneg(vmul(s, b))))
            vstore(v, o + k, vfma(c, b, vmul(s, a)))
    a0, a1 = vload(v, o), vload(v, o + lanes)
    for _ in range(left):
        b0, b1 = vload(v, o + row), vload(v, o + row + lanes)
        d0, d1 = vload(v, o + 2 * row), vload(v, o + 2 * row + lanes)
        c, s = vset(cp[site]), vset(sp[site])
        e0, e1 = vfma(c, b0, vmul(s, d0)), vfma(c, b1, vmul(s, d1))
        d0, d1 = vfma(c, d0, vneg(vmul(s, b0))), vfma(c, d1, vneg(vmul(s, b1)))
        c, s = vset(cx[site]), vset(sx[site])
        vstore(v, o, vfma(c, a0, vneg(vmul(s, e0))))
        vstore(v, o + lanes, vfma(c, a1, vneg(vmul(s, e1))))
        vstore(v, o + row, vfma(c, e0, vmul(s, a0)))
        vstore(v, o + row + lanes, vfma(c, e1, vmul(s, a1)))
        a0, a1 = d0, d1
        o += 2 * row
        site += 1
        if site == n:
            site = 0
    b0, b1 = vload(v, o + row), vload(v, o + row + lanes)
    c, s = vset(cx[site]), vset(sx[site])
    vstore(v, o, vfma(c, a0, vneg(vmul(s, b0))))
    vstore(v, o + lanes, vfma(c, a1, vneg(vmul(s, b1))))
    vstore(v, o + row, vfma(c, b0, vmul(s, a0)))
    vstore(v, o + row + lanes, vfma(c, b1, vmul(s, a1)))


@njit
def advance(v, room, spans, cut, first, stop, n, ring, edge, cp, sp, cx, sx):  # type: ignore[no-untyped-def]
    """Apply layers to the bundles first .. stop-1, each until all are done or its window has no room to widen.

    Parameters
    ----------
    v : 1d array of float64
        Bundles, `room` rows each, a row of two vectors.
    room : int
    spans : (bundles, 4) array of int64
    cut : (bundles,) array
        Largest weight so far of two outermost rows when a layer was applied.
    first, stop : int
    n : int
        Number of sites.
    ring : bool
    edge : float
    cp, sp, cx, sx : (layers, at least n) arrays
        Cosines and sines of the rotations of bonds and sites.
    """
    lanes = lanes_of(v)
    row = 2 * lanes
    layers = len(cp)
    for b in range(first, stop):
        low, high, base, done = spans[b, LOW], spans[b, HIGH], spans[b, BASE], spans[b, DONE]
        start = b * room * row
        while done < layers:
            below, above = low, high
            spare = 2 * n - (high - low)
            if spare > 0 and (ring or low > 0):
                outside = weight(v, start + (low - base) * row, lanes)
                if outside > edge * edge:
                    below = low - min(_MORE, spare) if ring else max(0, low - _MORE)
                    spare -= low - below
                else:
                    cut[b] = max(cut[b], outside)
            if spare > 0 and (ring or high < 2 * n):
                outside = weight(v, start + (high - base - 2) * row, lanes)
                if outside > edge * edge:
                    above = high + min(_MORE, spare) if ring else min(2 * n, high + _MORE)
                else:
                    cut[b] = max(cut[b], outside)
            if below < base or above > base + room:
                break
            low, high = below, above
            closed = ring and high - low == 2 * n
            turn(v, start + (low - base) * row, low, high, closed, n, cp[done], sp[done], cx[done], sx[done])
            done += 1
        spans[b, LOW], spans[b, HIGH], spans[b, DONE] = low, high, done


@njit
def sum_rows(v, room, spans, norms):  # type: ignore[no-untyped-def]
    """Add the squares of every row of M to `norms` (rows,)."""
    row = 2 * lanes_of(v)
    for b in range(len(spans)):
        low, high, base = spans[b, LOW], spans[b, HIGH], spans[b, BASE]
        for k in range(low, high):
            o = (b * room + k - base) * row
            total = 0.0
            for j in range(row):
                total += v[o + j] * v[o + j]
            norms[k % len(norms)] += total


@njit
def pair_rows(v, room, spans, ring, partner, band):  # type: ignore[no-untyped-def]
    """Add M W M^T to the upper band of a matrix, W with +1 in (2i, 2i+1) and -1 in (2i+1, 2i).

    Parameters
    ----------
    v, room, spans, ring
        See `advance`.
    partner : 1d array
        Work space as large as a bundle.
    band : (rows, reach + 1) array
        Entry (k, d) belongs to the rows k and k + d of the cover.
    """
    lanes = lanes_of(v)
    row = 2 * lanes
    rows, reach = band.shape[0], band.shape[1] - 1
    for b in range(len(spans)):
        low, high, base = spans[b, LOW], spans[b, HIGH], spans[b, BASE]
        start = (b * room + low - base) * row
        size = (high - low) * row
        for j in range(0, size, 2):
            partner[j], partner[j + 1] = v[start + j + 1], -v[start + j]
        for k in range(low, high):
            o = (k - low) * row
            a0, a1 = vload(v, start + o), vload(v, start + o + lanes)
            for d in range(1, high - k):
                o += row
                total = vsum(vfma(a0, vload(partner, o), vmul(a1, vload(partner, o + lanes))))
                if d <= reach:
                    band[k % rows, d] += total
                if ring and rows - d <= reach:
                    # the same two rows the other way round: two signs, of the order and of the way
                    band[(k + d) % rows, rows - d] += total
