"""`Problem`: the classical energy in whole numbers of one unit, so that energies are compared exactly."""

from __future__ import annotations

import math
from dataclasses import dataclass
from fractions import Fraction

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.sparse import csr_array
from scipy.sparse.csgraph import connected_components

from anneal_ref.base.checks import finite, frozen, integer
from anneal_ref.base.errors import InputError

# whole numbers stay below this in sum, so that no int64 intermediate (at most four times the sum) overflows
LARGEST_SUM = 2**60
# a common unit is looked for among the fractions 1, 1/2, ... of the smallest value
LARGEST_DIVISOR = 120
LARGEST_MULTIPLE = 2**24


@dataclass(frozen=True, slots=True, eq=False)
class Problem:
    """E = sum J s s + sum h s over spins s = +-1, with J and h in whole numbers of `unit`.

    All energies of one problem are equal modulo 2 (in units), because a spin flip changes them by twice a sum.

    Parameters
    ----------
    edges : (m, 2) array of int
        Pairs of sites, each pair once.
    couplings : (m,) array of int64
        None is zero.
    fields : (n,) array of int64
    unit : float
        Size of one unit in the caller's energy.
    rounding : float
        Bound on the difference of an energy from the caller's, in the caller's energy; 0 where units are exact.
    slack : int
        Two energies that differ by no more than this many units are equal to rounding.
    """

    edges: NDArray[np.intp]
    couplings: NDArray[np.int64]
    fields: NDArray[np.int64]
    unit: float = 1.0
    rounding: float = 0.0
    slack: int = 0

    @property
    def n_sites(self) -> int:
        """Number of spins."""
        return self.fields.size

    @property
    def has_fields(self) -> bool:
        """Whether any field is not zero."""
        return bool(self.fields.any())

    @property
    def weight(self) -> int:
        """Sum of the absolute couplings and fields; no energy is larger in absolute value."""
        return int(np.abs(self.couplings).sum() + np.abs(self.fields).sum())

    def energy(self, spins: NDArray[np.int8]) -> int:
        """Energy of one configuration, shape (n,), in units."""
        wide = spins.astype(np.int64)
        pairs = wide[self.edges[:, 0]] * wide[self.edges[:, 1]]
        return int(self.couplings @ pairs + self.fields @ wide)

    def matrix(self) -> NDArray[np.int64]:
        """Symmetric couplings, shape (n, n), zero on the diagonal."""
        dense = np.zeros((self.n_sites, self.n_sites), dtype=np.int64)
        first, second = self.edges.T
        dense[first, second] = self.couplings
        dense[second, first] = self.couplings
        return dense

    def graph(self) -> csr_array:
        """Symmetric sparse couplings, shape (n, n)."""
        first, second = self.edges.T
        entries = np.concatenate([self.couplings, self.couplings])
        places = np.concatenate([first, second]), np.concatenate([second, first])
        return csr_array((entries, places), shape=(self.n_sites, self.n_sites))

    def components(self) -> list[tuple[NDArray[np.intp], Problem]]:
        """Split into connected parts: the sites of each, ascending, and its problem."""
        count, label = connected_components(self.graph(), directed=False)
        place = np.empty(self.n_sites, dtype=np.intp)
        parts = []
        by_label = np.argsort(label, kind="stable")
        edges_by_label = np.argsort(label[self.edges[:, 0]], kind="stable")
        site_ends = np.cumsum(np.bincount(label, minlength=count))
        edge_ends = np.cumsum(np.bincount(label[self.edges[:, 0]], minlength=count))
        for sites, chosen in zip(
            np.split(by_label, site_ends[:-1]), np.split(edges_by_label, edge_ends[:-1]), strict=True
        ):
            place[sites] = np.arange(sites.size)
            edges, couplings = place[self.edges[chosen]], self.couplings[chosen]
            parts.append((sites, Problem(edges, couplings, self.fields[sites], self.unit, self.rounding, self.slack)))
        return parts

    def with_ghost(self) -> Problem:
        """Turn fields into couplings to one more spin, the last; without fields the problem itself."""
        if not self.has_fields:
            return self
        sites = np.flatnonzero(self.fields)
        ghost = np.full(sites.size, self.n_sites)
        return Problem(
            np.concatenate([self.edges, np.stack([sites, ghost], axis=1)]),
            np.concatenate([self.couplings, self.fields[sites]]),
            np.zeros(self.n_sites + 1, dtype=np.int64),
            self.unit,
            self.rounding,
            self.slack,
        )

    def pinned(self, site: int) -> tuple[Problem, int]:
        """Fix one spin at +1 and leave it out: the smaller problem, and the constant to add to its energies."""
        at_site = (self.edges == site).any(axis=1)
        others = self.edges[at_site].sum(axis=1) - site
        fields = self.fields.copy()
        fields[others] += self.couplings[at_site]
        edges = self.edges[~at_site]
        edges = edges - (edges > site)
        reduced = Problem(
            edges, self.couplings[~at_site], np.delete(fields, site), self.unit, self.rounding, self.slack
        )
        return reduced, int(self.fields[site])

    def contracted(self, group: NDArray[np.intp], sign: NDArray[np.int8]) -> tuple[Problem, int]:
        """Tie spins together, s_i = sign_i t_(group_i): the problem of the t, and the constant to add.

        Parameters
        ----------
        group : (n,) array of int
            Group of each spin, numbered from 0 without holes.
        sign : (n,) array of +-1
        """
        count = int(group.max(initial=-1)) + 1
        couplings = self.couplings * sign[self.edges[:, 0]] * sign[self.edges[:, 1]]
        edges = np.sort(group[self.edges], axis=1)
        inside = edges[:, 0] == edges[:, 1]
        keys, where = np.unique(edges[~inside, 0] * count + edges[~inside, 1], return_inverse=True)
        sums = np.zeros(keys.size, dtype=np.int64)
        np.add.at(sums, where, couplings[~inside])
        fields = np.zeros(count, dtype=np.int64)
        np.add.at(fields, group, self.fields * sign)
        pairs = np.stack([keys // max(count, 1), keys % max(count, 1)], axis=1)[sums != 0]
        reduced = Problem(pairs, sums[sums != 0], fields, self.unit, self.rounding, self.slack)
        return reduced, int(couplings[inside].sum())


def whole_numbers(n_sites: int, edges: ArrayLike, couplings: ArrayLike, fields: ArrayLike | None = None) -> Problem:
    """Write couplings and fields in whole numbers of a common unit.

    The unit is a fraction of the smallest value where all values are multiples of it to rounding (+-1, levels, equal
    values of any size); else a power of two, small enough that nothing is lost beyond the rounding of an energy sum.

    Parameters
    ----------
    n_sites : int
    edges : (m, 2) array_like of int
        Pairs of different sites, each pair once.
    couplings : (m,) array_like
    fields : (n,) array_like, optional

    Raises
    ------
    InputError
        A pair out of range, of one site, or given twice; a wrong shape; NaN or infinity.

    Examples
    --------
    >>> problem = whole_numbers(3, [(0, 1), (1, 2)], [0.5, -1.5])
    >>> problem.unit, problem.couplings
    (0.5, array([ 1, -3]))
    """
    n_sites = integer("n_sites", n_sites, low=1)
    pairs = finite("edges", np.reshape(edges, (-1, 2)) if np.size(edges) == 0 else edges, (None, 2), np.intp)
    strengths = finite("couplings", couplings, (len(pairs),))
    biases = finite("fields", np.zeros(n_sites) if fields is None else fields, (n_sites,))
    _check_pairs(n_sites, pairs)
    unit, rounding, slack = _common_unit(np.abs(np.concatenate([strengths, biases])))
    units = frozen(np.rint(strengths / unit).astype(np.int64))
    kept = units != 0
    return Problem(pairs[kept], units[kept], np.rint(biases / unit).astype(np.int64), unit, rounding, slack)


def _check_pairs(n_sites: int, pairs: NDArray[np.intp]) -> None:
    if pairs.size and (pairs.min() < 0 or pairs.max() >= n_sites):
        raise InputError(f"edges must name sites from 0 to {n_sites - 1}; got {pairs.min()} to {pairs.max()}")
    loops = np.flatnonzero(pairs[:, 0] == pairs[:, 1])
    if loops.size:
        raise InputError(f"edges must join different sites; edge {loops[0]} joins {pairs[loops[0], 0]} to itself")
    keys = np.sort(pairs, axis=1) @ np.array([n_sites, 1])
    values, counts = np.unique(keys, return_counts=True)
    if (counts > 1).any():
        pair = divmod(int(values[counts > 1][0]), n_sites)
        raise InputError(f"edges must name each pair once; {pair} is there more than once: add up its couplings")


def _common_unit(values: NDArray[np.float64]) -> tuple[float, float, int]:
    """Return unit, rounding and slack (see `Problem`) for a list of values >= 0."""
    different = np.unique(values[values > 0])
    if not different.size:
        return 1.0, 0.0, 0
    total = math.fsum(values)
    if different[0] > different[-1] / LARGEST_MULTIPLE:
        for divisor in range(1, LARGEST_DIVISOR + 1):
            unit = float(different[0] / divisor)
            multiples = np.rint(different / unit)
            if (np.abs(multiples * unit - different) <= 2.0**-51 * different).all():
                exact = all(Fraction(v) == int(k) * Fraction(unit) for v, k in zip(different, multiples, strict=True))
                return unit, 0.0 if exact else total * 2.0**-50, 0
    # a power of two that all values are multiples of, unless the sum would become too large for that
    mantissas, exponents = np.frexp(different)
    wholes = np.ldexp(mantissas, 53).astype(np.int64)
    trailing = np.frexp((wholes & -wholes).astype(np.float64))[1] - 1
    finest = int((exponents - 53 + trailing).min())
    coarsest = math.frexp(total / LARGEST_SUM)[1]
    unit = math.ldexp(1.0, max(finest, coarsest))
    if finest >= coarsest:
        return unit, 0.0, 0
    # every term is displaced by half a unit at most; ties of decimal numbers are off by their last binary digits
    slack = values.size + math.ceil(total / unit * 2.0**-50)
    return unit, slack * unit, slack
