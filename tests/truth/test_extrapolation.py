"""Ladders with a known law: exponents, what is left, and values at the end; and ladders that only look like one."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from anneal_ref.truth.extrapolation import Law, exponent_of, measure_law, remaining, step_bars

EXACT = np.random.default_rng(0).uniform(-0.7, 0.7, 60)
DIRECTION = np.random.default_rng(1).normal(size=60)


def ladder(sizes, exponent, direction=DIRECTION):
    return [EXACT + direction * float(n) ** -exponent for n in sizes]


@pytest.mark.parametrize("sizes", [(16, 32, 64), (10, 15, 40), (8, 9, 10)])
@pytest.mark.parametrize("exponent", [0.7, 1.5, 3.0])
def test_a_power_law_is_found_and_extrapolated_exactly(sizes, exponent):
    values = ladder(sizes, exponent)
    law = measure_law(sizes, values)
    assert law.exponent == pytest.approx(exponent)
    # forward never takes more than the last change, so a slow law is followed only part of the way
    if law.by_dimension <= 1:
        np.testing.assert_allclose(law.extrapolated(values), EXACT, rtol=0, atol=1e-12)
    assert law.left >= law.by_dimension
    assert np.all(np.abs(values[2] - EXACT) <= law.bars(values) * (1 + 1e-9)) or not law.settled


def test_doubled_sizes_make_a_geometric_series():
    law = measure_law((16, 32, 64), ladder((16, 32, 64), 2.0))
    assert law.by_dimension == pytest.approx(0.25 / 0.75)
    assert law.cautious_exponent == pytest.approx(2.0)
    assert law.settled


def test_weights_of_first_order_leave_the_extrapolation_exact():
    sizes, weights = (16, 32, 64), (1e-2, 1e-2 / 4, 1e-2 / 16)
    values = ladder(sizes, 2.0)
    law = measure_law(sizes, values, weights)
    np.testing.assert_allclose(law.extrapolated(values), EXACT, rtol=0, atol=1e-12)
    # the bar takes the weight by its root
    assert law.by_weight == pytest.approx(0.5 / 0.5)
    assert law.left == pytest.approx(1.0)


def test_the_worse_opinion_counts():
    sizes, values = (16, 32, 64), ladder((16, 32, 64), 3.0)
    plain = measure_law(sizes, values)
    slow = measure_law(sizes, values, (1e-2, 5e-3, 3e-3))
    quick = measure_law(sizes, values, (1e-2, 1e-4, 1e-6))
    assert slow.left > plain.left
    assert quick.left == plain.left
    assert np.all(slow.bars(values) > plain.bars(values))
    assert quick.forward < plain.forward


def test_weights_at_the_limit_of_single_updates_say_nothing():
    law = measure_law((16, 32, 64), ladder((16, 32, 64), 3.0), (1e-4, 2e-11, 2e-11))
    assert np.isnan(law.by_weight)
    assert law.left == measure_law((16, 32, 64), ladder((16, 32, 64), 3.0)).left


def test_changes_at_right_angles_or_backwards_are_not_extrapolated():
    early, late = np.zeros(60), np.zeros(60)
    early[:30], late[30:] = 1e-2, 1e-3
    for second in (late, -0.1 * early):
        values = [EXACT, EXACT + early, EXACT + early + second]
        law = measure_law((8, 16, 32), values)
        assert law.forward == 0
        np.testing.assert_array_equal(law.extrapolated(values), values[2])


def test_a_fast_drop_is_not_relied_on():
    values = ladder((16, 32, 64), 8.0)
    law = measure_law((16, 32, 64), values)
    assert law.exponent == pytest.approx(8.0)
    assert law.left == pytest.approx(1 / 9)


@pytest.mark.parametrize("changes", [(1e-2, 1e-2), (1e-2, 2e-2), (0.0, 1e-3)])
def test_what_does_not_shrink_is_not_settled(changes):
    values = [EXACT, EXACT + changes[0], EXACT + sum(changes)]
    law = measure_law((16, 32, 64), values)
    assert not law.settled
    assert law.exponent == 0
    assert law.left == 3.0


def test_slow_weights_alone_unsettle():
    assert not measure_law((16, 32, 64), ladder((16, 32, 64), 3.0), (1e-2, 9e-3, 8e-3)).settled


def test_no_change_leaves_nothing():
    law = measure_law((16, 32, 64), [EXACT] * 3)
    assert law.settled
    assert np.all(law.bars([EXACT] * 3) == 0)
    np.testing.assert_array_equal(law.extrapolated([EXACT] * 3), EXACT)


def test_noise_does_not_look_like_a_slow_law():
    random = np.random.default_rng(3)
    values = [EXACT + 1e-7 * random.normal(size=60) for _ in range(3)]
    assert not measure_law((16, 32, 64), values).settled
    assert measure_law((16, 32, 64), values, noise=1e-6).settled


def test_an_entry_that_happens_not_to_change_gets_half_the_typical_bar():
    values = ladder((16, 32, 64), 2.0)
    law = measure_law((16, 32, 64), values)
    for k in range(1, 3):
        values[k][0] = values[0][0]
    bars = law.bars(values)
    typical = np.sqrt(np.mean(np.maximum(np.abs(values[2] - values[1]), np.abs(values[1] - values[0]) / 4) ** 2))
    assert bars[0] == pytest.approx(0.5 * law.left * typical)


def test_exponents_by_hand():
    assert exponent_of((1, 2, 4), 3.0, 0.75) == pytest.approx(2.0)
    assert exponent_of((1, 2, 4), 3.0, 3.0) == 0
    assert exponent_of((1, 2, 4), 3.0, 0.0) == 50
    # 1/1 - 1/2 = 1/2 and 1/2 - 1/10 = 2/5
    assert exponent_of((1, 2, 10), 0.5, 0.4) == pytest.approx(1.0)
    assert remaining(1.0, 2, 10) == pytest.approx(0.1 / 0.4)
    assert remaining(0.0, 2, 4) == 3.0


def test_step_error_of_a_pair_and_of_three():
    change = np.full(10, 0.03)
    # a third of the change, with half of the typical change in quadrature
    np.testing.assert_allclose(step_bars((0, 1), [change, 0 * change]), 0.01 * np.sqrt(1.25))
    np.testing.assert_allclose(step_bars((0, 2), [change, 0 * change]), 0.002 * np.sqrt(1.25))
    fourth = [change * 16.0**-k for k in range(3)]
    np.testing.assert_allclose(step_bars((0, 1, 2), fourth), (fourth[1] - fourth[2]) / 3 * np.sqrt(1.25))
    first = [change * 2.0**-k for k in range(3)]
    np.testing.assert_allclose(step_bars((0, 1, 2), first), (first[1] - first[2]) * np.sqrt(1.25))
    assert np.all(step_bars((0, 1), [change, 0 * change]) > change / 15)


def wandering(random, entries=40):
    """A ladder whose errors point anywhere, with ratios that differ from doubling to doubling and fall on average.

    Close to what matrix product states do: see the module.
    """
    scale, errors, weights = 0.1, [], []
    spread = np.exp(0.5 * random.normal(size=entries))
    for k in range(4):
        # one direction in common, one of its own
        errors.append(scale * spread * random.normal(size=entries))
        weights.append(scale**1.3 * np.exp(0.3 * random.normal()))
        scale *= np.exp(np.log(0.3 - 0.04 * k) + 0.4 * random.normal())
    return errors[:3], weights[:3]


def test_coverage_on_wandering_ladders_and_two_wrong_twins():
    random = np.random.default_rng(5)
    inside, tenth, own, count = 0, 0, 0, 0
    for _ in range(400):
        errors, weights = wandering(random)
        law = measure_law((16, 32, 64), errors, weights)
        if law.settled:
            bars, true = law.bars(errors), np.abs(errors[2])
            inside += np.sum(true <= bars)
            tenth += np.sum(true <= bars / 10)
            own += np.sum(true <= law.by_dimension * np.abs(errors[2] - errors[1]))
            count += len(true)
    assert count > 4000
    # entries of one ladder hang together; the limit is that of a tenth as many
    least = 10 * stats.binom.ppf(1e-4, count // 10, 0.95)
    assert inside >= least
    assert tenth < least
    # bars from the entry's own change and the geometric law alone
    assert own < least


def test_law_is_a_plain_value():
    law = Law((16, 32, 64), 2.0, 1 / 3, np.nan, 0.0)
    assert law.left == pytest.approx(1 / 3)
    assert law.settled
