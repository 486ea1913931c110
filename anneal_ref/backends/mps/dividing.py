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
def _decomposed(matrix):  # type: ignore[no-untyped-def]
    u, s, v = np.linalg.svd(matrix, False)
    return u, s, v


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
        u0, s0, v0 = _decomposed(theta[0])
        u1, s1, v1 = _decomposed(theta[1])
        k0, k1, dropped = _kept(s0, s1, most, truncation)
        a = np.empty((1, rows, k0 + k1), theta.dtype)
        b = np.empty((1, k0 + k1, columns), theta.dtype)
        a[0, :, :k0], a[0, :, k0:] = u0[:, :k0], u1[:, :k1]
        singular = np.concatenate((s0[:k0], s1[:k1]))
        singular = (singular / np.sqrt((singular.astype(np.float64) ** 2).sum())).astype(s0.dtype)
        for i in range(k0):
            b[0, i] = singular[i] * v0[i]
        for i in range(k1):
            b[0, k0 + i] = singular[k0 + i] * v1[i]
        return a, b, k0, k1, dropped, singular
    matrix = np.empty((2, rows, 2, columns), theta.dtype)
    for first in range(2):
        for second in range(2):
            matrix[first, :, second] = theta[2 * first + second]
    u, s, v = _decomposed(matrix.reshape(2 * rows, 2 * columns))
    k0, k1, dropped = _kept(s, s[:0], most, truncation)
    singular = (s[:k0] / np.sqrt((s[:k0].astype(np.float64) ** 2).sum())).astype(s.dtype)
    a = np.empty((2, rows, k0), theta.dtype)
    b = np.empty((2, k0, columns), theta.dtype)
    for first in range(2):
        a[first] = u[first * rows : (first + 1) * rows, :k0]
        for i in range(k0):
            b[first, i] = singular[i] * v[i, first * columns : (first + 1) * columns]
    return a, b, k0, k1, dropped, singular


@njit
def orthogonalise(a, n_even, even):  # type: ignore[no-untyped-def]
    """Return a site tensor as an isometry times a bond matrix (1, D', D) with its sectors' new dimensions."""
    matrices, rows, columns = a.shape
    if not even:
        q, r = np.linalg.qr(np.ascontiguousarray(a.reshape(matrices * rows, columns)))
        k = q.shape[1]
        return np.ascontiguousarray(q).reshape(matrices, rows, k), np.ascontiguousarray(r).reshape(1, k, columns), k, 0
    k0, k1 = min(rows, n_even), min(rows, columns - n_even)
    out = np.empty((1, rows, k0 + k1), a.dtype)
    bond = np.zeros((1, k0 + k1, columns), a.dtype)
    if k0 > 0:
        q, r = np.linalg.qr(np.ascontiguousarray(a[0, :, :n_even]))
        out[0, :, :k0], bond[0, :k0, :n_even] = q, r
    if k1 > 0:
        q, r = np.linalg.qr(np.ascontiguousarray(a[0, :, n_even:]))
        out[0, :, k0:], bond[0, k0:, n_even:] = q, r
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
