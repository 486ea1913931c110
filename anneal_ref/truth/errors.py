r"""The errors of a reference, source by source, measured from its runs.

A reference is refined in one knob or in several, each separately, and every source of error has a part of its own:

- *step*: with one knob, from three nested runs (see `refinement`); with several, from one pair of runs that differ by
  one halving of the step, whose change d leaves d / (1 - 1/4) in the coarser one: the lowest order of a symmetric
  scheme is two;
- *truncation*: from three runs with the bond dimension doubled from one to the next. Their changes shrink by a
  measured ratio, and what is left is the rest of the geometric series. The ratio of the discarded weights is a second
  opinion about it, and the worse of the two counts. A discarded weight alone would be no error; a drop by more than a
  factor of ten is not relied on, since it says little about the next; and a ladder that begins far off is no series
  yet, whatever its ratio;
- *rounding*: with one knob, from the coarsest run solved with its sites in another order; with several, from one run
  with tighter local exponentials and truncation, or in double precision if the others are in single.

Parts are added up: they are bounds, about 95 % each. An entry may change little by accident, so a share of the
typical change is added to its own. The constants were chosen on one set of anneals and are judged on another
(`benchmarks/coverage.py`).
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from anneal_ref.base.estimate import Estimate
from anneal_ref.model.anneal import Anneal
from anneal_ref.observe.moments import Moments
from anneal_ref.truth.evolutions import Evolution, fixed_by_symmetry, free_entries
from anneal_ref.truth.refinement import FAR_OFF, SAFETY, UNSETTLED, Decay, measure_decay

Floats = NDArray[np.float64]

RUNS = 3
"""As many as it takes to see a decay."""

_LOWEST_ORDER = 2  # of any symmetric scheme
_LEAST_RATIO = 0.1  # of truncation errors from one doubling of the bond dimension to the next
_SAFETY = 1.2  # of parts that are measured from pairs or from bond dimensions
_TYPICAL = 0.3  # share of the typical change that every entry is given
_EPS = float(np.finfo(np.float64).eps)


@dataclass(frozen=True, slots=True)
class Nested:
    """Step error from the three last of nested runs, and rounding error from a run with its sites reordered.

    Parameters
    ----------
    runs : three int
        The last runs, coarse to fine.
    coarsest, reordered : int
        The coarsest run, and the same in another order.
    decay : Decay
    """

    runs: tuple[int, int, int]
    coarsest: int
    reordered: int
    decay: Decay

    @property
    def settled(self) -> bool:
        """Whether the changes shrink."""
        return self.decay.settled

    @property
    def level(self) -> float:
        """Least rounding error of an entry, also where symmetry fixes them all."""
        return SAFETY * self.decay.rounding

    def parts(self, values: Sequence[Floats], derived: bool) -> dict[str, Floats]:
        """Return the bars of every source."""
        last = [values[k] for k in self.runs]
        rounding: Floats | float = self.decay.rounding
        if derived:
            other = np.abs(values[self.reordered] - values[self.coarsest])
            rounding = self.decay.growth * other + _EPS * np.abs(last[-1])
        step = self.decay.bars(last, 0.0)
        return {"step": step, "rounding": self.decay.bars(last, rounding) - step}


@dataclass(frozen=True, slots=True)
class Grid:
    """Errors from runs whose step, bond dimension and rounding are refined separately.

    Parameters
    ----------
    ladder : three int
        Runs with doubled bond dimensions, coarse to fine.
    ratio : float
        Of a change to the one before.
    step, rounding : (int, int)
        Pairs of runs, coarse and refined.
    refined_step : bool
        Whether the reference itself has the refined step of the pair.
    """

    ladder: tuple[int, int, int]
    ratio: float
    step: tuple[int, int]
    rounding: tuple[int, int]
    refined_step: bool

    @property
    def settled(self) -> bool:
        """Whether the changes with the bond dimension shrink."""
        return self.ratio <= UNSETTLED

    @property
    def level(self) -> float:
        """Least rounding error of an entry, also where symmetry fixes them all."""
        return _EPS

    def parts(self, values: Sequence[Floats], derived: bool) -> dict[str, Floats]:
        """Return the bars of every source."""
        first, second, third = (values[k] for k in self.ladder)
        early, late = np.abs(second - first), np.abs(third - second)
        left = min(self.ratio / (1 - self.ratio), 3.0) if self.ratio < 1 else 3.0
        truncation = left * _with_typical(np.maximum(late, min(self.ratio, 1.0) * early))
        least = 2.0**-_LOWEST_ORDER
        step = _with_typical(np.abs(values[self.step[1]] - values[self.step[0]])) / (1 - least)
        rounding = _with_typical(np.abs(values[self.rounding[1]] - values[self.rounding[0]]))
        return {
            "step": _SAFETY * (least * step if self.refined_step else step),
            "truncation": _SAFETY * truncation,
            "rounding": _SAFETY * rounding + _EPS * np.abs(values[self.ladder[2]]),
        }


@dataclass(frozen=True, slots=True)
class Errors:
    """How the errors of one reference are measured.

    Parameters
    ----------
    final : int
        The run whose numbers are reported.
    model : Nested or Grid
    """

    final: int
    model: Nested | Grid

    @property
    def settled(self) -> bool:
        """Whether the refinements shrink their changes."""
        return self.model.settled

    def parts(self, values: Sequence[Floats], derived: bool = True) -> dict[str, Floats]:
        """Return the error bars of the final values, one array for every source.

        Parameters
        ----------
        values : arrays of one shape
            Of all runs, in their order.
        derived : bool
            Whether the values were computed from moments; the moments themselves share one level of rounding.
        """
        return self.model.parts(values, derived)

    def bars(self, values: Sequence[Floats], derived: bool = True) -> Floats:
        """Return the error bars of the final values, all sources added up."""
        return np.asarray(sum(self.parts(values, derived).values()))


def errors_of(anneal: Anneal, runs: Sequence[Evolution]) -> Errors:
    """Return how the errors are measured from these runs; which of the two ways, the runs tell."""
    entries = [free_entries(anneal, run.moments) for run in runs]
    reordered = [k for k, run in enumerate(runs) if run.reordered]
    return _nested(runs, entries, reordered[0]) if reordered else _grid(runs, entries)


def measured_moments(anneal: Anneal, runs: Sequence[Evolution], errors: Errors) -> tuple[Moments, dict[str, float]]:
    """Return the moments of the final run with their error bars, and the largest error from every source."""
    z_zero, zz_zero = fixed_by_symmetry(anneal)
    largest: dict[str, float] = {}

    def measured(values: list[Floats], zero: NDArray[np.bool_] | None = None) -> Estimate:
        parts = errors.parts(values, derived=False)
        final = values[errors.final]
        bars = np.asarray(sum(parts.values()))
        if zero is not None:
            # the true value is known, and so is the error
            bars = np.where(zero, np.abs(final), bars)
            for name, part in parts.items():
                free = part[~zero & ~np.eye(len(part), dtype=bool)] if part.ndim == 2 else part[~zero]
                largest[name] = max(largest.get(name, 0.0), float(free.max(initial=0.0)))
        if bars.ndim == 2:
            np.fill_diagonal(bars, 0.0)
        return Estimate(final, 0.0, bars, runs[errors.final].moments.zz.how)

    x = [run.moments.x.value for run in runs if run.moments.x is not None]
    moments = Moments(
        measured([run.moments.z.value for run in runs], z_zero),
        measured([run.moments.zz.value for run in runs], zz_zero),
        measured(x) if len(x) == len(runs) else None,
    )
    return moments, largest


def _nested(runs: Sequence[Evolution], entries: Sequence[Floats], reordered: int) -> Errors:
    line = sorted((k for k, run in enumerate(runs) if not run.reordered), key=lambda k: runs[k].times("step"))
    finest, coarsest = runs[line[-1]].ledger, runs[line[0]].ledger
    decay = measure_decay(
        [entries[k] for k in line[-RUNS:]],
        entries[reordered] - entries[line[0]],
        growth=float(finest.get("layers", 2 ** (len(line) - 1))) / float(coarsest.get("layers", 1)),
        drift=float(finest.get("norm_drift", 0.0)),
        order=_order(finest),
        least=_least_rounding(finest),
    )
    a, b, c = line[-RUNS:]
    return Errors(c, Nested((a, b, c), line[0], reordered, decay))


def _grid(runs: Sequence[Evolution], entries: Sequence[Floats]) -> Errors:
    places = {(run.times("bond_dimension"), run.times("step"), run.times("rounding")): k for k, run in enumerate(runs)}
    top, halvings = max((d, s) for d, s, r in places if r == 0)
    final = places[top, halvings, 0]
    steps = [s for s in range(halvings, -1, -1) if all((top - k, s, 0) in places for k in range(RUNS))]
    a, b, c = (places[top - k, steps[0], 0] for k in (2, 1, 0))
    # changes of the size of what an update may discard are noise, and do not shrink
    noise = float(runs[c].ledger.get("truncation", 0.0)) ** 0.5
    early, late = _rms(entries[b] - entries[a]), max(_rms(entries[c] - entries[b]) - noise, 0.0)
    ratios = [_LEAST_RATIO, FAR_OFF * early, late / early if early > 0 else (np.inf if late > 0 else 0.0)]
    before, after = (float(runs[k].ledger.get("discarded_weight", 0.0)) for k in (b, c))
    # where next to nothing is discarded the ratio is one of roundings
    if after > 1e-8:
        ratios.append(after / before if before > 0 else np.inf)
    step, refined_step = _step_pair(places, halvings)
    d, s = max((d, s) for d, s, r in places if r == 1 and (d, s, 0) in places)
    rounding = places[d, s, 0], places[d, s, 1]
    return Errors(final, Grid((a, b, c), float(max(ratios)), step, rounding, refined_step))


def _step_pair(places: Mapping[tuple[int, int, int], int], halvings: int) -> tuple[tuple[int, int], bool]:
    """Return the pair of the largest bond dimension that tells the step error, and whether its finer one is ours."""
    for refined_step, coarse in ((False, halvings), (True, halvings - 1)):
        dims = [d for d, s, r in places if s == coarse + 1 and r == 0 and (d, coarse, 0) in places]
        if dims:
            return (places[max(dims), coarse, 0], places[max(dims), coarse + 1, 0]), refined_step
    raise ValueError("no two runs differ by one halving of the step")


def _with_typical(change: Floats) -> Floats:
    return np.asarray(np.hypot(change, _TYPICAL * _rms(change)))


def _least_rounding(ledger: Mapping[str, Any]) -> float:
    """Random walk of half a unit roundoff of the stored numbers a layer, and never below one step of a double."""
    stored = np.float32 if ledger.get("precision") == "single" else np.float64
    walk = float(np.finfo(stored).eps / 4 * np.sqrt(ledger.get("layers", 1)))
    return max(walk, _EPS)


def _order(ledger: Mapping[str, Any]) -> int:
    """Order of the refinement: as the back-end says, or the lowest that a symmetric scheme can have."""
    return int(ledger.get("order", _LOWEST_ORDER))


def _rms(values: Floats) -> float:
    return float(np.sqrt(np.mean(values**2))) if values.size else 0.0
