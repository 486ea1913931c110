"""A matrix product state handed over to quimb, a general library of tensor networks."""

from __future__ import annotations

from typing import TYPE_CHECKING

from anneal_ref.backends.mps.product import Product

if TYPE_CHECKING:
    from quimb.tensor import MatrixProductState


def to_quimb(product: Product) -> MatrixProductState:
    """Return the state as a `quimb.tensor.MatrixProductState`, in the Z basis and in double precision.

    Its site p is the position p of the chain, which holds the lattice site `product.order[p]`: quimb's algorithms for
    matrix product states take neighbouring numbers for neighbouring tensors, so that a numbering by the lattice would
    make them wrong without a word. Index 0 of a spin is Z = +1.

    quimb takes its first site for the most significant bit. For amplitudes in the order of the lattice, with site 0 the
    least significant, name the indices from the last site of the lattice to its first, as in the example.

    Parameters
    ----------
    product : Product

    Examples
    --------
    >>> import numpy as np
    >>> first, second = np.array([[[0.8, 0.6]]], complex), np.ones((1, 2, 1), complex)
    >>> product = Product([first, second], [(1, 0), (1, 1), (1, 0)], symmetric=True, order=np.array([1, 0]))
    >>> psi = to_quimb(product)
    >>> place = np.argsort(product.order)
    >>> amplitudes = psi.to_dense([psi.site_ind(p) for p in place[::-1]]).ravel()
    >>> np.allclose(amplitudes, product.dense())
    True
    """
    from quimb.tensor import MatrixProductState

    tensors = product.in_z_basis()
    # quimb leaves out the bonds at the ends
    tensors[0] = tensors[0][:, 0]
    tensors[-1] = tensors[-1][..., 0]
    return MatrixProductState(tensors, shape="plr")
