"""Estimates never hide an error, and never print bare."""

import pickle

import numpy as np
import pytest

from anneal_ref.base.errors import InputError
from anneal_ref.base.estimate import Estimate, Score


def test_errors_add_by_kind():
    # common practice: 1.96 standard errors for 95 %; the numerical bound adds linearly
    low, high = Estimate(1.0, stat=0.1, num=0.05).interval(0.95)
    assert high - 1.0 == pytest.approx(1.959963985 * 0.1 + 0.05)
    assert 1.0 - low == pytest.approx(high - 1.0)


def test_unmeasured_numerical_error_is_nan_everywhere():
    estimate = Estimate([1.0, 2.0])
    assert np.isnan(estimate.num).all()
    assert np.isnan(estimate.half_width()).all()
    assert "not measured" in str(estimate)
    assert "not measured" in str(estimate[0])


@pytest.mark.parametrize(
    ("estimate", "text"),
    [
        (Estimate(0.42131, 0.0021, 1e-6), "0.4213 ± 0.0021 (stat) ± 1e-06 (num)"),
        (Estimate(-3.0, 0.0, 0.0), "-3 (exact)"),
        (Estimate(120.0, 30.0, 0.0), "120 ± 30 (stat)"),
        (Estimate(np.zeros((2, 3)), 0.1, 0.2), "2x3 values, stat ≤ 0.1, num ≤ 0.2"),
    ],
)
def test_text(estimate, text):
    assert str(estimate) == text


def test_slices_scaling_and_pickle():
    estimate = Estimate([1.0, -2.0], [0.1, 0.2], [0.0, 0.3], how="samples")
    part = pickle.loads(pickle.dumps(estimate))[1].scaled(-2)
    assert (float(part), float(part.stat), float(part.num), part.how) == (4.0, 0.4, 0.6, "samples")
    with pytest.raises(ValueError, match="read-only"):
        estimate.value[0] = 0


@pytest.mark.parametrize(
    "bad",
    [
        {"value": np.nan},
        {"value": 1, "stat": -1},
        {"value": 1, "stat": np.nan},
        {"value": 1, "num": np.inf},
        {"value": [1, 2], "stat": [1, 2, 3]},
    ],
)
def test_refuses(bad):
    with pytest.raises(InputError):
        Estimate(**bad)


def test_score_prints_interval_and_floor():
    score = Score("correlation error", Estimate(0.05, 0.004, 0.0), 0.041, 0.058, floor=Estimate(0.03, 0.001, 0.0))
    assert str(score) == "correlation error: 0.05 (95% interval 0.041 to 0.058, perfect processor 0.03)"
