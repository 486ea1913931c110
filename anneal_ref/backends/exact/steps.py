"""The step rule: how many time steps a tolerance needs, told before the run from norms alone.

The error of a splitting over a step is a sum of nested commutators of the two parts of H and of their derivatives.
Their size follows from two local frequencies, 2 G w (transverse) and 2 P f (problem), where w is the root-mean-square
transverse weight and f^2 = sum_j J_ij^2 + h_i^2 averaged over the sites, and from how fast the schedule changes. Steps
are equally long in the phase of `phase_mesh`, and their number is

    steps = slope * tolerance^(-1/order) * phase

with one constant for each splitting, fitted by `benchmarks/step_rule.py` on one set of anneals. It holds on another set
that has other sizes, graphs, fields, weights, schedules and waveforms.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from anneal_ref.backends.exact.splitting import BLANES_MOAN_4, BLANES_MOAN_6, STRANG, Floats, Splitting

if TYPE_CHECKING:
    from anneal_ref.model.anneal import Anneal

_MESH = 256


SLOPES = {STRANG.name: 0.195, BLANES_MOAN_4.name: 0.113, BLANES_MOAN_6.name: 0.149}
# phase that a change of the schedule from nothing to its maximum, or back, adds
_CHANGE = 2.0
# every knot is met up to so many, or so many for each step
_FEW_KNOTS, _KNOTS_PER_STEP = 400, 4
# above this the errors no longer follow the power law, and steps cannot be longer
_LOOSEST = 3e-4


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


def step_density(splitting: Splitting, tolerance: float) -> float:
    """Return the steps per unit of phase that keep all <Z> and <ZZ> within the tolerance."""
    return float(SLOPES[splitting.name] * min(tolerance, _LOOSEST) ** (-1 / splitting.order))


def choose_splitting(tolerance: float) -> Splitting:
    """Return the splitting that needs the fewest layers."""
    return min(
        (BLANES_MOAN_6, BLANES_MOAN_4), key=lambda splitting: splitting.stages * step_density(splitting, tolerance)
    )


def time_grid(anneal: Anneal, mesh: Mesh, density: float, marks: Sequence[float] = ()) -> Floats:
    """Return step ends from 0 to the duration, equally long in phase between the times that must be met.

    Met are the marks, the corners of the waveform, and all knots of the schedule unless there are more than 400 and
    more than four for each step that the phase asks for; then only those that lie next to an interval of at least a
    step, and runs of shorter intervals are straddled (see `splitting`).

    Parameters
    ----------
    anneal : Anneal
    mesh : Mesh
        Of this anneal.
    density : float
        Steps per unit of phase.
    marks : sequence of float
        Times that must be step ends.

    Returns
    -------
    ndarray, shape (steps + 1,)
    """
    times, phase, knots = mesh.times, mesh.phase, np.asarray(anneal.knots)
    kept = knots
    if len(knots) > max(_FEW_KNOTS, _KNOTS_PER_STEP * mesh.total * density):
        long = np.diff(np.interp(knots, times, phase)) * density >= 1
        kept = knots[np.append(long, True) | np.append(True, long)]
    corners = () if anneal.waveform is None else np.asarray(anneal.waveform.u) * anneal.duration
    ends = _distinct(np.concatenate([kept, corners, marks]), marks, 1e-12 * anneal.duration)
    at_ends = np.interp(ends, times, phase)
    # a tenth of a step to spare: pieces between knots are often as long as a step, and two would be wasted on them
    counts = np.maximum(1, np.ceil(np.diff(at_ends) * density - 0.1)).astype(np.intp)
    first = np.concatenate([[0], np.cumsum(counts)])
    owner = np.repeat(np.arange(len(counts)), counts)
    fraction = (np.arange(first[-1]) - first[owner]) / counts[owner]
    grid = np.append(np.interp(at_ends[owner] + fraction * np.diff(at_ends)[owner], phase, times), ends[-1])
    grid[first] = ends
    return grid


def halved(grid: Floats, times: int = 1) -> Floats:
    """Return the grid with every step cut in half, the given number of times."""
    for _ in range(times):
        finer = np.empty(2 * len(grid) - 1)
        finer[::2] = grid
        finer[1::2] = (grid[1:] + grid[:-1]) / 2
        grid = finer
    return grid


def _distinct(ends: Floats, marks: Sequence[float], slack: float) -> Floats:
    """Sort and drop near-doubles; a mark takes the place of the knot that it nearly meets."""
    others = ends[np.min(np.abs(ends[:, None] - np.asarray([*marks, np.inf])), axis=1) > slack]
    ends = np.unique(np.concatenate([others, np.asarray(marks, dtype=np.float64)]))
    return np.asarray(ends[np.concatenate([[True], np.diff(ends) > slack])])
