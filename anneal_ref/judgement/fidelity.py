"""Classical fidelity of measured and true distributions, only where the number of shots supports it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import special

from anneal_ref.base.errors import NotSupported
from anneal_ref.base.estimate import Estimate, Score
from anneal_ref.observe.clusters import Clusters
from anneal_ref.observe.resample import jackknife

SUPPORT_SHARE = 0.99
SHOTS_PER_STATE = 10
UNREMOVED = 0.2
"""Share of the bias that a jackknife may leave where the shots are as few as is allowed; found by simulation."""


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


@dataclass(frozen=True, slots=True, eq=False)
class Fidelity:
    """A fidelity freed of the bias of shots, beside the plain one.

    Parameters
    ----------
    score : Score
        The fidelity of the processor's distribution, with its interval; `num` bounds what is left of the bias. The
        floor is what a perfect sampler comes out at in the same way.
    plain : float
        The fidelity of the measured frequencies, which fall short of 1 even for a perfect sampler.
    plain_floor : Estimate
        The plain fidelity of a perfect sampler with the same shots.
    """

    score: Score
    plain: float
    plain_floor: Estimate


@dataclass(frozen=True, slots=True)
class Refusal:
    """Why there is no fidelity: in two or three words for a table, and in a sentence."""

    short: str
    reason: str


def fidelity(
    spins: NDArray[np.int8],
    probabilities: NDArray[np.float64],
    folded: bool,
    clusters: Clusters,
    level: float = 0.95,
    seed: int = 0,
    replicas: int = 400,
) -> Fidelity:
    """Return the fidelity (sum sqrt(p q))^2 of the processor's distribution q and true probabilities p.

    Frequencies from n shots fall short of 1 even for a perfect sampler, by about (K - 1)/(4 n) for K states. A
    jackknife takes this bias away, all but a part of order 1/n^2, for which the interval leaves room. A value beyond 1
    is given as 1. The interval is never narrower than the scatter of a perfect sampler.

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
    plain, corrected, stat = _jackknife(index, p, clusters)
    rng = np.random.default_rng(seed)
    perfect = np.array([_by_counts(rng.multinomial(shots, p), p)[:2] for _ in range(replicas)])
    plain_floor, floor = perfect[:, 0], np.minimum(perfect[:, 1], 1.0)
    rest = UNREMOVED * float(1 - plain_floor.mean())
    spread = max(stat, float(perfect[:, 1].std(ddof=1)))
    half = float(special.stdtrit(clusters.freedom, 0.5 + level / 2)) * spread + rest
    value = min(corrected, 1.0)
    score = Score(
        "fidelity",
        Estimate(value, stat, rest, "samples"),
        float(np.clip(corrected - half, 0.0, value)),
        min(corrected + half, 1.0),
        level,
        Estimate(float(floor.mean()), float(floor.std(ddof=1)), rest, "perfect processor"),
    )
    plain_scatter = Estimate(float(plain_floor.mean()), float(plain_floor.std(ddof=1)), 0.0, "perfect processor")
    return Fidelity(score, plain, plain_scatter)


def state_index(spins: NDArray[np.int8]) -> NDArray[np.int64]:
    """Return the basis-state index of each shot: site 0 is the least significant bit, bit 0 means +1."""
    return np.asarray((spins < 0).astype(np.int64) @ (1 << np.arange(spins.shape[1], dtype=np.int64)))


def _by_counts(counts: NDArray[np.int64], p: NDArray[np.float64]) -> tuple[float, float, float]:
    """Value, value without its bias, and standard error, from how often each state was seen in independent shots."""
    shots = int(counts.sum())
    counts, root = counts[counts > 0], np.sqrt(p[counts > 0])
    full = float((root @ np.sqrt(counts)) ** 2 / shots)
    # leaving out any shot of a state does the same
    without = (root @ np.sqrt(counts) - root * (np.sqrt(counts) - np.sqrt(counts - 1))) ** 2 / (shots - 1)
    pseudo = shots * full - (shots - 1) * without
    corrected = float(counts @ pseudo) / shots
    return full, corrected, float(np.sqrt(counts @ (pseudo - corrected) ** 2 / (shots - 1) / shots))


def _jackknife(index: NDArray[np.int64], p: NDArray[np.float64], clusters: Clusters) -> tuple[float, float, float]:
    """Value, value without its bias, and standard error, leaving out one cluster at a time."""
    seen, code, counts = np.unique(index, return_inverse=True, return_counts=True)
    root, shots = np.sqrt(p[seen]), len(index)
    if clusters.independent:
        return _by_counts(counts, p[seen])
    full = float((root @ np.sqrt(counts)) ** 2 / shots)
    rows = (counts - np.bincount(code[group], minlength=len(seen)) for group in clusters)
    left_out = np.array([(root @ np.sqrt(row)) ** 2 / row.sum() for row in rows])
    corrected, error = jackknife(np.array(full), left_out, clusters.sizes)
    return full, float(corrected), float(error)
