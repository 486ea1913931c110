"""The phase of an anneal: a dimensionless clock for time steps, from norms alone, told before any run.

It runs with two local frequencies, 2 G w (transverse) and 2 P f (problem), where w is the root-mean-square transverse
weight and f^2 = sum_j J_ij^2 + h_i^2 averaged over the sites, and with the change of either schedule.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from anneal_ref.model.anneal import Anneal

Floats = NDArray[np.float64]

_MESH = 256
# phase that a change of the schedule from nothing to its maximum, or back, adds
_CHANGE = 2.0


def step_rate(anneal: Anneal, times: Floats) -> Floats:
    """Return the frequency that weighs the commutator of degree seven which matters most, at the given times.

    Parameters
    ----------
    anneal : Anneal
    times : ndarray
        Times within the duration.

    Returns
    -------
    ndarray, shape of `times`
        Angular frequency, in the unit of the schedule.
    """
    instance = anneal.instance
    couplings = instance.coupling_matrix()
    weight = np.sqrt(np.mean(np.square(instance.transverse)))
    local = np.sqrt(np.mean(np.square(couplings).sum(axis=1) + np.square(instance.fields)))
    a = 2 * weight * np.abs(anneal.transverse(times))
    b = 2 * local * np.abs(anneal.problem(times))
    both = a + b
    return np.asarray((a * b * both**5) ** (1 / 7) + 0.05 * both)


@dataclass(frozen=True, slots=True, eq=False)
class Mesh:
    """Times over the duration, and the phase accumulated up to each of them."""

    times: Floats
    phase: Floats

    @property
    def total(self) -> float:
        """Phase over the whole duration."""
        return float(self.phase[-1])


def phase_mesh(anneal: Anneal) -> Mesh:
    """Return a mesh that is fine between all knots of the schedule.

    The phase is the integral of `step_rate`, and a share for the change of either schedule.
    """
    knots = np.asarray(anneal.knots)
    count = max(2, -(-_MESH // (len(knots) - 1)))
    fractions = np.arange(count) / count
    times = np.append((knots[:-1, None] + np.diff(knots)[:, None] * fractions).ravel(), knots[-1])
    rate = step_rate(anneal, times)
    phase = (rate[1:] + rate[:-1]) / 2 * np.diff(times)
    for strength in (anneal.transverse(times), anneal.problem(times)):
        largest = np.abs(strength).max()
        if largest > 0:
            phase += _CHANGE / 2 * np.abs(np.diff(strength)) / largest
    phase = np.concatenate([[0.0], np.cumsum(phase)])
    return Mesh(times, phase)


def halved(grid: Floats, times: int = 1) -> Floats:
    """Return the grid with every step cut in half, the given number of times."""
    for _ in range(times):
        finer = np.empty(2 * len(grid) - 1)
        finer[::2] = grid
        finer[1::2] = (grid[1:] + grid[:-1]) / 2
        grid = finer
    return grid
