"""Border checks: what passes, what is refused, and what the refusal says."""

import numpy as np
import pytest

from anneal_ref.base import checks
from anneal_ref.base.errors import InputError


def test_finite_copies_and_freezes():
    source = np.arange(3.0)
    array = checks.finite("h", source, (3,))
    source[0] = 7
    assert array[0] == 0
    with pytest.raises(ValueError, match="read-only"):
        array[0] = 1


@pytest.mark.parametrize(
    ("value", "shape", "message"),
    [
        ([1.0, np.nan], None, r"h must be finite; got h\[1\] = nan"),
        (np.inf, None, "h must be finite; got h = inf"),
        ([1.0, 2.0], (3,), r"h must have shape \(3,\); got shape \(2,\)"),
        ([1.0], (None, 2), r"shape \(any, 2\)"),
        (["a"], None, r"h must be an array of numbers; got \['a'\]"),
        ([[1.0], [1.0, 2.0]], None, "h must be an array of numbers"),
        ([1 + 2j], None, "h must be an array of numbers"),
        (np.array([1 + 2j]), None, "h must be an array of real numbers; got complex128"),
    ],
)
def test_finite_refuses(value, shape, message):
    with pytest.raises(InputError, match=message):
        checks.finite("h", value, shape)


@pytest.mark.parametrize("value", [0, -3.0, np.nan, np.inf, "7", None, True])
def test_positive_refuses(value):
    with pytest.raises(InputError, match="duration must be a positive number of ns; got"):
        checks.positive("duration", value, "ns")


@pytest.mark.parametrize(
    ("value", "fits"),
    [(3, True), (3.0, True), (np.int64(3), True), (3.5, False), (True, False), ("3", False), (-1, False)],
)
def test_integer(value, fits):
    if fits:
        assert checks.integer("shots", value, low=0) == 3
    else:
        with pytest.raises(InputError, match="shots must be a whole number of at least 0; got"):
            checks.integer("shots", value, low=0)


def test_choice_suggests_the_nearest():
    assert checks.choice("start", "plus", ("plus", "ground")) == "plus"
    with pytest.raises(InputError, match="did you mean 'ground'"):
        checks.choice("start", "grund", ("plus", "ground"))


def test_signs():
    assert checks.signs("gauge", [1, -1.0]).dtype == np.int8
    with pytest.raises(InputError, match=r"gauge must hold \+1 and -1 only; got 0.0 at \[1\]"):
        checks.signs("gauge", [1, 0])
