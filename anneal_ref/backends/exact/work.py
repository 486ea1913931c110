r"""The work identity: a consistency check of one evolution, from its own energies.

For the exact evolution

    <H>(T) - <H>(0) = \int <dH/dt> dt = \int ( -sum_i w_i <X_i> dG + <E> dP ).

What a computed evolution leaves of this equation shows a step that is too long or a Hamiltonian that is not the one of
the schedule. It is no error bar: a projected evolution may obey the identity while being wrong.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.polynomial import chebyshev

from anneal_ref.backends.contract import check_anneal
from anneal_ref.backends.exact.splitting import Floats
from anneal_ref.backends.exact.state_vector import StateVector
from anneal_ref.backends.exact.steps import time_grid
from anneal_ref.backends.phase import phase_mesh
from anneal_ref.base.run import Run
from anneal_ref.model.anneal import Anneal

# panels of two units of phase
_PANELS = 0.5
_NODES = 13
_GAUSS_NODES, _GAUSS_WEIGHTS = np.polynomial.legendre.leggauss(10)


def work_identity(backend: StateVector, anneal: Anneal, run: Run = Run()) -> float:  # noqa: B008
    """Return <H>(T) - <H>(0) minus the work done, in the unit of the schedule.

    One pass of time with a read-out of moments at some twelve times per two units of phase, so it costs a few times
    what an evolution does; the additional stops make steps a little shorter than those of a plain run.

    Parameters
    ----------
    backend : StateVector
    anneal : Anneal
    run : Run

    Returns
    -------
    float
        Zero but for the error of the evolution, and of the quadrature: about 1e-12 for smooth schedules, and up to 1e-6
        for tables that are broken lines with rows closer than two units of phase.

    Examples
    --------
    >>> import anneal_ref as ar
    >>> instance = ar.draw_instance(ar.lattices.chain(6), ar.disorder.gaussian(), seed=1)
    >>> schedule = ar.Schedule.linear(transverse=(5.0, 0.0), problem=(0.0, 4.0))
    >>> abs(work_identity(ar.StateVector(tolerance=1e-9), ar.Anneal(instance, schedule, 2.0))) < 1e-7
    True
    """
    check_anneal(anneal)
    panels = time_grid(anneal, phase_mesh(anneal), _PANELS)
    nodes = -np.cos(np.pi * np.arange(_NODES) / (_NODES - 1))
    times = (panels[:-1, None] + np.diff(panels)[:, None] * (1 + nodes) / 2)[:, :-1].ravel()
    fractions = np.append(times / anneal.duration, 1.0)
    instance = anneal.instance
    couplings = np.triu(instance.coupling_matrix(), 1)
    transverse, problem = [], []
    for state in backend.states(anneal, tuple(fractions), run):
        moments = state.moments()
        assert moments.x is not None
        transverse.append(-float(instance.transverse @ moments.x.value))
        problem.append(float(np.sum(couplings * moments.zz.value) + instance.fields @ moments.z.value))
    strengths = zip((anneal.transverse, anneal.problem), (transverse, problem), strict=True)
    # by parts, the change of <H> less the work \int f dG is \int f' G: a rough schedule needs no derivative
    return sum(_change(np.asarray(anneal.knots), panels, nodes, schedule, np.array(f)) for schedule, f in strengths)


def _change(knots: Floats, panels: Floats, nodes: Floats, schedule: Callable[[Floats], Floats], f: Floats) -> float:
    """Integrate the schedule times the derivative of f, a polynomial on each panel."""
    total = 0.0
    for k, (start, end) in enumerate(zip(panels[:-1], panels[1:], strict=True)):
        first = k * (_NODES - 1)
        series = chebyshev.chebder(chebyshev.chebfit(nodes, f[first : first + _NODES], _NODES - 1))
        ends = np.concatenate([[start], knots[(knots > start) & (knots < end)], [end]])
        half = np.diff(ends)[:, None] / 2
        times = ends[:-1, None] + half * (1 + _GAUSS_NODES)
        slopes = chebyshev.chebval(2 * (times - start) / (end - start) - 1, series) * 2 / (end - start)
        total += float(np.sum(half * _GAUSS_WEIGHTS * schedule(times) * slopes))
    return total
