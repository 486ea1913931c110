"""`Lattice`: which spins are coupled to which, and where they are drawn."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sized
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from anneal_ref.base.checks import finite, frozen, integer, number
from anneal_ref.base.errors import InputError
from anneal_ref.model.words import raw_words


@dataclass(frozen=True, slots=True, eq=False)
class Lattice:
    """A graph of spins. The functions of `anneal_ref.lattices` make the usual ones.

    Parameters
    ----------
    n_sites : int
        Number of spins, at least 1. A spin without any edge is legal.
    edges : array_like of int, shape (n_edges, 2)
        Coupled pairs of sites. Their order is kept: it is the order of the couplings of an instance.
    coordinates : array_like, shape (n_sites, 2) or (n_sites, 3), optional
        Positions, for drawing and for structure factors.
    name : str
        A short name for tables.
    labels : array_like of int, shape (n_sites,), optional
        Names of the sites, all different: 0, 1, 2, ... unless sites were taken out or put in another order.
    recipe : mapping, optional
        Arguments from which `lattices.from_recipe` makes this lattice again.

    Raises
    ------
    InputError
        A self edge, a duplicate edge (in either direction), a site out of range, arrays of the wrong shape.

    Examples
    --------
    >>> triangle = Lattice(3, [(0, 1), (1, 2), (2, 0)], name="triangle")
    >>> triangle
    <Lattice triangle: 3 sites, 3 edges>
    >>> triangle.degrees.tolist()
    [2, 2, 2]
    """

    n_sites: int
    edges: NDArray[np.intp]
    coordinates: NDArray[np.float64] | None
    name: str
    labels: NDArray[np.intp]
    recipe: dict[str, Any] | None

    def __init__(
        self,
        n_sites: int,
        edges: ArrayLike,
        coordinates: ArrayLike | None = None,
        name: str = "graph",
        labels: ArrayLike | None = None,
        recipe: Mapping[str, Any] | None = None,
    ) -> None:
        n = integer("n_sites", n_sites, low=1)
        if coordinates is not None:
            coordinates = finite("coordinates", coordinates, (n, None))
            if coordinates.shape[1] not in (2, 3):
                raise InputError(f"coordinates must have shape ({n}, 2) or ({n}, 3); got shape {coordinates.shape}")
        sites = whole("labels", np.arange(n) if labels is None else labels, (n,))
        if len(np.unique(sites)) < n:
            twice = int(sites[_first_repeat(sites)])
            raise InputError(f"labels must name every site differently; {twice} comes twice")
        object.__setattr__(self, "n_sites", n)
        object.__setattr__(self, "edges", _edges(edges, n))
        object.__setattr__(self, "coordinates", coordinates)
        object.__setattr__(self, "name", str(name))
        object.__setattr__(self, "labels", sites)
        object.__setattr__(self, "recipe", None if recipe is None else dict(recipe))

    def __reduce__(self) -> tuple[Any, ...]:
        """Pickle through the constructor, which makes the arrays read-only again."""
        return Lattice, (self.n_sites, self.edges, self.coordinates, self.name, self.labels, self.recipe)

    @property
    def n_edges(self) -> int:
        """Number of edges."""
        return len(self.edges)

    @property
    def degrees(self) -> NDArray[np.intp]:
        """Number of edges at every site, shape (n_sites,)."""
        return np.bincount(self.edges.ravel(), minlength=self.n_sites)

    def diluted(
        self, dead: Iterable[int] | None = None, fraction: float | None = None, seed: int | None = None
    ) -> Lattice:
        """Return the lattice without its dead sites; the others are renumbered and keep their labels.

        Parameters
        ----------
        dead : iterable of int, optional
            Labels of the dead sites (on a whole lattice, the site numbers).
        fraction : float, optional
            Instead of `dead`: this fraction of the sites, from 0 up to below 1 and rounded to a whole number of
            sites, is chosen at random.
        seed : int, optional
            Needed with `fraction`; the same seed kills the same sites everywhere.

        Raises
        ------
        InputError
            Neither or both of `dead` and `fraction`, unknown or repeated labels, no site left.

        Examples
        --------
        >>> from anneal_ref.model.lattices import square
        >>> square(3, 3).diluted(dead=[4]).labels.tolist()
        [0, 1, 2, 3, 5, 6, 7, 8]
        """
        if (dead is None) == (fraction is None) or (fraction is None) != (seed is None):
            raise InputError(
                "give either `dead`, a list of sites, or `fraction` with `seed`; "
                f"got dead={dead!r}, fraction={fraction!r}, seed={seed!r}"
            )
        if fraction is not None and seed is not None:
            count = round(number("fraction", fraction, 0.0, 1.0) * self.n_sites)
            order = np.argsort(raw_words(self.n_sites, seed, 0, "dilution"), kind="stable")
            gone = self.labels[order[:count]]
        else:
            gone = whole("dead", list(() if dead is None else dead), (None,))
        unknown = np.setdiff1d(gone, self.labels)
        if unknown.size:
            raise InputError(f"dead must list sites of the lattice ({self._sites_text()}); got {int(unknown[0])}")
        if len(np.unique(gone)) < len(gone):
            raise InputError(f"dead must list each site once; {int(gone[_first_repeat(gone)])} comes twice")
        alive = ~np.isin(self.labels, gone)
        if not alive.any():
            raise InputError(f"a lattice needs at least 1 site; all {self.n_sites} sites would be dead")
        number_of = np.cumsum(alive) - 1
        name, recipe, count = self.name, None, len(gone)
        if self.recipe is not None:
            before = self.recipe.get("dead", [])
            recipe = {**self.recipe, "dead": sorted([*before, *gone.tolist()])}
            name, count = name.removesuffix(_dead_text(len(before))), count + len(before)
        return Lattice(
            int(alive.sum()),
            number_of[self.edges[alive[self.edges].all(axis=1)]],
            None if self.coordinates is None else self.coordinates[alive],
            name + _dead_text(count),
            self.labels[alive],
            recipe,
        )

    def relabelled(self, order: ArrayLike) -> Lattice:
        """Return the lattice with its sites in another order: new site k is the old site order[k].

        Parameters
        ----------
        order : array_like of int, shape (n_sites,)
            A permutation. The edges keep their order, and the sites their labels.
        """
        old = whole("order", order, (self.n_sites,))
        if not np.array_equal(np.sort(old), np.arange(self.n_sites)):
            raise InputError(
                f"order must be a permutation of the sites 0 ... {self.n_sites - 1}; got {np.array2string(old)}"
            )
        new_of = np.argsort(old)
        where = None if self.coordinates is None else self.coordinates[old]
        return Lattice(self.n_sites, new_of[self.edges], where, self.name, self.labels[old])

    def to_networkx(self) -> Any:
        """Return a networkx graph: nodes 0, 1, ... with `label` and `coordinates`, edges with `index`.

        Returns
        -------
        networkx.Graph
        """
        import networkx

        graph = networkx.Graph(name=self.name)
        for site in range(self.n_sites):
            place = {} if self.coordinates is None else {"coordinates": tuple(self.coordinates[site].tolist())}
            graph.add_node(site, label=int(self.labels[site]), **place)
        for index, (i, j) in enumerate(self.edges.tolist()):
            graph.add_edge(i, j, index=index)
        return graph

    def describe(self) -> dict[str, str | int]:
        """Return a row for a table: name, number of sites, of edges and of isolated sites, range of the degree."""
        degrees = self.degrees
        low, high = int(degrees.min()), int(degrees.max())
        return {
            "lattice": self.name,
            "sites": self.n_sites,
            "edges": self.n_edges,
            "degree": str(low) if low == high else f"{low}-{high}",
            "isolated": int((degrees == 0).sum()),
        }

    def __repr__(self) -> str:
        """Return name and size in angle brackets."""
        return f"<Lattice {self.name}: {self.n_sites} sites, {self.n_edges} edges>"

    def _sites_text(self) -> str:
        if np.array_equal(self.labels, np.arange(self.n_sites)):
            return f"0 ... {self.n_sites - 1}"
        return np.array2string(self.labels, separator=", ", threshold=12).strip("[]")


def whole(name: str, value: ArrayLike, shape: tuple[int | None, ...]) -> NDArray[np.intp]:
    """Return a read-only array of whole numbers, or raise `InputError`."""
    numbers = finite(name, value, shape)
    bad = np.argwhere((numbers != np.round(numbers)) | (np.abs(numbers) > 2**53))
    if bad.size:
        place = tuple(int(k) for k in bad[0])
        raise InputError(f"{name} must hold whole numbers; got {numbers[place]} at {list(place)}")
    return frozen(numbers.astype(np.intp))


def _edges(given: ArrayLike, n: int) -> NDArray[np.intp]:
    empty = isinstance(given, Sized) and len(given) == 0
    edges = whole("edges", np.empty((0, 2)) if empty else given, (None, 2))
    outside = np.flatnonzero(((edges < 0) | (edges >= n)).any(axis=1))
    if outside.size:
        raise InputError(
            f"edges must join sites 0 ... {n - 1}; edge {outside[0]} is {_pair(edges[outside[0]])}; "
            "for a device's own labels use from_edges(n_sites, edges, labels=[...])"
        )
    selfs = np.flatnonzero(edges[:, 0] == edges[:, 1])
    if selfs.size:
        raise InputError(f"an edge must join two different sites; edge {selfs[0]} is {_pair(edges[selfs[0]])}")
    keys = edges.min(axis=1) * n + edges.max(axis=1)
    if len(np.unique(keys)) < len(keys):
        second = _first_repeat(keys)
        first = int(np.flatnonzero(keys == keys[second])[0])
        raise InputError(
            f"every pair may be coupled once; edges {first} and {second} both join {_pair(edges[second])}; "
            "add their couplings up in one edge"
        )
    return edges


def _dead_text(count: int) -> str:
    return f", {count} dead" if count else ""


def _pair(edge: NDArray[np.intp]) -> str:
    return f"({edge[0]}, {edge[1]})"


def _first_repeat(values: NDArray[np.intp]) -> int:
    """Return the position of the first value that was there before."""
    first = np.unique(values, return_index=True)[1]
    return int(np.setdiff1d(np.arange(len(values)), first)[0])
