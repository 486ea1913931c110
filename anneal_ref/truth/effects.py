"""What one uncertain input does to the moments: pairs of runs with the input off by as much either way.

Let f be any number made of the moments, x the best values of one kind of input (a scale; all couplings) and d their
deviation, normal with the stated standard uncertainty. The change of f splits into two halves,

    f(x + d) - f(x) = first(d) + second(d),     first(d) = [f(x + d) - f(x - d)]/2 is odd in d,
                                                second(d) = [f(x + d) + f(x - d)]/2 - f(x) is even,

which cannot cancel on average. What is reported is the root mean square of the change, u^2 = <first^2> + <second^2>:
the standard uncertainty where f follows x in a straight line, and an honest size of the change, its mean included,
where it does not. Each mean is had in one of two ways:

- *Differences*: <first^2> is the sum of first(u_k)^2, one input k at a time off by its standard uncertainty u_k. This
  is the law of propagation with the derivatives taken over the uncertainty itself. <second^2> takes a few runs with all
  inputs off at once, because products of two inputs show in no run where one is off alone. A single input needs none:
  second grows with the square of d, and the mean fourth power of a normal deviate is 3.
- *Monte Carlo*, where the inputs are so many that this is less work: both are means over draws of d, taken with both
  signs. The error of these means is `stat` of the uncertainty.

Differences between runs with the same settings lose the numerical error that the runs have in common: most of that of
the steps, little of that of a heavy truncation.

References
----------
JCGM 100:2008, Guide to the expression of uncertainty in measurement, 5.1.2 eq. (10) with its note on second order, and
5.1.3 note 2 (differences over the standard uncertainty); JCGM 101:2008, 6.4.7 (normal deviates) and 7 (Monte Carlo)
(clauses from memory). J. M. Hammersley and K. W. Morton, Proc. Camb. Philos. Soc. 52, 449 (1956): draws with both signs
(from memory).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from anneal_ref.base.errors import InputError
from anneal_ref.base.estimate import Estimate
from anneal_ref.observe.evaluating import evaluate
from anneal_ref.observe.moments import Moments

Pair = tuple[Moments, Moments]
Observable = Callable[[Moments], ArrayLike]

_FOURTH = 3.0  # mean fourth power of a standard normal deviate
_BENT = 0.3  # second order over first order up to which the straight line misses less than 5 % of the uncertainty


@dataclass(frozen=True, slots=True, eq=False)
class InputEffect:
    """The runs that show what one kind of input does.

    Parameters
    ----------
    name : str
        As in `InputUncertainty`.
    stated : str
        Its stated standard uncertainty, to be read.
    n_inputs : int
        How many independent numbers it is.
    centre : Moments
        At the best values.
    alone : tuple of pairs of Moments
        One input off by its standard uncertainty, up and down, for each of them; empty with Monte Carlo.
    joint : tuple of pairs of Moments
        All inputs off at once by random multiples, with both signs; empty where there is only one.
    """

    name: str
    stated: str
    n_inputs: int
    centre: Moments
    alone: tuple[Pair, ...]
    joint: tuple[Pair, ...]

    @property
    def method(self) -> str:
        """Either "differences" or "Monte Carlo"."""
        return "differences" if self.alone else "Monte Carlo"

    @property
    def n_runs(self) -> int:
        """Number of evolutions."""
        return 2 * (len(self.alone) + len(self.joint))

    @property
    def weight(self) -> float:
        """How many times the numerical error of a run may enter an uncertainty, if nothing of it cancels.

        Half the difference of two runs is off by no more than a run is; such errors add in quadrature over the inputs.
        """
        return float(max(len(self.alone), 1) ** 0.5)

    def changes(self, f: Observable) -> NDArray[np.float64]:
        """Return by how much f rises for each input that is off by plus its standard uncertainty.

        To first order, with its sign; it tells which way f goes, and how inputs of different names would add up if they
        moved together.

        Returns
        -------
        ndarray, shape (n_inputs, ...)

        Raises
        ------
        InputError
            Monte Carlo does not tell the inputs apart.
        """
        if not self.alone:
            raise InputError(
                f"{self.name} were taken all at once, by Monte Carlo; for the change by each take at least "
                f"draws={self.n_inputs + len(self.joint)}"
            )
        return self._halves(self.alone, f)[0]

    def uncertainty(self, f: Observable, pooled: bool = False) -> Estimate:
        """Return the root mean square change of f by this input.

        Parameters
        ----------
        f : callable
            A plain function of `Moments`.
        pooled : bool
            One number for all entries of f, the root of the sum of their squares.

        Returns
        -------
        Estimate
            `stat` is the error from the finite number of draws; `num` is not measured, see `UncertaintyBudget.effect`.
        """
        first, second, drawn = self._squares(f, pooled)
        square = first + second
        root = np.sqrt(square)
        spread = np.std(drawn, axis=0, ddof=1) / len(drawn) ** 0.5 if len(drawn) > 1 else np.zeros_like(square)
        # where nothing changes the error of the root is 0, too
        stat = np.divide(spread, 2 * root, out=np.zeros_like(root), where=root > 0)
        return Estimate(root, stat, how="uncertainty of inputs")

    def is_straight(self, f: Observable, floor: float) -> bool:
        """Return whether the law of propagation is good: second order small against first order over all entries of f.

        Parameters
        ----------
        f : callable
        floor : float
            Root of the sum of squares over the entries below which a change is numerical error.
        """
        first, second, _ = self._squares(f, pooled=True)
        return bool(np.sqrt(second) <= max(_BENT * np.sqrt(first), floor))

    def _squares(
        self, f: Observable, pooled: bool
    ) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
        """Return <first^2>, <second^2>, and the part of their sum that was drawn, draw by draw."""

        def squares(pairs: tuple[Pair, ...]) -> list[NDArray[np.float64]]:
            halves = self._halves(pairs, f)
            return [np.sum(half**2, axis=tuple(range(1, half.ndim))) if pooled else half**2 for half in halves]

        if not self.joint:
            first, second = squares(self.alone)
            return first.sum(axis=0), _FOURTH * second.sum(axis=0), second[:0]
        first, second = squares(self.joint)
        if not self.alone:
            return first.mean(axis=0), second.mean(axis=0), first + second
        return squares(self.alone)[0].sum(axis=0), second.mean(axis=0), second

    def _halves(self, pairs: tuple[Pair, ...], f: Observable) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        centre = evaluate(f, self.centre)
        up, down = ([evaluate(f, pair[side]) for pair in pairs] for side in (0, 1))
        if any(value.shape != centre.shape or not np.isfinite(value).all() for value in (centre, *up, *down)):
            raise InputError("f must give finite numbers of one shape for the moments of every run; got something else")
        above, below = np.array(up), np.array(down)
        return (above - below) / 2, (above + below) / 2 - centre

    def __repr__(self) -> str:
        """Return name, size and method in angle brackets."""
        return f"<InputEffect {self.name} {self.stated}: {self.method}, {self.n_runs} runs>"
