"""Which shots belong together: clusters of shots (gauges, batches) are the independent units of every error here."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from anneal_ref.base.checks import finite, integer
from anneal_ref.base.errors import InputError

FEW = 16
"""Below this number of clusters an interval made of their scatter is wide, and itself known to 18 % at best."""


@dataclass(frozen=True, slots=True, eq=False)
class Clusters:
    """A partition of the shots into independent units.

    Gauges and batches may differ systematically. Treated as draws from a population of gauges, their scatter is a noise
    that more shots in the same gauges do not remove; only pairs of shots from *different* clusters tell about what all
    of them have in common. Without groups, or with one group only, each shot is a unit.

    Parameters
    ----------
    order : ndarray of int, shape (shots,)
        Shots, cluster after cluster.
    sizes : ndarray of int, shape (n_clusters,)
        Number of shots in each cluster.
    """

    order: NDArray[np.intp]
    sizes: NDArray[np.intp]

    @classmethod
    def of(cls, shots: int, groups: ArrayLike | None = None) -> Clusters:
        """Return the clusters of `shots` shots, from a label for each shot or none.

        Raises
        ------
        InputError
            Fewer than two shots, or labels that do not fit.

        Examples
        --------
        >>> Clusters.of(5, [7, 7, 3, 3, 3]).sizes
        array([3, 2])
        """
        shots = integer("shots", shots)
        if shots < 2:
            raise InputError(f"an error takes at least 2 shots; got {shots}")
        if groups is not None:
            labels = finite("groups", groups, (shots,))
            _, code, sizes = np.unique(labels, return_inverse=True, return_counts=True)
            if 1 < len(sizes) < shots:
                return cls(np.argsort(code, kind="stable"), sizes.astype(np.intp))
        return cls(np.arange(shots), np.ones(shots, dtype=np.intp))

    @property
    def shots(self) -> int:
        """Number of shots."""
        return len(self.order)

    @property
    def independent(self) -> bool:
        """Whether each shot is a unit of its own."""
        return len(self.sizes) == len(self.order)

    @property
    def spread(self) -> float:
        """Share of the ordered pairs of shots, a shot with itself included, that join different clusters."""
        return 1.0 - float(np.sum(self.sizes.astype(float) ** 2)) / self.shots**2

    @property
    def freedom(self) -> float:
        """Effective number of clusters minus one."""
        return self.spread / (1.0 - self.spread)

    def __len__(self) -> int:
        """Return the number of clusters."""
        return len(self.sizes)

    def __iter__(self) -> Iterator[NDArray[np.intp]]:
        """Give the shots of each cluster."""
        yield from np.split(self.order, np.cumsum(self.sizes)[:-1])

    def left_out(self) -> Iterator[NDArray[np.intp]]:
        """Give the shots outside each cluster."""
        edges = np.concatenate(([0], np.cumsum(self.sizes)))
        for low, high in zip(edges[:-1], edges[1:], strict=True):
            yield np.concatenate((self.order[:low], self.order[high:]))

    def sums(self, values: NDArray[np.float64]) -> NDArray[np.float64]:
        """Return the sum over each cluster of an array with one row for each shot, shape (n_clusters, ...)."""
        if self.independent:
            return values
        starts = np.concatenate(([0], np.cumsum(self.sizes)[:-1]))
        return np.asarray(np.add.reduceat(values[self.order], starts, axis=0))

    def error_of_mean(self, values: NDArray[np.float64]) -> NDArray[np.float64]:
        """Return the standard error of the mean over all shots of one or more columns of values, shape (shots, ...)."""
        centred = self.sums(values - values.mean(axis=0))
        return np.asarray(np.sqrt(np.sum(centred**2, axis=0) / (self.shots**2 * self.spread)))
