"""`compare`: a processor's samples against the truth, scored, explained pair by pair, and judged."""

from __future__ import annotations

import zlib
from collections.abc import Mapping
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from anneal_ref.base.checks import integer, number
from anneal_ref.base.errors import InputError, NotSupported
from anneal_ref.base.estimate import Estimate, Score
from anneal_ref.judgement.comparison import EXCLUDED, Comparison
from anneal_ref.judgement.correlation_error import correlation_error
from anneal_ref.judgement.deviations import pair_deviations
from anneal_ref.judgement.equivalence import (
    Acceptance,
    Decision,
    Finding,
    SquareRoot,
    decide,
    judge_distance,
    judge_error,
)
from anneal_ref.judgement.fidelity import Fidelity, Refusal, fidelity
from anneal_ref.judgement.magnetisation_error import magnetisation_error
from anneal_ref.judgement.perfect import Perfect, repeat
from anneal_ref.judgement.scores import (
    correlation_score,
    energy_score,
    likelihood_score,
    magnetisation_score,
    order_parameter_score,
    standard_errors,
    student,
)
from anneal_ref.observe.clusters import FEW, Clusters
from anneal_ref.observe.samples import Samples

if TYPE_CHECKING:
    from anneal_ref.truth.reference import Reference

SUSPICIOUS = 1e-3
"""Probability of so small an error from a perfect processor below which the samples are called too good."""

RARE = 10
"""Expected shots away from one configuration below which the scatter of the shots does not tell their noise."""


def compare(
    reference: Reference,
    samples: Samples,
    acceptance: Acceptance | None = None,
    level: float = 0.95,
    seed: int = 0,
    likelihood: bool | None = None,
) -> Comparison:
    """Compare samples with the truth.

    Parameters
    ----------
    reference : Reference
        The truth, with its numerical error measured.
    samples : Samples
        Of the same instance and duration. Their gauge is undone; gauges and batches count as the independent units.
    acceptance : Acceptance, optional
        Limits; without them there is no verdict. With fields, <Z> has a limit too: see `Acceptance`.
    level : float
        Of the intervals, between 0 and 1.
    seed : int
        Of the simulated perfect processor.
    likelihood : bool, optional
        Whether to compute the log-likelihood. By default only where the reference stores probabilities; elsewhere it
        takes a new evolution of the state.

    Returns
    -------
    Comparison

    Raises
    ------
    InputError
        Something that is not Samples, samples of another instance or duration, fewer than two shots, a truth without
        correlations.

    Examples
    --------
    >>> import anneal_ref as ar
    >>> schedule = ar.Schedule.linear(transverse=(20.0, 0.0), problem=(0.0, 10.0))
    >>> instance = ar.draw_instance(ar.lattices.square(2, 3), ar.disorder.plus_minus(), seed=1)
    >>> truth = ar.reference(ar.Anneal(instance, schedule, duration=1.0))
    >>> result = ar.compare(truth, truth.sample(2000, seed=5))
    >>> list(result.scores)[:3], result.verdict
    (['correlation_error', 'residual_energy', 'order_parameter'], None)
    >>> bool(result.correlation_error.low == 0.0)
    True
    """
    level = number("level", level, 0.0, 1.0)
    if level in (0.0, 1.0):
        raise InputError(f"level must lie strictly between 0 and 1; got {level}")
    seed = integer("seed", seed, low=0)
    anneal = reference.anneal
    instance = anneal.instance
    if not isinstance(samples, Samples):
        raise InputError(
            f"samples must be Samples, which know their gauge and groups; got {type(samples).__name__}; wrap an array "
            "of +1 and -1, shape (shots, n_sites), with anneal_ref.Samples(spins)"
        )
    samples = samples.for_anneal(anneal)
    spins, moments = samples.spins, reference.moments()
    if np.isnan(moments.zz.num).any() or np.isnan(moments.z.num).any():
        raise InputError("the truth must have its numerical error measured; solve it with anneal_ref.reference")
    clusters = Clusters.of(len(spins), samples.groups)
    connected = instance.has_fields
    table = reference.probabilities()
    perfect = Perfect.of_samples(reference.stored_samples.spins) if table is None else Perfect.of_probabilities(table)
    # repetitions for different samples are independent, so that floors may be pooled
    seeds = [seed, zlib.crc32(reference.identity.encode()), zlib.crc32(spins.tobytes())]
    notes = _first_notes(reference, samples, clusters)

    scores: dict[str, Score] = {}
    site_scatter, pair_scatter = perfect.scatter(connected)
    correlation = correlation_error(spins, moments, samples.groups, connected, pair_scatter)
    repetitions = repeat(perfect, len(spins), seeds, connected)
    floor = repetitions.floor
    scores["correlation_error"] = correlation_score(correlation, floor, level)
    if connected:
        notes.append(
            "with fields, the correlation error is that of <ZZ> - <Z><Z>, and <Z> is judged apart; pairs of spins are "
            "listed with their plain <ZZ>"
        )
    if correlation.squared < 0:
        notes.append("the correlation error is negative: the samples show nothing beyond the noise of the shots")
    if correlation.distance.below(0.0) < SUSPICIOUS:
        notes.append("the samples agree with the truth better than independent shots would; check where they come from")

    energies = (
        energy_score(reference, spins, clusters, perfect, level),
        order_parameter_score(reference, spins, clusters, repetitions, level),
    )
    truth = {score.name: target for score, target in energies}
    scores |= {score.name: score for score, _ in energies}
    sigma = {score.name: standard_errors(score.estimate, target) for score, target in energies}
    magnetisation = magnetisation_error(spins, moments.z, clusters, site_scatter)
    scores["magnetisation_error"] = magnetisation_score(magnetisation, repetitions, level)

    if connected and table is not None and len(spins) * (1 - float(table.max())) < RARE:
        notes.append(
            f"the truth leaves its most likely configuration in fewer than {RARE} of so many shots: connected "
            "correlations rest on rare events, and their intervals are too narrow; take more shots"
        )
    overlap = _fidelity(spins, table, not connected, clusters, level, seed)
    if isinstance(overlap, Fidelity):
        scores["fidelity"] = overlap.score
    if table is not None if likelihood is None else likelihood:
        score, z, strays = likelihood_score(reference, spins, clusters, perfect, level)
        scores["log_likelihood"], sigma["log_likelihood"] = score, z
        if score.floor is not None:
            truth["log_likelihood"] = score.floor
        if z < EXCLUDED:
            notes.append(
                "the log-likelihood shows beyond doubt that the processor departs from the truth, whether or not the "
                "limits allow it"
            )
        if strays:
            notes.append(f"{strays} of {len(spins)} shots lie in states that the truth practically excludes")
    elif likelihood is None:
        notes.append("no log-likelihood: it takes a new evolution at this size; ask for it with likelihood=True")

    decision = None
    if acceptance is not None:
        errors: dict[str, SquareRoot] = {"correlation_error": correlation, "magnetisation_error": magnetisation}
        limits = acceptance.limits(instance.has_fields)
        decision = _decision(limits, acceptance.level, errors, scores, truth, clusters)
    return Comparison(
        scores,
        truth,
        sigma,
        correlation,
        magnetisation,
        floor,
        overlap,
        pair_deviations(spins, moments.zz, clusters),
        decision,
        tuple(notes),
        instance.identity,
        anneal.duration,
        instance.has_fields,
        instance.n_sites,
        len(spins),
        len(clusters),
        level,
        instance.lattice.labels,
    )


