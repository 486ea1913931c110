"""What an audit looks at inside a reference, and its result."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from anneal_ref.base.run import Run
from anneal_ref.observe.moments import Moments
from anneal_ref.studies.text import aligned, counted
from anneal_ref.truth.reference import Reference

BARS = 3.0
"""Deviation of a recomputed number, in error bars, that is beyond chance; a bar covers about 95 % of the entries."""

_STANDARD_ERRORS = 6.5


@dataclass(frozen=True, slots=True)
class AuditRow:
    """What the audit found out about one file.

    Parameters
    ----------
    file : str
        Its name.
    problem : str, optional
        What is wrong; None if nothing is.
    deviation : float, optional
        Largest deviation of the recomputed moments, in error bars; None if it was not recomputed.
    """

    file: str
    problem: str | None
    deviation: float | None

    @property
    def ok(self) -> bool:
        """Whether the file can be trusted as far as it was checked."""
        return self.problem is None


@dataclass(frozen=True, slots=True)
class Audit:
    """The result of an audit: a row for each file, and the leftovers of interrupted writes."""

    folder: str
    rows: tuple[AuditRow, ...]
    leftovers: tuple[str, ...]

    @property
    def sound(self) -> bool:
        """Whether no file has a problem; a leftover is none, because nobody reads it."""
        return all(row.ok for row in self.rows)

    @property
    def recomputed(self) -> int:
        """Number of references that were solved again."""
        return sum(row.deviation is not None for row in self.rows)

    def __str__(self) -> str:
        """Return a readable table and a summary line."""
        rows = [("file", "checks", "recomputed")]
        for row in self.rows:
            again = "-" if row.deviation is None else f"within {row.deviation:.2g} error bars"
            rows.append((row.file, row.problem or "ok", again))
        bad = sum(not row.ok for row in self.rows)
        lines = [aligned(rows, left=(0, 1, 2))] if self.rows else []
        lines += [f"leftover of an interrupted write, may be deleted: {name}" for name in self.leftovers]
        lines.append(
            f"{self.folder}: {counted(len(self.rows), 'reference')}, {self.recomputed} recomputed, "
            + (f"{bad} with problems" if bad else "all sound" if self.rows else "nothing was verified")
        )
        return "\n".join(lines)


def deviation(reference: Reference, run: Run) -> float:
    """Solve again with half the step, and return the largest deviation in units of the stored bars."""
    state = reference.finest.finer("step").evolve(reference.anneal, run=run)
    stored, again = reference.moments(), state.moments()
    pairs = [(stored.z, again.z), (stored.zz, again.zz)]
    if stored.x is not None and again.x is not None:
        pairs.append((stored.x, again.x))
    # twice the layers: the new run has up to twice the rounding errors of the stored one, on top of the stored bars
    own = 2 * reference.rounding
    worst = [float((np.abs(b.value - a.value) / (a.num + own)).max()) for a, b in pairs]
    table = reference.probabilities()
    if table is not None and hasattr(state, "probabilities"):
        worst.append(float(np.abs(np.asarray(state.probabilities()) - table).max()) / (reference.error + own))
    return max(worst)


def inconsistency(reference: Reference, arrays: Mapping[str, NDArray[Any]]) -> str | None:
    """Say where the parts of a reference contradict each other; checksums cannot see that."""
    moments = reference.moments()
    for name, estimate in (("z", moments.z), ("zz", moments.zz), ("x", moments.x)):
        if estimate is not None and not np.allclose(arrays[f"{name}_num"], estimate.num, rtol=1e-6, atol=1e-15):
            return f"the stored error bars of {name} are not those that its runs give"
    table = reference.probabilities()
    if table is not None:
        n = reference.n_sites
        spins = (1 - 2 * ((np.arange(1 << n)[:, None] >> np.arange(n)) & 1)).astype(np.float64)
        off = _largest_difference(moments, spins.T @ table, spins.T @ (table[:, None] * spins))
        if not off <= 5 * reference.rounding + 1e-12:
            return f"its probabilities give moments that differ by {off:.2g} from the stored ones"
    samples = reference.stored_samples
    spins = samples.spins.astype(np.float64)
    for estimate, mean in ((moments.z, spins.mean(axis=0)), (moments.zz, spins.T @ spins / len(spins))):
        scatter = np.sqrt(np.maximum(1 - estimate.value**2, 0) / len(spins)) + 1 / len(spins)
        off = float(((np.abs(mean - estimate.value) - estimate.num) / scatter).max())
        if not off <= _STANDARD_ERRORS:
            return f"its samples are {off:.2g} standard errors away from the moments"
    return None


def _largest_difference(moments: Moments, z: NDArray[np.float64], zz: NDArray[np.float64]) -> float:
    return float(max(np.abs(moments.z.value - z).max(), np.abs(moments.zz.value - zz).max()))
