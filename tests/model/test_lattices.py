"""Lattices against networkx generators and known coordination, and everything a lattice refuses."""

import pickle

import networkx as nx
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from anneal_ref import lattices
from anneal_ref.base.errors import InputError
from anneal_ref.model.lattice import Lattice

ALL = {
    "chain": lattices.chain(7),
    "ring": lattices.chain(7, periodic=True),
    "ladder": lattices.ladder(5),
    "ladder ring": lattices.ladder(5, periodic=True),
    "square": lattices.square(3, 4),
    "cylinder": lattices.square(4, 5, periodic=(False, True)),
    "torus": lattices.square(4, 5, periodic=True),
    "triangular": lattices.triangular(4, 3),
    "triangular torus": lattices.triangular(4, 5, periodic=True),
    "honeycomb": lattices.honeycomb(3, 4),
    "honeycomb torus": lattices.honeycomb(4, 3, periodic=(True, True)),
    "cubic": lattices.cubic(2, 3, 4),
    "cubic torus": lattices.cubic(3, 4, 5, periodic=True),
    "diamond": lattices.diamond(2, 3, 2),
    "diamond torus": lattices.diamond(4, 4, 4, periodic=True),
    "biclique": lattices.biclique(3, 5),
    "complete": lattices.complete(6),
    "random regular": lattices.random_regular(12, 3, seed=5),
    "diluted": lattices.square(5, 5).diluted(fraction=0.3, seed=2),
}
each = pytest.mark.parametrize("lattice", ALL.values(), ids=ALL.keys())


@pytest.mark.parametrize(
    ("lattice", "peer"),
    [
        (lattices.chain(6), nx.path_graph(6)),
        (lattices.chain(1), nx.path_graph(1)),
        (lattices.chain(6, True), nx.cycle_graph(6)),
        (lattices.ladder(5), nx.ladder_graph(5)),
        (lattices.ladder(5, True), nx.circular_ladder_graph(5)),
        (lattices.square(3, 5), nx.grid_2d_graph(3, 5)),
        (lattices.square(3, 5, (False, True)), nx.grid_2d_graph(3, 5, periodic=(False, True))),
        (lattices.square(5, 3, True), nx.grid_2d_graph(5, 3, periodic=True)),
        (lattices.cubic(2, 3, 2), nx.grid_graph((2, 3, 2))),
        (lattices.cubic(3, 3, 3, True), nx.grid_graph((3, 3, 3), periodic=True)),
        (lattices.cubic(2, 2, 3, (False, False, True)), nx.grid_graph((3, 2, 2), periodic=(True, False, False))),
        (lattices.triangular(5, 2), nx.triangular_lattice_graph(1, 8)),
        (lattices.triangular(3, 3, True), nx.circulant_graph(9, [1, 2, 4])),
        (lattices.honeycomb(2, 2), nx.hexagonal_lattice_graph(1, 1)),
        (lattices.honeycomb(5, 2), nx.hexagonal_lattice_graph(4, 1)),
        # the maps {6,3}_(3,0) and {6,3}_(4,0) on the torus: Coxeter, Bull. Amer. Math. Soc. 56, 413 (1950)
        (lattices.honeycomb(3, 3, True), nx.pappus_graph()),
        (lattices.honeycomb(4, 4, True), nx.LCF_graph(32, [5, -5, 13, -13], 8)),
        (lattices.biclique(3, 4), nx.complete_bipartite_graph(3, 4)),
        (lattices.complete(7), nx.complete_graph(7)),
    ],
    ids=lambda x: getattr(x, "name", ""),
)
def test_isomorphic_to_networkx(lattice, peer):
    graph = lattice.to_networkx()
    if lattice.name.startswith("honeycomb") and "periodic" not in lattice.name:
        # a rhombus of whole cells has two more sites, at its acute corners
        graph.remove_nodes_from([node for node, degree in list(graph.degree) if degree == 1])
    assert nx.is_isomorphic(graph, peer)


@pytest.mark.parametrize(
    ("name", "degree", "girth", "bipartite"),
    [
        ("ring", 2, 7, False),
        ("torus", 4, 4, False),
        ("triangular torus", 6, 3, False),
        ("honeycomb torus", 3, 6, True),
        ("cubic torus", 6, 3, False),
        ("diamond torus", 4, 6, True),
        ("biclique", None, 4, True),
        ("complete", 5, 3, False),
    ],
)
def test_coordination_girth_bipartiteness(name, degree, girth, bipartite):
    """Common knowledge of crystallography; odd periodic axes spoil bipartiteness, an axis of 3 makes a triangle."""
    graph = ALL[name].to_networkx()
    if degree is not None:
        assert set(dict(graph.degree).values()) == {degree}
    assert nx.girth(graph) == girth
    assert nx.is_bipartite(graph) == bipartite
    assert nx.is_connected(graph)


