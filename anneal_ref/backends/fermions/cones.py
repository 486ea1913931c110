r"""`Cones`: the evolution of Majorana operators, each within its light cone.

With X_i = i c_2i c_2i+1 and Z_i Z_i+1 = i c_2i+1 c_2i+2 (Jordan and Wigner) every term of H joins two neighbouring
Majorana operators, and the exponentials of a splitting are rotations of neighbours:

    D(phi)     c_2i+1 -> cos(2 phi J_i) c_2i+1 + sin(2 phi J_i) c_2i+2,      and c_2i+2 accordingly,
    X(theta)   c_2i   -> cos(2 theta w_i) c_2i - sin(2 theta w_i) c_2i+1,    and c_2i+1 accordingly.

The operators at the end of an evolution are U^+ c_k U = sum_l M[k, l] c_l with M orthogonal and, but for tails that
fall faster than exponentially, narrow: information travels at a finite speed (E. H. Lieb and D. W. Robinson, Commun.
Math. Phys. 28, 251 (1972)). The columns of M evolve independently of each other; each is kept within the window of rows
that it has reached.

On a ring the parity prod_i X_i = +1 makes the operators antiperiodic, c_k+2N = -c_k. Z on a site, a kick, is moved
through the rest of the evolution to its end, where it changes no measurement of Z; on the way it turns the sign of that
site's transverse weight, and the parity stays even.

Reference: E. Lieb, T. Schultz, D. Mattis, Ann. Phys. 16, 407 (1961); P. Pfeuty, Ann. Phys. 57, 79 (1970).
"""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor

import numpy as np
from numpy.typing import NDArray

from anneal_ref.backends.exact.simd import VECTOR_BYTES
from anneal_ref.backends.fermions import compiled
from anneal_ref.backends.fermions.turning import BASE, DONE, HIGH, LOW

Floats = NDArray[np.float64]

EDGE = 1e-14
"""Amplitude at which a window widens."""

COLUMNS = 2 * VECTOR_BYTES // 8
"""Columns of M in a bundle: two machine vectors."""

_TABLE = 1 << 16


class Cones:
    """The columns of M, from the identity on.

    Parameters
    ----------
    n_sites : int
        N; there are 2 N operators.
    ring : bool
    width : int
        Rows to make room for at first; more is found where it is needed.
    threads : int
    """

    def __init__(self, n_sites: int, ring: bool, width: int, threads: int = 1) -> None:
        self.n_sites, self.ring, self.threads = n_sites, ring, threads
        first = np.arange(0, 2 * n_sites, COLUMNS)
        self.spans = np.zeros((len(first), 4), np.int64)
        self.spans[:, LOW], self.spans[:, HIGH] = first, np.minimum(first + COLUMNS, 2 * n_sites)
        self.cut = np.zeros(len(first))
        self.store = np.zeros((len(first), 0, COLUMNS))
        self._widen(max(width, COLUMNS))
        for b, (low, high, base, _) in enumerate(self.spans):
            self.store[b, low - base : high - base] = np.eye(high - low, COLUMNS)

    @property
    def widest(self) -> int:
        """Rows of the widest window."""
        return int((self.spans[:, HIGH] - self.spans[:, LOW]).max())

    @property
    def edge(self) -> float:
        """Largest norm of the outermost rows, two on either side, that a layer has found; what lies beyond is less."""
        return float(np.sqrt(self.cut.max()))

    def layers(
        self,
        problem_angles: Floats,
        transverse_angles: Floats,
        couplings: Floats,
        weights: Floats,
        progress: Callable[[float], None] = lambda done: None,
    ) -> None:
        """Apply D(problem_angles[k]), then X(transverse_angles[k]), for k = 0, 1, ...

        Parameters
        ----------
        problem_angles, transverse_angles : ndarray, shape (layers,)
        couplings, weights : ndarray, shape (N,)
            In the order of the chain; the last coupling is that from its end to its start.
        progress : callable
            Told how many layers have been done.
        """
        few = max(32, _TABLE // self.n_sites)
        for start in range(0, len(problem_angles), few):
            part = slice(start, start + few)
            tables = (*_turns(problem_angles[part], couplings), *_turns(transverse_angles[part], weights))
            self.spans[:, DONE] = 0
            count = len(tables[0])
            self._advance(tables)
            while (self.spans[:, DONE] < count).any():
                self._widen(2 * self.store.shape[1])
                self._advance(tables)
            progress(count)

    def norms(self) -> Floats:
        """Return the sum of squares of every row of M, shape (2N,); 1 but for rounding and what the windows leave."""
        norms = np.zeros(2 * self.n_sites)
        compiled.sum_rows(self.store.reshape(-1), self.store.shape[1], self.spans, norms)
        return norms

    def pairs(self, reach: int) -> Floats:
        """Return the upper band, shape (2N, reach + 1), of M W M^T, W the covariance of |+...+>."""
        band = np.zeros((2 * self.n_sites, reach + 1))
        room = self.store.shape[1]
        partner = np.empty(room * COLUMNS)
        compiled.pair_rows(self.store.reshape(-1), room, self.spans, self.ring, partner, band)
        return band

    def matrix(self) -> Floats:
        """Return M, shape (2N, 2N)."""
        rows = 2 * self.n_sites
        matrix = np.zeros((rows, rows))
        for b, (low, high, base, _) in enumerate(self.spans):
            k, first = np.arange(low, high), b * COLUMNS
            signs = 1.0 - 2.0 * (k // rows % 2)
            columns = min(COLUMNS, rows - first)
            matrix[k % rows, first : first + columns] = signs[:, None] * self.store[b, k - base, :columns]
        return matrix

    def _advance(self, tables: tuple[Floats, ...]) -> None:
        count = len(self.spans)
        shares = min(self.threads, count)
        ends = [count * share // shares for share in range(shares + 1)]
        flat, room = self.store.reshape(-1), self.store.shape[1]

        def work(share: int) -> None:
            first, stop = ends[share : share + 2]
            compiled.advance(flat, room, self.spans, self.cut, first, stop, self.n_sites, self.ring, EDGE, *tables)

        if shares == 1:
            work(0)
            return
        with ThreadPoolExecutor(shares) as pool:
            list(pool.map(work, range(shares)))

    def _widen(self, room: int) -> None:
        """Move the bundles to a store with more room, each around the rows that its columns start from."""
        old, spans = self.store, self.spans
        room = min(room + room % 2, 4 * self.n_sites + COLUMNS)
        self.store = np.zeros((len(old), room, COLUMNS))
        middle = np.arange(len(old)) * COLUMNS + COLUMNS // 2
        base = middle - room // 2
        if not self.ring:
            base = np.clip(base, 0, max(0, 2 * self.n_sites - room))
        for b, (low, high, before, _) in enumerate(spans):
            if old.shape[1]:
                self.store[b, low - base[b] : high - base[b]] = old[b, low - before : high - before]
        spans[:, BASE] = base


def _turns(angles: Floats, strengths: Floats) -> tuple[Floats, Floats]:
    """Cosines and sines of twice the angles times the strengths, each shape (layers, N or a little more)."""
    padded = np.zeros(-(-len(strengths) // COLUMNS) * COLUMNS)
    padded[: len(strengths)] = strengths
    cosines, sines = np.empty((2, len(angles), len(padded)))
    compiled.tables(np.ascontiguousarray(angles), padded, cosines, sines)
    return cosines, sines
