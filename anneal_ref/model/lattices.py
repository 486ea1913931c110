"""The families of lattices. Each function returns a `Lattice` with coordinates and a recipe.

| function | sites | degree inside | cell and numbering |
| --- | --- | --- | --- |
| `chain(n)` | n | 2 | along the chain |
| `ladder(n)` | 2 n | 3 | site 2 x + leg |
| `square(nx, ny)` | nx ny | 4 | site x ny + y, so that a column of ny sites is contiguous |
| `triangular(nx, ny)` | nx ny | 6 | as the square, in a rhombus |
| `honeycomb(nx, ny)` | 2 nx ny | 3 | two sites a cell, site 2 (x ny + y) + sublattice |
| `cubic(nx, ny, nz)` | nx ny nz | 6 | site (x ny + y) nz + z |
| `diamond(nx, ny, nz)` | 2 nx ny nz | 4 | two sites a primitive cell, numbered like the honeycomb |
| `biclique(a, b)` | a + b | b, a | first the a sites, then the b |
| `complete(n)` | n | n - 1 | on a circle |
| `random_regular(n, degree, seed)` | n | degree | on a circle |

A `periodic` axis needs at least 3 cells: with 1 or 2 the bond across the seam doubles a bond, or (honeycomb, diamond)
closes a cycle that the infinite lattice does not have. Coordinates of periodic lattices are those of the flat lattice,
as structure factors need them.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from anneal_ref.base.checks import choice, finite, integer
from anneal_ref.base.errors import InputError
from anneal_ref.model.lattice import Lattice, whole
from anneal_ref.model.random_graphs import regular_edges

__all__ = [
    "Lattice", "biclique", "chain", "complete", "cubic", "diamond", "from_edges", "from_networkx", "from_recipe",
    "honeycomb", "ladder", "random_regular", "square", "triangular",
]  # fmt: skip

_Bond = tuple[int, int, tuple[int, ...]]
_ROOT3 = 3**0.5


def chain(n: int, periodic: bool = False) -> Lattice:
    """Return a chain of n sites, or a ring.

    Examples
    --------
    >>> chain(4, periodic=True).edges.tolist()
    [[0, 1], [1, 2], [2, 3], [3, 0]]
    """
    shape, seams = _axes({"n": n}, periodic)
    recipe = {"kind": "chain", "n": n, "periodic": seams[0]}
    return _cells("chain", shape, seams, [(0, 0)], [(1, 0)], [(0, 0, (1,))], recipe)


def ladder(n: int, periodic: bool = False) -> Lattice:
    """Return a ladder of n rungs, with its legs closed to rings if periodic."""
    shape, seams = _axes({"n": n}, periodic)
    recipe = {"kind": "ladder", "n": n, "periodic": seams[0]}
    bonds: list[_Bond] = [(0, 1, (0,)), (0, 0, (1,)), (1, 1, (1,))]
    return _cells("ladder", shape, seams, [(0, 0), (0, 1)], [(1, 0)], bonds, recipe)


def square(nx: int, ny: int, periodic: bool | Sequence[bool] = (False, False)) -> Lattice:
    """Return a square lattice; with `periodic=(False, True)` a cylinder of circumference ny.

    Parameters
    ----------
    nx, ny : int
        Sites along each axis, at least 1.
    periodic : bool or pair of bool
        Per axis, or for both.

    Examples
    --------
    >>> square(4, 5, periodic=(False, True))
    <Lattice square 4x5 periodic y: 20 sites, 35 edges>
    """
    shape, seams = _axes({"nx": nx, "ny": ny}, periodic)
    recipe = {"kind": "square", "nx": nx, "ny": ny, "periodic": seams}
    bonds: list[_Bond] = [(0, 0, (1, 0)), (0, 0, (0, 1))]
    return _cells("square", shape, seams, [(0, 0)], [(1, 0), (0, 1)], bonds, recipe)


def triangular(nx: int, ny: int, periodic: bool | Sequence[bool] = (False, False)) -> Lattice:
    """Return a triangular lattice in the shape of a rhombus, axes at 60 degrees."""
    shape, seams = _axes({"nx": nx, "ny": ny}, periodic)
    recipe = {"kind": "triangular", "nx": nx, "ny": ny, "periodic": seams}
    bonds: list[_Bond] = [(0, 0, (1, 0)), (0, 0, (0, 1)), (0, 0, (-1, 1))]
    return _cells("triangular", shape, seams, [(0, 0)], [(1, 0), (0.5, _ROOT3 / 2)], bonds, recipe)


def honeycomb(nx: int, ny: int, periodic: bool | Sequence[bool] = (False, False)) -> Lattice:
    """Return a honeycomb lattice of nx by ny cells of two sites, with bonds of unit length."""
    shape, seams = _axes({"nx": nx, "ny": ny}, periodic)
    recipe = {"kind": "honeycomb", "nx": nx, "ny": ny, "periodic": seams}
    bonds: list[_Bond] = [(0, 1, (0, 0)), (1, 0, (1, 0)), (1, 0, (0, 1))]
    vectors = [(_ROOT3, 0.0), (_ROOT3 / 2, 1.5)]
    return _cells("honeycomb", shape, seams, [(0, 0), (_ROOT3 / 2, 0.5)], vectors, bonds, recipe)


def cubic(nx: int, ny: int, nz: int, periodic: bool | Sequence[bool] = (False, False, False)) -> Lattice:
    """Return a simple cubic lattice."""
    shape, seams = _axes({"nx": nx, "ny": ny, "nz": nz}, periodic)
    recipe = {"kind": "cubic", "nx": nx, "ny": ny, "nz": nz, "periodic": seams}
    vectors = [(1, 0, 0), (0, 1, 0), (0, 0, 1)]
    return _cells("cubic", shape, seams, [(0, 0, 0)], vectors, [(0, 0, v) for v in vectors], recipe)


def diamond(nx: int, ny: int, nz: int, periodic: bool | Sequence[bool] = (False, False, False)) -> Lattice:
    """Return a diamond lattice of nx by ny by nz primitive cells of two sites, with bonds of length sqrt(3)."""
    shape, seams = _axes({"nx": nx, "ny": ny, "nz": nz}, periodic)
    recipe = {"kind": "diamond", "nx": nx, "ny": ny, "nz": nz, "periodic": seams}
    bonds: list[_Bond] = [(0, 1, (0, 0, 0)), (1, 0, (1, 0, 0)), (1, 0, (0, 1, 0)), (1, 0, (0, 0, 1))]
    vectors = [(0, 2, 2), (2, 0, 2), (2, 2, 0)]
    return _cells("diamond", shape, seams, [(0, 0, 0), (1, 1, 1)], vectors, bonds, recipe)


def biclique(a: int, b: int) -> Lattice:
    """Return the complete bipartite graph: each of the first a sites coupled to each of the other b."""
    a, b = integer("a", a, low=1), integer("b", b, low=1)
    edges = [(i, a + j) for i in range(a) for j in range(b)]
    rows = [(0.0, i - (a - 1) / 2) for i in range(a)] + [(max(a, b) / 2, j - (b - 1) / 2) for j in range(b)]
    return Lattice(a + b, edges, rows, f"biclique {a}+{b}", recipe={"kind": "biclique", "a": a, "b": b})


def complete(n: int) -> Lattice:
    """Return the complete graph of n sites; draw its couplings with `normalise="sqrt_n"` to keep energies extensive."""
    n = integer("n", n, low=1)
    edges = np.argwhere(np.triu(np.ones((n, n), dtype=bool), 1))
    return Lattice(n, edges, _circle(n), f"complete {n}", recipe={"kind": "complete", "n": n})


def random_regular(n: int, degree: int, seed: int) -> Lattice:
    """Return a random graph in which every site has the same degree.

    Parameters
    ----------
    n, degree : int
        Their product must be even, and degree at most n - 1.
    seed : int
        The same seed gives the same graph on every platform.

    References
    ----------
    Steger and Wormald, Combin. Probab. Comput. 8, 377 (1999): close to uniform among all such graphs.

    Examples
    --------
    >>> random_regular(8, 3, seed=1).degrees.tolist()
    [3, 3, 3, 3, 3, 3, 3, 3]
    """
    n = integer("n", n, low=1)
    degree = integer("degree", degree, low=0, high=n - 1)
    if n * degree % 2:
        raise InputError(f"n times degree must be even, each edge has two ends; got {n} times {degree}")
    seed = integer("seed", seed, low=0)
    recipe = {"kind": "random_regular", "n": n, "degree": degree, "seed": seed}
    return Lattice(
        n, regular_edges(n, degree, seed), _circle(n), f"random {degree}-regular {n} seed {seed}", None, recipe
    )


def from_edges(
    n_sites: int,
    edges: ArrayLike,
    coordinates: ArrayLike | None = None,
    name: str = "graph",
    labels: ArrayLike | None = None,
) -> Lattice:
    """Return any graph; see `Lattice`.

    Parameters
    ----------
    n_sites : int
    edges : array_like of int, shape (m, 2)
        Pairs of sites 0 ... n_sites - 1; with `labels`, pairs of labels, as the list of a device's couplers gives them.
    coordinates : array_like, shape (n_sites, 1 ... 3), optional
    name : str
    labels : array_like of int, shape (n_sites,), optional
        The device's own label of every site.

    Raises
    ------
    InputError
        Edges of sites or labels that are not there, self edges, duplicate edges, labels that repeat.

    Examples
    --------
    >>> from_edges(3, [(0, 1), (2, 1)], name="fork")
    <Lattice fork: 3 sites, 2 edges>
    >>> from_edges(3, [(101, 104), (104, 230)], labels=[101, 104, 230]).edges.tolist()
    [[0, 1], [1, 2]]
    """
    if labels is None:
        return Lattice(n_sites, edges, coordinates, name)
    known = whole("labels", labels, (integer("n_sites", n_sites, low=1),)).tolist()
    site = {label: place for place, label in enumerate(known)}
    pairs = whole("edges", np.empty((0, 2)) if np.size(edges) == 0 else edges, (None, 2))
    for k, pair in enumerate(pairs.tolist()):
        for label in pair:
            if label not in site:
                raise InputError(f"edges must join sites by their labels; edge {k} names {label}, which is no label")
    joined = np.array([[site[a], site[b]] for a, b in pairs.tolist()], dtype=np.intp).reshape(-1, 2)
    return Lattice(n_sites, joined, coordinates, name, labels=labels)


def from_networkx(graph: Any, name: str | None = None) -> Lattice:
    """Return the lattice of an undirected networkx graph.

    Sites are the nodes in the order of `graph.nodes`. The node attributes `label` (an integer) and `coordinates` are
    taken if every node has them; without `label`, integer nodes are labels themselves. Edges follow their attribute
    `index` where they have it. Other attributes, such as weights, are not read: couplings belong to the instance.

    Parameters
    ----------
    graph : networkx.Graph
    name : str, optional
        By default the name of the graph.

    Raises
    ------
    InputError
        A directed graph, a multigraph, self edges.

    Examples
    --------
    >>> import networkx
    >>> from_networkx(networkx.petersen_graph())
    <Lattice Petersen Graph: 10 sites, 15 edges>
    """
    if not all(hasattr(graph, word) for word in ("nodes", "edges", "is_directed", "is_multigraph")):
        raise InputError(f"graph must be a networkx.Graph; got a {type(graph).__name__}")
    if graph.is_directed() or graph.is_multigraph():
        raise InputError(
            f"graph must be an undirected networkx.Graph without parallel edges; got a {type(graph).__name__}; "
            "convert it with networkx.Graph(graph)"
        )
    nodes = list(graph.nodes)
    site_of = {node: site for site, node in enumerate(nodes)}
    labels = [graph.nodes[node].get("label", node) for node in nodes]
    integers = all(isinstance(label, int | np.integer) and not isinstance(label, bool) for label in labels)
    places = [graph.nodes[node].get("coordinates") for node in nodes]
    pairs = sorted(graph.edges(data="index"), key=lambda edge: np.inf if edge[2] is None else edge[2])
    return Lattice(
        len(nodes),
        [(site_of[a], site_of[b]) for a, b, _ in pairs],
        None if any(place is None for place in places) else places,
        str(name or graph.name or "graph"),
        labels if integers else None,
    )


def from_recipe(recipe: Mapping[str, Any]) -> Lattice:
    """Make a lattice again from its `recipe`.

    Parameters
    ----------
    recipe : mapping
        `kind`, the arguments of the function of that name, and `dead` for a diluted lattice.

    Examples
    --------
    >>> from_recipe({"kind": "square", "nx": 2, "ny": 3, "dead": [5]})
    <Lattice square 2x3, 1 dead: 5 sites, 5 edges>
    """
    arguments = dict(recipe)
    kind = choice("kind", arguments.pop("kind", None), _FAMILIES)
    dead = arguments.pop("dead", None)
    try:
        lattice = _FAMILIES[kind](**arguments)
    except TypeError as error:
        raise InputError(f"the recipe of a {kind} lattice does not fit: {error}") from error
    return lattice if dead is None else lattice.diluted(dead=dead)


_FAMILIES: dict[str, Callable[..., Lattice]] = {
    function.__name__: function
    for function in (biclique, chain, complete, cubic, diamond, honeycomb, ladder, random_regular, square, triangular)
}


def _axes(sizes: Mapping[str, Any], periodic: Any) -> tuple[tuple[int, ...], tuple[bool, ...]]:
    """Check the number of cells and the periodic flag of every axis."""
    shape = tuple(integer(name, size, low=1) for name, size in sizes.items())
    flags = np.ravel(periodic).tolist()
    seams = tuple(flags * len(shape) if len(flags) == 1 else flags)
    if len(seams) != len(shape) or not all(isinstance(seam, bool) for seam in seams):
        raise InputError(
            f"periodic must be True or False, or one of them for each of {len(shape)} axes; got {periodic!r}"
        )
    for (name, size), seam in zip(sizes.items(), seams, strict=True):
        if seam and size < 3:
            raise InputError(
                f"a periodic axis needs at least 3 cells, with fewer it doubles bonds or closes false cycles; "
                f"got {name} = {size}; make that axis open or longer"
            )
    return shape, seams


def _cells(
    kind: str,
    shape: tuple[int, ...],
    seams: tuple[bool, ...],
    basis: Sequence[tuple[float, ...]],
    vectors: Sequence[tuple[float, ...]],
    bonds: Sequence[_Bond],
    recipe: Mapping[str, Any],
) -> Lattice:
    """Repeat a cell: site (cell * len(basis) + member), cells with the last axis fastest, bonds cell by cell."""
    cells = np.stack(np.meshgrid(*map(np.arange, shape), indexing="ij"), axis=-1).reshape(-1, len(shape))
    numbers = np.arange(len(cells))
    edges, valid = [], []
    for member, other, offset in bonds:
        target = cells + np.array(offset)
        inside = ((target >= 0) & (target < shape)) | np.array(seams)
        neighbour = np.ravel_multi_index(tuple((target % shape).T), shape)
        edges.append(np.stack([numbers * len(basis) + member, neighbour * len(basis) + other], axis=-1))
        valid.append(inside.all(axis=1))
    pairs = np.stack(edges, axis=1)[np.stack(valid, axis=1)]
    places = (cells @ np.array(vectors, dtype=float))[:, None, :] + np.array(basis, dtype=float)
    wrapped = "".join(axis for axis, seam in zip("xyz", seams, strict=False) if seam)
    name = f"{kind} {'x'.join(map(str, shape))}"
    if wrapped:
        name += " periodic" if len(shape) == 1 else f" periodic {wrapped}"
    recipe = {key: list(value) if isinstance(value, tuple) else value for key, value in recipe.items()}
    return Lattice(len(cells) * len(basis), pairs, places.reshape(-1, places.shape[-1]), name, None, recipe)


def _circle(n: int) -> NDArray[np.float64]:
    """Place n sites on a circle, about a unit apart."""
    angles = 2 * np.pi * np.arange(n) / n
    radius = n / (2 * np.pi) if n > 1 else 0.0
    return finite("coordinates", radius * np.stack([np.sin(angles), np.cos(angles)], axis=-1))
