"""`Comparison`: the scores of one set of samples, with floors, deviations, verdict and notes."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from anneal_ref.base.estimate import Estimate, Score
from anneal_ref.judgement.correlation_error import CorrelationError
from anneal_ref.judgement.deviations import PairTable
from anneal_ref.judgement.equivalence import Decision
from anneal_ref.judgement.fidelity import Fidelity, Refusal
from anneal_ref.judgement.magnetisation_error import MagnetisationError
from anneal_ref.judgement.perfect import NoiseFloor

EXCLUDED = -6.0
"""Standard errors of the log-likelihood below which a departure from the truth is beyond doubt, whatever the limits."""

_PLAIN = "  plain, shot noise included"


@dataclass(frozen=True, slots=True, eq=False)
class Comparison:
    """What the samples of one anneal say about the processor.

    Parameters
    ----------
    scores : mapping of str to Score
        In a fixed order: correlation_error, residual_energy, order_parameter, magnetisation_error, fidelity,
        log_likelihood. One that the data cannot support is absent; `fidelity` or a note says why. The floor of a score
        is what a perfect processor attains with the same shots: the 95 % quantile for the two errors, value and scatter
        for the others.
    truth : mapping of str to Estimate
        True values of the scores that have one: residual_energy, order_parameter, log_likelihood.
    sigma : mapping of str to float
        (measured - true) beyond the numerical error, in standard errors, for the same scores.
    correlation : CorrelationError
        The correlation error with all that pooling needs.
    magnetisation : MagnetisationError
        The magnetisation error, likewise.
    floor : NoiseFloor
        Correlation errors of a perfect processor.
    fidelity : Fidelity or Refusal
        The fidelity with the plain one beside it, or why there is none.
    pairs : PairTable
        All pairs of spins, the most striking deviation first.
    decision : Decision or None
        The verdict, if limits were given.
    notes : tuple of str
        What the reader should know.
    instance : str
        Identity of the instance.
    duration : float
    has_fields : bool
        Whether correlations are the connected ones, and <Z> is judged too.
    n_sites, n_shots, n_clusters : int
        `n_clusters` equals `n_shots` where each shot is independent.
    level : float
        Of the intervals.
    labels : ndarray of int, shape (n_sites,)
        Names of the sites on the device, as the lattice has them.
    """

    scores: Mapping[str, Score]
    truth: Mapping[str, Estimate]
    sigma: Mapping[str, float]
    correlation: CorrelationError
    magnetisation: MagnetisationError
    floor: NoiseFloor
    fidelity: Fidelity | Refusal
    pairs: PairTable
    decision: Decision | None
    notes: tuple[str, ...]
    instance: str
    duration: float
    has_fields: bool
    n_sites: int
    n_shots: int
    n_clusters: int
    level: float
    labels: NDArray[np.intp]

    @property
    def correlation_error(self) -> Score:
        """The first score."""
        return self.scores["correlation_error"]

    @property
    def verdict(self) -> str | None:
        """Accept, reject or inconclusive; None without limits."""
        return None if self.decision is None else self.decision.outcome

    @property
    def reservation(self) -> str:
        """What an acceptance must not be read without: a likelihood that excludes the truth; else empty."""
        sigma = self.sigma.get("log_likelihood", 0.0)
        if self.verdict != "accept" or sigma >= EXCLUDED:
            return ""
        return f"the log-likelihood lies {-sigma:.0f} standard errors below a perfect processor's"

    def __repr__(self) -> str:
        """Return the main figure in angle brackets."""
        low, high = self.correlation_error.low, self.correlation_error.high
        return f"<Comparison: {self.n_sites} spins, {self.n_shots} shots, correlation error {low:.3g} to {high:.3g}>"

    def __str__(self) -> str:
        """Return a readable table."""
        shots = f"{self.n_shots} shots"
        shots += "" if self.n_clusters == self.n_shots else f" in {self.n_clusters} gauges or batches"
        lines = [
            f"samples against truth: {self.n_sites} spins, duration {self.duration:g}, {shots}",
            f"  {'':<30}{'measured':>10}   {f'{self.level:.0%} interval':<22}{'perfect processor':<22}sigma",
        ]
        for name, score in self.scores.items():
            unit = f" ({score.unit})" if score.unit else ""
            interval = f"{score.low:.4g} to {score.high:.4g}"
            sigma = f"{self.sigma[name]:+.1f}" if name in self.sigma else ""
            label = name.replace("_", " ") + unit
            row = f"  {label:<30}{score.value:>10.4g}   {interval:<22}{_perfect(score.floor):<22}{sigma}"
            lines.append(row.rstrip())
            if name == "correlation_error":
                plain = f"{self.floor.raw_mean:.3g}, below {self.floor.raw_quantile:.3g} (95%)"
                lines.append(f"  {_PLAIN:<30}{self.correlation.raw:>10.4g}   {'':<22}{plain}")
            if name == "fidelity" and isinstance(self.fidelity, Fidelity):
                plain = _perfect(self.fidelity.plain_floor)
                lines.append(f"  {_PLAIN:<30}{self.fidelity.plain:>10.4g}   {'':<22}{plain}")
        found, level = self.pairs.significant(self.level), f"{self.level:.0%}"
        lines.append(f"pairs of spins that differ at level {level} (Holm): {found} of {len(self.pairs)}; the largest:")
        lines.append(self.pairs.text(labels=self.labels))
        # a single pair may be its coupler's fault: a site is named if it is in two or more
        shares, site_sigma, gain = self.pairs.shares(self.level), self.pairs.site_sigma(), self.pairs.site_gain()
        worst = [k for k in np.lexsort((-site_sigma, -shares)) if shares[k] > 1][:3]
        if worst:
            named = ", ".join(
                f"{self.labels[k]} ({shares[k]} pairs, rms sigma {site_sigma[k]:.1f}, gain {gain[k]:.2f})"
                for k in worst
            )
            lines.append(f"sites most involved: {named}")
        refused = [self.fidelity.reason] if isinstance(self.fidelity, Refusal) else []
        lines += [f"note: {note}" for note in (*refused, *self.notes)]
        if self.decision is not None:
            lines.append(str(self.decision))
        if self.reservation:
            lines.append(
                f"  but {self.reservation}: within these limits, the samples do not come from the true distribution"
            )
        return "\n".join(lines)


def _perfect(floor: Estimate | None) -> str:
    if floor is None:
        return ""
    if "quantile" in floor.how:
        return f"below {float(floor):.3g} (95%)"
    return f"{float(floor):.4g} ± {float(floor.stat):.2g}"
