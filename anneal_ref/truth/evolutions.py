"""The runs behind a reference: what is kept of each, and the moments with error bars that they give together."""

from __future__ import annotations

import warnings
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components

from anneal_ref.backends.contract import Backend, State
from anneal_ref.base.errors import AnnealRefWarning
from anneal_ref.base.estimate import Estimate
from anneal_ref.base.run import Run
from anneal_ref.model.anneal import Anneal
from anneal_ref.observe.moments import Moments
from anneal_ref.truth.refinement import Decay, measure_decay

RUNS = 3
"""As many as it takes to see a decay."""

_LOWEST_ORDER = 2  # of any symmetric scheme


@dataclass(frozen=True, slots=True, eq=False)
class Evolution:
    """One run: its moments, `num` not measured, and its ledger.

    Parameters
    ----------
    moments : Moments
    ledger : mapping
        Counters and checks of the back-end; numbers and words.
    """

    moments: Moments
    ledger: Mapping[str, Any]

    @classmethod
    def of(cls, state: State) -> Evolution:
        """Return what is kept of a final state."""
        ledger = state.ledger.items()
        plain = {name: value.item() if isinstance(value, np.generic) else value for name, value in ledger}
        return cls(state.moments(), plain)


def solve_reordered(anneal: Anneal, backend: Backend, run: Run) -> Evolution:
    """Solve with the sites in another order, far from reversed and far from the same, and put the moments back."""
    n = anneal.n_sites
    order = np.concatenate((np.arange(n - 1, -1, -2), np.arange(n - 2, -1, -2)))
    with warnings.catch_warnings():
        # whoever made the anneal was warned then
        warnings.simplefilter("ignore", AnnealRefWarning)
        other = replace(anneal, instance=anneal.instance.relabelled(order))
    solved = Evolution.of(backend.evolve(other, run=run))
    found, place = solved.moments, np.argsort(order)
    x = None if found.x is None else found.x.value[place]
    moments = Moments.of(found.z.value[place], found.zz.value[np.ix_(place, place)], x, found.zz.how)
    return Evolution(moments, solved.ledger)


def decay_of(anneal: Anneal, runs: Sequence[Evolution], reordered: Evolution) -> Decay:
    """Return how the moments settle over the last three runs; entries that symmetry fixes say nothing and stay out."""
    ledger, coarsest = runs[-1].ledger, runs[0].ledger
    z_zero, zz_zero = fixed_by_symmetry(anneal)
    pairs = np.triu(~zz_zero, 1)

    def entries(moments: Moments) -> NDArray[np.float64]:
        x = np.zeros(0) if moments.x is None else moments.x.value
        return np.concatenate((moments.z.value[~z_zero], moments.zz.value[pairs], x))

    return measure_decay(
        [entries(run.moments) for run in runs[-RUNS:]],
        entries(reordered.moments) - entries(runs[0].moments),
        growth=float(ledger.get("layers", 2 ** (len(runs) - 1))) / float(coarsest.get("layers", 1)),
        drift=float(ledger.get("norm_drift", 0.0)),
        order=_order(ledger),
        least=_least_rounding(ledger),
    )


def measured_moments(anneal: Anneal, runs: Sequence[Evolution], decay: Decay) -> Moments:
    """Return the moments of the finest run with their error bars."""
    last = [run.moments for run in runs[-RUNS:]]
    z_zero, zz_zero = fixed_by_symmetry(anneal)

    def measured(values: list[NDArray[np.float64]], zero: NDArray[np.bool_] | None = None) -> Estimate:
        bars = decay.bars(values, decay.rounding)
        if zero is not None:
            # the true value is known, and so is the error
            bars = np.where(zero, np.abs(values[-1]), bars)
        if bars.ndim == 2:
            np.fill_diagonal(bars, 0.0)
        return Estimate(values[-1], 0.0, bars, last[-1].zz.how)

    x = [moments.x.value for moments in last if moments.x is not None]
    return Moments(
        measured([moments.z.value for moments in last], z_zero),
        measured([moments.zz.value for moments in last], zz_zero),
        measured(x) if len(x) == RUNS else None,
    )


def fixed_by_symmetry(anneal: Anneal) -> tuple[NDArray[np.bool_], NDArray[np.bool_]]:
    """Return which <Z_i>, shape (n,), and <Z_i Z_j>, shape (n, n), are zero by the spin-flip symmetry.

    A connected part of the lattice without fields may be flipped by itself: its <Z_i> vanish, and so do its
    correlations with all other parts.
    """
    instance = anneal.instance
    n = instance.n_sites
    edges = instance.lattice.edges[instance.couplings != 0]
    graph = coo_array((np.ones(len(edges)), (edges[:, 0], edges[:, 1])), shape=(n, n))
    part = connected_components(graph, directed=False)[1]
    free = ~np.isin(part, part[instance.fields != 0])
    return free, (part[:, None] != part[None, :]) & (free[:, None] | free[None, :])


def _least_rounding(ledger: Mapping[str, Any]) -> float:
    """Random walk of half a unit roundoff of the stored numbers a layer, and never below one step of a double."""
    stored = np.float32 if ledger.get("precision") == "single" else np.float64
    walk = float(np.finfo(stored).eps / 4 * np.sqrt(ledger.get("layers", 1)))
    return max(walk, float(np.finfo(np.float64).eps))


def _order(ledger: Mapping[str, Any]) -> int:
    """Order of the refinement: as the back-end says, or the lowest that a symmetric scheme can have."""
    return int(ledger.get("order", _LOWEST_ORDER))
