from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from anneal_ref.base.errors import AnnealRefWarning, InputError
from anneal_ref.observe import resample
from anneal_ref.observe.moments import Moments
from anneal_ref.observe.observables import connected, q2, q2_full
from anneal_ref.observe.samples import Samples

LIMIT = stats.norm.isf(0.5e-4)


def correlated(rng: np.random.Generator, c: float, shots: int) -> np.ndarray:
    """Shots of two spins with <Z_0 Z_1> = c."""
    first = 1 - 2 * rng.integers(0, 2, shots, dtype=np.int8)
    return np.stack([first, np.where(rng.random(shots) < (1 + c) / 2, first, -first)], axis=1)


def square(moments: Moments) -> float:
    return float(moments.zz.value[0, 1] ** 2)


def test_jackknife_of_a_square_is_the_u_statistic() -> None:
    """Derived by hand: the mean over pairs of different shots is (n c^2 - 1)/(n - 1)."""
    spins = correlated(np.random.default_rng(5), 0.4, 37)
    product = spins.prod(axis=1, dtype=np.float64)
    c, n = product.mean(), len(product)
    pairs = (product.sum() ** 2 - n) / (n * (n - 1))
    assert Samples(spins).estimate(square).value == pytest.approx((n * c**2 - 1) / (n - 1), abs=1e-14)
    assert Samples(spins).estimate(square).value == pytest.approx(pairs, abs=1e-14)


def test_q2_and_connected_are_unbiased_exactly() -> None:
    rng = np.random.default_rng(6)
    samples = Samples(1 - 2 * rng.integers(0, 2, (23, 4)))
    n = samples.n_shots
    zz = samples.moments().zz.value
    i, j = np.triu_indices(4, 1)
    exact = np.mean((n * zz[i, j] ** 2 - 1) / (n - 1))
    assert samples.estimate(q2).value == pytest.approx(exact, abs=1e-14)
    assert samples.estimate(q2_full).value == pytest.approx((12 * exact + 4) / 16, abs=1e-14)
    covariance = np.cov(samples.spins.T.astype(float))
    np.testing.assert_allclose(samples.estimate(connected).value, covariance, atol=1e-14)


@pytest.fixture(scope="module")
def repeated() -> np.ndarray:
    """Correlations measured with 200 shots, 20 000 times, at c = 0.6."""
    return 2 * np.random.default_rng(11).binomial(200, 0.8, 20_000) / 200 - 1


def test_variance_of_the_unbiased_square(repeated: np.ndarray) -> None:
    """Derived by hand: Var = 4 (n-2) c^2 (1-c^2)/(n (n-1)) + 2 (1-c^4)/(n (n-1)); 0.00463 for c = 0.6, n = 200."""
    n, c = 200, 0.6
    variance = 4 * (n - 2) * c**2 * (1 - c**2) / (n * (n - 1)) + 2 * (1 - c**4) / (n * (n - 1))
    assert variance == pytest.approx(0.00463, abs=5e-6)
    unbiased = (n * repeated**2 - 1) / (n - 1)
    within = LIMIT * np.sqrt(variance / len(repeated))
    assert abs(unbiased.mean() - c**2) < within
    assert abs(np.mean(repeated**2) - c**2) > within  # the biased twin fails
    # the variance of a sample variance is (kurtosis - 1)/R relative to its square; the kurtosis is near 3
    assert abs(unbiased.var() / variance - 1) < LIMIT * np.sqrt(2.2 / len(repeated))


def test_jackknife_error_of_the_square_is_the_true_one() -> None:
    n, c = 200, 0.6
    rng = np.random.default_rng(3)
    variance = 4 * (n - 2) * c**2 * (1 - c**2) / (n * (n - 1)) + 2 * (1 - c**4) / (n * (n - 1))
    results = [Samples(correlated(rng, c, n)).estimate(square) for _ in range(60)]
    mean = np.mean([float(result.stat) ** 2 for result in results])
    scatter = np.std([float(result.stat) ** 2 for result in results]) / np.sqrt(len(results))
    assert abs(mean - variance) < LIMIT * scatter + 0.02 * variance
    assert abs(np.mean([float(result) for result in results]) - c**2) < LIMIT * np.sqrt(variance / len(results))


def test_blocks_and_single_shots_agree() -> None:
    samples = Samples(correlated(np.random.default_rng(8), 0.3, 4000))
    one, blocks = samples.estimate(square, replicas=4000), samples.estimate(square, replicas=250)
    assert blocks.value == pytest.approx(float(one.value), abs=0.1 * float(one.stat))
    assert blocks.stat == pytest.approx(float(one.stat), rel=LIMIT / np.sqrt(2 * 250))


def test_bootstrap_agrees_with_the_jackknife() -> None:
    samples = Samples(correlated(np.random.default_rng(9), 0.3, 300))
    jack = samples.estimate(square)
    boot = samples.estimate(square, method="bootstrap", replicas=4000, seed=4)
    assert boot.stat == pytest.approx(float(jack.stat), rel=0.1)
    assert abs(boot.value - jack.value) < LIMIT * float(jack.stat) / np.sqrt(4000)
    again = samples.estimate(square, method="bootstrap", replicas=4000, seed=4)
    assert again.value == boot.value
    spins = samples.estimate(lambda s: np.mean(s[:, 0] * s[:, 1]) ** 2, of="spins", method="bootstrap", replicas=500)
    assert spins.stat == pytest.approx(float(jack.stat), rel=0.25)


