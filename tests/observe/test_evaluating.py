"""A caller's function of the moments: numbers pass, slips are explained, other faults are left alone."""

from __future__ import annotations

import numpy as np
import pytest

from anneal_ref.base.errors import InputError
from anneal_ref.observe.evaluating import evaluate
from anneal_ref.observe.moments import Moments
from anneal_ref.observe.samples import Samples

MOMENTS = Moments.of(np.zeros(3), np.eye(3))


@pytest.mark.parametrize("value", [1, True, 0.5, [1, 2], np.eye(2, dtype=np.int8)])
def test_numbers_pass_as_float64(value: object) -> None:
    result = evaluate(lambda moments: value, MOMENTS)
    assert result.dtype == np.float64
    np.testing.assert_array_equal(result, np.asarray(value, dtype=float))


@pytest.mark.parametrize("value", ["x", "1.5", None, 1j, [[1, 1], [1]], {}, MOMENTS, MOMENTS.zz])
def test_what_is_no_number_is_refused(value: object) -> None:
    with pytest.raises(InputError, match="f must give a real number"):
        evaluate(lambda moments: value, MOMENTS)


@pytest.mark.parametrize(
    "f", [lambda m: m.zz[:2, :2].max(), lambda m: m.zz**2, lambda m: np.abs(m.z), lambda m: m.zz - m.zz]
)
def test_an_estimate_taken_for_its_numbers(f) -> None:
    with pytest.raises(InputError, match=r"Estimate.*\.value"):
        evaluate(f, MOMENTS)


def test_other_faults_of_the_function_are_not_touched() -> None:
    with pytest.raises(AttributeError, match="nowhere"):
        evaluate(lambda moments: moments.nowhere, MOMENTS)
    with pytest.raises(InputError, match="f must be a function"):
        evaluate(None, MOMENTS)  # type: ignore[arg-type]


@pytest.mark.parametrize("of", ["moments", "spins"])
@pytest.mark.parametrize("method", ["jackknife", "bootstrap"])
def test_samples_explain_too(of, method) -> None:
    samples = Samples(1 - 2 * np.random.default_rng(1).integers(0, 2, (20, 3)))
    with pytest.raises(InputError, match=r"f must give a real number.*'x'"):
        samples.estimate(lambda m: "x", of=of, method=method)


def test_ragged_shots_are_refused() -> None:
    with pytest.raises(InputError, match="every shot with the same number of spins"):
        Samples([[1, 1], [1]])
