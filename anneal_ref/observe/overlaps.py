"""Observables of spins: functions of single shots, or of pairs of different shots.

Spins have shape (n_shots, n_sites) and hold +1 and -1. Errors come from `samples.estimate(f, of="spins")` by the
jackknife over shots. Pairs of shots share shots, so an error taken from the scatter of pairs would be too small; and a
bootstrap puts a shot beside its own copy, which is no pair.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import ArrayLike, NDArray

from anneal_ref.base.checks import finite, integer
from anneal_ref.base.errors import InputError

if TYPE_CHECKING:
    from anneal_ref.model.instances import Instance

_CHUNK_BYTES = 1 << 25


def energies(spins: NDArray[np.int8], instance: Instance) -> NDArray[np.float64]:
    """Return the problem energy of each shot, shape (n_shots,), in units of J."""
    _check(spins, instance.n_sites)
    return np.asarray(instance.energies(spins), dtype=np.float64)


def energy_distribution(
    spins: NDArray[np.int8], instance: Instance, resolution: float = 1e-9
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return the energies that occur, ascending, and the fraction of shots at each.

    Energies closer than `resolution` (in units of J) to their neighbour are one level. With continuous couplings
    nearly every energy is a level of its own; see `energy_histogram`.
    """
    values = np.sort(energies(spins, instance))
    starts = np.concatenate(([0], np.flatnonzero(np.diff(values) > resolution) + 1))
    return values[starts], np.diff(np.append(starts, len(values))) / len(values)


def energy_histogram(spins: NDArray[np.int8], instance: Instance, edges: ArrayLike) -> NDArray[np.float64]:
    """Return the fraction of shots in each bin [edge, next edge), the last one closed; shape (n_edges - 1,).

    Raises
    ------
    InputError
        Edges that do not ascend or do not cover every energy that occurs.
    """
    bounds = finite("edges", edges, (None,))
    values = energies(spins, instance)
    if len(bounds) < 2 or np.any(np.diff(bounds) <= 0):
        raise InputError(f"edges must ascend and be at least 2; got {bounds.tolist()[:5]}")
    if values.min() < bounds[0] or values.max() > bounds[-1]:
        raise InputError(
            f"edges must cover all energies, {values.min():g} to {values.max():g}; got {bounds[0]:g} to {bounds[-1]:g}"
        )
    return np.histogram(values, bounds)[0] / len(values)


def products(spins: NDArray[np.int8], sets: Sequence[Sequence[int]]) -> NDArray[np.int8]:
    """Return prod_(i in set) s_i in each shot, shape (n_shots, n_sets); their mean is a correlation of any order.

    Examples
    --------
    >>> products(np.array([[1, -1, -1], [1, 1, -1]], dtype=np.int8), [(0, 1), (0, 1, 2)]).tolist()
    [[-1, 1], [1, -1]]
    """
    n = spins.shape[1]
    places = [[integer("site", site, 0, n - 1) for site in one] for one in sets]
    return np.stack([np.prod(spins[:, one], axis=1, dtype=np.int8) for one in places], axis=1)


def magnet_moments(spins: NDArray[np.int8]) -> tuple[float, float]:
    """Return <m^2> and <m^4> of m = sum_i s_i / N."""
    m = spins.mean(axis=1)
    return float(np.mean(m**2)), float(np.mean(m**4))


def binder_magnet(spins: NDArray[np.int8]) -> float:
    """Return U = 1 - <m^4> / (3 <m^2>^2): 2/3 where m has one size throughout, 0 where it is Gaussian.

    Over a disorder ensemble average <m^2> and <m^4> (`magnet_moments`) before taking the ratio.

    References
    ----------
    K. Binder, Z. Phys. B 43, 119 (1981).
    """
    second, fourth = magnet_moments(spins)
    if second == 0:
        raise InputError("the Binder cumulant is a ratio of moments of the magnetisation; it is 0 in every shot")
    return 1.0 - fourth / (3.0 * second**2)


