r"""Kinks, the unsatisfied bonds: how many there are, and how they are correlated.

The kink of a bond, K = (1 + sign(J) Z Z')/2, is quadratic in two Majorana operators b, a of its own. With Gamma their
covariance, the sign of J taken into each b, the number of kinks has the generating function

    <z^n> = Pf(W (1 + z)/2 - Gamma (1 - z)/2) / Pf W = prod_m [1 + (z - 1)(1 + l_m)/2],

W with +1 at each (b, a). Here l_m are the eigenvalues of W^-1 Gamma, where each comes twice because it is a product of
two skew matrices. An orthogonal symplectic reduction finds them once each. They come in complex pairs in general.

References
----------
The product over pairs of momenta on the uniform ring: A. del Campo, Phys. Rev. Lett. 121, 200601 (2018). The reduction:
C. Van Loan, Linear Algebra Appl. 61, 233 (1984), from memory.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from anneal_ref.backends.fermions.covariance import Covariance

Floats = NDArray[np.float64]


def kink_numbers(covariance: Covariance, bonds: NDArray[np.intp], signs: Floats) -> Floats:
    """Return the probabilities of 0, 1, ... kinks, shape (bonds + 1,).

    Parameters
    ----------
    covariance : Covariance
    bonds : ndarray of int, shape (bonds,)
        Position at the start of each bond.
    signs : ndarray, shape (bonds,)
        Of the couplings.
    """
    count = len(bonds)
    gamma = covariance.block(np.concatenate([2 * bonds + 1, 2 * bonds + 2]))
    gamma[:count] *= signs[:, None]
    gamma[:, :count] *= signs
    values = np.linalg.eigvals(_reduced(np.concatenate([-gamma[count:], gamma[:count]])))
    z = np.exp(2j * np.pi * np.arange(count + 1) / (count + 1))
    function = np.prod(1 + (z[:, None] - 1) * (1 + values) / 2, axis=1)
    return np.maximum(np.fft.fft(function).real / (count + 1), 0.0)


def kink_pairs(covariance: Covariance, bonds: NDArray[np.intp], signs: Floats) -> Floats:
    """Return <K K'> for all pairs of bonds, shape (bonds, bonds); <K> on the diagonal. Arguments as above."""
    b, a = 2 * bonds + 1, 2 * bonds + 2
    zz = signs * covariance.elements(b, a)
    ba, bb, aa = (covariance.elements(one[:, None], other) for one, other in ((b, a), (b, b), (a, a)))
    both = zz[:, None] * zz - signs[:, None] * signs * (bb * aa + ba * ba.T)
    np.fill_diagonal(both, 1.0)
    return np.asarray((1 + zz[:, None] + zz + both) / 4)


def _reduced(matrix: Floats) -> Floats:
    """Return the Hessenberg matrix, shape (n, n), with the eigenvalues, once each, of [[A, G], [Q, A^T]], G, Q skew."""
    n = len(matrix) // 2
    halves = matrix.reshape(2, n, 2, n).copy()
    upper, lower = halves[0, :, 0], halves[1, :, 0]
    for j in range(n - 1):
        _reflect(halves, j + 1, lower[j + 1 :, j])
        size = np.hypot(upper[j + 1, j], lower[j + 1, j])
        if size > 0:
            turn = np.array([[upper[j + 1, j], lower[j + 1, j]], [-lower[j + 1, j], upper[j + 1, j]]]) / size
            halves[:, j + 1] = np.tensordot(turn, halves[:, j + 1], 1)
            halves[:, :, :, j + 1] = halves[:, :, :, j + 1] @ turn.T
        _reflect(halves, j + 1, upper[j + 1 :, j])
    return np.triu(upper, -1)


def _reflect(halves: Floats, k: int, vector: Floats) -> None:
    """Reflect rows and columns from k on, in both halves, so that the vector points along its first axis."""
    normal = vector.copy()
    size = np.linalg.norm(normal)
    if size == abs(normal[0]):
        return
    normal[0] += np.copysign(size, normal[0])
    normal /= np.linalg.norm(normal)
    rows, columns = halves[:, k:], halves[:, :, :, k:]
    rows -= 2 * normal[:, None, None] * np.einsum("i,hilj->hlj", normal, rows)[:, None]
    columns -= 2 * (columns @ normal)[..., None] * normal