def _fidelity(
    spins: NDArray[np.int8],
    table: NDArray[np.float64] | None,
    folded: bool,
    clusters: Clusters,
    level: float,
    seed: int,
) -> Fidelity | Refusal:
    if table is None:
        return Refusal("no table", "no fidelity: the reference keeps no table of probabilities at this size")
    try:
        return fidelity(spins, table, folded, clusters, level, seed)
    except NotSupported as refusal:
        return Refusal("too few shots", str(refusal))


def missed(reference: Reference) -> str:
    """Say in what a truth that is not converged fell short."""
    asked = f"asked to be within {reference.tolerance:.2g}"
    if reference.settled:
        text = f"the truth was {asked} and reached {reference.error:.2g}"
    else:
        text = f"the truth was {asked}, and its runs have not settled (measured error {reference.error:.2g})"
    return f"{text}; the measured error enters every interval"


def _first_notes(reference: Reference, samples: Samples, clusters: Clusters) -> list[str]:
    notes = []
    if reference.outcome != "converged":
        notes.append(missed(reference))
    if samples.n_groups == 1 or (samples.groups is None and samples.manifest.gauge is not None):
        notes.append("all shots belong to one gauge or batch: its own error cannot be told from the processor's")
    elif len(clusters) < FEW and not clusters.independent:
        notes.append(f"only {len(clusters)} gauges or batches: intervals are wide, and rough; use {FEW} or more")
    ground = reference.ground
    lowest = float(reference.anneal.instance.energies(samples.spins).min())
    if lowest < float(ground.bound) - 1e-9 * max(1.0, abs(float(ground.bound))):
        raise InputError(
            f"a shot has the energy {lowest:g}, below the proven bound {float(ground.bound):g}; "
            "the ground energy belongs to another instance"
        )
    if lowest < float(ground.value) - 1e-9 * max(1.0, abs(float(ground.value))):
        notes.append("a shot lies below the best known ground energy; the residual energy is too small by a constant")
    return notes


def _decision(
    limits: Mapping[str, float],
    level: float,
    errors: Mapping[str, SquareRoot],
    scores: Mapping[str, Score],
    truth: Mapping[str, Estimate],
    clusters: Clusters,
) -> Decision:
    shots = clusters.shots
    unit = "shots" if clusters.independent else "shots in new gauges or batches"
    findings: list[Finding] = []
    for name, limit in limits.items():
        if name in errors:
            findings.append(judge_error(name, errors[name], limit, shots, level, len(limits), unit))
            continue
        estimate, target = scores[name].estimate, truth[name]
        findings.append(
            judge_distance(
                name,
                float(estimate) - float(target),
                float(estimate.stat),
                float(target.num),
                limit,
                shots,
                level,
                len(limits),
                lambda p: student(clusters, p),
                unit,
            )
        )
    return decide(findings, level)
