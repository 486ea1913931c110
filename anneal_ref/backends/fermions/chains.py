"""`Chain`: the order in which the sites of an instance lie along open chains or round one ring."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from anneal_ref.base.errors import NotSupported
from anneal_ref.model.instances import Instance

ALTERNATIVES = ("StateVector()", "MPS(bond_dimension=64)")
"""Back-ends that take other lattices, and fields."""


@dataclass(frozen=True, slots=True, eq=False)
class Chain:
    """An instance seen along the chain. Open chains lie one behind the other, with a coupling of 0 between them.

    Parameters
    ----------
    order : ndarray of int, shape (N,)
        The site at every position.
    couplings : ndarray, shape (N,)
        Between each position and the next; the last is that from the end of the ring to its start, 0 without a ring.
    weights : ndarray, shape (N,)
        Transverse weight at every position.
    ring : bool
    """

    order: NDArray[np.intp]
    couplings: NDArray[np.float64]
    weights: NDArray[np.float64]
    ring: bool

    @property
    def n_sites(self) -> int:
        """Number of spins."""
        return len(self.order)

    @property
    def places(self) -> NDArray[np.intp]:
        """Position of every site, shape (N,)."""
        return np.argsort(self.order)

    @property
    def bonds(self) -> NDArray[np.intp]:
        """Positions whose coupling to the next one is not 0."""
        return np.flatnonzero(self.couplings)

    @property
    def parts(self) -> NDArray[np.intp]:
        """Number of the chain that each position belongs to, shape (N,)."""
        return np.concatenate([[0], np.cumsum(self.couplings[:-1] == 0)])


def chain_of(instance: Instance) -> Chain:
    """Return the chain that the couplings of an instance make.

    Raises
    ------
    NotSupported
        Fields, a site with more than two couplings, or a ring that is not all there is.

    Examples
    --------
    >>> import anneal_ref as ar
    >>> lattice = ar.lattices.from_edges(5, [(3, 0), (4, 1), (0, 4)])
    >>> chain = chain_of(ar.Instance(lattice, [0.5, -2.0, 1.0]))
    >>> chain.order.tolist(), chain.couplings.tolist(), chain.ring
    ([1, 4, 0, 3, 2], [-2.0, 1.0, 0.5, 0.0, 0.0], False)
    """
    if instance.has_fields:
        site = int(np.flatnonzero(instance.fields)[0])
        raise NotSupported(
            f"free fermions allow no fields; got h = {instance.fields[site]:g} at site {site}; use {_either()}",
            ALTERNATIVES,
        )
    neighbours: list[list[tuple[int, float]]] = [[] for _ in range(instance.n_sites)]
    for (i, j), coupling in zip(instance.lattice.edges.tolist(), instance.couplings.tolist(), strict=True):
        if coupling:
            neighbours[i].append((j, coupling))
            neighbours[j].append((i, coupling))
    crowded = max(range(instance.n_sites), key=lambda site: len(neighbours[site]))
    if len(neighbours[crowded]) > 2:
        raise NotSupported(
            f"free fermions need open chains or one ring, at most two couplings to a site; site {crowded} of "
            f"{instance.lattice.name} has {len(neighbours[crowded])}; use {_either()}",
            ALTERNATIVES,
        )
    order, couplings = _along(neighbours)
    if len(order) < instance.n_sites:
        raise NotSupported(
            f"free fermions take one ring alone, or open chains; {instance.lattice.name} has a ring among other parts; "
            f"use {_either()}",
            ALTERNATIVES,
        )
    return Chain(
        np.array(order, np.intp), np.array(couplings), np.asarray(instance.transverse)[order], couplings[-1] != 0
    )


def _along(neighbours: list[list[tuple[int, float]]]) -> tuple[list[int], list[float]]:
    """Walk along all open chains from their lowest ends; round the ring of site 0 if there are none."""
    order: list[int] = []
    couplings: list[float] = []
    seen: set[int] = set()
    ends = [site for site, near in enumerate(neighbours) if len(near) < 2]
    for start in ends or [0]:
        site: int | None = start if start not in seen else None
        while site is not None:
            order.append(site)
            seen.add(site)
            ahead = sorted((j, coupling) for j, coupling in neighbours[site] if j not in seen)
            couplings.append(ahead[0][1] if ahead else 0.0)
            site = ahead[0][0] if ahead else None
    if not ends:
        # from the last site of the ring back to the first
        couplings[-1] = dict(neighbours[order[-1]])[order[0]]
    return order, couplings


def _either() -> str:
    return " or ".join(ALTERNATIVES)
