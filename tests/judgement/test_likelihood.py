from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from anneal_ref.base.estimate import Estimate
from anneal_ref.judgement.likelihood import MIXTURE, cautious, log_likelihood, outside, tempered
from anneal_ref.judgement.perfect import Perfect
from anneal_ref.observe.clusters import Clusters


def truth(seed: int = 1) -> Perfect:
    return Perfect.of_probabilities(np.random.default_rng(seed).dirichlet(np.full(64, 0.3)))


def test_expected_value_is_minus_the_entropy() -> None:
    perfect = truth()
    p = perfect.weights
    assert perfect.mean(tempered(np.log(p), 6)) == pytest.approx(float(np.sum(p * np.log(p))), abs=64 * MIXTURE)


def test_perfect_shots_depart_by_standard_normal_amounts() -> None:
    perfect = truth()
    logs = tempered(np.log(perfect.weights), 6)
    expected, deviation = Estimate(perfect.mean(logs)), float(np.sqrt(perfect.variance(logs)))
    rng = np.random.default_rng(2)
    z = np.array(
        [
            log_likelihood(logs[rng.choice(64, 400, p=perfect.weights)], expected, deviation, Clusters.of(400))[1]
            for _ in range(1000)
        ]
    )
    assert abs(z.mean()) < stats.norm.isf(0.5e-4) / np.sqrt(1000)
    assert stats.chi2.ppf(0.5e-4, 999) < 999 * z.var(ddof=1) < stats.chi2.isf(0.5e-4, 999)


def test_uniform_shots_score_far_below() -> None:
    perfect = truth()
    logs = tempered(np.log(perfect.weights), 6)
    drawn = logs[np.random.default_rng(3).integers(0, 64, 400)]
    score, z = log_likelihood(
        drawn, Estimate(perfect.mean(logs)), float(np.sqrt(perfect.variance(logs))), Clusters.of(400)
    )
    assert z < -10
    assert score.high < float(score.floor or 0)
    assert score.unit == "nats per shot"


def test_impossible_and_underflowing_states_stay_finite() -> None:
    logs = np.array([0.0, -np.inf, -2000.0])
    found = tempered(logs, 10)
    assert np.isfinite(found).all()
    floor = np.log(MIXTURE) - 10 * np.log(2)
    np.testing.assert_allclose(found[1:], floor)
    assert found[0] == pytest.approx(-MIXTURE, rel=1e-2)
    assert outside(logs, 10) == 2
    score, z = log_likelihood(np.append(found, found[0]), Estimate(-1.0), 0.5, Clusters.of(4))
    assert np.isfinite([score.value, score.low, score.high, z]).all()


def test_a_flat_truth_tells_nothing() -> None:
    logs = np.full(50, -np.log(64.0))
    score, z = log_likelihood(logs, Estimate(-np.log(64.0)), 0.0, Clusters.of(50))
    assert z == 0.0
    assert score.value == pytest.approx(-np.log(64.0))


def test_one_rare_shot_is_no_certainty_and_a_gaussian_departure_stays() -> None:
    weights = np.array([1 - 1e-5, 1e-5])
    logs = np.log(weights)
    deviation = float(np.sqrt(weights @ (logs - weights @ logs) ** 2))
    one = (199 * logs[0] + logs[1]) / 200
    plain = (one - weights @ logs) / (deviation / np.sqrt(200))
    found = cautious(plain, one, 200, logs, weights)
    assert plain < -20
    # such a shot comes in 200 * 1e-5 of all experiments, 2.9 standard errors; the bound may say a little less or more
    assert -np.sqrt(-2 * np.log(0.002)) - 1e-9 < found < -2.0
    level = np.linspace(-6.0, -5.0, 64)
    flat = np.full(64, 1 / 64)
    for z in (-3.0, -8.0):
        mean = float(level.mean() + z * level.std() / np.sqrt(4000))
        assert cautious(z, mean, 4000, level, flat) == pytest.approx(z, rel=0.03)
    assert cautious(2.0, -5.0, 4000, level, flat) == 2.0
