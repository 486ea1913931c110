"""A second opinion: the same anneal by a back-end that shares no evolution code."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from anneal_ref.backends.contract import Backend
from anneal_ref.model.anneal import Anneal
from anneal_ref.observe.moments import Moments
from anneal_ref.truth.evolutions import free_entries

_SHARE, _WORST = 0.05, 3.0


@dataclass(frozen=True, slots=True, eq=False)
class Opinion:
    """What the other back-end says, and how far it is from the first.

    Parameters
    ----------
    backend : Backend
        Settings of its coarsest run.
    outcome : str
        Of its own refinement.
    moments : Moments
        With errors that were measured on its own runs.
    worst : float
        Largest difference over all entries, in units of the joint error bar (the two bars added up).
    outside : float
        Share of the entries that differ by more than the joint bar.
    """

    backend: Backend
    outcome: str
    moments: Moments
    worst: float
    outside: float

    @classmethod
    def of(cls, anneal: Anneal, first: Moments, backend: Backend, outcome: str, second: Moments) -> Opinion:
        """Compare two solutions of one anneal."""
        values = free_entries(anneal, first) - free_entries(anneal, second)
        bars = free_entries(anneal, _bars(first)) + free_entries(anneal, _bars(second))
        if not len(values):
            return cls(backend, outcome, second, 0.0, 0.0)
        units = np.abs(values) / np.maximum(bars, np.finfo(np.float64).tiny)
        return cls(backend, outcome, second, float(units.max()), float(np.mean(units > 1)))

    @property
    def disagrees(self) -> bool:
        """Whether more than 5 % of the entries lie outside the joint bar, or one lies three bars away."""
        return self.outside > _SHARE or self.worst > _WORST

    def __str__(self) -> str:
        """Return one readable line."""
        verdict = "disagrees" if self.disagrees else "agrees"
        return (
            f"second opinion by {type(self.backend).__name__} ({self.outcome}) {verdict}: largest difference "
            f"{self.worst:.2g} joint error bars, {self.outside:.1%} of the entries outside"
        )


def _bars(moments: Moments) -> Moments:
    zz = moments.zz.num.copy()
    np.fill_diagonal(zz, 1.0)
    return Moments.of(moments.z.num, zz, None if moments.x is None else moments.x.num)
