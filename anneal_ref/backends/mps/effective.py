r"""Kernels: the Hamiltonian as the tensor at the centre sees it, and its product with a tensor.

With B matrices theta[b], one for each state of the open spins, the effective Hamiltonian of any number of open sites is

    out[b] = KL[b] theta[b] + theta[b] KR[b]^T + sum_k c_b L_k theta[b] R_k^T + (spin flips)

where KL and KR hold all that acts on one side (the Hamiltonian of the block, and its fields on the open spins), and the
pairs L_k, R_k are what couples the left block to the right one: as many as the coupling matrix between them has rank.

*With the spin-flip symmetry* (even = True) rows and columns come in two sectors (see `product`); a block operator like
Z_a flips the sector and is kept as its even-odd rectangle. Two open sites have B = 2 with b the eigenvalue of
Z_p Z_{p+1}, +1 first; the coupling J_{p,p+1} is then a number, c_b = b, and

    -G (w_p X_p + w_q X_q):   -G (w_p + w_q) theta[-b] on the even-even block, + on the odd-odd block,
                              -G (w_p - w_q) theta[-b] on the even-odd block,  + on the odd-even block.

One open site has B = 1, and X = +1 on the diagonal blocks, -1 off them. No open site (a bond): B = 1, and only the
diagonal blocks are there.

*Without it* B = 1, 2, 4 in the Z basis, c_b = 1, and spin flips exchange the matrices.

All channels are stacked so that they take two large products: T = theta [R_1 ... R_r], then L T (k, l next to each
other in memory in both).
"""

from __future__ import annotations

import numpy as np
from numba import njit

from anneal_ref.backends.mps.blas import PLAIN, TRANSPOSED, multiply


@njit
def combined(coefficients, operators):  # type: ignore[no-untyped-def]
    """Return the operators sum_j coefficients[k, j] operators[j]."""
    out = np.zeros((coefficients.shape[0],) + operators.shape[1:], operators.dtype)
    real = out.real.dtype.type
    for k in range(coefficients.shape[0]):
        for j in range(coefficients.shape[1]):
            c = real(coefficients[k, j])
            if c != 0:
                for a in range(out.shape[1]):
                    for b in range(out.shape[2]):
                        out[k, a, b] += c * operators[j, a, b]
    return out


@njit
def field_of(coefficients, operators, scale, even, out):  # type: ignore[no-untyped-def]
    """Add scale sum_j coefficients[j] operators[j] to the full matrix `out`, on both rectangles if even."""
    real = out.real.dtype.type
    for j in range(len(coefficients)):
        c = real(scale * coefficients[j])
        if c == 0:
            continue
        rows, columns = operators.shape[1:]
        if even:
            for a in range(rows):
                for b in range(columns):
                    value = c * operators[j, a, b]
                    out[a, rows + b] += value
                    out[rows + b, a] += np.conj(value)
        else:
            for a in range(rows):
                for b in range(columns):
                    out[a, b] += c * operators[j, a, b]


