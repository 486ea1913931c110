"""Numerical error measured from nested refinements of one computation.

Three runs at steps h, h/2 and h/4 give a number v0, v1, v2. A scheme of order p has v_k = v + C (h/2^k)^p + ..., so
the differences d1 = v1 - v0 and d2 = v2 - v1 shrink by the decay r = 2^-p, and what is left in v2 is the rest of the
geometric series, d2 r/(1 - r). That is the estimate, with three reservations:

- *The decay is measured*, from the root mean square of d2 and d1 over all entries, and replaces 2^-p where it is worse.
  It never goes below 2^-p, since a fast first drop (a high-order term dying) says nothing about the next; nor below
  3 rms(d1), since a change that is not small brings companions of its own square, and a coarse run that is far off is
  no term of the series. When the decay is above 1/2 the refinement has not settled, and nothing is called converged.
- *Entry by entry*, d2 may vanish by accident: an entry passes through zero where leading and next order cancel. The
  earlier difference, shrunk by the decay, stands in where it is larger; both vanish together only rarely. A safety
  factor of 2 covers the next order in h.
- *Rounding does not shrink.* It is measured by solving the coarsest run again with the sites in another order: the
  same truncation error to the last digit, another sequence of roundings. Its size grows with the number of layers, by
  no more than in proportion. Differences at that level are taken out of the measured decay, and twice the level is
  added to every bar. The drift of the norm is a check and a poor measure: it does not see errors of the
  phases, and it cancels in moments that are divided by the norm. It stands in only where another order changes no bit,
  as for a single spin. Where the order hardly matters (no transverse field, few spins), roundings of the stored
  numbers are common to both orders; their random walk over the layers, half a unit roundoff each, is the least level.

None of this uses the tolerance that was asked for, and an entry's bar comes from that entry's own differences.

References
----------
L. F. Richardson and J. A. Gaunt, Phil. Trans. R. Soc. A 226, 299 (1927): the deferred approach to the limit.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

SAFETY = 2.0
"""Covers the next order in the step."""

UNSETTLED = 0.5
"""A measured decay above this is no convergence."""

FAR_OFF = 3.0
"""Least decay in units of the first change: a change that is not small brings companions of its own square."""

_MOST = 3.0  # bar in units of the last difference where the series does not converge
_ULP = float(np.finfo(np.float64).eps)


@dataclass(frozen=True, slots=True)
class Decay:
    """How the changes of successive refinements shrink, and the level at which they cannot.

    Parameters
    ----------
    ratio : float
        Change of one refinement over the change of the one before, without rounding, with the lower limits above.
    rounding : float
        Root mean square of the rounding error of an entry of the finest run.
    growth : float
        Factor from the rounding of the coarsest run to that of the finest.
    """

    ratio: float
    rounding: float
    growth: float = 1.0

    @property
    def settled(self) -> bool:
        """Whether the differences shrink at all."""
        return self.ratio <= UNSETTLED

    @property
    def left(self) -> float:
        """Error left in the finest run, in units of its last change."""
        return min(self.ratio / (1.0 - self.ratio), _MOST) if self.ratio < 1.0 else _MOST

    def bars(self, values: Sequence[NDArray[np.float64]], rounding: NDArray[np.float64] | float) -> NDArray[np.float64]:
        """Return the error bar of every entry of the finest values.

        Parameters
        ----------
        values : three arrays of one shape
            From the three last runs, coarse to fine.
        rounding : ndarray or float
            Rounding error of the finest values, root mean square.
        """
        first, second = np.abs(values[1] - values[0]), np.abs(values[2] - values[1])
        return np.asarray(SAFETY * (self.left * np.maximum(second, self.ratio * first) + rounding))


def measure_decay(
    values: Sequence[NDArray[np.float64]],
    reordered: NDArray[np.float64],
    growth: float,
    drift: float,
    order: float,
    least: float = _ULP,
) -> Decay:
    """Return the decay of the changes over all entries.

    Parameters
    ----------
    values : three arrays, shape (k,)
        All entries that are free to move, from the three last runs, coarse to fine.
    reordered : ndarray, shape (k,)
        What the coarsest run of all changes by when its sites are solved in another order.
    growth : float
        Layers of the finest run over layers of the coarsest.
    drift : float
        Norm of the finest state minus one.
    order : float
        Order of the scheme, which the decay is never taken to exceed.
    least : float
        Rounding error of the finest run that the precision of its stored numbers makes certain.

    Examples
    --------
    >>> runs = [np.array([0.3, -0.7]) + 2.0 ** (-6 * k) * np.array([1e-4, 2e-4]) for k in range(3)]
    >>> decay = measure_decay(runs, np.array([1e-16, -1e-16]), growth=4, drift=0.0, order=6)
    >>> round(1 / decay.ratio), decay.settled
    (64, True)
    """
    rounding = max(growth * _rms(reordered) or abs(drift), least)
    first, second = _rms(values[1] - values[0]), _rms(values[2] - values[1])
    beyond = max(second - SAFETY * rounding, 0.0)
    measured = beyond / first if first > 0 else (np.inf if beyond > 0 else 0.0)
    return Decay(max(measured, 2.0**-order, FAR_OFF * first), rounding, growth)


def _rms(values: NDArray[np.float64]) -> float:
    return float(np.sqrt(np.mean(values**2))) if values.size else 0.0
