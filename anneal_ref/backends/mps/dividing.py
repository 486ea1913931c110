r"""Kernels: two site tensors become one, and one becomes two again.

With the spin-flip symmetry the two-site tensor is written in the eigenbasis of Z_p Z_{p+1},
theta[+-] = (theta[m=0] +- theta[m=1]) / sqrt 2, where m is the parity of the bond between; the two matrices theta[m]
are divided each by itself. What a division leaves out is the sum of the squared singular values that are dropped, added
up in double precision (one minus the kept weight would be rounding noise).
"""

from __future__ import annotations

import numpy as np
from numba import njit

from anneal_ref.backends.mps.blas import multiply

FEWEST = 16
"""States of a bond that are never dropped below the cap; so few cost nothing."""


@njit
def join(a, b, dm, even):  # type: ignore[no-untyped-def]
    """Return the two-site tensor of neighbouring site tensors; `dm` even states on the bond between."""
    rows, columns = a.shape[1], b.shape[2]
    if even:
        out = np.empty((2, rows, columns), a.dtype)
        multiply(out[0], a[0, :, :dm], b[0, :dm])
        multiply(out[1], a[0, :, dm:], b[0, dm:])
        _rotate(out)
        return out
    out = np.empty((4, rows, columns), a.dtype)
    for first in range(2):
        for second in range(2):
            multiply(out[2 * first + second], a[first], b[second])
    return out


@njit
def _rotate(theta):  # type: ignore[no-untyped-def]
    half = theta.real.dtype.type(np.sqrt(0.5))
    for i in range(theta.shape[1]):
        for j in range(theta.shape[2]):
            plus, minus = theta[0, i, j] + theta[1, i, j], theta[0, i, j] - theta[1, i, j]
            theta[0, i, j] = half * plus
            theta[1, i, j] = half * minus


@njit
def _kept(first, second, most, truncation):  # type: ignore[no-untyped-def]
    """Return how many of each of two descending lists of singular values stay, and the relative weight of the rest.

    Just after a product state all correlation is small, and what is dropped then may never come back where spins far
    apart on the chain are coupled. So the allowance is a share of the weight beyond the largest singular value, and a
    few states are kept whatever their weight: even when it is rounding, they are room to grow.
    """
    weights = np.empty(len(first) + len(second))
    for i in range(len(first)):
        weights[i] = float(first[i]) ** 2
    for i in range(len(second)):
        weights[len(first) + i] = float(second[i]) ** 2
    order = np.argsort(weights)
    total = weights.sum()
    allowance = truncation * weights[order[:-1]].sum()
    rounding = (4 * np.finfo(first.dtype).eps) ** 2 * total
    dropped, k = 0.0, 0
    # never the largest
    while k < len(order) - 1:
        weight = weights[order[k]]
        lost = dropped + weight
        left = len(order) - k
        if left <= most and (left <= FEWEST or (lost > allowance and weight > rounding)):
            break
        dropped = lost
        k += 1
    of_first = 0
    for i in order[k:]:
        if i < len(first):
            of_first += 1
    return of_first, len(order) - k - of_first, dropped / total


@njit
def copy_into(out, matrix):  # type: ignore[no-untyped-def]
    """Copy the leading part of a matrix that fits; plain loops compile faster than slices."""
    for i in range(out.shape[0]):
        for j in range(out.shape[1]):
            out[i, j] = matrix[i, j]


@njit
def _scaled_rows(out, factors, matrix):  # type: ignore[no-untyped-def]
    """Set the rows of `out` to the leading ones of a matrix, each times its factor."""
    for i in range(out.shape[0]):
        for j in range(out.shape[1]):
            out[i, j] = factors[i] * matrix[i, j]


@njit
def _normalised(first, second):  # type: ignore[no-untyped-def]
    """Return two lists of singular values as one, with squares that add up to 1."""
    joined = np.empty(len(first) + len(second), first.dtype)
    total = 0.0
    for i in range(len(joined)):
        joined[i] = first[i] if i < len(first) else second[i - len(first)]
        total += float(joined[i]) ** 2
    for i in range(len(joined)):
        joined[i] = joined[i] / np.sqrt(total)
    return joined


