from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from anneal_ref.base.errors import InputError
from anneal_ref.base.estimate import Estimate
from anneal_ref.judgement.correlation_error import CorrelationError, correlation_error, target_correlations
from anneal_ref.judgement.perfect import NoiseFloor, Perfect, repeat
from anneal_ref.observe.moments import Moments


def chain(n: int, strength: float, fields: float = 0.0) -> Perfect:
    """A correlated distribution over n spins."""
    s = Perfect.of_probabilities(np.full(2**n, 2.0**-n)).spins
    weight = np.exp(strength * np.sum(s[:, 1:] * s[:, :-1], axis=1) + fields * s.sum(axis=1))
    return Perfect.of_probabilities(weight / weight.sum())


def truth_of(perfect: Perfect, num: float = 0.0) -> Moments:
    z, zz = perfect.moments()
    np.fill_diagonal(zz, 1.0)
    bars = np.full(zz.shape, num)
    np.fill_diagonal(bars, 0.0)
    return Moments(Estimate(z, 0.0, num), Estimate((zz + zz.T) / 2, 0.0, bars))


def draw(perfect: Perfect, shots: int, seed: int) -> np.ndarray:
    return perfect.spins[np.random.default_rng(seed).choice(len(perfect.weights), shots, p=perfect.weights)]


def test_a_scale_error_of_two_per_cent_is_found() -> None:
    exact, off = chain(8, 0.8), chain(8, 0.8 * 1.02)
    t, c = exact.moments()[1], off.moments()[1]
    upper = np.triu_indices(8, 1)
    eps = np.sqrt(np.sum((c - t)[upper] ** 2) / np.sum(t[upper] ** 2))
    error = correlation_error(draw(off, 100_000, 1), truth_of(exact))
    low, high = error.interval()
    assert 0 < low < eps < high
    assert error.value == pytest.approx(eps, abs=4 * float(error.estimate().stat))
    assert correlation_error(draw(exact, 100_000, 1), truth_of(exact)).interval()[0] == 0.0


def test_numerical_error_of_the_truth_enters_linearly() -> None:
    perfect = chain(6, 0.7)
    spins = draw(chain(6, 0.6), 5000, 2)
    sharp, blunt = correlation_error(spins, truth_of(perfect)), correlation_error(spins, truth_of(perfect, num=0.01))
    norm, bar = np.sqrt(sharp.truth_squares), 0.01 * np.sqrt(15)
    assert blunt.num == pytest.approx(bar)
    assert blunt.upper(0.95) == pytest.approx((sharp.upper(0.95) * norm + bar) / (norm - bar))
    assert blunt.lower(0.95) == pytest.approx((sharp.lower(0.95) * norm - bar) / (norm + bar))
    assert float(blunt.estimate().stat) == pytest.approx(float(sharp.estimate().stat))
    assert float(blunt.estimate().num) == pytest.approx(bar / norm * (1 + blunt.value))


def test_a_useless_truth_bounds_nothing_and_an_unmeasured_one_says_so() -> None:
    spins = draw(chain(4, 0.5), 100, 3)
    assert correlation_error(spins, truth_of(chain(4, 0.5), num=1.0)).upper(0.95) == np.inf
    z, zz = chain(4, 0.5).moments()
    np.fill_diagonal(zz, 1.0)
    unmeasured = correlation_error(spins, Moments.of(z, (zz + zz.T) / 2))
    assert np.isnan(unmeasured.interval()).all()
    assert np.isnan(unmeasured.estimate().num)


def test_connected_correlations_take_out_the_magnetisation() -> None:
    perfect = chain(5, 0.4, fields=0.4)
    truth = truth_of(perfect, num=0.001)
    target, num = target_correlations(truth, connected=True)
    z, zz = perfect.moments()
    np.testing.assert_allclose(target, zz - np.outer(z, z), atol=1e-12)
    assert num[0, 1] == pytest.approx(0.001 * (1 + abs(z[0]) + abs(z[1])))
    values = [correlation_error(draw(perfect, 300, k), truth, connected=True).squared for k in range(400)]
    assert abs(np.mean(values)) < stats.norm.isf(0.5e-4) * np.std(values) / 20
    plain = correlation_error(draw(perfect, 300, 1), truth, connected=False)
    assert plain.truth_squares > correlation_error(draw(perfect, 300, 1), truth, connected=True).truth_squares


