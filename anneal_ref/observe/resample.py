"""Errors of anything computed from samples: jackknife and bootstrap over shots or over whole groups of shots.

A square of a noisy number is too large on average: for shots, E[c^2] = <c>^2 + (1 - <c>^2)/n. Both methods measure
such a bias of order 1/n and take it away; for a function that is quadratic in the moments the jackknife does so
exactly, so that c^2 becomes (n c^2 - 1)/(n - 1).

References
----------
B. Efron, Ann. Stat. 7, 1 (1979); B. Efron and R. J. Tibshirani, An Introduction to the Bootstrap (1993): jackknife,
bootstrap. F. M. T. A. Busing, E. Meijer and R. van der Leeden, Stat. Comput. 9, 3 (1999): jackknife over groups of
unequal size.
"""

from __future__ import annotations

import warnings
from collections.abc import Callable
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from anneal_ref.base.errors import AnnealRefWarning, InputError
from anneal_ref.base.estimate import Estimate
from anneal_ref.observe.clusters import FEW, Clusters
from anneal_ref.observe.evaluating import evaluate
from anneal_ref.observe.moments import Moments

PSEUDO_SHOTS = 4
"""Uniformly random shots imagined beside the measured ones where these show no scatter (Agresti and Coull 1998)."""

_CHUNK = 1 << 16


