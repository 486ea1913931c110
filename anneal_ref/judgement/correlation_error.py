"""The correlation error of samples against the truth, freed of shot noise, with an interval that holds down to 0."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from anneal_ref.base.checks import signs
from anneal_ref.base.errors import InputError
from anneal_ref.base.estimate import Estimate
from anneal_ref.judgement.squared_distance import SquaredDistance, connected_distance, pair_distance
from anneal_ref.observe.clusters import Clusters
from anneal_ref.observe.moments import Moments

ONE_SIGMA = 0.6826894921370859


@dataclass(frozen=True, slots=True, eq=False)
class CorrelationError:
    """eps with eps^2 = sum_(i<j) (c - t)^2 / sum_(i<j) t^2, of one set of samples or pooled over several.

    It is kept as numerator and denominator, so that an ensemble is the ratio of the summed squares.

    Parameters
    ----------
    distance : SquaredDistance
        The numerator, freed of the noise of shots and of gauges.
    truth_squares : float
        The denominator.
    num : float
        Root of the sum of the squared numerical bounds of the true correlations; `nan` where they were not measured.
        It enters linearly: in the worst case every true correlation lies at its bound.
    """

    distance: SquaredDistance
    truth_squares: float
    num: float

    @property
    def squared(self) -> float:
        """The unbiased eps^2; it may come out negative."""
        return self.distance.value / self.truth_squares

    @property
    def value(self) -> float:
        """The root of |eps^2| with the sign of eps^2; negative means less than noise alone would give on average."""
        return float(np.sign(self.squared) * np.sqrt(abs(self.squared)))

    @property
    def raw(self) -> float:
        """The plain eps, noise included; for perfect samples it is the noise floor, not 0."""
        return float(np.sqrt(self.distance.raw / self.truth_squares))

    def upper(self, level: float) -> float:
        """Return a one-sided upper bound on the true eps, the truth's numerical error included."""
        room = np.sqrt(self.truth_squares) - self.num
        if room <= 0:
            return float("inf")
        return float((np.sqrt(self.distance.upper(level)) + self.num) / room)

    def lower(self, level: float) -> float:
        """Return a one-sided lower bound on the true eps, at least 0."""
        root = np.maximum(np.sqrt(self.distance.lower(level)) - self.num, 0.0)
        return float(root / (np.sqrt(self.truth_squares) + self.num))

    def interval(self, level: float = 0.95) -> tuple[float, float]:
        """Return a two-sided interval of the true eps; both ends are at least 0 even where the value is negative."""
        side = 0.5 + level / 2
        return self.lower(side), self.upper(side)

    def edges(self, limit: float) -> tuple[float, float]:
        """Return the squared distance up to which the limit is kept, and the one beyond which it is exceeded."""
        norm = np.sqrt(self.truth_squares)
        accepting = max(limit * (norm - self.num) - self.num, 0.0) ** 2
        return float(accepting), float((limit * (norm + self.num) + self.num) ** 2)

    def estimate(self) -> Estimate:
        """Return the value with its errors; `stat` is half the 68 % interval, since the law of eps is not gaussian."""
        side = 0.5 + ONE_SIGMA / 2
        low, high = np.sqrt(self.distance.lower(side)), np.sqrt(self.distance.upper(side))
        norm = np.sqrt(self.truth_squares)
        return Estimate(self.value, (high - low) / (2 * norm), self.num * (1 + abs(self.value)) / norm, "samples")

    @classmethod
    def total(cls, errors: Sequence[CorrelationError]) -> CorrelationError:
        """Return the correlation error pooled over independent sets of samples: the ratio of the summed squares."""
        if not errors:
            raise InputError("a pooled correlation error takes at least one; got none")
        return cls(
            SquaredDistance.total([one.distance for one in errors]),
            float(sum(one.truth_squares for one in errors)),
            float(np.sqrt(sum(one.num**2 for one in errors))),
        )


def correlation_error(
    spins: ArrayLike,
    truth: Moments,
    groups: ArrayLike | None = None,
    connected: bool = False,
    scatter: NDArray[np.float64] | None = None,
) -> CorrelationError:
    """Return the correlation error of samples.

    The noise of a finite number of shots is subtracted: for independent shots, sum (1 - c^2)/(n - 1). With groups
    (gauges, batches) the noise of a finite number of groups is subtracted too, by comparing shots of different groups
    only: what is estimated is then the error that all gauges have in common, and gauges that scatter widely show as
    a wide interval rather than as an error.

    Parameters
    ----------
    spins : array_like of +1 and -1, shape (shots, n_sites)
    truth : Moments
        Values and measured numerical errors of the truth.
    groups : array_like of int, shape (shots,), optional
        Shots of one group are not independent of each other.
    connected : bool
        Score <Z_i Z_j> - <Z_i><Z_j>; for instances with fields.
    scatter : ndarray, shape (n_pairs, n_pairs), optional
        Covariance for one shot of the truth, of the products Z_i Z_j or of the centred ones: a lower bound never rests
        on less noise than this makes.

    Raises
    ------
    InputError
        Shapes that do not fit, fewer than two shots, a truth without any correlation.

    Examples
    --------
    >>> truth = Moments.of([0, 0, 0], [[1, 0.5, 0.3], [0.5, 1, 0.6], [0.3, 0.6, 1]])
    >>> spins = [[1, 1, 1], [-1, -1, -1], [1, 1, 1], [1, 1, -1], [-1, 1, 1], [-1, -1, 1], [1, 1, 1], [1, -1, -1]]
    >>> error = correlation_error(spins, truth)
    >>> round(error.raw, 3), round(error.squared, 3)     # all of it may be shot noise
    (0.378, -0.367)
    """
    array = signs("spins", spins, (None, truth.n_sites))
    clusters = Clusters.of(len(array), groups)
    target, num = target_correlations(truth, connected)
    first, second = np.triu_indices(truth.n_sites, 1)
    squares = float(np.sum(target[first, second] ** 2))
    if squares == 0:
        raise InputError("the truth has no correlations, so that an error relative to them means nothing")
    measure = connected_distance if connected else pair_distance
    distance = measure(array, target, clusters, scatter)
    return CorrelationError(distance, squares, float(np.sqrt(np.sum(num[first, second] ** 2))))


def target_correlations(truth: Moments, connected: bool) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return the true correlations that are scored and their numerical errors, shape (n_sites, n_sites) each."""
    z, zz = truth.z, truth.zz
    if not connected:
        return zz.value, zz.num
    cross = np.outer(np.abs(z.value), z.num)
    return zz.value - np.outer(z.value, z.value), zz.num + cross + cross.T