@njit
def divide(theta, most, truncation, even):  # type: ignore[no-untyped-def]
    """Divide a two-site tensor, the centre going to the right.

    Returns
    -------
    a, b : site tensors
    kept : (int, int), sector dimensions of the new bond
    dropped : float, relative discarded weight
    singular : all kept singular values, normalised, sector by sector
    """
    rows, columns = theta.shape[1:]
    if even:
        _rotate(theta)
        u0, s0, v0 = np.linalg.svd(theta[0], False)
        u1, s1, v1 = np.linalg.svd(theta[1], False)
        k0, k1, dropped = _kept(s0, s1, most, truncation)
        singular = _normalised(s0[:k0], s1[:k1])
        a = np.empty((1, rows, k0 + k1), theta.dtype)
        b = np.empty((1, k0 + k1, columns), theta.dtype)
        copy_into(a[0, :, :k0], u0)
        copy_into(a[0, :, k0:], u1)
        _scaled_rows(b[0, :k0], singular[:k0], v0)
        _scaled_rows(b[0, k0:], singular[k0:], v1)
        return a, b, k0, k1, dropped, singular
    matrix = np.empty((2 * rows, 2 * columns), theta.dtype)
    for first in range(2):
        for second in range(2):
            block = matrix[first * rows : (first + 1) * rows, second * columns : (second + 1) * columns]
            copy_into(block, theta[2 * first + second])
    u, s, v = np.linalg.svd(matrix, False)
    k0, k1, dropped = _kept(s, s[:0], most, truncation)
    singular = _normalised(s[:k0], s[:0])
    a = np.empty((2, rows, k0), theta.dtype)
    b = np.empty((2, k0, columns), theta.dtype)
    for first in range(2):
        copy_into(a[first], u[first * rows : (first + 1) * rows])
        _scaled_rows(b[first], singular, v[:, first * columns : (first + 1) * columns])
    return a, b, k0, k1, dropped, singular


@njit
def _triangular(block):  # type: ignore[no-untyped-def]
    contiguous = np.empty(block.shape, block.dtype)
    copy_into(contiguous, block)
    return np.linalg.qr(contiguous)


@njit
def orthogonalise(a, n_even, even):  # type: ignore[no-untyped-def]
    """Return a site tensor as an isometry times a bond matrix (1, D', D) with its sectors' new dimensions."""
    matrices, rows, columns = a.shape
    if not even:
        q, r = _triangular(a.reshape(matrices * rows, columns))
        k = q.shape[1]
        out, bond = np.empty((matrices, rows, k), a.dtype), np.empty((1, k, columns), a.dtype)
        copy_into(out.reshape(matrices * rows, k), q)
        copy_into(bond[0], r)
        return out, bond, k, 0
    k0, k1 = min(rows, n_even), min(rows, columns - n_even)
    out = np.empty((1, rows, k0 + k1), a.dtype)
    bond = np.zeros((1, k0 + k1, columns), a.dtype)
    if k0 > 0:
        q, r = _triangular(a[0, :, :n_even])
        copy_into(out[0, :, :k0], q)
        copy_into(bond[0, :k0, :n_even], r)
    if k1 > 0:
        q, r = _triangular(a[0, :, n_even:])
        copy_into(out[0, :, k0:], q)
        copy_into(bond[0, k0:, n_even:], r)
    return out, bond, k0, k1


@njit
def attach(bond, b, k_even, n_even, even):  # type: ignore[no-untyped-def]
    """Return the bond matrix times the site tensor on its right."""
    out = np.empty((b.shape[0], bond.shape[1], b.shape[2]), b.dtype)
    if even:
        multiply(out[0, :k_even], bond[0, :k_even, :n_even], b[0, :n_even])
        multiply(out[0, k_even:], bond[0, k_even:, n_even:], b[0, n_even:])
    else:
        for s in range(2):
            multiply(out[s], bond[0], b[s])
    return out
