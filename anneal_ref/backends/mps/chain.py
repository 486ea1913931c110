r"""`Chain`: a matrix product state with its blocks, moved by sweeps of the time-dependent variational principle.

A sweep to the right goes through the splitting of the tangent-space projector

    two sites forward, one site back, two sites forward, ...      or      one site forward, bond back, ...

so that a sweep of length tau is a method of first order, and its mirror image is its adjoint. `flip` turns the chain
round; a step is a sweep, a flip, another sweep, a flip.

References
----------
J. Haegeman, C. Lubich, I. Oseledets, B. Vandereycken and F. Verstraete, Phys. Rev. B 94, 165116 (2016).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from anneal_ref.backends.mps import compiled
from anneal_ref.backends.mps.product import Product, Tensor
from anneal_ref.backends.mps.wiring import Floats, Wiring
from anneal_ref.model.instances import Instance

Block = tuple[Tensor, Tensor, Tensor]
"""Transverse and problem Hamiltonian and carriers of the sites on one side of a bond."""

Strengths = tuple[float, float]
"""Transverse and problem strength, G and P."""

_NONE = np.zeros(1)
# what is asked of the second state of a pair, of which only the energy counts
_SECOND_STATE = 1e-3
_TWO_SPINS = np.array([1.0, -1.0, -1.0, 1.0])
_FIRST, _SECOND = np.array([1.0, 1.0, -1.0, -1.0]), np.array([1.0, -1.0, 1.0, -1.0])


@dataclass(slots=True)
class Limits:
    """What the sweeps may keep.

    Parameters
    ----------
    bond_dimension : int
        Cap on every bond.
    truncation : float
        Relative weight that a division may discard.
    krylov : float
        Error of a local exponential, relative to its tensor.
    """

    bond_dimension: int
    truncation: float
    krylov: float


class Chain:
    """Tensors, blocks and counters of an evolution.

    Parameters
    ----------
    product : Product
        Right-canonical, its centre on position 0. The chain takes the tensors over.
    instance : Instance
        Couplings, fields and weights, in lattice order.
    limits : Limits
    """

    def __init__(self, product: Product, instance: Instance, limits: Limits) -> None:
        order = product.order
        self.limits = limits
        self.order = order
        self.symmetric = product.symmetric
        self.tensors, self.dims = product.tensors, list(product.dims)
        self.fields, self.weights = instance.fields[order].copy(), instance.transverse[order].copy()
        self.wiring = Wiring(np.ascontiguousarray(instance.coupling_matrix()[np.ix_(order, order)]))
        self._mirror = self.wiring.mirrored()
        n = len(order)
        self.discarded = np.zeros(n + 1)
        self.singular: list[NDArray[Any] | None] = [None] * (n + 1)
        self.exponentials = self.vectors = self.largest = 0
        self.left: list[Any] = []
        self.right: list[Any] = []
        self._lay_blocks()

    @property
    def n_sites(self) -> int:
        """Number of spins."""
        return len(self.tensors)

    def product(self) -> Product:
        """Return the state; the tensors stay shared with the chain."""
        return Product(list(self.tensors), list(self.dims), self.symmetric, self.order)

    @property
    def bond_dimensions(self) -> tuple[int, ...]:
        """Dimensions of all bonds, the outer ones included."""
        return tuple(sum(dims) for dims in self.dims)

    def replace(self, product: Product) -> None:
        """Take over the tensors of another state, right-canonical and in the same order; counters go on."""
        self.tensors, self.dims = product.tensors, list(product.dims)
        self._lay_blocks()

    def norm(self) -> float:
        """Return the norm of the state; its centre must be on the first site."""
        return float(np.linalg.norm(self.tensors[0].astype(np.complex128)))

    def energies(self) -> tuple[float, float]:
        """Return <-sum w X> and <E>; the centre must be on the first site."""
        hx, hz, _ = compiled.absorb(
            self.right[1], np.ascontiguousarray(self.tensors[0].swapaxes(1, 2)), self._mirror.mixes[-1],
            self._mirror.near[-1], self.weights[0], self.fields[0], self.dims[1][0], self.dims[0][0], self.symmetric,
        )  # fmt: skip
        norm = self.norm() ** 2
        return float(hx[0, 0].real) / norm, float(hz[0, 0].real) / norm

    def sweep(self, tau: float, strengths: Strengths, two_site: bool) -> None:
        """Move the centre from the first to the last site, evolving by tau.

        Bonds that may still grow are always updated by two sites; `two_site` asks it of all.
        """
        last = self.n_sites - 1
        if last == 0:
            self._evolve_site(0, tau, strengths)
        for p in range(last):
            if two_site or self._may_grow(p + 1):
                self._evolve_pair(p, tau, strengths)
                if p < last - 1:
                    self._evolve_site(p + 1, -tau, strengths)
            else:
                self._evolve_site(p, tau, strengths)
                self._pass_bond(p, tau, strengths)
                if p == last - 1:
                    self._evolve_site(last, tau, strengths)

    def relax(self, strengths: Strengths, tolerance: float, look_up: bool = False) -> float:
        """Move the centre from the first to the last site, each pair on the way taken to its lowest state.

        Parameters
        ----------
        strengths : (float, float)
        tolerance : float
            Residual of a local state, relative to the spread of its Hamiltonian.
        look_up : bool
            Look for the second state of every pair as well.

        Returns
        -------
        float
            The smallest energy between the first and the second state of a pair; infinite unless looked for.
        """
        gap, last = np.inf, self.n_sites - 1
        for p in range(max(last, 1)):
            sites = min(2, self.n_sites)
            theta = self._joined(p) if sites == 2 else self.tensors[p]
            theta, energy = self._lowest(theta, p, sites, strengths, tolerance, theta[None][:0])
            if look_up and theta.size > 1:
                other = np.random.default_rng(p).normal(size=theta.shape).astype(theta.dtype)
                second = self._lowest(other, p, sites, strengths, _SECOND_STATE, theta[None])[1]
                gap = min(gap, second - energy)
            if sites == 2:
                self._part(p, theta)
            else:
                self.tensors[p] = theta
        return gap

    def flip(self) -> None:
        """Turn the chain round, so that its last site becomes the first."""
        self.tensors = [np.ascontiguousarray(tensor.swapaxes(1, 2)) for tensor in self.tensors[::-1]]
        self.left, self.right = self.right[::-1], self.left[::-1]
        self.wiring, self._mirror = self._mirror, self.wiring
        for name in ("dims", "discarded", "singular", "fields", "weights", "order"):
            setattr(self, name, getattr(self, name)[::-1])

    def _lay_blocks(self) -> None:
        n = self.n_sites
        self.left, self.right = [None] * (n + 1), [None] * (n + 1)
        self.left[0] = self._empty_block(self.dims[0])
        self.right[n] = self._empty_block(self.dims[n])
        self.flip()
        for p in range(n - 1):
            self._grow_left(p)
        self.flip()

    def _empty_block(self, dims: tuple[int, int]) -> Block:
        dtype = self.tensors[0].dtype
        shape = dims if self.symmetric else (1, 1)
        return np.zeros((1, 1), dtype), np.zeros((1, 1), dtype), np.zeros((0, *shape), dtype)

    def _may_grow(self, bond: int) -> bool:
        d, n = sum(self.dims[bond]), self.n_sites
        side = min(bond, n - bond)
        return d < self.limits.bond_dimension and (side > 40 or d < 1 << side)

    def _grow_left(self, p: int) -> None:
        self.left[p + 1] = compiled.absorb(
            self.left[p], self.tensors[p], self.wiring.mixes[p], self.wiring.near[p], self.weights[p], self.fields[p],
            self.dims[p][0], self.dims[p + 1][0], self.symmetric,
        )  # fmt: skip

    def _evolved(self, theta: Tensor, p: int, sites: int, tau: float, strengths: Strengths) -> Tensor:
        """Return the tensor of `sites` open sites from position p on, evolved by tau."""
        right = p + sites
        out, vectors = compiled.evolve(
            theta, tau, self.limits.krylov, self.left[p], self.right[right], self.wiring.wires[sites][p],
            self._inner(p, sites), self._flips(p, sites), strengths, (self.dims[p][0], self.dims[right][0]), sites,
            self.symmetric,
        )  # fmt: skip
        self.exponentials += 1
        self.vectors += vectors
        return np.asarray(out)

    def _lowest(
        self, theta: Tensor, p: int, sites: int, strengths: Strengths, tolerance: float, avoided: Tensor
    ) -> tuple[Tensor, float]:
        """Return the lowest state of `sites` open sites from position p on, orthogonal to some, and its energy."""
        right = p + sites
        out, energy, _ = compiled.lowest(
            theta, tolerance, avoided,
            self.left[p], self.right[right], self.wiring.wires[sites][p],
            self._inner(p, sites), self._flips(p, sites), strengths, (self.dims[p][0], self.dims[right][0]), sites,
            self.symmetric,
        )  # fmt: skip
        return out, energy

    def _flips(self, p: int, sites: int) -> Floats:
        """Return the transverse weights of the open spins, filled up to two."""
        weights = np.zeros(2)
        weights[:sites] = self.weights[p : p + sites]
        return weights

    def _inner(self, p: int, sites: int) -> Floats:
        """Return the problem energies of the open spins alone, one for every matrix of the tensor."""
        if sites == 2:
            coupling = float(self.wiring.couplings[p, p + 1])
            if self.symmetric:
                return coupling * _TWO_SPINS[:2]
            return np.asarray(coupling * _TWO_SPINS + self.fields[p] * _FIRST + self.fields[p + 1] * _SECOND)
        if sites == 1 and not self.symmetric:
            return np.asarray(self.fields[p] * _SECOND[:2])
        return _NONE

    def _joined(self, p: int) -> Tensor:
        return np.asarray(compiled.join(self.tensors[p], self.tensors[p + 1], self.dims[p + 1][0], self.symmetric))

    def _evolve_pair(self, p: int, tau: float, strengths: Strengths) -> None:
        self._part(p, self._evolved(self._joined(p), p, 2, tau, strengths))

    def _part(self, p: int, theta: Tensor) -> None:
        """Divide the tensor of positions p and p + 1, the centre going to the latter."""
        limits = self.limits
        a, b, even, odd, dropped, singular = compiled.divide(
            theta, limits.bond_dimension, limits.truncation, self.symmetric
        )
        self.tensors[p], self.tensors[p + 1], self.dims[p + 1] = a, b, (even, odd)
        self.discarded[p + 1] += dropped
        self.singular[p + 1] = singular
        self.largest = max(self.largest, even + odd)
        self._grow_left(p)

    def _evolve_site(self, p: int, tau: float, strengths: Strengths) -> None:
        self.tensors[p] = self._evolved(self.tensors[p], p, 1, tau, strengths)

    def _pass_bond(self, p: int, tau: float, strengths: Strengths) -> None:
        """Move the centre from site p over the bond to site p + 1, evolving the bond back in time."""
        before = self.dims[p + 1][0]
        self.tensors[p], bond, even, odd = compiled.orthogonalise(self.tensors[p], before, self.symmetric)
        self.dims[p + 1] = (even, odd)
        self._grow_left(p)
        # the bond's left side may be narrower than its right one
        evens = (even, before)
        bond, vectors = compiled.evolve(
            bond, -tau, self.limits.krylov, self.left[p + 1], self.right[p + 1], self.wiring.wires[0][p + 1],
            _NONE, np.zeros(2), strengths, evens, 0, self.symmetric,
        )  # fmt: skip
        self.exponentials += 1
        self.vectors += vectors
        self.tensors[p + 1] = compiled.attach(bond, self.tensors[p + 1], even, before, self.symmetric)
