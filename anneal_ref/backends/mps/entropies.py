r"""Schmidt values of every cut, and the entanglement entropy of a set of sites.

The centre of the chain moves from left to right in double precision. At a cut, the centre matrix stands between
orthonormal bases of both sides, and its singular values are the Schmidt values; with the spin-flip symmetry it has one
block for each parity.

For other sets of sites, the centre is carried on as a tensor y[a, e, b] from the first site that differs from those
before it to the last one that differs from those behind it: a for the spins of the set, e for the spins of the rest, b
for the bond. No entropy changes when a basis on one side does, so a or e is brought down to the product of the other
two as soon as it exceeds it; a block of sites thus costs no more than the two bonds around it ask for.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import block_diag, svdvals

from anneal_ref.backends.mps.product import Product
from anneal_ref.base.checks import integer
from anneal_ref.base.errors import InputError, NotSupported

Floats = NDArray[np.float64]
Matrix = NDArray[np.complex128]

_MOST_ENTRIES = 1 << 24
_MOST_OPERATIONS = 2e12


def schmidt_values(product: Product) -> list[Floats]:
    """Return the Schmidt values of all cuts.

    Parameters
    ----------
    product : Product

    Returns
    -------
    list of ndarray, length N - 1
        Those of the cut behind every position but the last, in descending order; their squares add up to 1.

    Examples
    --------
    >>> first, second = np.array([[[np.cos(0.3), np.sin(0.3)]]], complex), np.ones((1, 2, 1), complex)
    >>> product = Product([first, second], [(1, 0), (1, 1), (1, 0)], symmetric=True, order=np.array([0, 1]))
    >>> (schmidt_values(product)[0] ** 2).tolist()
    [0.912668, 0.087332]
    """
    return [_joined_values(centre) for centre in _centres(product)]


def cut_entropies(product: Product) -> Floats:
    """Return the entropies of all cuts of the chain, shape (N - 1,), in nats.

    Examples
    --------
    >>> first, second = np.array([[[np.cos(0.3), np.sin(0.3)]]], complex), np.ones((1, 2, 1), complex)
    >>> product = Product([first, second], [(1, 0), (1, 1), (1, 0)], symmetric=True, order=np.array([0, 1]))
    >>> cut_entropies(product).tolist()
    [0.296322]
    """
    return np.array([_entropy_of(values) for values in schmidt_values(product)])


def entropy(product: Product, sites: Sequence[int]) -> float:
    """Return the von Neumann entropy, in nats, between the spins on `sites` and all others.

    Sites that fill the chain order from one of its ends cost a sweep. Others cost what a tensor of their spins, of the
    spins between them and of a bond asks for, so that few sites, few sites left out, or one block between two small
    bonds are possible; they are treated in the Z basis whatever the symmetry.

    Parameters
    ----------
    product : Product
    sites : sequence of int
        Sites of the lattice.

    Raises
    ------
    InputError
        A site that is not there or occurs twice.
    NotSupported
        The tensor would be too large.

    Examples
    --------
    >>> first, second = np.array([[[np.cos(0.3), np.sin(0.3)]]], complex), np.ones((1, 2, 1), complex)
    >>> product = Product([first, second], [(1, 0), (1, 1), (1, 0)], symmetric=True, order=np.array([0, 1]))
    >>> entropy(product, [1])
    0.296322
    """
    n = product.n_sites
    chosen = [integer(f"sites[{k}]", site, 0, n - 1) for k, site in enumerate(sites)]
    if len(set(chosen)) != len(chosen):
        raise InputError(f"sites must differ from each other; got {chosen}")
    inside = np.isin(product.order, chosen)
    changes = np.flatnonzero(inside[1:] != inside[:-1]) + 1
    if not len(changes):
        return 0.0
    start, stop = int(changes[0]), int(changes[-1])
    if start < stop:
        _require_small(product, inside, start, stop)
    centre = next(centre for bond, centre in enumerate(_centres(product), 1) if bond == start)
    if start == stop:
        return _entropy_of(_joined_values(centre))

    whole: Matrix = block_diag(*centre)
    y = whole[:, None] if inside[0] else whole[None]
    tensors = product.in_z_basis()
    for p in range(start, stop):
        a, e, _ = y.shape
        grown = np.stack([y @ matrix for matrix in tensors[p]])
        y = grown.reshape(2 * a, e, -1) if inside[p] else grown.transpose(1, 0, 2, 3).reshape(a, 2 * e, -1)
        y = _reduced(y)
    a, e, b = y.shape
    matrix = y.transpose(0, 2, 1).reshape(a * b, e) if inside[-1] else y.reshape(a, e * b)
    return _entropy_of(svdvals(matrix))


def _centres(product: Product) -> Iterator[tuple[Matrix, ...]]:
    """Give the blocks of the centre matrix of every cut, up to a unitary on the left."""
    blocks: tuple[Matrix, ...] = (np.ones((1, 1), np.complex128), np.zeros((0, 0), np.complex128))
    bonds = pairwise(product.dims[:-1])
    for tensor, ((rows, _), (columns, _)) in zip(product.tensors[:-1], bonds, strict=True):
        site = tensor.astype(np.complex128)
        if product.symmetric:
            both = np.concatenate((blocks[0] @ site[0, :rows], blocks[1] @ site[0, rows:]))
            blocks = _triangle(both[:, :columns]), _triangle(both[:, columns:])
        else:
            blocks = (_triangle(np.concatenate((blocks[0] @ site[0], blocks[0] @ site[1]))),)
        yield blocks


def _triangle(matrix: Matrix) -> Matrix:
    """Return the R of a QR decomposition."""
    return np.asarray(np.linalg.qr(matrix, mode="r")) if matrix.size else matrix[:0]


def _reduced(y: Matrix) -> Matrix:
    """Take a basis of no more states than there can be, for the spins of the set and for those of the rest."""
    a, e, b = y.shape
    if a > e * b:
        return _triangle(y.reshape(a, e * b)).reshape(-1, e, b)
    if e > a * b:
        return _triangle(y.transpose(1, 0, 2).reshape(e, a * b)).reshape(-1, a, b).transpose(1, 0, 2)
    return y


def _joined_values(blocks: tuple[Matrix, ...]) -> Floats:
    values = np.sort(np.concatenate([svdvals(block) for block in blocks if block.size]))[::-1]
    return np.asarray(values / np.linalg.norm(values))


def _entropy_of(values: Floats) -> float:
    """Return the entropy, in nats, of weights that are the squares of singular values."""
    weights = np.square(values)
    weights /= weights.sum()
    # the square of a tiny value may be zero
    weights = weights[weights > 0]
    return float(max(0.0, -np.sum(weights * np.log(weights))))


def _require_small(product: Product, inside: NDArray[np.bool_], start: int, stop: int) -> None:
    """Raise `NotSupported` if the tensor y, or the work on it, would become too large."""
    dims = [sum(pair) for pair in product.dims]
    a, e = (dims[start], 1) if inside[0] else (1, dims[start])
    entries, operations = 0, 0.0
    for p in range(start, stop):
        b = dims[p + 1]
        operations += 16.0 * a * e * dims[p] * b
        a, e = (2 * a, e) if inside[p] else (a, 2 * e)
        entries = max(entries, a * e * b)
        large, small = max(a, e), min(a, e) * b
        if large > small:
            operations += 8.0 * large * small**2
            a, e = min(a, e * b), min(e, a * b)
    rows, columns = (a * dims[stop], e) if inside[-1] else (a, e * dims[stop])
    operations += 32.0 * max(rows, columns) * min(rows, columns) ** 2
    if entries > _MOST_ENTRIES or operations > _MOST_OPERATIONS:
        chain = product.order.tolist()
        raise NotSupported(
            f"the entropy of the sites {np.sort(product.order[inside]).tolist()} takes a tensor of {entries:.1e} "
            f"numbers and {operations:.1e} operations; at most {_MOST_ENTRIES:.1e} and {_MOST_OPERATIONS:.1e} are "
            f"allowed. Available are the sites at either end of the order of the chain, {chain}, short blocks of "
            f"that order, and few sites (or all but few) that lie close together in it",
            ("sites at one end of the chain", "fewer sites", "a smaller bond dimension", "StateVector"),
        )
