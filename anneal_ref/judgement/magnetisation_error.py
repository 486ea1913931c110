"""The error of the magnetisations <Z_i>, freed of shot noise: what connected correlations cannot see."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from anneal_ref.base.errors import InputError
from anneal_ref.base.estimate import Estimate
from anneal_ref.judgement.correlation_error import ONE_SIGMA
from anneal_ref.judgement.squared_distance import SquaredDistance, site_distance
from anneal_ref.observe.clusters import Clusters


@dataclass(frozen=True, slots=True, eq=False)
class MagnetisationError:
    """Root mean square over sites of (measured <Z> - true <Z>), of one set of samples or pooled over several.

    Parameters
    ----------
    distance : SquaredDistance
        Sum over sites of the squared difference, freed of the noise of shots and of gauges.
    n_sites : int
        Number of sites, over all instances.
    num : float
        Root of the sum of the squared numerical bounds of the true <Z>. It enters linearly: in the worst case every
        true <Z> lies at its bound.
    """

    distance: SquaredDistance
    n_sites: int
    num: float

    @property
    def value(self) -> float:
        """The root of the absolute mean square, with its sign; negative means less than noise gives on average."""
        square = self.distance.value / self.n_sites
        return float(np.sign(square) * np.sqrt(abs(square)))

    def upper(self, level: float) -> float:
        """Return a one-sided upper bound on the true error, the truth's numerical error included."""
        return float((np.sqrt(self.distance.upper(level)) + self.num) / np.sqrt(self.n_sites))

    def lower(self, level: float) -> float:
        """Return a one-sided lower bound on the true error, at least 0."""
        return float(max(np.sqrt(self.distance.lower(level)) - self.num, 0.0) / np.sqrt(self.n_sites))

    def interval(self, level: float = 0.95) -> tuple[float, float]:
        """Return a two-sided interval of the true error; both ends are at least 0."""
        side = 0.5 + level / 2
        return self.lower(side), self.upper(side)

    def edges(self, limit: float) -> tuple[float, float]:
        """Return the squared distance up to which the limit is kept, and the one beyond which it is exceeded."""
        length = limit * np.sqrt(self.n_sites)
        return float(max(length - self.num, 0.0) ** 2), float((length + self.num) ** 2)

    def estimate(self) -> Estimate:
        """Return the value with its errors; `stat` is half the 68 % interval, since the law is not gaussian."""
        side = 0.5 + ONE_SIGMA / 2
        low, high = np.sqrt(self.distance.lower(side)), np.sqrt(self.distance.upper(side))
        norm = np.sqrt(self.n_sites)
        return Estimate(self.value, (high - low) / (2 * norm), self.num / norm, "samples")

    @classmethod
    def total(cls, errors: Sequence[MagnetisationError]) -> MagnetisationError:
        """Return the error pooled over the sites of independent sets of samples."""
        if not errors:
            raise InputError("a pooled magnetisation error takes at least one; got none")
        return cls(
            SquaredDistance.total([one.distance for one in errors]),
            sum(one.n_sites for one in errors),
            float(np.sqrt(sum(one.num**2 for one in errors))),
        )


def magnetisation_error(
    spins: NDArray[np.int8], truth: Estimate, clusters: Clusters, scatter: NDArray[np.float64] | None = None
) -> MagnetisationError:
    """Return the magnetisation error of samples.

    Parameters
    ----------
    spins : ndarray of +1 and -1, shape (shots, n_sites)
    truth : Estimate, shape (n_sites,)
        True <Z_i> with their numerical errors measured.
    clusters : Clusters
        Which shots belong together.
    scatter : ndarray, shape (n_sites, n_sites), optional
        Covariance of the Z_i for one shot of the truth: a lower bound never rests on less noise than this makes.

    Examples
    --------
    >>> spins = np.array([[1, 1], [1, -1], [1, 1], [-1, -1]], dtype=np.int8)
    >>> error = magnetisation_error(spins, Estimate([-1.0, 0.0], 0.0, 0.0), Clusters.of(4))
    >>> round(error.value, 3)          # sqrt((1.5^2 - 0.25 - 1/3) / 2): the noise of four shots is taken out
    0.913
    """
    return MagnetisationError(
        site_distance(spins, truth.value, clusters, scatter), len(truth.value), float(np.sqrt(np.sum(truth.num**2)))
    )
