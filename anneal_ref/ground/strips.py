"""Strip elimination: minimise over one spin after another, remembering who wins for each state of the frontier."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from anneal_ref.base.errors import TooLarge
from anneal_ref.ground.ordering import Ordering, best_ordering
from anneal_ref.ground.problem import Problem
from anneal_ref.ground.strips_kernels import add_counts, add_table, minimise, multiply_table

# counts are kept in double precision, exact up to here
LARGEST_COUNT = 2.0**53
LOW_BITS = 10


@dataclass(frozen=True, slots=True)
class StripPlan:
    """A way to eliminate a problem: the spin held at +1 first (none with fields), and the order of the others."""

    pinned: int | None
    ordering: Ordering

    @property
    def cost(self) -> float:
        """Number of table entries that are computed."""
        return self.ordering.cost

    @property
    def bytes(self) -> int:
        """Memory at the peak: tables of energies and counts in use, and the packed choices of all steps."""
        choices = sum(1 << max(0, len(frontier) - 2) for frontier in self.ordering.frontiers)
        # up, down, the earlier table and a copy while they grow, for energies and for counts; then smaller ones
        return choices + 12 * 8 * (1 << self.ordering.width)


def plan_strips(problem: Problem) -> StripPlan | None:
    """Choose an elimination order; None where every order that was tried is too wide."""
    ordering = best_ordering(problem)
    if ordering is None or problem.has_fields or problem.n_sites < 2:
        return None if ordering is None else StripPlan(None, ordering)
    # without fields one spin is free: holding it takes it out of every frontier that it is part of
    uses = np.bincount([site for frontier in ordering.frontiers for site in frontier], minlength=problem.n_sites)
    held = int(np.argmax(uses))
    order, frontiers = [], []
    for site, frontier in zip(ordering.order, ordering.frontiers, strict=True):
        if site != held:
            order.append(site - (site > held))
            frontiers.append(tuple(other - (other > held) for other in frontier if other != held))
    return StripPlan(held, Ordering(tuple(order), tuple(frontiers)))


def eliminate(
    problem: Problem, plan: StripPlan, limit: int = 1, memory: int = 4 * 2**30
) -> tuple[int, int | None, NDArray[np.int8]]:
    """Find the ground states by min-plus elimination along a plan.

    Parameters
    ----------
    problem : Problem
    plan : StripPlan
        From `plan_strips` of the same problem.
    limit : int
        The most configurations to return; all are counted.
    memory : int
        Bytes that may be taken.

    Returns
    -------
    energy : int
        In units of the problem.
    degeneracy : int or None
        Number of ground configurations; None above 2^53, or where `problem.slack` leaves ties undecided.
    spins : (k, n) array of int8
        The first min(limit, degeneracy) of them. Without fields, each is followed by its mirror image.

    Raises
    ------
    TooLarge
        The tables need more than `memory`; nothing has been allocated.

    References
    ----------
    U. Bertele and F. Brioschi, *Nonserial Dynamic Programming* (Academic Press, 1972).

    Examples
    --------
    >>> from anneal_ref.ground.problem import whole_numbers
    >>> ring = whole_numbers(4, [(0, 1), (1, 2), (2, 3), (3, 0)], [1, 1, 1, -1])
    >>> eliminate(ring, plan_strips(ring))[:2]
    (-2, 8)
    """
    if plan.bytes > memory:
        raise TooLarge(
            f"strip elimination with a frontier of {plan.ordering.width} spins needs {plan.bytes / 2**30:.1f} GiB; "
            f"{memory / 2**30:.1f} GiB are allowed: use method 'cuts'",
            needed_bytes=plan.bytes,
            available_bytes=memory,
            alternatives=("method 'cuts'",),
        )
    if plan.pinned is None:
        energy, count, choices = _forward(problem, plan.ordering)
        spins = _backward(problem.n_sites, plan.ordering, choices, limit)
    else:
        free, constant = problem.pinned(plan.pinned)
        energy, count, choices = _forward(free, plan.ordering)
        energy, count = energy + constant, 2 * count
        half = _backward(free.n_sites, plan.ordering, choices, -(-limit // 2))
        half = np.insert(half, plan.pinned, 1, axis=1)
        spins = np.stack([half, -half], axis=1).reshape(-1, problem.n_sites)[:limit]
    return energy, None if problem.slack or count > LARGEST_COUNT else int(count), spins


def _forward(problem: Problem, ordering: Ordering) -> tuple[int, float, list[NDArray[np.uint8]]]:
    """Eliminate all spins: energy, number of ground states, and the packed choices of each step."""
    matrix = [dict[int, int]() for _ in range(problem.n_sites)]
    for (first, second), coupling in zip(problem.edges.tolist(), problem.couplings.tolist(), strict=True):
        matrix[first][second] = matrix[second][first] = coupling
    rank = {site: place for place, site in enumerate(ordering.order)}
    waiting: list[list[tuple[tuple[int, ...], NDArray[np.int64], NDArray[np.float64]]]] = [[] for _ in rank]
    energy, count, choices = 0, 1.0, []
    for step, (site, frontier) in enumerate(zip(ordering.order, ordering.frontiers, strict=True)):
        plus = np.full(1, problem.fields[site])
        for other in frontier:
            coupling = matrix[site].get(other, 0)
            plus = np.concatenate([plus + coupling, plus - coupling])
        minus = -plus
        plus_count, minus_count = np.ones((2, plus.size))
        for scope, table, counts in waiting[step]:
            low, high, own = _places(site, frontier, scope)
            add_table(plus, minus, table, low, high, own)
            multiply_table(plus_count, minus_count, counts, low, high, own)
        waiting[step] = []
        packed = np.empty(-(-plus.size // 4), dtype=np.uint8)
        minimise(plus, minus, packed)
        add_counts(plus_count, minus_count, packed)
        choices.append(packed)
        if frontier:
            waiting[min(rank[other] for other in frontier)].append((frontier, plus, plus_count))
        else:
            energy, count = energy + int(plus[0]), count * float(plus_count[0])
        for other in matrix[site]:
            del matrix[other][site]
    return energy, count, choices


def _places(
    site: int, frontier: tuple[int, ...], scope: tuple[int, ...]
) -> tuple[NDArray[np.int64], NDArray[np.int64], int]:
    """Where entry x of a new table over `frontier` reads an earlier table over `scope`; see `add_table`."""
    weight = {other: 1 << place for place, other in enumerate(scope)}
    halves = []
    for part in (frontier[:LOW_BITS], frontier[LOW_BITS:]):
        places = np.zeros(1, dtype=np.int64)
        for other in part:
            places = np.concatenate([places, places + weight.get(other, 0)])
        halves.append(places)
    return halves[0], halves[1], weight[site]


def _backward(n_sites: int, ordering: Ordering, choices: list[NDArray[np.uint8]], limit: int) -> NDArray[np.int8]:
    """Read the configurations back, last spin first; where both directions are as good, follow both up to the limit."""
    spins = np.ones((1, n_sites), dtype=np.int8)
    for site, frontier, packed in zip(
        reversed(ordering.order), reversed(ordering.frontiers), reversed(choices), strict=True
    ):
        places = np.zeros(len(spins), dtype=np.int64)
        for bit, other in enumerate(frontier):
            places |= (spins[:, other] < 0).astype(np.int64) << bit
        winners = (packed[places >> 2] >> (2 * (places & 3)).astype(np.uint8)) & 3
        spins[:, site] = np.where(winners == 2, -1, 1)
        twins = spins[winners == 3][: max(0, limit - len(spins))]
        twins[:, site] = -1
        spins = np.concatenate([spins, twins])
    return spins[:limit]
