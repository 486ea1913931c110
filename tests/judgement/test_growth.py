"""Growth of the matching bond dimension: two laws by hand, how often the wrong one is named, costs."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from scipy import stats

import anneal_ref as ar
from anneal_ref.backends.mps.mps import MPS
from anneal_ref.judgement.growth import fit_growth
from anneal_ref.judgement.matching import ABOVE, MATCHED, Matching
from anneal_ref.truth.prediction import plan_of

RAMP = ar.Schedule.polynomial(transverse=(5, -10, 5), problem=(0, 5))
SIZES = (8, 12, 16, 20, 24, 28)


def matching(n_sites, size, outcome=MATCHED, pace=2.0):
    errors = np.array([0.5, 0.2, 0.1, 0.01])
    return Matching(
        size, size / 1.1, size * 1.1, None, outcome, 0.05, 0.04, 0.06, 0.95, (8, 16, 32, 64), errors, 0.001, 1.0, 1e6,
        n_sites, 1, MPS(8), pace,
    )  # fmt: skip


def along(law, sizes=SIZES, noise=0.0, seed=0):
    random = np.random.default_rng(seed)
    return [matching(n, law(n) * math.exp(noise * random.normal())) for n in sizes]


def exponential(n):
    return 2 * math.exp(0.15 * n)


def power(n):
    return 0.01 * n**2.7


def test_exact_laws_are_found_and_told_apart():
    growth = fit_growth(along(exponential))
    assert growth.exponential.slope == pytest.approx(0.15)
    assert growth.exponential.intercept == pytest.approx(math.log(2))
    assert growth.verdict == "exponential"
    assert growth.exponential.at(40)[0] == pytest.approx(exponential(40))
    growth = fit_growth(along(power))
    assert growth.power.slope == pytest.approx(2.7)
    assert growth.verdict == "power"
    assert growth.power.at(40)[0] == pytest.approx(power(40))
    assert "power: Akaike weight 1.000" in str(growth)


def test_corrected_criterion_by_hand():
    """Hurvich and Tsai (1989), for five points: y = ln D is 1, 2, 4, 5, 8 at x = 1 ... 5."""
    y = np.array([1.0, 2.0, 4.0, 5.0, 8.0])
    growth = fit_growth([matching(x, math.exp(v)) for x, v in zip((1, 2, 3, 4, 5), y, strict=True)])
    # slope 1.7, intercept -1.1, residuals 0.4, -0.3, 0.0, -0.7, 0.6: sum of squares 1.1
    assert growth.exponential.slope == pytest.approx(1.7)
    assert growth.exponential.intercept == pytest.approx(-1.1)
    assert growth.exponential.scatter == pytest.approx(math.sqrt(1.1 / 3))
    assert growth.exponential.aicc == pytest.approx(5 * math.log(1.1 / 5) + 6 + 24 / 1)
    x = np.log([1.0, 2, 3, 4, 5])
    squares = np.sum((y - np.polyval(np.polyfit(x, y, 1), x)) ** 2)
    assert growth.power.aicc == pytest.approx(5 * math.log(squares / 5) + 30)
    assert growth.difference == pytest.approx(5 * math.log(1.1 / squares))
    better = 1 / (1 + math.exp(-abs(growth.difference) / 2))
    assert growth.weight == pytest.approx(better)


def test_bands_by_hand():
    growth = fit_growth(along(exponential, noise=0.2, seed=3))
    x, y = np.array(SIZES, float), np.log(growth.bond_dimensions)
    fitted = stats.linregress(x, y)
    squares = np.sum((y - fitted.intercept - fitted.slope * x) ** 2)
    width = math.sqrt(squares / 4 * (1 + 1 / 6 + (40 - x.mean()) ** 2 / np.sum((x - x.mean()) ** 2)))
    middle, low, high = growth.exponential.at(40, level=0.9)
    half = stats.t.ppf(0.95, 4) * width
    assert (math.log(middle / low), math.log(high / middle)) == pytest.approx((half, half))


def test_what_the_data_cannot_tell_is_said():
    noisy = fit_growth(along(exponential, sizes=(16, 18, 20, 22, 24), noise=0.3, seed=1))
    assert noisy.verdict == "cannot tell"
    assert "cannot tell the two laws apart: the better one" in str(noisy)
    few = fit_growth(along(exponential, sizes=(8, 12, 16, 20)))
    assert few.verdict == "cannot tell"
    assert math.isnan(few.difference)
    assert "takes 5 matchings or more, there are 4" in str(few)


@pytest.mark.parametrize("law", [exponential, power])
@pytest.mark.parametrize("noise", [0.05, 0.15, 0.3])
def test_the_wrong_law_is_rarely_named(law, noise):
    runs, wrong, hasty = 400, 0, 0
    for k in range(runs):
        growth = fit_growth(along(law, noise=noise, seed=k))
        wrong += growth.verdict not in (law.__name__, "cannot tell")
        difference = growth.difference if law is exponential else -growth.difference
        hasty += difference > 2
    assert wrong <= stats.binom.isf(1e-4, runs, 0.05)
    if noise == 0.3:
        # the usual two units of the criterion would be wrong more often
        assert hasty > stats.binom.isf(1e-4, runs, 0.05)


def test_the_band_holds_a_new_size():
    inside = 0
    for k in range(400):
        growth = fit_growth(along(exponential, noise=0.2, seed=1000 + k))
        _, low, high = growth.exponential.at(36)
        inside += low <= exponential(36) * math.exp(0.2 * np.random.default_rng(k).normal()) <= high
    assert stats.binom.ppf(1e-4, 400, 0.95) <= inside <= stats.binom.isf(1e-4, 400, 0.95)


def test_linear_sizes_and_matchings_outside_their_ladders():
    given = [*along(exponential), matching(32, math.nan, ABOVE)]
    growth = fit_growth(given, sizes=[2, 3, 4, 5, 6, 7, 8])
    assert growth.exponential.slope == pytest.approx(0.6)
    assert list(growth.sizes) == [2, 3, 4, 5, 6, 7]
    assert growth.left_out == (f"size 8: {ABOVE}",)
    assert "left out: size 8" in str(growth)


def test_costs_come_from_the_plan_at_the_pace_of_the_largest_size():
    given = along(exponential)
    given[-1] = replace(given[-1], pace=3.0)
    growth = fit_growth(given)
    lattice = ar.lattices.ladder(16)
    anneal = ar.Anneal(ar.draw_instance(lattice, ar.disorder.plus_minus(), seed=1), RAMP, 2.0)
    first, second = growth.cost(anneal, watts=150.0)
    assert (first.kind, second.kind) == ("exponential", "power")
    assert first.bond_dimension == pytest.approx(exponential(32))
    plan = plan_of(anneal, MPS(8), math.ceil(first.bond_dimension), 0, 64)
    assert first.seconds == pytest.approx(3.0 * plan.seconds)
    assert first.bytes == plan.bytes
    assert first.joules == pytest.approx(150 * first.seconds)
    assert first.seconds > second.seconds
    assert "J" in str(first)
    assert math.isnan(growth.cost(anneal)[0].joules)
    assert growth.cost(anneal, size=20)[0].bond_dimension == pytest.approx(exponential(20))


def test_costs_beyond_all_memory_are_still_told():
    growth = fit_growth(along(lambda n: 2 * math.exp(0.4 * n)))
    anneal = ar.Anneal(ar.draw_instance(ar.lattices.square(6, 6), ar.disorder.plus_minus(), seed=1), RAMP, 1.0)
    cost = growth.cost(anneal)[0]
    # 36 spins have no use for more than 2^18
    assert cost.bond_dimension == 2**18
    assert cost.bytes > 1e12
    assert cost.seconds > 1e6


@pytest.mark.parametrize(
    ("given", "sizes", "said"),
    [
        ([], None, "sequence of Matching"),
        ([3], None, "sequence of Matching"),
        (along(exponential)[:2], None, "takes 3 different sizes"),
        ([matching(8, 5), matching(8, 6), matching(10, 7)], None, "got 2"),
        ([matching(8, 5), matching(9, 6), matching(10, math.nan, ABOVE)], None, "size 10: above"),
        (along(exponential), [1, 2], "must have shape"),
        (along(exponential), [0, 1, 2, 3, 4, 5], "must be positive"),
    ],
)
def test_bad_input(given, sizes, said):
    with pytest.raises(ar.InputError, match=said):
        fit_growth(given, sizes)


def test_bad_watts():
    anneal = ar.Anneal(ar.draw_instance(ar.lattices.chain(8), ar.disorder.plus_minus(), seed=1), RAMP, 1.0)
    with pytest.raises(ar.InputError, match="watts"):
        fit_growth(along(exponential)).cost(anneal, watts=-1)
