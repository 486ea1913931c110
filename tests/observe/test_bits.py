from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from anneal_ref.base.errors import InputError
from anneal_ref.observe.bits import pack, unpack


@given(hnp.arrays(np.int8, st.tuples(st.integers(1, 5), st.integers(1, 20)), elements=st.sampled_from([1, -1])))
def test_round_trip(spins: np.ndarray) -> None:
    bits = pack(spins)
    assert bits.shape == (len(spins), -(-spins.shape[1] // 8))
    np.testing.assert_array_equal(unpack(bits, spins.shape[1]), spins)


def test_site_0_is_the_lowest_bit_and_bit_0_means_up() -> None:
    spins = np.ones((1, 10), dtype=np.int8)
    spins[0, [0, 9]] = -1
    assert pack(spins).tolist() == [[1, 2]]


def test_wrong_sizes_are_refused() -> None:
    with pytest.raises(InputError, match="9 sites are 2 bytes to a shot"):
        unpack(np.zeros((3, 1), dtype=np.uint8), 9)
    with pytest.raises(InputError, match="the number is wrong"):
        unpack(np.array([[8]], dtype=np.uint8), 3)
