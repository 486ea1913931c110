"""Moments of counted spins, with errors that are never zero for what was measured."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from anneal_ref.base.estimate import Estimate
from anneal_ref.observe.moments import Moments
from anneal_ref.observe.resample import PSEUDO_SHOTS, blocks, sums


def count_moments(spins: NDArray[np.int8], groups: NDArray[Any] | None) -> Moments:
    """Return <Z_i> and <Z_i Z_j> of the shots; see `Samples.moments` for their errors."""
    n = len(spins)
    z, zz = (total / n for total in sums(spins))
    spare = max(n - 1, 1)
    z_var, zz_var = (1.0 - z**2) / spare, (1.0 - zz**2) / spare
    if groups is not None and np.any(groups != groups[0]):
        z_var, zz_var = _spread(spins, groups, z, zz)
    draw = (1.0 - (n / (n + PSEUDO_SHOTS)) ** 2) / spare
    zz_stat = np.sqrt(zz_var + draw * zz**2)
    np.fill_diagonal(zz_stat, 0.0)
    return Moments(
        Estimate(z, np.sqrt(z_var + draw * z**2), 0.0, "samples"),
        Estimate(zz, zz_stat, 0.0, "samples"),
    )


def _spread(
    spins: NDArray[np.int8], groups: NDArray[Any], z: NDArray[np.float64], zz: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return the delete-a-group variances of both means: for a mean they need the means of the groups alone."""
    parts = blocks(len(spins), groups)
    z_var, zz_var = np.zeros_like(z), np.zeros_like(zz)
    for shots in parts:
        share = len(shots) / len(spins)
        weight = share / (1.0 - share) / len(parts)
        z_sum, zz_sum = sums(spins[shots])
        z_var += weight * (z_sum / len(shots) - z) ** 2
        zz_var += weight * (zz_sum / len(shots) - zz) ** 2
    return z_var, zz_var
