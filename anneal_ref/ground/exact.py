"""Choice between the two methods that look at everything: enumeration and strip elimination."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from anneal_ref.ground.enumeration import enumerate_states, enumeration_cost
from anneal_ref.ground.problem import Problem
from anneal_ref.ground.strips import eliminate, plan_strips

# a configuration of the enumeration takes about this fraction of the time of a table entry of the elimination
ENUMERATION_COST = 2.0**-7
# up to here enumeration takes milliseconds, and it knows the degeneracy even of numbers with rounding
ENUMERATION_FIRST = 2.0**26


@dataclass(frozen=True, slots=True, eq=False)
class Solved:
    """Energy in units, number of ground states (None: not known), some of them, and the method."""

    energy: int
    degeneracy: int | None
    spins: NDArray[np.int8]
    how: str


def solve_exactly(problem: Problem, budget: float, memory: int, limit: int = 1) -> Solved | None:
    """Solve by the cheaper of enumeration and strip elimination; None where both exceed the budget.

    Parameters
    ----------
    problem : Problem
    budget : float
        Table entries of the elimination that may be computed (some ns each), or 128 times as many configurations.
    memory : int
        Bytes that the elimination may take.
    limit : int
        The most ground states to return.
    """
    configurations = enumeration_cost(problem)
    listing = configurations * ENUMERATION_COST
    if configurations > ENUMERATION_FIRST:
        plan = plan_strips(problem)
        if plan is not None and plan.cost <= min(budget, listing) and plan.bytes <= memory:
            return Solved(*eliminate(problem, plan, limit, memory), how="strips")
    return Solved(*enumerate_states(problem, limit), how="enumeration") if listing <= budget else None
