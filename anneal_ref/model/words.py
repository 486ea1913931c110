"""Raw random words: the one source of randomness of the models, the same on every platform and numpy version.

A word is an output of the counter-based generator Philox4x64-10. The seed is its key; the purpose and the index are
written into its counter, so that streams never overlap and any of them can be made without the others.
What is made out of words uses nothing but integer arithmetic and correctly rounded floating-point operations.

References
----------
Salmon, Moraes, Dror, Shaw, "Parallel random numbers: as easy as 1, 2, 3", Proc. SC11 (2011).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from anneal_ref.base.checks import choice, integer

STREAMS = {"couplings": 0, "fields": 1, "transverse": 2, "dilution": 3, "graph": 4}
_LARGEST = 2**64 - 1


def raw_words(n: int, seed: int, index: int, stream: str) -> NDArray[np.uint64]:
    """Return `n` words of 64 random bits.

    Parameters
    ----------
    n : int
        How many. A longer draw begins with the shorter one.
    seed, index : int
        From 0 to 2^64 - 1: the ensemble, and the member of it.
    stream : {"couplings", "fields", "transverse", "dilution", "graph"}
        What the words are for; streams are independent.

    Raises
    ------
    InputError

    Examples
    --------
    >>> raw_words(2, seed=0, index=0, stream="couplings").tolist()
    [213000021201967259, 4455796210202625458]
    """
    key = [integer("seed", seed, low=0, high=_LARGEST), 0]
    counter = [0, 0, integer("index", index, low=0, high=_LARGEST), STREAMS[choice("stream", stream, STREAMS)]]
    generator = np.random.Philox(key=np.array(key, dtype=np.uint64), counter=np.array(counter, dtype=np.uint64))
    return generator.random_raw(integer("n", n, low=0))


def below(bound: int, words: NDArray[np.uint64]) -> NDArray[np.int64]:
    """Map words to whole numbers 0 ... bound - 1, equally likely within bound / 2^32 (bound at most 2^31)."""
    high = words >> np.uint64(32)
    return ((high * np.uint64(bound)) >> np.uint64(32)).astype(np.int64)


def unit_interval(words: NDArray[np.uint64]) -> NDArray[np.float64]:
    """Map words to multiples of 2^-53 in [0, 1)."""
    return (words >> np.uint64(11)).astype(np.float64) * 2.0**-53
