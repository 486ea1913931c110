from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from anneal_ref.base.errors import InputError
from anneal_ref.base.estimate import Estimate
from anneal_ref.judgement.correlation_error import CorrelationError, correlation_error
from anneal_ref.judgement.equivalence import (
    Acceptance,
    Finding,
    decide,
    judge_distance,
    judge_error,
    outcome_of,
)
from anneal_ref.judgement.magnetisation_error import MagnetisationError, magnetisation_error
from anneal_ref.judgement.perfect import Perfect
from anneal_ref.observe.clusters import Clusters
from anneal_ref.observe.moments import Moments

N, REPEATS = 6, 300
ALLOWED = int(stats.binom.isf(1e-4, REPEATS, 0.05))
"""A test of size 5 % or less exceeds this number of wrong verdicts once in 10^4 tests."""


def ring(strength: float, seed: int = 1) -> Perfect:
    s = Perfect.of_probabilities(np.full(2**N, 2.0**-N)).spins
    bonds = strength * np.random.default_rng(seed).uniform(0.3, 1.0, N)
    weight = np.exp((s * np.roll(s, -1, axis=1)) @ bonds)
    return Perfect.of_probabilities(weight / weight.sum())


EXACT = ring(0.8)


def truth(num: float = 0.0) -> Moments:
    z, zz = EXACT.moments()
    np.fill_diagonal(zz, 1.0)
    bars = np.full((N, N), num)
    np.fill_diagonal(bars, 0.0)
    return Moments(Estimate(z, 0.0, num), Estimate((zz + zz.T) / 2, 0.0, bars))


def off_by(eps: float) -> Perfect:
    """A processor with exactly this correlation error, made by mixing in another distribution."""
    other = ring(0.8, seed=2)
    upper = np.triu_indices(N, 1)
    t, c = EXACT.moments()[1][upper], other.moments()[1][upper]
    share = eps * np.linalg.norm(t) / np.linalg.norm(c - t)
    return Perfect.of_probabilities(EXACT.weights + share * (other.weights - EXACT.weights))


def measure(processor: Perfect, shots: int, seed: int, num: float = 0.0) -> CorrelationError:
    rng = np.random.default_rng(seed)
    return correlation_error(processor.spins[rng.choice(2**N, shots, p=processor.weights)], truth(num))


def verdicts(eps: float, limit: float, shots: int, repeats: int = REPEATS) -> list[str]:
    processor = off_by(eps)
    return [
        judge_error("correlation_error", measure(processor, shots, k), limit, shots).outcome for k in range(repeats)
    ]


def test_three_outcomes() -> None:
    assert outcome_of(0.01, 0.04, 0.05) == "accept"
    assert outcome_of(0.06, 0.08, 0.05) == "reject"
    assert outcome_of(0.04, 0.06, 0.05) == "inconclusive"
    assert outcome_of(0.0, 0.05, 0.05) == "accept"


@pytest.mark.parametrize(("limit", "shots"), [(0.05, 1000), (0.05, 5000), (0.15, 1000)])
def test_at_the_limit_each_wrong_verdict_is_rare(limit: float, shots: int) -> None:
    found = verdicts(limit, limit, shots)
    assert found.count("accept") <= ALLOWED
    assert found.count("reject") <= ALLOWED


def test_no_twin_without_debiasing_passes() -> None:
    """Holding the plain error against the limit rejects good processors: the shot noise alone exceeds it."""
    rejected = sum(measure(off_by(0.02), 1000, k).raw > 0.05 for k in range(100))
    assert rejected > 90


def test_power() -> None:
    good, bad = verdicts(0.0, 0.1, 4000, 100), verdicts(0.2, 0.1, 4000, 100)
    assert good.count("accept") >= 95
    assert bad.count("reject") >= 95


def test_the_predicted_shots_settle_it() -> None:
    """An inconclusive verdict names the shots; with these, most repetitions are settled, and rightly."""
    processor, limit = off_by(0.06), 0.1
    findings = [judge_error("correlation_error", measure(processor, 400, k), limit, 400) for k in range(60)]
    needed = [one.more_shots for one in findings if one.more_shots is not None]
    assert len(needed) > 50
    shots = 400 + int(np.median(needed))
    again = [
        judge_error("correlation_error", measure(processor, shots, 100 + k), limit, shots).outcome for k in range(200)
    ]
    assert 0.65 < again.count("accept") / 200 < 0.95
    assert again.count("reject") <= 2
    assert "more shots" in next(one.advice for one in findings if one.more_shots is not None)


