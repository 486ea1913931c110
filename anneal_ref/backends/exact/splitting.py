r"""Splittings: the evolution over one step as a product of exact exponentials of the two parts of H.

A step of length h from time t is (BAB order, the part B = P E outside)

    D(phi_1) X(theta_1) D(phi_2) ... X(theta_s) D(phi_s+1),
    D(phi) = exp(-i phi E),  X(theta) = exp(+i theta sum_i w_i X_i)

and every angle is the exact integral of its own schedule over its own clock,

    phi_k   = \int P over [t + h (b_1 + ... + b_k-1), t + h (b_1 + ... + b_k)],
    theta_k = \int G over [t + h (a_1 + ... + a_k-1), t + h (a_1 + ... + a_k)].

Each part with a clock of its own, d/dt_A + A(t_A) and d/dt_B + B(t_B), is autonomous, so a splitting keeps the order
that it has for autonomous problems as long as the schedules are smooth within the step. All clocks stay inside the
step.

A step that straddles knots of the schedule (a table is often finer than the steps) sees, in place of each schedule, the
polynomial with the same first Legendre moments over the step. By the Magnus expansion the higher moments of a smooth
schedule matter at high order only; those of a rough one leave an error that falls irregularly as steps are halved (see
`order_on`).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.polynomial import Legendre
from numpy.typing import NDArray

if TYPE_CHECKING:
    from anneal_ref.model.anneal import Anneal

Floats = NDArray[np.float64]

_ROUGH_ORDER = 2
_MOMENTS = 4
# exact for pieces of degree 8 against the highest Legendre polynomial; tables are cubic at most
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(6)


@dataclass(frozen=True, slots=True)
class Splitting:
    """A palindromic splitting, the problem part outside.

    Parameters
    ----------
    name : str
    order : int
    problem : tuple of float, length stages + 1
        Fractions of the step for the exponentials of the problem part; they add up to 1.
    transverse : tuple of float, length stages
        The same for the transverse part.
    """

    name: str
    order: int
    problem: tuple[float, ...]
    transverse: tuple[float, ...]

    @property
    def stages(self) -> int:
        """Layers that one step costs (the outer exponentials of adjacent steps merge)."""
        return len(self.transverse)


def _palindrome(half: tuple[float, ...], odd: bool) -> tuple[float, ...]:
    """Complete the first entries of a palindrome of numbers that add up to 1; the innermost entry is missing."""
    if odd:
        middle = 1 - 2 * sum(half)
        return (*half, middle, *half[::-1])
    inner = 0.5 - sum(half)
    return (*half, inner, inner, *half[::-1])


STRANG = Splitting("strang", 2, (0.5, 0.5), (1.0,))
"""Strang, SIAM J. Numer. Anal. 5, 506 (1968)."""

BLANES_MOAN_4 = Splitting(
    "blanes-moan-4",
    4,
    _palindrome((0.0792036964311957, 0.353172906049774, -0.0420650803577195), odd=True),
    _palindrome((0.209515106613362, -0.143851773179818), odd=False),
)
"""S6 of Blanes and Moan, J. Comput. Appl. Math. 142, 313 (2002), Table 2."""

BLANES_MOAN_6 = Splitting(
    "blanes-moan-6",
    6,
    _palindrome(
        (0.0502627644003922, 0.413514300428344, 0.0450798897943977, -0.188054853819569, 0.541960678450780), odd=True
    ),
    _palindrome((0.148816447901042, -0.132385865767784, 0.067307604692185, 0.432666402578175), odd=False),
)
"""S10 of Blanes and Moan, J. Comput. Appl. Math. 142, 313 (2002), Table 2."""

SPLITTINGS = {splitting.name: splitting for splitting in (STRANG, BLANES_MOAN_4, BLANES_MOAN_6)}


def step_angles(anneal: Anneal, grid: Floats, splitting: Splitting) -> tuple[Floats, Floats]:
    """Return the angles of every exponential of every step.

    Parameters
    ----------
    anneal : Anneal
        Gives the schedules as functions of time, their exact integrals and their knots.
    grid : ndarray, shape (steps + 1,)
        Ascending times.
    splitting : Splitting

    Returns
    -------
    problem : ndarray, shape (steps, stages + 1)
    transverse : ndarray, shape (steps, stages)

    Examples
    --------
    >>> import anneal_ref as ar
    >>> schedule = ar.Schedule.linear(transverse=(20.0, 0.0), problem=(0.0, 10.0))
    >>> anneal = ar.Anneal(ar.Instance(ar.lattices.chain(2), [1.0]), schedule, duration=1.0)
    >>> problem, transverse = step_angles(anneal, np.array([0.0, 0.5, 1.0]), STRANG)
    >>> problem.round(4).tolist(), transverse.round(4).tolist()
    ([[0.3125, 0.9375], [1.5625, 2.1875]], [[7.5], [2.5]])
    """
    start, length = grid[:-1, None], np.diff(grid)[:, None]
    clocks = [_clock(fractions) for fractions in (splitting.problem, splitting.transverse)]
    times = [start + length * clock for clock in clocks]
    problem = np.asarray(anneal.problem_integral(times[0][:, :-1], times[0][:, 1:]))
    transverse = np.asarray(anneal.transverse_integral(times[1][:, :-1], times[1][:, 1:]))
    rough = _straddling(anneal.knots, grid)
    if rough.size:
        problem[rough], transverse[rough] = _projected_angles(anneal, grid, rough, clocks)
    return problem, transverse


def order_on(anneal: Anneal, grid: Floats, splitting: Splitting) -> int:
    """Return the order that a refinement of the grid can count on.

    It is that of the splitting where steps meet the knots. Where knots lie inside steps, the error of the moments that
    are left out falls in an irregular way as steps are halved, and no more than second order is claimed.
    """
    return min(splitting.order, _ROUGH_ORDER) if _straddling(anneal.knots, grid).size else splitting.order


def merge_steps(problem: Floats, transverse: Floats) -> tuple[Floats, Floats, float]:
    """Return the layers of consecutive steps, with the outer exponentials of adjacent steps merged.

    Parameters
    ----------
    problem : ndarray, shape (steps, stages + 1)
    transverse : ndarray, shape (steps, stages)

    Returns
    -------
    problem_angles, transverse_angles : ndarray, shape (steps * stages,)
        Layer k is D(problem_angles[k]), then X(transverse_angles[k]).
    closing : float
        Problem angle that is still to be applied after the last layer.
    """
    merged = problem[:, :-1].copy()
    merged[1:, 0] += problem[:-1, -1]
    return merged.ravel(), transverse.ravel(), float(problem[-1, -1])


def _clock(fractions: tuple[float, ...]) -> Floats:
    clock = np.concatenate([[0.0], np.cumsum(fractions)])
    clock[-1] = 1.0
    return clock


def _straddling(knots: Floats, grid: Floats) -> NDArray[np.intp]:
    """Return the steps that have a knot strictly inside."""
    slack = 1e-12 * (grid[-1] - grid[0])
    first = np.searchsorted(knots, grid[:-1] + slack, side="right")
    last = np.searchsorted(knots, grid[1:] - slack, side="left")
    return np.flatnonzero(last > first)


def _projected_angles(
    anneal: Anneal, grid: Floats, rough: NDArray[np.intp], clocks: list[Floats]
) -> tuple[Floats, Floats]:
    """Return the angles of rough steps from the first Legendre moments of the schedules over each step."""
    start, length = grid[rough], grid[rough + 1] - grid[rough]
    knots = np.asarray(anneal.knots)
    low, high = np.searchsorted(knots, start, side="right"), np.searchsorted(knots, start + length, side="left")
    pieces = high - low + 1
    owner = np.repeat(np.arange(len(rough)), pieces)
    first = np.concatenate([[0], np.cumsum(pieces)[:-1]])
    inner = np.delete(np.arange(pieces.sum()), first)
    left = start[owner]
    left[inner] = knots[(low - first)[owner] + np.arange(len(owner)) - 1][inner]
    right = (start + length)[owner]
    right[inner - 1] = left[inner]
    half = (right - left)[:, None] / 2
    times = left[:, None] + half * (1 + _NODES)
    x = 2 * (times - start[owner, None]) / length[owner, None] - 1
    polynomials = np.polynomial.legendre.legvander(x, _MOMENTS - 1)
    polynomials *= (half * _WEIGHTS)[:, :, None]
    result = []
    for schedule, clock in zip((anneal.problem, anneal.transverse), clocks, strict=True):
        moments = np.add.reduceat(np.einsum("pq,pqn->pn", schedule(times), polynomials), first, axis=0)
        result.append(moments @ _stage_integrals(clock))
    return result[0], result[1]


def _stage_integrals(clock: Floats) -> Floats:
    """Integrals of (2n + 1) P_n(2x - 1) over each stage of a clock, shape (moments, stages)."""
    rows = []
    for n in range(_MOMENTS):
        primitive = Legendre.basis(n, domain=[0, 1]).integ()
        rows.append((2 * n + 1) * np.diff(primitive(clock)))
    return np.array(rows)
