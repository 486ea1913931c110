"""Moments of a matrix product state: all <Z_i>, <Z_i Z_j> and <X_i>."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from anneal_ref.backends.memory import require_memory
from anneal_ref.backends.mps.product import Product, Tensor
from anneal_ref.backends.mps.transfer import Stack, sites_of

Floats = NDArray[np.float64]


def moments_of(product: Product) -> tuple[Floats, Floats, Floats]:
    r"""Return <Z_i>, <Z_i Z_j> and <X_i>, divided by the norm.

    The operators Z_i of the left half of the chain are carried to its middle from the left, those of the right half
    from the right, and meet there; pairs within a half are closed on the way. That is N^2/4 steps of an operator over
    a site, of D^3/2 multiplications each with the spin-flip symmetry and of 4 D^3 without it. Steps are taken in the
    precision of the product, sums of their results in double precision.

    Parameters
    ----------
    product : Product

    Returns
    -------
    z : ndarray, shape (N,)
        0 with the symmetry.
    zz : ndarray, shape (N, N)
        Symmetric, with 1 on the diagonal.
    x : ndarray, shape (N,)

    Examples
    --------
    One part |++> and one part |--> of angle 0.3 between them have <Z_0 Z_1> = sin 0.6 and <X> = cos 0.6.

    >>> first, second = np.array([[[np.cos(0.3), np.sin(0.3)]]], complex), np.ones((1, 2, 1), complex)
    >>> product = Product([first, second], [(1, 0), (1, 1), (1, 0)], symmetric=True, order=np.array([0, 1]))
    >>> z, zz, x = moments_of(product)
    >>> float(zz[0, 1]), x.tolist()
    (0.564642, [0.825336, 0.825336])
    """
    sites = sites_of(product)
    n, middle = len(sites), len(sites) // 2
    biggest = max(tensor.size for tensor in product.tensors) // (4 if product.symmetric else 2)
    # the stack of one half, two copies of it during a step, and the operators that wait for the other half
    require_memory(4 * (n - middle) * biggest * product.tensors[0].itemsize, "the stack of operators of all moments")

    z, zz, x = np.zeros(n), np.zeros((n, n)), np.empty(n)
    density = sites[0].start()
    left, right = sites[0].empty(), sites[-1].mirrored().empty()
    waiting: list[Tensor] = []
    for p, site in enumerate(sites):
        times = site.times(density)
        density, own = site.density(times), site.z(times)
        x[p], z[p] = site.x(times), 0.0 if product.symmetric else _real_trace(own)
        if p < middle:
            mirrored = site.mirrored()
            zz[:p, p] = _closed(left, mirrored.z(mirrored.bare())[:, None])[:, 0]
            left = np.concatenate((site.carried(left), own[:, None]), axis=1)
        else:
            waiting.append(own)
    for p in range(n - 1, middle - 1, -1):
        mirrored = sites[p].mirrored()
        zz[p, p + 1 :] = _closed(waiting.pop()[:, None], right)[0]
        right = np.concatenate((mirrored.z(mirrored.bare())[:, None], mirrored.carried(right)), axis=1)
    zz[:middle, middle:] = _closed(left, right)

    # the centre of the chain is its first position, and with it the norm
    norm = float(np.sum(np.abs(product.tensors[0].astype(np.complex128)) ** 2))
    zz *= sites[0].copies / norm
    zz += zz.T + np.eye(n)
    place = np.argsort(product.order)
    return z[place] / norm, zz[np.ix_(place, place)], x[place] / norm


def _closed(left: Stack, right: Stack) -> Floats:
    """Return the real part of sum_(a, b) O[a, i, b] Q[a, j, b] for all pairs, added up in double precision."""
    both = np.tensordot(left.astype(np.complex128), right.astype(np.complex128), axes=((0, 2), (0, 2)))
    return np.asarray(both.real)


def _real_trace(matrix: Tensor) -> float:
    return float(np.trace(matrix, dtype=np.complex128).real)
