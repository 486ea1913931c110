"""Which pairs of spins depart from the truth, with the multiplicity of the question under control."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import special, stats

from anneal_ref.base.checks import finite, frozen
from anneal_ref.base.errors import InputError
from anneal_ref.base.estimate import Estimate
from anneal_ref.judgement.squared_distance import PSEUDO_SHOTS, cluster_sums
from anneal_ref.observe.clusters import Clusters


def holm(p: ArrayLike) -> NDArray[np.float64]:
    """Return p-values adjusted by the step-down rule, which bounds the chance of any false alarm without assumptions.

    References
    ----------
    S. Holm, Scand. J. Stat. 6, 65 (1979).

    Examples
    --------
    >>> holm([0.001, 0.041, 0.012, 0.008])
    array([0.004, 0.041, 0.024, 0.024])
    """
    values = finite("p", p, (None,))
    if np.any((values < 0) | (values > 1)):
        raise InputError(f"p must lie between 0 and 1; got {values[(values < 0) | (values > 1)][0]}")
    order = np.argsort(values, kind="stable")
    steps = np.maximum.accumulate(values[order] * np.arange(len(values), 0, -1))
    adjusted = np.empty(len(values))
    adjusted[order] = np.minimum(steps, 1.0)
    return adjusted


@dataclass(frozen=True, slots=True, eq=False)
class PairTable:
    """Measured and true <Z_i Z_j> of all pairs, the most striking first.

    Parameters
    ----------
    first, second : ndarray of int, shape (n_pairs,)
        The pair i < j.
    truth, num : ndarray, shape (n_pairs,)
        True correlation and its numerical error.
    measured, stat : ndarray, shape (n_pairs,)
        Measured correlation and its standard error.
    sigma : ndarray, shape (n_pairs,)
        Difference beyond the numerical error, with its sign, in standard errors: measured ones, or those of shots of
        the truth where these are larger.
    p : ndarray, shape (n_pairs,)
        Probability of a difference at least as large if the pair is right, for one pair looked at alone.
    adjusted : ndarray, shape (n_pairs,)
        The same for all pairs looked at together (Holm).
    """

    first: NDArray[np.intp]
    second: NDArray[np.intp]
    truth: NDArray[np.float64]
    num: NDArray[np.float64]
    measured: NDArray[np.float64]
    stat: NDArray[np.float64]
    sigma: NDArray[np.float64]
    p: NDArray[np.float64]
    adjusted: NDArray[np.float64]

    def __len__(self) -> int:
        """Return the number of pairs."""
        return len(self.p)

    def significant(self, level: float = 0.95) -> int:
        """Count the pairs that differ, with a chance of at most 1 - level of any false alarm among all."""
        return int(np.sum(self.adjusted <= 1 - level))

    @property
    def n_sites(self) -> int:
        """Number of spins."""
        return int(self.second.max()) + 1

    def site_sigma(self) -> NDArray[np.float64]:
        """Root mean square of sigma over the pairs of each site, shape (n_sites,): near 1 where all is right.

        A readout or field fault of one spin shows in all of its pairs, and it stands out; a wrong coupler raises
        its two ends.
        """
        total = np.zeros(self.n_sites)
        np.add.at(total, self.first, self.sigma**2)
        np.add.at(total, self.second, self.sigma**2)
        return np.asarray(np.sqrt(total / (self.n_sites - 1)))

    def site_gain(self) -> NDArray[np.float64]:
        """Least-squares factor between measured and true correlations of each site, shape (n_sites,).

        1 where all is right, near 1 - 2 e for a spin whose readout flips with probability e, -1 for a spin with
        the wrong sign; `nan` for a spin that the truth leaves uncorrelated.
        """
        above, below = np.zeros(self.n_sites), np.zeros(self.n_sites)
        for site in (self.first, self.second):
            np.add.at(above, site, self.measured * self.truth)
            np.add.at(below, site, self.truth**2)
        return np.asarray(np.divide(above, below, out=np.full(self.n_sites, np.nan), where=below > 0))

    def shares(self, level: float = 0.95) -> NDArray[np.intp]:
        """Count the significant pairs that each site belongs to, shape (n_sites,)."""
        # the table is sorted, so that the significant pairs come first
        found = self.significant(level)
        return np.bincount(np.concatenate((self.first[:found], self.second[:found])), minlength=self.n_sites)

    def text(self, rows: int = 5, labels: ArrayLike | None = None) -> str:
        """Return the first rows as a table, sites named by `labels`, shape (n_sites,), if given."""
        names = np.arange(self.n_sites) if labels is None else np.asarray(labels)
        lines = ["  pair        truth   measured   std. err.    sigma   adjusted p"]
        for k in range(min(rows, len(self))):
            pair = f"{names[self.first[k]]}-{names[self.second[k]]}"
            lines.append(
                f"  {pair:<8} {self.truth[k]:>8.4f}   {self.measured[k]:>8.4f}   {self.stat[k]:>9.4f} "
                f"{self.sigma[k]:>8.1f}   {p_text(self.adjusted[k]):>10}"
            )
        return "\n".join(lines)


def p_text(p: float) -> str:
    """Return a probability in two digits; one too small for a double is said to be below 1e-300.

    Examples
    --------
    >>> p_text(0.0314), p_text(0.0)
    ('0.031', '< 1e-300')
    """
    return f"{p:.2g}" if p >= 1e-300 else "< 1e-300"


def pair_deviations(spins: NDArray[np.int8], truth: Estimate, clusters: Clusters) -> PairTable:
    """Return the table of all pairs.

    Independent shots get exact binomial p-values (twice the smaller tail, C. J. Clopper and E. S. Pearson,
    Biometrika 26, 404 (1934)). Clusters of shots get Student's t from the scatter between clusters, or the binomial
    value where that is larger: clusters can only add to the noise of shots, and a correlation near +1 or -1 may by luck
    show no scatter at all. For the same reason sigma never counts in less than the standard error that shots of the
    truth would have. The truth may lie anywhere within its numerical error; the most favourable place counts.

    Parameters
    ----------
    spins : ndarray of +1 and -1, shape (shots, n_sites)
    truth : Estimate, shape (n_sites, n_sites)
        With its numerical error measured.
    clusters : Clusters
    """
    shots, n_sites = spins.shape
    first, second = np.triu_indices(n_sites, 1)
    target, num = truth.value[first, second], truth.num[first, second]
    sums = list(cluster_sums(spins, clusters, lambda s: s[:, first] * s[:, second]))
    measured = np.sum([part.sum(axis=0) for part, _ in sums], axis=0) / shots
    if clusters.independent:
        variance = (1 - measured**2) / (shots - 1)
    else:
        centred = np.concatenate([part - sizes[:, None] * measured for part, sizes in sums])
        variance = np.sum(centred**2, axis=0) / (shots**2 * clusters.spread)
    stat = np.sqrt(variance + PSEUDO_SHOTS * (1 + measured**2) / shots**2)
    nearest = np.clip(measured, target - num, target + num)
    expected = np.clip(nearest, -1.0, 1.0)
    sigma = (measured - nearest) / np.sqrt(np.maximum(stat**2, (1 - expected**2) / shots))
    p = _binomial(np.rint((1 + measured) / 2 * shots), shots, (1 + expected) / 2)
    if not clusters.independent:
        p = np.maximum(p, 2 * special.stdtr(clusters.freedom, -np.abs(sigma)))
    order = np.lexsort((-np.abs(sigma), p))
    columns = (first, second, target, num, measured, stat, sigma, p, holm(p))
    return PairTable(*(frozen(np.ascontiguousarray(column[order])) for column in columns))


def _binomial(count: NDArray[np.float64], shots: int, chance: NDArray[np.float64]) -> NDArray[np.float64]:
    lower = stats.binom.cdf(count, shots, chance)
    upper = stats.binom.sf(count - 1, shots, chance)
    return np.asarray(np.minimum(2 * np.minimum(lower, upper), 1.0))
