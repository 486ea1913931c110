"""`fit_growth`: how the matching bond dimension grows with the size, and what it would cost further out."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import special

from anneal_ref.backends.memory import readable_bytes
from anneal_ref.base.checks import finite, number, positive
from anneal_ref.base.errors import InputError
from anneal_ref.judgement.matching import MATCHED, Matching
from anneal_ref.model.anneal import Anneal
from anneal_ref.truth.prediction import full_dimension, plan_of

FEWEST = 3
"""Different sizes that a fit takes."""

ENOUGH = 5
"""Matchings that a comparison of two laws takes; below, the corrected criterion does not exist."""

CLEAR = 0.95
"""Akaike weight of the better law from which on the data tell the two apart: 5.9 units of the criterion."""

_PARAMETERS = 3  # two of the law, and the scatter
_EXACT = 1e-24  # mean square of the logarithm that counts as no scatter


@dataclass(frozen=True, slots=True)
class GrowthLaw:
    """One law, fitted to logarithms by least squares.

    Parameters
    ----------
    kind : str
        "exponential": D = exp(intercept + slope x), or "power": D = exp(intercept) x^slope, with x the size.
    intercept, slope : float
    scatter : float
        Standard deviation of ln D about the law.
    aicc : float
        Akaike's information criterion with the correction for few data; nan for fewer than five matchings.
    abscissae : tuple of float
        The sizes, or their logarithms.
    """

    kind: str
    intercept: float
    slope: float
    scatter: float
    aicc: float
    abscissae: tuple[float, ...]

    def at(self, size: float, level: float = 0.95) -> tuple[float, float, float]:
        """Return the bond dimension at a size, and the interval in which that of a new size lies if the law holds."""
        x = math.log(size) if self.kind == "power" else float(size)
        places = np.array(self.abscissae)
        away = places - places.mean()
        width = self.scatter * math.sqrt(1 + 1 / len(places) + (x - places.mean()) ** 2 / float(away @ away))
        half = float(special.stdtrit(len(places) - 2, 0.5 + level / 2)) * width
        middle = self.intercept + self.slope * x
        return _exp(middle), _exp(middle - half), _exp(middle + half)

    def __str__(self) -> str:
        """Return the law with its numbers."""
        if self.kind == "power":
            return f"power law: {_exp(self.intercept):.3g} x^{self.slope:.3g}"
        return f"exponential: {_exp(self.intercept):.3g} exp({self.slope:.3g} x)"


@dataclass(frozen=True, slots=True)
class GrowthCost:
    """What the matching bond dimension costs at another size, if one law holds.

    Parameters
    ----------
    kind : str
        The law.
    bond_dimension, low, high : float
        With its interval; no larger than what represents any state of so many spins.
    seconds, bytes : float
        Of one run, at `bond_dimension`; on the machine of the studies, from the cost model and the pace measured there.
    joules : float
        Energy of one run; nan where no power was given.
    """

    kind: str
    bond_dimension: float
    low: float
    high: float
    seconds: float
    bytes: float
    joules: float

    def __str__(self) -> str:
        """Return one readable line."""
        text = (
            f"{self.kind}: bond dimension {self.bond_dimension:.3g} ({self.low:.3g} to {self.high:.3g}), "
            f"{self.seconds:.2g} s, {readable_bytes(int(self.bytes))}"
        )
        return text if math.isnan(self.joules) else f"{text}, {self.joules:.2g} J"


@dataclass(frozen=True, slots=True, eq=False)
class Growth:
    """Matching bond dimensions against size, with the two laws that they may follow.

    Parameters
    ----------
    sizes, bond_dimensions : ndarray, shape (k,)
        Of those that lie within their ladders.
    exponential, power : GrowthLaw
    left_out : tuple of str
        A sentence for each that does not.
    matchings : tuple of Matching
        In the order of `sizes`.
    """

    sizes: NDArray[np.float64]
    bond_dimensions: NDArray[np.float64]
    exponential: GrowthLaw
    power: GrowthLaw
    left_out: tuple[str, ...]
    matchings: tuple[Matching, ...]

    @property
    def difference(self) -> float:
        """AICc of the exponential law minus that of the power law; nan for fewer than five matchings."""
        return self.exponential.aicc - self.power.aicc

    @property
    def weight(self) -> float:
        """Akaike weight of the better of the two laws; nan for fewer than five matchings."""
        return float(special.expit(abs(self.difference) / 2))

    @property
    def verdict(self) -> str:
        """Either "exponential", "power", or "cannot tell"."""
        if not self.weight >= CLEAR:
            return "cannot tell"
        return "exponential" if self.difference < 0 else "power"

    def cost(self, anneal: Anneal, watts: float | None = None, size: float | None = None) -> tuple[GrowthCost, ...]:
        """Return what the matching bond dimension of another anneal would cost, under either law.

        Parameters
        ----------
        anneal : Anneal
            Of the size in question; it is planned, not solved.
        watts : float, optional
            Power of the machine under load.
        size : float, optional
            On the scale of `sizes`; by default the number of spins.

        Returns
        -------
        tuple of two GrowthCost
            The exponential law first. Where the verdict is "cannot tell" both are to be reported.
        """
        x = positive("size", anneal.n_sites if size is None else size)
        power = math.nan if watts is None else number("watts", watts, 0.0)
        largest = self.matchings[int(self.sizes.argmax())]
        full = full_dimension(anneal.n_sites)
        costs = []
        for law in (self.exponential, self.power):
            middle, low, high = (min(one, full) for one in law.at(x))
            plan = plan_of(anneal, largest.backend, max(math.ceil(middle), 1), 0, largest.bond_dimensions[-1])
            seconds = plan.seconds * largest.pace
            costs.append(GrowthCost(law.kind, middle, low, high, seconds, plan.bytes, seconds * power))
        return tuple(costs)

    def __str__(self) -> str:
        """Return the sizes, the two laws, and whether the data tell them apart."""
        pairs = ", ".join(f"{d:.3g} at {x:g}" for x, d in zip(self.sizes, self.bond_dimensions, strict=True))
        lines = [f"growth of the matching bond dimension: {pairs}"]
        for law in (self.exponential, self.power):
            aicc = "" if math.isnan(law.aicc) else f", AICc {law.aicc:.1f}"
            lines.append(f"  {law}, scatter of the logarithm {law.scatter:.2g}{aicc}")
        if len(self.sizes) < ENOUGH:
            verdict = (
                f"cannot tell the two laws apart: that takes {ENOUGH} matchings or more, there are {len(self.sizes)}"
            )
        elif self.verdict == "cannot tell":
            verdict = f"cannot tell the two laws apart: the better one has an Akaike weight of {self.weight:.2f} only"
        else:
            verdict = f"{self.verdict}: Akaike weight {self.weight:.3f}"
        return "\n".join([*lines, f"  {verdict}", *(f"  left out: {one}" for one in self.left_out)])


def fit_growth(matchings: Sequence[Matching], sizes: ArrayLike | None = None) -> Growth:
    """Fit matching bond dimensions against size with an exponential and with a power law.

    Both are straight lines for the logarithm of the bond dimension, fitted by least squares with equal weights, and are
    compared by the corrected criterion

        AICc = k ln(RSS/k) + 2 p + 2 p (p + 1)/(k - p - 1),    p = 3

    for k matchings. The data tell them apart where the better one has an Akaike weight of 0.95. (In simulations with
    five to ten sizes and a scatter of 5 to 30 % the wrong law was then named in 5 % of all cases or fewer; where two
    units of the criterion were enough, in up to 17 %.) Matchings outside their ladders cannot enter and are named: to
    leave out those above makes the growth look slower than it is.

    Parameters
    ----------
    matchings : sequence of Matching
        Three or more of different sizes within their ladders.
    sizes : array_like, shape (n_matchings,), optional
        Linear sizes, for instance; by default the numbers of spins.

    Returns
    -------
    Growth

    Raises
    ------
    InputError
        Too few different sizes, or sizes that are not positive.

    References
    ----------
    C. M. Hurvich and C.-L. Tsai, Biometrika 76, 297 (1989); K. P. Burnham and D. R. Anderson, Model Selection and
    Multimodel Inference (2002), section 2.9, for the weights.
    """
    given = list(matchings)
    if not given or not all(isinstance(one, Matching) for one in given):
        raise InputError("matchings must be a sequence of Matching, as matching_bond_dimension returns them")
    if sizes is None:
        sizes = [one.n_sites for one in given]
    x = finite("sizes", sizes, (len(given),))
    if np.any(x <= 0):
        raise InputError(f"sizes must be positive; got {x[x <= 0][0]:g}")
    inside = [k for k, one in enumerate(given) if one.outcome == MATCHED]
    left_out = tuple(f"size {x[k]:g}: {one.outcome}" for k, one in enumerate(given) if one.outcome != MATCHED)
    kept = x[inside]
    if len(set(kept.tolist())) < FEWEST:
        raise InputError(
            f"a fit of the growth takes {FEWEST} different sizes within their ladders; got {len(set(kept.tolist()))}"
            + (f" ({'; '.join(left_out)})" if left_out else "")
        )
    dimensions = np.array([given[k].bond_dimension for k in inside])
    laws = [_fitted(kind, kept, dimensions) for kind in ("exponential", "power")]
    return Growth(kept, dimensions, laws[0], laws[1], left_out, tuple(given[k] for k in inside))


def _fitted(kind: str, sizes: NDArray[np.float64], dimensions: NDArray[np.float64]) -> GrowthLaw:
    x, y, k = np.log(sizes) if kind == "power" else sizes, np.log(dimensions), len(sizes)
    away = x - x.mean()
    slope = float(away @ y / (away @ away))
    intercept = float(y.mean() - slope * x.mean())
    squares = float(np.sum((y - intercept - slope * x) ** 2))
    aicc = math.nan
    if k >= ENOUGH:
        p = _PARAMETERS
        aicc = k * math.log(max(squares / k, _EXACT)) + 2 * p + 2 * p * (p + 1) / (k - p - 1)
    return GrowthLaw(kind, intercept, slope, math.sqrt(squares / (k - 2)), aicc, tuple(x.tolist()))


def _exp(x: float) -> float:
    return math.exp(min(x, 700.0))
