"""Orders of the sites: optimal where all orders can be gone through, as wide as theory says, the same everywhere."""

import itertools
from math import log2

import networkx as nx
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.sparse import csr_array
from scipy.sparse.csgraph import maximum_bipartite_matching

import anneal_ref as ar
from anneal_ref.backends.mps import ordering
from anneal_ref.backends.mps.ordering import best_order, cut_ranks, cut_sizes, known_orders
from anneal_ref.backends.mps.ordering_kernels import improve
from anneal_ref.base.errors import InputError

lattices = ar.lattices
LATTICES = {
    "cylinder 4x4": lattices.square(4, 4, periodic=(False, True)),
    "cylinder 4x5": lattices.square(4, 5, periodic=(False, True)),
    "cylinder 6x6": lattices.square(6, 6, periodic=(False, True)),
    "torus 4x4": lattices.square(4, 4, periodic=True),
    "cubic 2x2x4": lattices.cubic(2, 2, 4),
    "cubic 2x3x3": lattices.cubic(2, 3, 3),
    "cubic 3x3x3": lattices.cubic(3, 3, 3),
    "diamond 2x2x2": lattices.diamond(2, 2, 2),
    "triangular 4x4": lattices.triangular(4, 4),
    "triangular 6x6": lattices.triangular(6, 6, periodic=(False, True)),
    "honeycomb 3x3": lattices.honeycomb(3, 3),
    "honeycomb 4x4": lattices.honeycomb(4, 4, periodic=(False, True)),
    "biclique 8+8": lattices.biclique(8, 8),
    "complete 12": lattices.complete(12),
    "random 3-regular 16": lattices.random_regular(16, 3, seed=1),
    "random 4-regular 16": lattices.random_regular(16, 4, seed=2),
    "random 3-regular 36": lattices.random_regular(36, 3, seed=1),
}


def couplings_of(lattice, seed=1):
    return ar.draw_instance(lattice, ar.disorder.plus_minus(), seed=seed).coupling_matrix()


def a_graph(seed, n, share):
    generator = np.random.default_rng(seed)
    upper = np.triu(generator.normal(size=(n, n)) * (generator.random((n, n)) < share), 1)
    return upper + upper.T


def price(couplings, order):
    """Sum of 4^size in Python's own whole numbers."""
    return sum(4 ** int(size) for size in cut_sizes(couplings, order))


def length(couplings, order):
    """Sum over couplings of the distance of their positions."""
    place = np.argsort(order)
    first, second = np.nonzero(np.triu(couplings, 1))
    return int(abs(place[first] - place[second]).sum())


def cost(couplings, order):
    return price(couplings, order), length(couplings, order)


def sizes_of_subsets(couplings):
    """Size of the cut between every set of sites (a bit mask) and its complement, from the definition."""
    n = len(couplings)
    subsets = np.arange(1 << n)
    masks = [sum(1 << int(k) for k in np.flatnonzero(row)) for row in couplings != 0]
    inside = sum(((subsets >> k & 1 == 1) & (~subsets & mask != 0)).astype(int) for k, mask in enumerate(masks))
    outside = sum(((subsets >> k & 1 == 0) & (subsets & mask != 0)).astype(int) for k, mask in enumerate(masks))
    return np.minimum(inside, outside)


def lowest_price(couplings):
    """Lowest sum of 4^size over all orders, by dynamic programming over subsets.

    M. Held and R. M. Karp, J. SIAM 10, 196 (1962), from memory.
    """
    n = len(couplings)
    prices = 4 ** sizes_of_subsets(couplings)
    prices[-1] = 0
    lowest = np.zeros(1 << n, dtype=np.int64)
    counts = np.bitwise_count(np.arange(1 << n))
    for count in range(1, n + 1):
        subsets = np.flatnonzero(counts == count)
        without = [np.where(subsets >> k & 1, lowest[subsets & ~(1 << k)], np.iinfo(np.int64).max) for k in range(n)]
        lowest[subsets] = prices[subsets] + np.min(without, axis=0)
    return int(lowest[-1])


# the best there is


@pytest.mark.parametrize("seed", range(8))
def test_dynamic_programme_agrees_with_all_permutations(seed):
    couplings = a_graph(seed, 3 + seed % 4, 0.5)
    orders = itertools.permutations(range(len(couplings)))
    assert lowest_price(couplings) == min(price(couplings, order) for order in orders)