@pytest.mark.parametrize(
    ("lattice", "edges"),
    [
        (lattices.square(4, 6), 4 * 5 + 3 * 6),
        (lattices.triangular(4, 6), 4 * 5 + 3 * 6 + 3 * 5),
        (lattices.honeycomb(4, 6), 4 * 6 + 3 * 6 + 4 * 5),
        (lattices.cubic(2, 3, 4), 1 * 3 * 4 + 2 * 2 * 4 + 2 * 3 * 3),
        (lattices.diamond(2, 2, 3), 12 + 6 + 6 + 8),
        (lattices.honeycomb(1, 1), 1),
        (lattices.square(1, 1), 0),
    ],
)
def test_open_edge_counts(lattice, edges):
    assert lattice.n_edges == edges


@pytest.mark.parametrize("name", ["square", "triangular", "honeycomb", "cubic", "diamond", "chain", "ladder"])
def test_bonds_of_open_lattices_join_nearest_neighbours(name):
    lattice = ALL[name]
    where, edges = lattice.coordinates, lattice.edges
    lengths = np.linalg.norm(where[edges[:, 0]] - where[edges[:, 1]], axis=1)
    assert np.allclose(lengths, lengths[0])
    distances = np.linalg.norm(where[:, None] - where[None], axis=-1)
    near = np.argwhere(np.triu(np.abs(distances - lengths[0]) < 1e-9, 1))
    assert {tuple(sorted(edge)) for edge in edges.tolist()} == {tuple(pair) for pair in near.tolist()}
    assert distances[~np.eye(lattice.n_sites, dtype=bool)].min() > lengths[0] - 1e-9


@each
def test_coordinates_are_distinct_and_planar_or_spatial(lattice):
    assert lattice.coordinates.shape in {(lattice.n_sites, 2), (lattice.n_sites, 3)}
    assert len(np.unique(lattice.coordinates.round(9), axis=0)) == lattice.n_sites


@each
def test_recipe_makes_it_again(lattice):
    assert_same(lattices.from_recipe(lattice.recipe), lattice)


@each
def test_pickle_keeps_everything_and_read_only(lattice):
    again = pickle.loads(pickle.dumps(lattice))
    assert_same(again, lattice)
    assert again.recipe == lattice.recipe
    for array in (again.edges, again.coordinates, again.labels):
        with pytest.raises(ValueError, match="read-only"):
            array[0] = 0


@each
def test_networkx_and_back(lattice):
    assert_same(lattices.from_networkx(lattice.to_networkx()), lattice, direction=False)


@each
def test_description(lattice):
    row = lattice.describe()
    assert (row["sites"], row["edges"]) == (lattice.n_sites, lattice.n_edges)
    assert lattice.name in repr(lattice)
    assert lattice.degrees.sum() == 2 * lattice.n_edges


def assert_same(one, other, direction=True):
    ends = (one.edges, other.edges) if direction else (np.sort(one.edges, axis=1), np.sort(other.edges, axis=1))
    assert np.array_equal(*ends)
    assert np.array_equal(one.labels, other.labels)
    assert np.array_equal(one.coordinates, other.coordinates)
    assert (one.n_sites, one.name) == (other.n_sites, other.name)


def test_edge_order_and_direction_are_kept():
    given_edges = [(2, 0), (1, 2), (0, 1)]
    assert lattices.from_edges(3, given_edges).edges.tolist() == [list(edge) for edge in given_edges]


def test_numbering_of_the_square():
    lattice = lattices.square(3, 4, periodic=(False, True))
    assert lattice.coordinates[2 * 4 + 3].tolist() == [2, 3]
    assert [8, 11] in np.sort(lattice.edges, axis=1).tolist()


def test_networkx_attributes_and_names():
    graph = nx.Graph(name="odd one")
    graph.add_edge(10, 7, weight=3.0)
    graph.add_node(4)
    lattice = lattices.from_networkx(graph)
    assert lattice.labels.tolist() == [10, 7, 4]
    assert lattice.edges.tolist() == [[0, 1]]
    assert lattice.name == "odd one"
    assert lattices.from_networkx(nx.Graph([("a", "b")])).labels.tolist() == [0, 1]


# dilution


def test_dilution_keeps_labels_and_isolated_sites():
    lattice = lattices.chain(5).diluted(dead=[1, 3])
    assert lattice.labels.tolist() == [0, 2, 4]
    assert lattice.edges.shape == (0, 2)
    assert lattice.describe()["isolated"] == 3
    assert lattice.coordinates.tolist() == [[0, 0], [2, 0], [4, 0]]


