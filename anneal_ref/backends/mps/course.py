"""`Course`: one evolution under way, step by step; it can be saved at the end of any step and taken up again."""

from __future__ import annotations

from time import perf_counter
from typing import Any

import numpy as np

from anneal_ref.backends.blas_threads import blas_threads
from anneal_ref.backends.mps.chain import Chain, Limits
from anneal_ref.backends.mps.checkpoint import Saved
from anneal_ref.backends.mps.entropies import cut_entropies
from anneal_ref.backends.mps.start import kicked
from anneal_ref.backends.mps.steps import sweep_strengths
from anneal_ref.backends.mps.wiring import Floats
from anneal_ref.backends.mps.work import Work
from anneal_ref.model.anneal import Anneal

REFRESH = 4
"""Every so many steps all bonds are updated by two sites; in between those that cannot grow, by one."""


class Course:
    """An evolution between two of its steps.

    Parameters
    ----------
    anneal : Anneal
    grid : ndarray, shape (steps + 1,)
        Times of the step ends.
    limits : Limits
        What the sweeps may keep.
    saved : Saved
        Where it is taken up; the tensors are taken over.
    threads : int
        Of the matrix products.
    began : float
        Reading of `perf_counter` when the work began, that on the start included.
    """

    def __init__(self, anneal: Anneal, grid: Floats, limits: Limits, saved: Saved, threads: int, began: float) -> None:
        self.anneal, self.grid, self.threads = anneal, grid, threads
        self.steps, self.two_site_steps, self.kicks = saved.steps, saved.two_site_steps, saved.kicks
        self.start = saved.start
        self._began = began - saved.seconds
        self.chain = chain = Chain(saved.product, anneal.instance, limits)
        chain.exponentials, chain.vectors, chain.largest = saved.exponentials, saved.vectors, saved.largest
        if saved.discarded is not None:
            chain.discarded = saved.discarded
        self.work = Work(anneal, saved.times, saved.parts)
        if not len(saved.times):
            self.work.note(grid[self.steps], chain.energies())

    @property
    def seconds(self) -> float:
        """Wall time since the start, that before the last interruption included."""
        return perf_counter() - self._began

    @property
    def _is_idle(self) -> bool:
        """Whether the state is still |+...+>, which only turns its phase until a problem part comes.

        Its room to grow must wait for that: a sweep would fill it with rounding.
        """
        return self.two_site_steps == 0 and (self.anneal.start == "plus" or float(self.anneal.problem(0.0)) == 0)

    def kick(self, site: int) -> None:
        """Apply Z on a site."""
        self.chain.replace(kicked(self.chain.product(), site))
        self.kicks += 1
        self.work.note(self.grid[self.steps], self.chain.energies())

    def step(self) -> None:
        """Go on to the next time of the grid."""
        strengths = sweep_strengths(self.anneal, self.grid[self.steps], self.grid[self.steps + 1])
        if not (self._is_idle and all(problem == 0 for _, problem in strengths)):
            two_site = self.steps % REFRESH == 0 or self.two_site_steps == 0
            self.two_site_steps += two_site
            with blas_threads(self.threads):
                for one_way in strengths:
                    self.chain.sweep(1.0, one_way, two_site)
                    self.chain.flip()
        self.steps += 1
        self.work.note(self.grid[self.steps], self.chain.energies())

    def saved(self) -> Saved:
        """Return all that the rest of the evolution depends on; the tensors stay shared."""
        chain = self.chain
        return Saved(
            chain.product(),
            steps=self.steps,
            two_site_steps=self.two_site_steps,
            kicks=self.kicks,
            exponentials=chain.exponentials,
            vectors=chain.vectors,
            largest=chain.largest,
            discarded=chain.discarded.copy(),
            times=np.array(self.work.times),
            parts=np.array(self.work.parts),
            seconds=self.seconds,
            start=self.start,
        )

    def note(self) -> str:
        """Return s, the largest bond and the discarded weight, for the progress bar."""
        s = self.grid[self.steps] / self.anneal.duration
        largest, discarded = max(self.chain.bond_dimensions), self.chain.discarded.sum()
        return f"s {s:.2f}, bond {largest}, discarded {discarded:.1e}"

    def ledger(self) -> dict[str, Any]:
        """Return counters and checks."""
        chain, product = self.chain, self.chain.product()
        return {
            "symmetric": chain.symmetric,
            "order": 2,
            "steps": self.steps,
            "layers": 2 * self.steps,
            "two_site_steps": self.two_site_steps,
            "kicks": self.kicks,
            **self.start,
            "largest_bond": chain.largest,
            "discarded_weight": float(chain.discarded.sum()),
            "discarded_weights": tuple(chain.discarded[1:-1].tolist()),
            "entropies": tuple(cut_entropies(product).tolist()),
            "site_order": tuple(int(site) for site in chain.order),
            "exponentials": chain.exponentials,
            "lanczos_vectors": chain.vectors,
            "norm_drift": chain.norm() ** 2 - 1.0,
            "work_identity": self.work.residual(),
            "parity": {(1, 0): "even", (0, 1): "odd"}[product.dims[-1]] if chain.symmetric else "broken by fields",
            "seconds": self.seconds,
        }