@pytest.mark.parametrize("seed", range(40))
def test_optimal_on_small_random_graphs(seed):
    couplings = a_graph(seed, 3 + seed % 8, (0.3, 0.5, 0.8)[seed % 3])
    assert price(couplings, best_order(couplings)) == lowest_price(couplings)


@pytest.mark.parametrize("name", [name for name, lattice in LATTICES.items() if lattice.n_sites <= 18])
def test_optimal_on_lattices(name):
    couplings = couplings_of(LATTICES[name])
    assert price(couplings, best_order(couplings)) == lowest_price(couplings)


def test_wrong_twin_that_only_shortens_the_couplings_is_not_optimal(monkeypatch):
    monkeypatch.setattr(ordering, "_prices", lambda n, n_edges: np.zeros(n // 2 + 1, dtype=np.int64))
    couplings = couplings_of(LATTICES["cubic 2x3x3"])
    assert price(couplings, best_order(couplings)) > 1.5 * lowest_price(couplings)


@pytest.mark.parametrize("name", LATTICES)
def test_never_worse_than_an_order_known_beforehand(name):
    lattice = LATTICES[name]
    couplings = couplings_of(lattice)
    chosen = cost(couplings, best_order(couplings, lattice.coordinates))
    known = list(known_orders(couplings != 0, lattice.coordinates))
    assert len(known) >= 8
    assert chosen <= min(cost(couplings, order) for order in known)


# widths from theory


@pytest.mark.parametrize(
    ("lattice", "width"),
    [
        (lattices.chain(9), 1),
        (lattices.chain(9, periodic=True), 2),
        (lattices.ladder(9), 2),
        (lattices.biclique(1, 9), 1),
        (lattices.biclique(5, 8), 5),
        (lattices.complete(9), 4),
        (lattices.square(5, 9), 5),
        (lattices.square(6, 6), 6),
        (lattices.square(7, 4, periodic=(False, True)), 4),
        (lattices.square(6, 6, periodic=(False, True)), 6),
    ],
    ids=lambda value: value.name if isinstance(value, ar.Lattice) else str(value),
)
def test_largest_size(lattice, width):
    # by hand: no more than n/2 sites lie on the smaller side, none of a complete graph is idle, a ring is cut twice.
    # An open grid has path-width min(nx, ny): H. L. Bodlaender, Theor. Comput. Sci. 209, 1 (1998), from memory.
    couplings = couplings_of(lattice)
    assert cut_sizes(couplings, best_order(couplings)).max() == width


def test_trees_are_no_wider_than_their_path_width():
    # a complete binary tree of height h has path-width ceil(h/2): P. Scheffler (1989), from memory
    tree = nx.to_numpy_array(nx.balanced_tree(2, 5))
    assert cut_sizes(tree, best_order(tree)).max() <= 3


def test_sides_of_a_biclique_are_interleaved():
    for a in (8, 30):
        couplings = couplings_of(lattices.biclique(a, a))
        interleaved = np.arange(2 * a).reshape(2, a).T.ravel()
        assert length(couplings, best_order(couplings)) <= length(couplings, interleaved)
        assert length(couplings, interleaved) < 0.7 * length(couplings, range(2 * a))


def largest_and_mean(values):
    return int(values.max()), round(float(values.mean()), 2)


@pytest.mark.parametrize(
    ("name", "own", "best"),
    [
        ("cylinder 4x4", (4, 3.2), (4, 3.07)),
        ("cylinder 6x6", (6, 5.14), (6, 4.74)),
        ("cubic 2x2x4", (8, 4.27), (4, 3.07)),
        ("cubic 3x3x3", (9, 6.23), (7, 4.77)),
        ("honeycomb 4x4", (5, 3.87), (4, 3.32)),
        ("random 3-regular 36", (16, 9.03), (7, 4.46)),
    ],
)
def test_ranks_stay_as_low_as_they_were(name, own, best):
    couplings = couplings_of(LATTICES[name])
    assert largest_and_mean(cut_ranks(couplings, range(len(couplings)))) == own
    assert largest_and_mean(cut_ranks(couplings, best_order(couplings))) <= best


# what it is for


def discarded(psi, order, bond_dimension):
    """Sum over cuts of the weight beyond the largest Schmidt values."""
    n = len(order)
    tensor = psi.reshape((2,) * n).transpose([n - 1 - site for site in order])
    weights = [np.linalg.svd(tensor.reshape(2**cut, -1), compute_uv=False) ** 2 for cut in range(1, n)]
    return sum(weight[bond_dimension:].sum() for weight in weights)


@pytest.mark.parametrize(
    ("lattice", "bond_dimension"), [(lattices.cubic(2, 2, 3), 16), (lattices.random_regular(12, 3, seed=1), 12)]
)
def test_annealed_states_lose_far_less_to_truncation(lattice, bond_dimension):
    instance = ar.draw_instance(lattice, ar.disorder.plus_minus(), seed=3)
    anneal = ar.Anneal(instance, ar.Schedule.polynomial([5, -10, 5], [0, 5]), duration=1.0)
    psi = ar.StateVector(tolerance=1e-6).evolve(anneal).amplitudes()
    order = best_order(instance.coupling_matrix(), lattice.coordinates)
    assert discarded(psi, order, bond_dimension) < 0.05 * discarded(psi, range(12), bond_dimension)


# the same everywhere


def test_frozen():
    couplings = couplings_of(LATTICES["random 3-regular 16"])
    assert best_order(couplings).tolist() == [9, 12, 10, 3, 8, 6, 4, 5, 13, 15, 2, 7, 14, 11, 1, 0]
    lattice = lattices.square(4, 3, periodic=(True, False))
    assert best_order(couplings_of(lattice), lattice.coordinates).tolist() == [0, 3, 9, 1, 6, 4, 10, 2, 7, 5, 11, 8]


def test_strengths_and_signs_and_the_diagonal_do_not_matter():
    couplings = a_graph(5, 14, 0.3)
    order = best_order(couplings)
    assert order.dtype == np.intp
    np.testing.assert_array_equal(order, best_order((couplings != 0) + 3.0 * np.eye(14)))


@pytest.mark.parametrize("name", ["cylinder 4x5", "cubic 3x3x3", "honeycomb 3x3", "random 3-regular 16"])
def test_labels_do_not_matter(name):
    couplings = couplings_of(LATTICES[name])
    expected = price(couplings, best_order(couplings))
    for seed in range(2):
        labels = np.random.default_rng(seed).permutation(len(couplings))
        relabelled = couplings[np.ix_(labels, labels)]
        assert price(relabelled, best_order(relabelled)) == expected


graphs = st.builds(a_graph, st.integers(0, 10**6), st.integers(1, 9), st.sampled_from([0.1, 0.3, 0.6, 1.0]))


@settings(max_examples=40)
@given(graphs)
def test_permutation_and_never_worse_than_the_own_order(couplings):
    n = len(couplings)
    order = best_order(couplings, np.random.default_rng(n).normal(size=(n, 2)))
    assert sorted(order.tolist()) == list(range(n))
    assert price(couplings, order) <= price(couplings, range(n))
    assert cost(couplings, order) == cost(couplings, order[::-1])


# pieces


def test_pieces_come_one_after_another():
    ring = np.roll(np.eye(6), 1, axis=0) + np.roll(np.eye(6), 1, axis=1)
    mixed = np.zeros((14, 14))
    mixed[1:13:2, 1:13:2] = mixed[2:13:2, 2:13:2] = ring
    order = best_order(mixed, np.random.default_rng(0).normal(size=(14, 3)))
    assert [set(part) for part in np.split(order, [1, 7, 13])] == [{0}, {1, 3, 5, 7, 9, 11}, {2, 4, 6, 8, 10, 12}, {13}]
    assert cut_sizes(mixed, order).tolist() == [0, 1, 2, 2, 2, 1, 0, 1, 2, 2, 2, 1, 0]
    assert price(mixed, order) == lowest_price(mixed)


@pytest.mark.parametrize("n", [1, 2, 5])
def test_without_couplings_the_own_order_stays(n):
    assert best_order(np.zeros((n, n))).tolist() == list(range(n))
    assert cut_sizes(np.zeros((n, n)), range(n)).tolist() == cut_ranks(np.zeros((n, n)), range(n)).tolist()


# sizes and ranks


@settings(max_examples=40)
@given(graphs, st.randoms(use_true_random=False))
def test_sizes_follow_their_definition_and_bound_the_ranks(couplings, random):
    n = len(couplings)
    order = random.sample(range(n), n)
    expected = sizes_of_subsets(couplings)[np.cumsum([1 << site for site in order])[:-1]]
    np.testing.assert_array_equal(cut_sizes(couplings, order), expected)
    # the rank of a matrix of independent random entries is the largest matching of its pattern (König; common practice)
    blocks = [csr_array(couplings[np.ix_(order[:cut], order[cut:])]) for cut in range(1, n)]
    matched = [np.count_nonzero(maximum_bipartite_matching(block, perm_type="column") >= 0) for block in blocks]
    assert cut_ranks(couplings, order).tolist() == matched
    assert (cut_ranks(couplings, order) <= cut_sizes(couplings, order)).all()


# the kernel


def kernel_cost(couplings, order, prices):
    rows, neighbours = np.nonzero(couplings)
    starts = np.searchsorted(rows, np.arange(len(order) + 1))
    nothing = np.empty((0, 3), dtype=np.int64)
    return improve(starts, neighbours, np.array(order), prices, nothing, nothing[:, 0])


@pytest.mark.parametrize("n", [2, 7, 20, 61])
def test_kernel_counts_sizes_and_lengths(n):
    couplings = a_graph(n, n, 4 / n)
    order = np.random.default_rng(n).permutation(n)
    prices = ordering._prices(n, int(np.count_nonzero(couplings)) // 2)
    expected = prices[cut_sizes(couplings, order)].sum() + length(couplings, order)
    assert kernel_cost(couplings, order, prices) == expected
    # wrong twin: active sites on the left alone
    left = [np.count_nonzero(couplings[np.ix_(order[:cut], order[cut:])].any(axis=1)) for cut in range(1, n)]
    if n > 2:
        assert prices[np.minimum(left, n // 2)].sum() + length(couplings, order) > expected


@pytest.mark.parametrize(("n", "degree"), [(8, 3), (36, 4), (100, 3), (150, 149), (600, 4)])
def test_prices_rank_like_powers_of_four_and_never_overflow(n, degree):
    n_edges = n * degree // 2
    prices = [int(price) for price in ordering._prices(n, n_edges)]
    followed = sum(1 for low, high in itertools.pairwise(prices) if high == 4 * low)
    assert followed >= min(n // 2, 11)
    assert all(high > low for low, high in itertools.pairwise(prices))
    assert (n - 1) * prices[-1] + n_edges * (n - 1) < 2**63
    # one cut of the next size outweighs any saving in length
    assert prices[0] > n_edges * (n - 1)
    assert log2(prices[followed] / prices[0]) == 2 * followed


# sweeps


def test_sweeps_along_the_axes():
    lattice = lattices.square(3, 2)
    orders = [order.tolist() for order in known_orders(couplings_of(lattice) != 0, lattice.coordinates)]
    assert orders[:5] == [
        [0, 1, 2, 3, 4, 5],
        [0, 1, 2, 3, 4, 5],
        [0, 1, 3, 2, 4, 5],
        [0, 2, 4, 1, 3, 5],
        [0, 2, 4, 5, 3, 1],
    ]
    # breadth first from a corner, from the far corner, and back
    assert orders[5:] == [[0, 1, 2, 3, 4, 5], [5, 4, 3, 2, 1, 0], [0, 1, 2, 3, 4, 5]]


def test_rows_of_a_sweep_survive_rounding_errors():
    lattice = lattices.square(3, 3)
    noise = 1e-12 * np.random.default_rng(0).normal(size=(9, 2))
    pattern = couplings_of(lattice) != 0
    for exact, noisy in zip(
        known_orders(pattern, lattice.coordinates), known_orders(pattern, lattice.coordinates + noise), strict=True
    ):
        np.testing.assert_array_equal(exact, noisy)


# the border


@pytest.mark.parametrize(
    ("couplings", "coords", "message"),
    [
        (np.zeros((2, 3)), None, r"shape \(N, N\).*got shape \(2, 3\)"),
        (np.zeros((0, 0)), None, "N at least 1"),
        ([[0.0, 1.0], [2.0, 0.0]], None, r"symmetric; got 1.0 at \[0, 1\] and 2.0 at \[1, 0\]"),
        ([[0.0, np.nan], [np.nan, 0.0]], None, "must be finite"),
        (np.zeros((2, 2)), np.zeros((3, 2)), "coords must have shape"),
    ],
)
def test_refused(couplings, coords, message):
    with pytest.raises(InputError, match=message):
        best_order(couplings, coords)


@pytest.mark.parametrize("order", [[0, 1], [0, 1, 1], [0, 1, 3], [0.5, 1, 2]])
def test_orders_that_are_none_are_refused(order):
    for function in (cut_sizes, cut_ranks):
        with pytest.raises(InputError, match="order must"):
            function(np.zeros((3, 3)), order)
