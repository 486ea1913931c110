"""`ground_energy`: the exact classical ground energy of an instance, as a value and a bound that meet where proved."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from anneal_ref.base.checks import choice, frozen, integer
from anneal_ref.base.errors import InputError, NotSupported
from anneal_ref.base.estimate import Estimate
from anneal_ref.ground.cuts import branch_and_cut
from anneal_ref.ground.enumeration import enumerate_states
from anneal_ref.ground.exact import Solved, solve_exactly
from anneal_ref.ground.ordering import WIDEST
from anneal_ref.ground.problem import Problem, whole_numbers
from anneal_ref.ground.strips import eliminate, plan_strips
from anneal_ref.model.instances import Instance

METHODS = ("enumeration", "strips", "cuts")
# what the choice of a method may spend on looking at everything: some seconds (see `solve_exactly`)
BUDGET = 2.0**28
MEMORY = 4 * 2**30


@dataclass(frozen=True, slots=True, eq=False)
class GroundEnergy:
    """The classical ground energy: the best configuration known, and a bound that no configuration can beat.

    Parameters
    ----------
    value : float
        Energy of `spins`, in units of J.
    bound : float
        The ground energy is at least this. Where all couplings and fields are exact multiples of one unit the proof is
        in whole numbers and bound equals value; else they differ by the rounding of an energy sum, about
        1e-15 (sum |J| + sum |h|).
    spins : (n,) array of int8
        A configuration with energy `value`.
    degeneracy : int or None
        Number of ground configurations, those equal to rounding included; None where they were not counted.
    how : str
        Methods used: "enumeration", "strips", "cuts", joined by " + " where parts of a lattice needed different ones.
    proved : bool
        Whether the bound meets the value. If not, `value` is an upper bound and nothing more.
    """

    value: float
    bound: float
    spins: NDArray[np.int8]
    degeneracy: int | None
    how: str
    proved: bool

    @property
    def gap(self) -> float:
        """How far the value may lie above the ground energy; at least 0."""
        return self.value - self.bound

    @property
    def estimate(self) -> Estimate:
        """The value with the gap as its numerical error."""
        return Estimate(self.value, num=self.gap, how="proved" if self.proved else "bounded")

    def __str__(self) -> str:
        """Return value, proof or bound, degeneracy and method on one line."""
        if not self.proved:
            return f"at most {self.value:.10g}, at least {self.bound:.10g}: not proved ({self.how})"
        states = "" if self.degeneracy is None else f", {self.degeneracy} state{'s' if self.degeneracy != 1 else ''}"
        return f"{self.value:.10g} proved{states} ({self.how})"


def ground_energy(instance: Instance, method: str | None = None, nodes: int = 20) -> GroundEnergy:
    """Find the least energy over all spin configurations, and prove it or say how far the proof got.

    Parts that are not coupled to each other are solved one by one. Each goes to enumeration (up to about 35 spins) or
    to strip elimination (frontiers up to about 22 spins) where these are affordable, else to branch and cut.

    Parameters
    ----------
    instance : Instance
        The transverse weights play no part.
    method : {"enumeration", "strips", "cuts"}, optional
        Use this method alone, at a cost of up to minutes.
    nodes : int
        The most nodes of the branch-and-cut tree, for each part; never a time, so that results can be repeated.

    Returns
    -------
    GroundEnergy

    Raises
    ------
    InputError
        An unknown method, a negative number of nodes, something that is not an instance.
    NotSupported, TooLarge
        The method that was asked for would take too long, or too much memory; before any work.

    Examples
    --------
    >>> from anneal_ref.model.instances import Instance
    >>> from anneal_ref.model.lattices import chain
    >>> result = ground_energy(Instance(chain(4, periodic=True), [1.0, 1.0, 1.0, -1.0]))
    >>> print(result)
    -2 proved, 8 states (enumeration)
    >>> print(result.estimate)
    -2 (exact)
    """
    problem = _problem(instance)
    if method is not None:
        choice("method", method, METHODS)
    nodes = integer("nodes", nodes, low=0)
    spins = np.ones(problem.n_sites, dtype=np.int8)
    energy, bound, degeneracy, how = 0, 0, 1, dict[str, None]()
    counted = True
    for sites, part in problem.components():
        solved = None if method == "cuts" else _solved(part, method)
        if solved is None:
            part_energy, part_bound, spins[sites] = branch_and_cut(part, nodes)
            energy, bound, counted = energy + part_energy, bound + part_bound, False
            how["cuts"] = None
        else:
            energy, bound, spins[sites] = energy + solved.energy, bound + solved.energy, solved.spins[0]
            counted = counted and solved.degeneracy is not None
            degeneracy *= solved.degeneracy or 1
            how[solved.how] = None
    value = _energy(instance, spins)
    proved = energy == bound
    least = value if proved else bound * problem.unit
    # whole numbers above 2^53 may have been rounded on their way to floating point
    rounding = problem.rounding + (math.ulp(least) if max(-energy, -bound) > 2**53 else 0.0)
    return GroundEnergy(
        value=value,
        bound=least - rounding,
        spins=frozen(spins),
        degeneracy=degeneracy if counted and proved else None,
        how=" + ".join(sorted(how)),
        proved=proved,
    )


def ground_states(instance: Instance, limit: int = 1024) -> NDArray[np.int8]:
    """List all ground configurations.

    Parameters
    ----------
    instance : Instance
    limit : int
        The most configurations that may come back.

    Returns
    -------
    (k, n) array of int8
        All configurations with the least energy (to rounding), each once.

    Raises
    ------
    NotSupported
        More than `limit` configurations, or an instance that is too large to count them.

    Examples
    --------
    >>> from anneal_ref.model.instances import Instance
    >>> from anneal_ref.model.lattices import chain
    >>> ground_states(Instance(chain(3), [1.0, -1.0])).tolist()
    [[-1, 1, 1], [1, -1, -1]]
    """
    problem = _problem(instance)
    limit = integer("limit", limit, low=1)
    states = np.ones((1, problem.n_sites), dtype=np.int8)
    for sites, part in problem.components():
        # ties of numbers with rounding are only seen by looking at every configuration
        solved = _solved(part, "enumeration" if part.slack else None, limit)
        if solved is None or solved.degeneracy is None:
            raise NotSupported(
                f"the ground states of {part.n_sites} coupled spins cannot be counted: neither enumeration nor strip "
                "elimination is affordable",
                alternatives=("ground_energy",),
            )
        if solved.degeneracy * len(states) > limit:
            raise NotSupported(
                f"there are at least {solved.degeneracy * len(states)} ground states; limit is {limit}: raise it",
                alternatives=("a larger limit", "ground_energy"),
            )
        count = len(solved.spins)
        states = np.repeat(states, count, axis=0)
        states[:, sites] = np.tile(solved.spins, (len(states) // count, 1))
    return frozen(states)


def _problem(instance: Instance) -> Problem:
    if not isinstance(instance, Instance):
        raise InputError(f"instance must be an Instance; got a {type(instance).__name__}")
    return whole_numbers(instance.n_sites, instance.lattice.edges, instance.couplings, instance.fields)


def _solved(part: Problem, method: str | None, limit: int = 1) -> Solved | None:
    """Solve a part exactly; None where this costs too much, an error where the method was asked for by name."""
    if method is None:
        return solve_exactly(part, BUDGET, MEMORY, limit)
    if method == "enumeration":
        return Solved(*enumerate_states(part, limit), how=method)
    plan = plan_strips(part)
    if plan is None:
        raise NotSupported(
            f"strip elimination of {part.n_sites} coupled spins would need a frontier of more than {WIDEST} spins",
            alternatives=("method 'cuts'",),
        )
    return Solved(*eliminate(part, plan, limit, MEMORY), how=method)


def _energy(instance: Instance, spins: NDArray[np.int8]) -> float:
    first, second = instance.lattice.edges.T
    terms = np.concatenate([instance.couplings * spins[first] * spins[second], instance.fields * spins])
    return math.fsum(terms)