def overlap_moments(spins: NDArray[np.int8]) -> tuple[float, float]:
    """Return unbiased [<q^2>] and [<q^4>] of the overlap q_ab = sum_i s_i^a s_i^b / N of two independent shots.

    The mean over pairs of *different* shots is a U-statistic, without bias for every power; a shot paired with itself
    would add (1 - q^2)/n.

    Parameters
    ----------
    spins : ndarray of +1 and -1, shape (n_shots, n_sites)
        At least two shots.

    Returns
    -------
    q2, q4 : float
        `q2` contains i = j (it is `q2_full` without bias).

    Notes
    -----
    The sum over all n^2 pairs of q^4 is taken either over pairs of shots (n^2 N operations) or over pairs of
    bonds, || P^T P ||^2 with P the products of pairs of spins (n N^4 / 4 operations), whichever is less, in pieces that
    fit the cache.

    References
    ----------
    W. Hoeffding, Ann. Math. Stat. 19, 293 (1948).

    Examples
    --------
    >>> overlap_moments(np.array([[1, 1], [1, 1], [1, -1]], dtype=np.int8))     # q = 1, 0, 0
    (0.3333333333333333, 0.3333333333333333)
    """
    shots, n = spins.shape
    if shots < 2:
        raise InputError(f"overlaps are taken between at least 2 shots; got {shots}")
    pairs = n * (n - 1) // 2
    second, fourth = _by_shots(spins) if shots * n <= pairs**2 else _by_pairs(spins)
    count = shots * (shots - 1)
    return (second / n**2 - shots) / count, (fourth / n**4 - shots) / count


def glass_ratio(q2: float, q4: float) -> float:
    """Return U = (3 - q4/q2^2)/2: 1 where |q| has one value, 0 where q is Gaussian.

    Over a disorder ensemble put in the averages over instances of <q^2> and of <q^4>: the ratio of averages, not the
    average of ratios.

    References
    ----------
    R. N. Bhatt and A. P. Young, Phys. Rev. Lett. 54, 924 (1985).
    """
    if not q2 > 0:
        raise InputError(f"the Binder cumulant divides by <q^2>^2; <q^2> must be above 0, got {q2:g}: take more shots")
    return (3.0 - q4 / q2**2) / 2.0


def binder_glass(spins: NDArray[np.int8]) -> float:
    """Return the Binder cumulant of the overlap of one instance, a ratio of unbiased U-statistics."""
    return glass_ratio(*overlap_moments(spins))


def _by_shots(spins: NDArray[np.int8]) -> tuple[float, float]:
    """Return the sums over all ordered pairs of shots of (N q)^2 and (N q)^4, by the overlaps themselves."""
    shots = len(spins)
    floats = spins.astype(np.float32)
    second = fourth = 0.0
    step = max(1, _CHUNK_BYTES // (4 * shots))
    for start in range(0, shots, step):
        squares = np.square(floats[start : start + step] @ floats.T)
        second += float(squares.sum(dtype=np.float64))
        fourth += float(np.square(squares).sum(dtype=np.float64))
    return second, fourth


def _by_pairs(spins: NDArray[np.int8]) -> tuple[float, float]:
    """Return the same sums by the four-spin correlations: (N q)^2 = N + 2 sum_(i<j) p_ij^a p_ij^b, p_ij = s_i s_j."""
    shots, n = spins.shape
    i, j = np.triu_indices(n, 1)
    linear, gram = np.zeros(len(i)), np.zeros((len(i), len(i)))
    step = max(1, _CHUNK_BYTES // (4 * max(1, len(i))))
    for start in range(0, shots, step):
        part = spins[start : start + step]
        p = (part[:, i] * part[:, j]).astype(np.float32)
        linear += p.sum(axis=0, dtype=np.float64)
        gram += p.T @ p
    bonds = float(linear @ linear)
    return n * shots**2 + 2.0 * bonds, n**2 * shots**2 + 4.0 * n * bonds + 4.0 * float(np.sum(gram**2))


def _check(spins: NDArray[np.int8], n_sites: int) -> None:
    if spins.ndim != 2 or spins.shape[1] != n_sites:
        raise InputError(f"spins must have shape (n_shots, {n_sites}); got shape {spins.shape}")