def test_dilution_twice_is_dilution_by_both():
    twice = lattices.square(4, 4).diluted(dead=[5]).diluted(dead=[6, 0])
    once = lattices.square(4, 4).diluted(dead=[0, 5, 6])
    assert np.array_equal(twice.edges, once.edges)
    assert twice.recipe == once.recipe == {**lattices.square(4, 4).recipe, "dead": [0, 5, 6]}
    assert twice.name == once.name == "square 4x4, 3 dead"
    assert lattices.from_edges(4, [(0, 1)]).diluted(dead=np.array([3])).name == "graph, 1 dead"


def test_dilution_by_fraction_is_frozen():
    lattice = lattices.square(4, 4).diluted(fraction=0.25, seed=5)
    assert lattice.labels.tolist() == [0, 1, 3, 4, 5, 7, 9, 10, 11, 12, 13, 14]


@pytest.mark.parametrize(("fraction", "left"), [(0.0, 30), (0.1, 27), (0.5, 15), (0.96, 1)])
def test_dilution_by_fraction_kills_that_many(fraction, left):
    assert lattices.square(5, 6).diluted(fraction=fraction, seed=0).n_sites == left


def test_every_site_dies_as_often():
    alive = np.zeros(12)
    for seed in range(600):
        alive[lattices.chain(12).diluted(fraction=0.5, seed=seed).labels] += 1
    # binomial(600, 1/2): 12 sites at a joint level of 1e-4 lie within 4.6 standard deviations
    assert np.abs(alive - 300).max() < 4.6 * np.sqrt(600 / 4)


# random regular graphs


@given(st.integers(2, 14), st.integers(0, 13), st.integers(0, 2**64 - 1))
def test_random_regular_is_regular(n, degree, seed):
    if degree >= n or n * degree % 2:
        with pytest.raises(InputError):
            lattices.random_regular(n, degree, seed)
    else:
        assert set(lattices.random_regular(n, degree, seed).degrees.tolist()) == {degree}


def test_random_regular_is_frozen():
    edges = lattices.random_regular(8, 3, seed=1).edges.tolist()
    assert edges == [
        [0, 1], [0, 3], [0, 5], [1, 4], [1, 6], [2, 5], [2, 6], [2, 7], [3, 4], [3, 5], [4, 7], [6, 7],
    ]  # fmt: skip


def test_random_regular_reaches_every_graph():
    """On 6 sites: 70 cubic graphs, 10 of them bicliques and 60 prisms (OEIS A002829; common knowledge)."""
    found = {lattices.random_regular(6, 3, seed).edges.tobytes() for seed in range(1500)}
    assert len(found) == 70


def test_large_random_regular():
    lattice = lattices.random_regular(300, 4, seed=0)
    assert set(lattice.degrees.tolist()) == {4}
    assert nx.is_connected(lattice.to_networkx())


# bad input


@pytest.mark.parametrize("flags", [(True, False), (False, True), True])
@pytest.mark.parametrize("size", [1, 2])
@pytest.mark.parametrize("make", [lattices.square, lattices.triangular, lattices.honeycomb])
def test_short_periodic_axes_are_refused(make, size, flags):
    with pytest.raises(InputError, match=rf"at least 3 cells.*got n[xy] = {size}; make that axis open or longer"):
        make(size, size, flags)


