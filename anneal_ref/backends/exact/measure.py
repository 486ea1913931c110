"""Read-outs of stored amplitudes, each in few passes over memory: moments, transverse moments, weights, draws.

Amplitudes are visited in pieces. Everything is summed in double precision and in a fixed order: by vector, by piece,
by chunk of pieces; chunks may run on any thread.
"""

from __future__ import annotations

from numba import njit

from anneal_ref.backends.exact.bundles import (
    add_currents,
    flip,
    fold,
    gather,
)
from anneal_ref.backends.exact.simd import (
    lane_currents,
    lanes_of,
    parity,
    squares,
    vadd,
    vfma,
    vload,
    vmul,
    vneg,
    vset,
    vstore,
    vsub,
    vsum,
)


@njit
def place(piece, shape):  # type: ignore[no-untyped-def]
    """Start of a piece; shape = (bits of pieces in a row, distance of rows, distance of pieces, bits of a piece)."""
    return (piece >> shape[0]) * shape[1] + (piece & ((1 << shape[0]) - 1)) * shape[2]


@njit
def piece_probabilities(x, o, size, p):  # type: ignore[no-untyped-def]
    """p[:size] = probabilities of the piece at o."""
    lanes = lanes_of(x)
    for z in range(0, size, lanes):
        squares(x, o + 2 * z, p, z)


@njit
def fold_piece(p, bits, out):  # type: ignore[no-untyped-def]
    """Set out[i] to the sum of p with the sign of bit i, return the plain sum; overwrites p."""
    lanes = lanes_of(p)
    while bits_above(bits, lanes) >= 3:
        step = 1 << (bits - 3)
        a = b = c = vset(0.0)
        for z in range(0, step, lanes):
            s, d, e, f = fold(gather(p, z, step, 8))
            a, b, c = vadd(a, d), vadd(b, e), vadd(c, f)
            vstore(p, z, s)
        bits -= 3
        out[bits], out[bits + 1], out[bits + 2] = vsum(a), vsum(b), vsum(c)
    while bits_above(bits, lanes) >= 1:
        bits -= 1
        step = 1 << bits
        a = vset(0.0)
        for z in range(0, step, lanes):
            s, d = vload(p, z), vload(p, z + step)
            a = vadd(a, vsub(s, d))
            vstore(p, z, vadd(s, d))
        out[bits] = vsum(a)
    while bits > 0:
        bits -= 1
        step = 1 << bits
        total = 0.0
        for z in range(step):
            s, d = p[z], p[z + step]
            total += s - d
            p[z] = s + d
        out[bits] = total
    return p[0]


@njit
def bits_above(bits, lanes):  # type: ignore[no-untyped-def]
    """Bits that number whole vectors among 2^bits values."""
    count = 0
    while lanes << (count + 1) <= 1 << bits:
        count += 1
    return count


@njit
def transform(v, count, width):  # type: ignore[no-untyped-def]
    """Walsh-Hadamard transform of `count` rows of v (count, width), in place."""
    step = 1
    while step < count:
        for b in range(0, count, 2 * step):
            for j in range(b, b + step):
                for k in range(width):
                    s, d = v[j, k], v[j + step, k]
                    v[j, k] = s + d
                    v[j + step, k] = s - d
        step *= 2


@njit
def chunk_moments(x, shape, chunk, chunk_bits, p, total, first, z, zz):  # type: ignore[no-untyped-def]
    """First and second moments of a chunk of 2^chunk_bits pieces.

    p and total (2^piece_bits, 1) are scratch, first (2^chunk_bits, piece_bits + 1) too; z (b + 1,) gets the moments of
    the b bits below the chunk and the weight, zz (b, b) the products.
    """
    bits = shape[3]
    size, lanes, wide = 1 << bits, lanes_of(x), lanes_of(p)
    count = 1 << chunk_bits
    t = total[:, 0]
    t[:] = 0.0
    for k in range(count):
        o = place(chunk * count + k, shape)
        for y in range(0, size, lanes):
            squares(x, o + 2 * y, p, y)
        for y in range(0, size, wide):
            vstore(t, y, vadd(vload(t, y), vload(p, y)))
        first[k, bits] = fold_piece(p, bits, first[k])
    transform(total, size, total.shape[1])
    transform(first, count, first.shape[1])
    for i in range(bits):
        z[i] = t[1 << i]
        for j in range(i):
            zz[i, j] = zz[j, i] = t[1 << i | 1 << j]
    for i in range(chunk_bits):
        z[bits + i] = first[1 << i, bits]
        for j in range(bits):
            zz[bits + i, j] = zz[j, bits + i] = first[1 << i, j]
        for j in range(i):
            zz[bits + i, bits + j] = zz[bits + j, bits + i] = first[1 << i | 1 << j, bits]
    z[bits + chunk_bits] = first[0, bits]
    for i in range(bits + chunk_bits):
        zz[i, i] = first[0, bits]