def test_the_predicted_shots_settle_it_with_few_gauges_too() -> None:
    """Bounds of few gauges have a wide tail, and a prediction without it promises too much."""
    z, size, limit = np.array([0.1, -0.4, 0.7, 0.2, -0.6]), 1500, 0.05

    def grouped(gauges: int, seed: int) -> MagnetisationError:
        shots = gauges * size
        spins = np.where(np.random.default_rng(seed).random((shots, 5)) < (1 + z) / 2, 1, -1).astype(np.int8)
        return magnetisation_error(spins, Estimate(z, 0.0, 0.0), Clusters.of(shots, np.arange(shots) // size))

    findings = [judge_error("magnetisation_error", grouped(3, k), limit, 3 * size) for k in range(40)]
    needed = [one.more_shots for one in findings if one.more_shots is not None]
    assert len(needed) > 30
    gauges = 3 + int(np.ceil(np.median(needed) / size))
    again = [judge_error("magnetisation_error", grouped(gauges, 100 + k), limit, gauges * size) for k in range(100)]
    assert [one.outcome for one in again].count("accept") >= 75


def test_a_blunt_truth_cannot_be_settled_by_shots() -> None:
    # correlations are known to 0.02 each: about as much as the distance from the limit
    finding = judge_error("correlation_error", measure(off_by(0.05), 20_000, 1, num=0.02), 0.07, 20_000)
    assert finding.outcome == "inconclusive"
    assert finding.more_shots is None
    assert "refine the reference" in finding.advice
    sharp = judge_error("correlation_error", measure(off_by(0.05), 20_000, 1), 0.07, 20_000)
    assert sharp.outcome == "accept"


def test_at_the_limit_no_number_is_named() -> None:
    error = measure(off_by(0.1), 2000, 3)
    finding = judge_error("correlation_error", error, error.value, 2000)
    assert finding.outcome == "inconclusive"
    assert finding.more_shots is None
    assert "so near the limit" in finding.advice


def test_groups_are_named_in_the_advice() -> None:
    finding = judge_error(
        "correlation_error", measure(off_by(0.06), 400, 1), 0.1, 400, unit="shots in new gauges or batches"
    )
    assert "new gauges" in finding.advice


@pytest.mark.parametrize("limit", [0.5, 3.0])
def test_distance_at_its_limit(limit: float) -> None:
    rng = np.random.default_rng(4)
    found = [judge_distance("q", limit + 0.2 * z, 0.2, 0.0, limit, 100).outcome for z in rng.standard_normal(4000)]
    allowed = stats.binom.isf(1e-4, 4000, 0.05)
    assert found.count("accept") <= allowed
    assert found.count("reject") <= allowed


def test_distance_advice() -> None:
    finding = judge_distance("q", 0.3, 0.2, 0.0, 0.5, 1000)
    # 0.2 = (1.645 + 0.842) 0.2/sqrt(more)
    assert finding.more_shots == pytest.approx(1000 * (2.487**2 - 1), rel=0.1)
    assert judge_distance("q", -0.3, 0.01, 0.25, 0.5, 1000).more_shots is None
    assert judge_distance("q", -0.3, 0.01, 0.1, 0.5, 1000).outcome == "accept"
    assert judge_distance("q", -0.9, 0.01, 0.1, 0.5, 1000).outcome == "reject"
    assert judge_distance("q", 0.5, 0.2, 0.0, 0.5, 1000).more_shots is None
    # several limits could each reject: each must be surer
    assert judge_distance("q", 0.84, 0.2, 0.0, 0.5, 1000).outcome == "reject"
    assert judge_distance("q", 0.84, 0.2, 0.0, 0.5, 1000, tests=3).outcome == "inconclusive"


def finding(outcome: str, more: int | None = None) -> Finding:
    return Finding("q", 0.1, 0.0, 0.2, outcome, more)


@pytest.mark.parametrize(
    ("outcomes", "verdict"),
    [
        (["accept", "accept"], "accept"),
        (["accept", "reject"], "reject"),
        (["inconclusive", "reject"], "reject"),
        (["accept", "inconclusive"], "inconclusive"),
    ],
)
def test_verdict_over_several_limits(outcomes: list[str], verdict: str) -> None:
    decision = decide([finding(one) for one in outcomes], 0.95)
    assert decision.outcome == verdict
    assert str(decision).startswith(f"verdict: {verdict} (level 95%)")


def test_the_open_limits_decide_how_many_more_shots() -> None:
    assert decide([finding("accept"), finding("inconclusive", 50), finding("inconclusive", 70)], 0.95).more_shots == 70
    assert decide([finding("inconclusive", 50), finding("inconclusive", None)], 0.95).more_shots is None
    assert decide([finding("accept")], 0.95).more_shots is None
    with pytest.raises(InputError, match="at least one"):
        decide([], 0.95)


def test_acceptance_checks_its_limits() -> None:
    assert Acceptance(0.05, order_parameter=0.1).limits(False) == {"correlation_error": 0.05, "order_parameter": 0.1}
    with pytest.raises(InputError, match="correlation_error must be a positive"):
        Acceptance(0.0)
    with pytest.raises(InputError, match="residual_energy must be a positive"):
        Acceptance(0.1, residual_energy=-1.0)
    with pytest.raises(InputError, match="level"):
        Acceptance(0.1, level=0.5)


def test_few_clusters_are_promised_more_shots_for_a_distance() -> None:
    """Data times (q stat / room)^2, by hand; q adds the quantiles of test and power, Student with 2 degrees."""
    few = judge_distance("residual_energy", 0.03, 0.02, 0.0, 0.05, 1000, quantile=lambda p: float(stats.t.ppf(p, 2)))
    many = judge_distance("residual_energy", 0.03, 0.02, 0.0, 0.05, 1000)
    # 2.920 + 0.842 and 1.645 + 0.842 standard errors (tables of Student's t and of the normal law)
    assert few.more_shots == pytest.approx(1000 * (3.762**2 - 1), rel=0.1)
    assert many.more_shots == pytest.approx(1000 * (2.486**2 - 1), rel=0.1)
