"""Read-outs of the stored amplitudes as they lie in memory; frames and symmetry are the register's affair."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from anneal_ref.backends.exact import compiled
from anneal_ref.backends.exact.layout import Layout, aligned

Floats = NDArray[np.float64]

CHUNK_BITS = 9
"""A read-out sums chunks of at most 2^9 pieces; fixed, so that sums do not depend on threads."""
QUARTERS = (1, 1j, -1, -1j)
"""Powers of the imaginary unit."""


def gauge(index: NDArray[np.int64]) -> NDArray[np.complex128]:
    """(-i)^popcount(index): stored amplitudes are those of psi times this."""
    phases: NDArray[np.complex128] = np.array(QUARTERS)[-np.bitwise_count(index).astype(np.int8) & 3]
    return phases


@dataclass(frozen=True, slots=True)
class Reader:
    """Sums over the stored amplitudes x.

    Parameters
    ----------
    x : ndarray
        The array of the state.
    place : Layout
    together : callable
        together(loop, stop) calls loop(share) on every thread at once.
    """

    x: NDArray[Any]
    place: Layout
    together: Callable[[Callable[[int], None], Callable[[], None]], None]

    def stored(self) -> NDArray[np.complex128]:
        """Amplitudes of all stored configurations, shape (2^bits,), gauge removed."""
        place = self.place
        size = 1 << place.low_bits
        values = np.empty(1 << place.bits, np.complex128)
        for row in range(place.rows):
            part, view = values[row * size : (row + 1) * size], place.blocks(self.x, row)
            part.real, part.imag = view[:, :, 0].reshape(-1), view[:, :, 1].reshape(-1)
            part *= gauge(np.arange(row * size, (row + 1) * size, dtype=np.int64)).conj()
        return values

    def at(self, index: NDArray[np.int64]) -> NDArray[np.complex128]:
        """Amplitudes of stored configurations `index` (shots,), gauge removed."""
        o = self.place.offsets(index)
        values: NDArray[np.complex128] = self.x[o].astype(np.complex128) + 1j * self.x[o + self.place.lanes]
        return values * gauge(index).conj()

    def weights(self) -> Floats:
        """Sum the probabilities of every piece."""
        chunks, inside = self._chunks()
        weights = np.empty(chunks << inside)

        def work(k: int) -> None:
            compiled.chunk_weights(self.x, self._shape, k << inside, (k + 1) << inside, self._piece(), weights)

        self._spread(work, chunks)
        return weights

    def draw(self, uniform: Floats) -> NDArray[np.int64]:
        """Find stored configurations (shots,) at the quantiles `uniform` of the running sum of probabilities."""
        weights = self.weights()
        edges = np.cumsum(weights)
        order = np.argsort(uniform, kind="stable")
        target = uniform[order] * edges[-1]
        piece = np.minimum(np.searchsorted(edges, target, side="right"), np.flatnonzero(weights)[-1])
        target -= np.where(piece > 0, edges[piece - 1], 0.0)
        drawn, z = np.empty(len(order), np.int64), np.empty(len(order), np.int64)
        compiled.draw(self.x, self._shape, piece, target, self._piece(), drawn)
        z[order] = drawn
        return z

    def spin_moments(self) -> tuple[Floats, Floats]:
        """Moments of the stored bits: z (bits + 1,), the weight last, and zz (bits, bits)."""
        chunks, inside = self._chunks()
        low = self.place.piece_bits
        b = low + inside
        z, zz = np.empty((chunks, b + 1)), np.empty((chunks, b, b))

        def work(k: int) -> None:
            total, first = np.empty((1 << low, 1)), np.empty((1 << inside, low + 1))
            compiled.chunk_moments(self.x, self._shape, k, inside, self._piece(), total, first, z[k], zz[k])

        self._spread(work, chunks)
        top = self.place.bits - b
        spins = 1.0 - 2.0 * (np.arange(chunks)[:, None] >> np.arange(top) & 1)
        first, second = np.zeros(b + top + 1), np.zeros((b + top, b + top))
        # einsum rather than a matrix product: its order of summation is fixed
        first[:b], first[b : b + top] = z[:, :b].sum(0), np.einsum("c,ct->t", z[:, b], spins)
        first[b + top] = z[:, b].sum()
        second[:b, :b] = zz.sum(0)
        second[b:, :b] = np.einsum("ct,cb->tb", spins, z[:, :b])
        second[:b, b:] = second[b:, :b].T
        second[b:, b:] = np.einsum("ct,cu->tu", spins, spins * z[:, b:])
        return first, second

    def transverse_moments(self, parity: int) -> Floats:
        """<X> of the stored bits (bits + 1,); with a parity those of the symmetric half, the left-out spin last."""
        place = self.place
        chunks, inside = self._chunks()
        edges = (place.lane_bits, place.piece_bits, place.low_bits, place.bits)
        cuts = [cut for k in range(3) for cut in _triples(edges[k], edges[k + 1])]
        groups = np.array(cuts, np.int64)
        out = np.empty((chunks, place.bits + 1))

        def work(k: int) -> None:
            scratch = aligned(place.lanes * place.lane_bits, self.x.dtype)
            start, stop, pairs, odd = k << inside, (k + 1) << inside, parity != 0, place.bits % 2
            compiled.chunk_currents(self.x, self._shape, place.bits, start, stop, groups, scratch, pairs, odd, out[k])

        self._spread(work, chunks)
        x: Floats = -2 * out.sum(0)
        if parity:
            x *= 2
            x[-1] *= -0.5 * parity * (1 - 2 * (place.bits // 2 % 2))
        return x

    @property
    def _shape(self) -> tuple[int, int, int, int]:
        place = self.place
        return place.low_bits - place.piece_bits, place.row, place.piece, place.piece_bits

    def _piece(self) -> Floats:
        return aligned(1 << self.place.piece_bits, np.float64)

    def _chunks(self) -> tuple[int, int]:
        """Count the chunks of a read-out, and the pieces in each (as bits)."""
        bits = self.place.bits - self.place.piece_bits
        inside = min(bits, CHUNK_BITS)
        return 1 << (bits - inside), inside

    def _spread(self, work: Callable[[int], None], jobs: int) -> None:
        """Call work(job) for all jobs, on all threads."""
        waiting = list(range(jobs))[::-1]

        def loop(_: int) -> None:
            while waiting:
                try:
                    job = waiting.pop()
                except IndexError:  # another thread was faster
                    return
                work(job)

        self.together(loop, waiting.clear)


def _triples(first: int, last: int) -> Iterator[tuple[int, int]]:
    while first < last:
        yield first, min(3, last - first)
        first += 3