@njit
def currents(x, o, step, chunk, count, out, bit):  # type: ignore[no-untyped-def]
    """Add to out[bit : bit + count] the currents of `count` <= 3 bits reached by steps, over a chunk at o."""
    lanes = lanes_of(x)
    zero = vload(x, o)
    zero = vsub(zero, zero)
    if count == 3:
        sums = (zero, zero, zero)
        for j in range(o, o + chunk, 2 * lanes):
            sums = add_currents(gather(x, j, step, 8), gather(x, j + lanes, step, 8), sums)
        out[bit] += vsum(sums[0])
        out[bit + 1] += vsum(sums[1])
        out[bit + 2] += vsum(sums[2])
    elif count == 2:
        both = (zero, zero)
        for j in range(o, o + chunk, 2 * lanes):
            both = add_currents(gather(x, j, step, 4), gather(x, j + lanes, step, 4), both)
        out[bit] += vsum(both[0])
        out[bit + 1] += vsum(both[1])
    else:
        one = (zero,)
        for j in range(o, o + chunk, 2 * lanes):
            one = add_currents(gather(x, j, step, 2), gather(x, j + lanes, step, 2), one)
        out[bit] += vsum(one[0])


@njit
def pair_overlap(x, shape, bits, piece, odd, scratch):  # type: ignore[no-untyped-def]
    """Sum over a piece of (-1)^pop(z) Re(c phi*(z) phi(~z)), c = 1, or i for an odd number of spins."""
    lanes = lanes_of(x)
    count = (1 << shape[3]) // lanes
    o = place(piece, shape)
    u = place((1 << (bits - shape[3])) - 1 - piece, shape) + 2 * lanes * (count - 1)
    a = vload(x, o)
    a = vsub(a, a)
    b = a
    for n in range(count):
        re, im = vload(x, o), vload(x, o + lanes)
        back = flip((vload(x, u), vload(x, u + lanes)))
        if odd:
            v = vfma(im, back[1], vmul(vneg(re), back[0]))
        else:
            v = vfma(re, back[1], vmul(im, back[0]))
        if parity(piece * count + n):
            b = vadd(b, v)
        else:
            a = vadd(a, v)
        o += 2 * lanes
        u -= 2 * lanes
    vstore(scratch, 0, vsub(a, b))
    total = 0.0
    for j in range(lanes):
        total += -scratch[j] if parity(j) else scratch[j]
    return total


@njit
def chunk_currents(x, shape, bits, start, stop, groups, scratch, pairs, odd, out):  # type: ignore[no-untyped-def]
    """Set out (bits + 1,) to sums of re im' - im re' for every stored bit, and for the left-out spin, over a chunk.

    groups (., 2): first bit and number of bits (at most 3) taken at once, none across the edge of a piece or a row.
    """
    lanes = lanes_of(x)
    lane_bits = 0
    while 1 << lane_bits < lanes:
        lane_bits += 1
    inside = shape[3]
    out[:] = 0.0
    for piece in range(start, stop):
        o = place(piece, shape)
        for j in range(lane_bits * lanes):
            scratch[j] = 0.0
        for j in range(o, o + (2 << inside), 2 * lanes):
            lane_currents(vload(x, j), vload(x, j + lanes), scratch, 0)
        for b in range(lane_bits):
            for j in range(lanes):
                if not j >> b & 1:
                    out[b] += scratch[b * lanes + j]
        for g in range(groups.shape[0]):
            bit, count = groups[g, 0], groups[g, 1]
            if bit < inside:
                step = 2 << bit
                for r in range(o, o + (2 << inside), step << count):
                    currents(x, r, step, step, count, out, bit)
            elif not piece >> (bit - inside) & ((1 << count) - 1):
                step = place(1 << (bit - inside), shape)
                currents(x, o, step, 2 << inside, count, out, bit)
        if pairs:
            out[bits] += pair_overlap(x, shape, bits, piece, odd, scratch)


@njit
def chunk_weights(x, shape, start, stop, p, weights):  # type: ignore[no-untyped-def]
    """weights[start:stop] = weights of the pieces."""
    size, wide = 1 << shape[3], lanes_of(p)
    for piece in range(start, stop):
        piece_probabilities(x, place(piece, shape), size, p)
        total = vset(0.0)
        for z in range(0, size, wide):
            total = vadd(total, vload(p, z))
        weights[piece] = vsum(total)


@njit
def draw(x, shape, pieces, targets, p, out):  # type: ignore[no-untyped-def]
    """out[k] = the amplitude of pieces[k] (ascending) where the running sum of probabilities passes targets[k]."""
    size = 1 << shape[3]
    now, z, last, total = -1, 0, 0, 0.0
    for k in range(pieces.size):
        if pieces[k] != now:
            now = pieces[k]
            piece_probabilities(x, place(now, shape), size, p)
            z, last, total = 0, 0, 0.0
        while z < size and total + p[z] <= targets[k]:
            total += p[z]
            if p[z] > 0.0:
                last = z
            z += 1
        out[k] = (now << shape[3]) + (z if z < size else last)
