"""The scores of `compare`, each beside what a perfect processor attains with the same shots."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray
from scipy import special

from anneal_ref.base.estimate import Estimate, Score
from anneal_ref.judgement.correlation_error import CorrelationError
from anneal_ref.judgement.likelihood import cautious, log_likelihood, outside, tempered
from anneal_ref.judgement.magnetisation_error import MagnetisationError
from anneal_ref.judgement.perfect import NoiseFloor, Perfect, Repetitions
from anneal_ref.judgement.squared_distance import PSEUDO_SHOTS, pair_distance
from anneal_ref.observe.clusters import Clusters
from anneal_ref.observe.observables import problem_energy, q2

if TYPE_CHECKING:
    from anneal_ref.truth.reference import Reference


def correlation_score(error: CorrelationError, floor: NoiseFloor, level: float, disorder: float | None = None) -> Score:
    """Return a correlation error as a score beside its floor."""
    return Score("correlation_error", error.estimate(), *error.interval(level), level, floor.estimate(), disorder)


def energy_score(
    reference: Reference, spins: NDArray[np.int8], clusters: Clusters, perfect: Perfect, level: float
) -> tuple[Score, Estimate]:
    """Return the residual energy per spin with the true value to hold it against.

    Parameters
    ----------
    reference : Reference
    spins : ndarray of +1 and -1, shape (shots, n_sites)
    clusters : Clusters
    perfect : Perfect
    level : float

    Returns
    -------
    Score
        A gap between the best known and the proven ground energy widens the interval; the floor is the true value with
        the scatter of a perfect processor.
    Estimate
        The true value, with its numerical error and without the gap, which the measured value shares.
    """
    instance, ground = reference.anneal.instance, reference.ground
    n = instance.n_sites
    energies = instance.energies(spins)
    # the energy of a random configuration has this variance; it stands behind samples that show no scatter at all
    random = float(np.sum(instance.couplings**2) + np.sum(instance.fields**2))
    stat = np.hypot(float(clusters.error_of_mean(energies)), np.sqrt(PSEUDO_SHOTS * random) / len(spins)) / n
    gap = (float(ground.value) - float(ground.bound)) / n
    value = (float(energies.mean()) - float(ground.value)) / n
    mean = reference.estimate(lambda moments: problem_energy(moments, instance) / n)
    scatter = np.sqrt(perfect.variance(instance.energies(perfect.spins)) / len(spins)) / n
    target = float(mean) - float(ground.value) / n
    half = student(clusters, 0.5 + level / 2) * float(stat)
    score = Score(
        "residual_energy",
        Estimate(value, stat, gap, "samples"),
        value - half - gap,
        value + half + gap,
        level,
        Estimate(target, scatter, float(mean.num), "perfect processor"),
        unit="J per spin",
    )
    return score, Estimate(target, 0.0, mean.num, "reference")


def order_parameter_score(
    reference: Reference, spins: NDArray[np.int8], clusters: Clusters, repetitions: Repetitions, level: float
) -> tuple[Score, Estimate]:
    """Return q2, the mean over pairs i < j of <Z_i Z_j>^2 without the bias of shots, and its true value."""
    n = spins.shape[1]
    pairs, side = n * (n - 1) / 2, 0.5 + level / 2
    distance = pair_distance(spins, np.zeros((n, n)), clusters)
    target = reference.estimate(q2)
    score = Score(
        "order_parameter",
        Estimate(distance.value / pairs, distance.stat() / pairs, 0.0, "samples"),
        distance.lower(side) / pairs,
        distance.upper(side) / pairs,
        level,
        Estimate(target.value, repetitions.order_parameter.std(ddof=1), target.num, "perfect processor"),
    )
    return score, target


def magnetisation_score(error: MagnetisationError, repetitions: Repetitions, level: float) -> Score:
    """Return the magnetisation error as a score; the floor is the 95 % quantile of a perfect processor."""
    floor = Estimate(
        _signed_root(float(np.quantile(repetitions.magnetisation, 0.95))), how="perfect processor, 95 % quantile"
    )
    return Score("magnetisation_error", error.estimate(), *error.interval(level), level, floor)


def likelihood_score(
    reference: Reference, spins: NDArray[np.int8], clusters: Clusters, perfect: Perfect, level: float
) -> tuple[Score, float, int]:
    """Return log-likelihood per shot, its departure in standard errors, and the number of nearly impossible shots."""
    n = spins.shape[1]
    stored = reference.folded is not None
    # beyond the table each call evolves the state, so both sets of spins go in one
    together = reference.log_probability(spins if stored else np.concatenate((spins, perfect.spins)))
    measured = together[: len(spins)]
    with np.errstate(divide="ignore"):
        ideal = tempered(np.log(perfect.weights) if stored else together[len(spins) :], n)
    variance = perfect.variance(ideal)
    stat = 0.0 if stored else np.sqrt(variance / len(ideal))
    expected = Estimate(perfect.mean(ideal), stat, how="reference")
    score, z = log_likelihood(tempered(measured, n), expected, float(np.sqrt(variance)), clusters, level)
    z = cautious(z, float(score.value), len(spins), ideal, perfect.weights)
    return score, z, outside(measured, n)


def student(clusters: Clusters, p: float) -> float:
    """Return a quantile of Student's t with the degrees of freedom that the clusters leave."""
    return float(special.stdtrit(clusters.freedom, p))


def standard_errors(measured: Estimate, target: Estimate) -> float:
    """Return the signed difference beyond the target's numerical error, in standard errors of the measured value."""
    difference = float(measured) - float(target)
    beyond = max(abs(difference) - float(target.num), 0.0)
    stat = float(measured.stat)
    return float(np.sign(difference) * beyond / stat) if beyond else 0.0


def _signed_root(square: float) -> float:
    return float(np.sign(square) * np.sqrt(abs(square)))
