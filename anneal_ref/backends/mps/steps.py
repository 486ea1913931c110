r"""Time steps of the variational evolution, and the strengths with which its sweeps go.

Steps are equally long in the phase of `phase_mesh`, a dimensionless clock that runs with the local energies and with
the change of the schedule. A step of length h from time t is a sweep to the right and one to the left, with the
commutator-free Magnus scheme of fourth order on the two of them: with the exact integrals I_1, I_2 of a strength over
the two halves of the step,

    first sweep   (7 I_1 - I_2) / 6        second sweep   (7 I_2 - I_1) / 6

which for a strength that is linear within the step are the weights 1/4 +- sqrt(3)/6 on its two Gauss points. Both
sweeps are projected by first-order splittings that are adjoint to each other, so the step is symmetric. At full bond
dimension nothing is projected away, and the error of a step is that of the Magnus scheme alone; below, a splitting
error of second order stays, and it is small.

From |+...+> bonds have room for one pair of flipped spins at a time, and a problem part that is there at once makes
many. What finds no room in the first step is lost, of second order in its length, whatever the bond dimension. So
that step grows from a small fraction, step by step twice as long; it costs little, since bonds are still narrow.

References
----------
S. Blanes and P. C. Moan, Appl. Numer. Math. 56, 1519 (2006), for commutator-free schemes; C. Lubich, I. Oseledets and
B. Vandereycken, SIAM J. Numer. Anal. 53, 917 (2015), for the splitting of the projector.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from anneal_ref.backends.mps.chain import Strengths
from anneal_ref.backends.mps.wiring import Floats
from anneal_ref.backends.phase import Mesh, halved
from anneal_ref.model.anneal import Anneal

# the first step under a problem part at once is cut in half so often towards its beginning
_GRADES = 6


def step_ends(anneal: Anneal, mesh: Mesh, step: float, marks: Sequence[float], halvings: int = 0) -> Floats:
    """Return step ends from 0 to the duration, at most `step` apart in phase, before they are halved.

    The marks and the corners of the waveform are met. Knots of the schedule need not be: the integrals are exact.

    Parameters
    ----------
    anneal : Anneal
    mesh : Mesh
        Of this anneal.
    step : float
        Length of a step in phase.
    marks : sequence of float
        Times that must be step ends.
    halvings : int
        How often every step is cut in half.

    Returns
    -------
    ndarray, shape (steps + 1,)
    """
    corners = () if anneal.waveform is None else tuple(np.asarray(anneal.waveform.u) * anneal.duration)
    ends, given = np.array([0.0, *corners, anneal.duration]), np.array(sorted(marks), dtype=np.float64)
    # times that differ by rounding are one, and a mark is kept as it was given
    slack = 1e-12 * anneal.duration
    ends = ends[np.abs(ends[:, None] - given).min(axis=1, initial=np.inf) > slack]
    ends = np.unique(np.concatenate([ends, given]))
    ends = ends[np.append(True, np.diff(ends) > slack)]
    phases = np.interp(ends, mesh.times, mesh.phase)
    grid = [ends[:1]]
    for k in range(len(ends) - 1):
        count = max(1, int(np.ceil((phases[k + 1] - phases[k]) / step - 1e-9)))
        inner = np.interp(np.linspace(phases[k], phases[k + 1], count + 1)[1:-1], mesh.phase, mesh.times)
        grid += [inner, ends[k + 1 : k + 2]]
    found = np.concatenate(grid)
    if anneal.start == "plus" and float(anneal.problem(0.0)) != 0:
        graded = found[0] + (found[1] - found[0]) * 0.5 ** np.arange(_GRADES, 0, -1)
        found = np.concatenate([found[:1], graded, found[1:]])
    return halved(found, halvings)


def sweep_strengths(anneal: Anneal, start: float, stop: float, frozen: bool = False) -> tuple[Strengths, Strengths]:
    """Return the strengths, integrated over time, of the two sweeps of a step.

    With `frozen` both are those of the middle of the step, a scheme of second order.
    """
    middle = (start + stop) / 2
    if frozen:
        both = (
            (stop - start) / 2 * float(anneal.transverse(middle)),
            (stop - start) / 2 * float(anneal.problem(middle)),
        )
        return both, both
    first, second = [], []
    for integral in (anneal.transverse_integral, anneal.problem_integral):
        early, late = float(integral(start, middle)), float(integral(middle, stop))
        first.append((7 * early - late) / 6)
        second.append((7 * late - early) / 6)
    return (first[0], first[1]), (second[0], second[1])
