"""Where amplitudes lie in memory, and how the stored bits are cut into tiles.

Amplitudes come in blocks (a vector of real parts, then one of imaginary parts), blocks in padded pieces that fit the
first-level cache, pieces in padded memory rows. Padding keeps equal places of different pieces and rows out of the
same cache set.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from anneal_ref.backends.exact.simd import VECTOR_BYTES
from anneal_ref.backends.exact.sweeps import TANGENTS, Tiling
from anneal_ref.base.checks import integer

ITEM_BYTES = {"double": 8, "single": 4}
PIECE_BYTES = 1 << 14
"""Bytes of a piece: a third of a usual first-level cache."""
TILE_BITS = 18
"""A state of at most so many bits is swept as one tile, in the second- or third-level cache."""
LINE = 128
"""Alignment in bytes (two cache lines; they are fetched in pairs)."""


def aligned(count: int, dtype: Any) -> NDArray[Any]:
    """Uninitialised array (count,) that starts on a line."""
    size = np.dtype(dtype).itemsize
    raw = np.empty(count * size + LINE, np.uint8)
    start = -raw.ctypes.data % LINE
    return raw[start : start + count * size].view(dtype)


@dataclass(frozen=True, slots=True)
class Layout:
    """Places of 2^bits amplitudes; lengths are in floats.

    Parameters
    ----------
    bits : int
        Stored bits.
    lane_bits : int
        Bits inside a vector.
    low_bits : int
        Bits inside a memory row; equal to `bits` when the state is one tile.
    piece_bits : int
        Bits inside a piece.
    """

    bits: int
    lane_bits: int
    low_bits: int
    piece_bits: int

    @property
    def lanes(self) -> int:
        """Lanes of a vector."""
        return 1 << self.lane_bits

    @property
    def row_bits(self) -> int:
        """Bits of a phase row (eight blocks)."""
        return self.lane_bits + 3

    @property
    def piece(self) -> int:
        """Distance of pieces."""
        return (2 << self.piece_bits) + (2 * self.lanes if self.low_bits > self.piece_bits else 0)

    @property
    def pieces(self) -> int:
        """Pieces of a memory row."""
        return 1 << (self.low_bits - self.piece_bits)

    @property
    def rows(self) -> int:
        """Memory rows."""
        return 1 << (self.bits - self.low_bits)

    @property
    def row(self) -> int:
        """Distance of memory rows."""
        return self.piece * self.pieces + (2 * self.lanes if self.rows > 1 else 0)

    @property
    def floats(self) -> int:
        """Length of the array."""
        return self.row * self.rows

    def offsets(self, index: NDArray[np.int64]) -> NDArray[np.int64]:
        """Places of the real parts of amplitudes `index`; imaginary parts lie `lanes` further."""
        row, z = index >> self.low_bits, index & ((1 << self.low_bits) - 1)
        piece, y = z >> self.piece_bits, z & ((1 << self.piece_bits) - 1)
        block, lane = y >> self.lane_bits, y & (self.lanes - 1)
        place: NDArray[np.int64] = row * self.row + piece * self.piece + block * 2 * self.lanes + lane
        return place

    def blocks(self, x: NDArray[Any], row: int) -> NDArray[Any]:
        """View (pieces, blocks, 2, lanes) of a memory row of x."""
        start = row * self.row
        view = x[start : start + self.pieces * self.piece].reshape(self.pieces, self.piece)
        return view[:, : 2 << self.piece_bits].reshape(self.pieces, -1, 2, self.lanes)


def smallest(precision: str) -> int:
    """Fewest stored bits: those of a phase row."""
    return (VECTOR_BYTES // ITEM_BYTES[precision]).bit_length() + 2


def layout(bits: int, precision: str, low_bits: int | None = None, piece_bits: int | None = None) -> Layout:
    """Layout of 2^bits amplitudes; `low_bits` and `piece_bits` override the measured choice.

    Raises
    ------
    InputError
        An override that leaves a tile or a piece smaller than a phase row.
    """
    item, least = ITEM_BYTES[precision], smallest(precision)
    lane_bits = least - 3
    if low_bits is None:
        low_bits = bits if bits <= TILE_BITS else (bits + lane_bits + 2) // 2
    if piece_bits is None:
        piece_bits = (PIECE_BYTES // (2 * item)).bit_length() - 1
    if low_bits != bits:
        low_bits = integer("low_bits", low_bits, low=least, high=bits - 3)
    piece_bits = integer("piece_bits", piece_bits, low=least)
    if low_bits <= piece_bits + 1:
        piece_bits = low_bits
    return Layout(bits, lane_bits, low_bits, piece_bits)


def _passes(first: int, last: int) -> list[tuple[int, int]]:
    """Cut bits first .. last-1 into the fewest passes of at most four, as equal as can be."""
    bits, cut = last - first, []
    parts = -(-bits // 4)
    for k in range(parts):
        count = bits // parts + (k < bits % parts)
        cut.append((first, count))
        first += count
    return cut


@dataclass(frozen=True, slots=True)
class Space:
    """Lengths of the scratch arrays of one thread: of the kind of the state, and in double precision."""

    offsets: tuple[int, ...]
    work: int
    energies: int
    tables: int


def _space(place: Layout, tile_bits: int, buffer: int) -> Space:
    table = 16 * place.lanes
    levels = max(1, (tile_bits - place.row_bits + 1) // 2)
    numbers = 1 << (tile_bits - place.row_bits)
    lengths = (
        (levels + 1) * table,
        4 * levels * table,
        2 * numbers,
        TANGENTS + place.lane_bits * place.lanes,
        TANGENTS + place.lane_bits * place.lanes,
        2 * place.lanes,
        2 * place.lanes,
        buffer,
    )
    offsets, at = [], 0
    for length in lengths:
        offsets.append(at)
        at += -(-length // 32) * 32
    offsets[3] += TANGENTS
    offsets[4] += TANGENTS
    tables = max(table // 2, numbers) + 16
    return Space(tuple(offsets), at, (1 + 2 * levels) * (table // 2) + numbers + 16, tables)


def tilings(place: Layout, pairs: bool, odd: bool) -> tuple[tuple[Tiling, Tiling], Space]:
    """Sweep plans of the low and the high group (the same twice when the state is one tile), and the scratch needed.

    `pairs` is the symmetric half, `odd` says that its number of spins is odd.
    """
    two = place.rows > 1
    chunk_bits = place.lane_bits
    high_bits = chunk_bits + place.bits - place.low_bits
    piece_bits = place.piece_bits
    stride = place.piece
    if high_bits == piece_bits + 1:
        stride = 2 << piece_bits  # the edge pass then reaches into a piece: equal steps need unpadded pieces
    if two and high_bits > piece_bits:
        half = (stride << (high_bits - piece_bits)) + 2 * place.lanes
    else:
        half = (2 << high_bits) + 2 * place.lanes
    space = _space(place, max(place.low_bits, high_bits if two else 0), 2 * half if two else 0)

    def tiling(bits: int, tiles: int, chunk: int, step: int, paired: bool, sites: NDArray[np.int64]) -> Tiling:
        first = place.row_bits
        inner = min(bits, piece_bits)
        end = bits - 2 if paired else bits
        passes = _passes(first, min(inner, end)) + _passes(max(inner, first), end)
        edge = end if paired or not passes else passes.pop()[0]
        return Tiling(
            bits, tiles, chunk, piece_bits, place.piece, step, place.row, half, int(paired), int(odd), int(two), edge,
            np.array(passes, np.int64).reshape(-1, 2), sites, space.offsets,
        )  # fmt: skip

    everything = np.arange(place.bits)
    low = tiling(place.low_bits, place.rows, 0, place.piece, pairs and not two, everything)
    if not two:
        return (low, low), space
    sites = np.concatenate(
        [everything[:chunk_bits], everything[place.low_bits :], everything[chunk_bits : place.low_bits]]
    )
    chunks = 1 << (place.low_bits - chunk_bits)
    return (low, tiling(high_bits, chunks >> pairs, chunk_bits, stride, pairs, sites)), space