def blocks(n_shots: int, groups: NDArray[Any] | None = None, most: int = 1000) -> Clusters:
    """Return the blocks of shots that resampling treats as one.

    With groups (gauges, batches, runs) each group is a block, however many there are, because shots of one group share
    its imperfections. Without them, or where there is but one, each shot is a block, or, when there are more than
    `most` of them, each of `most` stretches of consecutive shots.

    Raises
    ------
    InputError
        Fewer than two shots.
    """
    if n_shots < 2:
        raise InputError(f"an error from resampling takes at least 2 shots; got {n_shots}")
    if groups is not None:
        _, inverse, sizes = np.unique(groups, return_inverse=True, return_counts=True)
        if len(sizes) > 1:
            return Clusters(np.argsort(inverse, kind="stable"), sizes.astype(np.intp))
    count = min(n_shots, most)
    return Clusters(np.arange(n_shots), np.diff(np.arange(count + 1) * n_shots // count))


def warn_if_few(groups: NDArray[Any] | None) -> None:
    """Warn when the spread between groups cannot be known well, or not at all."""
    if groups is None:
        return
    count = len(np.unique(groups))
    if count == 1:
        message = (
            "all shots belong to one group; errors are those of independent shots and hold nothing of the spread "
            "between gauges or batches"
        )
    elif count < FEW:
        message = (
            f"only {count} groups (gauges or batches) of shots; errors taken from their spread are themselves "
            f"uncertain by about {100 / np.sqrt(2 * (count - 1)):.0f} %"
        )
    else:
        return
    warnings.warn(message, AnnealRefWarning, stacklevel=3)


def jackknife(
    full: NDArray[np.float64], left_out: NDArray[np.float64], sizes: NDArray[np.intp]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return bias-corrected value and standard error by leaving out one block at a time.

    Parameters
    ----------
    full : ndarray, any shape
        The statistic of all shots.
    left_out : ndarray, shape (n_blocks, *full.shape)
        The statistic without block j.
    sizes : ndarray of int, shape (n_blocks,)
        Number of shots in each block; equal sizes give the ordinary jackknife.

    References
    ----------
    Busing, Meijer and van der Leeden, Stat. Comput. 9, 3 (1999): the delete-m_j jackknife.

    Examples
    --------
    >>> shots = np.array([1.0, 1.0, 1.0, -1.0])
    >>> mean, left_out = shots.mean(), (shots.sum() - shots) / 3
    >>> value, error = jackknife(mean**2, left_out**2, np.ones(4, dtype=np.intp))
    >>> round(float(value), 12)                     # (4 * 0.5**2 - 1) / 3, where 0.5**2 alone would be biased
    0.0
    """
    count = len(sizes)
    total = sizes.sum()
    tail = (1,) * (left_out.ndim - 1)
    share = (sizes / total).reshape(-1, *tail)
    # centred on the full value, so that equal replicas give an exact zero
    shift = left_out - full
    value = full - np.sum((1.0 - share) * shift, axis=0)
    pseudo = full - (1.0 / share - 1.0) * shift
    variance = np.sum((pseudo - value) ** 2 * share / (1.0 - share), axis=0) / count
    return np.asarray(value), np.sqrt(variance)


def bootstrap(
    full: NDArray[np.float64], drawn: NDArray[np.float64], n_blocks: int
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return bias-corrected value and standard error from replicas of `n_blocks` blocks drawn with replacement.

    Bias and variance are scaled by n_blocks/(n_blocks - 1): drawing from the sample sees its variance, which is that
    much too small.

    Parameters
    ----------
    full : ndarray, any shape
        The statistic of all shots.
    drawn : ndarray, shape (replicas, *full.shape)
        The statistic of each replica.
    n_blocks : int
    """
    scale = n_blocks / (n_blocks - 1)
    return np.asarray(full - scale * (drawn.mean(axis=0) - full)), np.sqrt(scale) * drawn.std(axis=0, ddof=1)


def multiplicities(n_blocks: int, replicas: int, seed: int) -> NDArray[np.int64]:
    """Return how often each block occurs in each bootstrap replica, shape (replicas, n_blocks)."""
    return np.random.default_rng(seed).multinomial(n_blocks, np.full(n_blocks, 1.0 / n_blocks), size=replicas)


def sums(spins: NDArray[np.int8]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return the sums over shots of s_i and of s_i s_j, exact, as float64.

    Chunks stay below 2^24 shots, up to which single precision adds +1 and -1 without rounding.
    """
    n = spins.shape[1]
    z, zz = np.zeros(n), np.zeros((n, n))
    for start in range(0, len(spins), _CHUNK):
        part = spins[start : start + _CHUNK].astype(np.float32)
        z += part.sum(axis=0, dtype=np.float64)
        zz += part.T @ part
    return z, zz


def block_sums(spins: NDArray[np.int8], parts: Clusters) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return the sums over each block: of s_i, (n_blocks, n_sites), of s_i s_j, (n_blocks, n_sites, n_sites)."""
    n = spins.shape[1]
    z, zz = np.empty((len(parts), n)), np.empty((len(parts), n, n))
    for k, shots in enumerate(parts):
        z[k], zz[k] = sums(spins[shots])
    return z, zz


def estimate_of_moments(
    f: Callable[[Moments], ArrayLike], spins: NDArray[np.int8], parts: Clusters, draws: NDArray[np.int64] | None
) -> Estimate:
    """Return f of the moments of the spins, by jackknife, or by bootstrap where `draws` are given."""
    n = len(spins)
    z_all, zz_all = sums(spins)

    def value(z_sum: NDArray[np.float64], zz_sum: NDArray[np.float64], shots: float) -> NDArray[np.float64]:
        mean = zz_sum / shots
        np.fill_diagonal(mean, 1.0)
        return evaluate(f, Moments.of(z_sum / shots, mean, how="samples"))

    def without(shots: NDArray[np.intp]) -> NDArray[np.float64]:
        z, zz = sums(spins[shots])
        return value(z_all - z, zz_all - zz, n - len(shots))

    if draws is None:
        replicas = [without(shots) for shots in parts]
    else:
        z, zz = block_sums(spins, parts)
        rows = draws.astype(np.float64)
        replicas = [value(row @ z, np.tensordot(row, zz, axes=1), float(row @ parts.sizes)) for row in rows]
    return _estimate(
        value(z_all, zz_all, n), replicas, value(z_all, zz_all, n + PSEUDO_SHOTS), parts, draws is not None
    )


def estimate_of_spins(
    f: Callable[[NDArray[np.int8]], ArrayLike],
    spins: NDArray[np.int8],
    parts: Clusters,
    draws: NDArray[np.int64] | None,
) -> Estimate:
    """Return f of the spins, by jackknife, or by bootstrap where `draws` are given."""

    def value(chosen: NDArray[np.int8]) -> NDArray[np.float64]:
        return evaluate(f, chosen)

    if draws is None:
        replicas = (value(spins[shots]) for shots in parts.left_out())
    else:
        stretches = list(parts)
        replicas = (
            value(spins[np.concatenate([stretches[k] for k in np.repeat(np.arange(len(parts)), row)])]) for row in draws
        )
    random = 1 - 2 * np.random.default_rng(0).integers(0, 2, (PSEUDO_SHOTS, spins.shape[1]), dtype=np.int8)
    return _estimate(value(spins), list(replicas), value(np.concatenate((spins, random))), parts, draws is not None)


def _estimate(
    full: NDArray[np.float64],
    replicas: list[NDArray[np.float64]],
    with_pseudo: NDArray[np.float64],
    parts: Clusters,
    drawn: bool,
) -> Estimate:
    for k, replica in enumerate([full, *replicas]):
        if replica.shape != full.shape:
            raise InputError(
                f"f must give one shape for all shots and for each part of them; got {full.shape} and {replica.shape}"
            )
        if not np.isfinite(replica).all():
            part = "all shots" if k == 0 else "a resampled part of the shots"
            raise InputError(f"f must give finite values; got {replica[~np.isfinite(replica)].flat[0]} from {part}")
    stack = np.array(replicas)
    value, stat = bootstrap(full, stack, len(parts)) if drawn else jackknife(full, stack, parts.sizes)
    # replicas that all agree have not seen the scatter there is; four random shots beside the measured show its scale
    blind = np.abs(stack - full).max(axis=0) <= 1e-12 * np.maximum(1.0, np.abs(full))
    return Estimate(value, np.where(blind, np.abs(with_pseudo - full) / np.sqrt(2.0), stat), 0.0, "samples")
