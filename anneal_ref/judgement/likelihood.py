"""Log-likelihood per shot under the truth, beside what a perfect processor would score."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import special

from anneal_ref.base.estimate import Estimate, Score
from anneal_ref.observe.clusters import Clusters

MIXTURE = 1e-6
"""Share of uniformly random shots that is mixed into the truth before the logarithm."""


def tempered(log_probability: NDArray[np.float64], n_sites: int) -> NDArray[np.float64]:
    """Return the logarithm of the truth with a share of 1e-6 of uniformly random shots mixed in.

    A single shot in a state whose true probability is 0, or so small that the numerical error exceeds it, would
    otherwise decide the mean alone. The mixture bounds it at log(1e-6) - n log 2; perfect samples score by the same
    rule, so that the comparison stays exact.
    """
    return np.asarray(np.logaddexp(np.log1p(-MIXTURE) + log_probability, np.log(MIXTURE) - n_sites * np.log(2.0)))


def outside(log_probability: NDArray[np.float64], n_sites: int) -> int:
    """Return the number of shots in states that the truth gives less than the uniform part of the mixture does."""
    return int(np.sum(log_probability < np.log(MIXTURE) - n_sites * np.log(2.0)))


def cautious(
    z: float, measured: float, shots: int, log_probability: NDArray[np.float64], weights: NDArray[np.float64]
) -> float:
    """Return a departure downwards in standard errors, not beyond what the tail of the truth bears out.

    A frozen truth has rare states far less likely than the rest; a single such shot, which a perfect processor gives
    now and then, lies many standard errors off. The chance of a mean as low as the measured one is at most
    exp(-shots R), with R the largest over k of k x - log E[p^-k], x minus the measured mean; the departure is at most
    the root of 2 shots R, which is the same thing for a gaussian law.

    Parameters
    ----------
    z : float
    measured : float
        Mean over the shots.
    shots : int
    log_probability, weights : ndarray, shape (n_states,)
        Of each state, as in `log_likelihood`, and its probability under the truth.

    References
    ----------
    H. Chernoff, Ann. Math. Stat. 23, 493 (1952).
    """
    if z >= 0:
        return z

    def rate(power: float) -> float:
        return power * -measured - float(special.logsumexp(-power * log_probability, b=weights))

    # any power gives a valid bound, so that the ends of the search need not be exact
    best = max(rate(float(power)) for power in np.geomspace(1e-4, 20.0, 200))
    return -min(-z, float(np.sqrt(2 * shots * max(best, 0.0))))


def log_likelihood(
    measured: NDArray[np.float64], expected: Estimate, deviation: float, clusters: Clusters, level: float = 0.95
) -> tuple[Score, float]:
    """Return the mean log-likelihood per shot and by how many standard errors it departs from a perfect processor's.

    Parameters
    ----------
    measured : ndarray, shape (shots,)
        Tempered log-probability of each measured shot; natural logarithm.
    expected : Estimate
        Its mean under the truth: minus the entropy, but for the mixture. `stat` if it comes from stored samples.
    deviation : float
        Its standard deviation for one shot under the truth.
    clusters : Clusters
    level : float

    Returns
    -------
    Score
        In nats per shot; the floor is the expected value, its `stat` the scatter of a perfect processor.
    float
        (measured - expected) over the standard error that a perfect processor with the same shots has. Negative where
        the processor visits states that are less likely than it should.
    """
    shots = len(measured)
    value = float(measured.mean())
    stat = float(clusters.error_of_mean(measured))
    scatter = float(np.hypot(deviation / np.sqrt(shots), expected.stat))
    half = float(special.stdtrit(clusters.freedom, 0.5 + level / 2)) * stat
    floor = Estimate(float(expected), scatter, expected.num, "perfect processor")
    # all true probabilities equal: every shot scores the same, and there is nothing to tell
    z = (value - float(expected)) / scatter if scatter > 1e-12 * max(1.0, abs(value)) else 0.0
    score = Score(
        "log_likelihood",
        Estimate(value, stat, 0.0, "samples"),
        value - half,
        value + half,
        level,
        floor,
        unit="nats per shot",
    )
    return score, z
