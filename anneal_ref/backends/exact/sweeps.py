"""Sweeps over the stored amplitudes: one pass over memory applies a layer.

The stored bits form two groups. A low tile is one memory row (bits 0 .. m-1); a high tile is a few consecutive
amplitudes of all memory rows (bits m .. n-1), packed into a buffer. Rotations of the two groups commute, so that
    low tiles:  X_low(k-1)  D_k     X_low(k)        high tiles:  X_high(k)  D_k+1  X_high(k+1)
alternate and every layer reads and writes the memory once. With one group the state is a single tile that stays in
cache. In the symmetric half a high tile is processed together with the tile of the flipped amplitudes.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
from numba import njit

from anneal_ref.backends.exact.bundles import (
    gather,
    scatter,
    times,
    turn,
    turn_lanes,
)
from anneal_ref.backends.exact.phases import frame_energies, pair_phases, tile_phases
from anneal_ref.backends.exact.rotations import rotate, rotate_pairs
from anneal_ref.backends.exact.simd import (
    add_shared,
    lanes_of,
    prefetch,
    read_shared,
    vfma,
    vload,
    vmul,
    vneg,
    vstore,
)

TANGENTS = 64
"""Room for the tangents of all bits of a tile, below the tables of the lanes."""


PATIENCE = 1 << 14
"""Looks at the work of other threads before a thread gives its processor away (some hundred microseconds)."""


class Tiling(NamedTuple):
    """How a group of bits is swept; all numbers are integers known before the run."""

    bits: int  # local bits of a tile (of one half of a pair of tiles)
    tiles: int  # tiles, or pairs of tiles
    chunk_bits: int  # high tiles: lowest bits, one piece of a memory row, not rotated; low tiles: 0
    piece_bits: int  # bits of a padded piece of memory that fits the first-level cache
    piece: int  # distance of pieces of memory in floats
    stride: int  # distance of pieces of a tile in floats
    row: int  # distance of memory rows in floats
    half: int  # distance of the two tiles of a pair in the buffer, in floats
    pairs: int  # 1: the left-out spin is rotated in the edge pass
    odd: int  # 1: an odd number of spins
    before: int  # 1: rotations before the phase are part of the sweep
    edge: int  # lowest bit of the edge pass; it reaches to the top bit
    passes: Any  # (., 2) first bit and number of bits of the other passes above the row, bits ascending
    sites: Any  # (n,) local bits first, then those that number the tiles
    work: Any  # offsets of T, D, R, tangents before, after, signed lanes, buffer in the work array


class Scratch(NamedTuple):
    """Work space of one thread, and its copy of the problem."""

    work: Any  # like the state: tables, tangents, buffer
    energies: Any  # (2, .) tables of energies of each group, in double precision like all that follows
    fields: Any  # fields on the spins of a tile
    sums: Any  # energies of a tile
    cosines: Any
    sines: Any
    coupling: Any  # (2, n, n) of the problem, and in the frame
    field: Any  # (2, n) likewise
    signs: Any  # (n + 1,) the frame


@njit
def refresh(w, t, d, levels, row, size):  # type: ignore[no-untyped-def]
    """Partial products of phases for `row`: w[t:] holds one table a level, the base on top."""
    lanes = lanes_of(w)
    level = 1
    while level < levels and row & ((4 << 2 * level) - 1) == 0:
        level += 1
    for k in range(min(level, levels - 1), 0, -1):
        a = t + (k + 1) * size
        b = t + k * size
        f = d + (4 * k + (row >> 2 * k & 3)) * size
        for j in range(0, size, 2 * lanes):
            p, q, g, h = vload(w, a + j), vload(w, a + j + lanes), vload(w, f + j), vload(w, f + j + lanes)
            vstore(w, b + j, vfma(p, g, vneg(vmul(q, h))))
            vstore(w, b + j + lanes, vfma(p, h, vmul(q, g)))


@njit
def rows_after(x, o, n, first, w, t, d, r, levels, b, a):  # type: ignore[no-untyped-def]
    """Phase, then rotations of all bits, on n rows at o; `first` numbers the first row in its tile."""
    lanes = lanes_of(x)
    size = 16 * lanes
    for row in range(first, first + n):
        if row & 3 == 0:
            refresh(w, t, d, levels, row, size)
        re, im = gather(x, o, 2 * lanes, 8), gather(x, o + lanes, 2 * lanes, 8)
        re, im = times(re, im, w, t + size, w, d + (row & 3) * size, w, r + 2 * row)
        scatter(x, o, 2 * lanes, turn(turn_lanes(re, w, a), w, a - 4, 3))
        scatter(x, o + lanes, 2 * lanes, turn(turn_lanes(im, w, a), w, a - 4, 3))
        o += size


@njit
def rows_low(x, o, n, first, w, t, d, r, levels, b, a, ahead):  # type: ignore[no-untyped-def]
    """Rotations, phase, rotations of all bits on n rows at o; asks for the memory `ahead` floats further."""
    lanes = lanes_of(x)
    size = 16 * lanes
    for row in range(first, first + n):
        if row & 3 == 0:
            refresh(w, t, d, levels, row, size)
        for j in range(o + ahead, o + ahead + size, lanes):
            prefetch(x, j)
        re = turn(turn_lanes(gather(x, o, 2 * lanes, 8), w, b), w, b - 4, 3)
        im = turn(turn_lanes(gather(x, o + lanes, 2 * lanes, 8), w, b), w, b - 4, 3)
        re, im = times(re, im, w, t + size, w, d + (row & 3) * size, w, r + 2 * row)
        scatter(x, o, 2 * lanes, turn(turn_lanes(re, w, a), w, a - 4, 3))
        scatter(x, o + lanes, 2 * lanes, turn(turn_lanes(im, w, a), w, a - 4, 3))
        o += size


@njit
def rows_high(y, o, n, first, w, t, d, r, levels, b, a, x, ahead, count, step, chunk):  # type: ignore[no-untyped-def]
    """Do the same without the lanes, on a buffer; ask for `count` chunks of memory rows for the next tile."""
    lanes = lanes_of(y)
    size = 16 * lanes
    for row in range(first, first + n):
        if row & 3 == 0:
            refresh(w, t, d, levels, row, size)
        for c in range(row * count, (row + 1) * count):
            for j in range(ahead + c * step, ahead + c * step + chunk, lanes):
                prefetch(x, j)
        re, im = turn(gather(y, o, 2 * lanes, 8), w, b - 4, 3), turn(gather(y, o + lanes, 2 * lanes, 8), w, b - 4, 3)
        re, im = times(re, im, w, t + size, w, d + (row & 3) * size, w, r + 2 * row)
        scatter(y, o, 2 * lanes, turn(re, w, a - 4, 3))
        scatter(y, o + lanes, 2 * lanes, turn(im, w, a - 4, 3))
        o += size


@njit
def tangents(tans, k, p, w, o, lane_bits):  # type: ignore[no-untyped-def]
    """Tables at w[o:]: signed lanes; at w[o-4:] the three bits above them; at w[o-TANGENTS:] all bits of the tile."""
    lanes = 1 << lane_bits
    for b in range(p.bits):
        w[o - TANGENTS + b] = 0.0 if b < p.chunk_bits else tans[k, p.sites[b]]
    for b in range(lane_bits):
        for j in range(lanes):
            w[o + b * lanes + j] = w[o - TANGENTS + b] * (1.0 if j >> b & 1 else -1.0)
    for b in range(3):
        w[o - 4 + b] = w[o - TANGENTS + lane_bits + b] if lane_bits + b < p.edge else 0.0


@njit
def signed_lanes(t, w, o, lanes):  # type: ignore[no-untyped-def]
    """w[o:] = t times the parity sign of the lanes of an even block, then of an odd one."""
    for j in range(lanes):
        q = j
        v = t
        while q:
            v = -v
            q &= q - 1
        w[o + j] = v
        w[o + lanes + j] = -v


@njit
def in_place(x, o, p, bit, count, w, t):  # type: ignore[no-untyped-def]
    """Turn `count` bits from `bit` on, anywhere above the row, in a tile or a piece at o."""
    z = np.intp(0)  # typed, because numba compiles a variant of its own for a literal
    if bit >= p.piece_bits:
        step = p.stride << (bit - p.piece_bits)
        chunk = 2 << p.piece_bits
        for g in range(1 << (p.bits - bit - count)):
            h = o + g * (step << count)
            n = 1 << (bit - p.piece_bits)
            rotate(x, h, z, p.stride, z, step, x, h, z, p.stride, z, step, n, chunk, w, t + bit, count)
    else:
        n = 1 << (min(p.bits, p.piece_bits) - bit - count)
        s = 2 << bit
        rotate(x, o, z, s << count, z, s, x, o, z, s << count, z, s, n, s, w, t + bit, count)


@njit
def edge_in_place(x, o, p, w, t, f):  # type: ignore[no-untyped-def]
    """Do the edge pass of a tile that lies in memory."""
    z = np.intp(0)
    if p.pairs:
        bit = p.bits - 3
        if bit >= p.piece_bits:
            n, chunk, u = 1 << (bit - p.piece_bits), 2 << p.piece_bits, p.stride << (bit - p.piece_bits)
        else:
            n, chunk, u = 1, 2 << bit, 2 << bit
        q = 2 << (bit + 1) if bit + 1 < p.piece_bits else p.stride << (bit + 1 - p.piece_bits)
        a = p.stride
        rotate_pairs(x, o, o + u, z, a, z, q, x, o, o + u, z, a, z, q, n, chunk, w, t + bit + 1, w, f, z, p.odd)
    elif p.edge < p.bits:
        in_place(x, o, p, p.edge, p.bits - p.edge, w, t)


@njit
def column(p, c):  # type: ignore[no-untyped-def]
    """Offset of chunk number c in a memory row."""
    z = c << p.chunk_bits
    return (z >> p.piece_bits) * p.piece + 2 * (z & ((1 << p.piece_bits) - 1))


@njit
def edge_copy(x, y, o, p, c, last, w, t, f, out):  # type: ignore[no-untyped-def]
    """Do the edge pass of tile c between memory x and the buffer y at o; `last` numbers the last chunk."""
    z = np.intp(0)
    s = p.piece_bits - p.chunk_bits
    chunk = 2 << p.chunk_bits
    bit = p.bits - 2 if p.pairs else p.edge
    n = 1 << (bit - p.chunk_bits)
    q = p.row << (bit - p.chunk_bits)
    g = 2 << bit if bit < p.piece_bits else p.stride << (bit - p.piece_bits)
    a = column(p, c)
    if p.pairs:
        b = column(p, last - c)
        v = o + p.half
        even = 0
        while c:
            even ^= c & 1
            c >>= 1
        if out:
            rotate_pairs(
                y, o, v, s, p.stride, chunk, g, x, a, b, z, p.row, z, q, n, chunk, w, t + bit, w, f, even, p.odd
            )
        else:
            rotate_pairs(
                x, a, b, z, p.row, z, q, y, o, v, s, p.stride, chunk, g, n, chunk, w, t + bit, w, f, even, p.odd
            )
    elif out:
        rotate(y, o, s, p.stride, chunk, g, x, a, z, p.row, z, q, n, chunk, w, t + bit, p.bits - bit)
    else:
        rotate(x, a, z, p.row, z, q, y, o, s, p.stride, chunk, g, n, chunk, w, t + bit, p.bits - bit)


@njit
def sweep(x, w, e, f, u, c, s, p, start, stop, coupling, field, phi, scale, lane_bits):  # type: ignore[no-untyped-def]
    """Tiles start .. stop-1 of one sweep; the tables of the layer are in place."""
    lanes = 1 << lane_bits
    row_bits = lane_bits + 3
    size = 16 * lanes
    levels = max(1, (p.bits - row_bits + 1) // 2)
    t, d, r, b, a, sb, sa, buffer = p.work
    base = t + levels * size
    total = p.sites.size
    numbers = (1 << row_bits) * (1 + 2 * levels)
    pieces = 1 << max(0, p.bits - p.piece_bits)
    rows = 1 << (min(p.bits, p.piece_bits) - row_bits)
    last = (p.tiles << p.pairs) - 1
    high = p.chunk_bits > 0
    above = 0
    for k in range(p.passes.shape[0]):
        if p.passes[k, 0] < p.piece_bits:
            above = k + 1
    count = p.passes.shape[0]
    for tile in range(start, stop):
        if high:
            edge_copy(x, w, buffer, p, tile, last, w, b - TANGENTS, sb, np.intp(0))
            y, o = w, buffer
        else:
            y, o = x, tile * p.row
            if p.before:
                edge_in_place(x, o, p, w, b - TANGENTS, sb)
        for side in range(2 if high and p.pairs else 1):
            index = last - tile if side else tile
            here = o + side * p.half
            tile_phases(
                phi, scale, coupling, field, p.sites, p.bits, total, row_bits, index, e, numbers, f, u, c, s, w, base, r
            )
            if p.before:
                for k in range(count - 1, above - 1, -1):
                    in_place(y, here, p, p.passes[k, 0], p.passes[k, 1], w, b - TANGENTS)
            for piece in range(pieces):
                h = here + piece * p.stride
                if p.before:
                    for k in range(above - 1, -1, -1):
                        in_place(y, h, p, p.passes[k, 0], p.passes[k, 1], w, b - TANGENTS)
                if high:
                    step = p.row
                    inside = 1 << (row_bits - p.chunk_bits)
                    ahead = column(p, index + 1 - 2 * side) if tile + 1 < stop else column(p, index)
                    rows_high(
                        y, h, rows, piece * rows, w, t, d, r, levels, b, a, x, ahead, inside, step, 2 << p.chunk_bits
                    )
                elif p.before:
                    rows_low(y, h, rows, piece * rows, w, t, d, r, levels, b, a, p.row if tile + 1 < stop else 0)
                else:
                    rows_after(y, h, rows, piece * rows, w, t, d, r, levels, b, a)
                for k in range(above):
                    in_place(y, h, p, p.passes[k, 0], p.passes[k, 1], w, a - TANGENTS)
            for k in range(above, count):
                in_place(y, here, p, p.passes[k, 0], p.passes[k, 1], w, a - TANGENTS)
        if high:
            edge_copy(x, w, buffer, p, tile, last, w, a - TANGENTS, sa, np.intp(1))
        else:
            edge_in_place(x, o, p, w, a - TANGENTS, sa)


@njit
def run(x, scratch, tilings, groups, first, frames, phis, scales, tans, steps, shared, k, tiles):  # type: ignore[no-untyped-def]
    """Layers k, k + 1, ... of `phis`, the first of all on tilings[first]; returns the layer to go on with.

    frames (layers, n + 1) are the frame signs of a layer, the left-out spin last; tans (layers + 1, n + 1) are the
    tangents, those of the layer before first.

    Any number of threads may call this at once with the same `shared` (1 + 2 layers,) of zeros: a stop mark, then for
    every layer the chunks claimed and the chunks done. A chunk is steps[group] tiles. The call returns early after
    about `tiles` tiles, after waiting long for another thread, or when the stop mark is set; then it is called again.
    """
    w, e, f, u, c, s, coupling, field, signs = scratch
    lanes = lanes_of(x)
    lane_bits = 0
    while 1 << lane_bits < lanes:
        lane_bits += 1
    row_bits = lane_bits + 3
    n = signs.size - 1
    signs[:] = 0.0
    ready = 0
    layers = phis.size
    while k < layers:
        group = (first + k) % groups
        p = tilings[group]
        levels = max(1, (p.bits - row_bits + 1) // 2)
        for i in range(n + 1):
            if signs[i] != frames[k, i]:
                signs[i] = frames[k, i]
                ready = -1
        if ready == -1:
            for i in range(n):
                field[1, i] = field[0, i] * signs[i] * signs[n]
                for j in range(n):
                    coupling[1, i, j] = coupling[0, i, j] * signs[i] * signs[j]
            ready = 0
        if not ready >> group & 1:
            frame_energies(coupling[1], p.sites, p.bits, row_bits, e[group], f, u)
            ready |= 1 << group
        t, d, r, b, a, sb, sa, buffer = p.work
        pair_phases(phis[k], e[group], 1 << row_bits, levels, row_bits, c, s, w, d)
        if p.before:
            tangents(tans, k, p, w, b, lane_bits)
            signed_lanes(tans[k, n], w, sb, lanes)
        tangents(tans, k + 1, p, w, a, lane_bits)
        signed_lanes(tans[k + 1, n], w, sa, lanes)
        step = steps[group]
        chunks = (p.tiles + step - 1) // step
        while True:
            if tiles <= 0:
                return k
            start = step * add_shared(shared, 1 + 2 * k, 1)
            if start >= p.tiles or read_shared(shared, 0):
                break
            end = min(p.tiles, start + step)
            sweep(x, w, e[group], f, u, c, s, p, start, end, coupling[1], field[1], phis[k], scales[k], lane_bits)
            add_shared(shared, 2 + 2 * k, 1)
            tiles -= end - start
        patience = PATIENCE
        while read_shared(shared, 2 + 2 * k) < chunks:
            patience -= 1
            if patience == 0 or read_shared(shared, 0):
                return k
        k += 1
    return k