def test_jackknife_over_unequal_blocks_is_unbiased() -> None:
    """A quadratic statistic has bias b/n; (1 - share) weights cancel it for any sizes."""
    sizes = np.array([1, 2, 5, 9])
    total, bias, truth = sizes.sum(), 3.0, 0.7
    full = np.array(truth + bias / total)
    value, _ = resample.jackknife(full, truth + bias / (total - sizes), sizes)
    assert value == pytest.approx(truth, abs=1e-13)


def test_grouped_errors_see_the_spread_between_groups() -> None:
    """Each gauge displaces the correlation; independent-shot errors miss that and cover far too rarely."""
    rng = np.random.default_rng(21)
    groups = np.repeat(np.arange(16), 100)
    hits = {"grouped": 0, "independent": 0}
    runs = 150
    for _ in range(runs):
        spins = np.concatenate([correlated(rng, 0.5 + 0.15 * rng.standard_normal(), 100) for _ in range(16)])
        for name, given in (("grouped", groups), ("independent", None)):
            zz = Samples(spins, groups=given).moments().zz[0, 1]
            hits[name] += bool(abs(zz.value - 0.5) < 1.96 * zz.stat)
    # 16 groups: Student's t with 15 degrees of freedom leaves 93.1 % inside 1.96 standard errors
    coverage = stats.t(15).cdf(1.96) * 2 - 1
    assert hits["grouped"] >= stats.binom(runs, coverage).ppf(1e-4)
    assert hits["independent"] < stats.binom(runs, coverage).ppf(1e-4)


def test_grouped_moments_and_estimate_agree() -> None:
    rng = np.random.default_rng(2)
    groups = rng.integers(0, 20, 500)
    samples = Samples(correlated(rng, 0.2, 500), groups=groups)
    stat = float(samples.estimate(lambda m: m.zz.value[0, 1]).stat)
    assert samples.moments().zz.stat[0, 1] == pytest.approx(stat, rel=1e-2)


def test_few_groups_draw_a_warning() -> None:
    spins = correlated(np.random.default_rng(1), 0.2, 100)
    with pytest.warns(AnnealRefWarning, match=r"only 4 groups .* about 41 %"):
        Samples(spins, groups=np.arange(100) // 25).moments()
    with pytest.warns(AnnealRefWarning, match="all shots belong to one group"):
        one = Samples(spins, groups=np.zeros(100)).estimate(square)
    assert float(one.stat) == float(Samples(spins).estimate(square).stat)


def test_no_error_of_zero_where_nothing_scatters() -> None:
    """1000 shots that all agree still allow one in a few hundred to differ (Agresti and Coull 1998)."""
    samples = Samples(np.ones((1000, 3), dtype=np.int8))
    zz = samples.moments().zz
    off = ~np.eye(3, dtype=bool)
    assert (zz.value == 1).all()
    assert zz.stat[off] == pytest.approx(np.sqrt(8) / 1000, rel=0.01)
    assert (zz.stat[~off] == 0).all()
    estimate = samples.estimate(lambda m: m.zz.value)
    assert estimate.stat[off] == pytest.approx(np.sqrt(8) / 1000, rel=0.01)
    assert (estimate.stat[~off] == 0).all()  # Z^2 = 1 is an identity
    assert samples.estimate(lambda s: s.mean(), of="spins").stat > 0
    assert samples.estimate(lambda m: m.zz.value, method="bootstrap", replicas=5).stat[0, 1] > 0


@pytest.mark.parametrize("n", [20, 100, 1000])
def test_intervals_near_one_cover(n: int) -> None:
    """Exact coverage of c +- 1.96 stat over the binomial, at true correlations up to the edge."""
    ups = np.arange(n + 1)
    stat = np.array([_stat(n, int(k)) for k in ups])
    for miss in (0.5 / n, 1.0 / n, 2.0 / n, 3.0 / n, 5.0 / n, 0.1, 0.3):
        c = 1 - 2 * miss
        inside = np.abs(2 * ups / n - 1 - c) <= 1.96 * stat
        assert stats.binom(n, 1 - miss).pmf(ups[inside]).sum() > 0.92
    # the textbook error sqrt((1 - c^2)/n) fails at the edge
    plain = np.sqrt(np.maximum(0, 1 - (2 * ups / n - 1) ** 2) / n)
    inside = np.abs(2 * ups / n - 1 - (1 - 4 / n)) <= 1.96 * plain
    assert stats.binom(n, 1 - 2 / n).pmf(ups[inside]).sum() < 0.9


def _stat(n: int, ups: int) -> float:
    spins = np.ones((n, 2), dtype=np.int8)
    spins[ups:, 1] = -1
    return float(Samples(spins).moments().zz.stat[0, 1])


def test_too_few_shots() -> None:
    with pytest.raises(InputError, match="at least 2 shots; got 1"):
        Samples([[1, -1]]).estimate(q2)
    assert Samples([[1, -1]]).moments().zz.stat[0, 1] > 0.9


def test_functions_that_misbehave() -> None:
    samples = Samples(correlated(np.random.default_rng(1), 0.2, 20))
    with pytest.raises(InputError, match="f must give finite values; got nan from all shots"):
        samples.estimate(lambda m: np.nan)
    with pytest.raises(InputError, match="f must give one shape"):
        samples.estimate(lambda s: s[:, 0], of="spins")
    with pytest.raises(InputError, match="of must be one of 'moments', 'spins'; got 'spin'; did you mean 'spins'"):
        samples.estimate(q2, of="spin")  # type: ignore[arg-type]


def test_sums_are_exact_over_chunks() -> None:
    spins = 1 - 2 * np.random.default_rng(0).integers(0, 2, (150_000, 3), dtype=np.int8)
    z, zz = resample.sums(spins)
    wide = spins.astype(np.int64)
    np.testing.assert_array_equal(z, wide.sum(axis=0))
    np.testing.assert_array_equal(zz, wide.T @ wide)
