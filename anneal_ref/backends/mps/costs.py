"""What an evolution costs, told from the size, the ranks of the cuts and the cap on the bonds."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from anneal_ref.backends.mps.wiring import Wiring
from anneal_ref.model.instances import Instance

# complex multiplications and additions in a second, 8 floating-point operations each, on one core of about 3 GHz
_RATE = {"double": 4e9, "single": 8e9}
_BYTES = {"double": 16, "single": 8}
# Lanczos vectors of a local exponential, typically, and at most at once in memory
_VECTORS, _MOST = 6, 20
# of a local update, whatever its size
_UPDATE_SECONDS = 1e-4


@dataclass(frozen=True, slots=True)
class Cost:
    """Memory of a run and time of a step.

    Parameters
    ----------
    bytes : int
    seconds : float
    """

    bytes: int
    seconds: float


def bond_limits(n_sites: int, symmetric: bool, most: int) -> list[int]:
    """Return the largest dimension that every bond, the outer ones included, can have under a cap."""
    total = n_sites - symmetric
    return [min(most, 1 << min(b, max(n_sites - b, 0), 62)) for b in range(n_sites + 1)] if total >= 0 else []


def cost_of(instance: Instance, order: NDArray[np.intp], most: int, precision: str, two_site_share: float) -> Cost:
    """Return memory and time per step of an evolution whose bonds are as wide as they can be.

    Parameters
    ----------
    instance : Instance
    order : ndarray of int, shape (N,)
    most : int
        Cap on the bonds.
    precision : {"double", "single"}
    two_site_share : float
        Fraction of the steps in which all bonds are updated by two sites.
    """
    n = len(order)
    symmetric = not instance.has_fields
    couplings = instance.coupling_matrix()[np.ix_(order, order)]
    ranks = np.array(Wiring(np.ascontiguousarray(couplings)).ranks, dtype=float)
    bonds = np.array(bond_limits(n, symmetric, most), dtype=float)
    left, right, channels = bonds[:-1], bonds[1:], np.minimum(ranks[:-1], ranks[1:])
    # products of one matrix: the two sides, and the channels (by halves with the symmetry)
    matrices, width = (1, 1.0) if symmetric else (2, 2.0)
    one = matrices * left * right * (left + right) * (1 + channels * width / 2) / 1.0
    two_site = 2 * (1 if symmetric else 2) * one + one
    one_site = one + one / (4 if symmetric else 2)
    operations = _VECTORS * (two_site_share * two_site + (1 - two_site_share) * one_site)
    seconds = 2 * float(operations.sum() / _RATE[precision] + n * 2 * _UPDATE_SECONDS)
    kept = 2 * (2 + ranks * (0.25 if symmetric else 1.0)) * bonds**2
    tensors = 3 * matrices * left * right
    local = (2 if symmetric else 4) * left * right * (_MOST + channels + 4)
    size = float(kept.sum() + tensors.sum() + local.max(initial=0.0))
    return Cost(int(_BYTES[precision] * size), seconds)
