from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from anneal_ref.base.errors import InputError
from anneal_ref.base.estimate import Estimate
from anneal_ref.observe.moments import Moments
from anneal_ref.observe.readout import apply_flips, undo_flips
from anneal_ref.observe.samples import Samples

LIMIT = stats.norm.isf(0.5e-4)
UP, DOWN = np.array([0.05, 0.0, 0.1]), np.array([0.02, 0.2, 0.0])


@pytest.fixture(scope="module")
def true() -> np.ndarray:
    return np.random.default_rng(1).dirichlet(np.ones(8))


def states() -> np.ndarray:
    return 1 - 2 * ((np.arange(8)[:, None] >> np.arange(3)) & 1)


def moments_of(weights: np.ndarray) -> Moments:
    s = states()
    return Moments.of(weights @ s, s.T @ (weights[:, None] * s))


def read_out(weights: np.ndarray) -> np.ndarray:
    """The slow twin: the whole table of P(read | true)."""
    s = states()
    table = np.ones((8, 8))
    for site in range(3):
        up = s[:, site] == 1
        right = np.where(up, 1 - UP[site], 1 - DOWN[site])
        table *= np.where(s[:, None, site] == s[None, :, site], right[:, None], 1 - right[:, None])
    return weights @ table


def test_flips_of_moments_are_those_of_the_distribution(true: np.ndarray) -> None:
    expected = moments_of(read_out(true))
    found = apply_flips(moments_of(true), UP, DOWN)
    np.testing.assert_allclose(found.z.value, expected.z.value, atol=1e-15)
    np.testing.assert_allclose(found.zz.value, expected.zz.value, atol=1e-15)
    back = undo_flips(expected, UP, DOWN)
    np.testing.assert_allclose(back.z.value, moments_of(true).z.value, atol=1e-14)
    np.testing.assert_allclose(back.zz.value, moments_of(true).zz.value, atol=1e-14)
    swapped = undo_flips(expected, DOWN, UP)
    assert np.abs(swapped.z.value - moments_of(true).z.value).max() > 0.1


def test_corrected_samples_cover_the_truth(true: np.ndarray) -> None:
    rng = np.random.default_rng(7)
    runs, shots = 200, 400
    exact = moments_of(true).zz.value[0, 1]
    hits = {"estimate": 0, "bound": 0, "raw": 0}
    for _ in range(runs):
        spins = states()[rng.choice(8, shots, p=read_out(true) / read_out(true).sum())]
        samples = Samples(spins)
        owner = samples.estimate(lambda m: undo_flips(m, UP, DOWN).zz.value[0, 1], replicas=80)
        hits["estimate"] += bool(abs(owner.value - exact) < 1.96 * owner.stat)
        bound = undo_flips(samples.moments(), UP, DOWN).zz[0, 1]
        hits["bound"] += bool(abs(bound.value - exact) < 1.96 * bound.stat)
        assert bound.stat > 0.8 * owner.stat
        raw = samples.moments().zz[0, 1]
        hits["raw"] += bool(abs(raw.value - exact) < 1.96 * raw.stat)
    low, high = stats.binom(runs, 0.95).ppf([1e-4, 1 - 1e-4])
    assert low <= hits["estimate"] <= high
    assert hits["bound"] >= low
    assert hits["raw"] < low


def test_symmetric_flips_inflate_the_error_by_a_squared() -> None:
    measured = Moments(Estimate([0.1, 0.2], 0.01, 0.0), Estimate([[1, 0.3], [0.3, 1]], [[0, 0.02], [0.02, 0]], 0.0))
    back = undo_flips(measured, 0.1, 0.1)
    assert back.zz.value[0, 1] == pytest.approx(0.3 / 0.64)
    assert back.zz.stat[0, 1] == pytest.approx(0.02 / 0.64)
    assert back.z.stat == pytest.approx([0.01 / 0.8] * 2)
    assert back.zz.stat[0, 0] == 0
    assert back.zz.num[0, 1] == 0


@pytest.mark.parametrize(
    ("up", "down", "message"),
    [
        (-0.1, 0.0, "up_flips must be probabilities from 0 to 1; got -0.1"),
        (0.0, [0.0, 1.5], "down_flips must be probabilities from 0 to 1; got 1.5"),
        (0.5, 0.5, r"up_flips \+ down_flips must be below 1.*at site 0"),
        ([0.1, 0.1, 0.1], 0.0, r"up_flips must be one rate or have shape \(2,\); got shape \(3,\)"),
        (np.nan, 0.0, "up_flips must be finite"),
    ],
)
def test_bad_rates(up: object, down: object, message: str) -> None:
    moments = Moments.of([0, 0], np.eye(2))
    for correct in (undo_flips, apply_flips):
        with pytest.raises(InputError, match=message):
            correct(moments, up, down)  # type: ignore[arg-type]
