r"""`Covariance`: the Gaussian state of a chain, all of it in the pair correlations of its Majorana operators.

    Gamma[k, l] = i <c_k c_l>  for k != l, real and skew;      <X_i> = Gamma[2i, 2i+1],
    <Z_i Z_j> = Pf Gamma[2i+1 .. 2j]  for i < j,

since Z_i Z_j is the product of all bonds in between. On a ring the indices go on beyond the end with c_k+2N = -c_k, so
that bonds and products across the end are like all others.

Reference: E. Barouch and B. M. McCoy, Phys. Rev. A 3, 786 (1971), for the Pfaffians.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from anneal_ref.backends.exact.layout import aligned
from anneal_ref.backends.fermions import compiled
from anneal_ref.backends.fermions.cones import Cones
from anneal_ref.backends.fermions.eliminating import window

Floats = NDArray[np.float64]

_BEYOND = 1e-12
_ROUNDING = 1e-16


@dataclass(frozen=True, slots=True, eq=False)
class Covariance:
    """Gamma as an upper band.

    Parameters
    ----------
    band : ndarray, shape (2N, reach + 1)
        Entry (k, d) is Gamma[k, k + d], on a ring with k + d beyond the end; all elements further apart are zero.
    ring : bool
    local : bool
        Whether the state grew from a product state, so that nothing is correlated beyond the light cone.
    """

    band: Floats
    ring: bool
    local: bool

    @property
    def n_sites(self) -> int:
        """Number of spins N."""
        return len(self.band) // 2

    @property
    def reach(self) -> int:
        """Largest distance of two operators that are correlated, on a ring the shorter way."""
        return int(self.band.shape[1]) - 1

    @property
    def x(self) -> Floats:
        """<X_i> at every position, shape (N,)."""
        return self.band[::2, 1]

    @property
    def bonds(self) -> Floats:
        """<Z_i Z_i+1>, shape (N,); the last is that from the end of a ring to its start, or 0."""
        return self.band[1::2, 1]

    def elements(self, one: ArrayLike, other: ArrayLike) -> Floats:
        """Return Gamma[one, other] for indices that broadcast; on a ring any whole numbers, else from 0 to 2N - 1."""
        rows, reach = self.band.shape[0], self.reach
        k, m = np.broadcast_arrays(one, other)
        if not self.ring:
            distance = np.abs(m - k)
            near = distance <= reach
            return np.asarray(np.sign(m - k) * near * self.band[np.minimum(k, m), np.where(near, distance, 0)])
        rounds, distance = np.divmod(m - k, rows)
        near, back = distance <= reach, rows - distance <= reach
        # c_k c_m = c_m c_k+2N: one sign for the order, one for going on beyond the end
        first = np.where(near, k, m) % rows
        distance = np.where(near, distance, np.where(back, rows - distance, 0))
        return np.asarray((1.0 - 2.0 * (rounds % 2)) * self.band[first, distance])

    def block(self, indices: ArrayLike) -> Floats:
        """Return the square block of Gamma with these indices."""
        k = np.asarray(indices)
        return self.elements(k[:, None], k[None, :])

    def correlations(self, ends: NDArray[np.int64], reach: int) -> Floats:
        """Return <Z_i Z_i+r> at [i, r-1], shape (N, reach); zero beyond `ends`.

        Parameters
        ----------
        ends : ndarray of int64, shape (N,)
            How many further positions each position may be correlated with.
        reach : int
            Largest r; below N, on a ring at most N/2.
        """
        out = np.zeros((self.n_sites, reach))
        room = window.py_func(2 * reach)
        s, work = (aligned(room.slots * room.stride, np.float64) for _ in range(2))
        s[:] = 0.0
        compiled.correlations(self.band, ends, s, work, out)
        return out

    def all_correlations(self, ends: NDArray[np.int64]) -> Floats:
        """Return <Z_i Z_i+r> for all r up to where the last ones vanish, because light cones no longer overlap."""
        most = max(1, int(ends.max()))
        # two cones of half the reach each
        reach = min(most, self.reach // 2 + 2) if self.local else most
        while True:
            found = self.correlations(ends, reach)
            if reach == most or not np.abs(found[:, -2:]).max() > _BEYOND:
                return found
            reach = min(most, 2 * reach)


def grown(cones: Cones, start: Floats | None) -> Covariance:
    """Return the state of an evolution.

    Parameters
    ----------
    cones : Cones
    start : ndarray, shape (N, N), optional
        i <c_2i c_2j+1> at the start, where all other pairs are uncorrelated; |+...+> if not given.
    """
    n, ring = cones.n_sites, cones.ring
    if start is None:
        reach = cones.widest - 1
        return Covariance(_trimmed(cones.pairs(min(reach, n) if ring else reach)), ring, True)
    matrix = cones.matrix()
    half = matrix[:, ::2] @ start @ matrix[:, 1::2].T
    whole = half - half.T
    k, d = np.arange(2 * n)[:, None], np.arange(n + 1 if ring else 2 * n)[None, :]
    band = whole[k, (k + d) % (2 * n)] * np.where(k + d < 2 * n, 1.0, -1.0 if ring else 0.0)
    return Covariance(_trimmed(band), ring, False)


def _trimmed(band: Floats) -> Floats:
    """Leave out what is below rounding at the far end."""
    reach = int(np.flatnonzero(np.abs(band).max(axis=0) > _ROUNDING)[-1])
    return np.ascontiguousarray(band[:, : max(1, reach) + 1])


def grown_bytes(n_sites: int, width: int, local: bool) -> int:
    """Bytes of the cones of an evolution with windows of `width` rows, and of its covariance."""
    rows = 2 * n_sites
    return 8 * rows * (width + (2 * min(width, rows) if local else 5 * rows))
