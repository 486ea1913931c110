"""Classical fidelity of measured and true distributions, only where the number of shots supports it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import special

from anneal_ref.base.errors import NotSupported
from anneal_ref.base.estimate import Estimate, Score
from anneal_ref.judgement.clusters import Clusters

SUPPORT_SHARE = 0.99
SHOTS_PER_STATE = 10


@dataclass(frozen=True, slots=True)
class Support:
    """How many states matter, and the shots that it takes to see them.

    Parameters
    ----------
    states : int
        The fewest states that hold 99 % of the true probability, a state and its flip counted once where it is folded.
    shots_needed : int
        Ten for each of them.
    """

    states: int
    shots_needed: int


def fold(probabilities: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the probabilities of a configuration or its global flip, indexed by the one with the last spin up."""
    half = len(probabilities) // 2
    return np.asarray(probabilities[:half] + probabilities[::-1][:half])


def support(probabilities: NDArray[np.float64]) -> Support:
    """Return the states that matter in a (folded) distribution.

    Examples
    --------
    >>> support(np.full(64, 1 / 64))
    Support(states=64, shots_needed=640)
    """
    held = np.cumsum(np.sort(probabilities)[::-1])
    states = int(np.searchsorted(held, SUPPORT_SHARE * held[-1])) + 1
    return Support(states, SHOTS_PER_STATE * states)


def fidelity(
    spins: NDArray[np.int8],
    probabilities: NDArray[np.float64],
    folded: bool,
    clusters: Clusters,
    level: float = 0.95,
    seed: int = 0,
    replicas: int = 400,
) -> Score:
    """Return the fidelity (sum sqrt(p q))^2 of measured frequencies q and true probabilities p.

    Frequencies from n shots fall short of 1 even for a perfect sampler, by about (K - 1)/(4 n) for K states. The value
    is the plain one, to be read beside the floor, a perfect sampler with the same shots. The interval is that of the
    fidelity of the processor's true distribution: centred on the value with this bias removed by a jackknife, and never
    narrower than the scatter of the perfect sampler allows.

    Parameters
    ----------
    spins : ndarray of +1 and -1, shape (shots, n_sites)
    probabilities : ndarray, shape (2^n_sites,)
    folded : bool
        Count a configuration and its global flip as one; for instances without fields.
    clusters : Clusters
    level, seed, replicas
        Of the interval and of the simulated perfect sampler.

    Raises
    ------
    NotSupported
        Fewer than ten shots for each state that matters; the message says how many it takes.
    """
    p = fold(probabilities) if folded else probabilities
    p = p / p.sum()
    need, shots = support(p), len(spins)
    if shots < need.shots_needed:
        raise NotSupported(
            f"the shots do not support a fidelity: it takes about {SHOTS_PER_STATE} for each of the {need.states} "
            f"states that hold {SUPPORT_SHARE:.0%} of the probability, {need.shots_needed} in all; there are {shots}",
            alternatives=("log_likelihood",),
        )
    index = state_index(spins)
    if folded:
        index = np.minimum(index, len(probabilities) - 1 - index)
    value, corrected, stat = _jackknife(index, p, clusters)
    perfect = np.random.default_rng(seed).multinomial(shots, p, size=replicas)
    floor = (np.sqrt(perfect / shots) @ np.sqrt(p)) ** 2
    spread = float(floor.std(ddof=1))
    half = float(special.stdtrit(clusters.freedom, 0.5 + level / 2)) * max(stat, spread)
    low, high = np.clip((corrected - half, corrected + half), 0.0, 1.0)
    return Score(
        "fidelity",
        Estimate(value, stat, 0.0, "samples"),
        float(low),
        float(high),
        level,
        Estimate(float(floor.mean()), spread, 0.0, "perfect processor"),
    )


def state_index(spins: NDArray[np.int8]) -> NDArray[np.int64]:
    """Return the basis-state index of each shot: site 0 is the least significant bit, bit 0 means +1."""
    return np.asarray((spins < 0).astype(np.int64) @ (1 << np.arange(spins.shape[1], dtype=np.int64)))


def _jackknife(index: NDArray[np.int64], p: NDArray[np.float64], clusters: Clusters) -> tuple[float, float, float]:
    """Value, value without its bias, and standard error, leaving out one cluster at a time."""
    shots = len(index)
    seen, code, counts = np.unique(index, return_inverse=True, return_counts=True)
    root = np.sqrt(p[seen])
    full = float((root @ np.sqrt(counts)) ** 2 / shots)
    if clusters.independent:
        # leaving out any shot of a state does the same
        amplitude = root @ np.sqrt(counts) - root * (np.sqrt(counts) - np.sqrt(counts - 1))
        without, times, kept = amplitude**2 / (shots - 1), counts.astype(float), np.full(len(seen), shots - 1.0)
    else:
        rows = [counts - np.bincount(code[group], minlength=len(seen)) for group in clusters]
        kept = shots - clusters.sizes.astype(float)
        without, times = np.array([(root @ np.sqrt(row)) ** 2 for row in rows]) / kept, np.ones(len(rows))
    # delete-m_j jackknife: F. M. T. A. Busing, E. Meijer and R. van der Leeden, Stat. Comput. 9, 3 (1999)
    units = times.sum()
    ratio = shots / (shots - kept)
    corrected = units * full - float(times @ (without * kept)) / shots
    pseudo = ratio * full - (ratio - 1) * without
    variance = float(times @ ((pseudo - corrected) ** 2 / (ratio - 1))) / units
    return full, corrected, float(np.sqrt(variance))
