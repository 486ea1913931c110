r"""Kernels: the exponential of an effective Hamiltonian on a tensor, and its lowest state, by Lanczos vectors.

    exp(-i tau H) v  ~  |v| V exp(-i tau T) e_1

T is the tridiagonal matrix of the Lanczos recursion. The vector that the last product has left over is taken along,
though it is not multiplied itself: its diagonal element is guessed to be that of the one before, which is wrong at an
order in tau higher than leaving it out. The number of vectors grows until the last coefficient of exp(-i tau T) e_1,
times tau and the spread of the elements of T, is below the tolerance.

The lowest state is that of T as well, y, with the residual |(H - energy) V y| = |beta_k y_k| from the last off-diagonal
element; after a number of vectors the recursion starts again from it. These vectors are kept orthogonal by force.

References
----------
T. J. Park and J. C. Light, J. Chem. Phys. 85, 5870 (1986).
"""

from __future__ import annotations

import numpy as np
from numba import njit

from anneal_ref.backends.mps.effective import apply

MOST = 40
"""Lanczos vectors at most; a step that needs more is far too long."""

_TERMS = 24

_AT_ONCE, _ROUNDS = 16, 6


@njit(fastmath=True)
def _overlap(v, w):  # type: ignore[no-untyped-def]
    total = 0.0
    for i in range(v.size):
        total += v[i].real * w[i].real + v[i].imag * w[i].imag
    return total


@njit(fastmath=True)
def _subtract(w, v, u, a, b):  # type: ignore[no-untyped-def]
    """Take a v + b u from w and return the squared norm of what is left."""
    total = 0.0
    for i in range(w.size):
        x = w[i] - a * v[i] - b * u[i]
        w[i] = x
        total += x.real * x.real + x.imag * x.imag
    return total


@njit(fastmath=True)
def _scaled(out, w, c):  # type: ignore[no-untyped-def]
    for i in range(w.size):
        out[i] = c * w[i]


@njit
def tridiagonal_exponential(diagonal, off, k, tau):  # type: ignore[no-untyped-def]
    """Return exp(-i tau T) e_1 for the leading k x k part of T, by Taylor series over short pieces."""
    shift = 0.0
    for i in range(k):
        shift += diagonal[i] / k
    norm = 0.0
    for i in range(k):
        row = abs(diagonal[i] - shift) + (off[i - 1] if i > 0 else 0.0) + (off[i] if i < k - 1 else 0.0)
        norm = max(norm, row)
    pieces = max(1, int(np.ceil(abs(tau) * norm)))
    step = -1j * tau / pieces
    x = np.zeros(k, np.complex128)
    x[0] = 1
    term, after = np.empty(k, np.complex128), np.empty(k, np.complex128)
    for _ in range(pieces):
        term[:] = x
        for j in range(1, _TERMS):
            for i in range(k):
                y = (diagonal[i] - shift) * term[i]
                if i > 0:
                    y += off[i - 1] * term[i - 1]
                if i < k - 1:
                    y += off[i] * term[i + 1]
                after[i] = y * (step / j)
            term[:] = after
            x += term
    return x * np.exp(-1j * tau * shift)


