r"""Perfect samples of a matrix product state in the Z basis, and the probability of given spins.

Spins are drawn one after another along the chain. The amplitudes v (D,) of the spins so far, in the basis of the block
on the right, which is orthonormal, give the probability |v A[s]|^2 / |v|^2 of the next spin. Shots that agree on all
spins so far share one row v, and the work.

With the spin-flip symmetry a row falls into an even and an odd part, and what is drawn is r = Z_p Z_(p-1):

    v -> (v_even A_even + r v_odd A_odd) / sqrt 2

up to a sign of the new odd part that belongs to Z_p and that no probability depends on. The first spin is free, and
spins share their row with the flipped spins.

References
----------
A. J. Ferris and G. Vidal, Phys. Rev. B 85, 165146 (2012): perfect sampling (from memory).
"""

from __future__ import annotations

import math
from collections.abc import Iterator

import numpy as np
from numpy.typing import ArrayLike, NDArray

from anneal_ref.backends.mps.product import Product, Tensor
from anneal_ref.base.checks import integer, signs

Floats = NDArray[np.float64]
Signs = NDArray[np.int8]

_CHUNK_BYTES = 1 << 25


def sample_spins(product: Product, shots: int, random: np.random.Generator) -> Signs:
    """Return independent samples in the Z basis.

    Parameters
    ----------
    product : Product
    shots : int
        At least 1.
    random : numpy.random.Generator
        Gives one uniform number for every spin of every shot.

    Returns
    -------
    ndarray of int8, shape (shots, N)
        +1 and -1; sites in the order of the lattice.

    Examples
    --------
    >>> product = Product([np.ones((1, 1, 1), complex)] * 3, [(1, 0)] * 4, symmetric=True, order=np.arange(3))
    >>> sample_spins(product, 2, np.random.default_rng(5)).shape
    (2, 3)
    """
    shots = integer("shots", shots, low=1)
    steps = np.empty((shots, product.n_sites), np.int8)
    for part in _parts(product, shots):
        walk = _Walk(product, len(steps[part]))
        for p in range(product.n_sites):
            steps[part, p] = np.where(random.random(len(steps[part])) < walk.plus(), 1, -1)
            walk.take(steps[part, p])
    spins = np.empty_like(steps)
    spins[:, product.order] = np.cumprod(steps, axis=1, dtype=np.int8) if product.symmetric else steps
    return spins


def log_probability(product: Product, spins: ArrayLike) -> Floats:
    """Return the natural logarithm of the probability of given spins.

    Parameters
    ----------
    product : Product
    spins : array_like, shape (shots, N)
        +1 and -1; sites in the order of the lattice.

    Returns
    -------
    ndarray, shape (shots,)
        Divided by the norm; -inf where the amplitude is zero. A spin that had the probability p, given those before
        it, adds an error of about the rounding error of the product over sqrt(p).

    Raises
    ------
    InputError
        Another shape, or anything but +1 and -1.

    Examples
    --------
    >>> product = Product([np.ones((1, 1, 1), complex)] * 3, [(1, 0)] * 4, symmetric=True, order=np.arange(3))
    >>> np.exp(log_probability(product, [[1, 1, -1], [-1, 1, 1]])).tolist()
    [0.125, 0.125]
    """
    steps = signs("spins", spins, (None, product.n_sites))[:, product.order]
    if product.symmetric:
        steps[:, 1:] *= steps[:, :-1].copy()
    logarithms = np.empty(len(steps))
    for part in _parts(product, len(steps)):
        walk = _Walk(product, len(steps[part]))
        for p in range(product.n_sites):
            walk.plus()
            walk.take(steps[part, p])
        logarithms[part] = walk.log_weights()
    norm = float(np.sum(np.abs(product.tensors[0].astype(np.complex128)) ** 2))
    return logarithms - math.log(norm)


class _Walk:
    """Shots on their way along the chain, those that agree so far in one row.

    A step is +1 or -1: the spin, or with the spin-flip symmetry the spin times the last one.
    """

    def __init__(self, product: Product, shots: int) -> None:
        self._product = product
        self._position = 0
        self._rows: Tensor = np.ones((1, 1), product.tensors[0].dtype)
        # the probability of a row is |row|^2 exp(log), and |row| is kept near 1
        self._logs = np.zeros(1)
        self._row_of = np.zeros(shots, np.intp)

    def plus(self) -> Floats:
        """Return the probability of the step +1 for every shot, shape (shots,)."""
        tensor, rows = self._product.tensors[self._position], self._rows
        if self._product.symmetric:
            even = self._product.dims[self._position][0]
            first, second = rows[:, :even] @ tensor[0, :even], rows[:, even:] @ tensor[0, even:]
            both, cross = (_dot(first, first) + _dot(second, second)) / 2, _dot(first, second)
            self._weights = np.stack((both + cross, both - cross))
        else:
            first, second = rows @ tensor[0], rows @ tensor[1]
            self._weights = np.stack((_dot(first, first), _dot(second, second)))
        self._halves = first, second
        total = self._weights.sum(axis=0)
        up = np.divide(self._weights[0], total, out=np.full(len(total), 0.5), where=total > 0)
        return np.asarray(up[self._row_of])

    def take(self, steps: Signs) -> None:
        """Go one step on with every shot, after `plus`."""
        symmetric, (even, odd) = self._product.symmetric, self._product.dims[self._position]
        branch = 2 * self._row_of
        if not (symmetric and 0 in (even, odd)):
            # with one part alone both steps lead to the same row
            branch += steps < 0
        taken = np.flatnonzero(np.bincount(branch, minlength=2 * len(self._rows)))
        place = np.empty(2 * len(self._rows), np.intp)
        place[taken] = np.arange(len(taken))
        self._row_of = place[branch]

        parent, minus = taken >> 1, taken & 1
        # a weight left over by cancellation is known to rounding only; the next step sets the length right
        floor = np.finfo(self._rows.dtype).eps * self._weights.sum(axis=0)[parent]
        weight = np.maximum(self._weights[minus, parent], floor)
        scale = np.where(weight > 0, 1 / np.sqrt(np.where(weight > 0, weight, 1.0)), 1.0)
        self._logs = self._logs[parent] - 2 * np.log(scale)
        factor = scale.astype(self._rows.real.dtype)[:, None]
        first, second = self._halves
        if symmetric:
            factor *= np.sqrt(0.5).astype(factor.dtype)
            self._rows = first[parent]
            self._rows *= factor
            other = second[parent]
            other *= np.where(minus[:, None], -factor, factor)
            self._rows += other
        else:
            self._rows = np.where(minus[:, None], second[parent], first[parent])
            self._rows *= factor
        self._position += 1

    def log_weights(self) -> Floats:
        """Return the logarithm of the squared amplitude of every shot, at the end of the chain."""
        squares = np.abs(self._rows[:, 0].astype(np.complex128)) ** 2
        logs = np.log(squares, out=np.full(len(squares), -np.inf), where=squares > 0)
        return np.asarray((self._logs + logs)[self._row_of])


def _dot(first: Tensor, second: Tensor) -> Floats:
    """Return the real part of the scalar product of all pairs of rows."""
    real = first.real.dtype
    return np.asarray(np.einsum("gd,gd->g", first.view(real), second.view(real)), np.float64)


def _parts(product: Product, shots: int) -> Iterator[slice]:
    """Cut the shots into parts whose rows have a bounded size in memory."""
    row = max(product.bond_dimensions, default=1) * product.tensors[0].itemsize
    size = max(1, _CHUNK_BYTES // row)
    for start in range(0, shots, size):
        yield slice(start, min(start + size, shots))
