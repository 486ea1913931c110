"""A perfect processor: what the truth itself would give with the same shots. Every noise floor comes from here."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from anneal_ref.base.estimate import Estimate


@dataclass(frozen=True, slots=True, eq=False)
class Perfect:
    """A distribution over spin configurations to draw repeated experiments from.

    Parameters
    ----------
    spins : ndarray of +1 and -1, shape (n_states, n_sites)
        All basis states, or stored samples of the truth.
    weights : ndarray, shape (n_states,)
        Their probabilities.
    """

    spins: NDArray[np.int8]
    weights: NDArray[np.float64]

    @classmethod
    def of_probabilities(cls, probabilities: NDArray[np.float64]) -> Perfect:
        """Return the distribution over all basis states, site 0 being the least significant bit of the index."""
        n_sites = len(probabilities).bit_length() - 1
        index = np.arange(len(probabilities))
        spins = (1 - 2 * ((index[:, None] >> np.arange(n_sites)) & 1)).astype(np.int8)
        return cls(spins, probabilities / probabilities.sum())

    @classmethod
    def of_samples(cls, spins: NDArray[np.int8]) -> Perfect:
        """Return the distribution that draws stored samples with replacement; its own moments count as the truth."""
        return cls(spins, np.full(len(spins), 1 / len(spins)))

    def mean(self, values: NDArray[np.float64]) -> float:
        """Return the mean of a quantity given for each state."""
        return float(self.weights @ values)

    def variance(self, values: NDArray[np.float64]) -> float:
        """Return the variance of a quantity given for each state, for one shot."""
        return float(self.weights @ (values - self.mean(values)) ** 2)

    def moments(self) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Return <Z_i> and <Z_i Z_j>."""
        states = self.spins.astype(np.float64)
        return self.weights @ states, (states.T * self.weights) @ states

    def scatter(self, connected: bool) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Return the covariance for one shot of the Z_i, and that of the Z_i Z_j, i < j, centred if `connected`."""
        first, second = np.triu_indices(self.spins.shape[1], 1)
        states, mean = self.spins.astype(np.float64), self.moments()[0]
        pairs = states - mean if connected else states
        return self._covariance(states), self._covariance(pairs[:, first] * pairs[:, second])

    def _covariance(self, values: NDArray[np.float64]) -> NDArray[np.float64]:
        away = values - self.weights @ values
        return np.asarray((away.T * self.weights) @ away)

    def experiments(
        self, shots: int, replicas: int, seed: list[int]
    ) -> Iterator[tuple[NDArray[np.float64], NDArray[np.float64]]]:
        """Give measured <Z_i> and <Z_i Z_j> of repeated experiments with the given number of shots."""
        rng = np.random.default_rng(seed)
        states = self.spins.astype(np.float32)
        cumulative = np.cumsum(self.weights)
        for _ in range(replicas):
            if shots < len(states):
                drawn = states[np.searchsorted(cumulative, rng.random(shots) * cumulative[-1], side="right")]
                yield drawn.sum(axis=0) / shots, (drawn.T @ drawn) / shots
            else:
                counts = rng.multinomial(shots, self.weights).astype(np.float64)
                seen = counts > 0
                drawn, times = self.spins[seen].astype(np.float64), counts[seen]
                yield times @ drawn / shots, (drawn.T * times) @ drawn / shots


@dataclass(frozen=True, slots=True, eq=False)
class NoiseFloor:
    """Correlation errors of a perfect processor with the same number of independent shots, one for each repetition.

    Parameters
    ----------
    raw, unbiased : ndarray, shape (replicas,)
        Numerators: plain sums of squares, and the same with the shot noise subtracted.
    truth_squares : float
        Denominator.
    """

    raw: NDArray[np.float64]
    unbiased: NDArray[np.float64]
    truth_squares: float

    @property
    def raw_mean(self) -> float:
        """Root mean square of the plain eps: the level at which shots alone drown any smaller error."""
        return float(np.sqrt(self.raw.mean() / self.truth_squares))

    @property
    def raw_quantile(self) -> float:
        """95 % quantile of the plain eps."""
        return float(np.sqrt(np.quantile(self.raw, 0.95) / self.truth_squares))

    @property
    def mean(self) -> float:
        """Mean of the unbiased eps^2, as a signed root; 0 but for the finite number of repetitions."""
        mean = self.unbiased.mean() / self.truth_squares
        return float(np.sign(mean) * np.sqrt(abs(mean)))

    @property
    def quantile(self) -> float:
        """95 % quantile of the unbiased eps: a perfect processor comes out below it in 95 of 100 experiments."""
        value = np.quantile(self.unbiased, 0.95) / self.truth_squares
        return float(np.sign(value) * np.sqrt(abs(value)))

    def estimate(self) -> Estimate:
        """Return the 95 % quantile of the unbiased eps, with the error that the finite number of repetitions leaves."""
        ordered = np.sort(self.unbiased)
        count = len(ordered)
        spread = np.sqrt(0.95 * 0.05 * count)
        ends = ordered[[int(0.95 * count - spread), min(int(np.ceil(0.95 * count + spread)), count - 1)]]
        low, high = np.sign(ends) * np.sqrt(np.abs(ends) / self.truth_squares)
        return Estimate(self.quantile, (high - low) / 2, 0.0, "perfect processor, 95 % quantile")

    @classmethod
    def total(cls, floors: list[NoiseFloor]) -> NoiseFloor:
        """Return the floor of a pooled correlation error, from floors with equal numbers of independent repetitions."""
        return cls(
            np.sum([floor.raw for floor in floors], axis=0),
            np.sum([floor.unbiased for floor in floors], axis=0),
            float(sum(floor.truth_squares for floor in floors)),
        )


@dataclass(frozen=True, slots=True, eq=False)
class Repetitions:
    """What a perfect processor measures in repeated experiments with the same number of independent shots.

    Parameters
    ----------
    floor : NoiseFloor
        Correlation errors.
    magnetisation : ndarray, shape (replicas,)
        Unbiased mean square over sites of the difference in <Z>.
    order_parameter : ndarray, shape (replicas,)
        Unbiased q2.
    """

    floor: NoiseFloor
    magnetisation: NDArray[np.float64]
    order_parameter: NDArray[np.float64]


def repeat(perfect: Perfect, shots: int, seed: list[int], connected: bool = False, replicas: int = 400) -> Repetitions:
    """Simulate a perfect processor.

    Parameters
    ----------
    perfect : Perfect
    shots : int
        Of each experiment; at least 2.
    seed : list of int
    connected : bool
        Score connected correlations.
    replicas : int
        Number of experiments.
    """
    first, second = np.triu_indices(perfect.spins.shape[1], 1)
    true_z, true_zz = perfect.moments()
    truth = (true_zz - np.outer(true_z, true_z) if connected else true_zz)[first, second]
    raw, unbiased, magnetisation, order = np.empty((4, replicas))
    for k, (z, zz) in enumerate(perfect.experiments(shots, replicas, seed)):
        c = zz[first, second]
        plain = (1 - c**2) / (shots - 1)
        order[k] = np.mean(c**2 - plain)
        magnetisation[k] = np.mean((z - true_z) ** 2 - (1 - z**2) / (shots - 1))
        noise = plain
        if connected:
            mi, mj = z[first], z[second]
            c = (c - mi * mj) * shots / (shots - 1)
            # the variance of (s_i - m_i)(s_j - m_j), since s^2 = 1
            noise = ((1 - mi**2) * (1 - mj**2) + 4 * mi * mj * c - c**2) / (shots - 1)
        raw[k] = np.sum((c - truth) ** 2)
        unbiased[k] = raw[k] - np.sum(noise)
    return Repetitions(NoiseFloor(raw, unbiased, float(np.sum(truth**2))), magnetisation, order)
