"""One run behind a reference: what is kept of it."""

from __future__ import annotations

import warnings
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components

from anneal_ref.backends.contract import Backend, State
from anneal_ref.base.errors import AnnealRefWarning
from anneal_ref.base.run import Run
from anneal_ref.model.anneal import Anneal
from anneal_ref.observe.moments import Moments


@dataclass(frozen=True, slots=True, eq=False)
class Evolution:
    """One run: its moments, `num` not measured, its ledger, and how it was made.

    Parameters
    ----------
    moments : Moments
    ledger : mapping
        Counters and checks of the back-end; numbers and words.
    refined : mapping of str to int
        How often every knob was refined, beginning with the coarsest run; a knob that is left out, not at all.
    reordered : bool
        Whether the sites were solved in another order; the moments are back in that of the instance.
    """

    moments: Moments
    ledger: Mapping[str, Any]
    refined: Mapping[str, int] = field(default_factory=dict)
    reordered: bool = False

    @classmethod
    def of(cls, state: State, refined: Mapping[str, int]) -> Evolution:
        """Return what is kept of a final state."""
        ledger = state.ledger.items()
        plain = {name: value.item() if isinstance(value, np.generic) else value for name, value in ledger}
        return cls(state.moments(), plain, {knob: count for knob, count in refined.items() if count})

    def times(self, knob: str) -> int:
        """Return how often a knob was refined."""
        return self.refined.get(knob, 0)


def refined(backend: Backend, counts: Mapping[str, int]) -> Backend:
    """Return the back-end with every knob refined as often as it is told."""
    for knob, count in counts.items():
        for _ in range(count):
            backend = backend.finer(knob)
    return backend


def solve_reordered(anneal: Anneal, backend: Backend, run: Run) -> Evolution:
    """Solve with the sites in another order, far from reversed and far from the same, and put the moments back."""
    n = anneal.n_sites
    order = np.concatenate((np.arange(n - 1, -1, -2), np.arange(n - 2, -1, -2)))
    with warnings.catch_warnings():
        # whoever made the anneal was warned then
        warnings.simplefilter("ignore", AnnealRefWarning)
        other = replace(anneal, instance=anneal.instance.relabelled(order))
    solved = Evolution.of(backend.evolve(other, run=run), {})
    found, place = solved.moments, np.argsort(order)
    x = None if found.x is None else found.x.value[place]
    moments = Moments.of(found.z.value[place], found.zz.value[np.ix_(place, place)], x, found.zz.how)
    return replace(solved, moments=moments, reordered=True)


def free_entries(anneal: Anneal, moments: Moments) -> NDArray[np.float64]:
    """Return all entries of the moments that symmetry does not fix, one after the other."""
    z_zero, zz_zero = fixed_by_symmetry(anneal)
    x = np.zeros(0) if moments.x is None else moments.x.value
    return np.concatenate((moments.z.value[~z_zero], moments.zz.value[np.triu(~zz_zero, 1)], x))


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