def test_pooling_is_the_ratio_of_sums() -> None:
    parts = [correlation_error(draw(chain(5, k), 400, 7), truth_of(chain(5, 0.6), num=0.001)) for k in (0.5, 0.6, 0.8)]
    total = CorrelationError.total(parts)
    ratio = sum(one.distance.value for one in parts) / sum(one.truth_squares for one in parts)
    assert total.squared == pytest.approx(ratio)
    assert total.num == pytest.approx(0.001 * np.sqrt(30))
    with pytest.raises(InputError, match="at least one"):
        CorrelationError.total([])


def test_bad_input_is_refused() -> None:
    truth = truth_of(chain(4, 0.5))
    with pytest.raises(InputError, match="shape"):
        correlation_error(np.ones((10, 5)), truth)
    with pytest.raises(InputError, match=r"\+1 and -1"):
        correlation_error(np.zeros((10, 4)), truth)
    with pytest.raises(InputError, match="at least 2 shots"):
        correlation_error(np.ones((1, 4)), truth)
    with pytest.raises(InputError, match="groups"):
        correlation_error(np.ones((10, 4)), truth, groups=[1, 2])
    with pytest.raises(InputError, match="no correlations"):
        correlation_error(np.ones((10, 4)), Moments.of(np.zeros(4), np.eye(4)))


@pytest.mark.parametrize("fields", [0.0, 0.5])
@pytest.mark.parametrize("shots", [50, 400])
def test_noise_floor(fields: float, shots: int) -> None:
    """50 shots are drawn one by one, 400 as counts of states."""
    perfect = chain(6, 0.6, fields)
    found = repeat(perfect, shots, [1, 2], connected=fields != 0, replicas=1500)
    z, zz = perfect.moments()
    upper = np.triu_indices(6, 1)
    limit = stats.norm.isf(0.5e-4) / np.sqrt(1500)
    assert abs(found.floor.unbiased.mean()) < limit * found.floor.unbiased.std() + 0.02 * found.floor.raw.mean() * (
        fields != 0
    )
    assert abs(found.magnetisation.mean()) < limit * found.magnetisation.std()
    assert abs(found.order_parameter.mean() - np.mean(zz[upper] ** 2)) < limit * found.order_parameter.std()
    if not fields:
        # E[(c - t)^2] = (1 - t^2)/n for each pair
        expected = np.sum(1 - zz[upper] ** 2) / shots
        assert abs(found.floor.raw.mean() - expected) < limit * found.floor.raw.std()
        assert found.floor.raw_mean == pytest.approx(np.sqrt(found.floor.raw.mean() / np.sum(zz[upper] ** 2)))
    assert found.floor.raw_mean < found.floor.raw_quantile
    assert found.floor.mean < found.floor.quantile < found.floor.raw_quantile
    assert 0 < float(found.floor.estimate().stat) < found.floor.quantile


def test_perfect_samples_come_out_below_the_floor_in_95_of_100() -> None:
    perfect = chain(6, 0.6)
    quantile = repeat(perfect, 200, [3], replicas=2000).floor.quantile
    above = sum(correlation_error(draw(perfect, 200, k), truth_of(perfect)).value > quantile for k in range(1000))
    assert stats.binom.ppf(1e-4, 1000, 0.05) <= above <= stats.binom.isf(1e-4, 1000, 0.05)


def test_a_floor_from_stored_samples_agrees_with_one_from_probabilities() -> None:
    perfect = chain(6, 0.6)
    stored = Perfect.of_samples(draw(perfect, 16_384, 5))
    exact, pooled = (repeat(one, 300, [4], replicas=800).floor for one in (perfect, stored))
    assert pooled.raw_mean == pytest.approx(exact.raw_mean, rel=0.03)
    assert pooled.quantile == pytest.approx(exact.quantile, rel=0.1)
    total = NoiseFloor.total([exact, pooled])
    assert total.raw.mean() == pytest.approx(exact.raw.mean() + pooled.raw.mean())
    assert total.raw_quantile - total.raw_mean < exact.raw_quantile - exact.raw_mean
