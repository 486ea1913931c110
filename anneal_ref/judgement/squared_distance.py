"""Squared distance of a measured mean vector from a known one: unbiased, with an interval that holds down to zero.

Everything that is scored here as a sum of squares (correlations, magnetisations, the order parameter) has one form.
Shots, or clusters of shots, give a mean vector; its noise covariance is V. The squared distance d.d from the truth
exceeds the true one, theta, by trace V on average. The unbiased value subtracts an estimate of that trace; it then
scatters like a weighted sum of non-central chi-squares with cumulants

    theta,    4 delta.V.delta + 2 tr V^2 (1 + 1/f),    24 delta.V^2.delta + 8 tr V^3 (1 - 1/f^2)

(delta the true difference, theta = delta.delta, f the degrees of freedom behind V). The first term of the variance is
what a jackknife over clusters finds; near theta = 0 a jackknife gives 4 tr V^2 where 2 tr V^2 is right, and the law is
skewed, far from gaussian. Bounds are therefore found by inverting a test: a value theta is excluded if the observed one
lies too far in the tail that a shifted gamma law with these three cumulants has under theta. The direction of delta is
unknown; under each theta it is taken as the most likely one, d tilted towards the noisy directions of V for theta
above the observed value and away from them below.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import optimize, special

from anneal_ref.base.checks import frozen
from anneal_ref.observe.clusters import Clusters

# Uniformly random shots added to the noise (not to the value), in the manner of Agresti and Coull, Am. Stat. 52, 119
# (1998): without them correlations that were measured as exactly +-1 would claim to have no error at all.
# Two of them, where `observe.resample` takes four for the error of a single correlation: there the four belong to a
# two-sided interval at 95 % (z^2 = 3.8), while bounds here are one-sided (z^2 = 2.7), on a sum of known skewness.
PSEUDO_SHOTS = 2.0
_CHUNK = 8192

_Floats = NDArray[np.floating[Any]]
Features = Callable[[_Floats], _Floats]
"""What is averaged: a function of spins, shape (shots, n_sites), with a row for each shot."""


@dataclass(frozen=True, slots=True, eq=False)
class SquaredDistance:
    """An unbiased squared distance with what fixes its distribution.

    Parameters
    ----------
    noise : float
        Estimate of trace V, the part of the plain squared distance that noise alone makes.
    spectrum : ndarray, shape (size,)
        Eigenvalues of V (with the pseudo-shots), all positive.
    squares : ndarray, shape (size,)
        Squared components of d, measured minus true, along the eigenvectors.
    traces : tuple of three floats
        Traces of V, V^2 and V^3, freed of the bias that powers of an estimated V have.
    freedom : float
        Degrees of freedom behind V: clusters minus one (the effective number where their sizes differ).
    least : tuple of three floats
        The same traces for independent shots of the truth, below which those behind a lower bound do not go: shots
        that by luck saw none of the rare events would otherwise take the first one for a departure. 0 if not known.
    """

    noise: float
    spectrum: NDArray[np.float64]
    squares: NDArray[np.float64]
    traces: tuple[float, float, float]
    freedom: float
    least: tuple[float, float, float] = (0.0, 0.0, 0.0)

    @property
    def raw(self) -> float:
        """The plain squared distance d.d."""
        return float(self.squares.sum())

    @property
    def value(self) -> float:
        """The unbiased squared distance; it may come out negative."""
        return self.raw - self.noise

    @classmethod
    def total(cls, distances: Sequence[SquaredDistance]) -> SquaredDistance:
        """Return the distance between the joined vectors of one or more independent sets of data."""
        traces = np.sum([one.traces for one in distances], axis=0)
        least = np.sum([one.least for one in distances], axis=0)
        # Welch (1947) and Satterthwaite (1946): each part counts by its share of the variance
        parts = sum(one.traces[1] ** 2 / one.freedom for one in distances)
        return cls(
            sum(one.noise for one in distances),
            frozen(np.concatenate([one.spectrum for one in distances])),
            frozen(np.concatenate([one.squares for one in distances])),
            (float(traces[0]), float(traces[1]), float(traces[2])),
            float(traces[1] ** 2 / parts),
            (float(least[0]), float(least[1]), float(least[2])),
        )

    def variance(self, theta: float, more: float = 1.0) -> float:
        """Return the variance of the value if the true one is theta, from `more` times as much such data."""
        _, along, _ = self._forms(self._tilt(theta))
        return 4 * along / more + 2 * self.traces[1] * (1 + 1 / (self.freedom * more)) / more**2

    def stat(self) -> float:
        """Return the standard error of the value."""
        return float(np.sqrt(self.variance(max(self.value, 0.0))))

    def below(self, theta: float) -> float:
        """Return the probability of a value at most as large as the observed one if the true one is theta."""
        return self._tail(self._tilt(theta), self.value, upper_tail=False)

    def above(self, theta: float) -> float:
        """Return the probability of a value at least as large as the observed one if the true one is theta."""
        return self._tail(self._tilt(theta), self.value, upper_tail=True)

    def upper(self, level: float) -> float:
        """Return a one-sided upper bound on the true squared distance.

        An observed value below 0 counts as 0, so that luck never proves more than perfection would on average
        (G. Cowan, K. Cranmer, E. Gross and O. Vitells, arXiv:1105.3166, power-constrained limits).
        """
        value = max(self.value, 0.0)
        return self._crossing(lambda tilt: (1 - level) - self._tail(tilt, value, upper_tail=False))

    def lower(self, level: float) -> float:
        """Return a one-sided lower bound on the true squared distance; 0 if 0 is not excluded."""
        plain = self._crossing(lambda tilt: self._tail(tilt, self.value, upper_tail=True) - (1 - level))
        if plain == 0 or all(own >= least for own, least in zip(self.traces, self.least, strict=True)):
            return plain
        one, two, three = (max(pair) for pair in zip(self.traces, self.least, strict=True))
        # more noise also leaves less of d for the signal; where that narrows the law, the bound stays where it was
        return min(plain, replace(self, traces=(one, two, three), least=(0.0, 0.0, 0.0)).lower(level))

    def _forms(self, tilt: float) -> tuple[float, float, float]:
        """Theta, delta.V.delta and delta.V^2.delta for the squared components of d times exp(2 tilt) at the noisiest.

        The maximum of a gaussian likelihood at a given length is (1 - mu V)^-1 d; here 1 - mu V = 1 - l + l exp(-tilt)
        with l the spectrum over its largest value.
        """
        noise, noise2, noise3 = self.traces
        share = self.spectrum / self.spectrum.max()
        squares = np.maximum(self.squares, 1e-12 * self.spectrum) / (1 - share + share * np.exp(-tilt)) ** 2
        length, along = float(squares.sum()), float(self.spectrum @ squares)
        along2 = float(self.spectrum**2 @ squares)
        theta = max(length - noise, 0.0)
        # the noise in d inflates the forms by tr V^2 and tr V^3, unless the signal is too weak to tell
        part = theta / length
        return theta, max(along - noise2, part * along), max(along2 - noise3, part * along2)

    def _tail(self, tilt: float, value: float, upper_tail: bool) -> float:
        theta, along, along2 = self._forms(tilt)
        f = self.freedom
        variance = 4 * along + 2 * self.traces[1] * (1 + 1 / f)
        third = 24 * along2 + 8 * self.traces[2] * (1 - 1 / f**2)
        shape = 4 * variance**3 / third**2 if third > 0 else np.inf
        shape = float(min(shape, 1e8))
        place = float(max(shape + (value - theta) * math.sqrt(shape / variance), 0.0))
        p = float(special.gammaincc(shape, place) if upper_tail else special.gammainc(shape, place))
        # the variance itself is estimated: Student's tail in place of the normal one, with half the freedom, because
        # the direction of delta is found by the same few clusters
        return float(special.stdtr(f / 2, float(special.ndtri(p)))) if 0 < p < 1 else p

    def _tilt(self, theta: float) -> float:
        """Tilt that belongs to theta."""
        share = self.spectrum / self.spectrum.max()
        squares = np.maximum(self.squares, 1e-12 * self.spectrum)
        target = np.log(theta + self.traces[0])

        def excess(tilt: float) -> float:
            return float(np.log(np.sum(squares / (1 - share + share * np.exp(-tilt)) ** 2)) - target)

        low, high = -1.0, 1.0
        while excess(low) > 0:
            low *= 2
        while excess(high) < 0:
            high *= 2
        return float(optimize.brentq(excess, low, high, xtol=1e-12))

    def _crossing(self, rising: Callable[[float], float]) -> float:
        """Theta at which a function of the tilt rises through zero; 0 if it starts above."""
        low = self._tilt(0.0)
        if rising(low) >= 0:
            return 0.0
        step = 0.5
        while rising(low + step) < 0:
            step *= 2
        return self._forms(float(optimize.brentq(rising, low, low + step, xtol=1e-9)))[0]


def pair_distance(
    spins: NDArray[np.int8], truth: NDArray[np.float64], clusters: Clusters, scatter: NDArray[np.float64] | None = None
) -> SquaredDistance:
    """Squared distance of measured <Z_i Z_j>, i < j, from their true values.

    Parameters
    ----------
    spins : (shots, n_sites) array of +1 and -1
    truth : (n_sites, n_sites) array
    clusters : Clusters
        Which shots belong together.
    scatter : (n_pairs, n_pairs) array, optional
        Covariance of the Z_i Z_j for one shot of the truth; see `least` of `SquaredDistance`.
    """
    first, second = np.triu_indices(spins.shape[1], 1)
    return _distance(spins, truth[first, second], clusters, lambda s: s[:, first] * s[:, second], _Random(0.0), scatter)


def connected_distance(
    spins: NDArray[np.int8], truth: NDArray[np.float64], clusters: Clusters, scatter: NDArray[np.float64] | None = None
) -> SquaredDistance:
    """Squared distance of measured <Z_i Z_j> - <Z_i><Z_j>, i < j, from their true values; parameters as above.

    `scatter` is the covariance of (Z_i - <Z_i>)(Z_j - <Z_j>) for one shot of the truth, if known.
    """
    first, second = np.triu_indices(spins.shape[1], 1)
    mean = spins.mean(axis=0)
    # the product of two measured means is too large by their covariance on average
    pieces = (sums for sums, _ in cluster_sums(spins, clusters, lambda s: s - mean))
    product = sum((sums.T @ sums for sums in pieces), np.zeros((len(mean), len(mean))))
    excess = product[first, second] / (clusters.shots**2 * clusters.spread)

    def features(s: _Floats) -> _Floats:
        centred = s - mean
        return np.asarray(centred[:, first] * centred[:, second] + excess)

    lean = np.zeros((len(first), len(mean)))
    rows = np.arange(len(first))
    lean[rows, first], lean[rows, second] = mean[second], mean[first]
    random = _Random(mean[first] * mean[second] + excess, lean)
    return _distance(spins, truth[first, second], clusters, features, random, scatter)


def site_distance(
    spins: NDArray[np.int8], truth: NDArray[np.float64], clusters: Clusters, scatter: NDArray[np.float64] | None = None
) -> SquaredDistance:
    """Squared distance of measured <Z_i> from their true values, by site; `scatter` is the true one-shot covariance."""
    return _distance(spins, truth, clusters, lambda s: s, _Random(0.0), scatter)


@dataclass(frozen=True, slots=True)
class _Random:
    """Features of a uniformly random shot: their mean, and their covariance 1 + lean lean^T (1 without a lean)."""

    mean: NDArray[np.float64] | float
    lean: NDArray[np.float64] | None = None

    def about(self, mean: NDArray[np.float64]) -> NDArray[np.float64]:
        """Return the second moments of the features about a mean."""
        away = self.mean - mean
        spread = np.eye(len(mean)) + np.outer(away, away)
        return np.asarray(spread if self.lean is None else spread + self.lean @ self.lean.T)


def _distance(
    spins: NDArray[np.int8],
    truth: NDArray[np.float64],
    clusters: Clusters,
    features: Features,
    random: _Random,
    scatter: NDArray[np.float64] | None = None,
) -> SquaredDistance:
    size = truth.size
    total, square, weighted = np.zeros(size), np.zeros((size, size)), np.zeros(size)
    for sums, sizes in cluster_sums(spins, clusters, features):
        total += sums.sum(axis=0, dtype=np.float64)
        weighted += sizes @ sums
        square += sums.T @ sums
    shots, spread = clusters.shots, clusters.spread
    mean = total / shots
    cross, sizes2 = np.outer(weighted, mean), float(np.sum(clusters.sizes.astype(float) ** 2))
    covariance = (square - cross - cross.T + sizes2 * np.outer(mean, mean)) / (shots**2 * spread)
    d, f = mean - truth, clusters.freedom
    # mean of y_a . y_b over pairs of shots of different clusters, y being a shot's features minus the truth
    within = float(np.trace(square) - 2 * weighted @ truth + sizes2 * truth @ truth)
    unbiased = (shots**2 * float(d @ d) - within) / (shots**2 * spread)
    padded = covariance + PSEUDO_SHOTS / shots**2 * random.about(mean)
    spectrum, vectors = np.linalg.eigh(padded)
    return SquaredDistance(
        float(d @ d) - unbiased,
        frozen(np.maximum(spectrum, 1e-12 * spectrum[-1])),
        frozen((vectors.T @ d) ** 2),
        _traces(padded, f),
        f,
        (0.0, 0.0, 0.0) if scatter is None else _plain_traces(scatter / shots),
    )


def _plain_traces(covariance: NDArray[np.float64]) -> tuple[float, float, float]:
    square = covariance @ covariance
    return float(np.trace(covariance)), float(np.trace(square)), float(np.sum(square * covariance))


def _traces(covariance: NDArray[np.float64], freedom: float) -> tuple[float, float, float]:
    """Traces of V, V^2, V^3, with the bias removed that the powers of an estimated V have.

    Exact for a Wishart matrix (for the square: Bai and Saranadasa, Stat. Sinica 6, 311 (1996)); tails heavier than
    gaussian leave the traces too large, which widens the interval. The result obeys the inequalities that hold
    for the traces of a positive matrix of this size.
    """
    f, size = freedom, len(covariance)
    square = covariance @ covariance
    first = float(np.trace(covariance))
    plain2, plain3 = float(np.trace(square)), float(np.sum(square * covariance))
    second = (plain2 - first**2 / f) / ((1 + 2 / f) * (1 - 1 / f)) if f > 1 else plain2
    second = min(max(second, first**2 / size), first**2)
    third = (plain3 - 3 * (1 + 1 / f) * first * second / f - first**3 / f**2) / (1 + 3 / f + 4 / f**2)
    third = min(max(third, second**2 / first), second**1.5) if first > 0 else 0.0
    return first, second, third


def cluster_sums(spins: NDArray[np.int8], clusters: Clusters, features: Features) -> Iterator[tuple[_Floats, _Floats]]:
    """Give sums of the features over clusters, with the sizes of these clusters, in bounded pieces.

    Products of spins are +1 and -1, which single precision adds up exactly in pieces of this length.
    """
    if clusters.independent:
        for start in range(0, len(spins), _CHUNK):
            part = features(spins[start : start + _CHUNK].astype(np.float32))
            yield part, np.ones(len(part))
        return
    for shots in clusters:
        pieces = (shots[k : k + _CHUNK] for k in range(0, len(shots), _CHUNK))
        total = sum(features(spins[piece].astype(np.float32)).sum(axis=0, dtype=np.float64) for piece in pieces)
        yield np.asarray(total)[None, :], np.array([float(len(shots))])
