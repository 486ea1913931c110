r"""The state of one configuration of spins, or with the spin-flip symmetry its even superposition with the flipped one.

As for |+...+> (see `start`) the right basis of every bond gets room to grow: beside the spins to the right as they are,
the same with one of them flipped, for all those that couple to the left; the transverse field leads there.

With the symmetry the spins on the right of a bond, in the configuration z, have a state for either parity q of the
number of |->. With <s|z_p> = z_p^s / sqrt 2 these are

    sqrt 2 P_q |z> = sum_s z_p^s / sqrt 2 |s> (sqrt 2 P_(q xor s) |z'>),

z' being z without its first spin p, and z_p^q |q> for the last spin. A flipped configuration has the same two states up
to the sign of the odd one. So of two spins flipping the second is flipping the first, and of one it is doing nothing.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from anneal_ref.backends.mps.product import Product
from anneal_ref.model.instances import Instance


def configuration_state(
    spins: NDArray[np.int8], instance: Instance, order: NDArray[np.intp], symmetric: bool
) -> Product:
    """Return a configuration, or its even superposition with the flipped one, in double precision.

    Parameters
    ----------
    spins : ndarray of +1 and -1, shape (N,)
        In the order of the lattice.
    instance : Instance
        Tells which spins couple.
    order : ndarray of int, shape (N,)
        The site at every position.
    symmetric : bool
        Which of the two representations is made, and so whether the superposition is.

    Examples
    --------
    >>> from anneal_ref.model.lattices import chain
    >>> instance = Instance(chain(3), [1.0, 1.0])
    >>> product = configuration_state(np.array([1, -1, 1]), instance, np.arange(3), symmetric=True)
    >>> (product.dense().real ** 2).tolist()
    [0.0, 0.0, 0.5, 0.0, 0.0, 0.5, 0.0, 0.0]
    """
    n = len(order)
    z = spins[order].astype(int)
    couplings = instance.coupling_matrix()[np.ix_(order, order)]
    # on every bond: no spin flipped, or one of them
    states = [[-1, *(c for c in range(b, n) if couplings[:b, c].any())] for b in range(n + 1)]
    if symmetric:
        states[n - 1] = [-1]
        states[max(n - 2, 0)] = states[max(n - 2, 0)][:2]
    tensors, dims = [], []
    for p in range(n):
        rows, columns = states[p], states[p + 1]
        spin, place, sign = (np.ones(len(rows), int) for _ in range(3))
        for k, flipped in enumerate(rows):
            rest = -1 if flipped == p else flipped
            spin[k] = -z[p] if flipped == p else z[p]
            # what was left out is the last of the others, turned over
            place[k], sign[k] = (columns.index(rest), 1) if rest in columns else (len(columns) - 1, -1)
        every = np.arange(len(rows))
        parities = range(2 if p > 0 else 1), range(2 if p < n - 1 else 1)
        if symmetric:
            blocks = np.zeros((len(parities[0]), len(rows), len(parities[1]), len(columns)), np.complex128)
            for q in parities[0]:
                for r in parities[1]:
                    blocks[q, every, r, place] = spin ** (q ^ r) * sign**r / np.sqrt(len(parities[1]))
            tensors.append(blocks.reshape(1, len(parities[0]) * len(rows), -1))
            dims.append((len(rows), len(rows) * (p > 0)))
        else:
            tensors.append(np.zeros((2, len(rows), len(columns)), np.complex128))
            tensors[p][(1 - spin) // 2, every, place] = 1
            dims.append((len(rows), 0))
    return Product(tensors, [*dims, (1, 0)], symmetric, order)
