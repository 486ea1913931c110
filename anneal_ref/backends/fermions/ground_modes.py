r"""The ground state of H(0) as the start: a Gaussian state with even parity.

    H = i sum_ij B[i, j] c_2i c_2j+1,    B[i, i] = -G w_i,    B[i+1, i] = -P J_i,

on a ring B[0, N-1] = +P J_N-1. With the singular values B = U S V^T the lowest Gaussian state has
i <c_2i c_2j+1> = K[i, j], K = -U V^T, and the parity <prod_i X_i> = det K. The ground state is even (Perron and
Frobenius). If det K is -1, the mode with the smallest singular value is filled: it changes its sign in K.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from anneal_ref.backends.fermions.chains import Chain
from anneal_ref.base.errors import NotSupported
from anneal_ref.model.anneal import Anneal

_ANGLE = 1e-10
"""Bound on the angle between the computed and the true ground state, as the state vector has it."""


@dataclass(frozen=True, slots=True, eq=False)
class GroundModes:
    """The ground state of H(0).

    Parameters
    ----------
    pairs : ndarray, shape (N, N)
        K.
    energy : float
        In the unit of the schedule.
    gap : float
        To the next even state, likewise; infinite for one spin.
    """

    pairs: NDArray[np.float64]
    energy: float
    gap: float


def ground_modes(anneal: Anneal, chain: Chain) -> GroundModes:
    """Return the ground state of H(0).

    Raises
    ------
    NotSupported
        It is degenerate, or nearly so, or a spin without a transverse term leaves it undecided.

    Examples
    --------
    >>> import anneal_ref as ar
    >>> from anneal_ref.backends.fermions.chains import chain_of
    >>> instance = ar.Instance(ar.lattices.chain(8, periodic=True), [-1.0] * 8)
    >>> schedule = ar.Schedule.linear(transverse=(1.0, 0.0), problem=(1.0, 1.0))
    >>> ground_modes(ar.Anneal(instance, schedule, 1.0, start="ground"), chain_of(instance)).energy
    -10.2516617910
    """
    weights = float(anneal.transverse(0.0)) * chain.weights
    couplings = float(anneal.problem(0.0)) * chain.couplings
    if weights.any() and not weights.all():
        raise NotSupported(
            "start='ground' needs every transverse weight above zero, or G(0) = 0; a spin without a transverse term "
            "at t = 0 leaves the ground state undecided",
            ("start='plus'", "a small transverse weight instead of zero"),
        )
    n = chain.n_sites
    matrix = -np.diag(weights) - np.diag(couplings[:-1], -1)
    if chain.ring:
        matrix[0, -1] += couplings[-1]
    u, sizes, v = np.linalg.svd(matrix)
    pairs = -u @ v
    lowest = sizes[-1]
    if np.linalg.slogdet(pairs)[0] < 0:
        pairs += 2 * np.outer(u[:, -1], v[-1])
        lowest = -lowest
    gap = 2 * float(sizes[-2] + lowest) if n > 1 else np.inf
    if gap * _ANGLE <= np.finfo(np.float64).eps * sizes[0]:
        raise NotSupported(
            f"the ground state of H(0) is degenerate, or nearly so (gap {gap:.1e} to the next even state), as that of "
            "several chains without a transverse field is; start='ground' cannot choose",
            ("start='plus'", "a schedule with a larger G(0)"),
        )
    return GroundModes(pairs, -float(sizes[:-1].sum() + lowest), gap)
