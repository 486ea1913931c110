r"""`Product`: the tensors of a matrix product state, in one of two bases.

With the global spin-flip symmetry (no fields) the state is written in the X basis, s = 0 for |+> and s = 1 for |->.
Every bond carries the parity of the number of |-> to its left: its basis vectors come in two sectors, first the even
ones, then the odd ones. The spin between two bonds is fixed by their sectors, s = q_left xor q_right, so a site tensor
is *one* matrix of four blocks

            even  odd                Z flips s, and with it the sectors to the right;
    even  [  |+>  |->  ]             X is +1 on the diagonal blocks and -1 off them.
    odd   [  |->  |+>  ]

Without the symmetry the state is written in the Z basis and a site tensor is two matrices, first for Z = +1.

The chain is right-canonical with its centre on position 0: sum_s A[s] A[s]^+ = 1 on every position from 1 on, and the
norm is 1. Position p holds the lattice site `order[p]`.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

Tensor = NDArray[Any]
"""Complex, shape (1, D_left, D_right) with the symmetry, (2, D_left, D_right) without."""


@dataclass(slots=True, eq=False)
class Product:
    """A matrix product state.

    Parameters
    ----------
    tensors : list of ndarray, length N
        Of the positions; complex64 or complex128, C-contiguous.
    dims : list of (int, int), length N + 1
        Dimensions of the two sectors of every bond, even first; without the symmetry (D, 0). The outer bonds have
        dimension 1; that of the right end lies in the sector of the state's total parity.
    symmetric : bool
        Whether the state is written with the global spin-flip symmetry.
    order : ndarray of int, shape (N,)
        The lattice site at every position.
    """

    tensors: list[Tensor]
    dims: list[tuple[int, int]]
    symmetric: bool
    order: NDArray[np.intp]

    @property
    def n_sites(self) -> int:
        """Number of spins."""
        return len(self.tensors)

    @property
    def bond_dimensions(self) -> tuple[int, ...]:
        """Dimensions of the N - 1 inner bonds."""
        return tuple(sum(dims) for dims in self.dims[1:-1])

    def in_z_basis(self) -> list[NDArray[np.complex128]]:
        """Return the tensors as (2, D_left, D_right) in the Z basis, index 0 for Z = +1, whatever the symmetry."""
        found = []
        for p, tensor in enumerate(self.tensors):
            wide = tensor.astype(np.complex128)
            if self.symmetric:
                left, right = (np.repeat((1.0, -1.0), dims) for dims in self.dims[p : p + 2])
                # |s> = (|up> + (-1)^s |down>) / sqrt 2, and (-1)^s is the product of the parities
                wide = np.concatenate((wide, left[:, None] * right * wide)) / np.sqrt(2)
            found.append(wide)
        return found

    def dense(self) -> NDArray[np.complex128]:
        """Return all 2^N amplitudes; lattice site 0 is the least significant bit and bit 0 means +1."""
        psi = np.ones((1, 1), np.complex128)
        for tensor in self.in_z_basis():
            psi = np.einsum("xl,slr->xsr", psi, tensor).reshape(-1, tensor.shape[2])
        n = self.n_sites
        # axis p of the tensor is the site order[p]; the first axis of the result is the site N - 1
        return np.ascontiguousarray(psi.reshape((2,) * n).transpose(np.argsort(self.order)[::-1])).reshape(-1)
