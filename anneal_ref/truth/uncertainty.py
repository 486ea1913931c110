"""`uncertainty_budget`: what the stated uncertainties of the inputs do to the truth, beside its numerical error.

A numerical error of 1e-3 is moot next to a scale that is known to 1 %. Standard uncertainties of independent inputs add
in quadrature and become `stat` of the results; the numerical error stays `num` and adds linearly. How the effect of an
input is found stands in `anneal_ref.truth.effects`, what it does to the Hamiltonian in `anneal_ref.truth.deviations`.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import NDArray

from anneal_ref.backends.contract import Backend, check_anneal
from anneal_ref.base.checks import choice, integer
from anneal_ref.base.errors import InputError
from anneal_ref.base.estimate import Estimate
from anneal_ref.base.run import Run
from anneal_ref.model.anneal import Anneal
from anneal_ref.observe.evaluating import evaluate
from anneal_ref.observe.moments import Moments
from anneal_ref.truth.deviations import deviating
from anneal_ref.truth.effects import InputEffect, Observable, Pair
from anneal_ref.truth.evolutions import refined
from anneal_ref.truth.inputs import InputUncertainty, Uncertain
from anneal_ref.truth.reference import Reference, reference
from anneal_ref.truth.uncertainty_table import notes, shares, table, text

CHECKS = 4
"""Joint draws, each with both signs, that look for second order beside differences."""

NAMES = tuple(item.name for item in fields(InputUncertainty))


@dataclass(frozen=True, slots=True, eq=False)
class UncertaintyBudget:
    """The truth for one anneal with the uncertainty from its inputs beside the numerical error.

    Made by `uncertainty_budget`; as text a table of the inputs with their effects.

    Attributes
    ----------
    truth : Reference
        Values and numerical errors.
    inputs : InputUncertainty
        What was stated.
    backend : Backend
        Of all runs behind the effects.
    centre : Moments
        From that back-end, at the best values of the inputs.
    effects : mapping of str to InputEffect
        One for each kind of input that is uncertain.
    """

    truth: Reference
    inputs: InputUncertainty
    backend: Backend
    centre: Moments
    effects: Mapping[str, InputEffect]

    @property
    def n_runs(self) -> int:
        """Number of evolutions beside those of the reference."""
        return 1 + sum(effect.n_runs for effect in self.effects.values())

    @property
    def dominant(self) -> str | None:
        """The input with the largest effect on the correlations as a whole; None where none has any."""
        found = shares(self)
        return max(found, key=lambda name: found[name]) if found else None

    @property
    def notes(self) -> tuple[str, ...]:
        """Where the numbers need a word of caution."""
        return notes(self)

    def moments(self) -> Moments:
        """Return <Z_i>, <Z_i Z_j> and <X_i> of the truth; `stat` is the uncertainty from all inputs together."""
        known, x = self.truth.moments(), None
        if known.x is not None and self.centre.x is not None:
            x = self._with_inputs(known.x, lambda moments: np.zeros(0) if moments.x is None else moments.x.value)
        return Moments(
            self._with_inputs(known.z, lambda moments: moments.z.value),
            self._with_inputs(known.zz, lambda moments: moments.zz.value),
            x,
        )

    def estimate(self, f: Observable) -> Estimate:
        """Return f(moments) of the truth; `stat` is the uncertainty from all inputs, `num` the numerical error.

        Parameters
        ----------
        f : callable
            A plain function of `Moments`, such as those of `anneal_ref.observables`; gives a number or an array.

        Raises
        ------
        InputError
            Values that are no finite numbers, or of different shapes.
        """
        return self._with_inputs(self.truth.estimate(f), f)

    def effect(self, name: str, f: Observable) -> Estimate:
        """Return the standard uncertainty of f from one kind of input.

        Parameters
        ----------
        name : str
            As in `InputUncertainty`; what is not uncertain has no effect.
        f : callable
            A plain function of `Moments`.

        Returns
        -------
        Estimate
            `stat` is the error from a finite number of draws; `num` is that of f in the runs of `backend`, measured
            against the truth and taken as if nothing of it cancelled.

        Raises
        ------
        InputError
            A name that is no input.
        """
        choice("name", name, NAMES)
        if name not in self.effects:
            return Estimate(np.zeros(self.truth.estimate(f).shape), 0.0, 0.0, "exact")
        effect = self.effects[name]
        found = effect.uncertainty(f)
        return Estimate(found.value, found.stat, effect.weight * self.run_error(f), found.how)

    def run_error(self, f: Observable) -> NDArray[np.float64]:
        """Return a bound on the numerical error of f in a run of `backend`, measured against the truth."""
        known = self.truth.estimate(f)
        return np.asarray(np.abs(evaluate(f, self.centre) - known.value) + known.num)

    def table(self) -> dict[str, dict[str, float]]:
        """Return standard uncertainties and errors, row by row.

        Returns
        -------
        dict of dict
            Rows: each input that is uncertain; "all inputs"; "numerical error"; and "together, 95 %", the half width of
            the joint interval. Columns: "largest ZZ" and "rms ZZ" over the <Z_i Z_j>; "eps", the correlation error that
            they amount to (of connected correlations where the instance has fields); "energy" of the problem, in units
            of J; "q2"; and "largest Z" over the <Z_i>, where any differs from 0.
        """
        return table(self)

    def __repr__(self) -> str:
        """Return the size, the inputs and the dominant one in angle brackets."""
        return f"<UncertaintyBudget of {self.truth.n_sites} spins, {self.inputs}: dominant {self.dominant}>"

    def __str__(self) -> str:
        """Return the table, which input dominates, and words of caution."""
        return text(self)

    def _with_inputs(self, known: Estimate, f: Observable) -> Estimate:
        variance = np.zeros(known.shape)
        for effect in self.effects.values():
            variance += effect.uncertainty(f).value ** 2
        return Estimate(known.value, np.sqrt(variance), known.num, known.how)


def uncertainty_budget(
    anneal: Anneal,
    inputs: InputUncertainty,
    truth: Reference | None = None,
    backend: Backend | None = None,
    tolerance: float = 1e-3,
    draws: int = 50,
    seed: int = 0,
    run: Run = Run(),  # noqa: B008
) -> UncertaintyBudget:
    """Propagate stated uncertainties of the inputs into correlations and observables, beside the numerical error.

    Parameters
    ----------
    anneal : Anneal
        With the best values of its inputs.
    inputs : InputUncertainty
        How well they are known.
    truth : Reference, optional
        Of this anneal; by default it is computed.
    backend : Backend, optional
        Of the runs with deviating inputs, all with the same settings; by default that of the cheapest run behind the
        reference that agrees with it within its tolerance. Its error should be small against the effects; the result
        says where it is not.
    tolerance : float
        Of the reference, where none is given.
    draws : int
        Draws of a Monte Carlo, each with both signs; at least 5. Independent inputs (couplings, fields, weights) are
        taken one at a time where that needs no more runs, and all at once by Monte Carlo otherwise. 50 draws give a
        standard uncertainty to about 10 %.
    seed : int
        Of the draws.
    run : Run
        Threads and progress. Anything else in it concerns the reference alone.

    Returns
    -------
    UncertaintyBudget

    Raises
    ------
    InputError
        Before any work.
    NotSupported, TooLarge
        Before any run with deviating inputs. A back-end for zero fields cannot know what uncertain ones do.

    References
    ----------
    JCGM 100:2008, Guide to the expression of uncertainty in measurement, 5.1.2 eq. (10), and table E.1 on how well few
    draws give a standard deviation; JCGM 101:2008, its supplement on Monte Carlo (clauses from memory).

    Examples
    --------
    >>> import anneal_ref as ar
    >>> schedule = ar.Schedule.linear(transverse=(20.0, 0.0), problem=(0.0, 10.0))
    >>> instance = ar.draw_instance(ar.lattices.square(2, 3), ar.disorder.plus_minus(), seed=1)
    >>> anneal = ar.Anneal(instance, schedule, duration=1.0)
    >>> budget = ar.uncertainty_budget(anneal, ar.InputUncertainty(problem_scale=0.01, couplings=0.02))
    >>> budget.dominant, budget.n_runs
    ('couplings', 25)
    >>> energy = budget.estimate(lambda moments: ar.observables.problem_energy(moments, instance))
    >>> bool(energy.num < 1e-5 < energy.stat < 0.1)
    True
    """
    check_anneal(anneal)
    if not isinstance(inputs, InputUncertainty):
        raise InputError(f"inputs must be an InputUncertainty; got {type(inputs).__name__}")
    if truth is not None and not isinstance(truth, Reference):
        raise InputError(f"truth must be a Reference, as reference(anneal) gives; got {type(truth).__name__}")
    if truth is not None and truth.anneal.identity != anneal.identity:
        raise InputError(f"truth must be the reference for this anneal, {anneal!r}; got that for {truth.anneal!r}")
    draws, seed = integer("draws", draws, low=CHECKS + 1), integer("seed", seed, low=0)
    kinds = list(inputs.of(anneal))
    if truth is None:
        truth = reference(anneal, tolerance, backend=backend, run=run)
    backend = _good_enough(truth) if backend is None else backend
    for kind in kinds:
        backend.plan(deviating(anneal, **{kind.keyword: kind.steps[0]}))

    steps = [_steps(kind, draws, np.random.default_rng([seed, NAMES.index(kind.name)])) for kind in kinds]
    silent = Run(threads=run.threads, progress=False)
    effects = {}
    with run.track(1 + 2 * sum(len(alone) + len(joint) for alone, joint in steps), "deviating inputs") as bar:
        centre = backend.evolve(anneal, run=silent).moments()
        bar.update(1)
        for kind, both in zip(kinds, steps, strict=True):
            pairs: list[tuple[Pair, ...]] = []
            for each in both:
                found = []
                for step in each:
                    up, down = (deviating(anneal, **{kind.keyword: sign * step}) for sign in (1.0, -1.0))
                    found.append((backend.evolve(up, run=silent).moments(), backend.evolve(down, run=silent).moments()))
                    bar.update(2, kind.name)
                pairs.append(tuple(found))
            effects[kind.name] = InputEffect(kind.name, kind.stated, len(kind.steps), centre, *pairs)
    return UncertaintyBudget(truth, inputs, backend, centre, effects)


def _good_enough(truth: Reference) -> Backend:
    """Return the settings of the cheapest run behind a reference that agrees with it within its tolerance."""
    known = truth.moments()
    good = [truth.finest]
    for made in truth.runs:
        off = max(
            np.abs(made.moments.z.value - known.z.value).max(), np.abs(made.moments.zz.value - known.zz.value).max()
        )
        if off <= truth.tolerance and not made.reordered:
            good.append(refined(truth.backend, made.refined))
    return min(good, key=lambda backend: backend.plan(truth.anneal).seconds)


def _steps(kind: Uncertain, draws: int, random: np.random.Generator) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return the deviations of one input at a time, and those of all at once; whichever way is less work."""
    n = len(kind.steps)
    if n == 1:
        return kind.steps, kind.steps[:0]
    differences = n + CHECKS <= draws
    joint = random.standard_normal((CHECKS if differences else draws, n)) @ kind.steps
    return (kind.steps if differences else kind.steps[:0]), joint
