r"""The order in which the sites of a graph are laid along a matrix product state.

A cut of the chain is crossed by couplings between *active* sites: sites on its left with neighbours on its right, and
the other way round. The size of a cut is the smaller of the two numbers. As many products of operators make up all
that crosses the cut: the size bounds the rank of the block of couplings (the channels of a Hamiltonian), and a time
under the couplings alone raises the bond dimension by a factor of 2^size at most. The cost of an order is

    sum over cuts of 4^size,    and at equal sums the total length of the couplings, in positions,

which is the number of couplings across a cut, summed over all cuts: of cuts of the same size, one that fewer couplings
cross is entangled more slowly. An order and its mirror image cost the same.

Strengths do not enter, and all arithmetic is in whole numbers: a graph gets the same order on every platform.

References
----------
N. G. Kinnersley, Inf. Process. Lett. 42, 345 (1992): if only the active sites on the left are counted, the largest
size, at its smallest, is the path-width of the graph.
E. Cuthill and J. McKee, Proc. 24th Nat. Conf. ACM, 157 (1969): breadth-first orders by degree.
G. Dueck and T. Scheuer, J. Comput. Phys. 90, 161 (1990): annealing by a falling threshold.
(From memory.)
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from itertools import cycle, islice, permutations, product
from operator import itemgetter

import numpy as np
from numpy.typing import ArrayLike, NDArray

from anneal_ref.backends.mps.ordering_kernels import improve
from anneal_ref.base.checks import finite
from anneal_ref.base.errors import InputError
from anneal_ref.model.lattice import whole
from anneal_ref.model.words import below, raw_words

Order = NDArray[np.intp]

SEARCHES = 4
"""Number of searches, from the best of the known orders, one each, and again from the first when they run out."""
STEPS_PER_SITE = 1 << 12
"""Steps of a search, for every site."""
MOST_LOOKS = 1 << 26
"""Sites and neighbours that a search may look at: on large graphs it takes fewer steps."""
FIRST_SLACK = 20000
"""Rise of the cost that the first steps may keep, in units of 2^-16: 30 %."""


def best_order(couplings: ArrayLike, coords: ArrayLike | None = None) -> Order:
    """Return an order of low cost: the best of several known beforehand, and of searches that start from them.

    Unconnected pieces of the graph come one after another; to mix them is never better.

    Parameters
    ----------
    couplings : array_like, shape (N, N)
        Symmetric; sites with a nonzero entry are neighbours. The diagonal does not matter.
    coords : array_like, shape (N, d), optional
        Positions of the sites, if sweeps along them shall be tried.

    Returns
    -------
    ndarray of int, shape (N,)
        The site at every position. Of equally good orders, the first known beforehand.

    Raises
    ------
    InputError
        Arrays of another shape or not finite, couplings that are not symmetric.

    Examples
    --------
    A cube, layer by layer and along its diagonal:

    >>> from anneal_ref.model.lattices import cubic
    >>> from anneal_ref.model.instances import Instance
    >>> cube = cubic(3, 3, 3)
    >>> couplings = Instance(cube, np.ones(cube.n_edges)).coupling_matrix()
    >>> int(cut_sizes(couplings, range(27)).max()), int(cut_sizes(couplings, best_order(couplings)).max())
    (9, 8)
    """
    pattern = _pattern(couplings)
    places = None if coords is None else finite("coords", coords, (len(pattern), None))
    return np.concatenate(
        [
            piece[_best(pattern[np.ix_(piece, piece)], None if places is None else places[piece])]
            for piece in _pieces(pattern)
        ]
    )


def cut_sizes(couplings: ArrayLike, order: ArrayLike) -> NDArray[np.intp]:
    """Return the number of active sites on the left or on the right of every cut, whichever is smaller.

    Parameters
    ----------
    couplings : array_like, shape (N, N)
        Symmetric.
    order : array_like of int, shape (N,)
        The site at every position.

    Returns
    -------
    ndarray of int, shape (N - 1,)
        At p, of the cut between the positions p and p + 1.

    Raises
    ------
    InputError

    Examples
    --------
    >>> ring = np.roll(np.eye(6), 1, axis=0) + np.roll(np.eye(6), 1, axis=1)
    >>> cut_sizes(ring, [0, 1, 2, 3, 4, 5]).tolist()
    [1, 2, 2, 2, 1]
    """
    pattern = _pattern(couplings)
    sites = _permutation(order, len(pattern))
    ordered = pattern[np.ix_(sites, sites)]
    blocks = [ordered[:cut, cut:] for cut in range(1, len(sites))]
    return np.array([min(np.count_nonzero(block.any(axis)) for axis in (0, 1)) for block in blocks], dtype=np.intp)


def cut_ranks(couplings: ArrayLike, order: ArrayLike) -> NDArray[np.intp]:
    """Return the rank of the block of couplings across every cut: the channels that a Hamiltonian needs there.

    Parameters, returns and raises are those of `cut_sizes`. The ranks are numerical: singular values within the
    rounding error of the largest count as zero.

    Examples
    --------
    Equal couplings need one channel, however many sites they join:

    >>> equal = np.ones((6, 6))
    >>> cut_sizes(equal, range(6)).tolist(), cut_ranks(equal, range(6)).tolist()
    ([1, 2, 3, 2, 1], [1, 1, 1, 1, 1])
    """
    sites = _permutation(order, len(_pattern(couplings)))
    ordered = np.asarray(couplings, dtype=np.float64)[np.ix_(sites, sites)]
    return np.array([np.linalg.matrix_rank(ordered[:cut, cut:]) for cut in range(1, len(sites))], dtype=np.intp)


def known_orders(pattern: NDArray[np.bool_], coords: NDArray[np.float64] | None = None) -> Iterator[Order]:
    """Yield the orders of a connected graph that need no search.

    They are the sites' own order; with positions, sweeps along every succession of the axes, row by row and to and
    fro; and Cuthill-McKee orders from sites far out.

    Parameters
    ----------
    pattern : ndarray of bool, shape (N, N)
        Symmetric, with an empty diagonal: which sites are neighbours.
    coords : ndarray, shape (N, d), optional
        Positions of the sites.
    """
    own = np.arange(len(pattern))
    yield own
    if coords is not None:
        for levels, to_and_fro in product(permutations(map(_levels, coords.T)), (False, True)):
            yield _sweep(own, levels, to_and_fro)
    far = 0
    for _ in range(3):
        # the last site of a breadth-first order is far out: the next one starts there
        layers = _layers(pattern, far)
        yield layers
        far = int(layers[-1])


def _best(pattern: NDArray[np.bool_], coords: NDArray[np.float64] | None) -> Order:
    n = len(pattern)
    rows, neighbours = np.nonzero(pattern)
    starts = np.searchsorted(rows, np.arange(n + 1))
    prices = _prices(n, len(rows) // 2)
    steps = min(STEPS_PER_SITE * n, MOST_LOOKS // (n + len(rows)))

    def searched(start: Order, steps: int, index: int) -> tuple[int, Order]:
        order = start.copy()
        return improve(starts, neighbours, order, prices, _moves(n, steps, index), _slack(steps)), order

    different = {order.tobytes(): order for order in known_orders(pattern, coords)}
    # the cost alone decides: of equals, the first stays first
    known = sorted((searched(order, 0, 0) for order in different.values()), key=itemgetter(0))
    found = [searched(start, steps, index) for index, (_, start) in enumerate(islice(cycle(known), SEARCHES))]
    best: Order = min([known[0], *found], key=itemgetter(0))[1]
    return best


def _prices(n: int, n_edges: int) -> NDArray[np.int64]:
    """Price of a cut of every size up to n/2, in units of more than the total length of the couplings can be.

    4^size, up to the largest size for which the sum over all cuts fits 63 bits whatever the order (15 or more for 100
    sites with a few neighbours each), and from there on in proportion to the size: no bond dimension follows so far.
    """
    unit = 1 + n_edges * (n - 1)
    last = max(0, 62 - unit.bit_length() - (n * n).bit_length()) // 2
    prices = [unit * 4 ** min(size, last) * (1 + max(0, size - last)) for size in range(n // 2 + 1)]
    return np.array(prices, dtype=np.int64)


def _slack(steps: int) -> NDArray[np.int64]:
    """Fall from FIRST_SLACK to 0 as the cube of the steps that are left."""
    left = np.arange(steps, 0, -1) * 1024 // max(steps, 1)
    return FIRST_SLACK * left**3 >> 30


def _moves(n: int, steps: int, index: int) -> NDArray[np.int64]:
    kind, first, second = raw_words(3 * steps, seed=0, index=index, stream="graph").reshape(3, steps)
    return np.stack([below(2, kind), below(n, first), below(n, second)], axis=1)


def _levels(column: NDArray[np.float64]) -> NDArray[np.intp]:
    """Give every value of a coordinate its rank; values that differ by rounding errors share one."""
    order = np.argsort(column, kind="stable")
    levels = np.empty(len(column), dtype=np.intp)
    levels[order] = np.concatenate([[0], np.cumsum(np.diff(column[order]) > 1e-6 * np.ptp(column))])
    return levels


def _sweep(sites: Order, levels: Sequence[NDArray[np.intp]], to_and_fro: bool) -> Order:
    """Go through the first coordinate level by level, within each through the second, and so on."""
    if not levels:
        return sites
    numbers = levels[0][sites]
    rows = [_sweep(sites[numbers == level], levels[1:], to_and_fro) for level in np.unique(numbers)]
    return np.concatenate([row[::-1] if to_and_fro and k % 2 else row for k, row in enumerate(rows)])


def _layers(pattern: NDArray[np.bool_], start: int) -> Order:
    """Cuthill-McKee order of the sites that can be reached: breadth first, neighbours by degree, then by number.

    That of scipy leaves the order of equal degrees to an unstable sort, which may differ between processors.
    """
    degrees, new = pattern.sum(axis=0), np.ones(len(pattern), dtype=bool)
    order = [start]
    new[start] = False
    for site in order:
        reached = np.flatnonzero(pattern[site] & new)
        new[reached] = False
        order += reached[np.argsort(degrees[reached], kind="stable")].tolist()
    return np.array(order, dtype=np.intp)


def _pieces(pattern: NDArray[np.bool_]) -> list[Order]:
    """Sites of the connected pieces, each ascending; the pieces by their first sites."""
    pieces, left = [], np.ones(len(pattern), dtype=bool)
    while left.any():
        pieces.append(np.sort(_layers(pattern, int(left.argmax()))))
        left[pieces[-1]] = False
    return pieces


def _pattern(couplings: ArrayLike) -> NDArray[np.bool_]:
    matrix = finite("couplings", couplings, (None, None))
    if matrix.shape[0] != matrix.shape[1] or matrix.size == 0:
        raise InputError(f"couplings must have shape (N, N) with N at least 1; got shape {matrix.shape}")
    if (matrix != matrix.T).any():
        i, j = (int(k) for k in np.argwhere(matrix != matrix.T)[0])
        raise InputError(
            f"couplings must be symmetric; got {matrix[i, j]} at [{i}, {j}] and {matrix[j, i]} at [{j}, {i}]"
        )
    pattern: NDArray[np.bool_] = (matrix != 0) & ~np.eye(len(matrix), dtype=bool)
    return pattern


def _permutation(order: ArrayLike, n: int) -> Order:
    sites = whole("order", order, (n,))
    if not np.array_equal(np.sort(sites), np.arange(n)):
        raise InputError(f"order must name each of the sites 0 ... {n - 1} once; got {np.array2string(sites)}")
    return sites
