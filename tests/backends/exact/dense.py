"""Slow twin of the register: the same layers in plain numpy on the whole space, nothing shared with the kernels."""

import numpy as np


def spins(n: int) -> np.ndarray:
    """All configurations (2^n, n) of +-1; site 0 is the least significant bit and bit 0 means +1."""
    return 1 - 2 * ((np.arange(1 << n)[:, None] >> np.arange(n)) & 1)


class Dense:
    """State vector (2^N,) evolved by prod_k X(theta_k) D(phi_k)."""

    def __init__(self, couplings, fields, weights):
        self.n = len(fields)
        self.weights = np.asarray(weights, float)
        s = spins(self.n)
        upper = np.triu(couplings, 1)
        self.energy = np.einsum("zi,ij,zj->z", s, upper, s) + s @ np.asarray(fields, float)
        self.psi = np.full(1 << self.n, 2.0 ** (-self.n / 2), complex)

    def layers(self, problem_angles, transverse_angles):
        for phi, theta in zip(problem_angles, transverse_angles, strict=True):
            self.psi = self.psi * np.exp(-1j * phi * self.energy)
            for i in range(self.n):
                a = self.psi.reshape(-1, 2, 1 << i)
                angle = theta * self.weights[i]
                self.psi = (np.cos(angle) * a + 1j * np.sin(angle) * a[:, ::-1]).reshape(-1)
        return self

    def kick(self, site):
        self.psi = self.psi * spins(self.n)[:, site]
        return self

    def moments(self):
        p = np.abs(self.psi) ** 2
        s = spins(self.n)
        x = [
            2 * np.vdot(a[:, 0], a[:, 1]).real for a in (self.psi.reshape(-1, 2, 1 << i) for i in range(self.n))
        ]
        return p @ s, s.T @ (s * p[:, None]), np.array(x)
