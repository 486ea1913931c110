"""`converge`: one anneal at several bond dimensions and steps, and what the runs say about each other's errors."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from time import perf_counter
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from anneal_ref.backends.contract import Backend, check_anneal
from anneal_ref.backends.mps.mps import MPS
from anneal_ref.base.checks import integer, number
from anneal_ref.base.errors import InputError
from anneal_ref.base.estimate import Estimate
from anneal_ref.base.run import Run
from anneal_ref.model.anneal import Anneal
from anneal_ref.observe.evaluating import evaluate
from anneal_ref.observe.moments import Moments
from anneal_ref.truth.distances import distance, uncertainty
from anneal_ref.truth.evolutions import fixed_by_symmetry, free_entries, refined
from anneal_ref.truth.extrapolation import RUNGS, Floats, Law, measure_law, step_bars
from anneal_ref.truth.prediction import Prediction, predict
from anneal_ref.truth.reference import Reference

RESOLVED = 2.0
"""The error of a run is known where it is at least so many times the error of what it is held against."""


@dataclass(frozen=True, slots=True, eq=False)
class Rung:
    """One run of a convergence study.

    Parameters
    ----------
    backend : Backend
        With every setting of the run.
    bond_dimension, halvings : int
        Cap on the bonds, and how often every step of the study's back-end was cut in half.
    moments : Moments
        `num` not measured.
    ledger : mapping
        Counters and checks of the back-end.
    seconds : float
        Wall time.
    planned_seconds : float
        What the cost model of the back-end says about it.
    bytes : int
        Memory at the peak, from the same model.
    """

    backend: Backend
    bond_dimension: int
    halvings: int
    moments: Moments
    ledger: Mapping[str, Any]
    seconds: float
    planned_seconds: float
    bytes: int

    @property
    def discarded_weight(self) -> float:
        """Sum over all updates; nan where the back-end does not tell."""
        return float(self.ledger.get("discarded_weight", np.nan))


@dataclass(frozen=True, slots=True, eq=False)
class Convergence:
    """A convergence study of one anneal; `print(convergence)` gives the table.

    Parameters
    ----------
    anneal : Anneal
    backend : Backend
        With the settings that all runs share; its own step is the one that was not halved.
    rungs : tuple of Rung
        Every bond dimension with every step: by bond dimension, then by halvings.
    reference : Reference or Moments, optional
        What the errors are taken against; by default the last rung.

    Attributes
    ----------
    law : Law or None
        How the error falls with the bond dimension at the finest step; None from fewer than three bond dimensions.
    target : Moments
        What the errors are taken against, with its own errors in `num`.
    """

    anneal: Anneal
    backend: Backend
    rungs: tuple[Rung, ...]
    reference: Reference | Moments | None = None
    law: Law | None = field(init=False)
    target: Moments = field(init=False)

    def __post_init__(self) -> None:
        """Measure the law of the ladder, and with it the errors."""
        put, given = object.__setattr__, self.reference
        put(self, "law", self._measured_law())
        if given is None:
            put(self, "target", self._moments(extrapolate=False))
        else:
            put(self, "target", given if isinstance(given, Moments) else given.moments())

    @property
    def ladder(self) -> tuple[Rung, ...]:
        """The runs with the finest step, by bond dimension."""
        return tuple(rung for rung in self.rungs if rung.halvings == self.halvings[-1])

    @property
    def best(self) -> Rung:
        """The run with the largest bond dimension and the finest step."""
        return self.rungs[-1]

    @property
    def bond_dimensions(self) -> tuple[int, ...]:
        """All bond dimensions, ascending."""
        return tuple(sorted({rung.bond_dimension for rung in self.rungs}))

    @property
    def halvings(self) -> tuple[int, ...]:
        """All halvings of the step, ascending."""
        return tuple(sorted({rung.halvings for rung in self.rungs}))

    @property
    def settled(self) -> bool:
        """Whether the changes shrink with the bond dimension; where not, the error of the last run is a guess."""
        return self.law is not None and self.law.settled

    @property
    def measured(self) -> bool:
        """Whether the error of `target` was measured, in full."""
        return not (np.isnan(self.target.zz.num).any() or np.isnan(self.target.z.num).any())

    @property
    def pace(self) -> float:
        """Wall time of the largest run over what the cost model of the back-end says about it."""
        return self.best.seconds / max(self.best.planned_seconds, 1e-9)

    def moments(self) -> Moments:
        """Return the moments at an infinite bond dimension and the finest step, with the errors of `estimate`."""
        return self._moments(extrapolate=True)

    def estimate(self, f: Callable[[Moments], ArrayLike]) -> Estimate:
        """Return f(moments) at an infinite bond dimension: f is evaluated on every run, and its values extrapolated.

        Parameters
        ----------
        f : callable
            A plain function of `Moments`, such as those of `anneal_ref.observables`; gives a number or an array.

        Returns
        -------
        Estimate
            `num` is the error of the last run from the bond dimension and from the step, added up; see
            `anneal_ref.truth.extrapolation`. It is nan where one of them was not measured: from fewer than three bond
            dimensions, or from one step alone.

        Raises
        ------
        InputError
            Values that are no finite numbers, or of different shapes.
        """
        values = [evaluate(f, rung.moments) for rung in self.rungs]
        if any(value.shape != values[0].shape or not np.isfinite(value).all() for value in values):
            raise InputError("f must give finite numbers of one shape for the moments of every run; got something else")
        bond, step = self._bars(values)
        return Estimate(self._extrapolated(values), 0.0, bond + step, "extrapolated")

    def error(self, quantity: str = "correlation_error") -> Floats:
        """Return the errors of all runs, shape (n_rungs,), against `target`; 0 for the run that is the target itself.

        Parameters
        ----------
        quantity : {"correlation_error", "largest", "energy", "q2"}
            eps with eps^2 = sum_(i<j) (c - t)^2 / sum_(i<j) t^2 (of connected correlations if there are fields), the
            largest absolute error of any <Z_i> or <Z_i Z_j>, that of the problem energy per spin in units of J, or
            that of q2.
        """
        instance = self.anneal.instance
        return np.array([distance(quantity, instance, rung.moments, self.target) for rung in self.rungs])

    def own_error(self, quantity: str = "correlation_error") -> tuple[float, float]:
        """Return the error of the last run from its bond dimension and from its step, as its own ladders measure it.

        Parameters
        ----------
        quantity : {"correlation_error", "largest"}

        Returns
        -------
        tuple of two float
            nan where it was not measured.
        """
        instance = self.anneal.instance
        bond, step = (uncertainty(quantity, instance, self._moments(False, part)) for part in (0, 1))
        return bond, step

    def floor(self, quantity: str = "correlation_error") -> float:
        """Return the error of `target` itself, below which those of the runs mean nothing.

        nan where it was not measured; a step error that was not measured is left out.
        """
        if self.reference is not None:
            return uncertainty(quantity, self.anneal.instance, self.target)
        bond, step = self.own_error(quantity)
        return bond + float(np.nan_to_num(step))

    def resolved(self, quantity: str = "correlation_error") -> NDArray[np.bool_]:
        """Return which runs, shape (n_rungs,), have an error at least twice that of the target itself."""
        return np.asarray(self.error(quantity) >= RESOLVED * float(np.nan_to_num(self.floor(quantity))))

    def predict(self, error: float, quantity: str = "correlation_error") -> Prediction:
        """Return the bond dimension and the step that a wanted error takes, and what the run will cost.

        Parameters
        ----------
        error : float
            Of the run, from bond dimension and step together.
        quantity : {"correlation_error", "largest"}

        Returns
        -------
        Prediction
            It says whether it lies within the ladder, beyond it, or beyond what the ladder supports.
        """
        return predict(self, number("error", error, 0.0), quantity)

    def __repr__(self) -> str:
        """Return sizes and outcome in angle brackets."""
        outcome = "settled" if self.settled else "not settled"
        return f"<Convergence: {self.anneal.n_sites} spins, bond dimensions {self.bond_dimensions}, {outcome}>"

    def __str__(self) -> str:
        """Return a small table of the runs, with their errors, and what the ladder tells."""
        from anneal_ref.truth.convergence_text import convergence_text

        return convergence_text(self)

    def _measured_law(self) -> Law | None:
        last = self.ladder[-RUNGS:]
        if len(last) < RUNGS:
            return None
        weights = [rung.discarded_weight for rung in last]
        return measure_law(
            [rung.bond_dimension for rung in last],
            [free_entries(self.anneal, rung.moments) for rung in last],
            weights if np.isfinite(weights).all() else None,
            noise=float(last[-1].ledger.get("truncation", 0.0)) ** 0.5,
        )

    def _last(self, values: Sequence[Floats]) -> list[Floats]:
        """Values of the last three runs of the ladder."""
        step = len(self.halvings)
        return list(values[step - 1 :: step][-RUNGS:])

    def _extrapolated(self, values: Sequence[Floats]) -> Floats:
        return values[-1] if self.law is None else self.law.extrapolated(self._last(values))

    def _bars(self, values: Sequence[Floats]) -> tuple[Floats, Floats]:
        """Error bars of the last run from its bond dimension and from its step."""
        unknown = np.full(values[-1].shape, np.nan)
        steps = values[-len(self.halvings) :]
        bond = unknown if self.law is None else self.law.bars(self._last(values))
        return bond, step_bars(self.halvings, steps) if len(steps) > 1 else unknown

    def _moments(self, extrapolate: bool, part: int | None = None) -> Moments:
        """Moments with error bars, of both sources or of one."""
        runs = [rung.moments for rung in self.rungs]

        def measured(values: list[Floats], fixed: NDArray[np.bool_] | None = None) -> Estimate:
            value = self._extrapolated(values) if extrapolate else values[-1]
            bars = self._bars(values)
            num = bars[0] + bars[1] if part is None else bars[part]
            if fixed is not None:
                # the true value is known, and so is the error
                num = np.where(fixed, np.abs(value), num)
            if num.ndim == 2:
                num = num.copy()
                np.fill_diagonal(num, 0.0)
            return Estimate(value, 0.0, num, "extrapolated" if extrapolate else runs[-1].zz.how)

        z_zero, zz_zero = fixed_by_symmetry(self.anneal)
        x = [moments.x.value for moments in runs if moments.x is not None]
        return Moments(
            measured([moments.z.value for moments in runs], z_zero),
            measured([moments.zz.value for moments in runs], zz_zero),
            measured(x) if len(x) == len(runs) else None,
        )


def converge(
    anneal: Anneal,
    bond_dimensions: Sequence[int] = (16, 32, 64, 128),
    steps: Sequence[int] = (0, 1),
    backend: Backend = MPS(),  # noqa: B008
    reference: Reference | Moments | None = None,
    run: Run = Run(),  # noqa: B008
) -> Convergence:
    """Solve an anneal at several bond dimensions and steps, and measure how the error falls.

    Every bond dimension is run with every step, so that the errors of both can be told apart. The smallest run is made
    twice, since the first loads the compiled kernels; the second counts.

    Parameters
    ----------
    anneal : Anneal
    bond_dimensions : sequence of int
        Three or more show how fast the error falls; each twice the one before is a good choice.
    steps : sequence of int
        How often every step is cut in half. Two or more show the error of the step.
    backend : Backend
        The settings that all runs share; of a back-end with a bond dimension.
    reference : Reference or Moments, optional
        The truth, to take the errors against, with its numerical error measured; by default the last run.
    run : Run
        Threads and progress. With a checkpoint, every run keeps one of its own; the wall time of a run that went on
        from one is that since then.

    Returns
    -------
    Convergence

    Raises
    ------
    InputError
        Something that is not an anneal, no or repeated numbers, a back-end without a bond dimension, a reference of
        another anneal or without measured errors.
    NotSupported, TooLarge
        From the back-end, before any work.

    Examples
    --------
    >>> import anneal_ref as ar
    >>> schedule = ar.Schedule.linear(transverse=(20.0, 0.0), problem=(0.0, 10.0))
    >>> instance = ar.draw_instance(ar.lattices.square(3, 3), ar.disorder.plus_minus(), seed=1)
    >>> convergence = ar.converge(ar.Anneal(instance, schedule, duration=1.0), bond_dimensions=(2, 4, 8, 16))
    >>> convergence.settled, convergence.error()[:-1].max() < 1
    (True, np.True_)
    >>> energy = convergence.estimate(lambda moments: ar.observables.problem_energy(moments, instance))
    >>> bool(0 < energy.num < 0.1)
    True
    >>> convergence.predict(0.05).basis
    'interpolated'
    """
    check_anneal(anneal)
    dimensions = _ascending("bond_dimensions", bond_dimensions, 1)
    halvings = _ascending("steps", steps, 0)
    if isinstance(backend, type) or not {"step", "bond_dimension"} <= set(getattr(backend, "knobs", ())):
        raise InputError(f"backend must be one with a bond dimension and a step, such as MPS(); got {backend!r}")
    _check_reference(anneal, reference)
    settings = [
        (d, k, refined(replace(backend, bond_dimension=d), {"step": k}))  # type: ignore[type-var]
        for d in dimensions
        for k in halvings
    ]
    plans = [one.plan(anneal) for _, _, one in settings]
    rungs = []
    with run.track(sum(plan.seconds for plan in plans), "convergence") as bar:
        settings[0][2].evolve(anneal, run=Run(run.threads, progress=False))
        for (d, k, one), plan in zip(settings, plans, strict=True):
            began = perf_counter()
            state = one.evolve(anneal, run=replace(run.part(f"bond-{d}-halvings-{k}"), progress=False))
            seconds = perf_counter() - began
            rungs.append(Rung(one, d, k, state.moments(), dict(state.ledger), seconds, plan.seconds, plan.bytes))
            del state  # before the next one is allocated
            bar.update(plan.seconds, f"bond dimension {d}, halvings {k}")
    return Convergence(anneal, backend, tuple(rungs), reference)


def _ascending(name: str, given: Sequence[int], low: int) -> tuple[int, ...]:
    if isinstance(given, int | float | str):
        raise InputError(f"{name} must be a sequence of whole numbers, as in ({given},); got {given!r}")
    values = tuple(integer(f"{name}[{k}]", one, low=low) for k, one in enumerate(given))
    if not values or len(set(values)) < len(values):
        raise InputError(f"{name} must hold at least one number, and each once; got {values}")
    return tuple(sorted(values))


def _check_reference(anneal: Anneal, reference: Reference | Moments | None) -> None:
    if reference is None:
        return
    if not isinstance(reference, Reference | Moments):
        raise InputError(f"reference must be a Reference or Moments; got {type(reference).__name__}")
    if isinstance(reference, Reference) and reference.anneal.identity != anneal.identity:
        raise InputError("reference must be that of the anneal; got one of another anneal")
    moments = reference if isinstance(reference, Moments) else reference.moments()
    if moments.n_sites != anneal.n_sites:
        raise InputError(f"reference must have the {anneal.n_sites} spins of the anneal; got {moments.n_sites}")
    if np.isnan(moments.zz.num).any() or np.isnan(moments.z.num).any():
        raise InputError(
            "reference must have its numerical error measured; solve it with anneal_ref.reference, or leave it out"
        )
