r"""The ground state of H(0), as the start of an anneal: sweeps over pairs of sites, from several starts.

With every transverse weight above zero the ground state is unique, positive in the Z basis, and even without fields
(Perron and Frobenius). With G(0) = 0 the problem part alone decides: its ground state must be unique, or unique up to
the global flip, and then the even superposition is taken, which is the limit of G(0) -> 0.

A sweep takes every pair of sites to the lowest state of its effective Hamiltonian. Glasses can trap sweeps, so there
are several starts: |+...+>, in a transverse field that begins strong and is turned down to G(0); the classical ground
configuration, or the best that is known; and local minima of the classical energy, descended to from random
configurations. All are followed with small bonds, the one with the lowest energy is followed further, and the spread of
their energies goes into the ledger.

How good the result is, its energy variance sigma^2 = |(H - E) psi|^2 tells. Some level lies within sigma of E, and if
all others are further than gap from E, the weight outside that one eigenstate is at most (sigma / gap)^2. A result is
refused unless sigma < gap / 2, when E +- sigma holds one level alone. The gap is that between the two lowest states of
a pair, the smallest of all pairs; it is an estimate from above, and that the one level is the lowest of all is made
likely by the starts, not proved. On 16 spins with bonds of 4 to 16 the weight outside the ground state was 2 to 5000
times smaller than the bound. It is the error of a state cut off at the bond dimension, as in the evolution, and
refining the bond dimension measures both.

References
----------
S. R. White, Phys. Rev. Lett. 69, 2863 (1992), for the sweeps; D. H. Weinstein, Proc. Natl. Acad. Sci. USA 20, 529
(1934), and C. Eckart, Phys. Rev. 36, 878 (1930), for the bounds (from memory).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from anneal_ref.backends.mps.chain import Chain, Limits, Strengths
from anneal_ref.backends.mps.classical_start import configuration_state
from anneal_ref.backends.mps.costs import Cost, bond_limits, cost_of
from anneal_ref.backends.mps.ordering import cut_ranks
from anneal_ref.backends.mps.product import Product
from anneal_ref.backends.mps.start import plus_state
from anneal_ref.backends.mps.variance import energy_variance, variance_bytes
from anneal_ref.backends.mps.wiring import Floats
from anneal_ref.base.errors import NotConverged, NotSupported
from anneal_ref.ground.ground import ground_energy, ground_states
from anneal_ref.model.anneal import Anneal
from anneal_ref.model.instances import Instance

_SCOUTS = 2
_SCOUT_BOND = 32
# there and back
_SWEEPS, _SCOUT_SWEEPS = 20, 6
# how many it usually takes, those with small bonds included
_USUAL = 10
_SETTLED = 1e-12
# of variance and squared gap: below, the energy and its uncertainty hold one level alone
_ONE_LEVEL = 0.25
# residual of a local state relative to the spread of its Hamiltonian, on the way and in the end
_COARSE, _FINE = 1e-4, 1e-10


@dataclass(frozen=True, slots=True, eq=False)
class GroundProduct:
    """The ground state of H(0) as a matrix product state, and how well it is known.

    Parameters
    ----------
    product : Product
        In double precision.
    energy : float
        <H(0)>, in the unit of the schedule.
    variance : float
        <H(0)^2> - <H(0)>^2, in the square of that unit.
    gap : float
        To the next level of the same parity, as far as pairs of sites can tell: from above.
    spread : float
        How far the energies that the starts ended with lie apart.
    """

    product: Product
    energy: float
    variance: float
    gap: float = np.inf
    spread: float = 0.0

    def ledger(self) -> dict[str, float]:
        """Return what the ledger of an evolution says of its start."""
        return {
            "ground_energy": self.energy, "ground_variance": self.variance, "ground_spread": self.spread,
        }  # fmt: skip


def ground_cost(instance: Instance, order: NDArray[np.intp], bond_dimension: int) -> Cost:
    """Return the memory that `ground_product` needs at its peak, and about how long it takes."""
    n = len(order)
    sweeps = cost_of(instance, order, bond_dimension, "double", 1.0)
    bond = max(bond_limits(n, not instance.has_fields, bond_dimension))
    rank = int(cut_ranks(instance.coupling_matrix(), order).max(initial=0)) if n > 1 else 0
    return Cost(max(sweeps.bytes, variance_bytes(n, bond, rank)), _USUAL * sweeps.seconds)


def ground_product(anneal: Anneal, order: NDArray[np.intp], limits: Limits) -> GroundProduct:
    """Return the ground state of H(0), in double precision.

    Parameters
    ----------
    anneal : Anneal
    order : ndarray of int, shape (N,)
        The site at every position.
    limits : Limits

    Raises
    ------
    NotSupported
        The ground state is degenerate beyond the global spin flip, or a spin without a transverse term leaves it open.
    NotConverged
        The variance is above a quarter of the squared gap, so that the state cannot be told from a mixture of several
        eigenstates; the `GroundProduct` is inside.

    Examples
    --------
    >>> import anneal_ref as ar
    >>> instance = ar.Instance(ar.lattices.chain(8, periodic=True), [-1.0] * 8)
    >>> schedule = ar.Schedule.linear(transverse=(1.0, 0.0), problem=(1.0, 1.0))
    >>> anneal = ar.Anneal(instance, schedule, 1.0, start="ground")
    >>> ground_product(anneal, np.arange(8), Limits(16, 1e-12, 1e-10)).energy
    -10.2516617910
    """
    instance = anneal.instance
    strengths = float(anneal.transverse(0.0)), float(anneal.problem(0.0))
    weights = strengths[0] * instance.transverse
    if not weights.any():
        return _classical(instance, order, strengths[1])
    if not weights.all():
        raise NotSupported(
            "start='ground' needs every transverse weight above zero, or G(0) = 0; a spin without a transverse term "
            "at t = 0 leaves the ground state undecided",
            ("start='plus'", "a small transverse weight instead of zero"),
        )
    if strengths[1] == 0:
        return GroundProduct(
            plus_state(instance, order, not instance.has_fields, np.complex128), -float(weights.sum()), 0.0
        )
    return _searched(instance, order, strengths, limits)


def _classical(instance: Instance, order: NDArray[np.intp], problem: float) -> GroundProduct:
    symmetric = not instance.has_fields
    allowed = 1 + symmetric
    signed = _signed(instance, problem)
    try:
        states = ground_states(signed, limit=allowed)
    except NotSupported as error:
        raise NotSupported(
            f"start='ground' with G(0) = 0 needs a problem part with at most {allowed} ground "
            f"configuration{'s, equal up to the global flip' if symmetric else ''}, and counted: {error}",
            ("start='plus'", "a schedule with G(0) > 0"),
        ) from error
    product = configuration_state(states[0], instance, order, symmetric)
    return GroundProduct(product, abs(problem) * float(signed.energies(states[0])), 0.0)


def _searched(instance: Instance, order: NDArray[np.intp], strengths: Strengths, limits: Limits) -> GroundProduct:
    symmetric = not instance.has_fields
    narrow = replace(limits, bond_dimension=min(limits.bond_dimension, _SCOUT_BOND))
    starts = [plus_state(instance, order, symmetric, np.complex128)]
    for spins in _configurations(_signed(instance, strengths[1])):
        starts.append(configuration_state(spins, instance, order, symmetric))
    chains = [Chain(start, instance, narrow) for start in starts]
    for transverse in _descent(instance, strengths):
        _there_and_back(chains[0], (transverse, strengths[1]), _COARSE)
    for chain in chains:
        _settle(chain, strengths, _SCOUT_SWEEPS)
    energies = [_energy(chain, strengths) for chain in chains]
    # the first of those that are equal to rounding
    best = int(np.argmax(np.array(energies) <= min(energies) + 1e-10 * abs(min(energies))))
    chain = Chain(chains[best].product(), instance, limits)
    _settle(chain, strengths, _SWEEPS)
    gap = chain.relax(strengths, _FINE, look_up=True)
    chain.flip()
    chain.relax(strengths, _FINE)
    chain.flip()
    product = chain.product()
    del chain, chains  # the blocks of all of them
    energy, variance = energy_variance(
        product, instance.coupling_matrix(), instance.fields, instance.transverse, *strengths
    )
    found = GroundProduct(product, energy, variance, gap, max(energies) - min(energies))
    if not variance <= _ONE_LEVEL * gap**2:
        raise NotConverged(
            f"the ground state of H(0) is not found: an energy of {energy:.8g} with a standard deviation of "
            f"{variance**0.5:.1e}, which must be below half the gap of {gap:.1e} (energies from {len(energies)} starts "
            f"spread by {found.spread:.1e}); give a larger bond_dimension, a schedule with a larger G(0), or "
            "start='plus'",
            found,
        )
    return found


def _settle(chain: Chain, strengths: Strengths, most: int) -> None:
    """Sweep until the energy settles: to a hundredth of what truncation blurs, if that is more than rounding."""
    before, tolerance = np.inf, _COARSE
    for _ in range(most):
        discarded = chain.discarded.sum()
        _there_and_back(chain, strengths, tolerance)
        energy = _energy(chain, strengths)
        change = abs(before - energy) / abs(energy)
        blur = max(_SETTLED, (chain.discarded.sum() - discarded) / 100)
        # the energy is of second order in the residual
        if change <= blur and tolerance <= 0.1 * blur**0.5:
            break
        before, tolerance = energy, min(_COARSE, 0.1 * max(change, blur) ** 0.5)


def _there_and_back(chain: Chain, strengths: Strengths, tolerance: float) -> None:
    for _ in range(2):
        chain.relax(strengths, tolerance)
        chain.flip()


def _energy(chain: Chain, strengths: Strengths) -> float:
    return float(np.dot(strengths, chain.energies()))


def _signed(instance: Instance, problem: float) -> Instance:
    """Return the instance whose ground states are those of the problem part."""
    if problem > 0:
        return instance
    sign = float(np.sign(problem))
    return Instance(instance.lattice, sign * instance.couplings, sign * instance.fields)


def _descent(instance: Instance, strengths: Strengths) -> Floats:
    """Return transverse strengths from where the problem part is weak down to G(0), which is left out."""
    local = np.sqrt(np.square(instance.coupling_matrix()).sum(axis=1) + np.square(instance.fields))
    ratio = 2 * abs(strengths[1]) * float(np.max(local / instance.transverse)) / strengths[0]
    count = int(np.clip(np.ceil(np.log2(max(ratio, 1.0))), 0, 12))
    return np.asarray(strengths[0] * 2.0 ** np.arange(count, 0, -1))


def _configurations(instance: Instance) -> list[NDArray[np.int8]]:
    """Return the best configuration known, and local minima below random ones."""
    couplings, found = instance.coupling_matrix(), [ground_energy(instance, nodes=0).spins]
    for seed in range(_SCOUTS):
        spins = np.random.default_rng(seed).choice((-1, 1), instance.n_sites)
        while True:
            gain = spins * (couplings @ spins + instance.fields)
            site = int(gain.argmax())
            if gain[site] <= 0:
                break
            spins[site] *= -1
        found.append(spins.astype(np.int8))
    return found
