"""The stored amplitudes of a transverse-field Ising system and the layers that act on them."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import ArrayLike, NDArray


def _spins(n: int) -> NDArray[np.int8]:
    return (1 - 2 * ((np.arange(1 << n)[:, None] >> np.arange(n)) & 1)).astype(np.int8)


class Register:
    """Amplitudes of N spins under layers psi <- prod_k X(theta_k) D(phi_k) psi."""

    def __init__(
        self,
        couplings: ArrayLike,
        fields: ArrayLike,
        weights: ArrayLike,
        symmetric: bool = False,
        precision: str = "double",
        threads: int = 1,
    ) -> None:
        self.couplings = np.array(couplings, float)
        self.fields = np.array(fields, float)
        self.weights = np.array(weights, float)
        self.n_sites = n = len(self.fields)
        self.symmetric, self.precision, self.threads = symmetric, precision, threads
        s = _spins(n).astype(float)
        self._energy = np.einsum("zi,zi->z", s @ np.triu(self.couplings, 1), s) + s @ self.fields
        self.load_plus()

    @staticmethod
    def bytes_needed(n_sites: int, symmetric: bool = False, precision: str = "double") -> int:
        """Bytes of the stored state and of the work space."""
        return (16 if precision == "double" else 8) << (n_sites - symmetric)

    def load_plus(self) -> None:
        """Set |+...+>."""
        self._psi = np.full(1 << self.n_sites, 2.0 ** (-self.n_sites / 2), complex)

    def load(self, psi: ArrayLike) -> None:
        """Set the state to psi (2^N,), taken as it is."""
        self._psi = np.array(psi, complex)

    def layers(
        self,
        problem_angles: ArrayLike,
        transverse_angles: ArrayLike,
        kick: int | None = None,
        progress: Callable[[int], None] | None = None,
    ) -> None:
        """Apply layers k = 0, 1, ...: first exp(-i phi_k E), then exp(+i theta_k sum w_i X_i); then Z on `kick`; progress(layers done since the last call)."""
        phis, thetas = np.atleast_1d(np.asarray(problem_angles, float)), np.atleast_1d(np.asarray(transverse_angles, float))
        for phi, theta in zip(phis, thetas, strict=True):
            self._psi *= np.exp(-1j * phi * self._energy)
            for i in range(self.n_sites):
                a = self._psi.reshape(-1, 2, 1 << i)
                t = theta * self.weights[i]
                self._psi = (np.cos(t) * a + 1j * np.sin(t) * a[:, ::-1]).reshape(-1)
            if progress is not None:
                progress(1)
        if kick is not None:
            self.kick(kick)

    def kick(self, site: int) -> None:
        """Z on one site."""
        self._psi *= _spins(self.n_sites)[:, site]

    def amplitudes(self) -> NDArray[np.complex128]:
        """Amplitudes (2^N,)."""
        return self._psi.copy()

    def probabilities(self) -> NDArray[np.float64]:
        """Probabilities (2^N,)."""
        return np.abs(self._psi) ** 2

    def norm(self) -> float:
        """Sum of the probabilities."""
        return float(self.probabilities().sum())

    def moments(self) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
        """<Z_i> (N,), <Z_i Z_j> (N, N), <X_i> (N,)."""
        p, s = self.probabilities(), _spins(self.n_sites).astype(float)
        x = [2 * np.vdot(a[:, 0], a[:, 1]).real for a in (self._psi.reshape(-1, 2, 1 << i) for i in range(self.n_sites))]
        return p @ s, s.T @ (s * p[:, None]), np.array(x)

    def sample(self, shots: int, seed: int) -> NDArray[np.int8]:
        """Configurations (shots, N) of +-1 drawn from the probabilities."""
        c = np.cumsum(self.probabilities())
        z = np.searchsorted(c, np.random.default_rng(seed).random(shots) * c[-1], side="right")
        return (1 - 2 * ((z[:, None] >> np.arange(self.n_sites)) & 1)).astype(np.int8)

    def amplitude_of(self, spins: ArrayLike) -> NDArray[np.complex128]:
        """Amplitudes of the configurations spins (shots, N)."""
        z = ((1 - np.asarray(spins, np.int64)) // 2) @ (1 << np.arange(self.n_sites))
        return self._psi[z]

    def log_probability(self, spins: ArrayLike) -> NDArray[np.float64]:
        """Natural logarithms of the probabilities of spins (shots, N)."""
        with np.errstate(divide="ignore"):
            return np.log(np.abs(self.amplitude_of(spins)) ** 2)
