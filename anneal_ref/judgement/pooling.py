"""The correlation error of an ensemble: shot error and disorder error kept apart."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from anneal_ref.base.checks import number
from anneal_ref.base.errors import InputError
from anneal_ref.base.estimate import Score
from anneal_ref.judgement.comparison import Comparison
from anneal_ref.judgement.correlation_error import CorrelationError
from anneal_ref.judgement.equivalence import Acceptance, Decision, SquareRoot, decide, judge_error
from anneal_ref.judgement.magnetisation_error import MagnetisationError
from anneal_ref.judgement.perfect import NoiseFloor
from anneal_ref.judgement.scores import correlation_score


@dataclass(frozen=True, slots=True, eq=False)
class Pooled:
    """A pooled correlation error.

    Parameters
    ----------
    score : Score
        eps with eps^2 the ratio of the summed squares. Its interval and `stat` are those of the shots, for these
        instances; `disorder` is the standard error that the finite number of instances leaves if they stand for their
        ensemble, without the part that shots make; None for a single instance.
    correlation : CorrelationError
    magnetisation : MagnetisationError
        Over the instances with fields; over all where none has fields.
    has_fields : bool
        Whether any instance has.
    floor : NoiseFloor
    decision : Decision or None
        For these instances; if limits were given.
    n_instances, n_comparisons, n_shots : int
    """

    score: Score
    correlation: CorrelationError
    magnetisation: MagnetisationError
    has_fields: bool
    floor: NoiseFloor
    decision: Decision | None
    n_instances: int
    n_comparisons: int
    n_shots: int

    @property
    def verdict(self) -> str | None:
        """Accept, reject or inconclusive; None without limits."""
        return None if self.decision is None else self.decision.outcome

    def __str__(self) -> str:
        """Return score, floor and verdict, a line each."""
        lines = [
            f"pooled (instances: {self.n_instances}, comparisons: {self.n_comparisons}, shots: {self.n_shots})",
            f"  {self.score}",
            f"  plain, with the noise of the shots: {self.correlation.raw:.3g}; a perfect processor "
            f"{self.floor.raw_mean:.3g}, in 95 of 100 runs below {self.floor.raw_quantile:.3g}",
        ]
        if self.has_fields:
            low, high = self.magnetisation.interval(self.score.level)
            lines.append(f"  magnetisation error: {self.magnetisation.value:.3g} ({low:.3g} to {high:.3g})")
        return "\n".join(lines if self.decision is None else [*lines, str(self.decision)])


def pool(comparisons: Sequence[Comparison], acceptance: Acceptance | None = None, level: float = 0.95) -> Pooled:
    """Pool the correlation error over comparisons of several instances and durations.

    Numerators and denominators are summed, so that an instance with strong correlations weighs more, and noise averages
    out before the root is taken. Comparisons of one instance at several durations count as one draw of disorder.

    Parameters
    ----------
    comparisons : sequence of Comparison
        From independent samples.
    acceptance : Acceptance, optional
        The limits on the correlation error and, with fields, on the magnetisation error are held against the pooled
        ones.
    level : float
        Of the interval.

    Raises
    ------
    InputError
        No comparisons, or the same one twice.
    """
    if not comparisons:
        raise InputError("pool takes at least one comparison; got none")
    if len({id(one) for one in comparisons}) < len(comparisons):
        raise InputError("each comparison may enter a pool once; one came twice")
    level = number("level", level, 0.0, 1.0)
    error = CorrelationError.total([one.correlation for one in comparisons])
    has_fields = any(one.has_fields for one in comparisons)
    magnetisation = MagnetisationError.total([one.magnetisation for one in comparisons if one.has_fields == has_fields])
    floor = NoiseFloor.total([one.floor for one in comparisons])
    by_instance: dict[str, list[CorrelationError]] = {}
    for one in comparisons:
        by_instance.setdefault(one.instance, []).append(one.correlation)
    instances = [CorrelationError.total(members) for members in by_instance.values()]
    shots = sum(one.n_shots for one in comparisons)
    decision = None
    if acceptance is not None:
        grouped = any(one.n_clusters < one.n_shots for one in comparisons)
        unit = "shots in new gauges or batches, spread as these" if grouped else "shots, spread as these"
        held: dict[str, SquareRoot] = {"correlation_error": error, "magnetisation_error": magnetisation}
        limits = {name: limit for name, limit in acceptance.limits(has_fields).items() if name in held}
        decision = decide(
            [
                judge_error(name, held[name], limits[name], shots, acceptance.level, len(limits), unit)
                for name in limits
            ],
            acceptance.level,
        )
    score = correlation_score(error, floor, level, disorder_error(instances))
    return Pooled(score, error, magnetisation, has_fields, floor, decision, len(instances), len(comparisons), shots)


def disorder_error(instances: Sequence[CorrelationError]) -> float | None:
    """Return the standard error of the pooled eps from the scatter between instances, shots taken out.

    The jackknife over instances sees both kinds of scatter; the known variance from shots is subtracted, and what
    is left below zero counts as zero.

    Parameters
    ----------
    instances : sequence of CorrelationError
        One for each instance.

    Returns
    -------
    float or None
        On the scale of eps; None for fewer than two instances.
    """
    count = len(instances)
    if count < 2:
        return None
    values = np.array([one.distance.value for one in instances])
    squares = np.array([one.truth_squares for one in instances])
    left_out = (values.sum() - values) / (squares.sum() - squares)
    variance = (count - 1) / count * np.sum((left_out - left_out.mean()) ** 2)
    shots = sum(one.distance.stat() ** 2 for one in instances) / squares.sum() ** 2
    spread = np.sqrt(max(variance - shots, 0.0))
    # from eps^2 to eps: exact half-width of the root of an interval of this size, finite at eps = 0
    pooled = max(values.sum() / squares.sum(), 0.0)
    return float((np.sqrt(pooled + spread) - np.sqrt(max(pooled - spread, 0.0))) / 2)
