"""The entry points of the compiled kernels, cached on disk under a stamp of all their sources (`backends.stamp`)."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from numba import njit

from anneal_ref.backends.exact import measure, sweeps
from anneal_ref.backends.stamp import stamp_of

KERNELS = ("simd", "bundles", "rotations", "phases", "sweeps", "measure")


def _entries(stamp: int) -> tuple[Any, ...]:
    @njit(cache=True, nogil=True)
    def run(x, scratch, tilings, groups, first, frames, phis, scales, tans, steps, shared, k, tiles):  # type: ignore[no-untyped-def]
        """See `sweeps.run`."""
        stamp  # noqa: B018
        return sweeps.run(x, scratch, tilings, groups, first, frames, phis, scales, tans, steps, shared, k, tiles)

    @njit(cache=True, nogil=True)
    def chunk_moments(x, shape, chunk, chunk_bits, p, total, first, z, zz):  # type: ignore[no-untyped-def]
        """See `measure.chunk_moments`."""
        stamp  # noqa: B018
        measure.chunk_moments(x, shape, chunk, chunk_bits, p, total, first, z, zz)

    @njit(cache=True, nogil=True)
    def chunk_currents(x, shape, bits, start, stop, groups, scratch, pairs, odd, out):  # type: ignore[no-untyped-def]
        """See `measure.chunk_currents`."""
        stamp  # noqa: B018
        measure.chunk_currents(x, shape, bits, start, stop, groups, scratch, pairs, odd, out)

    @njit(cache=True, nogil=True)
    def chunk_weights(x, shape, start, stop, p, weights):  # type: ignore[no-untyped-def]
        """See `measure.chunk_weights`."""
        stamp  # noqa: B018
        measure.chunk_weights(x, shape, start, stop, p, weights)

    @njit(cache=True, nogil=True)
    def draw(x, shape, pieces, targets, p, out):  # type: ignore[no-untyped-def]
        """See `measure.draw`."""
        stamp  # noqa: B018
        measure.draw(x, shape, pieces, targets, p, out)

    return run, chunk_moments, chunk_currents, chunk_weights, draw


run, chunk_moments, chunk_currents, chunk_weights, draw = _entries(stamp_of(Path(__file__).parent, KERNELS))
