r"""Which single-spin operators a block must keep, and how they couple: set up once, from the couplings alone.

The left block of a bond needs its Z_a only in the combinations that couple to spins further right,

    sum_(a left, c right) J_ac Z_a Z_c,

as many as the coupling matrix J[left, right] of the cut has rank. These *carriers* L_k = sum_a U[a, k] Z_a are the
active spins themselves where the rank is their number, and otherwise span the column space of the matrix. They are
nested: those of the next bond are combinations of those of this one and of the new spin.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True, eq=False)
class Wires:
    """Coefficients of the effective Hamiltonian of some open sites, in the carriers of the blocks on both sides.

    Parameters
    ----------
    left_near, left_far : ndarray, shape (r_left,)
        Field of the left block on the first and on the second open site.
    right_near, right_far : ndarray, shape (r_right,)
        Field of the right block on the last and on the last but one open site.
    cross_left, cross_right : ndarrays, shapes (channels, r_left), (channels, r_right)
        The operators of every channel between the blocks.
    """

    left_near: Floats
    left_far: Floats
    right_near: Floats
    right_far: Floats
    cross_left: Floats
    cross_right: Floats

    def as_tuple(self) -> tuple[Floats, ...]:
        """Return the six arrays as kernels take them."""
        return (
            self.left_near, self.left_far, self.right_near, self.right_far, self.cross_left, self.cross_right,
        )  # fmt: skip


@dataclass(frozen=True, slots=True, eq=False)
class _Carriers:
    """Carriers of all bonds for blocks that grow to the right."""

    couplings: Floats
    shapes: tuple[Floats, ...] = field(init=False)
    mixes: tuple[Floats, ...] = field(init=False)

    def __post_init__(self) -> None:
        n = len(self.couplings)
        shapes = [_column_basis(self.couplings[:b, b:]) for b in range(n + 1)]
        mixes = []
        for b in range(n):
            old = np.zeros((b + 1, shapes[b].shape[1] + 1))
            old[:b, :-1], old[b, -1] = shapes[b], 1.0
            mixes.append(_solved(old, shapes[b + 1]))
        object.__setattr__(self, "shapes", tuple(shapes))
        object.__setattr__(self, "mixes", tuple(mixes))

    def field_on(self, bond: int, site: int) -> Floats:
        """Return the coefficients (r,) of the field of the block on a spin outside, zero beyond the chain."""
        shape = self.shapes[bond]
        if site >= len(self.couplings):
            return np.zeros(shape.shape[1])
        return _solved(shape, self.couplings[:bond, site])


class Wiring:
    """Carriers and channels of a chain of spins with given couplings.

    Parameters
    ----------
    couplings : ndarray, shape (N, N)
        Symmetric, in the order of the chain.

    Attributes
    ----------
    mixes : tuple of ndarray, shapes (r_b + 1, r_(b+1))
        For every site b: the carriers after it, from those before it and, last, its own Z.
    near : tuple of ndarray, shapes (r_b,)
        For every site b: the field of the block to its left on it.
    """

    def __init__(self, couplings: Floats) -> None:
        n = len(couplings)
        self.couplings = couplings
        right, left = _Carriers(np.ascontiguousarray(couplings[::-1, ::-1])), _Carriers(couplings)
        self._left, self._right = left, right
        self.mixes = left.mixes
        self.near = tuple(left.field_on(b, b) for b in range(n))
        self.wires = tuple(tuple(self._wires(b, b + sites) for b in range(n + 1 - sites)) for sites in range(3))

    @property
    def ranks(self) -> tuple[int, ...]:
        """Number of carriers at every bond, the outer ones included."""
        return tuple(shape.shape[1] for shape in self._left.shapes)

    def mirrored(self) -> Wiring:
        """Return the wiring of the reversed chain."""
        return Wiring(self._right.couplings)

    def _wires(self, left: int, right: int) -> tuple[Floats, ...]:
        n = len(self.couplings)
        mirror = n - right
        u, w = self._left.shapes[left], self._right.shapes[mirror][::-1]
        crossing = _solved(w, _solved(u, self.couplings[:left, right:]).T).T
        open_sites = right - left
        near = self._left.field_on(left, left), self._right.field_on(mirror, mirror)
        far = self._left.field_on(left, left + 1), self._right.field_on(mirror, mirror + 1)
        if open_sites < 2:
            far = tuple(np.zeros_like(f) for f in far)  # type: ignore[assignment]
        if open_sites < 1:
            near = tuple(np.zeros_like(f) for f in near)  # type: ignore[assignment]
        return Wires(near[0], far[0], near[1], far[1], *_channels(crossing)).as_tuple()


def _column_basis(matrix: Floats) -> Floats:
    """Return a basis of the column space, as columns; unit vectors if all active rows are needed."""
    active = np.flatnonzero(matrix.any(axis=1))
    rank = int(np.linalg.matrix_rank(matrix)) if matrix.size else 0
    if rank == len(active):
        return np.asarray(np.eye(len(matrix))[:, active])
    return np.ascontiguousarray(np.linalg.svd(matrix)[0][:, :rank])


def _channels(crossing: Floats) -> tuple[Floats, Floats]:
    """Return (K, r_left) and (K, r_right) with crossing = left^T right and as few channels as there can be."""
    rows, columns = (np.flatnonzero(crossing.any(axis=axis)) for axis in (1, 0))
    rank = int(np.linalg.matrix_rank(crossing)) if crossing.size else 0
    if rank == len(rows):
        return np.asarray(np.eye(len(crossing))[rows]), np.ascontiguousarray(crossing[rows])
    if rank == len(columns):
        return np.ascontiguousarray(crossing[:, columns].T), np.asarray(np.eye(crossing.shape[1])[columns])
    u, s, v = np.linalg.svd(crossing)
    return np.ascontiguousarray((u[:, :rank] * s[:rank]).T), np.ascontiguousarray(v[:rank])


def _solved(basis: Floats, target: Floats) -> Floats:
    """Return x with basis x = target, known to have a solution, without rounding dust."""
    if basis.size == 0:
        return np.zeros((basis.shape[1], *target.shape[1:]))
    x = np.linalg.lstsq(basis, target, rcond=None)[0]
    x[np.abs(x) < 1e-13 * max(1.0, float(np.abs(x).max(initial=0.0)))] = 0.0
    return np.ascontiguousarray(x)
