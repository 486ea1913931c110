r"""Operators carried along the chain: what one site does to a density, to a stack of operators, and to Z and X.

The blocks of the chain on both sides of a bond have orthonormal bases, and an operator O of the block on the left is
the matrix O[a, b] = <a|O|b> of the bond. A site with tensor A carries it to the next bond,

    O'[n, c] = sum_(s, a, b) conj(A[s, a, n]) O[a, b] A[s, b, c].

Operators of the block on the right are carried the same way by the mirrored tensor, A[s] transposed.

With the spin-flip symmetry (see `product`) a density keeps the parity and has two diagonal blocks, and Z changes it:
Hermitian, so that its even-odd block says all. Without the symmetry both are one whole matrix.

A stack of k operators is an array (rows, k, columns), which makes both sides of a step one large matrix product each.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise
from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray

from anneal_ref.backends.mps.product import Product, Tensor

Stack: TypeAlias = NDArray[Any]
"""Complex, shape (rows, k, columns)."""
Density: TypeAlias = tuple[Tensor, ...]
"""Diagonal blocks of a density: even and odd, or the whole."""


def sites_of(product: Product) -> list[ParitySite | PlainSite]:
    """Return the sites of a product in the order of the chain."""
    if product.symmetric:
        bonds = pairwise(product.dims)
        return [ParitySite(t[0], d, n) for t, ((d, _), (n, _)) in zip(product.tensors, bonds, strict=True)]
    return [PlainSite(tensor) for tensor in product.tensors]


@dataclass(frozen=True, slots=True, eq=False)
class ParitySite:
    """A site of a chain with the spin-flip symmetry.

    Parameters
    ----------
    a : ndarray, shape (D_left, D_right)
        Its matrix.
    rows, columns : int
        How many states of the bonds on the left and on the right are even.
    """

    a: Tensor
    rows: int
    columns: int
    copies = 2
    """Blocks of Z that one stands for: the odd-even one is the adjoint of the even-odd one."""

    def mirrored(self) -> ParitySite:
        """Return the site as seen from the other end of the chain."""
        return ParitySite(np.ascontiguousarray(self.a.T), self.columns, self.rows)

    def start(self) -> Density:
        """Return the density on the left end of the chain."""
        return np.ones((1, 1), self.a.dtype), np.zeros((0, 0), self.a.dtype)

    def empty(self) -> Stack:
        """Return a stack of no operators on the bond on the left."""
        return np.zeros((self.rows, 0, len(self.a) - self.rows), self.a.dtype)

    def bare(self) -> Density:
        """Return the tensor itself, as `times` gives it for a density of 1."""
        return self.a[: self.rows], self.a[self.rows :]

    def times(self, density: Density) -> Density:
        """Return the density times the tensor: its even rows, and its odd ones."""
        return density[0] @ self.a[: self.rows], density[1] @ self.a[self.rows :]

    def density(self, times: Density) -> Density:
        """Return the density on the next bond."""
        n, d = self.columns, self.rows
        return tuple(
            _adjoint(self.a[:d, part]) @ times[0][:, part] + _adjoint(self.a[d:, part]) @ times[1][:, part]
            for part in (slice(0, n), slice(n, None))
        )

    def x(self, times: Density) -> float:
        """Return <X>: +1 where the parities of the bonds are equal, -1 where they differ."""
        n, d = self.columns, self.rows
        return (
            _overlap(self.a[:d, :n], times[0][:, :n])
            - _overlap(self.a[:d, n:], times[0][:, n:])
            - _overlap(self.a[d:, :n], times[1][:, :n])
            + _overlap(self.a[d:, n:], times[1][:, n:])
        )

    def z(self, times: Density) -> Tensor:
        """Return Z of the site in the basis of the next bond."""
        n, d = self.columns, self.rows
        even, odd = _adjoint(self.a[:d, :n]), _adjoint(self.a[d:, :n])
        result: Tensor = even @ times[0][:, n:] + odd @ times[1][:, n:]
        return result

    def carried(self, stack: Stack) -> Stack:
        """Return the operators of a stack on the next bond."""
        n, d = self.columns, self.rows
        even_odd = _between(_adjoint(self.a[:d, :n]), stack, self.a[d:, n:])
        # the odd-even block, with the adjoint taken of the whole triple product
        odd_even = _between(_adjoint(self.a[:d, n:]), stack, self.a[d:, :n])
        result: Stack = even_odd + odd_even.conj().transpose(2, 1, 0)
        return result


@dataclass(frozen=True, slots=True, eq=False)
class PlainSite:
    """A site of a chain without the symmetry.

    Parameters
    ----------
    a : ndarray, shape (2, D_left, D_right)
        Its two matrices, first for Z = +1.
    """

    a: Tensor
    copies = 1
    """A stack holds the whole of an operator."""

    def mirrored(self) -> PlainSite:
        """Return the site as seen from the other end of the chain."""
        return PlainSite(np.ascontiguousarray(self.a.transpose(0, 2, 1)))

    def start(self) -> Density:
        """Return the density on the left end of the chain."""
        return (np.ones((1, 1), self.a.dtype),)

    def empty(self) -> Stack:
        """Return a stack of no operators on the bond on the left."""
        return np.zeros((self.a.shape[1], 0, self.a.shape[1]), self.a.dtype)

    def bare(self) -> Density:
        """Return the tensor itself, as `times` gives it for a density of 1."""
        return self.a[0], self.a[1]

    def times(self, density: Density) -> Density:
        """Return the density times the tensor, for Z = +1 and for Z = -1."""
        return density[0] @ self.a[0], density[0] @ self.a[1]

    def density(self, times: Density) -> Density:
        """Return the density on the next bond."""
        return (_adjoint(self.a[0]) @ times[0] + _adjoint(self.a[1]) @ times[1],)

    def x(self, times: Density) -> float:
        """Return <X>: it exchanges Z = +1 and Z = -1."""
        return _overlap(self.a[0], times[1]) + _overlap(self.a[1], times[0])

    def z(self, times: Density) -> Tensor:
        """Return Z of the site in the basis of the next bond."""
        result: Tensor = _adjoint(self.a[0]) @ times[0] - _adjoint(self.a[1]) @ times[1]
        return result

    def carried(self, stack: Stack) -> Stack:
        """Return the operators of a stack on the next bond."""
        return _between(_adjoint(self.a[0]), stack, self.a[0]) + _between(_adjoint(self.a[1]), stack, self.a[1])


def _adjoint(matrix: Tensor) -> Tensor:
    result: Tensor = matrix.conj().T
    return result


def _between(left: Tensor, stack: Stack, right: Tensor) -> Stack:
    """Return left . O . right for all operators of a stack."""
    rows, count, columns = stack.shape
    half = (stack.reshape(rows * count, columns) @ right).reshape(rows, count * right.shape[1])
    result: Stack = (left @ half).reshape(len(left), count, right.shape[1])
    return result


def _overlap(first: Tensor, second: Tensor) -> float:
    """Return the real part of sum conj(first) second, added up in double precision."""
    return float(np.vdot(first.astype(np.complex128), second.astype(np.complex128)).real)
