"""The step rule: how many time steps a tolerance needs, told before the run from norms alone.

The error of a splitting over a step is a sum of nested commutators of the two parts of H and of their derivatives.
Steps are equally long in the phase of the anneal (see `backends.phase`), and their number is

    steps = slope * tolerance^(-1/order) * phase

with one constant for each splitting, fitted by `benchmarks/step_rule.py` on one set of anneals. It holds on another set
that has other sizes, graphs, fields, weights, schedules and waveforms.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np

from anneal_ref.backends.exact.splitting import BLANES_MOAN_4, BLANES_MOAN_6, STRANG, Floats, Splitting
from anneal_ref.backends.phase import Mesh

if TYPE_CHECKING:
    from anneal_ref.model.anneal import Anneal

SLOPES = {STRANG.name: 0.195, BLANES_MOAN_4.name: 0.113, BLANES_MOAN_6.name: 0.149}
# every knot is met up to so many, or so many for each step
_FEW_KNOTS, _KNOTS_PER_STEP = 400, 4
# above this the errors no longer follow the power law, and steps cannot be longer
_LOOSEST = 3e-4


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


def _distinct(ends: Floats, marks: Sequence[float], slack: float) -> Floats:
    """Sort and drop near-doubles; a mark takes the place of the knot that it nearly meets."""
    others = ends[np.min(np.abs(ends[:, None] - np.asarray([*marks, np.inf])), axis=1) > slack]
    ends = np.unique(np.concatenate([others, np.asarray(marks, dtype=np.float64)]))
    return np.asarray(ends[np.concatenate([[True], np.diff(ends) > slack])])
