"""From the ladder of a convergence study to the bond dimension that a wanted error takes, and what it will cost."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np

from anneal_ref.backends.contract import Backend, Plan
from anneal_ref.backends.memory import readable_bytes
from anneal_ref.base.errors import InputError, TooLarge
from anneal_ref.model.anneal import Anneal
from anneal_ref.truth.distances import distance
from anneal_ref.truth.evolutions import refined
from anneal_ref.truth.extrapolation import Floats

if TYPE_CHECKING:
    from anneal_ref.truth.convergence import Convergence

INSIDE, OUTSIDE, BEYOND, UNSETTLED = "interpolated", "extrapolated", "beyond the data", "not settled"

_STEP_SHARE = 0.25  # of a wanted error that the step may use up


@dataclass(frozen=True, slots=True)
class Prediction:
    """What a wanted error takes.

    Parameters
    ----------
    quantity : str
    error : float
        The wanted error, from bond dimension and step together.
    bond_dimension : float
        Not rounded; nan where the ladder says nothing.
    halvings : int
        Of the step of the study's back-end. Beyond those that were run the error is taken to fall by four with each.
    seconds : float
        On the machine of the study, from the cost model of the back-end and the pace of the largest run.
    bytes : int
        Memory, from the cost model.
    basis : str
        "interpolated" within the ladder; "extrapolated" with its measured law by no more than the last spacing of the
        ladder; "beyond the data" further out, where the law is only a hypothesis; "not settled" where there is none.
    step_error : float
        Part of the step; nan where it was not measured.
    """

    quantity: str
    error: float
    bond_dimension: float
    halvings: int
    seconds: float
    bytes: int
    basis: str
    step_error: float

    def __str__(self) -> str:
        """Return one readable line."""
        text = f"{self.quantity.replace('_', ' ')} {self.error:.2g}: "
        if self.basis == UNSETTLED:
            return text + "the ladder has not settled and says nothing about it; add larger bond dimensions"
        step = "the step as given" if self.halvings == 0 else f"1/{2**self.halvings} of the step"
        text += (
            f"bond dimension {math.ceil(self.bond_dimension)}, {step}, about {self.seconds:.2g} s and "
            f"{readable_bytes(self.bytes)} ({self.basis})"
        )
        return text + ("; the error of the step was not measured" if math.isnan(self.step_error) else "")


def crossing(sizes: Sequence[float], errors: Sequence[float] | Floats, wanted: float) -> float:
    """Return the smallest size whose error is no larger than wanted, interpolated on logarithmic axes.

    Parameters
    ----------
    sizes : sequence of float, ascending
    errors : sequence of float
        As long as `sizes`.
    wanted : float

    Returns
    -------
    float
        0 if the error of the smallest size is below it; infinity if that of none is.

    Examples
    --------
    >>> crossing((16, 32, 64), (0.1, 0.01, 0.001), 0.01), round(crossing((16, 32, 64), (0.1, 0.01, 0.001), 0.0316), 1)
    (32.0, 22.6)
    >>> crossing((16, 32), (0.1, 0.01), 0.2), crossing((16, 32), (0.1, 0.01), 0.001)
    (0.0, inf)
    """
    if errors[0] < wanted:
        return 0.0
    for k, (size, error) in enumerate(zip(sizes, errors, strict=True)):
        if error <= wanted:
            if k == 0 or error == wanted:
                return float(size)
            part = math.log(errors[k - 1] / wanted) / math.log(errors[k - 1] / max(error, 1e-300))
            return float(sizes[k - 1] * (size / sizes[k - 1]) ** part)
    return math.inf


def ladder_errors(convergence: Convergence, quantity: str) -> tuple[tuple[int, ...], Floats]:
    """Return bond dimensions and errors at the finest step, none of them below the error of the target itself.

    The last run is left out where it is its own target and nothing measured its error.
    """
    count = len(convergence.halvings)
    errors, dimensions = convergence.error(quantity)[count - 1 :: count], convergence.bond_dimensions
    floor = convergence.floor(quantity)
    if math.isnan(floor):
        return dimensions[:-1], errors[:-1]
    return dimensions, np.maximum(errors, floor)


def predict(convergence: Convergence, error: float, quantity: str) -> Prediction:
    """Return what a wanted error takes; see `Convergence.predict`."""
    if error <= 0:
        raise InputError(f"error must be a positive number; got {error}")
    halvings, step = _step_for(convergence, error, quantity)
    wanted = error - float(np.nan_to_num(step))
    dimensions, errors = ladder_errors(convergence, quantity)
    size, basis = crossing(dimensions, errors, wanted) if len(dimensions) else math.inf, INSIDE
    if size == 0.0:
        size = float(dimensions[0])
    if math.isinf(size):
        size, basis = _extrapolated(convergence, wanted, quantity)
    if math.isnan(size):
        return Prediction(quantity, error, size, halvings, math.nan, 0, basis, step)
    anneal, best = convergence.anneal, convergence.best
    plan = plan_of(anneal, convergence.backend, math.ceil(size), halvings, best.bond_dimension)
    return Prediction(quantity, error, size, halvings, plan.seconds * convergence.pace, plan.bytes, basis, step)


def plan_of(anneal: Anneal, backend: Backend, bond_dimension: int, halvings: int, known: int) -> Plan:
    """Return the cost of a run, also of one that does not fit into this machine.

    Beyond the memory that is there, time grows as the cube of the bond dimension from one that is `known` to fit.
    """
    wanted: Any = refined(backend, {"step": halvings})
    try:
        return replace(wanted, bond_dimension=bond_dimension).plan(anneal)  # type: ignore[no-any-return]
    except TooLarge as error:
        plan: Plan = replace(wanted, bond_dimension=known).plan(anneal)
        seconds = plan.seconds * (bond_dimension / known) ** 3
        return replace(plan, seconds=seconds, bytes=error.needed_bytes)


def full_dimension(n_sites: int) -> float:
    """Return the bond dimension at which every state of so many spins is represented."""
    return 2.0 ** min(n_sites // 2, 1000)


def _step_for(convergence: Convergence, error: float, quantity: str) -> tuple[int, float]:
    """Fewest halvings whose step error is no more than a quarter of the wanted error, and that error."""
    best, own = convergence.best, convergence.own_error(quantity)[1]
    if math.isnan(own):
        return best.halvings, own
    for rung in convergence.rungs[-len(convergence.halvings) :]:
        step = own + distance(quantity, convergence.anneal.instance, rung.moments, best.moments)
        if step <= _STEP_SHARE * error:
            return rung.halvings, step
    more = max(0, math.ceil(math.log(own / (_STEP_SHARE * error), 4)))
    return best.halvings + more, own / 4**more


def _extrapolated(convergence: Convergence, wanted: float, quantity: str) -> tuple[float, str]:
    law, best = convergence.law, convergence.best
    if law is None or not law.settled:
        return math.nan, UNSETTLED
    known = convergence.reference is not None and convergence.resolved(quantity)[-1]
    last = float(convergence.error(quantity)[-1]) if known else convergence.own_error(quantity)[0]
    size = best.bond_dimension * max(1.0, last / wanted) ** (1 / law.cautious_exponent)
    full = full_dimension(convergence.anneal.n_sites)
    spacing = law.sizes[2] / law.sizes[1]
    return min(size, full), OUTSIDE if min(size, full) <= best.bond_dimension * spacing else BEYOND
