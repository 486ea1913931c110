"""The stored amplitudes of a transverse-field Ising system and the layers that act on them."""

from __future__ import annotations

import math
import time
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from anneal_ref.backends.exact.compiled import run
from anneal_ref.backends.exact.layout import ITEM_BYTES, aligned, layout, smallest, tilings
from anneal_ref.backends.exact.readout import CHUNK_BITS, QUARTERS, Reader, gauge
from anneal_ref.backends.exact.sweeps import Scratch
from anneal_ref.base.checks import choice, finite, integer, signs
from anneal_ref.base.errors import AnnealRefError, InputError

Floats = NDArray[np.float64]

CALL_AMPLITUDES = 1 << 26
"""Amplitudes treated in one compiled call, so that Ctrl-C is heard within a fraction of a second."""
RIGHT_ANGLE = (1.5707963267341256, 6.077100506506192e-11)
"""pi/2 in two parts, the first of 33 bits, so that its multiples are exact."""


class Register:
    """Amplitudes of N spins under layers psi <- prod_k X(theta_k) D(phi_k) psi.

    D(phi) = exp(-i phi E) with E = sum J_ij Z_i Z_j + sum h_i Z_i, X(theta) = exp(i theta sum w_i X_i). It is stored
    as phi(z) = (-i)^popcount(z) psi(z), in which X(theta) is real, and up to Pauli operators that cost nothing to
    carry: psi = phase Z^b X^a chi. Right angles of X go to a (so tangents never exceed 1), kicks go to b.

    Parameters
    ----------
    couplings : array_like, shape (N, N)
        Symmetric, zero diagonal.
    fields, weights : array_like, shape (N,)
    symmetric : bool
        Store the half with the last spin up; needs zero fields and states of a definite spin-flip parity.
    precision : {"double", "single"}
    threads : int
        Threads of layers and read-outs of a state too large for one tile; the digits do not depend on it.
    low_bits, piece_bits : int, optional
        Override the measured choice of tiles (see `layout`); for tests and benchmarks.

    Raises
    ------
    InputError
        Shapes, NaN, infinity, couplings that are not symmetric, fields in the symmetric half.

    Examples
    --------
    >>> register = Register([[0, 1], [1, 0]], [0, 0], [1, 1])
    >>> register.layers([0.3], [0.2])
    >>> round(register.norm(), 12)
    1.0
    """

    def __init__(
        self,
        couplings: ArrayLike,
        fields: ArrayLike,
        weights: ArrayLike,
        symmetric: bool = False,
        precision: str = "double",
        threads: int = 1,
        *,
        low_bits: int | None = None,
        piece_bits: int | None = None,
    ) -> None:
        self.couplings = finite("couplings", couplings, (None, None))
        self.n_sites = n = len(self.couplings)
        if n == 0 or self.couplings.shape != (n, n):
            raise InputError(f"couplings must be a square matrix of at least one site; got {self.couplings.shape}")
        self.fields, self.weights = finite("fields", fields, (n,)), finite("weights", weights, (n,))
        if (self.couplings != self.couplings.T).any() or self.couplings.diagonal().any():
            raise InputError("couplings must be symmetric with a zero diagonal; give J_ij at [i, j] and at [j, i]")
        if symmetric and self.fields.any():
            raise InputError("the symmetric half needs zero fields; got fields; use symmetric=False")
        self.precision = choice("precision", precision, ITEM_BYTES)
        self.threads = integer("threads", threads, low=1)
        self.symmetric = bool(symmetric)
        self._half = _is_half(n, self.symmetric, precision)
        self._layout = place = layout(_stored_bits(n, self.symmetric, precision), precision, low_bits, piece_bits)
        self._tilings, space = tilings(place, self._half, n % 2 == 1)
        self._groups = 2 if place.rows > 1 else 1
        dtype = np.float64 if precision == "double" else np.float32
        self._x = aligned(place.floats, dtype)
        bits, kept = place.bits, min(n, place.bits)
        coupling, field = np.zeros((2, bits, bits)), np.zeros((2, bits))
        coupling[0, :kept, :kept] = self.couplings[:kept, :kept]
        field[0, :kept] = self.couplings[:kept, -1] if self._half else self.fields
        self._shares = self.threads if self._groups == 2 else 1
        self._scratch = [
            Scratch(
                aligned(space.work, dtype),
                aligned(2 * space.energies, np.float64).reshape(2, -1),
                np.empty(2 * bits + 16),
                aligned(space.tables, np.float64),
                aligned(space.tables, np.float64),
                aligned(space.tables, np.float64),
                coupling.copy(),
                field.copy(),
                np.empty(bits + 1),
            )
            for _ in range(self._shares)
        ]
        self.load_plus()

    @staticmethod
    def bytes_needed(n_sites: int, symmetric: bool = False, precision: str = "double") -> int:
        """Bytes of the stored state, and of the work space of one thread and of read-outs."""
        n = integer("n_sites", n_sites, low=1)
        place = layout(_stored_bits(n, symmetric, precision), choice("precision", precision, ITEM_BYTES))
        _, space = tilings(place, _is_half(n, symmetric, precision), n % 2 == 1)
        chunks = max(1, place.rows * place.pieces >> CHUNK_BITS)
        readout = 8 * (chunks * (place.bits + 1) ** 2 + 3 * place.rows * place.pieces)
        work = ITEM_BYTES[precision] * space.work + 8 * (2 * space.energies + 3 * space.tables)
        return ITEM_BYTES[precision] * place.floats + work + readout

    # -------------------------------------------------------------------------------------------- states
    def load_plus(self) -> None:
        """Set |+...+>."""
        self._fresh(1)
        place, kept = self._layout, min(self.n_sites, self._layout.bits)
        low = np.arange(1 << place.low_bits, dtype=np.int64)
        value = np.where(low >> kept == 0, 2.0 ** (-self.n_sites / 2), 0.0)
        patterns = [self._packed(value * gauge(low) * QUARTERS[-k]) for k in range(4)]
        for row in range(place.rows):
            place.blocks(self._x, row)[:] = patterns[row.bit_count() & 3]
        self._whole = True

    def load(self, psi: ArrayLike) -> None:
        """Set the state to psi (2^N,), taken as it is.

        Raises
        ------
        InputError
            Wrong shape, NaN, infinity; in the symmetric half a state without definite spin-flip parity.
        """
        n, place = self.n_sites, self._layout
        state = finite("psi", psi, (1 << n,), np.complex128)
        parity = 1
        if self._half:
            flipped = state[::-1]
            parity = 1 if np.vdot(flipped, state).real >= 0 else -1
            if np.linalg.norm(state - parity * flipped) > 1e-6 * np.linalg.norm(state):
                raise InputError("the symmetric half needs psi even or odd under flipping all spins; got neither")
            state = (state[: 1 << place.bits] + parity * flipped[: 1 << place.bits]) / 2
        self._fresh(parity)
        size = 1 << place.low_bits
        for row in range(place.rows):
            part = np.zeros(size, np.complex128)
            given = state[row * size : (row + 1) * size]
            part[: len(given)] = given
            index = np.arange(row * size, (row + 1) * size, dtype=np.int64)
            place.blocks(self._x, row)[:] = self._packed(part * gauge(index))
        self._whole = True

    def _fresh(self, parity: int) -> None:
        self._whole = False
        self._parity, self._turns, self._flips, self._signs = parity, 0, 0, 0
        self._group = 0
        self._owed: Floats | None = None

    def _packed(self, values: NDArray[np.complex128]) -> NDArray[Any]:
        parts = np.stack([values.real, values.imag]).reshape(2, self._layout.pieces, -1, self._layout.lanes)
        return parts.transpose(1, 2, 0, 3).astype(self._x.dtype)

    # -------------------------------------------------------------------------------------------- layers
    def layers(
        self,
        problem_angles: ArrayLike,
        transverse_angles: ArrayLike,
        kick: int | None = None,
        progress: Callable[[int], object] | None = None,
    ) -> None:
        """Apply layers k = 0, 1, ...: first exp(-i phi_k E), then exp(i theta_k sum w_i X_i).

        Parameters
        ----------
        problem_angles, transverse_angles : array_like, shape (L,)
            phi_k and theta_k, of any size.
        kick : int, optional
            Site that gets a Z after the last layer.
        progress : callable, optional
            Called now and then with the number of layers done since its last call.
        """
        phi = finite("problem_angles", problem_angles, (None,))
        theta = finite("transverse_angles", transverse_angles, phi.shape)
        self._settled_or_raise()
        place = self._layout
        block = max(1, min(4096, CALL_AMPLITUDES >> place.bits))
        for start in range(0, len(phi), block):
            part = slice(start, start + block)
            self._advance(phi[part], *self._angles(theta[part]))
            if progress is not None:
                progress(len(phi[part]))
        if kick is not None:
            self.kick(kick)

    def kick(self, site: int) -> None:
        """Apply Z to one site (carried as a sign; no pass over the amplitudes)."""
        self._signs ^= 1 << integer("site", site, low=0, high=self.n_sites - 1)

    def _angles(self, theta: Floats) -> tuple[Floats, Floats, Floats]:
        """Cosine products, frames and tangents of layers; right angles join the frame."""
        n, bits = self.n_sites, self._layout.bits
        behind = np.where(_bits(self._signs, n), -1.0, 1.0)
        weights, which, times = np.unique(self.weights * behind, return_inverse=True, return_counts=True)
        angle = theta[:, None] * weights
        turns = np.rint(angle * (2 / math.pi))
        rest = (angle - turns * RIGHT_ANGLE[0]) - turns * RIGHT_ANGLE[1]
        tangent, scale = np.tan(rest), (np.cos(rest) ** times).prod(axis=1)
        frames, tangents = np.ones((len(theta), bits + 1)), np.zeros((len(theta) + 1, bits + 1))
        columns = np.arange(min(n, bits))
        if self._half:
            columns = np.append(columns, bits)
        tangents[1:, columns] = tangent[:, which[: len(columns)]]
        if self._half:
            tangents[1:, bits] *= self._parity * (1 - 2 * (n // 2 % 2))
        if self._flips or turns.any():
            made = turns.astype(np.int64)[:, which]
            before = np.cumsum(made, axis=0) - made + _bits(self._flips, n)
            frames[:, columns] = np.where(before[:, : len(columns)] & 1, -1.0, 1.0)
            total = made.sum(axis=0)
            self._flips ^= sum(1 << i for i in range(n) if total[i] & 1)
            self._turns += int(total.sum())
        if self._owed is not None:
            tangents[0] = self._owed
        self._owed = tangents[-1].copy() if self._groups == 2 else None
        return scale, frames, tangents

    def _advance(self, phi: Floats, scales: Floats, frames: Floats, tangents: Floats) -> None:
        """Sweep; with two groups the rotations of the group not swept last stay owed."""
        self._whole = False
        shared = np.zeros(1 + 2 * len(phi), np.int64)
        tiles = [tiling.tiles for tiling in self._tilings]
        parts = 16 * self._shares if self._shares > 1 else max(1, (1 << self._layout.bits) // CALL_AMPLITUDES)
        steps = np.array([max(1, count // parts) for count in tiles])
        limit = max(1, CALL_AMPLITUDES // ((1 << self._layout.bits) // max(tiles)))

        def loop(share: int) -> None:
            k = 0
            while k < len(phi) and not shared[0]:
                k = run(
                    self._x, self._scratch[share], self._tilings, self._groups, self._group,
                    frames, phi, scales, tangents, steps, shared, k, limit,
                )  # fmt: skip
                if k < len(phi):
                    time.sleep(0)

        def stop() -> None:
            shared[0] = 1

        self._together(loop, stop)
        self._group = (self._group + len(phi)) % self._groups
        self._whole = True

    def _together(self, loop: Callable[[int], None], stop: Callable[[], None]) -> None:
        """Run loop(share) on every thread, this one included; `stop` makes all of them end soon."""
        if self._shares == 1:
            loop(0)
            return
        with ThreadPoolExecutor(self._shares - 1) as pool:
            others = [pool.submit(loop, share) for share in range(1, self._shares)]
            try:
                loop(0)
                for other in others:
                    other.result()
            except BaseException:
                stop()
                raise

    def _settle(self) -> None:
        """Apply the rotations still owed."""
        self._settled_or_raise()
        if self._owed is None:
            return
        tangents = np.zeros((2, len(self._owed)))
        tangents[0] = self._owed
        self._owed = None
        self._advance(np.zeros(1), np.ones(1), np.ones((1, tangents.shape[1])), tangents)

    def _settled_or_raise(self) -> None:
        if not self._whole:
            raise AnnealRefError("the register was interrupted in the middle of a layer; load a state and start again")

    # -------------------------------------------------------------------------------------------- read-outs
    def _reader(self) -> Reader:
        """Give access to the stored amplitudes, nothing owed."""
        self._settle()
        return Reader(self._x, self._layout, self._together)

    def amplitudes(self) -> NDArray[np.complex128]:
        """Amplitudes psi, shape (2^N,); site 0 is the least significant bit of the index."""
        stored, n = self._reader().stored(), self.n_sites
        full = np.concatenate([stored, self._parity * stored[::-1]]) if self._half else stored[: 1 << n]
        axes = tuple(n - 1 - i for i in range(n) if self._flips >> i & 1)  # axis n - 1 - i is site i
        cube: NDArray[np.complex128] = np.flip(np.asarray(full).reshape((2,) * n), axes)
        full = np.ascontiguousarray(cube).reshape(-1)
        full *= QUARTERS[self._turns % 4]
        if self._signs:
            full *= 1 - 2.0 * (np.bitwise_count(np.arange(1 << n, dtype=np.int64) & self._signs) & 1)
        return full

    def probabilities(self) -> Floats:
        """Probabilities, shape (2^N,)."""
        psi = self.amplitudes()
        return psi.real**2 + psi.imag**2

    def amplitude_of(self, spins: ArrayLike) -> NDArray[np.complex128]:
        """Amplitudes of the configurations spins (shots, N) of +-1."""
        rows = signs("spins", spins, (None, self.n_sites))
        n, place = self.n_sites, self._layout
        z = ((rows < 0).astype(np.int64) << np.arange(n)).sum(axis=1)
        sign = 1.0 - 2.0 * (np.bitwise_count(z & self._signs) & 1)
        y = z ^ self._flips
        if self._half:
            down = y >> place.bits & 1
            sign = np.where(down, self._parity * sign, sign)
            y = np.where(down, y ^ ((1 << n) - 1), y)
        values: NDArray[np.complex128] = self._reader().at(y) * sign * QUARTERS[self._turns % 4]
        return values

    def log_probability(self, spins: ArrayLike) -> Floats:
        """Natural logarithms of the probabilities of spins (shots, N); -inf where a probability is 0."""
        with np.errstate(divide="ignore"):
            values: Floats = 2 * np.log(np.abs(self.amplitude_of(spins)))
        return values

    def norm(self) -> float:
        """Sum of the probabilities."""
        return float(self._reader().weights().sum()) * (2 if self._half else 1)

    def moments(self) -> tuple[Floats, Floats, Floats]:
        """<Z_i> (N,), <Z_i Z_j> (N, N) and <X_i> (N,), not divided by the norm."""
        reader = self._reader()
        z, zz = reader.spin_moments()
        x = reader.transverse_moments(self._parity if self._half else 0)
        n, bits = self.n_sites, self._layout.bits
        if self._half:
            zz = np.pad(2 * zz, (0, 1))
            zz[bits, :bits] = zz[:bits, bits] = 2 * z[:bits]
            zz[bits, bits] = 2 * z[bits]
            z = np.zeros(n)
        frame = np.where(_bits(self._flips, n), -1.0, 1.0)
        behind = np.where(_bits(self._signs, n), -1.0, 1.0)
        return z[:n] * frame, zz[:n, :n] * np.outer(frame, frame), x[:n] * behind

    def sample(self, shots: int, seed: int) -> NDArray[np.int8]:
        """Draw configurations (shots, N) of +-1 from the probabilities; the same for the same seed."""
        shots = integer("shots", shots, low=0)
        generator = np.random.PCG64(integer("seed", seed, low=0))
        place, n = self._layout, self.n_sites
        uniform = (generator.random_raw(shots) >> np.uint64(11)).astype(np.float64) * 2.0**-53
        flip = (generator.random_raw(shots) >> np.uint64(63)).astype(np.int64)
        z = self._reader().draw(uniform)
        z ^= self._flips & ((1 << place.bits) - 1)
        if self._half:
            last = self._flips >> place.bits & 1
            z = (z | last << place.bits) ^ (flip * ((1 << n) - 1))
        return (1 - 2 * (z[:, None] >> np.arange(n) & 1)).astype(np.int8)


def _stored_bits(n: int, symmetric: bool, precision: str) -> int:
    return n - 1 if _is_half(n, symmetric, precision) else max(n, smallest(precision))


def _is_half(n: int, symmetric: bool, precision: str) -> bool:
    """Whether the half is stored; small systems are stored whole, padded by idle spins that stay up."""
    return symmetric and n - 1 >= smallest(precision)


def _bits(mask: int, n: int) -> NDArray[np.int64]:
    return np.array([mask >> i & 1 for i in range(n)], np.int64)
