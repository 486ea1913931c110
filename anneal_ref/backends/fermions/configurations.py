r"""Configurations of a chain: sampling them, and their probabilities.

Along a chain the products of neighbouring spins and one spin give all the others. Without fields that one spin is +1 or
-1 with equal probability, independent of the products, so that

    P(z) = 1/2 prod_b P(tau_b | products before),      tau_b = z_b z_b+1.

Where one of these conditional probabilities is small, rounding of the covariance spoils what depends on it. Then P is
computed from amplitudes instead, which are as small as its square root: from the N occupied modes V of the state (the
eigenvectors of i Gamma with eigenvalue 1) and those of the even superposition of z and -z,

    P(z) = |det( (V[2b+1] + i tau_b V[2b+2])_b )| / 2^(N/2 + 1),

b running over all bonds including that from the end to the start.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from anneal_ref.backends.exact.layout import aligned
from anneal_ref.backends.fermions import compiled
from anneal_ref.backends.fermions.covariance import Covariance
from anneal_ref.backends.fermions.eliminating import window
from anneal_ref.backends.memory import require_memory

Floats = NDArray[np.float64]

_RARE = 1e-6
_SHOTS = 256
# of all matrices that are factorised together
_ELEMENTS = 1 << 20


@dataclass(frozen=True)
class Configurations:
    """Samples and probabilities of a state; spins are in the order of the chain.

    Parameters
    ----------
    covariance : Covariance
    """

    covariance: Covariance

    def sample(self, shots: int, seed: int) -> NDArray[np.int8]:
        """Return independent configurations, shape (shots, N)."""
        n = self.covariance.n_sites
        random = np.random.default_rng(seed)
        spins = np.empty((shots, n), np.int8)
        for start in range(0, shots, _SHOTS):
            draws = random.random((min(_SHOTS, shots - start), n))
            products = np.empty((len(draws), n - 1), np.int8)
            self._measure(products, draws[:, 1:])
            part = spins[start : start + _SHOTS]
            part[:, 0] = np.where(draws[:, 0] < 0.5, 1, -1)
            part[:, 1 + self._order] = products
            np.cumprod(part, axis=1, dtype=np.int8, out=part)
        return spins

    def log_probability(self, spins: NDArray[np.int8]) -> Floats:
        """Return ln P of each row of spins (shots, N); -inf where it is zero."""
        products = np.ascontiguousarray((spins[:, :-1] * spins[:, 1:])[:, self._order])
        logs, least = self._measure(products, None)
        rare = np.flatnonzero(least < _RARE)
        few = max(1, _ELEMENTS // self.covariance.n_sites**2)
        for start in range(0, len(rare), few):
            part = rare[start : start + few]
            logs[part] = self._from_amplitudes(spins[part])
        return np.asarray(logs - np.log(2))

    @cached_property
    def _order(self) -> NDArray[np.intp]:
        """Bonds in the order in which they are measured: along the chain, or from both ends of a cut ring."""
        count = self.covariance.n_sites - 1
        order = np.arange(count)
        if self.covariance.ring:
            order[::2], order[1::2] = np.arange((count + 1) // 2), count - 1 - np.arange(count // 2)
        return order

    @cached_property
    def _band(self) -> Floats:
        """Covariance of the operators of all bonds in that order, as an upper band."""
        k = np.stack([2 * self._order + 1, 2 * self._order + 2], axis=1).ravel()
        rows = len(k)
        # on a cut ring neighbours on one side lie two bonds apart in the order
        reach = min(rows - 1, 2 * self.covariance.reach + 4 if self.covariance.ring else self.covariance.reach)
        ahead = np.arange(rows)[:, None] + np.arange(reach + 1)
        inside = ahead < rows
        return np.where(inside, self.covariance.elements(k[:, None], k[np.where(inside, ahead, 0)]), 0.0)

    @cached_property
    def _occupied(self) -> NDArray[np.complex128]:
        n = self.covariance.n_sites
        require_memory(300 * n * n, f"the modes of {n} spins, for configurations that are rare", ("fewer spins",))
        gamma = self.covariance.block(np.arange(2 * n))
        return np.asarray(np.linalg.eigh(1j * gamma)[1][:, n:])

    def _measure(self, products: NDArray[np.int8], draws: Floats | None) -> tuple[Floats, Floats]:
        logs, least = np.zeros(len(products)), np.ones(len(products))
        given = draws is None
        uniform = np.empty((0, 0)) if draws is None else np.ascontiguousarray(draws)
        room = window.py_func(self._band.shape[1] - 1)
        work = aligned(room.slots * room.stride, np.float64)
        work[:] = 0.0
        compiled.measure(self._band, work, uniform, products, given, logs, least)
        return logs, least

    def _from_amplitudes(self, spins: NDArray[np.int8]) -> Floats:
        """Logarithms of the probabilities of rows of spins or their flips."""
        modes = self._occupied
        products = (spins * np.roll(spins, -1, axis=1))[:, :, None]
        # c_2N = -c_0 in an even state
        ahead = np.concatenate([modes[2::2], -modes[:1]])
        with np.errstate(divide="ignore"):
            return np.asarray(np.linalg.slogdet((modes[1::2] + 1j * products * ahead) / np.sqrt(2))[1])