@pytest.mark.parametrize(
    "call",
    [
        lambda: lattices.chain(2, True),
        lambda: lattices.ladder(2, True),
        lambda: lattices.cubic(3, 3, 2, True),
        lambda: lattices.diamond(2, 3, 3, True),
    ],
)
def test_other_short_periodic_axes_are_refused(call):
    with pytest.raises(InputError, match="at least 3 cells"):
        call()


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: lattices.chain(0), "n must be a whole number of at least 1; got 0"),
        (lambda: lattices.square(2.5, 2), "nx must be a whole number of at least 1; got 2.5"),
        (
            lambda: lattices.square(3, 3, (True,) * 3),
            "periodic must be True or False, or one of them for each of 2 axes",
        ),
        (lambda: lattices.square(3, 3, (1, 0)), r"periodic must be .* got \(1, 0\)"),
        (lambda: lattices.random_regular(5, 3, 0), "n times degree must be even.*got 5 times 3"),
        (lambda: lattices.random_regular(4, 4, 0), "degree must be a whole number from 0 to 3; got 4"),
        (lambda: lattices.random_regular(4, 3, -1), "seed must be a whole number of at least 0; got -1"),
        (lambda: lattices.from_edges(3, [(0, 1), (1, 1)]), r"two different sites; edge 1 is \(1, 1\)"),
        (lambda: lattices.from_edges(3, [(0, 1), (1, 2), (1, 0)]), r"edges 0 and 2 both join \(1, 0\); add"),
        (lambda: lattices.from_edges(3, [(0, 3)]), r"edges must join sites 0 ... 2; edge 0 is \(0, 3\)"),
        (lambda: lattices.from_edges(3, [(-1, 0)]), r"edges must join sites 0 ... 2; edge 0 is \(-1, 0\)"),
        (lambda: lattices.from_edges(3, [(0, 1.5)]), r"edges must hold whole numbers; got 1.5 at \[0, 1\]"),
        (lambda: lattices.from_edges(3, [(0, np.nan)]), "edges must be finite"),
        (lambda: lattices.from_edges(3, [(0, 1, 2)]), r"edges must have shape \(any, 2\); got shape \(1, 3\)"),
        (lambda: lattices.from_edges(3, [(0, 1), (2,)]), "edges must be an array of numbers"),
        (lambda: lattices.from_edges(2, [(0, 1)], [[0, 0], [np.inf, 0]]), r"coordinates must be finite; got .*inf"),
        (lambda: lattices.from_edges(2, [(0, 1)], [[0, 0]]), r"coordinates must have shape \(2, any\)"),
        (lambda: lattices.from_edges(2, [(0, 1)], [[0], [1]]), r"shape \(2, 2\) or \(2, 3\); got shape \(2, 1\)"),
        (lambda: Lattice(3, [], labels=[1, 2, 1]), "labels must name every site differently; 1 comes twice"),
        (lambda: lattices.from_networkx(nx.DiGraph([(0, 1)])), "undirected.*got a DiGraph; convert"),
        (lambda: lattices.from_networkx(nx.MultiGraph([(0, 1), (0, 1)])), "without parallel edges; got a MultiGraph"),
        (lambda: lattices.from_networkx(nx.Graph([(0, 0)])), "two different sites"),
        (lambda: lattices.from_networkx([(0, 1)]), "graph must be a networkx.Graph; got a list"),
        (lambda: lattices.chain(4).diluted(), "either `dead`.*or `fraction` with `seed`"),
        (lambda: lattices.chain(4).diluted(fraction=0.5), "either `dead`.*or `fraction` with `seed`"),
        (lambda: lattices.chain(4).diluted(dead=[1], seed=0), "either `dead`.*or `fraction` with `seed`"),
        (lambda: lattices.chain(4).diluted(dead=[4]), r"dead must list sites of the lattice \(0 ... 3\); got 4"),
        (lambda: lattices.chain(4).diluted(dead=[0]).diluted(dead=[0]), r"\(1, 2, 3\); got 0"),
        (lambda: lattices.chain(4).diluted(dead=[1, 1]), "dead must list each site once; 1 comes twice"),
        (lambda: lattices.chain(4).diluted(dead=range(4)), "a lattice needs at least 1 site; all 4"),
        (lambda: lattices.chain(4).diluted(fraction=1.5, seed=0), "fraction must be a finite number from 0.0 to 1.0"),
        (lambda: lattices.chain(4).relabelled([0, 1, 1, 2]), r"order must be a permutation of the sites 0 ... 3; got"),
        (lambda: lattices.from_recipe({"kind": "sqare"}), "did you mean 'square'"),
        (lambda: lattices.from_recipe({"kind": "square", "nx": 3}), "recipe of a square lattice does not fit.*'ny'"),
    ],
)
def test_bad_input(call, message):
    with pytest.raises(InputError, match=message):
        call()


def test_edges_of_a_lattice_belong_to_it():
    mine = np.array([[0, 1], [1, 2]])
    lattice = lattices.from_edges(3, mine)
    mine[0] = 2
    assert lattice.edges.tolist() == [[0, 1], [1, 2]]


def test_edges_between_device_labels():
    lattice = lattices.from_edges(4, [(230, 101), (104, 230)], labels=[101, 104, 230, 7])
    assert lattice.edges.tolist() == [[2, 0], [1, 2]]
    assert lattice.labels.tolist() == [101, 104, 230, 7]
    with pytest.raises(InputError, match="edge 0 names 102, which is no label"):
        lattices.from_edges(3, [(101, 102)], labels=[101, 104, 230])
    with pytest.raises(InputError, match=r"edge 0 is \(101, 104\); for a device's own labels use from_edges"):
        lattices.from_edges(3, [(101, 104)])
