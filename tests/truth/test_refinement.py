from __future__ import annotations

import numpy as np
import pytest

from anneal_ref.truth.refinement import measure_decay


def runs(order, size=1e-4, next_order=0.1, count=400, noise=0.0, seed=0):
    """Three runs of a scheme with random coefficients of the leading and the next order, and what they converge to."""
    rng = np.random.default_rng(seed)
    exact, leading, following = rng.uniform(-1, 1, count), rng.normal(size=count), rng.normal(size=count)
    values = [
        exact
        + size * (leading * 2.0 ** (-order * k) + next_order * following * 2.0 ** (-(order + 2) * k))
        + noise * rng.normal(size=count)
        for k in range(3)
    ]
    return exact, values, noise * rng.normal(size=count) * np.sqrt(2)


@pytest.mark.parametrize("order", [2, 4, 6])
def test_smooth_errors_are_covered_and_the_bars_are_close(order):
    exact, values, reordered = runs(order)
    decay = measure_decay(values, reordered, growth=4, drift=0.0, order=order)
    assert decay.settled
    assert decay.ratio == pytest.approx(2.0**-order, rel=0.05)
    error, bars = np.abs(values[2] - exact), decay.bars(values, decay.rounding)
    assert np.mean(error <= bars) >= 0.98
    assert np.median(bars) <= 3 * np.median(error)


def test_the_measured_decay_counts_when_it_is_worse_than_the_order():
    exact, values, reordered = runs(2)
    slow = measure_decay(values, reordered, growth=4, drift=0.0, order=6)
    assert slow.ratio == pytest.approx(0.25, rel=0.05)
    assert np.mean(np.abs(values[2] - exact) <= slow.bars(values, slow.rounding)) >= 0.98


def test_a_faster_drop_is_not_taken_for_a_higher_order():
    exact, values, reordered = runs(8)
    decay = measure_decay(values, reordered, growth=4, drift=0.0, order=6)
    assert decay.ratio == 2.0**-6


@pytest.mark.parametrize("noise", [1e-9, 3e-8, 1e-6])
def test_rounding_is_covered_before_and_on_the_plateau(noise):
    exact, values, reordered = runs(6, noise=noise)
    decay = measure_decay(values, reordered, growth=4, drift=0.0, order=6)
    assert decay.settled
    assert noise <= decay.rounding <= 8 * noise
    bars = decay.bars(values, decay.rounding)
    assert np.mean(np.abs(values[2] - exact) <= bars) >= 0.98
    blind = measure_decay(values, np.zeros(400), growth=4, drift=0.0, order=6)
    if noise > 1e-9:
        # without a measured rounding error the bars either miss it or call the plateau unsettled
        covered = np.mean(np.abs(values[2] - exact) <= blind.bars(values, blind.rounding))
        assert covered < 0.9 or not blind.settled


def test_the_norm_stands_in_only_where_reordering_shows_nothing():
    _, values, _ = runs(6)
    assert measure_decay(values, np.zeros(400), growth=4, drift=-1e-5, order=6).rounding == 1e-5
    assert measure_decay(values, np.full(400, 1e-9), growth=4, drift=-1e-5, order=6).rounding == pytest.approx(4e-9)


def test_no_bar_is_finer_than_the_stored_numbers():
    _, values, _ = runs(6, size=1e-9, noise=1e-7)
    blind = measure_decay(values, np.full(400, 1e-17), growth=4, drift=0.0, order=6)
    warned = measure_decay(values, np.full(400, 1e-17), growth=4, drift=0.0, order=6, least=2e-7)
    assert not blind.settled
    assert warned.settled
    assert warned.rounding == 2e-7


def test_changes_that_do_not_shrink_are_not_settled():
    rng = np.random.default_rng(3)
    values = [rng.uniform(-1, 1, 50) * 1e-3 for _ in range(3)]
    decay = measure_decay(values, np.full(50, 1e-15), growth=4, drift=0.0, order=6)
    assert not decay.settled
    assert np.all(decay.bars(values, decay.rounding) >= 2 * np.abs(values[2] - values[1]))


def test_a_coarse_run_that_is_far_off_does_not_vouch_for_the_order():
    exact, values, reordered = runs(6, size=0.1)
    assert measure_decay(values, reordered, growth=4, drift=0.0, order=6).ratio > 0.25


def test_runs_that_agree_exactly_keep_a_bar_of_one_unit_in_the_last_place():
    values = [np.array([0.5, -1.0])] * 3
    decay = measure_decay(values, np.zeros(2), growth=4, drift=0.0, order=6)
    assert decay.settled
    assert np.all(decay.bars(values, decay.rounding) > 0)


def test_a_first_change_of_nothing_and_a_second_of_something_is_not_settled():
    values = [np.zeros(2), np.zeros(2), np.full(2, 1e-3)]
    assert not measure_decay(values, np.zeros(2), growth=4, drift=0.0, order=6).settled