@njit
def side(hx, hz, operators, near, far, inner, transverse, problem, sites, mirrored, even):  # type: ignore[no-untyped-def]
    """Return K, shape (B, D, D): one block's Hamiltonian and its fields on the open spins.

    `near` and `far` are the coefficients of the fields on the open spin next to the block and on the other one, `inner`
    (B,) the energies of the open spins alone. Without the symmetry the matrices are counted with the left spin first,
    which is the far one for the right block (mirrored).
    """
    d = hx.shape[0]
    real = hx.real.dtype.type
    count = (1, 1, 2)[sites] if even else (1, 2, 4)[sites]
    out = np.empty((count, d, d), hx.dtype)
    for b in range(count):
        out[b] = 0
        add_scaled(out[b], hx, transverse)
        add_scaled(out[b], hz, problem)
        energy = real(problem * inner[b])
        for a in range(d):
            out[b, a, a] += energy
        if sites == 0:
            continue
        if even:
            first, second = 1.0, 1.0 - 2.0 * b
        elif sites == 1:
            first, second = 1.0 - 2.0 * b, 0.0
        else:
            left, right = 1.0 - 2.0 * (b // 2), 1.0 - 2.0 * (b % 2)
            first, second = (right, left) if mirrored else (left, right)
        field_of(near, operators, problem * first, even, out[b])
        if sites == 2:
            field_of(far, operators, problem * second, even, out[b])
    return out


@njit
def left_stacks(operators, even, scale):  # type: ignore[no-untyped-def]
    """Return the left operators side by side, (l', (l, k)): from even rows and from odd rows, or all in the first."""
    count, rows, columns = operators.shape
    real = operators.real.dtype.type(scale)
    if even:
        first = np.empty((columns, rows, count), operators.dtype)
        second = np.empty((rows, columns, count), operators.dtype)
        for k in range(count):
            for a in range(rows):
                for b in range(columns):
                    value = real * operators[k, a, b]
                    first[b, a, k] = np.conj(value)
                    second[a, b, k] = value
        return first.reshape(columns, rows * count), second.reshape(rows, columns * count)
    first = np.empty((rows, columns, count), operators.dtype)
    for k in range(count):
        for a in range(rows):
            for b in range(columns):
                first[a, b, k] = real * operators[k, a, b]
    return first.reshape(rows, columns * count), np.empty((0, 0), operators.dtype)


@njit
def right_stacks(operators, even):  # type: ignore[no-untyped-def]
    """Return the transposed right operators side by side, (r, (k, r')): from even columns and from odd ones, or all."""
    count, rows, columns = operators.shape
    if even:
        first = np.empty((rows, count, columns), operators.dtype)
        second = np.empty((columns, count, rows), operators.dtype)
        for k in range(count):
            for a in range(rows):
                for b in range(columns):
                    value = operators[k, a, b]
                    first[a, k, b] = np.conj(value)
                    second[b, k, a] = value
        return first.reshape(rows, count * columns), second.reshape(columns, count * rows)
    first = np.empty((columns, count, rows), operators.dtype)
    for k in range(count):
        for a in range(rows):
            for b in range(columns):
                first[b, k, a] = operators[k, a, b]
    return first.reshape(columns, count * rows), np.empty((0, 0), operators.dtype)


@njit
def add_scaled(out, matrix, factor):  # type: ignore[no-untyped-def]
    """Add factor times a matrix. Plain loops, here and below, compile many times faster than expressions of slices."""
    c = out.real.dtype.type(factor)
    for i in range(out.shape[0]):
        for j in range(out.shape[1]):
            out[i, j] += c * matrix[i, j]


@njit
def add_blocks(out, matrix, de, re, factors):  # type: ignore[no-untyped-def]
    """Add a matrix whose four blocks even-even, even-odd, odd-even, odd-odd are multiplied by a factor each."""
    for i in range(out.shape[0]):
        for j in range(out.shape[1]):
            c = factors[(0 if i < de else 2) + (0 if j < re else 1)]
            out[i, j] += out.real.dtype.type(c) * matrix[i, j]


@njit
def _flips(theta, out, de, re, flips, sites, even):  # type: ignore[no-untyped-def]
    first, second = flips[0], flips[1]
    if even and sites == 1:
        add_blocks(out[0], theta[0], de, re, (-first, first, first, -first))
    elif even:
        both, difference = first + second, first - second
        for b in range(2):
            add_blocks(out[b], theta[1 - b], de, re, (-both, -difference, difference, both))
    elif sites == 1:
        for b in range(2):
            add_scaled(out[b], theta[1 - b], -first)
    else:
        for b in range(4):
            add_scaled(out[b], theta[b ^ 2], -first)
            add_scaled(out[b], theta[b ^ 1], -second)


@njit
def _channels_even(theta, out, lefts, rights, count, de, re, sites, buffer):  # type: ignore[no-untyped-def]
    matrices, rows, columns = theta.shape
    flat = theta.reshape(matrices * rows, columns)
    for q in range(2):
        start, stop = (0, re) if q == 0 else (re, columns)
        to_start, to_stop = (re, columns) if q == 0 else (0, re)
        n = to_stop - to_start
        if n == 0 or stop == start:
            continue
        if sites == 0:
            # on a bond the diagonal blocks alone are there
            block = slice(0, de) if q == 0 else slice(de, rows)
            height = block.stop - block.start
            t = buffer[: height * count * n].reshape(height, count * n)
            multiply(t, theta[0, block, start:stop], rights[q])
            target = out[0, de:, re:] if q == 0 else out[0, :de, :re]
            multiply(target, lefts[q], t.reshape(height * count, n), PLAIN, PLAIN, 1.0, 1.0)
            continue
        t = buffer[: matrices * rows * count * n].reshape(matrices * rows, count * n)
        multiply(t, flat[:, start:stop], rights[q])
        for b in range(matrices):
            sign = 1.0 - 2.0 * b
            even = t[b * rows : b * rows + de].reshape(de * count, n)
            odd = t[b * rows + de : (b + 1) * rows].reshape((rows - de) * count, n)
            multiply(out[b, de:, to_start:to_stop], lefts[0], even, PLAIN, PLAIN, sign, 1.0)
            multiply(out[b, :de, to_start:to_stop], lefts[1], odd, PLAIN, PLAIN, sign, 1.0)


@njit
def _channels_dense(theta, out, lefts, rights, count, buffer):  # type: ignore[no-untyped-def]
    matrices, rows, columns = theta.shape
    n = rights[0].shape[1] // count
    t = buffer[: matrices * rows * count * n].reshape(matrices * rows, count * n)
    multiply(t, theta.reshape(matrices * rows, columns), rights[0])
    for b in range(matrices):
        multiply(out[b], lefts[0], t[b * rows : (b + 1) * rows].reshape(rows * count, n), PLAIN, PLAIN, 1.0, 1.0)


@njit
def apply(theta, out, kl, kr, lefts, rights, count, de, re, flips, sites, even, buffer):  # type: ignore[no-untyped-def]
    """Set out = H theta; both of shape (B, D_left, D_right)."""
    if sites == 0 and even:
        for rows, columns in ((slice(0, de), slice(0, re)), (slice(de, None), slice(re, None))):
            multiply(out[0, rows, columns], kl[0, rows, rows], theta[0, rows, columns])
            multiply(
                out[0, rows, columns], theta[0, rows, columns], kr[0, columns, columns], PLAIN, TRANSPOSED, 1.0, 1.0
            )
    else:
        for b in range(theta.shape[0]):
            multiply(out[b], kl[b], theta[b])
            multiply(out[b], theta[b], kr[b], PLAIN, TRANSPOSED, 1.0, 1.0)
    if sites > 0:
        _flips(theta, out, de, re, flips, sites, even)
    if count > 0:
        if even:
            _channels_even(theta, out, lefts, rights, count, de, re, sites, buffer)
        else:
            _channels_dense(theta, out, lefts, rights, count, buffer)


@njit
def assembled(left, right, wires, inner, strengths, sites, even):  # type: ignore[no-untyped-def]
    """Return what `apply` needs of the blocks on both sides: K of either, the stacks of the channels, their number."""
    lhx, lhz, lops = left
    rhx, rhz, rops = right
    left_near, left_far, right_near, right_far, cross_left, cross_right = wires
    transverse, problem = strengths
    kl = side(lhx, lhz, lops, left_near, left_far, inner, transverse, problem, sites, False, even)
    kr = side(rhx, rhz, rops, right_near, right_far, 0.0 * inner, transverse, problem, sites, True, even)
    lefts = left_stacks(combined(cross_left, lops), even, problem)
    rights = right_stacks(combined(cross_right, rops), even)
    return kl, kr, lefts, rights, len(cross_left)
