"""Identities: stable over order, machine and version, different for different content."""

import numpy as np
import pytest

from anneal_ref.base.errors import InputError
from anneal_ref.base.identity import canonical, digest


def test_order_of_keys_does_not_matter():
    assert digest({"a": 1, "b": [0.1, "x"]}) == digest({"b": (0.1, "x"), "a": 1})


def test_frozen_digest():
    # frozen by hand: echo -n '{"a":[1,null],"b":2.0}' | sha256sum
    assert canonical({"b": 2.0, "a": [1, None]}) == '{"a":[1,null],"b":2.0}'
    assert digest({"b": 2.0, "a": [1, None]}) == "464010ed28df40ce9de4b46546db420ba3756ac341dd0e15d066419074386f62"


def test_arrays_count_by_content():
    base = np.arange(6.0).reshape(2, 3)
    same = [np.asfortranarray(base), base.astype(">f8"), base.copy()]
    assert all(digest(base) == digest(other) for other in same)
    other = [base.T, base.astype(np.float32), base + np.eye(2, 3) * 1e-16 + 1]
    assert all(digest(base) != digest(array) for array in other)
    assert digest(np.array([-0.0])) == digest(np.array([0.0]))
    assert digest(-0.0) == digest(0.0)


@pytest.mark.parametrize("value", [np.nan, np.inf, np.array([np.nan]), b"x", {1: 2}, object(), np.array(["a"])])
def test_refuses_what_has_no_identity(value):
    with pytest.raises(InputError):
        digest(value)
