"""Which back-end a reference is made with, where none is given: the cheapest of those that are sure to do."""

from __future__ import annotations

import math

from anneal_ref.backends.contract import Backend
from anneal_ref.backends.exact.state_vector import StateVector
from anneal_ref.backends.fermions.free_fermions import FreeFermions
from anneal_ref.backends.mps.mps import MPS
from anneal_ref.base.errors import NotSupported, TooLarge
from anneal_ref.model.anneal import Anneal
from anneal_ref.truth.refining import Budget

_COARSEST = 8  # bond dimension of the first run
# error of a correlation at the default step and truncation, from which fourth and half order go on
_STEP_ERROR, _CUT_ERROR = 3e-4, 1e-5
# of all runs, in units of the coarsest: it twice, once with half and once with a quarter of the step
_NESTED = 8.0
_QUICK = 1.0  # seconds of a run that are not worth a choice


def default_state_vector(tolerance: float) -> StateVector:
    """Return the state vector of the coarsest run; its steps are small enough for a clear decay."""
    return StateVector(tolerance=min(1e-5, max(100.0 * tolerance, 1e-11)))


def default_mps(tolerance: float) -> MPS:
    """Return the matrix product state of the coarsest run; its step alone leaves a third of the tolerance or less."""
    halvings = max(0, math.ceil(math.log(3 * _STEP_ERROR / tolerance, 16)))
    truncation = min(1e-10, max(1e-16, 1e-12 * (tolerance / (3 * _CUT_ERROR)) ** 2))
    return MPS(bond_dimension=_COARSEST, truncation=truncation, halvings=halvings)


def choose_backend(anneal: Anneal, tolerance: float, budget: Budget) -> Backend:
    """Return the settings of the coarsest run of a reference.

    The state vector knows no truncation, and is taken wherever it is quick, or fits into the budget and nothing exact
    is faster; free fermions are, for long chains without fields. Matrix product states are for all else.
    """
    candidates: list[tuple[float, Backend]] = []
    for backend in _exact(tolerance):
        try:
            plan = backend.plan(anneal)
        except (NotSupported, TooLarge):
            continue
        fits = budget.bytes is None or plan.bytes <= budget.bytes
        if fits and (budget.seconds is None or _NESTED * plan.seconds <= budget.seconds):
            candidates.append((plan.seconds, backend))
    if candidates:
        return min(candidates, key=lambda one: max(one[0], _QUICK))[1]
    return default_mps(tolerance)


def second_backend(anneal: Anneal, tolerance: float, first: Backend) -> Backend:
    """Return a back-end that shares no evolution code with the first.

    Raises
    ------
    NotSupported
        None fits.
    """
    others: list[Backend] = [*_exact(tolerance), default_mps(tolerance)]
    for backend in others:
        if type(backend) is type(first):
            continue
        try:
            plan = backend.plan(anneal)
        except (NotSupported, TooLarge):
            continue
        if plan.seconds < 3600:
            return backend
    raise NotSupported(
        f"no second back-end can solve this anneal of {anneal.n_sites} spins beside {type(first).__name__}",
        ("fewer spins", "independent=False"),
    )


def _exact(tolerance: float) -> list[Backend]:
    vector = default_state_vector(tolerance)
    return [vector, FreeFermions(tolerance=vector.tolerance)]
