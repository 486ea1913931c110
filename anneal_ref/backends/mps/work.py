r"""The work identity along an evolution, from the two parts of the energy after every step.

With f = <dH/dG> = -<sum w X> and g = <dH/dP> = <E>, the exact evolution obeys d<H>/dt = f dG/dt + g dP/dt, that is

    \int ( G f' + P g' ) dt = 0.

What a computed evolution leaves of it shows a step that is too long or a Hamiltonian that is not the one of the
schedule; its own floor is the spline through the step ends. It is no error bar: a projected evolution may obey it while
being wrong. A kick does work of its own, and the identity holds on both sides of it.
"""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np
from scipy.interpolate import CubicSpline

from anneal_ref.backends.mps.wiring import Floats
from anneal_ref.model.anneal import Anneal

_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(4)


class Work:
    """Energies noted along an evolution.

    Parameters
    ----------
    anneal : Anneal
    times : iterable of float
    parts : iterable of (float, float)
        Energies that were noted before, and when.
    """

    def __init__(self, anneal: Anneal, times: Iterable[float] = (), parts: Iterable[tuple[float, float]] = ()) -> None:
        self.anneal = anneal
        self.times, self.parts = list(times), list(parts)

    def note(self, time: float, parts: tuple[float, float]) -> None:
        """Keep the transverse and the problem part of the energy, per unit of G and P, at a time.

        A time that is noted again, after a kick, begins a new piece.
        """
        self.times.append(float(time))
        self.parts.append(parts)

    def residual(self) -> float:
        """Return what is left of the identity, in the unit of the schedule; 0 for pieces of less than three times."""
        times, parts = np.array(self.times), np.array(self.parts)
        ends = [0, *(np.flatnonzero(np.diff(times) == 0) + 1), len(times)]
        pieces = [slice(ends[k], ends[k + 1]) for k in range(len(ends) - 1) if ends[k + 1] - ends[k] > 2]
        return sum((self._residual_of(times[piece], parts[piece]) for piece in pieces), 0.0)

    def _residual_of(self, times: Floats, parts: Floats) -> float:
        slopes = CubicSpline(times, parts).derivative()
        half = np.diff(times)[:, None] / 2
        nodes = times[:-1, None] + half * (1 + _NODES)
        f, g = np.moveaxis(slopes(nodes), -1, 0)
        power = self.anneal.transverse(nodes) * f + self.anneal.problem(nodes) * g
        return float(np.sum(half * _WEIGHTS * power))
