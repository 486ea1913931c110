"""Raw words against the generator written out in integers, and what is made of them."""

import numpy as np
import pytest

from anneal_ref.base.errors import InputError
from anneal_ref.model.words import STREAMS, below, raw_words, unit_interval

MASK = 2**64 - 1


def philox(counter, key):
    """Philox4x64-10: Salmon, Moraes, Dror, Shaw, Proc. SC11 (2011), section 3.3."""
    c, k = list(counter), list(key)
    for _ in range(10):
        left, right = 0xD2E7470EE14C6C93 * c[0], 0xCA5A826395121157 * c[2]
        c = [(right >> 64) ^ c[1] ^ k[0], right & MASK, (left >> 64) ^ c[3] ^ k[1], left & MASK]
        k = [(k[0] + 0x9E3779B97F4A7C15) & MASK, (k[1] + 0xBB67AE8584CAA73B) & MASK]
    return c


def test_written_out_generator_gives_the_published_vectors():
    # known-answer vectors published with the paper's library (from memory)
    zero = [0x16554D9ECA36314C, 0xDB20FE9D672D0FDC, 0xD7E772CEE186176B, 0x7E68B68AEC7BA23B]
    ones = [0x87B092C3013FE90B, 0x438C3C67BE8D0224, 0x9CC7D7C69CD777B6, 0xA09CAEBF594F0BA0]
    assert philox([0] * 4, [0] * 2) == zero
    assert philox([MASK] * 4, [MASK] * 2) == ones


@pytest.mark.parametrize(("seed", "index", "stream"), [(0, 0, "couplings"), (11, 3, "fields"), (MASK, MASK, "graph")])
def test_words_are_blocks_of_the_counter(seed, index, stream):
    expected = [word for block in (1, 2, 3) for word in philox([block, 0, index, STREAMS[stream]], [seed, 0])]
    assert raw_words(12, seed, index, stream).tolist() == expected


def test_longer_draw_begins_with_the_shorter():
    assert np.array_equal(raw_words(100, 5, 1, "fields")[:37], raw_words(37, 5, 1, "fields"))


def test_streams_indices_and_seeds_differ():
    draws = [tuple(raw_words(4, seed, index, s)) for s in STREAMS for seed in (0, 1) for index in (0, 1)]
    assert len(set(draws)) == len(draws)


@pytest.mark.parametrize("seed", [-1, 2**64, 1.5, "1", None, True, np.nan])
def test_bad_seeds(seed):
    with pytest.raises(InputError, match="seed must be a whole number from 0 to"):
        raw_words(1, seed, 0, "fields")


def test_unknown_stream_names_the_nearest():
    with pytest.raises(InputError, match="did you mean 'fields'"):
        raw_words(1, 0, 0, "field")


def test_ranges_at_their_ends():
    ends = np.array([0, MASK], dtype=np.uint64)
    assert below(7, ends).tolist() == [0, 6]
    assert below(2**31, ends).tolist() == [0, 2**31 - 1]
    assert unit_interval(ends).tolist() == [0.0, 1 - 2**-53]
