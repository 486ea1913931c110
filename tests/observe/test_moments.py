from __future__ import annotations

import pickle

import numpy as np
import pytest

from anneal_ref.base.errors import InputError
from anneal_ref.base.estimate import Estimate
from anneal_ref.observe.moments import Moments
from anneal_ref.observe.samples import Samples
from anneal_ref.observe.source import Source


def test_values_and_sizes() -> None:
    moments = Moments.of([0.1, 0.2], [[1, 0.5], [0.5, 1]], x=[0.3, 0.4])
    assert moments.n_sites == 2
    assert moments.x is not None
    assert np.isnan(moments.zz.num).all()
    assert "2 spins" in repr(moments)


@pytest.mark.parametrize(
    ("z", "zz", "x", "message"),
    [
        ([[0.0]], [[1.0]], None, r"z must have shape \(n_sites,\)"),
        ([0.0, 0.0], [[1.0]], None, r"zz must have shape \(2, 2\)"),
        ([0.0], [[1.0]], [0.0, 0.0], r"x must have shape \(1,\)"),
        ([0.0, 0.0], [[1, 0.5], [0.4, 1]], None, r"zz must be symmetric; got zz\[0, 1\] = 0.5"),
        ([0.0, 0.0], [[1, 0.5], [0.5, 0.9]], None, r"zz must be 1 on its diagonal.*zz\[1, 1\] = 0.9"),
        ([np.nan], [[1.0]], None, "value must be finite"),
    ],
)
def test_bad_moments(z: list[float], zz: list[list[float]], x: list[float] | None, message: str) -> None:
    with pytest.raises(InputError, match=message):
        Moments.of(z, zz, x)


def test_moments_survive_a_pickle() -> None:
    moments = Moments(Estimate([0.1], 0.2, 0.3), Estimate([[1.0]], 0.0, 0.0))
    again = pickle.loads(pickle.dumps(moments))
    assert again.z.value == 0.1
    assert again.z.stat == 0.2


def test_samples_are_a_source() -> None:
    assert isinstance(Samples([[1, -1]]), Source)
    assert not isinstance(Moments.of([0], [[1]]), Source)
