"""With fields, <Z> is judged beside the connected correlations, which do not see it."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

import anneal_ref as ar
from anneal_ref.base.errors import InputError
from anneal_ref.base.estimate import Estimate
from anneal_ref.judgement.compare import compare
from anneal_ref.judgement.equivalence import Acceptance, judge_error
from anneal_ref.judgement.magnetisation_error import MagnetisationError, magnetisation_error
from anneal_ref.judgement.pooling import pool
from anneal_ref.observe.clusters import Clusters
from anneal_ref.observe.samples import Samples
from anneal_ref.truth.reference import Reference, reference

SITES, REPEATS = 8, 300
ALLOWED = int(stats.binom.isf(1e-4, REPEATS, 0.05))


@pytest.fixture(scope="module")
def two_islands() -> Reference:
    """A ring of five spins, and beside it a chain of three with fields."""
    edges = [[0, 1], [1, 2], [2, 3], [3, 4], [0, 4], [5, 6], [6, 7]]
    lattice = ar.lattices.from_edges(SITES, edges)
    couplings = np.array([1.0, -0.7, 0.5, -1.0, 0.8, -0.4, -0.4])
    instance = ar.Instance(lattice, couplings, fields=np.array([0.0] * 5 + [0.8, 0.6, 0.9]))
    schedule = ar.Schedule.linear(transverse=(12.0, 0.0), problem=(0.0, 6.0))
    return reference(ar.Anneal(instance, schedule, duration=1.0), samples=1000)


def flipped(truth: Reference, shots: int) -> Samples:
    """Perfect samples but for the three spins with fields, all turned over."""
    spins = truth.sample(shots, seed=1).spins.copy()
    spins[:, 5:] *= -1
    return Samples(spins)


def test_spins_turned_over_wholesale_are_rejected(two_islands: Reference) -> None:
    result = compare(two_islands, flipped(two_islands, 4000), Acceptance(0.1))
    # connected correlations look perfect
    assert result.correlation_error.low == 0.0
    assert result.correlation_error.high < 0.1
    assert result.verdict == "reject"
    assert result.decision is not None
    assert [(one.name, one.limit, one.outcome) for one in result.decision.findings] == [
        ("correlation_error", 0.1, "accept"),
        ("magnetisation_error", 0.1, "reject"),
    ]
    z = two_islands.moments().z.value
    score = result.scores["magnetisation_error"]
    assert score.low < np.sqrt(np.sum(4 * z[5:] ** 2) / SITES) < score.high
    assert pool([result], Acceptance(0.1)).verdict == "reject"


def test_a_perfect_processor_with_fields_is_accepted(two_islands: Reference) -> None:
    for seed in range(5):
        result = compare(two_islands, two_islands.sample(4000, seed=seed), Acceptance(0.1))
        assert result.verdict == "accept"
        assert "magnetisation_error: accept" in str(result)


def test_a_limit_that_is_written_takes_the_place_of_the_default(two_islands: Reference) -> None:
    loose = compare(two_islands, flipped(two_islands, 4000), Acceptance(0.1, magnetisation_error=1.9))
    assert loose.verdict == "accept"
    # the truth excludes these shots, and an acceptance must not be read without that
    assert "standard errors below a perfect processor's" in str(loose).splitlines()[-1]
    assert loose.reservation
    assert not compare(two_islands, two_islands.sample(4000, seed=2), Acceptance(0.1)).reservation


def test_which_limits_hold() -> None:
    assert Acceptance(0.1).limits(False) == {"correlation_error": 0.1}
    assert Acceptance(0.1).limits(True) == {"correlation_error": 0.1, "magnetisation_error": 0.1}
    assert "magnetisation_error" not in Acceptance(0.1, magnetisation_error=0.2).limits(False)
    assert Acceptance(0.1, magnetisation_error=0.2).limits(True)["magnetisation_error"] == 0.2
    with pytest.raises(InputError, match="magnetisation_error"):
        Acceptance(0.1, magnetisation_error=0.0)


def measure(bias: np.ndarray, shots: int, seed: int, num: float = 0.0) -> MagnetisationError:
    """Measure independent spins whose <Z> is off by `bias` from the truth."""
    z = np.linspace(-0.8, 0.8, SITES)
    rng = np.random.default_rng(seed)
    spins = np.where(rng.random((shots, SITES)) < (1 + z + bias) / 2, 1, -1).astype(np.int8)
    return magnetisation_error(spins, Estimate(z, 0.0, num), Clusters.of(shots))


@pytest.mark.parametrize("spread", [True, False])
def test_at_the_limit_each_wrong_verdict_is_rare(spread: bool) -> None:
    """A bias of all sites, or of one alone."""
    bias = np.full(SITES, 0.1) if spread else 0.1 * np.sqrt(SITES) * (np.arange(SITES) == 3)
    found = [judge_error("magnetisation_error", measure(bias, 500, k), 0.1, 500).outcome for k in range(REPEATS)]
    assert found.count("accept") <= ALLOWED
    assert found.count("reject") <= ALLOWED
    assert found.count("inconclusive") < REPEATS


def test_numerical_error_widens_the_bounds_linearly() -> None:
    bias = np.full(SITES, 0.1)
    sharp, blunt = measure(bias, 500, 1), measure(bias, 500, 1, num=0.02)
    assert blunt.upper(0.95) == pytest.approx(sharp.upper(0.95) + 0.02)
    assert blunt.lower(0.95) == pytest.approx(sharp.lower(0.95) - 0.02)
    assert blunt.edges(0.1) == pytest.approx((SITES * 0.08**2, SITES * 0.12**2))


def test_pooled_over_sites() -> None:
    bias = np.full(SITES, 0.3)
    both = MagnetisationError.total([measure(bias, 20_000, 1), measure(0 * bias, 20_000, 2)])
    assert both.value == pytest.approx(0.3 / np.sqrt(2), abs=0.01)
    with pytest.raises(InputError):
        MagnetisationError.total([])
