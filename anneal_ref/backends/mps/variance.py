r"""Energy and energy variance of a matrix product state: how far it is from an eigenstate.

<H^2> - <H>^2 as it stands loses everything below 1e-16 <H^2>. Here the variance is a sum of squares instead. Let P_p
project the sites before position p onto the basis of the block on the left, so that P_0 = 1 and P_N = |psi><psi|. Then

    |(H - E) psi|^2 = sum_p |(P_p - P_(p+1)) H psi|^2,

and since a part of H that acts on later sites alone drops out, what is left of H psi at position p is

    W_0 |r> + sum_k W_k R_k |r>,        sum_k L_k R_k = sum of J_ij Z_i Z_j over the pairs across the next bond,

where W holds what leaves the basis of the block on the left, |r> are the states of the block on the right, and R_k its
operators. R_k |r> in turn has a part within the basis of that block and a part that leaves it; the former adds to W_0,
the latter is followed by its overlaps. Nothing cancels but what is small.

The channels k are the rows of an orthonormal basis of the row space of the coupling matrix of each bond, the fewest
that there can be. With r of them the cost is of the order of N (r + 2)^2 D^3, in double precision.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from anneal_ref.backends.memory import require_memory
from anneal_ref.backends.mps.product import Product
from anneal_ref.backends.mps.transfer import PlainSite
from anneal_ref.base.checks import finite, number

Floats = NDArray[np.float64]
Matrix = NDArray[np.complex128]

_Z = np.array([1.0, -1.0])[:, None, None]


def energy_variance(
    product: Product, couplings: Floats, fields: Floats, weights: Floats, transverse: float, problem: float
) -> tuple[float, float]:
    """Return <H> and <H^2> - <H>^2 of the normalised state.

    The variance is exact for the tensors as they are, down to about the square of the rounding error of H.

    Parameters
    ----------
    product : Product
    couplings : ndarray, shape (N, N)
        J_ij, symmetric; sites in the order of the lattice. The diagonal does not count.
    fields : ndarray, shape (N,)
        h_i.
    weights : ndarray, shape (N,)
        Transverse weights w_i.
    transverse, problem : float
        G and P of H = -G sum w X + P (sum J ZZ + sum h Z).

    Returns
    -------
    energy, variance : float

    References
    ----------
    C. Hubig, J. Haegeman and U. Schollwoeck, Phys. Rev. B 97, 045125 (2018): variances from projectors onto what a
    matrix product state leaves out (from memory).

    Examples
    --------
    All spins along X: the energy is -2 G, and P J Z_0 Z_1 makes a variance of P^2 J^2.

    >>> product = Product([np.ones((1, 1, 1), complex)] * 2, [(1, 0)] * 3, symmetric=True, order=np.arange(2))
    >>> couplings = np.array([[0.0, 0.5], [0.5, 0.0]])
    >>> energy_variance(product, couplings, np.zeros(2), np.ones(2), transverse=3.0, problem=1.0)
    (-6.0, 0.25)
    """
    order, n = product.order, product.n_sites
    chain = np.ix_(order, order)
    terms = _terms(
        number("problem", problem) * finite("couplings", couplings, (n, n))[chain],
        problem * finite("fields", fields, (n,))[order],
        number("transverse", transverse) * finite("weights", weights, (n,))[order],
    )
    need = variance_bytes(n, max(product.bond_dimensions, default=1), max(len(term.stop) for term in terms))
    require_memory(need, "the energy variance", ("a smaller bond dimension",))

    tensors, right = _from_the_right(product, terms)
    centre, left = np.ones((1, 1), np.complex128), np.zeros((1, 1, 1), np.complex128)
    overlaps, variance = np.zeros((0, 0, 1, 1), np.complex128), 0.0
    for term, tensor, beyond in zip(terms, tensors, right[1:], strict=True):
        _, leaving = _onto_right(term, tensor, beyond)
        variance += float(np.sum(overlaps.conj() * _products(leaving.conj().swapaxes(1, 2))).real)
        overlaps = _carried(term, tensor, overlaps)

        isometry, centre = np.linalg.qr((centre @ tensor).reshape(2 * len(centre), -1))
        left, out = _onto_left(term, isometry.reshape(2, -1, len(centre)), left)
        w = out @ centre
        variance += float(np.sum(np.abs(w[0] + np.sum(w[1:] @ beyond, axis=0)) ** 2))
        overlaps += _products(w[1:])
    return float(left[0, 0, 0].real), variance


def variance_bytes(n_sites: int, bond: int, rank: int) -> int:
    """Return the bytes at the peak of `energy_variance`: the operators of all bonds, and a few sets of overlaps."""
    return 16 * bond**2 * (n_sites * (rank + 2) + 6 * rank**2)


@dataclass(frozen=True, slots=True, eq=False)
class _Term:
    """What one position adds to H: how the channels of the bond on its left turn into those of the bond on its right.

    With L and R the operators of a bond, L'_k = sum_j through[j, k] L_j + start[k] Z on the next one, and
    R_k = sum_j through[k, j] R'_j + stop[k] Z.
    """

    through: Floats
    start: Floats
    stop: Floats
    field: float
    weight: float


def _terms(couplings: Floats, fields: Floats, weights: Floats) -> list[_Term]:
    n = len(couplings)
    bases = [_row_basis(couplings[:p, p:]) for p in range(n + 1)]
    return [
        _Term(here[:, 1:] @ after.T, couplings[p, p + 1 :] @ after.T, here[:, 0], float(fields[p]), float(weights[p]))
        for p, (here, after) in enumerate(zip(bases[:-1], bases[1:], strict=True))
    ]


def _row_basis(block: Floats) -> Floats:
    """Return an orthonormal basis of the row space, shape (rank, columns)."""
    if not block.size:
        return np.zeros((0, block.shape[1]))
    _, values, rows = np.linalg.svd(block, full_matrices=False)
    kept: Floats = rows[values > values[0] * max(block.shape) * np.finfo(float).eps]
    return kept


def _from_the_right(product: Product, terms: list[_Term]) -> tuple[list[Matrix], list[Matrix]]:
    """Return right-canonical tensors, and the operators R of every bond within its basis, as states @ R."""
    tensors, operators = [], [np.zeros((0, 1, 1), np.complex128)]
    carry = np.ones((1, 1), np.complex128)
    for term, tensor in zip(terms[::-1], product.in_z_basis()[::-1], strict=True):
        wide = tensor @ carry
        rows = wide.transpose(1, 0, 2).reshape(wide.shape[1], -1)
        q, r = np.linalg.qr(rows.conj().T)
        carry = r.conj().T
        tensors.append(np.ascontiguousarray(q.conj().T.reshape(q.shape[1], 2, -1).transpose(1, 0, 2)))
        operators.append(_onto_right(term, tensors[-1], operators[-1])[0])
    return tensors[::-1], operators[::-1]


def _onto_right(term: _Term, tensor: Matrix, beyond: Matrix) -> tuple[Matrix, Matrix]:
    """Return R |r> for the states |r> of a bond: (r, D, D) within their basis, and (r, D, 2 D') what leaves it."""
    rows = tensor.transpose(1, 0, 2).reshape(tensor.shape[1], -1)
    acted = tensor @ np.tensordot(term.through, beyond, 1)[:, None] + np.multiply.outer(term.stop, _Z * tensor)
    acted = acted.transpose(0, 2, 1, 3).reshape(len(term.stop), *rows.shape)
    inside = acted @ rows.conj().T
    return inside, acted - inside @ rows


def _onto_left(term: _Term, isometry: Matrix, before: Matrix) -> tuple[Matrix, Matrix]:
    """Return H and all L of the next bond: (1 + r, D', D') within its basis, and (1 + r, 2 D, D') what leaves it."""
    energy, operators = before[0], before[1:]
    field = np.tensordot(term.stop, operators, 1) + term.field * np.eye(len(energy))
    done = energy @ isometry + _Z * (field @ isometry) - term.weight * isometry[::-1]
    through = np.tensordot(term.through.T, operators, 1)[:, None] @ isometry
    acted = np.concatenate((done[None], through + np.multiply.outer(term.start, _Z * isometry)))
    columns = isometry.reshape(-1, isometry.shape[2])
    acted = acted.reshape(len(acted), *columns.shape)
    inside = columns.conj().T @ acted
    return inside, acted - columns @ inside


def _products(w: Matrix) -> Matrix:
    """Return w_k^+ w_l of all pairs, shape (r, r, D, D), of w (r, rows, D)."""
    count, rows, columns = w.shape
    flat = w.transpose(1, 0, 2).reshape(rows, count * columns)
    return (flat.conj().T @ flat).reshape(count, columns, count, columns).transpose(0, 2, 1, 3)


def _carried(term: _Term, tensor: Matrix, overlaps: Matrix) -> Matrix:
    """Return the overlaps of all pairs of channels on the next bond."""
    mixed = np.tensordot(term.through.T, overlaps, 1)
    mixed = np.tensordot(term.through.T, mixed.swapaxes(0, 1), 1)
    # the other half is Hermitian to this one
    i, j = np.triu_indices(len(term.start))
    upper = PlainSite(tensor).carried(mixed[j, i].transpose(1, 0, 2)).transpose(1, 0, 2)
    full = np.empty((len(term.start), len(term.start), *upper.shape[1:]), np.complex128)
    full[i, j], full[j, i] = upper, upper.conj().swapaxes(1, 2)
    return full
