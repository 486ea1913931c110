"""`FermionState`: everything that can be asked of a chain of free fermions."""

from __future__ import annotations

from collections.abc import Sequence
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from anneal_ref.backends.fermions.chains import Chain
from anneal_ref.backends.fermions.configurations import Configurations
from anneal_ref.backends.fermions.covariance import Covariance
from anneal_ref.backends.fermions.entropies import entropy
from anneal_ref.backends.fermions.kinks import kink_numbers, kink_pairs
from anneal_ref.backends.memory import require_memory
from anneal_ref.base.checks import integer, signs
from anneal_ref.base.errors import InputError
from anneal_ref.model.anneal import Anneal
from anneal_ref.observe.manifest import Manifest
from anneal_ref.observe.moments import Moments
from anneal_ref.observe.samples import Samples

Floats = NDArray[np.float64]

_ROWS = 1 << 14


class FermionState:
    """The state of an anneal at one time, as `FreeFermions` leaves it.

    Attributes
    ----------
    anneal : Anneal
        What was solved.
    at : float
        Fraction of the duration that the state belongs to.
    ledger : dict
        Deterministic counters and checks of the run (`scheme`, `order`, `steps`, `layers`, `kicks`, `ring`, `bytes`;
        `cone`, operators in the widest light cone; `edge`, the most that was ever at the edge of one; `norm_drift`, by
        which the evolution of an operator misses norm 1; `ground_energy` and `ground_gap` after start="ground"), and
        its wall time in `seconds`.

    Examples
    --------
    >>> import anneal_ref as ar
    >>> schedule = ar.Schedule.linear(transverse=(1.0, 0.0), problem=(0.0, 1.0))
    >>> instance = ar.Instance(ar.lattices.chain(8, periodic=True), [-1.0] * 8)
    >>> state = ar.FreeFermions().evolve(ar.Anneal(instance, schedule, duration=8.0))
    >>> state.kink_density(), state.ground_probability(), state.entropy([0, 1, 2, 3])
    (0.0957402, 0.61745, 1.21580)
    >>> state.kink_numbers().round(4).tolist()
    [0.6175, 0.0, 0.3821, 0.0, 0.0004, 0.0, 0.0, 0.0, 0.0]
    """

    def __init__(
        self, anneal: Anneal, at: float, chain: Chain, covariance: Covariance, turned: Floats, ledger: dict[str, Any]
    ) -> None:
        self.anneal = anneal
        self.at = at
        self.ledger = ledger
        self._chain = chain
        self._covariance = covariance
        # -1 where kicks have turned <X>
        self._turned = turned
        self._configurations = Configurations(covariance)

    def __repr__(self) -> str:
        """Return size, time and scheme."""
        work = f"{self.ledger['layers']} layers of {self.ledger['scheme']}"
        return f"<FermionState of {self.anneal.n_sites} spins at {self.at:g}; {work}>"

    def moments(self) -> Moments:
        """Return <Z_i> = 0, all <Z_i Z_j>, and <X_i>; `stat` is 0 and `num` is not measured.

        After start="plus", spins whose light cones do not overlap are uncorrelated: their <Z_i Z_j> is below 1e-12 and
        put to 0.

        Raises
        ------
        TooLarge
            N^2 numbers and their errors do not fit into memory.
        """
        return self._moments

    @cached_property
    def _moments(self) -> Moments:
        n = self.anneal.n_sites
        require_memory(64 * n * n, f"the correlations of all pairs of {n} spins", ("correlations(reach)",))
        found = self._covariance.all_correlations(self._ends)
        zz = np.eye(n)
        for r in range(1, found.shape[1] + 1):
            start = np.flatnonzero(self._ends >= r)
            i, j = self._chain.order[start], self._chain.order[(start + r) % n]
            zz[i, j] = zz[j, i] = found[start, r - 1]
        x = np.empty(n)
        x[self._chain.order] = self._turned * self._covariance.x
        return Moments.of(np.zeros(n), zz, x, how="free fermions")

    def correlations(self, reach: int) -> tuple[NDArray[np.intp], Floats]:
        """Return <Z_i Z_j> for the pairs of spins that are up to `reach` bonds apart, for chains of any length.

        Parameters
        ----------
        reach : int
            At least 1.

        Returns
        -------
        pairs : ndarray of int, shape (pairs, 2)
            Sites, each pair once.
        values : ndarray, shape (pairs,)
        """
        n = self.anneal.n_sites
        reach = min(integer("reach", reach, low=1), max(1, int(self._ends.max())))
        found = self._covariance.correlations(self._ends, reach)
        distance = np.arange(1, reach + 1)
        there = self._ends[:, None] >= distance
        if self._chain.ring and n % 2 == 0 and reach == n // 2:
            # opposite spins come from both sides
            there[n // 2 :, -1] = False
        start, column = np.nonzero(there)
        order = self._chain.order
        return np.stack([order[start], order[(start + column + 1) % n]], axis=1), found[start, column]

    def energy(self) -> float:
        """Return <H> at the time of the state, in the unit of the schedule."""
        time = self.at * self.anneal.duration
        problem = self._chain.couplings @ self._covariance.bonds
        transverse = (self._chain.weights * self._turned) @ self._covariance.x
        return float(self.anneal.problem(time) * problem - self.anneal.transverse(time) * transverse)

    def kink_density(self) -> float:
        """Return the mean fraction of unsatisfied bonds, over all bonds with a coupling other than 0.

        Raises
        ------
        InputError
            An instance without any coupling.
        """
        bonds, sign = self._bonds()
        return float(np.mean(1.0 + sign * self._covariance.bonds[bonds]) / 2)

    def kink_numbers(self) -> Floats:
        """Return the probabilities of 0, 1, 2, ... kinks, shape (n_bonds + 1,); the work grows as n_bonds^3.

        Raises
        ------
        InputError
            An instance without any coupling.
        TooLarge
        """
        bonds, sign = self._bonds()
        require_memory(100 * len(bonds) ** 2, f"the numbers of kinks on {len(bonds)} bonds", ("kink_density()",))
        return kink_numbers(self._covariance, bonds, sign)

    def kink_correlations(self) -> tuple[NDArray[np.intp], Floats]:
        """Return <K_a K_b> for all bonds a, b; K is 1 where a bond is unsatisfied, else 0.

        Returns
        -------
        bonds : ndarray of int, shape (n_bonds, 2)
            The sites of each bond, in the order along the chain.
        values : ndarray, shape (n_bonds, n_bonds)
            The density of kinks on the diagonal.

        Raises
        ------
        InputError
            An instance without any coupling.
        TooLarge
        """
        bonds, sign = self._bonds()
        require_memory(100 * len(bonds) ** 2, f"the correlations of {len(bonds)} bonds", ("kink_density()",))
        order = self._chain.order
        ends = np.stack([order[bonds], order[(bonds + 1) % len(order)]], axis=1)
        return ends, kink_pairs(self._covariance, bonds, sign)

    def sample(self, shots: int, seed: int) -> Samples:
        """Return `shots` independent measurements in the Z basis, the same ones for the same seed."""
        shots, seed = integer("shots", shots, low=1), integer("seed", seed, low=0)
        manifest = Manifest(
            instance=self.anneal.instance.identity, duration=self.anneal.duration, source="free fermions"
        )
        return Samples(self._configurations.sample(shots, seed)[:, self._chain.places], manifest)

    def log_probability(self, spins: ArrayLike) -> Floats:
        """Return the natural logarithm of the probability of each row of `spins` (shots, N); -inf where it is zero.

        Probabilities below about 1e-25 are lost in rounding.
        """
        rows = signs("spins", spins, (None, self.anneal.n_sites))
        return self._configurations.log_probability(rows[:, self._chain.order])

    def probabilities(self) -> Floats:
        """Return the probabilities of all configurations, shape (2^N,), for few spins; they add up to 1.

        Site 0 is the least significant bit of the index and bit 0 means +1.

        Raises
        ------
        TooLarge
        """
        n = self.anneal.n_sites
        require_memory(16 << n, f"the probabilities of {n} spins", ("log_probability(spins)", "sample(shots, seed)"))
        half = np.empty(1 << (n - 1))
        for start in range(0, len(half), _ROWS):
            index = np.arange(start, min(start + _ROWS, len(half)))
            spins = (1 - 2 * (index[:, None] >> np.arange(n) & 1)).astype(np.int8)
            half[start : start + _ROWS] = np.exp(self._configurations.log_probability(spins[:, self._chain.order]))
        half /= 2 * half.sum()
        # the other half has all spins flipped
        return np.concatenate([half, half[::-1]])

    def ground_probability(self) -> float:
        """Return the probability of the classical ground states, all of them together."""
        chain, n = self._chain, self.anneal.n_sites
        sign = np.where(chain.couplings > 0, -1, 1).astype(np.int8)
        best = np.cumprod(np.concatenate([[1], sign[:-1]]), dtype=np.int8)
        if not (chain.ring and best[-1] * sign[-1] < 0):
            # every chain may be flipped by itself
            return float(np.exp(self._configurations.log_probability(best[None])[0]) * 2.0 ** (chain.parts[-1] + 1))
        strengths = np.abs(chain.couplings)
        weakest = np.flatnonzero(strengths <= strengths.min() + 1e-9 * strengths.sum())
        # frustrated: one kink, which is now on the last bond, on any of the weakest
        turned = np.where(np.arange(n) > weakest[:, None], -1, 1) * best
        return float(2 * np.exp(self._configurations.log_probability(turned.astype(np.int8))).sum())

    def entropy(self, sites: Sequence[int]) -> float:
        """Return the von Neumann entropy, in nats, between the spins on `sites` and all others.

        Raises
        ------
        InputError
            A site that is not there or occurs twice.
        NotSupported
            In one of the chains neither the sites nor those left out are neighbours in a row.
        """
        n = self.anneal.n_sites
        chosen = [integer(f"sites[{k}]", site, 0, n - 1) for k, site in enumerate(sites)]
        if len(set(chosen)) != len(chosen):
            raise InputError(f"sites must differ from each other; got {chosen}")
        return entropy(self._covariance, self._chain, self._chain.places[chosen])

    @cached_property
    def _ends(self) -> NDArray[np.int64]:
        """How many further positions each position is paired with: to the end of its chain, or half round the ring."""
        n, parts = self.anneal.n_sites, self._chain.parts
        if self._chain.ring:
            return np.full(n, n // 2)
        return np.searchsorted(parts, parts, side="right") - 1 - np.arange(n)

    def _bonds(self) -> tuple[NDArray[np.intp], Floats]:
        bonds = self._chain.bonds
        if not len(bonds):
            raise InputError("a kink is an unsatisfied bond; the instance has no bond with a coupling other than 0")
        return bonds, np.sign(self._chain.couplings[bonds])