@njit
def exponential(  # type: ignore[no-untyped-def]
    theta, tau, tolerance, kl, kr, lefts, rights, count, de, re, flips, sites, even
):
    """Return exp(-i tau H) theta and the number of Lanczos vectors that it took."""
    n = theta.size
    real = theta.real.dtype.type
    flat = theta.reshape(n)
    norm = np.sqrt(_overlap(flat, flat))
    most = min(MOST, n)
    basis = np.empty((most + 1,) + theta.shape, theta.dtype)
    vectors = basis.reshape(most + 1, n)
    w = np.zeros_like(theta)
    buffer = np.empty(n * count, theta.dtype)
    diagonal, off = np.zeros(most + 1), np.zeros(most + 1)
    _scaled(vectors[0], flat, real(1 / norm))
    next_one, spread = 1.0, 0.0
    k = 0
    while True:
        apply(basis[k], w, kl, kr, lefts, rights, count, de, re, flips, sites, even, buffer)
        flat_w = w.reshape(n)
        diagonal[k] = _overlap(vectors[k], flat_w)
        before = off[k - 1] if k > 0 else 0.0
        off[k] = np.sqrt(_subtract(flat_w, vectors[k], vectors[max(k - 1, 0)], real(diagonal[k]), real(before)))
        k += 1
        used = k
        # nothing new, and nothing at all under a Hamiltonian that is zero here
        if k == n or off[k - 1] <= 1e-13 * (abs(diagonal[k - 1]) + before):
            x = tridiagonal_exponential(diagonal, off, k, tau)
            break
        _scaled(vectors[k], flat_w, real(1 / off[k - 1]))
        next_one *= abs(tau) * off[k - 1] / k
        # of what the guessed element, and the vectors to come, may change
        spread = max(spread, 2 * off[k - 1])
        if k > 1:
            spread = max(spread, abs(diagonal[k - 1] - diagonal[k - 2]))
        left = abs(tau) * spread / (k + 1)
        if (k > 1 and next_one * left < 4 * tolerance) or k == most:
            # the new vector is there: it serves without being multiplied, its diagonal element guessed
            diagonal[k] = diagonal[k - 1]
            x = tridiagonal_exponential(diagonal, off, k + 1, tau)
            if abs(x[k]) * left < tolerance or k == most:
                used = k + 1
                break
    out = np.zeros_like(theta)
    flat_out = out.reshape(n)
    for j in range(used):
        c = theta.dtype.type(x[j] * norm)
        for i in range(n):
            flat_out[i] += c * vectors[j, i]
    return out, k


@njit(fastmath=True)
def _without(w, v):  # type: ignore[no-untyped-def]
    """Take from w its component along the unit vector v."""
    real = imaginary = 0.0
    for i in range(w.size):
        real += v[i].real * w[i].real + v[i].imag * w[i].imag
        imaginary += v[i].real * w[i].imag - v[i].imag * w[i].real
    c = real + 1j * imaginary
    for i in range(w.size):
        w[i] -= c * v[i]


@njit
def lowest(  # type: ignore[no-untyped-def]
    theta, tolerance, avoided, kl, kr, lefts, rights, count, de, re, flips, sites, even
):
    """Return the lowest state of H orthogonal to the `avoided` ones, its energy, and the number of products it took.

    The search begins with theta and ends when the residual is below `tolerance`, in units of the largest off-diagonal
    element of T, or below rounding. In double precision only.
    """
    n, locked = theta.size, len(avoided)
    others = avoided.reshape(locked, n)
    most = min(_AT_ONCE, n - locked)
    basis = np.empty((most + 1,) + theta.shape, theta.dtype)
    vectors = basis.reshape(most + 1, n)
    buffer = np.empty(n * count, theta.dtype)
    found, w = theta.copy(), np.zeros_like(theta)
    flat, flat_w = found.reshape(n), w.reshape(n)
    energy, spread, products = 0.0, 0.0, 0
    for _ in range(_ROUNDS):
        for v in others:
            _without(flat, v)
        _scaled(vectors[0], flat, 1 / np.sqrt(_overlap(flat, flat)))
        matrix = np.zeros((most, most))
        k, done = 0, False
        while True:
            apply(basis[k], w, kl, kr, lefts, rights, count, de, re, flips, sites, even, buffer)
            products += 1
            matrix[k, k] = _overlap(vectors[k], flat_w)
            # twice: what is left may be small, and must be orthogonal all the same
            for _ in range(2):
                for v in others:
                    _without(flat_w, v)
                for v in vectors[: k + 1]:
                    _without(flat_w, v)
            off = np.sqrt(_overlap(flat_w, flat_w))
            spread = max(spread, off)
            k += 1
            values, states = np.linalg.eigh(matrix[:k, :k])
            energy = values[0]
            left = off * abs(states[k - 1, 0])
            done = left <= max(tolerance * spread, 1e-14 * abs(energy)) or k == n - locked
            if done or k == most:
                break
            matrix[k, k - 1] = matrix[k - 1, k] = off
            _scaled(vectors[k], flat_w, 1 / off)
        flat[:] = 0
        for j in range(k):
            c = states[j, 0]
            for i in range(n):
                flat[i] += c * vectors[j, i]
        if done:
            break
    return found, energy, products
