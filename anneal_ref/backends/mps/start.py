r"""The product states that an anneal starts from, with room to grow.

From |+...+> two spins far apart on the chain cannot be correlated by two-site updates: the pair Z_a Z_c lies in no
two-site tangent space, and the evolution would stay frozen. So every bond gets, beside the vacuum of the spins to its
right, the states Z_c |vacuum> for all spins c there that couple to the left. They carry no weight yet; the Hamiltonian
gives it to them in the first step.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from anneal_ref.backends.mps.product import Product
from anneal_ref.model.instances import Instance


def plus_state(
    instance: Instance, order: NDArray[np.intp], symmetric: bool, dtype: type[np.complexfloating]
) -> Product:
    """Return |+...+>, its right bases enriched by single flipped spins.

    Parameters
    ----------
    instance : Instance
        Tells which spins couple.
    order : ndarray of int, shape (N,)
        The site at every position.
    symmetric : bool
        Which of the two representations is made; only instances without fields have the symmetry.
    dtype : complex64 or complex128
    """
    n = len(order)
    couplings = instance.coupling_matrix()[np.ix_(order, order)]
    wanted = [[c for c in range(b, n) if couplings[:b, c].any()] for b in range(n + 1)]
    tensors, dims = [], []
    for p in range(n):
        here, there = wanted[p], wanted[p + 1]
        # X basis: (left, spin, right), the vacuum first on both bonds
        tensor = np.zeros((1 + len(here), 2, 1 + len(there)))
        tensor[0, 0, 0] = 1
        for k, c in enumerate(here):
            tensor[1 + k, int(c == p), 0 if c == p else 1 + there.index(c)] = 1
        if symmetric:
            found = tensor.sum(axis=1)[None]
            dims.append((1, len(here)))
        else:
            found = np.stack([tensor[:, 0] + tensor[:, 1], tensor[:, 0] - tensor[:, 1]]) / np.sqrt(2)
            dims.append((1 + len(here), 0))
        tensors.append(np.ascontiguousarray(found.astype(dtype)))
    return Product(tensors, [*dims, (1, 0)], symmetric, order)


def kicked(product: Product, site: int) -> Product:
    """Return Z on a lattice site times the state."""
    place = int(np.flatnonzero(product.order == site)[0])
    tensors, dims = list(product.tensors), list(product.dims)
    if not product.symmetric:
        tensors[place] = tensors[place] * np.array([1, -1], tensors[place].dtype)[:, None, None]
        return Product(tensors, dims, False, product.order)
    # one |-> more or less: all parities to the right change
    for b in range(place + 1, len(dims)):
        even, odd = dims[b]
        turned = np.r_[even : even + odd, :even]
        tensors[b - 1] = np.ascontiguousarray(tensors[b - 1][:, :, turned])
        if b < len(tensors):
            tensors[b] = np.ascontiguousarray(tensors[b][:, turned])
        dims[b] = (odd, even)
    return Product(tensors, dims, True, product.order)
