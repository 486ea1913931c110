"""`Source`: whatever gives moments and samples. Nothing downstream asks what is behind it."""

from __future__ import annotations

from typing import Protocol, runtime_checkable

from anneal_ref.observe.moments import Moments
from anneal_ref.observe.samples import Samples


@runtime_checkable
class Source(Protocol):
    """A state, a reference, a processor's samples, a classical null hypothesis or a noisy wrapper of any of them.

    Examples
    --------
    >>> isinstance(Samples([[1, -1], [-1, 1]]), Source)
    True
    """

    def moments(self) -> Moments:
        """Return <Z_i>, <Z_i Z_j> and, where known, <X_i>, with their errors."""
        ...

    def sample(self, shots: int, seed: int) -> Samples:
        """Return `shots` spin configurations, the same ones for the same seed."""
        ...
